//! The Poisson likelihood of counts whose expectation is any function of a few parameters.

use nalgebra::{DMatrix, DVector};

use super::coordinates::Coordinates;
use super::objective::{Evaluation, Objective};
use super::outcome::Stop;
use super::poisson::poisson;
use super::run::{FitError, minimise};
use super::settings::Settled;

/// Expected events per bin with their derivatives, parameter-major: `parameters × bins` numbers.
#[derive(Clone, Debug, PartialEq)]
pub struct Expected {
    /// Expected events.
    pub events: Vec<f64>,
    /// Their derivatives.
    pub gradient: Vec<f64>,
}

/// What a fit of counts finds.
#[derive(Clone, Debug, PartialEq)]
pub struct CountFit {
    /// Parameters at the minimum.
    pub values: Vec<f64>,
    /// Their covariance, the inverse of the expected second derivatives; `None` where these are not positive.
    pub covariance: Option<DMatrix<f64>>,
    /// How the minimiser ended.
    pub stop: Stop,
}

struct Counts<'a> {
    counts: &'a [f64],
    expected: &'a dyn Fn(&[f64]) -> Option<Expected>,
}

impl Objective for Counts<'_> {
    fn evaluate(&self, values: &[f64]) -> Option<Evaluation> {
        let (bins, count) = (self.counts.len(), values.len());
        let expected = (self.expected)(values)?;
        if expected.events.len() != bins || expected.gradient.len() != bins * count {
            return None;
        }
        let (mut value, mut gradient, mut hessian) = (0.0, DVector::zeros(count), DMatrix::zeros(count, count));
        for i in 0..bins {
            let term = poisson(self.counts[i], expected.events[i])?;
            value += term.value;
            for k in 0..count {
                let g = expected.gradient[k * bins + i];
                gradient[k] += term.slope * g;
                for l in 0..count {
                    hessian[(k, l)] += term.curvature * g * expected.gradient[l * bins + i];
                }
            }
        }
        Some(Evaluation { value, gradient, hessian }).filter(Evaluation::is_finite)
    }

    fn exact(&self) -> bool {
        false
    }
}

/// Fits the parameters of `expected` to counts, from `start`, within `bounds`; `expected` gives `None` outside of its
/// domain.
///
/// # Errors
/// When the likelihood is not defined at the start, or a bound does not rise.
pub fn fit_counts(
    counts: &[f64],
    start: &[f64],
    bounds: &[(f64, f64)],
    expected: &dyn Fn(&[f64]) -> Option<Expected>,
) -> Result<CountFit, FitError> {
    if bounds.len() != start.len() || !bounds.iter().all(|b| b.0 < b.1) {
        return Err(FitError::Start("bounds that do not rise".to_owned()));
    }
    let settled: Vec<Settled> = start
        .iter()
        .zip(bounds)
        .map(|(&start, &(low, high))| Settled { name: String::new(), start, free: true, low, high, log_from: None })
        .collect();
    let objective = Counts { counts, expected };
    let (values, ended) = minimise(&Coordinates::new(&objective, &settled), start)?;
    let covariance = objective.evaluate(&values).and_then(|e| super::curves::positive_inverse(&e.hessian));
    Ok(CountFit { values, covariance, stop: ended.stop })
}
