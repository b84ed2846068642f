//! Sums of resolution shapes.

use super::error::check_fraction;
use super::{Domain, Parameter, Resolution, Shape, ShapeError};
use crate::numerics::root;

/// A normalised sum of resolution shapes: `Σ fraction_i shape_i`, the last fraction being 1 minus the others.
///
/// Parameters: those of each component with `_1`, `_2`, ... behind their names, then `fraction_1`, ... of all components
/// but the last. A sum of one component has that component's names.
#[derive(Clone, Debug, PartialEq)]
pub struct Mixture {
    components: Vec<Resolution>,
    fractions: Vec<f64>,
}

impl From<Resolution> for Mixture {
    fn from(one: Resolution) -> Self {
        Mixture { components: vec![one], fractions: vec![1.0] }
    }
}

impl Mixture {
    /// A sum; `fractions` has one number less than `components`.
    ///
    /// # Errors
    /// No component, another number of fractions, a fraction outside 0 to 1, fractions that exceed 1 together.
    pub fn new(components: Vec<Resolution>, fractions: &[f64]) -> Result<Self, ShapeError> {
        if components.is_empty() || fractions.len() + 1 != components.len() {
            return Err(ShapeError::Components { components: components.len(), fractions: fractions.len() });
        }
        let mut all = fractions.iter().map(|&f| check_fraction(f)).collect::<Result<Vec<f64>, _>>()?;
        let sum: f64 = all.iter().sum();
        if sum > 1.0 {
            return Err(ShapeError::FractionSum(sum));
        }
        all.push(1.0 - sum);
        Ok(Mixture { components, fractions: all })
    }

    /// The components.
    pub fn components(&self) -> &[Resolution] {
        &self.components
    }

    /// The fractions of all components; they add to 1.
    pub fn fractions(&self) -> &[f64] {
        &self.fractions
    }

    /// Number of parameters.
    pub fn parameter_count(&self) -> usize {
        self.components.iter().map(Resolution::parameter_count).sum::<usize>() + self.components.len() - 1
    }

    /// The same sum at other values of its parameters.
    ///
    /// # Errors
    /// As the constructors.
    pub fn with_parameters(&self, values: &[f64]) -> Result<Self, ShapeError> {
        super::error::check_count(self.parameter_count(), values)?;
        let mut rest = values;
        let mut components = Vec::with_capacity(self.components.len());
        for component in &self.components {
            let (own, others) = rest.split_at(component.parameter_count());
            components.push(component.with_parameters(own)?);
            rest = others;
        }
        Mixture::new(components, rest)
    }

    /// The same sum, moved by a mass.
    pub(super) fn shifted(&self, mass: f64) -> Result<Self, ShapeError> {
        let components = self
            .components
            .iter()
            .map(|component| {
                let mut values: Vec<f64> = component.parameters().iter().map(|p| p.value).collect();
                values[0] += mass;
                component.with_parameters(&values)
            })
            .collect::<Result<Vec<_>, _>>()?;
        Ok(Mixture { components, fractions: self.fractions.clone() })
    }

    fn sum(&self, value: impl Fn(&Resolution) -> f64) -> f64 {
        self.components.iter().zip(&self.fractions).map(|(c, &f)| f * value(c)).sum()
    }

    /// Gradient of `Σ fraction_i q_i` from a function that fills the gradient of one `q` and returns `q`.
    pub(super) fn gradient(&self, gradient: &mut [f64], mut one: impl FnMut(&Resolution, &mut [f64]) -> f64) -> f64 {
        let mut offset = 0;
        let mut values = Vec::with_capacity(self.components.len());
        for (component, &fraction) in self.components.iter().zip(&self.fractions) {
            let count = component.parameter_count();
            if let Some(own) = gradient.get_mut(offset..offset + count) {
                values.push(one(component, own));
                own.iter_mut().for_each(|g| *g *= fraction);
            }
            offset += count;
        }
        let last = values.last().copied().unwrap_or(0.0);
        for (slot, value) in gradient.iter_mut().skip(offset).zip(&values) {
            *slot = value - last;
        }
        values.iter().zip(&self.fractions).map(|(v, f)| v * f).sum()
    }

    fn one(&self) -> Option<&Resolution> {
        match self.components.as_slice() {
            [one] => Some(one),
            _ => None,
        }
    }
}

impl Shape for Mixture {
    fn parameters(&self) -> Vec<Parameter> {
        if let Some(one) = self.one() {
            return one.parameters();
        }
        let mut list = Vec::with_capacity(self.parameter_count());
        for (i, component) in self.components.iter().enumerate() {
            for parameter in component.parameters() {
                list.push(Parameter { name: format!("{}_{}", parameter.name, i + 1), ..parameter });
            }
        }
        for (i, &fraction) in self.fractions[..self.fractions.len() - 1].iter().enumerate() {
            list.push(Parameter::new(&format!("fraction_{}", i + 1), fraction, Domain::FRACTION));
        }
        list
    }

    fn with_values(&self, values: &[f64]) -> Result<Box<dyn Shape>, ShapeError> {
        Ok(Box::new(self.with_parameters(values)?))
    }

    fn pdf(&self, m: f64) -> f64 {
        self.sum(|c| c.pdf(m))
    }

    fn ln_pdf(&self, m: f64) -> f64 {
        if let Some(one) = self.one() {
            return one.ln_pdf(m);
        }
        let terms: Vec<f64> =
            self.components.iter().zip(&self.fractions).map(|(c, &f)| libm::log(f) + c.ln_pdf(m)).collect();
        let top = terms.iter().copied().fold(f64::NEG_INFINITY, f64::max);
        top + libm::log(terms.iter().map(|t| libm::exp(t - top)).sum())
    }

    fn cdf(&self, m: f64) -> f64 {
        self.sum(|c| c.cdf(m))
    }

    fn sf(&self, m: f64) -> f64 {
        self.sum(|c| c.sf(m))
    }

    fn quantile(&self, p: f64) -> f64 {
        if let Some(one) = self.one() {
            return one.quantile(p);
        }
        // The quantile of a sum lies between the quantiles of its components.
        let ends = self.components.iter().zip(&self.fractions).filter(|(_, f)| **f > 0.0).map(|(c, _)| c.quantile(p));
        let (low, high) = ends.fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), q| (l.min(q), h.max(q)));
        if !(high > low) || !high.is_finite() || !low.is_finite() {
            return if (0.0..=1.0).contains(&p) { low } else { f64::NAN };
        }
        root::find(low, high, |m| self.cdf(m) - p, |m| self.pdf(m))
    }

    fn upper_quantile(&self, q: f64) -> f64 {
        if let Some(one) = self.one() {
            return one.upper_quantile(q);
        }
        let ends =
            self.components.iter().zip(&self.fractions).filter(|(_, f)| **f > 0.0).map(|(c, _)| c.upper_quantile(q));
        let (low, high) = ends.fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), q| (l.min(q), h.max(q)));
        if !(high > low) || !high.is_finite() || !low.is_finite() {
            return if (0.0..=1.0).contains(&q) { high } else { f64::NAN };
        }
        root::find(low, high, |m| q - self.sf(m), |m| self.pdf(m))
    }

    fn peak_guess(&self) -> f64 {
        let highest = self
            .components
            .iter()
            .max_by(|a, b| self.pdf(a.bias()).total_cmp(&self.pdf(b.bias())))
            .map(Resolution::bias);
        highest.unwrap_or(0.0)
    }

    fn mean(&self) -> Option<f64> {
        self.components.iter().zip(&self.fractions).map(|(c, &f)| c.mean().map(|mean| f * mean)).sum()
    }

    fn variance(&self) -> Option<f64> {
        let mean = self.mean()?;
        self.components
            .iter()
            .zip(&self.fractions)
            .map(|(c, &f)| {
                let shift = c.mean()? - mean;
                Some(f * (c.variance()? + shift * shift))
            })
            .sum()
    }

    fn ln_pdf_gradient(&self, m: f64, gradient: &mut [f64]) -> f64 {
        if let Some(one) = self.one() {
            return one.ln_pdf_gradient(m, gradient);
        }
        // Everything relative to the total, which may be too small for its own exponential.
        let ln_total = self.ln_pdf(m);
        self.gradient(gradient, |c, own| {
            let ratio = libm::exp(c.ln_pdf_gradient(m, own) - ln_total);
            own.iter_mut().for_each(|g| *g *= ratio);
            ratio
        });
        ln_total
    }

    fn cdf_gradient(&self, m: f64, gradient: &mut [f64]) {
        let above = m > self.peak_guess();
        self.gradient(gradient, |c, own| {
            c.cdf_gradient(m, own);
            // Differences of the values enter; from above they are differences of survival probabilities.
            if above { -c.sf(m) } else { c.cdf(m) }
        });
    }

    fn pdf_slice(&self, m: &[f64], out: &mut [f64]) {
        if let Some(one) = self.one() {
            return one.pdf_slice(m, out);
        }
        let mut part = vec![0.0; out.len()];
        out.fill(0.0);
        for (component, &fraction) in self.components.iter().zip(&self.fractions) {
            component.pdf_slice(m, &mut part);
            for (total, value) in out.iter_mut().zip(&part) {
                *total += fraction * value;
            }
        }
    }

    fn ln_pdf_slice(&self, m: &[f64], out: &mut [f64]) {
        match self.one() {
            Some(one) => one.ln_pdf_slice(m, out),
            None => out.iter_mut().zip(m).for_each(|(value, &m)| *value = self.ln_pdf(m)),
        }
    }

    fn cdf_slice(&self, m: &[f64], out: &mut [f64]) {
        match self.one() {
            Some(one) => one.cdf_slice(m, out),
            None => out.iter_mut().zip(m).for_each(|(value, &m)| *value = self.cdf(m)),
        }
    }

    fn sf_slice(&self, m: &[f64], out: &mut [f64]) {
        match self.one() {
            Some(one) => one.sf_slice(m, out),
            None => out.iter_mut().zip(m).for_each(|(value, &m)| *value = self.sf(m)),
        }
    }

    fn ln_pdf_gradient_slice(&self, m: &[f64], ln_pdf: &mut [f64], gradient: &mut [f64]) {
        if let Some(one) = self.one() {
            return one.ln_pdf_gradient_slice(m, ln_pdf, gradient);
        }
        let count = self.parameter_count();
        let mut own = vec![0.0; count];
        for (i, (&m_i, slot)) in m.iter().zip(ln_pdf.iter_mut()).enumerate() {
            *slot = self.ln_pdf_gradient(m_i, &mut own);
            for (k, &g) in own.iter().enumerate() {
                if let Some(place) = gradient.get_mut(k * m.len() + i) {
                    *place = g;
                }
            }
        }
    }

    fn sample(&self, random: &mut dyn rand::Rng, out: &mut [f64]) {
        for value in out {
            let mut u = super::open_uniform(random);
            let mut chosen = &self.components[self.components.len() - 1];
            for (component, &fraction) in self.components.iter().zip(&self.fractions) {
                if u < fraction {
                    chosen = component;
                    break;
                }
                u -= fraction;
            }
            *value = super::draw(chosen, random);
        }
    }
}
