//! A channel in words: its decay, cuts, categories and mass axis.

use super::text::{list, plural, wrapped};
use crate::detector::Object;
use crate::process::{Category, Channel, Cuts, Decay, ShapeChoice};
use std::fmt::Write as _;

/// Mass points in one row of the table of axes.
const COLUMNS: usize = 8;

/// Adds the description of a channel.
pub fn describe(report: &mut String, channel: &Channel, masses_gev: &[f64]) {
    report.push('\n');
    wrapped(report, "channel ", "  ", &format!("{}: {}", channel.name, decay(&channel.decay)));
    let mut row = |label: &str, text: &str| wrapped(report, &format!("  {label:<12}"), &" ".repeat(14), text);
    row("cuts", &cuts(&channel.cuts));
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
    for masses in masses_gev.chunks(COLUMNS) {
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

fn category(category: &Category) -> String {
    match category.max_abs_eta {
        Some(limit) => format!("{} (every |eta| below {limit})", category.name),
        None => category.name.clone(),
    }
}
