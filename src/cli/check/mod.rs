//! `peakfold check`: what a study would compute, its problems and its cost.

mod channel;
mod cost;
mod detector;
mod events;
mod text;

use super::{Failure, Outcome};
use crate::files::load_study;
use crate::fold::{StudyEvents, read_events};
use crate::problem::Problem;
use crate::process::{Decay, EventSource, Natural, Production, Study, Width};
use clap::Args;
use std::fmt::Write as _;
use std::io::Write;
use std::path::{Path, PathBuf};
use text::{grouped, list, plural, wrapped};

/// Read a study, say what it would compute, and name every problem of its files
///
/// Nothing is written. The time that the study takes is estimated by folding each channel once, coarsely.
#[derive(Args, Clone, Debug)]
pub struct CheckArgs {
    /// The study file (TOML)
    pub study: PathBuf,
}

/// Runs the command; the description goes to `out`.
///
/// # Errors
/// All problems of the files at once, and channels that cannot be folded.
pub fn run(args: &CheckArgs, out: &mut impl Write) -> Outcome {
    let loaded = load_study(&args.study)?;
    let refused = |messages: Vec<String>| {
        let lines: Vec<String> =
            messages.iter().map(|m| Problem::of_file(&args.study, m.clone()).to_string()).collect();
        Failure::Input(lines.join("\n"))
    };
    let events = read_events(&loaded.study, &|_| ()).map_err(|error| Failure::Input(error.to_string()))?;
    if let Some(events) = &events {
        events::verdicts(&loaded.study, events).map_err(Failure::Input)?;
    }
    let costs = cost::measure(&loaded.study, events.as_ref()).map_err(refused)?;
    let report = describe(&args.study, &loaded.study, events.as_ref(), &costs, &loaded.warnings);
    out.write_all(report.as_bytes()).map_err(Failure::Output)
}

fn describe(
    path: &Path,
    study: &Study,
    events: Option<&StudyEvents>,
    costs: &[cost::Cost],
    warnings: &[Problem],
) -> String {
    let mut report = String::new();
    study_text(&mut report, path, study);
    detector::describe(&mut report, &study.detector);
    for channel in &study.channels {
        channel::describe(&mut report, channel, &study.detector, &study.resonance);
    }
    if let Some(events) = events {
        events::describe(&mut report, study, events);
    }
    cost::describe(&mut report, study, costs);
    if warnings.is_empty() {
        report.push_str("\nno problems\n");
    } else {
        let _ = writeln!(report, "\n{}", plural(warnings.len(), "warning"));
        for warning in warnings {
            wrapped(&mut report, "  ", "    ", &warning.to_string());
        }
    }
    report
}

fn study_text(report: &mut String, path: &Path, study: &Study) {
    let resonance = &study.resonance;
    wrapped(report, "study ", "  ", &format!("\"{}\" ({})", study.name, path.display()));
    let mut row = |label: &str, text: &str| wrapped(report, &format!("  {label:<12}"), &" ".repeat(14), text);
    row("masses", &format!("{} GeV", list(&resonance.masses_gev)));
    let natural = match resonance.natural {
        Natural::BreitWigner => "Breit-Wigner",
        Natural::Relativistic => "relativistic Breit-Wigner",
        Natural::RunningWidth => "Breit-Wigner of running width",
    };
    let falloff = match resonance.falloff_power {
        0.0 => String::new(),
        power => format!(", produced as (m/M)^-{power} across it"),
    };
    row(
        "width",
        &match resonance.width {
            Width::Gev(0.0) | Width::Relative(0.0) => "none: the shape is all detector".to_owned(),
            Width::Gev(width) => format!("{width} GeV, {natural}{falloff}"),
            Width::Relative(ratio) => format!("{ratio} times the mass, {natural}{falloff}"),
        },
    );
    row(
        "events",
        &match &resonance.source {
            EventSource::File(list) => match &list.weight {
                None => format!("read from {}", list.path.display()),
                Some(weight) => format!("read from {}, weight `{weight}`", list.path.display()),
            },
            EventSource::Generated(Production::Spectrum { pt_mean_gev, rapidity_sigma }) => {
                let pt = match *pt_mean_gev {
                    0.0 => "no pT".to_owned(),
                    mean => format!("exponential pT of mean {mean} GeV"),
                };
                let rapidity = match *rapidity_sigma {
                    0.0 => "rapidity 0".to_owned(),
                    sigma => format!("Gaussian rapidity of standard deviation {sigma}"),
                };
                format!("generated: {pt}, {rapidity}")
            }
            EventSource::Generated(Production::Table(cells)) => {
                format!("generated: pT and rapidity from a table of {}", plural(cells.len(), "cell"))
            }
        },
    );
    if study.channels.iter().any(|channel| matches!(channel.decay, Decay::Cascade(_))) {
        let v = &resonance.intermediate;
        row("cascade V", &format!("{} GeV with a width of {} GeV", v.mass_gev, v.width_gev));
    }
    row(
        "precision",
        &format!(
            "{} of the highest bin, RMS over bins; at most {} points per channel and mass",
            study.precision,
            grouped(study.max_points)
        ),
    );
    row("seed", &study.seed.to_string());
}
