//! Calibration uncertainties: what moves together, detectors moved by it, and what that does to the templates.
//!
//! # Conventions
//!
//! * A *nuisance* is one independent calibration uncertainty in units of its standard deviation. It moves one number of the
//!   detector, all numbers that share its name, or, for a covariance, several numbers along one of its axes.
//! * A *shift* is a nuisance at +1 (`name:plus`) or -1 (`name:minus`).
//! * A number that a shift would move out of its domain is clipped, and the shift says so.
//! * The response of a quantity to a nuisance z is relative: `q(z)/q(0) = 1 + linear z + quadratic z²`, through the values
//!   at -1, 0 and +1.

mod channel;
mod folds;
mod nuisance;
mod response;

pub use channel::{ChannelShifts, LabelledResponse, ShiftError, fold_shifts, nuisances_of};
pub use folds::{DIFFERENCE_AIM, FoldedShift, Subsets, fold_shift};
pub use nuisance::{Move, Nuisance, NuisanceError, Shifted, Sign, nuisances};
pub use response::{Coefficients, Response, Size};
