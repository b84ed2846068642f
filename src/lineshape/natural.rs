//! The natural shapes under one type.

use super::error::{check_count, check_mass};
use super::pole_pair::PolePair;
use super::{BreitWigner, Relativistic, RunningWidth, Shape, ShapeError};

/// The distribution of the true mass.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Natural {
    /// A line of no width, at a mass in GeV.
    Line(f64),
    /// The non-relativistic Breit-Wigner.
    BreitWigner(BreitWigner),
    /// The relativistic Breit-Wigner with fixed width.
    Relativistic(Relativistic),
    /// The relativistic Breit-Wigner with running width.
    RunningWidth(RunningWidth),
}

impl Natural {
    /// A line at a mass in GeV.
    ///
    /// # Errors
    /// A mass that is not finite.
    pub fn line(mass: f64) -> Result<Self, ShapeError> {
        Ok(Natural::Line(check_mass(mass)?))
    }

    /// Mass in GeV.
    pub fn mass(&self) -> f64 {
        match self {
            Natural::Line(mass) => *mass,
            Natural::BreitWigner(shape) => shape.mass(),
            Natural::Relativistic(shape) => shape.mass(),
            Natural::RunningWidth(shape) => shape.mass(),
        }
    }

    /// Width in GeV; 0 for a line.
    pub fn width(&self) -> f64 {
        match self {
            Natural::Line(_) => 0.0,
            Natural::BreitWigner(shape) => shape.width(),
            Natural::Relativistic(shape) => shape.width(),
            Natural::RunningWidth(shape) => shape.width(),
        }
    }

    /// Number of parameters.
    pub fn parameter_count(&self) -> usize {
        if matches!(self, Natural::Line(_)) { 1 } else { 2 }
    }

    /// The same kind of shape at other values of its parameters.
    ///
    /// # Errors
    /// As the constructors.
    pub fn with_parameters(&self, values: &[f64]) -> Result<Self, ShapeError> {
        check_count(self.parameter_count(), values)?;
        Ok(match self {
            Natural::Line(_) => Natural::line(values[0])?,
            Natural::BreitWigner(_) => Natural::BreitWigner(BreitWigner::new(values[0], values[1])?),
            Natural::Relativistic(_) => Natural::Relativistic(Relativistic::new(values[0], values[1])?),
            Natural::RunningWidth(_) => Natural::RunningWidth(RunningWidth::new(values[0], values[1])?),
        })
    }

    /// The shape, unless it is a line.
    pub fn shape(&self) -> Option<&dyn Shape> {
        match self {
            Natural::Line(_) => None,
            Natural::BreitWigner(shape) => Some(shape),
            Natural::Relativistic(shape) => Some(shape),
            Natural::RunningWidth(shape) => Some(shape),
        }
    }

    /// The poles of the relativistic shapes.
    pub(super) fn poles(&self) -> Option<&PolePair> {
        match self {
            Natural::Relativistic(shape) => Some(&shape.poles),
            Natural::RunningWidth(shape) => Some(&shape.poles),
            _ => None,
        }
    }
}
