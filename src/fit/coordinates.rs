//! The coordinates in which the minimiser moves: the free parameters, positive ones by their logarithm.

use nalgebra::{DMatrix, DVector};

use super::objective::{Evaluation, Objective, second_derivatives};
use super::settings::Settled;

/// Step of numerical second derivatives, in errors of the parameter with all others fixed. The likelihood is nearly
/// quadratic within an error, and the step is far above the numerical noise of its gradient.
const STEP: f64 = 0.05;

/// The likelihood in these coordinates.
#[derive(Clone)]
pub(super) struct Coordinates<'a> {
    pub objective: &'a dyn Objective,
    settled: &'a [Settled],
    pub free: Vec<usize>,
    pub low: Vec<f64>,
    pub high: Vec<f64>,
}

impl<'a> Coordinates<'a> {
    pub fn new(objective: &'a dyn Objective, settled: &'a [Settled]) -> Self {
        let free: Vec<usize> = (0..settled.len()).filter(|&k| settled[k].free).collect();
        let inner = |k: usize, value: f64| match settled[k].log_from {
            Some(from) => libm::log(value - from),
            None => value,
        };
        let low = free.iter().map(|&k| inner(k, settled[k].low)).collect();
        let high = free.iter().map(|&k| inner(k, settled[k].high)).collect();
        Coordinates { objective, settled, free, low, high }
    }

    /// Coordinates of these parameters.
    pub fn inner(&self, values: &[f64]) -> DVector<f64> {
        DVector::from_fn(self.free.len(), |i, _| {
            let k = self.free[i];
            let value = values[k].clamp(self.settled[k].low, self.settled[k].high);
            match self.settled[k].log_from {
                Some(from) => libm::log(value - from),
                None => value,
            }
        })
    }

    /// All parameters at these coordinates.
    pub fn outer(&self, z: &DVector<f64>) -> Vec<f64> {
        let mut values: Vec<f64> = self.settled.iter().map(|s| s.start).collect();
        for (i, &k) in self.free.iter().enumerate() {
            let s = &self.settled[k];
            let value = match s.log_from {
                Some(from) => from + libm::exp(z[i]),
                None => z[i],
            };
            values[k] = value.clamp(s.low, s.high);
        }
        values
    }

    fn slopes(&self, values: &[f64]) -> Vec<f64> {
        self.free.iter().map(|&k| self.settled[k].log_from.map_or(1.0, |from| values[k] - from)).collect()
    }

    fn hessian(&self, values: &[f64], gradient: &DVector<f64>, hessian: &DMatrix<f64>, exact: bool) -> DMatrix<f64> {
        let slopes = self.slopes(values);
        DMatrix::from_fn(self.free.len(), self.free.len(), |i, j| {
            let mut h = slopes[i] * slopes[j] * hessian[(self.free[i], self.free[j])];
            if i == j && exact && self.settled[self.free[i]].log_from.is_some() {
                // The second derivative of an exponential is its first.
                h += slopes[i] * gradient[self.free[i]];
            }
            h
        })
    }

    /// Value and derivatives in the coordinates.
    pub fn evaluate(&self, z: &DVector<f64>) -> Option<Evaluation> {
        let values = self.outer(z);
        let outer = self.objective.evaluate(&values)?;
        let slopes = self.slopes(&values);
        let gradient = DVector::from_fn(self.free.len(), |i, _| slopes[i] * outer.gradient[self.free[i]]);
        let hessian = self.hessian(&values, &outer.gradient, &outer.hessian, self.objective.exact());
        Some(Evaluation { value: outer.value, gradient, hessian })
    }

    /// Second derivatives in the free parameters themselves.
    pub fn outer_hessian(&self, values: &[f64]) -> Option<DMatrix<f64>> {
        let here = self.objective.evaluate(values)?;
        if self.objective.exact() {
            return Some(here.hessian);
        }
        let steps: Vec<f64> = self
            .free
            .iter()
            .map(|&k| {
                let step = STEP / here.hessian[(k, k)].max(1e-300).sqrt();
                let s = &self.settled[k];
                let room = s.log_from.map_or(f64::INFINITY, |from| 0.05 * (values[k] - from));
                step.min(room).min(0.1 * (s.high - s.low)).max(1e-9 * values[k].abs())
            })
            .collect();
        second_derivatives(self.objective, values, &self.free, &steps)
    }

    /// Second derivatives in the coordinates.
    pub fn inner_hessian(&self, z: &DVector<f64>) -> Option<DMatrix<f64>> {
        let values = self.outer(z);
        let gradient = self.objective.evaluate(&values)?.gradient;
        Some(self.hessian(&values, &gradient, &self.outer_hessian(&values)?, true))
    }
}
