//! Joint uncertainties of several numbers.

use super::Term;
use nalgebra::DMatrix;

/// The covariance of some numbers of a detector, which a calibration determined together. These numbers have no
/// uncertainty of their own beside it.
#[derive(Clone, Debug, PartialEq)]
pub struct TermCovariance {
    /// Name of the calibration; names the shifts that follow from it.
    pub name: String,
    /// The numbers.
    pub terms: Vec<Term>,
    /// Covariance in the units of the numbers, `terms.len()` rows and columns.
    pub matrix: DMatrix<f64>,
}
