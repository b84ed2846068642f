//! The Breit-Wigner (Cauchy) shape.

use std::f64::consts::{FRAC_1_PI, PI};

use super::error::{check_count, check_mass, check_width};
use super::{Domain, Parameter, Shape, ShapeError};

/// The non-relativistic Breit-Wigner, `(Γ/2)/π / ((m - M)² + Γ²/4)` for any real m; its FWHM is Γ.
///
/// Mean and variance do not exist. Source: G. Breit and E. Wigner, Phys. Rev. 49 (1936) 519.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct BreitWigner {
    mass: f64,
    width: f64,
}

impl BreitWigner {
    /// A Breit-Wigner of mass and full width in GeV.
    ///
    /// # Errors
    /// A mass that is not finite; a width that is not finite and positive.
    pub fn new(mass: f64, width: f64) -> Result<Self, ShapeError> {
        Ok(BreitWigner { mass: check_mass(mass)?, width: check_width(width)? })
    }

    /// Mass in GeV.
    pub fn mass(&self) -> f64 {
        self.mass
    }

    /// Full width at half maximum in GeV.
    pub fn width(&self) -> f64 {
        self.width
    }
}

impl Shape for BreitWigner {
    fn parameters(&self) -> Vec<Parameter> {
        vec![Parameter::new("mass", self.mass, Domain::REAL), Parameter::new("width", self.width, Domain::POSITIVE)]
    }

    fn with_values(&self, values: &[f64]) -> Result<Box<dyn Shape>, ShapeError> {
        check_count(2, values)?;
        Ok(Box::new(BreitWigner::new(values[0], values[1])?))
    }

    fn pdf(&self, m: f64) -> f64 {
        let half = 0.5 * self.width;
        // Scaled by the half width, so that neither square overflows before the density is 0.
        let t = (m - self.mass) / half;
        FRAC_1_PI / half / (1.0 + t * t)
    }

    fn ln_pdf(&self, m: f64) -> f64 {
        let half = 0.5 * self.width;
        let t = ((m - self.mass) / half).abs();
        let ln_square = if t > 1e150 { 2.0 * libm::log(t) } else { libm::log1p(t * t) };
        -libm::log(PI * half) - ln_square
    }

    fn cdf(&self, m: f64) -> f64 {
        FRAC_1_PI * libm::atan2(0.5 * self.width, self.mass - m)
    }

    fn sf(&self, m: f64) -> f64 {
        FRAC_1_PI * libm::atan2(0.5 * self.width, m - self.mass)
    }

    fn quantile(&self, p: f64) -> f64 {
        if !(0.0..=1.0).contains(&p) {
            return f64::NAN;
        }
        if p == 0.5 {
            return self.mass;
        }
        // cot(pi p), each half from its own end.
        if p < 0.5 {
            self.mass - 0.5 * self.width / libm::tan(PI * p)
        } else {
            self.mass + 0.5 * self.width / libm::tan(PI * (1.0 - p))
        }
    }

    fn upper_quantile(&self, q: f64) -> f64 {
        2.0 * self.mass - self.quantile(q)
    }

    fn peak_guess(&self) -> f64 {
        self.mass
    }

    fn mean(&self) -> Option<f64> {
        None
    }

    fn variance(&self) -> Option<f64> {
        None
    }

    fn ln_pdf_gradient(&self, m: f64, gradient: &mut [f64]) -> f64 {
        let half = 0.5 * self.width;
        let t = (m - self.mass) / half;
        let d = 1.0 + t * t;
        if let [mass, width] = gradient {
            *mass = 2.0 * t / (d * half);
            *width = 0.5 / half * (1.0 - 2.0 / d);
        }
        self.ln_pdf(m)
    }

    fn cdf_gradient(&self, m: f64, gradient: &mut [f64]) {
        let pdf = self.pdf(m);
        if let [mass, width] = gradient {
            *mass = -pdf;
            *width = -pdf * (m - self.mass) / self.width;
        }
    }

    fn pdf_slice(&self, m: &[f64], out: &mut [f64]) {
        let half = 0.5 * self.width;
        pdf_kernel(m, out, self.mass, 1.0 / half, FRAC_1_PI / half);
    }
}

crate::wide! {
    fn pdf_kernel(m: &[f64], out: &mut [f64], mass: f64, scale: f64, peak: f64) {
        for (value, &m) in out.iter_mut().zip(m) {
            let t = (m - mass) * scale;
            *value = peak / (1.0 + t * t);
        }
    }
}
