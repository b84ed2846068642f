//! Templates: bin probabilities with errors, and their widths.

mod cumulative;
mod error;
mod widths;

pub use cumulative::{Cumulative, CumulativeError};
pub use error::standard_error;
pub use widths::{Measured, SIGMA_EFF_FRACTION, Widths};

/// What one independent scrambling of the points gave; the spread over scramblings is the numerical error.
#[derive(Clone, Debug, PartialEq)]
pub struct Replicate {
    /// Probability per bin and accepted event.
    pub probability: Vec<f64>,
    /// Probability below the axis.
    pub below_axis: f64,
    /// Probability above the axis.
    pub above_axis: f64,
    /// Acceptance.
    pub acceptance: f64,
}

/// Probability per bin of reconstructed mass.
///
/// `probability`, `below_axis` and `above_axis` are per accepted event and add to 1; `acceptance` and `lost` are per
/// generated event. Errors of the bins of one template are correlated.
#[derive(Clone, Debug, PartialEq)]
pub struct Template {
    /// Bin edges in GeV, one more than bins.
    pub edges_gev: Vec<f64>,
    /// Probability per bin.
    pub probability: Vec<f64>,
    /// Numerical standard error per bin.
    pub error: Vec<f64>,
    /// Statistical standard error of the event list per bin; 0 for generated events.
    pub list_error: Vec<f64>,
    /// Probability below the axis.
    pub below_axis: f64,
    /// Probability above the axis.
    pub above_axis: f64,
    /// Sum of weights that pass cuts and category, each times the event's efficiency, over the sum of all generated weights.
    pub acceptance: f64,
    /// Numerical standard error of the acceptance.
    pub acceptance_error: f64,
    /// Statistical standard error of the acceptance from the event list.
    pub acceptance_list_error: f64,
    /// Accepted weight with over without the efficiency of the detector, which the acceptance includes; 1 for a detector
    /// without, and where nothing passes the cuts.
    pub efficiency: f64,
    /// Numerical standard error of the efficiency.
    pub efficiency_error: f64,
    /// Statistical standard error of the efficiency from the event list.
    pub efficiency_list_error: f64,
    /// Fraction of the generated weight that the measurement lost (no positive energy, wrong-sign curvature), of events
    /// whose directions pass cuts and category, with the efficiency.
    pub lost: f64,
    /// The independent scramblings that `error` comes from, at least 16.
    pub replicates: Vec<Replicate>,
}

impl Template {
    /// Error per bin: numerical and statistical in quadrature.
    pub fn bin_errors(&self) -> Vec<f64> {
        self.error.iter().zip(&self.list_error).map(|(a, b)| libm::hypot(*a, *b)).collect()
    }
}

/// A template with what it belongs to.
#[derive(Clone, Debug, PartialEq)]
pub struct LabelledTemplate {
    /// Name of the channel.
    pub channel: String,
    /// Name of the category.
    pub category: String,
    /// Mass point in GeV.
    pub mass_gev: f64,
    /// `nominal`, or the name of a shift.
    pub shift: String,
    /// The template.
    pub template: Template,
}
