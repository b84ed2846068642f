//! One resolution shape fitted to several templates at once, its parameters being curves across them.
//!
//! # Method
//!
//! Template j has bin probabilities p on edges relative to its mass point M. Parameter k of the shape there is
//! `θ = link(η)`, `η = Σ_l basis_kl(j) c_kl`. With q the bin probabilities of the shape, both normalised on the axis, the
//! criterion is `N Σ_j Σ_i p ln(p/q)`: that of a multinomial likelihood of N events a template. N ([`CRITERION_EVENTS`])
//! only sets what "small" means to the minimiser. One template with constants alone is a plain fit.
//!
//! Where a parameter has a prior, `((η - centre)/width)²/2` is added for each template: a millionth of the weight of the
//! data. It keeps the power of a tail finite that the template does not determine.

use nalgebra::{Cholesky, DMatrix, DVector};

use super::coordinates::Coordinates;
use super::objective::{Evaluation, Objective};
use super::outcome::Stop;
use super::poisson::poisson;
use super::run::{FitError, minimise};
use super::settings::Settled;
use crate::lineshape::{Resolution, Shape};

/// Events that a template counts as in the criterion.
pub const CRITERION_EVENTS: f64 = 1e6;
/// Probabilities below this count as 0: they carry no information that a difference of sums of 1 could hold.
const NOTHING: f64 = 1e-12;
/// No coefficient goes further: a logarithm of 60 is beyond any shape.
const FAR: f64 = 60.0;

/// How a parameter follows from η, with the unit u (the mass point in GeV).
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Link {
    /// `u η`.
    Scaled,
    /// `u exp η`.
    ScaledLog,
    /// `from + exp η`.
    Log {
        /// Lower end of the domain.
        from: f64,
    },
}

impl Link {
    /// The parameter.
    pub fn value(self, eta: f64, unit: f64) -> f64 {
        match self {
            Link::Scaled => unit * eta,
            Link::ScaledLog => unit * libm::exp(eta),
            Link::Log { from } => from + libm::exp(eta),
        }
    }

    /// Its derivative in η.
    pub fn slope(self, eta: f64, unit: f64) -> f64 {
        match self {
            Link::Scaled => unit,
            Link::ScaledLog => unit * libm::exp(eta),
            Link::Log { .. } => libm::exp(eta),
        }
    }

    /// Its derivative in the unit.
    pub fn unit_slope(self, eta: f64) -> f64 {
        match self {
            Link::Scaled => eta,
            Link::ScaledLog => libm::exp(eta),
            Link::Log { .. } => 0.0,
        }
    }

    /// The η of a parameter.
    pub fn eta(self, value: f64, unit: f64) -> f64 {
        match self {
            Link::Scaled => value / unit,
            Link::ScaledLog => libm::log(value / unit),
            Link::Log { from } => libm::log(value - from),
        }
    }
}

/// One parameter of the shape across the templates.
#[derive(Clone, Debug, PartialEq)]
pub struct Curve {
    /// Its link.
    pub link: Link,
    /// Centre and width of the prior of η.
    pub prior: Option<(f64, f64)>,
    /// One row per template: the basis functions there.
    pub basis: Vec<Vec<f64>>,
}

/// One template.
#[derive(Clone, Debug, PartialEq)]
pub struct CurvePoint {
    /// Mass point in GeV.
    pub unit_gev: f64,
    /// Bin edges less the mass point, in GeV.
    pub edges_gev: Vec<f64>,
    /// Probability per bin, of sum 1.
    pub probability: Vec<f64>,
}

/// The fit: shape, templates and curves.
#[derive(Clone, Debug)]
pub struct Curves<'a> {
    /// Any shape of the kind.
    pub kind: Resolution,
    /// The templates.
    pub points: Vec<&'a CurvePoint>,
    /// One curve per parameter of the shape.
    pub curves: Vec<Curve>,
}

/// What the fit finds.
#[derive(Clone, Debug, PartialEq)]
pub struct CurveFit {
    /// Coefficients, curve after curve.
    pub coefficients: Vec<f64>,
    /// Second derivatives of the criterion in the coefficients.
    pub hessian: DMatrix<f64>,
    /// Their expectation, which is never negative.
    pub information: DMatrix<f64>,
    /// How the minimiser ended.
    pub stop: Stop,
    /// Estimated vertical distance to the minimum, in units of the criterion.
    pub distance: f64,
    /// Iterations.
    pub iterations: u64,
}

/// Expected events of one template and their derivatives in η.
struct AtPoint {
    mu: Vec<f64>,
    /// Parameter-major.
    gradient: Vec<f64>,
}

impl Curves<'_> {
    /// Number of coefficients.
    pub fn count(&self) -> usize {
        self.curves.iter().map(|curve| curve.basis.first().map_or(0, Vec::len)).sum()
    }

    /// Every η of one template.
    fn etas(&self, point: usize, values: &[f64]) -> Vec<f64> {
        let mut rest = values;
        self.curves
            .iter()
            .map(|curve| {
                let row = &curve.basis[point];
                let (own, others) = rest.split_at(row.len());
                rest = others;
                row.iter().zip(own).map(|(b, c)| b * c).sum()
            })
            .collect()
    }

    fn at(&self, point: usize, etas: &[f64]) -> Option<AtPoint> {
        let CurvePoint { unit_gev, edges_gev, probability } = self.points[point];
        let bins = probability.len();
        let theta: Vec<f64> = self.curves.iter().zip(etas).map(|(c, &eta)| c.link.value(eta, *unit_gev)).collect();
        let shape = self.kind.with_parameters(&theta).ok()?;
        let mut mu = vec![0.0; bins];
        shape.bin_probabilities(edges_gev, &mut mu);
        let whole: f64 = mu.iter().sum();
        if !(whole > 1e-290) {
            return None;
        }
        let mut gradient = vec![0.0; bins * theta.len()];
        shape.bin_probability_gradient(edges_gev, &mut gradient);
        let scale = CRITERION_EVENTS / whole;
        mu.iter_mut().for_each(|m| *m *= scale);
        for (k, row) in gradient.chunks_mut(bins).enumerate() {
            let relative = row.iter().sum::<f64>() / whole;
            let slope = self.curves[k].link.slope(etas[k], *unit_gev);
            row.iter_mut().zip(&mu).for_each(|(g, m)| *g = slope * (scale * *g - relative * m));
        }
        Some(AtPoint { mu, gradient })
    }

    /// Adds `Σ basis` of a vector in η to one in the coefficients.
    fn spread(&self, point: usize, of_eta: &[f64], out: &mut DVector<f64>) {
        let mut place = 0;
        for (curve, g) in self.curves.iter().zip(of_eta) {
            for b in &curve.basis[point] {
                out[place] += b * g;
                place += 1;
            }
        }
    }

    /// The derivative of the criterion of one template in the coefficients if its probabilities were these, without the
    /// priors. It is linear in them.
    pub fn score(&self, point: usize, values: &[f64], probability: &[f64]) -> Option<DVector<f64>> {
        let here = self.at(point, &self.etas(point, values))?;
        let bins = here.mu.len();
        let of_eta: Vec<f64> = here
            .gradient
            .chunks(bins)
            .map(|row| {
                let terms = row.iter().zip(&here.mu).zip(probability);
                terms.filter(|((_, m), _)| **m > 0.0).map(|((g, m), p)| (1.0 - CRITERION_EVENTS * p / m) * g).sum()
            })
            .collect();
        let mut out = DVector::zeros(values.len());
        self.spread(point, &of_eta, &mut out);
        Some(out)
    }

    /// The covariance of that derivative for independent errors of the probabilities.
    pub fn score_covariance(&self, point: usize, values: &[f64], errors: &[f64]) -> Option<DMatrix<f64>> {
        let here = self.at(point, &self.etas(point, values))?;
        let bins = here.mu.len();
        let mut matrix = DMatrix::zeros(values.len(), values.len());
        for i in (0..bins).filter(|&i| here.mu[i] > 0.0 && errors[i] > 0.0) {
            let factor = CRITERION_EVENTS * errors[i] / here.mu[i];
            let of_eta: Vec<f64> = (0..self.curves.len()).map(|k| factor * here.gradient[k * bins + i]).collect();
            let mut one = DVector::zeros(values.len());
            self.spread(point, &of_eta, &mut one);
            matrix += &one * one.transpose();
        }
        Some(matrix)
    }

    /// Fits from these coefficients.
    ///
    /// A fit that does not converge is an outcome, not an error: see [`CurveFit::stop`].
    ///
    /// # Errors
    /// When the criterion has no value at the start.
    pub fn fit(&self, start: &[f64]) -> Result<CurveFit, FitError> {
        let settled: Vec<Settled> = start
            .iter()
            .map(|&start| Settled { name: String::new(), start, free: true, low: -FAR, high: FAR, log_from: None })
            .collect();
        let coordinates = Coordinates::new(self, &settled);
        let (coefficients, ended) = minimise(&coordinates, start)?;
        let failed = || FitError::Start(coefficients.iter().map(|v| format!("{v:.6}")).collect::<Vec<_>>().join(", "));
        let information = self.evaluate(&coefficients).ok_or_else(failed)?.hessian;
        let hessian = coordinates.outer_hessian(&coefficients).ok_or_else(failed)?;
        Ok(CurveFit {
            coefficients,
            hessian,
            information,
            stop: ended.stop,
            distance: ended.distance,
            iterations: ended.iterations,
        })
    }
}

impl Objective for Curves<'_> {
    fn evaluate(&self, values: &[f64]) -> Option<Evaluation> {
        let (count, parameters) = (values.len(), self.curves.len());
        if count != self.count() {
            return None;
        }
        let (mut value, mut gradient, mut hessian) = (0.0, DVector::zeros(count), DMatrix::zeros(count, count));
        for point in 0..self.points.len() {
            let etas = self.etas(point, values);
            let here = self.at(point, &etas)?;
            let bins = here.mu.len();
            let mut of_eta = vec![0.0; parameters];
            let mut square = DMatrix::<f64>::zeros(parameters, parameters);
            for (i, &p) in self.points[point].probability.iter().enumerate() {
                let found = if p.abs() < NOTHING { 0.0 } else { CRITERION_EVENTS * p };
                let term = poisson(found, here.mu[i])?;
                value += term.value;
                for k in 0..parameters {
                    let g = here.gradient[k * bins + i];
                    of_eta[k] += term.slope * g;
                    for l in 0..=k {
                        square[(k, l)] += term.curvature * g * here.gradient[l * bins + i];
                    }
                }
            }
            for (k, curve) in self.curves.iter().enumerate() {
                if let Some((centre, width)) = curve.prior {
                    let pull = (etas[k] - centre) / width;
                    value += 0.5 * pull * pull;
                    of_eta[k] += pull / width;
                    square[(k, k)] += 1.0 / (width * width);
                }
            }
            self.spread(point, &of_eta, &mut gradient);
            let mut row = 0;
            for k in 0..parameters {
                for &b in &self.curves[k].basis[point] {
                    let mut column = 0;
                    for l in 0..parameters {
                        let h = if l <= k { square[(k, l)] } else { square[(l, k)] };
                        for &d in &self.curves[l].basis[point] {
                            hessian[(row, column)] += b * d * h;
                            column += 1;
                        }
                    }
                    row += 1;
                }
            }
        }
        Some(Evaluation { value, gradient, hessian }).filter(Evaluation::is_finite)
    }

    fn exact(&self) -> bool {
        false
    }
}

/// The inverse of a positive matrix, scaled to a unit diagonal on the way; `None` if it is not positive.
pub fn positive_inverse(matrix: &DMatrix<f64>) -> Option<DMatrix<f64>> {
    let n = matrix.nrows();
    if n == 0 || !matrix.diagonal().iter().all(|d| *d > 0.0 && d.is_finite()) {
        return None;
    }
    let scale = matrix.diagonal().map(f64::sqrt);
    let scaled = DMatrix::from_fn(n, n, |i, j| matrix[(i, j)] / (scale[i] * scale[j]));
    let inverse = Cholesky::new(scaled)?.inverse();
    let inverse = DMatrix::from_fn(n, n, |i, j| inverse[(i, j)] / (scale[i] * scale[j]));
    inverse.iter().all(|v| v.is_finite()).then_some(inverse)
}
