//! A channel in words: its decay, cuts, categories and mass axis.

use super::text::{list, plural, wrapped};
use crate::detector::{Detector, Object};
use crate::process::{Ancestry, Category, Channel, Cuts, Decay, EventSource, Pairing, Pick, Resonance, ShapeChoice};
use std::fmt::Write as _;

/// Mass points in one row of the table of axes.
const COLUMNS: usize = 8;

/// Adds the description of a channel.
pub fn describe(report: &mut String, channel: &Channel, detector: &Detector, resonance: &Resonance) {
    report.push('\n');
    wrapped(report, "channel ", "  ", &format!("{}: {}", channel.name, decay(&channel.decay)));
    let mut row = |label: &str, text: &str| wrapped(report, &format!("  {label:<12}"), &" ".repeat(14), text);
    if matches!(resonance.source, EventSource::File(_)) {
        row("legs", &choice(channel, resonance));
    }
    row("cuts", &cuts(&channel.cuts));
    if let Some(text) = efficiency(channel, detector) {
        row("efficiency", &text);
    }
    row("categories", &channel.categories.iter().map(category).collect::<Vec<_>>().join("; "));
    let shape = match channel.shape {
        ShapeChoice::Gaussian => "Gaussian",
        ShapeChoice::CrystalBall => "Crystal Ball",
        ShapeChoice::DoubleCrystalBall => "double-sided Crystal Ball",
        ShapeChoice::DoubleCrystalBallTwoSigmas => "double-sided Crystal Ball with two core widths",
        ShapeChoice::GaussExp => "Gaussian with exponential tails",
    };
    row("shape", &format!("{shape}, for the fit of the templates"));
    row("mass axis", &format!("{}, in GeV:", plural(channel.axis.bins, "bin")));
    for masses in resonance.masses_gev.chunks(COLUMNS) {
        let mut line = |label: &str, value: &dyn Fn(f64) -> f64| {
            let _ = write!(report, "    {label:<12}");
            for mass in masses {
                // Edges are products such as 0.8 * 170: six digits tell all that the file said.
                let rounded = (value(*mass) * 1e6).round() / 1e6;
                let _ = write!(report, "{rounded:>10}");
            }
            report.push('\n');
        };
        line("mass point", &|mass| mass);
        line("from", &|mass| channel.axis.range_gev(mass).0);
        line("to", &|mass| channel.axis.range_gev(mass).1);
        line("bin width", &|mass| {
            let (low, high) = channel.axis.range_gev(mass);
            (high - low) / channel.axis.bins as f64
        });
    }
}

fn decay(decay: &Decay) -> String {
    let names = |objects: &[Object]| objects.iter().map(|object| object.name()).collect::<Vec<_>>().join(" ");
    match decay {
        Decay::Direct(legs) => format!("X -> {}", names(legs)),
        Decay::Cascade([first, second]) => {
            format!("X -> V V(*), V -> {}, V -> {}", names(first), names(second))
        }
    }
}

/// How legs are chosen from an event file.
fn choice(channel: &Channel, resonance: &Resonance) -> String {
    let cascade = matches!(channel.decay, Decay::Cascade(_));
    let pick = match (channel.choice.pick, cascade) {
        (Pick::Hardest, _) => "the hardest",
        (Pick::Nearest, false) => "those nearest to the mass point",
        (Pick::Nearest, true) => "those nearest to the mass of V",
    };
    let mut parts = vec![match channel.choice.ancestry {
        Ancestry::Prefer => format!("those that a resonance row decays to, else {pick}"),
        Ancestry::Ignore => pick.to_owned(),
        Ancestry::Require => format!("only those that a resonance row decays to, {pick} of several"),
    }];
    if cascade {
        let pairing = match channel.choice.pairing {
            Pairing::NearestPair => "the pair nearest to the mass of V first",
            Pairing::NearestSum => "the pairs with the smallest sum of distances from the mass of V",
        };
        parts.push(format!("paired as their rows are, else {pairing}"));
    }
    if channel.decay.legs().iter().any(|leg| matches!(leg, Object::Electron | Object::Muon)) {
        parts.push(match resonance.radiation {
            None => "bare leptons".to_owned(),
            Some(radiation) => {
                format!("leptons with the photons within a distance of {}", radiation.recombination_delta_r)
            }
        });
    }
    parts.join("; ")
}

fn cuts(cuts: &Cuts) -> String {
    let mut parts = vec![match cuts.max_abs_eta {
        Some(limit) => format!("|eta| below {limit}"),
        None => "|eta| within the detector's coverage".to_owned(),
    }];
    if let Some(gap) = &cuts.gap_abs_eta {
        parts.push(format!("true |eta| outside {} to {}", gap.low, gap.high));
    }
    if !cuts.min_pt_gev.is_empty() {
        parts.push(format!("pT in falling order above {} GeV", list(&cuts.min_pt_gev)));
    }
    if !cuts.min_pt_over_mass.is_empty() {
        parts.push(format!("pT in falling order above {} of the mass", list(&cuts.min_pt_over_mass)));
    }
    parts.join("; ")
}

/// How many legs must be found; `None` where the detector tells no efficiency of them.
fn efficiency(channel: &Channel, detector: &Detector) -> Option<String> {
    let legs = channel.decay.legs();
    let (told, always): (Vec<Object>, Vec<Object>) = legs.iter().partition(|object| detector.has_efficiency(**object));
    if told.is_empty() {
        return None;
    }
    let wanted = match channel.min_efficient_legs {
        Some(count) if count < legs.len() => format!("at least {count} of the {} legs must be found", legs.len()),
        _ => "every leg must be found".to_owned(),
    };
    let always: Vec<&str> =
        Object::ALL.into_iter().filter(|object| always.contains(object)).map(Object::name).collect();
    let without = if always.is_empty() { String::new() } else { format!("; always found: {}", always.join(", ")) };
    Some(format!("{wanted}{without}"))
}

fn category(category: &Category) -> String {
    match category.max_abs_eta {
        Some(limit) => format!("{} (every |eta| below {limit})", category.name),
        None => category.name.clone(),
    }
}
