//! The folding engine, and the plain reference path.

pub mod plain;

use crate::template::LabelledTemplate;

/// How a fold of one channel at one mass point went.
#[derive(Clone, Debug, PartialEq)]
pub struct FoldRecord {
    /// Name of the channel.
    pub channel: String,
    /// Mass point in GeV.
    pub mass_gev: f64,
    /// Points used, over all scramblings.
    pub points: u64,
    /// Error reached, as the study's `precision` is defined, in the worst category.
    pub precision_reached: f64,
    /// Whether the study's `precision` was reached.
    pub reached: bool,
    /// CPU time in seconds.
    pub cpu_seconds: f64,
    /// Events of the list that were used; `None` for generated events.
    pub events_used: Option<u64>,
    /// Effective number of events of the list, (sum w)²/sum w².
    pub events_effective: Option<f64>,
    /// Events of the list that were skipped, with the reason.
    pub events_skipped: Vec<(String, u64)>,
}

/// What a fold of one channel at one mass point gives.
#[derive(Clone, Debug, PartialEq)]
pub struct Folded {
    /// One template per category, in the order of the channel.
    pub templates: Vec<LabelledTemplate>,
    /// How it went.
    pub record: FoldRecord,
}
