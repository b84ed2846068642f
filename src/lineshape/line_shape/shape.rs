//! A line shape as a [`Shape`], point by point.

use super::super::error::FALLOFF;
use super::super::{Domain, Parameter, Shape, ShapeError};
use super::{LineShape, Path};

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
        self.densities(m, out);
    }

    fn ln_pdf_slice(&self, m: &[f64], out: &mut [f64]) {
        self.ln_densities(m, out);
    }

    fn cdf_slice(&self, m: &[f64], out: &mut [f64]) {
        self.probabilities(m, out, false);
    }

    fn sf_slice(&self, m: &[f64], out: &mut [f64]) {
        self.probabilities(m, out, true);
    }

    fn ln_pdf_gradient_slice(&self, m: &[f64], ln_pdf: &mut [f64], gradient: &mut [f64]) {
        self.ln_densities_with_gradient(m, ln_pdf, gradient);
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
