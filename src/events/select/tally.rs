//! Counts of a selection.

use std::path::Path;

use super::Skip;
use crate::events::raw::RawEvent;
use crate::events::report::{Report, Tally};
use crate::kinematics::TruthEvent;
use crate::problem::Problem;

/// What became of the events of a file in one channel. Events are added in the order of the file.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Selection {
    /// Events used.
    pub used: u64,
    /// Events skipped, by the reasons of [`Skip::ALL`], with the first line of each.
    pub skipped: [Tally; 7],
    /// Used events of negative weight.
    pub negative_weights: u64,
    /// Sum of the weights of the used events.
    pub weight_sum: f64,
    /// Sum of the absolute weights of the used events.
    pub absolute_weight_sum: f64,
    /// Smallest and largest truth mass of the used events, in GeV.
    pub mass_range_gev: Option<(f64, f64)>,
    /// Squares of the weight sums of completed groups.
    complete_groups: f64,
    /// Number and weight sum of the group that is being added up.
    open_group: Option<(u64, f64)>,
}

impl Selection {
    /// Counts one event and what became of it.
    pub fn add(&mut self, event: &RawEvent<'_>, outcome: &Result<TruthEvent, Skip>) {
        let truth = match outcome {
            Ok(truth) => truth,
            Err(reason) => {
                self.count_skipped(*reason, 1, event.line);
                return;
            }
        };
        self.used += 1;
        self.negative_weights += u64::from(truth.weight < 0.0);
        self.weight_sum += truth.weight;
        self.absolute_weight_sum += truth.weight.abs();
        let (low, high) = self.mass_range_gev.unwrap_or((truth.mass_gev, truth.mass_gev));
        self.mass_range_gev = Some((low.min(truth.mass_gev), high.max(truth.mass_gev)));
        match &mut self.open_group {
            Some((group, sum)) if *group == event.group => *sum += truth.weight,
            open => {
                let (_, sum) = open.replace((event.group, truth.weight)).unwrap_or_default();
                self.complete_groups += sum * sum;
            }
        }
    }

    /// Adds the events that the reader left out.
    pub fn add_left_out(&mut self, report: &Report) {
        let bad = report.inconsistent_events();
        self.count_skipped(Skip::BadKinematics, bad.count, bad.first_line);
    }

    fn count_skipped(&mut self, reason: Skip, count: u64, line: usize) {
        for (tally, candidate) in self.skipped.iter_mut().zip(Skip::ALL) {
            if candidate == reason {
                tally.add(count, line);
            }
        }
    }

    /// All skipped events.
    pub fn skipped_events(&self) -> u64 {
        self.skipped.iter().map(|tally| tally.count).sum()
    }

    /// The reasons that occurred, with their counts.
    pub fn reasons(&self) -> impl Iterator<Item = (Skip, Tally)> + '_ {
        Skip::ALL.into_iter().zip(self.skipped).filter(|(_, tally)| tally.count > 0)
    }

    /// Sum of the squared weights of the used events, where a group of events counts as one with the sum of their weights.
    pub fn squared_weight_sum(&self) -> f64 {
        self.complete_groups + self.open_group.map_or(0.0, |(_, sum)| sum * sum)
    }

    /// Effective number of events, `(sum w)² / sum w²` over groups; 0 without any weight.
    pub fn effective_events(&self) -> f64 {
        let squares = self.squared_weight_sum();
        if squares > 0.0 { self.weight_sum * self.weight_sum / squares } else { 0.0 }
    }

    /// Whether a template can be made of what was used.
    ///
    /// # Errors
    ///
    /// No event was used, all weights are 0, or the weights do not add up to something positive: a template per accepted event
    /// does not exist then.
    pub fn verdict(&self, file: &Path, channel: &str) -> Result<(), Problem> {
        if self.used == 0 {
            let reasons: Vec<String> =
                self.reasons().map(|(reason, tally)| format!("{}: {reason}", tally.count)).collect();
            let reasons = if reasons.is_empty() { "no event".to_owned() } else { reasons.join("; ") };
            let message = format!(
                "no event serves channel `{channel}` ({reasons}); the legs of the channel must be final \
             particles of the file"
            );
            return Err(Problem::of_file(file, message));
        }
        if self.absolute_weight_sum == 0.0 {
            let message = format!(
                "all {} events of channel `{channel}` have weight 0; name another weight, or mend the file",
                self.used
            );
            return Err(Problem::of_file(file, message));
        }
        if !(self.weight_sum > 0.0 && self.weight_sum.is_finite()) {
            let message = format!(
                "the weights of the {} events of channel `{channel}` add up to {}; a positive, finite sum is needed",
                self.used, self.weight_sum
            );
            return Err(Problem::of_file(file, message));
        }
        Ok(())
    }
}
