//! Line shapes: natural shapes, resolution shapes, their convolution, and widths.
//!
//! # Conventions
//!
//! * A shape is a density per GeV on the real line (or on m > 0) that integrates to 1.
//! * A *natural* shape is the distribution of the true mass t; its parameters are `mass` and `width` (FWHM of the
//!   Breit-Wigner, not the half width).
//! * A *resolution* shape is the distribution of measured minus true mass; its `bias` is the position of its peak, and
//!   `sigma` (or `sigma_low`, `sigma_high`) the standard deviation of its Gaussian core.
//! * [`LineShape`] is natural ⊗ resolution: `f(x) = ∫ natural(t) resolution(x - t) dt`.
//! * Parameters keep their order and their names everywhere; a gradient has one component per parameter, in that order.
//!   Gradients of slices are *parameter-major*: component k of point i stands at `k * points + i`.
//! * Slices of different lengths are processed up to the shorter one.

mod breit_wigner;
mod convolution;
mod crystal_ball;
mod double_crystal_ball;
mod error;
mod gauss_exp;
mod gaussian;
mod grid;
mod half;
mod line_shape;
mod mixture;
mod natural;
mod panels;
mod pole_pair;
mod pole_shape;
mod relativistic;
mod resolution;
mod resolution_slices;
mod running_width;
mod shared;
mod true_mass;
mod voigt;
pub mod widths;

pub use breit_wigner::BreitWigner;
pub use error::{Domain, Parameter, ShapeError};
pub use line_shape::{LineShape, Scaling};
pub use mixture::Mixture;
pub use natural::Natural;
pub use relativistic::Relativistic;
pub use resolution::Resolution;
pub use running_width::RunningWidth;
pub use true_mass::FALLOFF_RANGE;

use std::fmt;

/// A normalised density of mass with everything that a fit, a template or a table asks of it.
///
/// The slice versions are the fast path. No method panics; an argument that is not a number gives NaN.
pub trait Shape: fmt::Debug + Send + Sync {
    /// The parameters in their fixed order, with their stable names, values and domains.
    fn parameters(&self) -> Vec<Parameter>;

    /// The same kind of shape at other values of its parameters, in the order of [`Shape::parameters`].
    ///
    /// # Errors
    /// A value outside its domain, or a wrong number of values.
    fn with_values(&self, values: &[f64]) -> Result<Box<dyn Shape>, ShapeError>;

    /// Density in 1/GeV.
    fn pdf(&self, m: f64) -> f64;

    /// Natural logarithm of the density; finite where the density itself would underflow.
    fn ln_pdf(&self, m: f64) -> f64 {
        libm::log(self.pdf(m))
    }

    /// Probability of a mass up to `m`, to full relative precision in the low tail.
    fn cdf(&self, m: f64) -> f64;

    /// Probability of a mass above `m`, to full relative precision in the high tail.
    fn sf(&self, m: f64) -> f64;

    /// The mass with `cdf = p`; the ends of the support at 0 and 1; NaN outside [0, 1].
    fn quantile(&self, p: f64) -> f64;

    /// The mass with `sf = q`, precise for small `q`; NaN outside [0, 1].
    fn upper_quantile(&self, q: f64) -> f64;

    /// A point near the maximum of the density, from where to look for it.
    fn peak_guess(&self) -> f64;

    /// Mean in GeV; `None` where the integral does not exist.
    fn mean(&self) -> Option<f64>;

    /// Variance in GeV²; `None` where the integral does not exist.
    fn variance(&self) -> Option<f64>;

    /// Draws masses into `out`.
    fn sample(&self, random: &mut dyn rand::Rng, out: &mut [f64]) {
        for value in out {
            *value = draw(self, random);
        }
    }

    /// Gradient of `ln pdf` in all parameters; returns `ln pdf`.
    fn ln_pdf_gradient(&self, m: f64, gradient: &mut [f64]) -> f64;

    /// Gradient of the cdf in all parameters, precise in both tails (the gradient of the sf is its opposite).
    fn cdf_gradient(&self, m: f64, gradient: &mut [f64]);

    /// Densities at many masses.
    fn pdf_slice(&self, m: &[f64], out: &mut [f64]) {
        for (value, &m) in out.iter_mut().zip(m) {
            *value = self.pdf(m);
        }
    }

    /// Logarithms of the density at many masses.
    fn ln_pdf_slice(&self, m: &[f64], out: &mut [f64]) {
        for (value, &m) in out.iter_mut().zip(m) {
            *value = self.ln_pdf(m);
        }
    }

    /// Cumulative probabilities at many masses.
    fn cdf_slice(&self, m: &[f64], out: &mut [f64]) {
        for (value, &m) in out.iter_mut().zip(m) {
            *value = self.cdf(m);
        }
    }

    /// Survival probabilities at many masses.
    fn sf_slice(&self, m: &[f64], out: &mut [f64]) {
        for (value, &m) in out.iter_mut().zip(m) {
            *value = self.sf(m);
        }
    }

    /// `ln pdf` and its gradient at many masses; the gradient is parameter-major and must hold
    /// `parameters × m.len()` numbers.
    fn ln_pdf_gradient_slice(&self, m: &[f64], ln_pdf: &mut [f64], gradient: &mut [f64]) {
        let points = m.len().min(ln_pdf.len());
        let count = self.parameters().len();
        let mut one = vec![0.0; count];
        for i in 0..points {
            ln_pdf[i] = self.ln_pdf_gradient(m[i], &mut one);
            for (k, &g) in one.iter().enumerate() {
                if let Some(slot) = gradient.get_mut(k * m.len() + i) {
                    *slot = g;
                }
            }
        }
    }

    /// Probability of a mass in `(low, high]`, without cancellation in either tail.
    fn window_probability(&self, low: f64, high: f64) -> f64 {
        let middle = self.peak_guess();
        if low >= middle { self.sf(low) - self.sf(high) } else { self.cdf(high) - self.cdf(low) }
    }

    /// Probability of `(low, high]` and its gradient in all parameters.
    fn window_probability_gradient(&self, low: f64, high: f64, gradient: &mut [f64]) -> f64 {
        let mut below = vec![0.0; gradient.len()];
        self.cdf_gradient(high, gradient);
        self.cdf_gradient(low, &mut below);
        for (g, b) in gradient.iter_mut().zip(&below) {
            *g -= b;
        }
        self.window_probability(low, high)
    }

    /// Probabilities of the bins between rising `edges`; `out` has one number less than `edges`.
    fn bin_probabilities(&self, edges: &[f64], out: &mut [f64]) {
        if edges.len() < 2 {
            return;
        }
        // From below up to the peak, from above beyond it: the difference of two small numbers stays precise.
        let split = edges.partition_point(|&edge| edge < self.peak_guess()).min(edges.len() - 1);
        let mut at_edge = vec![0.0; edges.len()];
        self.cdf_slice(&edges[..=split], &mut at_edge[..=split]);
        for (value, pair) in out.iter_mut().zip(at_edge[..=split].windows(2)) {
            *value = pair[1] - pair[0];
        }
        self.sf_slice(&edges[split..], &mut at_edge[split..]);
        for (value, pair) in out.iter_mut().skip(split).zip(at_edge[split..].windows(2)) {
            *value = pair[0] - pair[1];
        }
    }

    /// Gradient of the bin probabilities, parameter-major: `parameters × bins` numbers.
    fn bin_probability_gradient(&self, edges: &[f64], gradient: &mut [f64]) {
        let count = self.parameters().len();
        let bins = edges.len().saturating_sub(1);
        let mut below = vec![0.0; count];
        let mut above = vec![0.0; count];
        for (i, &edge) in edges.iter().enumerate() {
            self.cdf_gradient(edge, &mut above);
            if i > 0 {
                for k in 0..count {
                    if let Some(slot) = gradient.get_mut(k * bins + i - 1) {
                        *slot = above[k] - below[k];
                    }
                }
            }
            std::mem::swap(&mut below, &mut above);
        }
    }
}

/// A uniform number strictly between 0 and 1, on a grid of 2^-53.
pub(crate) fn open_uniform(random: &mut dyn rand::Rng) -> f64 {
    ((random.next_u64() >> 11) as f64 + 0.5) * (1.0 / 9_007_199_254_740_992.0)
}

/// One draw by inversion; both tails are reached through the precise side.
pub(crate) fn draw<S: Shape + ?Sized>(shape: &S, random: &mut dyn rand::Rng) -> f64 {
    let u = open_uniform(random);
    if random.next_u64() >> 63 == 0 { shape.quantile(0.5 * u) } else { shape.upper_quantile(0.5 * u) }
}
