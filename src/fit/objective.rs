//! What a minimiser asks of a likelihood.

use nalgebra::{DMatrix, DVector};

/// A value of `-ln L` with its derivatives in all parameters of the model.
#[derive(Clone, Debug)]
pub(super) struct Evaluation {
    pub value: f64,
    pub gradient: DVector<f64>,
    /// Second derivatives, or an approximation to them that is never negative (see [`Objective::exact`]).
    pub hessian: DMatrix<f64>,
}

impl Evaluation {
    pub fn is_finite(&self) -> bool {
        self.value.is_finite()
            && self.gradient.iter().all(|v| v.is_finite())
            && self.hessian.iter().all(|v| v.is_finite())
    }
}

/// A negative log likelihood.
pub(super) trait Objective {
    /// Value, gradient and second derivatives; `None` where the likelihood is 0 or not defined.
    fn evaluate(&self, values: &[f64]) -> Option<Evaluation>;

    /// Whether the second derivatives are exact.
    fn exact(&self) -> bool;

    /// `Σ w² g gᵀ` over the data, for weighted data.
    fn weighted_scores(&self, _values: &[f64]) -> Option<DMatrix<f64>> {
        None
    }
}

/// Second derivatives by central differences of the gradient, in the parameters `free`, with one step for each.
///
/// A step that leaves the domain is taken one-sided.
pub(super) fn second_derivatives(
    objective: &dyn Objective,
    values: &[f64],
    free: &[usize],
    steps: &[f64],
) -> Option<DMatrix<f64>> {
    let mut hessian = DMatrix::zeros(values.len(), values.len());
    let here = objective.evaluate(values)?;
    for (&k, &step) in free.iter().zip(steps) {
        let shifted = |by: f64| {
            let mut moved = values.to_vec();
            moved[k] += by;
            objective.evaluate(&moved).map(|e| (moved[k], e.gradient)).filter(|(_, g)| g.iter().all(|v| v.is_finite()))
        };
        let plus = shifted(step).unwrap_or((values[k], here.gradient.clone()));
        let minus = shifted(-step).unwrap_or((values[k], here.gradient.clone()));
        let span = plus.0 - minus.0;
        if !(span > 0.0) {
            return None;
        }
        let column = (plus.1 - minus.1) / span;
        hessian.set_column(k, &column);
    }
    // Both halves were computed; their mean is symmetric.
    let transposed = hessian.transpose();
    let mut symmetric = DMatrix::zeros(values.len(), values.len());
    for &i in free {
        for &j in free {
            symmetric[(i, j)] = 0.5 * (hessian[(i, j)] + transposed[(i, j)]);
        }
    }
    Some(symmetric)
}
