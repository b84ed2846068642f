//! The folding engine, and the plain reference path.

mod aim;
mod efficiency;
mod engine;
mod estimate;
mod event_list;
mod last_leg;
mod limits;
mod list;
mod list_sums;
mod measure;
mod paired;
pub mod plain;
mod plan;
mod resolve;
mod response;
mod spread;

use crate::detector::Detector;
use crate::problem::Problem;
use crate::process::{EventSource, Study};
use crate::template::LabelledTemplate;
pub use event_list::{ChannelEvents, StudyEvents, read_events};

/// How a fold of one channel at one mass point went.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct FoldRecord {
    /// Name of the channel.
    pub channel: String,
    /// Mass point in GeV.
    pub mass_gev: f64,
    /// Points used, over all scramblings.
    pub points: u64,
    /// Points that the templates come from: of a list, those of the last pass only.
    pub final_points: u64,
    /// Error reached, as the study's `precision` is defined, in the worst category.
    pub precision_reached: f64,
    /// Whether the study's `precision` was reached.
    pub reached: bool,
    /// CPU time of all threads in seconds.
    pub cpu_seconds: f64,
    /// Elapsed time in seconds.
    pub wall_seconds: f64,
    /// Points of each scrambling for each event of the list; `None` for generated events.
    pub points_per_event: Option<u64>,
    /// Events of the list that were used; `None` for generated events.
    pub events_used: Option<u64>,
    /// Effective number of events of the list, (sum w)²/sum w² over groups of correlated events.
    pub events_effective: Option<f64>,
    /// Events of the list that were skipped, with the reason.
    pub events_skipped: Vec<(String, u64)>,
    /// What else is worth knowing: about the file of events, and about events where no efficiency is told.
    pub notes: Vec<String>,
}

impl FoldRecord {
    /// The record of a fold of about so many points, the first of the same ones, for [`fold_shifted`]. Of a list these are the
    /// first points of every event.
    pub fn leading(&self, points: u64) -> Self {
        let part = |all: u64| (all as f64 * points as f64 / self.final_points.max(1) as f64) as u64;
        let per_event = self.points_per_event.map(|all| 1 << part(all).max(1).ilog2());
        FoldRecord { final_points: points.min(self.final_points), points_per_event: per_event, ..self.clone() }
    }
}

/// What a fold of one channel at one mass point gives.
#[derive(Clone, Debug, PartialEq)]
pub struct Folded {
    /// One template per category, in the order of the channel.
    pub templates: Vec<LabelledTemplate>,
    /// How it went.
    pub record: FoldRecord,
}

/// How far a fold is, told from time to time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Progress {
    /// Share of the work done, 0 to 1: a guess while the points that are needed are not known.
    pub fraction: f64,
}

/// Why a fold could not be made.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum FoldError {
    /// The study has no such channel.
    #[error("the study has no channel number {0}")]
    NoSuchChannel(usize),
    /// The file of events cannot be used, or has none for the channel.
    #[error(transparent)]
    Events(#[from] Problem),
    /// No rule says how the legs are picked from events.
    #[error("channel {channel}: its legs cannot be picked from a file of events")]
    CannotPick {
        /// Name of the channel.
        channel: String,
    },
    /// The mass point cannot decay to the legs.
    #[error("a resonance of {mass_gev} GeV cannot decay to the legs of this channel")]
    BelowThreshold {
        /// The mass point in GeV.
        mass_gev: f64,
    },
    /// The channel takes more random numbers per event than the sequence has.
    #[error("the channel needs {found} numbers per event, and {allowed} are available")]
    TooManyDimensions {
        /// Numbers per event that the channel needs.
        found: usize,
        /// Numbers per event that the sequence has.
        allowed: usize,
    },
}

/// Folds one channel of a study at one mass point, on the current rayon thread pool.
///
/// The result does not depend on the number of threads. Points are doubled until the study's precision is met or
/// `max_points` are used; the record says which.
///
/// # Errors
/// See [`FoldError`].
pub fn fold_channel(
    study: &Study,
    channel: usize,
    mass_gev: f64,
    progress: &(dyn Fn(Progress) + Sync),
) -> Result<Folded, FoldError> {
    fold_with(study, &study.detector, channel, mass_gev, None, progress)
}

/// Folds as [`fold_channel`] did before, at exactly the same points, with another detector: what the two templates differ
/// by is then the effect of the detector, without the noise of the points. This is how a calibration shift is folded.
///
/// `record` is that of the earlier fold of the same study, channel and mass point.
///
/// # Errors
/// See [`FoldError`].
pub fn fold_shifted(
    study: &Study,
    detector: &Detector,
    channel: usize,
    record: &FoldRecord,
    progress: &(dyn Fn(Progress) + Sync),
) -> Result<Folded, FoldError> {
    fold_with(study, detector, channel, record.mass_gev, Some(record), progress)
}

/// Folds one channel with the events that [`read_events`] has kept of a file: all of them, or the first ones of a long file.
///
/// # Errors
/// See [`FoldError`].
pub fn fold_known(
    study: &Study,
    channel: usize,
    mass_gev: f64,
    known: &ChannelEvents,
    progress: &(dyn Fn(Progress) + Sync),
) -> Result<Folded, FoldError> {
    let EventSource::File(file) = &study.resonance.source else {
        return fold_channel(study, channel, mass_gev, progress);
    };
    list::fold_file(study, &study.detector, channel, mass_gev, file, Some(known), None, progress)
}

fn fold_with(
    study: &Study,
    detector: &Detector,
    channel: usize,
    mass_gev: f64,
    record: Option<&FoldRecord>,
    progress: &(dyn Fn(Progress) + Sync),
) -> Result<Folded, FoldError> {
    match &study.resonance.source {
        EventSource::Generated(production) => {
            let points = record.map(|record| record.final_points);
            engine::fold_generated(study, detector, channel, mass_gev, production, points, progress)
        }
        EventSource::File(file) => list::fold_file(study, detector, channel, mass_gev, file, None, record, progress),
    }
}
