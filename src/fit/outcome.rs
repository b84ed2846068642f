//! What a fit finds.

use nalgebra::DMatrix;

use super::goodness::{Goodness, GoodnessBin};
use super::model::Model;
use crate::lineshape::Shape;

/// One parameter after the fit.
#[derive(Clone, Debug, PartialEq)]
pub struct Fitted {
    /// Name.
    pub name: String,
    /// Value.
    pub value: f64,
    /// Standard error; 0 for a fixed parameter, `None` where the fit does not tell.
    pub error: Option<f64>,
    /// Whether it was free.
    pub free: bool,
    /// Whether it ended at one of its bounds.
    pub at_bound: bool,
}

/// How the minimiser ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Stop {
    /// At the minimum.
    Converged,
    /// After the most iterations that are allowed.
    TooManySteps,
    /// Because no step led lower although the minimum is not reached.
    Stuck,
}

/// What a reader of the result should know.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum Warning {
    /// A parameter at a bound.
    #[error("{0} ended at its bound {1}; its error is not known, and those of the others hold it there")]
    AtBound(String, f64),
    /// A shape of nothing.
    #[error("there is no background, so {0} is not determined")]
    Empty(String),
    /// A background that is compatible with none: its events, and their error where it is known.
    #[error(
        "the background of {0:.1}{err} events is compatible with none, so its shape is not determined; fix its shape or leave it out",
        err = .1.map_or_else(String::new, |e| format!(" ± {e:.1}"))
    )]
    FaintBackground(f64, Option<f64>),
    /// No positive second derivatives.
    #[error(
        "the second derivatives at the minimum are not positive; no errors are given: the data do not determine all free parameters"
    )]
    NotPositive,
    /// A tail power that the data do not tell.
    #[error(
        "{0} = {1:.4} is not determined by the data (an exponential tail or none may describe them as well); fix it or use another shape"
    )]
    TailPower(String, f64),
    /// Little of the shape in the window.
    #[error("the window holds only {0:.3} of the line shape; the fit rests on a small part of it")]
    SmallWindow(f64),
    /// Counts that are not whole numbers.
    #[error("counts that are not whole numbers are fitted as if they were; give an error column")]
    NotWhole,
    /// Whole bins only.
    #[error(
        "the window cuts bins; only the {0} bins wholly inside are fitted, and the shape is normalised from {1} to {2} GeV"
    )]
    CutBins(usize, f64, f64),
    /// A bad description.
    #[error("the fit describes the data badly: chi²/ndf = {0:.1}/{1}, p = {2:.1e}")]
    BadDescription(f64, usize, f64),
}

/// The outcome of a fit.
#[derive(Clone, Debug)]
pub struct FitOutcome {
    /// All parameters, in the order of the model.
    pub parameters: Vec<Fitted>,
    /// Names of the parameters that the covariance is about.
    pub covariant: Vec<String>,
    /// Covariance of these, where the fit converged and the second derivatives are positive.
    pub covariance: Option<DMatrix<f64>>,
    /// `-ln L` at the minimum (see the module for what constants it leaves out).
    pub negative_log_likelihood: f64,
    /// Estimated vertical distance to the minimum.
    pub distance: f64,
    /// How the minimiser ended.
    pub stop: Stop,
    /// Iterations.
    pub iterations: u64,
    /// Rows fitted.
    pub rows: usize,
    /// Sum of their weights or counts.
    pub total: f64,
    /// Probability of the line shape in the window.
    pub window_probability: f64,
    /// Events of background in the window with their error, where there is background.
    pub background_events: Option<(f64, Option<f64>)>,
    /// What was found and expected, in bins.
    pub bins: Vec<GoodnessBin>,
    /// Chi-square, where there are bins enough.
    pub goodness: Option<Goodness>,
    /// Warnings.
    pub warnings: Vec<Warning>,
    pub(super) model: Model,
}

impl FitOutcome {
    /// Whether the minimum was reached.
    pub fn converged(&self) -> bool {
        self.stop == Stop::Converged
    }

    /// One parameter by its name.
    pub fn parameter(&self, name: &str) -> Option<&Fitted> {
        self.parameters.iter().find(|p| p.name == name)
    }

    /// Correlations, in the order of [`FitOutcome::covariant`].
    pub fn correlation(&self) -> Option<DMatrix<f64>> {
        let covariance = self.covariance.as_ref()?;
        Some(DMatrix::from_fn(covariance.nrows(), covariance.ncols(), |i, j| {
            covariance[(i, j)] / (covariance[(i, i)] * covariance[(j, j)]).sqrt()
        }))
    }

    /// The window that the shape is normalised in, in GeV.
    pub fn window(&self) -> (f64, f64) {
        self.model.window
    }

    /// Expected events per GeV, all and of the background alone, at these masses.
    pub fn density(&self, m: &[f64]) -> Option<Vec<(f64, f64)>> {
        let values: Vec<f64> = self.parameters.iter().map(|p| p.value).collect();
        let point = self.model.at(&values)?;
        let mut shape = vec![0.0; m.len()];
        point.line.pdf_slice(m, &mut shape);
        let mut background = vec![0.0; m.len()];
        if let Some(kind) = self.model.background {
            let own = self.model.background_values(&values);
            kind.density(own, self.model.window, m, &mut background, &mut vec![0.0; own.len() * m.len()]);
        }
        let signal = if self.model.counted { self.model.signal(&values) } else { self.total };
        let signal = signal / point.window_probability;
        Some(shape.iter().zip(&background).map(|(s, b)| (signal * s + b, *b)).collect())
    }
}
