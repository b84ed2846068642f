//! What a line shape adds up over the components of its resolution.

use super::super::convolution::{Convolution, Gradient};
use super::super::half::Tail;
use super::super::shared::SharedNodes;
use super::super::true_mass::TrueMass;
use super::super::{Mixture, Resolution, Shape, voigt};
use super::{LineShape, Path, Scaling};

impl LineShape {
    pub(in crate::lineshape) fn proportional(&self) -> bool {
        self.scaling == Scaling::Proportional
    }

    /// Sum over the components of the resolution.
    pub(in crate::lineshape) fn sum(&self, one: impl Fn(&Resolution) -> f64) -> f64 {
        let Some(mixture) = &self.resolution else { return f64::NAN };
        mixture.components().iter().zip(mixture.fractions()).map(|(c, &f)| if f > 0.0 { f * one(c) } else { 0.0 }).sum()
    }

    pub(in crate::lineshape) fn convolution<'a>(
        &self,
        truth: &'a TrueMass,
        resolution: &'a Resolution,
    ) -> Convolution<'a> {
        Convolution { truth, resolution, proportional: self.proportional() }
    }

    /// Standard deviation, where this component makes a closed form: a Gaussian that does not depend on the true mass.
    pub(in crate::lineshape) fn closed_sigma(&self, component: &Resolution) -> Option<f64> {
        let gaussian = component.low == Tail::None && component.high == Tail::None;
        (gaussian && !self.proportional() && self.falloff.is_none()).then(|| component.sigmas().0)
    }

    pub(in crate::lineshape) fn component_pdf(&self, truth: &TrueMass, component: &Resolution, x: f64) -> f64 {
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

    pub(in crate::lineshape) fn component_gradient(
        &self,
        truth: &TrueMass,
        component: &Resolution,
        x: f64,
    ) -> Gradient {
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
    pub(in crate::lineshape) fn voigt(&self) -> Option<(f64, f64)> {
        let [component] = self.resolution.as_ref()?.components() else { return None };
        let sigma = self.closed_sigma(component)?;
        self.natural.poles().is_none().then(|| (self.natural.mass() + component.bias(), sigma))
    }

    /// Points at which the density bends most: where the grid begins with a panel's end. `None` for closed forms that
    /// need no grid.
    pub(in crate::lineshape) fn grid_breaks(&self) -> Option<Vec<f64>> {
        let (Path::Convolved(truth), Some(mixture)) = (&self.path, &self.resolution) else { return None };
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
            // Where the true mass ends the density may fall as steeply as the core, between nodes that see nothing of it.
            for end in [truth.lowest(), truth.highest()].into_iter().filter(|end| end.is_finite()) {
                let scale = if self.proportional() { end / self.natural.mass() } else { 1.0 };
                for t in [0.0, 3.0, 8.0, 20.0, 39.0] {
                    list.extend([-low * t, high * t].map(|d| end + scale * (component.bias() + d)));
                }
            }
        }
        Some(list)
    }

    /// Nodes that the points between `low` and `high` share, per component; `None` where it has a better way.
    pub(in crate::lineshape) fn shared_nodes(
        &self,
        low: f64,
        high: f64,
        with_gradient: bool,
    ) -> Vec<Option<SharedNodes>> {
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
    pub(in crate::lineshape) fn pdf_by(&self, shared: &[Option<SharedNodes>], x: f64) -> f64 {
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
    pub(in crate::lineshape) fn pdf_gradient_by(
        &self,
        shared: &[Option<SharedNodes>],
        x: f64,
        gradient: &mut [f64],
    ) -> f64 {
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
    pub(in crate::lineshape) fn lay_out(&self, out: &mut [f64], mut one: impl FnMut(&Resolution) -> Gradient) -> f64 {
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
    pub(in crate::lineshape) fn pdf_gradient(&self, x: f64, gradient: &mut [f64]) -> f64 {
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
    pub(in crate::lineshape) fn shift_gradient(
        mixture: &Mixture,
        gradient: &mut [f64],
        fill: impl FnOnce(&mut [f64]) -> f64,
    ) -> f64 {
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
    pub(in crate::lineshape) fn search(&self, p: f64, above: bool) -> f64 {
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
