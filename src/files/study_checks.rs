//! What a study's channels must satisfy together with its masses and its detector.

use super::channel_tables::PlacedChannel;
use super::source::Sheet;
use crate::detector::{Detector, EtaRange, Object};
use crate::process::{Cuts, Resonance, SimulatedSample, SimulatedUse};

/// Masses must exceed the sum of the legs' masses, and should lie on the axis.
pub(super) fn masses(sheet: &Sheet, masses_line: usize, resonance: &Resonance, channels: &[PlacedChannel]) {
    for PlacedChannel { channel, axis_line, path, .. } in channels {
        let sum: f64 = channel.decay.legs().iter().map(|leg| leg.mass_gev()).sum();
        if let Some(mass) = resonance.masses_gev.iter().find(|mass| **mass <= sum) {
            let message = format!(
                "found {mass}, which is not above the sum of the legs' masses of channel {:?}, {sum} GeV; raise it",
                channel.name
            );
            sheet.problem(masses_line, "resonance.masses_gev", message);
        }
        let outside: Vec<String> = resonance
            .masses_gev
            .iter()
            .filter(|mass| {
                let (low, high) = channel.axis.range_gev(**mass);
                **mass < low || **mass > high
            })
            .map(f64::to_string)
            .collect();
        if !outside.is_empty() {
            let message = format!("the axis does not contain the mass {} GeV", outside.join(", "));
            sheet.warn(*axis_line, &format!("{path}.mass_axis"), message);
        }
    }
}

/// A sample needs a folded template to be compared with, and a mass model takes it only for a resonance of no width.
pub(super) fn simulated(sheet: &Sheet, resonance: &Resonance, channels: &[PlacedChannel]) {
    let masses = &resonance.masses_gev;
    for PlacedChannel { channel, path, simulated_use_line, simulated_places, .. } in channels {
        let instead = channel.simulated.usage == SimulatedUse::Instead;
        let wide = masses.iter().any(|mass| resonance.width.at_gev(*mass) > 0.0);
        if instead && wide {
            let message = "found \"instead\" for a resonance with a natural width, must be \"beside\": the mass model \
                           is made of templates without one; set the width to 0 and give it to the prediction";
            sheet.problem(*simulated_use_line, &format!("{path}.simulated_use"), message);
        }
        let legs: f64 = channel.decay.legs().iter().map(|leg| leg.mass_gev()).sum();
        let (first, last) = (masses.first().copied(), masses.last().copied());
        for (sample, (line, key)) in channel.simulated.samples.iter().zip(simulated_places) {
            let SimulatedSample { mass_gev, generated, .. } = sample;
            let (low, high) = channel.axis.range_gev(*mass_gev);
            let message = if masses.contains(mass_gev) || masses.is_empty() || mass_gev.is_nan() {
                continue;
            } else if *mass_gev <= legs {
                format!("found {mass_gev}, must be above the sum of the legs' masses, {legs} GeV")
            } else if *mass_gev < low || *mass_gev > high {
                format!("found {mass_gev}, which lies outside of the mass axis, {low} to {high} GeV")
            } else if !instead {
                let list: Vec<String> = masses.iter().map(f64::to_string).collect();
                format!(
                    "found {mass_gev}, which is not among `masses_gev` ({}), so that there is no folded template to \
                     compare with; add it there, or set simulated_use = \"instead\"",
                    list.join(", ")
                )
            } else if generated.is_none() && (first > Some(*mass_gev) || last < Some(*mass_gev)) {
                format!(
                    "found {mass_gev}, which lies outside of the folded masses, so that its acceptance is not known; \
                     give `generated`, the sum of the generated weights"
                )
            } else {
                continue;
            };
            sheet.problem(*line, &format!("{key}.mass_gev"), message);
        }
    }
}

/// Every leg needs an entry of the detector somewhere in the acceptance of its channel; holes are worth a warning.
pub(super) fn coverage(sheet: &Sheet, detector: &Detector, channels: &[PlacedChannel]) {
    for PlacedChannel { channel, decay_line, path, decay_key, .. } in channels {
        let legs = channel.decay.legs();
        for object in Object::ALL.into_iter().filter(|object| legs.contains(object)) {
            let covered = detector.coverage(object);
            let key = format!("{path}.{decay_key}");
            let acceptance = acceptance(&channel.cuts, &covered);
            if !acceptance.iter().any(|range| covered.iter().any(|other| overlap(*range, *other))) {
                let message = match covered.as_slice() {
                    [] => format!(
                        "no entry of the detector measures the leg {:?}; add one to the detector file",
                        object.name()
                    ),
                    _ => format!(
                        "no entry of the detector measures the leg {:?} within the acceptance of the channel, |eta| {}; \
                         entries of it cover {}",
                        object.name(),
                        ranges(&acceptance),
                        ranges(&covered)
                    ),
                };
                sheet.problem(*decay_line, &key, message);
                continue;
            }
            let holes = without(&acceptance, &covered);
            if !holes.is_empty() {
                let message = format!(
                    "no entry of the detector measures the leg {:?} at |eta| {}, inside the acceptance of the channel; \
                     events with a leg there are lost",
                    object.name(),
                    ranges(&holes)
                );
                sheet.warn(*decay_line, &key, message);
            }
        }
    }
}

/// A number of legs that is reached without any efficiency is likely not meant.
pub(super) fn efficient_legs(sheet: &Sheet, detector: &Detector, channels: &[PlacedChannel]) {
    for PlacedChannel { channel, efficient_legs_line, path, .. } in channels {
        let always = channel.decay.legs().iter().filter(|object| !detector.has_efficiency(**object)).count();
        if channel.min_efficient_legs.is_some_and(|count| count <= always) {
            let message = format!(
                "has no effect: the detector gives no [[efficiency]] for {always} of the legs, which are always found"
            );
            sheet.warn(*efficient_legs_line, &format!("{path}.min_efficient_legs"), message);
        }
    }
}

/// The |eta| that a channel accepts: up to its cut, or from end to end of the detector's coverage, without the gap.
fn acceptance(cuts: &Cuts, covered: &[EtaRange]) -> Vec<EtaRange> {
    let whole = match (cuts.max_abs_eta, covered) {
        (Some(high), _) => EtaRange { low: 0.0, high },
        (None, [first, .., last]) => EtaRange { low: first.low, high: last.high },
        (None, [only]) => *only,
        (None, []) => return Vec::new(),
    };
    without(&[whole], cuts.gap_abs_eta.as_slice())
}

fn overlap(a: EtaRange, b: EtaRange) -> bool {
    a.low.max(b.low) < a.high.min(b.high)
}

/// What is left of some ranges when others are taken out.
pub(super) fn without(ranges: &[EtaRange], taken: &[EtaRange]) -> Vec<EtaRange> {
    let mut left = ranges.to_vec();
    for out in taken {
        left = left
            .iter()
            .flat_map(|range| {
                let below = EtaRange { low: range.low, high: range.high.min(out.low) };
                let above = EtaRange { low: range.low.max(out.high), high: range.high };
                [below, above]
            })
            .filter(|range| range.low < range.high)
            .collect();
    }
    left
}

pub(super) fn ranges(ranges: &[EtaRange]) -> String {
    let texts: Vec<String> = ranges.iter().map(|range| format!("{} to {}", range.low, range.high)).collect();
    if texts.is_empty() { "nowhere".to_owned() } else { texts.join(" and ") }
}
