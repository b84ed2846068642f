//! What `run.json` says about a run.

use super::FileDigest;
use crate::detector::Detector;
use crate::fold::FoldRecord;
use crate::shift::Nuisance;
use serde::{Deserialize, Serialize};

/// The program's name in `run.json`.
pub(super) const PROGRAM: &str = "peakfold";

/// Events of the list that were not used for one reason.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
pub struct Skipped {
    /// The reason.
    pub reason: String,
    /// How many.
    pub events: u64,
}

/// A number that a nuisance moves.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct MoveRecord {
    /// Name of the number.
    pub term: String,
    /// By how much it moves at +1, in its own unit.
    pub by: f64,
}

/// A nuisance of the detector.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct NuisanceRecord {
    /// Its name, as in `shifts.csv` before the colon.
    pub name: String,
    /// What it moves.
    pub moves: Vec<MoveRecord>,
}

impl NuisanceRecord {
    /// The record of a nuisance of a detector.
    pub fn new(detector: &Detector, nuisance: &Nuisance) -> Self {
        let moves = nuisance.moves.iter().map(|m| MoveRecord { term: detector.term_name(&m.term), by: m.by });
        NuisanceRecord { name: nuisance.name.clone(), moves: moves.collect() }
    }
}

/// How the fold of one channel at one mass went.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct FoldSummary {
    /// Name of the channel.
    pub channel: String,
    /// Mass point in GeV.
    pub mass_gev: f64,
    /// Points used, over all scramblings.
    pub points: u64,
    /// Error reached in the worst category, as the study's `precision`; `null` where there is no peak to compare with.
    pub precision_reached: Option<f64>,
    /// Whether the study's `precision` was reached.
    pub reached: bool,
    /// CPU time of all threads in seconds.
    pub cpu_seconds: f64,
    /// Elapsed time in seconds.
    pub wall_seconds: f64,
    /// Events of the list that were used; `null` for generated events.
    pub events_used: Option<u64>,
    /// (sum w)²/sum w² of the list.
    pub events_effective: Option<f64>,
    /// Events of the list that were skipped, by reason.
    pub events_skipped: Vec<Skipped>,
    /// What else is worth knowing: about the file of events, and about events where no efficiency is told.
    pub notes: Vec<String>,
}

impl From<&FoldRecord> for FoldSummary {
    fn from(record: &FoldRecord) -> Self {
        let finite = |value: f64| value.is_finite().then_some(value);
        FoldSummary {
            channel: record.channel.clone(),
            mass_gev: record.mass_gev,
            points: record.points,
            precision_reached: finite(record.precision_reached),
            reached: record.reached,
            cpu_seconds: record.cpu_seconds,
            wall_seconds: record.wall_seconds,
            events_used: record.events_used,
            events_effective: record.events_effective.and_then(finite),
            events_skipped: record
                .events_skipped
                .iter()
                .map(|(reason, events)| Skipped { reason: reason.clone(), events: *events })
                .collect(),
            notes: record.notes.clone(),
        }
    }
}

/// Contents of `run.json`.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct RunRecord {
    /// `peakfold`.
    pub program: String,
    /// Version of the program.
    pub version: String,
    /// Name of the study.
    pub study: String,
    /// The input files: study, detector, event lists, tables.
    pub inputs: Vec<FileDigest>,
    /// Seed of the scramblings.
    pub seed: u64,
    /// The numerical error aimed at.
    pub precision: f64,
    /// Most points per channel and mass.
    pub max_points: u64,
    /// The fraction that `sigma_eff` holds.
    pub sigma_eff_fraction: f64,
    /// How each fold went, in the order of the study.
    pub folds: Vec<FoldSummary>,
    /// The nuisances whose shifts were folded; empty for a detector without uncertainties.
    pub nuisances: Vec<NuisanceRecord>,
    /// What the user should know of the model, one sentence each.
    pub model_notes: Vec<String>,
    /// What was not reached, one sentence each; empty when all is well.
    pub not_reached: Vec<String>,
    /// Threads used.
    pub threads: usize,
    /// Time from start to writing, in seconds.
    pub wall_seconds: f64,
    /// CPU time of all folds, in seconds.
    pub cpu_seconds: f64,
    /// The other files of the run, as they were written.
    pub files: Vec<FileDigest>,
}

impl RunRecord {
    /// How many mass points were folded.
    pub(super) fn masses(&self) -> usize {
        let mut masses: Vec<f64> = self.folds.iter().map(|fold| fold.mass_gev).collect();
        masses.sort_by(f64::total_cmp);
        masses.dedup();
        masses.len()
    }

    /// The record of a prediction from a run.
    pub fn of_prediction(run: &RunRecord, inputs: Vec<FileDigest>) -> Self {
        RunRecord {
            inputs,
            folds: Vec::new(),
            nuisances: Vec::new(),
            model_notes: Vec::new(),
            not_reached: Vec::new(),
            threads: 1,
            wall_seconds: 0.0,
            cpu_seconds: 0.0,
            files: Vec::new(),
            ..run.clone()
        }
    }

    /// The record of a run; fills in program, version, the fraction, and what was not reached.
    pub fn new(study: &crate::process::Study, inputs: Vec<FileDigest>, folds: &[FoldRecord]) -> Self {
        let folds: Vec<FoldSummary> = folds.iter().map(FoldSummary::from).collect();
        let not_reached = folds
            .iter()
            .filter(|fold| !fold.reached)
            .map(|fold| {
                let reached = fold.precision_reached.map_or("no".to_owned(), |p| format!("{p:.2e}"));
                format!(
                    "{} at {} GeV: {reached} precision after {} points, aimed at {}; raise max_points or precision",
                    fold.channel,
                    fold.mass_gev,
                    fold.points,
                    super::number::shortest(study.precision)
                )
            })
            .collect();
        RunRecord {
            program: PROGRAM.to_owned(),
            version: env!("CARGO_PKG_VERSION").to_owned(),
            study: study.name.clone(),
            inputs,
            seed: study.seed,
            precision: study.precision,
            max_points: study.max_points,
            sigma_eff_fraction: crate::template::SIGMA_EFF_FRACTION,
            cpu_seconds: folds.iter().map(|fold| fold.cpu_seconds).sum(),
            folds,
            nuisances: Vec::new(),
            model_notes: Vec::new(),
            not_reached,
            threads: 1,
            wall_seconds: 0.0,
            files: Vec::new(),
        }
    }
}
