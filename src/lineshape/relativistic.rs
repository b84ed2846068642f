//! The relativistic Breit-Wigner with fixed width.

use super::error::{check_count, check_positive_mass, check_width};
use super::pole_pair::{Numerator, PolePair};
use super::{Domain, Parameter, Shape, ShapeError};

/// The relativistic Breit-Wigner with fixed width, a density per dm on m > 0: `k/((m² - M²)² + M² Γ²)`,
/// `k = 2√2 M Γ γ/(π sqrt(M² + γ))`, `γ = sqrt(M² (M² + Γ²))`.
///
/// It peaks at M. The mean is `(k/(MΓ)) [π/4 + arctan(M/Γ)/2]`, the mean of m² is γ; no third moment. Evaluated with
/// `(m - M)(m + M)`, since `m² - M²` cancels. Cumulative: `-(k/(MΓ)) Im[atanh(m/a)/a]`, `a = sqrt(M² + iMΓ)`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Relativistic {
    pub(super) poles: PolePair,
}

impl Relativistic {
    /// A resonance of mass and width in GeV.
    ///
    /// # Errors
    /// A mass or a width that is not finite and positive.
    pub fn new(mass: f64, width: f64) -> Result<Self, ShapeError> {
        let (mass, width) = (check_positive_mass(mass)?, check_width(width)?);
        Ok(Relativistic { poles: PolePair::new(Numerator::Constant, mass, width) })
    }

    /// Mass in GeV.
    pub fn mass(&self) -> f64 {
        self.poles.mass
    }

    /// Width in GeV.
    pub fn width(&self) -> f64 {
        self.poles.width
    }
}

impl Shape for Relativistic {
    fn parameters(&self) -> Vec<Parameter> {
        vec![
            Parameter::new("mass", self.poles.mass, Domain::POSITIVE),
            Parameter::new("width", self.poles.width, Domain::POSITIVE),
        ]
    }

    fn with_values(&self, values: &[f64]) -> Result<Box<dyn Shape>, ShapeError> {
        check_count(2, values)?;
        Ok(Box::new(Relativistic::new(values[0], values[1])?))
    }

    fn pdf(&self, m: f64) -> f64 {
        self.poles.pdf(m)
    }

    fn ln_pdf(&self, m: f64) -> f64 {
        self.poles.ln_pdf(m)
    }

    fn cdf(&self, m: f64) -> f64 {
        self.poles.cdf(m)
    }

    fn sf(&self, m: f64) -> f64 {
        self.poles.sf(m)
    }

    fn quantile(&self, p: f64) -> f64 {
        match p {
            0.0 => 0.0,
            1.0 => f64::INFINITY,
            _ if p > 0.0 && p < 1.0 => self.poles.quantile(p, false),
            _ => f64::NAN,
        }
    }

    fn upper_quantile(&self, q: f64) -> f64 {
        match q {
            0.0 => f64::INFINITY,
            1.0 => 0.0,
            _ if q > 0.0 && q < 1.0 => self.poles.quantile(q, true),
            _ => f64::NAN,
        }
    }

    fn peak_guess(&self) -> f64 {
        self.poles.mass
    }

    fn mean(&self) -> Option<f64> {
        self.poles.mean()
    }

    fn variance(&self) -> Option<f64> {
        self.poles.variance()
    }

    fn ln_pdf_gradient(&self, m: f64, gradient: &mut [f64]) -> f64 {
        let [_, mass, width] = if m > 0.0 { self.poles.ln_pdf_gradient(m) } else { [0.0; 3] };
        for (slot, value) in gradient.iter_mut().zip([mass, width]) {
            *slot = value;
        }
        self.ln_pdf(m)
    }

    fn cdf_gradient(&self, m: f64, gradient: &mut [f64]) {
        let (mass, width) = self.poles.cdf_gradient(m);
        for (slot, value) in gradient.iter_mut().zip([mass, width]) {
            *slot = value;
        }
    }

    fn pdf_slice(&self, m: &[f64], out: &mut [f64]) {
        let (strength, centre, spread) = self.poles.constants();
        pdf_kernel(m, out, strength, centre, spread);
    }
}

crate::wide! {
    fn pdf_kernel(m: &[f64], out: &mut [f64], strength: f64, centre: f64, spread: f64) {
        for (value, &m) in out.iter_mut().zip(m) {
            let d = (m - centre) * (m + centre);
            let density = strength / (d * d + spread);
            *value = if m > 0.0 { density } else { 0.0 };
        }
    }
}
