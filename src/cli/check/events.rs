//! What a file of events holds for each channel.

use super::text::{grouped, wrapped};
use crate::fold::StudyEvents;
use crate::process::{EventSource, Study};
use std::fmt::Write as _;

/// Whether every channel has events of which a template can be made.
///
/// # Errors
/// What is wrong, a line for each channel.
pub fn verdicts(study: &Study, events: &StudyEvents) -> Result<(), String> {
    let EventSource::File(list) = &study.resonance.source else { return Ok(()) };
    let pairs = study.channels.iter().zip(&events.channels);
    let problems: Vec<String> = pairs
        .filter_map(|(channel, found)| found.selection.verdict(&list.path, &channel.name).err())
        .map(|problem| problem.to_string())
        .collect();
    if problems.is_empty() { Ok(()) } else { Err(problems.join("\n")) }
}

/// Adds the counts of each channel.
pub fn describe(report: &mut String, study: &Study, events: &StudyEvents) {
    let width = study.channels.iter().map(|c| c.name.chars().count()).max().unwrap_or(0).clamp(7, 40);
    let _ = writeln!(report, "\nevents, of {} in the file; true mass in GeV", grouped(events.report.events));
    let _ = writeln!(
        report,
        "  {:<width$}{:>12}{:>12}{:>14}{:>12}{:>11}{:>11}",
        "channel", "used", "skipped", "weight sum", "effective", "mass from", "to"
    );
    for (channel, found) in study.channels.iter().zip(&events.channels) {
        let selection = &found.selection;
        let (low, high) = selection.mass_range_gev.unwrap_or_default();
        let _ = writeln!(
            report,
            "  {:<width$}{:>12}{:>12}{:>14}{:>12}{:>11}{:>11}",
            channel.name,
            grouped(selection.used),
            grouped(selection.skipped_events()),
            six_digits(selection.weight_sum),
            six_digits(selection.effective_events()),
            six_digits(low),
            six_digits(high)
        );
    }
    for (channel, found) in study.channels.iter().zip(&events.channels) {
        let selection = &found.selection;
        let mut row = |text: &str| wrapped(report, "  ", "    ", &format!("{}: {text}", channel.name));
        if selection.negative_weights > 0 {
            row(&format!("{} of the events used have a negative weight", grouped(selection.negative_weights)));
        }
        for (reason, tally) in selection.reasons() {
            row(&format!("{} skipped, {reason} (first at line {})", grouped(tally.count), tally.first_line));
        }
    }
    for warning in events.report.warnings() {
        wrapped(report, "  ", "    ", &format!("note: {warning}"));
    }
}

/// A number to six significant digits.
fn six_digits(value: f64) -> String {
    // Written and read again, so that no zeros trail.
    format!("{value:.5e}").parse::<f64>().map_or_else(|_| value.to_string(), |rounded| rounded.to_string())
}
