//! Signal and background in a window, as functions of all parameters.

use super::Background;
use super::background::MAX_DEGREE;
use crate::lineshape::{Domain, LineShape, Parameter, Shape};

/// Why a model cannot be made.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum ModelError {
    /// A window whose ends do not rise.
    #[error("the window goes from {0} to {1} GeV; its ends must rise")]
    Window(f64, f64),
    /// A background without a finite window.
    #[error("a background needs a window; give its lower and upper end")]
    OpenWindow,
    /// A degree that is too high.
    #[error("the degree of the polynomial is {0}; it must be from 0 to {MAX_DEGREE}")]
    Degree(usize),
}

/// A line shape and an optional background in a window.
#[derive(Clone, Debug)]
pub struct Model {
    pub(super) line: LineShape,
    pub(super) background: Option<Background>,
    pub(super) window: (f64, f64),
    /// Whether there are yields.
    pub(super) counted: bool,
}

/// The model at one point: the line shape, its probability in the window and the gradient of its logarithm.
pub(super) struct AtPoint {
    pub line: LineShape,
    pub window_probability: f64,
    pub ln_window_gradient: Vec<f64>,
}

impl Model {
    /// A line shape, whose values are where a fit starts, and a background. The ends of the window may be infinite
    /// where there is no background.
    ///
    /// # Errors
    /// See [`ModelError`].
    pub fn new(line: LineShape, background: Option<Background>, window: (f64, f64)) -> Result<Self, ModelError> {
        if !(window.0 < window.1) {
            return Err(ModelError::Window(window.0, window.1));
        }
        if background.is_some() && !(window.0.is_finite() && window.1.is_finite()) {
            return Err(ModelError::OpenWindow);
        }
        if let Some(Background::Polynomial(degree)) = background
            && degree > MAX_DEGREE
        {
            return Err(ModelError::Degree(degree));
        }
        let counted = background.is_some();
        Ok(Model { line, background, window, counted })
    }

    /// The line shape.
    pub fn line(&self) -> &LineShape {
        &self.line
    }

    /// The background.
    pub fn background(&self) -> Option<Background> {
        self.background
    }

    /// The window in GeV.
    pub fn window(&self) -> (f64, f64) {
        self.window
    }

    pub(super) fn line_count(&self) -> usize {
        self.line.parameter_count()
    }

    /// Where the parameters of the background begin.
    pub(super) fn background_start(&self) -> usize {
        self.line_count() + usize::from(self.counted)
    }

    pub(super) fn count(&self) -> usize {
        self.background_start() + self.background.map_or(0, Background::count)
    }

    /// All parameters; those beside the line shape have the value 0.
    pub(super) fn parameters(&self) -> Vec<Parameter> {
        let mut list = self.line.parameters();
        let not_negative = Domain { low: 0.0, high: f64::INFINITY, closed: true };
        let mut push = |name: &str, domain| list.push(Parameter { name: name.to_owned(), value: 0.0, domain });
        if self.counted {
            push("signal_yield", not_negative);
        }
        for name in self.background.iter().flat_map(|b| b.names()) {
            push(&name, if name == "background_slope" { Domain::REAL } else { not_negative });
        }
        list
    }

    /// Yield of the signal; 1 where there are no yields.
    pub(super) fn signal(&self, values: &[f64]) -> f64 {
        if self.counted { values[self.line_count()] } else { 1.0 }
    }

    pub(super) fn background_values<'a>(&self, values: &'a [f64]) -> &'a [f64] {
        &values[self.background_start()..]
    }

    /// The model at these values; `None` outside the domain or where nothing of the shape is in the window.
    pub(super) fn at(&self, values: &[f64]) -> Option<AtPoint> {
        let line = self.line.with_parameters(&values[..self.line_count()]).ok()?;
        let (window_probability, mut gradient) = window(&line, self.window);
        if !(window_probability > 1e-290) {
            return None;
        }
        gradient.iter_mut().for_each(|g| *g /= window_probability);
        gradient.iter().all(|g| g.is_finite()).then_some(AtPoint {
            line,
            window_probability,
            ln_window_gradient: gradient,
        })
    }
}

/// Probability of a window whose ends may be infinite, and its gradient.
pub(super) fn window(line: &LineShape, (low, high): (f64, f64)) -> (f64, Vec<f64>) {
    let mut gradient = vec![0.0; line.parameter_count()];
    let mut below = gradient.clone();
    let probability = match (low.is_finite(), high.is_finite()) {
        (false, false) => 1.0,
        (true, false) => line.sf(low),
        (false, true) => line.cdf(high),
        (true, true) => line.window_probability(low, high),
    };
    if high.is_finite() {
        line.cdf_gradient(high, &mut gradient);
    }
    if low.is_finite() {
        line.cdf_gradient(low, &mut below);
        gradient.iter_mut().zip(&below).for_each(|(g, b)| *g -= b);
    }
    (probability, gradient)
}
