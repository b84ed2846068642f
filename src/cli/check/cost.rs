//! What a study costs: points at most, and an estimate of points and time from coarse folds.

use super::text::{grouped, plural, wrapped};
use crate::fold::{FoldRecord, Folded, StudyEvents, fold_channel, fold_known};
use crate::process::Study;
use crate::shift::nuisances_of;
use std::fmt::Write as _;

/// Precision of the coarse folds.
const COARSE: f64 = 1e-2;

/// The numerical error of a fold falls about as points^-0.6, faster than for plain random points (-0.5). Between 4096
/// points and those of a precision of 2e-4, the channels of the demo have powers from 0.55 to 0.72, and this one tells
/// their points to within a factor of 1.7.
const ERROR_POWER: f64 = 0.6;

/// CPU time of one calibration uncertainty, up and down, over that of the nominal template; in the demo 0.65 on average.
const SHIFT_COST: f64 = 0.65;

/// What one channel costs, by a coarse fold at its middle mass.
pub struct Cost {
    record: FoldRecord,
    mass_points: u64,
    /// Points that the precision takes at one mass, as far as they are allowed; an estimate.
    points: u64,
    /// Whether more points than allowed would be needed.
    short: bool,
    /// Whether any event of the coarse fold passed the cuts.
    passes: bool,
    /// Calibration uncertainties that concern the channel.
    shifts: usize,
}

impl Cost {
    /// From a coarse fold, of which the list of events is so many times as long as the one that was folded.
    fn new(study: &Study, folded: Folded, length: f64, shifts: usize) -> Self {
        let passes = folded.templates.iter().any(|labelled| labelled.template.acceptance != 0.0);
        let record = folded.record;
        // The error of the same points per event falls with the number of events.
        let ratio = (record.precision_reached / study.precision / length.sqrt()).max(1.0);
        let needed = record.points as f64 * length * libm::pow(ratio, 1.0 / ERROR_POWER);
        let short = needed > study.max_points as f64;
        let points = if short { study.max_points.max(record.points) } else { needed.ceil() as u64 };
        Cost { record, mass_points: study.resonance.masses_gev.len() as u64, points, short, passes, shifts }
    }

    /// CPU time of all mass points, in seconds.
    fn cpu_seconds(&self) -> f64 {
        let per_point = self.record.cpu_seconds / self.record.points.max(1) as f64;
        per_point * self.points as f64 * self.mass_points as f64 * (1.0 + SHIFT_COST * self.shifts as f64)
    }
}

/// Folds each channel coarsely at its middle mass, with the events that were read.
///
/// # Errors
/// What is wrong with each channel that cannot be folded.
pub fn measure(study: &Study, events: Option<&StudyEvents>) -> Result<Vec<Cost>, Vec<String>> {
    let masses = &study.resonance.masses_gev;
    let Some(middle) = masses.get(masses.len() / 2) else { return Ok(Vec::new()) };
    let mut coarse = study.clone();
    coarse.precision = study.precision.max(COARSE);
    let (mut costs, mut messages) = (Vec::new(), Vec::new());
    for (index, channel) in study.channels.iter().enumerate() {
        let known = events.and_then(|events| events.channels.get(index));
        let folded = match known {
            Some(known) => fold_known(&coarse, index, *middle, known, &|_| ()),
            None => fold_channel(&coarse, index, *middle, &|_| ()),
        };
        match folded {
            Ok(folded) => {
                let kept = folded.record.events_used.unwrap_or(1).max(1);
                let length = known.map_or(1.0, |known| known.selection.used as f64 / kept as f64);
                match nuisances_of(study, index) {
                    Ok(shifts) => costs.push(Cost::new(study, folded, length, shifts.len())),
                    Err(error) => messages.push(format!("channel {}: {error}", channel.name)),
                }
            }
            Err(error) => messages.push(format!("channel {}: {error}", channel.name)),
        }
    }
    if messages.is_empty() { Ok(costs) } else { Err(messages) }
}

/// Adds what the study costs.
pub fn describe(report: &mut String, study: &Study, costs: &[Cost]) {
    let width = study.channels.iter().map(|c| c.name.chars().count()).max().unwrap_or(0).clamp(7, 40);
    let masses = study.resonance.masses_gev.len();
    report
        .push_str("\ncost, with the points of one nominal template and the time of all masses and shifts: estimates\n");
    let _ = writeln!(
        report,
        "  {:<width$}{:>11}{:>8}{:>17}{:>14}{:>12}",
        "channel", "templates", "shifts", "points at most", "points", "CPU time"
    );
    for (channel, cost) in study.channels.iter().zip(costs) {
        let _ = writeln!(
            report,
            "  {:<width$}{:>11}{:>8}{:>17}{:>14}{:>12}",
            channel.name,
            channel.categories.len() * masses,
            cost.shifts,
            grouped(study.max_points),
            grouped(cost.points),
            seconds(cost.cpu_seconds())
        );
    }
    let threads = rayon::current_num_threads();
    let total = costs.iter().map(Cost::cpu_seconds).sum::<f64>() / threads as f64;
    let _ = writeln!(
        report,
        "  estimated time: {} with {}, from coarse folds and error ~ points^-{ERROR_POWER}",
        seconds(total),
        plural(threads, "thread")
    );
    for (channel, cost) in study.channels.iter().zip(costs) {
        if cost.short {
            let text = format!(
                "{}: the precision {} may take more than the {} points allowed; raise max_points or precision",
                channel.name,
                study.precision,
                grouped(study.max_points)
            );
            wrapped(report, "  ", "    ", &text);
        }
        if !cost.passes {
            let text = format!("{}: no event of the coarse fold passed the cuts; check them", channel.name);
            wrapped(report, "  ", "    ", &text);
        }
        for note in &cost.record.notes {
            wrapped(report, "  ", "    ", &format!("{}: {note}", channel.name));
        }
    }
}

/// A time as a person would say it.
fn seconds(time: f64) -> String {
    if time < 0.1 {
        "< 0.1 s".to_owned()
    } else if time < 10.0 {
        format!("{time:.1} s")
    } else if time < 120.0 {
        format!("{time:.0} s")
    } else if time < 7200.0 {
        format!("{:.0} min", time / 60.0)
    } else {
        format!("{:.1} h", time / 3600.0)
    }
}
