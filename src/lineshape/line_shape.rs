//! Natural ⊗ resolution.

use super::convolution::{Convolution, Gradient};
use super::error::{FALLOFF, check_falloff_power, check_positive_mass};
use super::grid::Grid;
use super::half::Tail;
use super::shared::SharedNodes;
use super::true_mass::{FALLOFF_RANGE, TrueMass};
use super::{Domain, Mixture, Natural, Parameter, Resolution, Shape, ShapeError, voigt};

/// How the resolution depends on the true mass.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Scaling {
    /// The same at every true mass.
    #[default]
    Constant,
    /// Bias and sigma grow with the true mass t; their values hold at the nominal mass M: `x = t (1 + u/M)` with u drawn
    /// from the resolution. The true mass is positive.
    Proportional,
}

/// `f(x) = ∫ natural(t) resolution(x - t) dt`, normalised.
///
/// Parameters in order: `mass`, `width` (not for a line), `falloff_power` (where set), then those of the resolution.
///
/// Voigt and relativistic Voigt densities are closed forms (1e-13 and 1e-12 relative); all others come from adaptive
/// panels, to 1e-10 relative. Slices longer than a few dozen points go through a grid of Chebyshev panels made from
/// these, with relative error below [`LineShape::GRID_ERROR`].
#[derive(Clone, Debug, PartialEq)]
pub struct LineShape {
    natural: Natural,
    resolution: Option<Mixture>,
    scaling: Scaling,
    falloff: Option<f64>,
    path: Path,
}

/// How it is evaluated, chosen once.
#[derive(Clone, Debug, PartialEq)]
enum Path {
    /// A line: the resolution, shifted.
    Shifted(Mixture),
    /// No resolution, no falloff.
    Natural,
    /// A width: convolved with each component (none without a resolution).
    Convolved(TrueMass),
}

impl LineShape {
    /// Bound on the relative error of slices that go through the grid, where the density is above 1e-12 of its peak.
    pub const GRID_ERROR: f64 = 1e-9;

    /// A natural shape with a resolution (`None`: perfect) that does not depend on the true mass.
    ///
    /// # Errors
    /// None for checked parts; the signature is that of the other constructors.
    pub fn new(natural: Natural, resolution: Option<Mixture>) -> Result<Self, ShapeError> {
        LineShape::with_options(natural, resolution, Scaling::Constant, None)
    }

    /// The same with a choice of scaling, and with production falling as `(t/M)^-power` across the natural width.
    ///
    /// With a falloff the true mass lies between M/2 and 2M ([`FALLOFF_RANGE`]). A falloff does nothing to a line and is then no parameter.
    ///
    /// # Errors
    /// A power outside 0 to 100; a proportional resolution or a falloff with a mass that is not positive; a falloff that
    /// cannot be normalised.
    pub fn with_options(
        natural: Natural,
        resolution: Option<Mixture>,
        scaling: Scaling,
        falloff_power: Option<f64>,
    ) -> Result<Self, ShapeError> {
        let is_line = matches!(natural, Natural::Line(_));
        let falloff = falloff_power.map(check_falloff_power).transpose()?.filter(|_| !is_line);
        let scales = scaling == Scaling::Proportional && resolution.is_some();
        if scales || falloff.is_some() {
            check_positive_mass(natural.mass())?;
        }
        let path = if let Natural::Line(mass) = natural {
            let Some(mixture) = &resolution else { return Err(ShapeError::Perfect) };
            Path::Shifted(mixture.shifted(mass)?)
        } else if resolution.is_none() && falloff.is_none() {
            Path::Natural
        } else {
            let cut = match falloff {
                Some(_) => Some(FALLOFF_RANGE.0),
                // The Breit-Wigner reaches below 0, where a proportional resolution has no meaning.
                None => (scales && natural.poles().is_none()).then_some(0.0),
            };
            Path::Convolved(TrueMass::new(natural, cut, falloff)?)
        };
        Ok(LineShape { natural, resolution, scaling, falloff, path })
    }

    /// The natural shape.
    pub fn natural(&self) -> &Natural {
        &self.natural
    }

    /// The resolution.
    pub fn resolution(&self) -> Option<&Mixture> {
        self.resolution.as_ref()
    }

    /// How the resolution depends on the true mass.
    pub fn scaling(&self) -> Scaling {
        self.scaling
    }

    /// Power of the production falloff.
    pub fn falloff_power(&self) -> Option<f64> {
        self.falloff
    }

    /// Number of parameters.
    pub fn parameter_count(&self) -> usize {
        self.natural.parameter_count()
            + usize::from(self.falloff.is_some())
            + self.resolution.as_ref().map_or(0, Mixture::parameter_count)
    }

    /// The same line shape at other values of its parameters.
    ///
    /// # Errors
    /// As the constructors.
    pub fn with_parameters(&self, values: &[f64]) -> Result<Self, ShapeError> {
        super::error::check_count(self.parameter_count(), values)?;
        let (own, rest) = values.split_at(self.natural.parameter_count());
        let natural = self.natural.with_parameters(own)?;
        let (falloff, rest) = rest.split_at(usize::from(self.falloff.is_some()));
        let resolution = self.resolution.as_ref().map(|r| r.with_parameters(rest)).transpose()?;
        LineShape::with_options(natural, resolution, self.scaling, falloff.first().copied())
    }

    fn proportional(&self) -> bool {
        self.scaling == Scaling::Proportional
    }

    /// Sum over the components of the resolution.
    fn sum(&self, one: impl Fn(&Resolution) -> f64) -> f64 {
        let Some(mixture) = &self.resolution else { return f64::NAN };
        mixture.components().iter().zip(mixture.fractions()).map(|(c, &f)| if f > 0.0 { f * one(c) } else { 0.0 }).sum()
    }

    fn convolution<'a>(&self, truth: &'a TrueMass, resolution: &'a Resolution) -> Convolution<'a> {
        Convolution { truth, resolution, proportional: self.proportional() }
    }

    /// Standard deviation, where this component makes a closed form: a Gaussian that does not depend on the true mass.
    fn closed_sigma(&self, component: &Resolution) -> Option<f64> {
        let gaussian = component.low == Tail::None && component.high == Tail::None;
        (gaussian && !self.proportional() && self.falloff.is_none()).then(|| component.sigmas().0)
    }

    fn component_pdf(&self, truth: &TrueMass, component: &Resolution, x: f64) -> f64 {
        if let Some(sigma) = self.closed_sigma(component) {
            let x = x - component.bias();
            match self.natural.poles() {
                None => return voigt::voigt(x - self.natural.mass(), sigma, 0.5 * self.natural.width()),
                Some(poles) => {
                    if let Some(value) = voigt::relativistic_voigt(poles, x, sigma) {
                        return value;
                    }
                }
            }
        }
        self.convolution(truth, component).pdf(x).value[0]
    }

    fn component_gradient(&self, truth: &TrueMass, component: &Resolution, x: f64) -> Gradient {
        match (self.closed_sigma(component), self.natural.poles()) {
            (Some(sigma), None) => {
                let [value, centre, by_sigma, by_gamma] = voigt::voigt_gradient(
                    x - component.bias() - self.natural.mass(),
                    sigma,
                    0.5 * self.natural.width(),
                );
                let mut gradient = Gradient { value, mass: centre, width: 0.5 * by_gamma, ..Gradient::default() };
                gradient.resolution[0] = centre;
                gradient.resolution[1] = by_sigma;
                gradient
            }
            _ => self.convolution(truth, component).pdf_gradient(x),
        }
    }

    /// Centre and sigma where the whole shape is one Voigt profile.
    fn voigt(&self) -> Option<(f64, f64)> {
        let [component] = self.resolution.as_ref()?.components() else { return None };
        let sigma = self.closed_sigma(component)?;
        self.natural.poles().is_none().then(|| (self.natural.mass() + component.bias(), sigma))
    }

    /// Points at which the density bends most: where the grid begins with a panel's end. `None` for closed forms that
    /// need no grid.
    pub(super) fn grid_breaks(&self) -> Option<Vec<f64>> {
        let (Path::Convolved(_), Some(mixture)) = (&self.path, &self.resolution) else { return None };
        let centre = self.natural.shape()?.peak_guess();
        let mut list = vec![];
        for component in mixture.components() {
            let (low, high) = component.sigmas();
            list.push(centre + component.bias());
            for (join, step) in [(component.low.join(), -low), (component.high.join(), high)] {
                if join < 39.0 {
                    list.push(centre + component.bias() + step * join);
                }
            }
        }
        Some(list)
    }

    /// Nodes that the points between `low` and `high` share, per component; `None` where it has a better way.
    pub(super) fn shared_nodes(&self, low: f64, high: f64, with_gradient: bool) -> Vec<Option<SharedNodes>> {
        let (Path::Convolved(truth), Some(mixture)) = (&self.path, &self.resolution) else { return vec![] };
        let one = |component: &Resolution| {
            let closed = self.closed_sigma(component).is_some() && self.natural.poles().is_none();
            if closed {
                return None;
            }
            SharedNodes::new(&self.convolution(truth, component), low, high, with_gradient)
        };
        mixture.components().iter().map(one).collect()
    }

    /// Density by shared nodes where there are some.
    pub(super) fn pdf_by(&self, shared: &[Option<SharedNodes>], x: f64) -> f64 {
        let (Path::Convolved(truth), Some(mixture)) = (&self.path, &self.resolution) else { return self.pdf(x) };
        let parts = mixture.components().iter().zip(mixture.fractions()).zip(shared);
        parts
            .map(|((component, &fraction), nodes)| {
                fraction
                    * match nodes {
                        Some(nodes) if nodes.serve(x) => nodes.pdf(x),
                        _ => self.component_pdf(truth, component, x),
                    }
            })
            .sum()
    }

    /// Density and its gradient by shared nodes where there are some.
    pub(super) fn pdf_gradient_by(&self, shared: &[Option<SharedNodes>], x: f64, gradient: &mut [f64]) -> f64 {
        let (Path::Convolved(truth), Some(_)) = (&self.path, &self.resolution) else {
            return self.pdf_gradient(x, gradient);
        };
        let mut shared = shared.iter();
        self.lay_out(gradient, |component| match shared.next() {
            Some(Some(nodes)) if nodes.serve(x) => nodes.gradient(&self.convolution(truth, component), x),
            _ => self.component_gradient(truth, component, x),
        })
    }

    /// Lays a gradient per component out in the order of the parameters; returns the value.
    fn lay_out(&self, out: &mut [f64], mut one: impl FnMut(&Resolution) -> Gradient) -> f64 {
        let Some(mixture) = &self.resolution else { return f64::NAN };
        let mut shared = Gradient::default();
        let mut fractions = mixture.fractions().iter();
        let front = self.natural.parameter_count() + usize::from(self.falloff.is_some());
        let Some((head, rest)) = out.split_at_mut_checked(front) else { return f64::NAN };
        let value = mixture.gradient(rest, |component, own| {
            let gradient = one(component);
            let fraction = fractions.next().copied().unwrap_or(0.0);
            shared.mass += fraction * gradient.mass;
            shared.width += fraction * gradient.width;
            shared.power += fraction * gradient.power;
            own.copy_from_slice(&gradient.resolution[..own.len()]);
            gradient.value
        });
        head[0] = shared.mass;
        head[1] = shared.width;
        if let Some(slot) = head.get_mut(2) {
            *slot = shared.power;
        }
        value
    }

    /// Density and its gradient (of the density, not of its logarithm).
    pub(super) fn pdf_gradient(&self, x: f64, gradient: &mut [f64]) -> f64 {
        match &self.path {
            Path::Convolved(truth) if self.resolution.is_some() => {
                self.lay_out(gradient, |component| self.component_gradient(truth, component, x))
            }
            _ => {
                let value = libm::exp(self.ln_pdf_gradient(x, gradient));
                gradient.iter_mut().for_each(|g| *g *= value);
                value
            }
        }
    }

    /// Turns the gradient of a shifted resolution, or of its logarithm, into that of the line shape.
    fn shift_gradient(mixture: &Mixture, gradient: &mut [f64], fill: impl FnOnce(&mut [f64]) -> f64) -> f64 {
        let Some((mass, rest)) = gradient.split_first_mut() else { return f64::NAN };
        let value = fill(rest);
        *mass = 0.0;
        let mut offset = 0;
        for component in mixture.components() {
            // The mass moves every bias.
            *mass += rest.get(offset).copied().unwrap_or(0.0);
            offset += component.parameter_count();
        }
        value
    }

    /// A quantile by its bracket, for the paths without a closed form.
    fn search(&self, p: f64, above: bool) -> f64 {
        let value = |m: f64| if above { p - self.sf(m) } else { self.cdf(m) - p };
        let start = self.peak_guess();
        let spread = self.natural.width() + self.resolution.as_ref().map_or(0.0, |r| r.components()[0].sigmas().0);
        let (mut low, mut high) = (start, start);
        let mut step = spread.max(start.abs() * 1e-12);
        while value(low) > 0.0 && step < 1e280 {
            low = start - step;
            step *= 2.0;
        }
        let mut step = spread.max(start.abs() * 1e-12);
        while value(high) < 0.0 && step < 1e280 {
            high = start + step;
            step *= 2.0;
        }
        crate::numerics::root::find(low, high, value, |m| self.pdf(m))
    }
}

impl Shape for LineShape {
    fn parameters(&self) -> Vec<Parameter> {
        let positive = self.natural.poles().is_some() || self.proportional() || self.falloff.is_some();
        let domain = if positive { Domain::POSITIVE } else { Domain::REAL };
        let mut list = vec![Parameter::new("mass", self.natural.mass(), domain)];
        if self.natural.parameter_count() > 1 {
            list.push(Parameter::new("width", self.natural.width(), Domain::POSITIVE));
        }
        if let Some(power) = self.falloff {
            list.push(Parameter::new("falloff_power", power, FALLOFF));
        }
        if let Some(resolution) = &self.resolution {
            list.extend(resolution.parameters());
        }
        list
    }

    fn with_values(&self, values: &[f64]) -> Result<Box<dyn Shape>, ShapeError> {
        Ok(Box::new(self.with_parameters(values)?))
    }

    fn pdf(&self, m: f64) -> f64 {
        match &self.path {
            Path::Shifted(mixture) => mixture.pdf(m),
            Path::Natural => self.natural.shape().map_or(f64::NAN, |shape| shape.pdf(m)),
            Path::Convolved(truth) if self.resolution.is_none() => truth.pdf_at(m),
            Path::Convolved(_) if !m.is_finite() => {
                if m.is_nan() {
                    m
                } else {
                    0.0
                }
            }
            Path::Convolved(truth) => self.sum(|component| self.component_pdf(truth, component, m)),
        }
    }

    fn ln_pdf(&self, m: f64) -> f64 {
        match &self.path {
            Path::Shifted(mixture) => mixture.ln_pdf(m),
            Path::Natural => self.natural.shape().map_or(f64::NAN, |shape| shape.ln_pdf(m)),
            Path::Convolved(truth) => {
                let pdf = self.pdf(m);
                match &self.resolution {
                    Some(mixture) if pdf < 1e-280 && m.is_finite() => {
                        let terms = mixture
                            .components()
                            .iter()
                            .zip(mixture.fractions())
                            .map(|(c, &f)| libm::log(f) + self.convolution(truth, c).ln_pdf(m));
                        terms.fold(f64::NEG_INFINITY, |sum, term| {
                            let (high, low) = if sum > term { (sum, term) } else { (term, sum) };
                            if high == f64::NEG_INFINITY { high } else { high + libm::log1p(libm::exp(low - high)) }
                        })
                    }
                    _ => libm::log(pdf),
                }
            }
        }
    }

    fn cdf(&self, m: f64) -> f64 {
        match &self.path {
            Path::Shifted(mixture) => mixture.cdf(m),
            Path::Natural => self.natural.shape().map_or(f64::NAN, |shape| shape.cdf(m)),
            Path::Convolved(_) if !m.is_finite() => {
                if m.is_nan() {
                    m
                } else {
                    f64::from(u8::from(m > 0.0))
                }
            }
            Path::Convolved(truth) if self.resolution.is_none() => truth.integral(m, false),
            Path::Convolved(truth) => self.sum(|component| self.convolution(truth, component).cdf(m, false)),
        }
    }

    fn sf(&self, m: f64) -> f64 {
        match &self.path {
            Path::Shifted(mixture) => mixture.sf(m),
            Path::Natural => self.natural.shape().map_or(f64::NAN, |shape| shape.sf(m)),
            Path::Convolved(_) if !m.is_finite() => {
                if m.is_nan() {
                    m
                } else {
                    f64::from(u8::from(m < 0.0))
                }
            }
            Path::Convolved(truth) if self.resolution.is_none() => truth.integral(m, true),
            Path::Convolved(truth) => self.sum(|component| self.convolution(truth, component).cdf(m, true)),
        }
    }

    fn quantile(&self, p: f64) -> f64 {
        match &self.path {
            Path::Shifted(mixture) => mixture.quantile(p),
            Path::Natural => self.natural.shape().map_or(f64::NAN, |shape| shape.quantile(p)),
            Path::Convolved(truth) => match p {
                0.0 if self.resolution.is_none() || self.proportional() => truth.lowest(),
                0.0 => f64::NEG_INFINITY,
                1.0 if self.resolution.is_none() => truth.highest(),
                1.0 => f64::INFINITY,
                _ if p > 0.0 && p < 1.0 => self.search(p, false),
                _ => f64::NAN,
            },
        }
    }

    fn upper_quantile(&self, q: f64) -> f64 {
        match &self.path {
            Path::Shifted(mixture) => mixture.upper_quantile(q),
            Path::Natural => self.natural.shape().map_or(f64::NAN, |shape| shape.upper_quantile(q)),
            Path::Convolved(_) if q > 0.0 && q < 1.0 => self.search(q, true),
            Path::Convolved(_) => self.quantile(1.0 - q),
        }
    }

    fn pdf_slice(&self, m: &[f64], out: &mut [f64]) {
        match &self.path {
            Path::Shifted(mixture) => mixture.pdf_slice(m, out),
            Path::Natural => {
                if let Some(shape) = self.natural.shape() {
                    shape.pdf_slice(m, out);
                }
            }
            Path::Convolved(_) => {
                if let Some((centre, sigma)) = self.voigt() {
                    voigt::voigt_slice(m, out, centre, sigma, 0.5 * self.natural.width());
                } else if let Some(grid) = Grid::of(self, m, false) {
                    grid.value(m, out);
                } else {
                    out.iter_mut().zip(m).for_each(|(value, &m)| *value = self.pdf(m));
                }
            }
        }
    }

    fn ln_pdf_slice(&self, m: &[f64], out: &mut [f64]) {
        match &self.path {
            Path::Shifted(mixture) => mixture.ln_pdf_slice(m, out),
            Path::Natural => {
                if let Some(shape) = self.natural.shape() {
                    shape.ln_pdf_slice(m, out);
                }
            }
            Path::Convolved(_) => {
                self.pdf_slice(m, out);
                crate::numerics::kernel::ln_in_place(out);
                for (value, &m) in out.iter_mut().zip(m) {
                    // Where the density is no normal number.
                    if !(*value > -700.0) {
                        *value = self.ln_pdf(m);
                    }
                }
            }
        }
    }

    fn ln_pdf_gradient_slice(&self, m: &[f64], ln_pdf: &mut [f64], gradient: &mut [f64]) {
        match (&self.path, Grid::of(self, m, true)) {
            (Path::Shifted(mixture), _) => {
                let points = m.len();
                let Some((mass, rest)) = gradient.split_at_mut_checked(points) else { return };
                mixture.ln_pdf_gradient_slice(m, ln_pdf, rest);
                mass.fill(0.0);
                let mut offset = 0;
                for component in mixture.components() {
                    if let Some(bias) = rest.get(offset * points..(offset + 1) * points) {
                        mass.iter_mut().zip(bias).for_each(|(m, b)| *m += b);
                    }
                    offset += component.parameter_count();
                }
            }
            (Path::Convolved(_), Some(grid)) => grid.ln_value_and_gradient(m, ln_pdf, gradient),
            _ => {
                let mut one = vec![0.0; self.parameter_count()];
                for (i, (&m_i, slot)) in m.iter().zip(ln_pdf.iter_mut()).enumerate() {
                    *slot = self.ln_pdf_gradient(m_i, &mut one);
                    for (k, &g) in one.iter().enumerate() {
                        if let Some(place) = gradient.get_mut(k * m.len() + i) {
                            *place = g;
                        }
                    }
                }
            }
        }
    }

    fn peak_guess(&self) -> f64 {
        let natural = self.natural.shape().map_or(self.natural.mass(), |shape| shape.peak_guess());
        natural + self.resolution.as_ref().map_or(0.0, |r| r.peak_guess())
    }

    fn mean(&self) -> Option<f64> {
        match &self.path {
            Path::Shifted(mixture) => mixture.mean(),
            Path::Natural => self.natural.shape()?.mean(),
            Path::Convolved(truth) => {
                let truth = truth.mean()?;
                let Some(resolution) = &self.resolution else { return Some(truth) };
                let shift = resolution.mean()?;
                Some(if self.proportional() { truth * (1.0 + shift / self.natural.mass()) } else { truth + shift })
            }
        }
    }

    fn variance(&self) -> Option<f64> {
        match &self.path {
            Path::Shifted(mixture) => mixture.variance(),
            Path::Natural => self.natural.shape()?.variance(),
            Path::Convolved(truth) => {
                let (mean, variance) = (truth.mean()?, truth.variance()?);
                let Some(resolution) = &self.resolution else { return Some(variance) };
                let (shift, spread) = (resolution.mean()?, resolution.variance()?);
                Some(if self.proportional() {
                    // x = t v with independent t and v = 1 + u/M.
                    let mass = self.natural.mass();
                    let (v, v_variance) = (1.0 + shift / mass, spread / (mass * mass));
                    variance * v * v + v_variance * (variance + mean * mean)
                } else {
                    variance + spread
                })
            }
        }
    }

    fn sample(&self, random: &mut dyn rand::Rng, out: &mut [f64]) {
        match &self.path {
            Path::Shifted(mixture) => mixture.sample(random, out),
            Path::Natural => {
                if let Some(shape) = self.natural.shape() {
                    shape.sample(random, out);
                }
            }
            Path::Convolved(truth) => {
                match &self.resolution {
                    Some(resolution) => resolution.sample(random, out),
                    None => out.fill(0.0),
                }
                for value in out {
                    let t = truth.sample(random);
                    *value = if self.proportional() { t * (1.0 + *value / self.natural.mass()) } else { t + *value };
                }
            }
        }
    }

    fn ln_pdf_gradient(&self, m: f64, gradient: &mut [f64]) -> f64 {
        match &self.path {
            Path::Shifted(mixture) => Self::shift_gradient(mixture, gradient, |rest| mixture.ln_pdf_gradient(m, rest)),
            Path::Natural => self.natural.shape().map_or(f64::NAN, |shape| shape.ln_pdf_gradient(m, gradient)),
            Path::Convolved(truth) if self.resolution.is_none() => {
                let [width, power] = truth.ln_gradient(m);
                // The density is homogeneous: m ∂_m + M ∂_M + Γ ∂_Γ = -1 for its logarithm.
                let slope = truth.ln_slope(m);
                let mass = -(1.0 + m * slope + self.natural.width() * width) / self.natural.mass();
                for (slot, value) in gradient.iter_mut().zip([mass, width, power]) {
                    *slot = value;
                }
                self.ln_pdf(m)
            }
            Path::Convolved(_) => {
                let value = self.pdf_gradient(m, gradient);
                gradient.iter_mut().for_each(|g| *g /= value);
                self.ln_pdf(m)
            }
        }
    }

    fn cdf_gradient(&self, m: f64, gradient: &mut [f64]) {
        match &self.path {
            Path::Shifted(mixture) => {
                Self::shift_gradient(mixture, gradient, |rest| {
                    mixture.cdf_gradient(m, rest);
                    0.0
                });
            }
            Path::Natural => {
                if let Some(shape) = self.natural.shape() {
                    shape.cdf_gradient(m, gradient);
                }
            }
            Path::Convolved(_) if !m.is_finite() => gradient.fill(if m.is_nan() { m } else { 0.0 }),
            Path::Convolved(truth) if self.resolution.is_none() => {
                let [width, power] = truth.integral_gradient(m);
                let mass = -(m * truth.pdf_at(m) + self.natural.width() * width) / self.natural.mass();
                for (slot, value) in gradient.iter_mut().zip([mass, width, power]) {
                    *slot = value;
                }
            }
            Path::Convolved(truth) => {
                let above = m > self.peak_guess();
                self.lay_out(gradient, |component| self.convolution(truth, component).cdf_gradient(m, above));
            }
        }
    }
}
