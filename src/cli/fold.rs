//! `peakfold fold`: the main job.

use super::outcome::{Failure, Outcome, say};
use super::table::{with_error, write_table};
use crate::draw::template_figures;
use crate::files::{LoadedStudy, NOMINAL, NuisanceRecord, RunContents, RunRecord, Target, load_study};
use crate::fold::{FoldRecord, Folded, Progress, fold_channel};
use crate::process::Study;
use crate::shift::{ChannelShifts, LabelledResponse, Nuisance, fold_shifts, nuisances_of};
use crate::template::{LabelledTemplate, Measured};
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};
use std::io::{self, IsTerminal, Write};
use std::path::{Path, PathBuf};
use std::sync::Mutex;
use std::sync::PoisonError;
use std::time::Instant;

/// Steps of the progress bar per channel and mass.
const STEPS: u64 = 1000;

/// Folds a study: templates, widths and figures of every channel, category and mass
#[derive(Clone, Debug, clap::Args)]
pub struct FoldArgs {
    /// The study to fold (TOML)
    pub study: PathBuf,
    /// The directory to write; replaced if it holds the result of the same inputs
    #[arg(short, long, value_name = "DIR")]
    pub output: PathBuf,
    /// Threads to use [default: one per processor]
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u16).range(1..=1024))]
    pub threads: Option<u16>,
    /// No progress on the screen
    #[arg(long)]
    pub quiet: bool,
    /// Replace DIR also when it holds the result of other inputs
    #[arg(long)]
    pub replace: bool,
}

/// Folds the study and writes the run; the table goes to `out`, progress and messages to stderr.
///
/// # Errors
/// Why nothing was written, or what was not reached in a run that was written.
pub fn run(args: &FoldArgs, out: &mut impl Write) -> Outcome {
    let started = Instant::now();
    let LoadedStudy { study, inputs, warnings } = load_study(&args.study)?;
    for warning in warnings {
        say(&format!("warning: {warning}"));
    }
    let target = Target::prepare(&args.output, args.replace, &inputs)?;
    let threads = args.threads.map_or(0, usize::from);
    let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().map_err(|error| {
        Failure::Input(format!("cannot start {threads} threads: {error}; ask for fewer with --threads"))
    })?;
    let threads = pool.current_num_threads();
    let Results { templates, records, responses, nuisances, shift_seconds } =
        pool.install(|| fold_all(&study, args.quiet))?;

    let mut record = RunRecord::new(&study, inputs, &records);
    record.threads = threads;
    record.cpu_seconds += shift_seconds;
    record.nuisances = nuisances.iter().map(|nuisance| NuisanceRecord::new(&study.detector, nuisance)).collect();
    let further = match template_figures(&templates) {
        Ok(figures) => figures.into_iter().map(|(path, svg)| (path, svg.into_bytes())).collect(),
        Err(error) => {
            record.not_reached.push(format!("figures: {error}"));
            Vec::new()
        }
    };
    record.wall_seconds = started.elapsed().as_secs_f64();
    let not_reached = record.not_reached.clone();
    let table = Table::new(&templates);
    let committed = RunContents { record, templates, responses: responses.clone(), further }.commit(target)?;

    // The run is written; a reader of the table who has gone away changes nothing.
    let _ = report(out, &table, &records, &responses, &args.output);
    if let Some(old) = committed.old_left_at {
        say(&format!("warning: the old result could not be deleted and lies in {}", old.display()));
    }
    if not_reached.is_empty() {
        return Ok(());
    }
    Err(Failure::Numerical(
        not_reached.iter().map(|line| format!("not reached: {line}")).collect::<Vec<_>>().join("\n"),
    ))
}

/// What the folds of a study give.
#[derive(Default)]
struct Results {
    templates: Vec<LabelledTemplate>,
    records: Vec<FoldRecord>,
    responses: Vec<LabelledResponse>,
    nuisances: Vec<Nuisance>,
    shift_seconds: f64,
}

/// Part of a fold's time that one shift takes, for the progress alone.
const SHIFT_PART: f64 = 0.3;

fn fold_all(study: &Study, quiet: bool) -> Result<Results, Failure> {
    let masses = &study.resonance.masses_gev;
    let bar = progress_bar((study.channels.len() * masses.len()) as u64, quiet);
    let mut results = Results::default();
    let done = fold_into(study, &bar, &mut results);
    bar.finish_and_clear();
    done.map(|()| results)
}

fn fold_into(study: &Study, bar: &ProgressBar, results: &mut Results) -> Result<(), Failure> {
    for (index, channel) in study.channels.iter().enumerate() {
        let failed = |error: &dyn std::fmt::Display| Failure::Input(format!("channel {}: {error}", channel.name));
        let nuisances = nuisances_of(study, index).map_err(|error| failed(&error))?;
        let nominal_part = 1.0 / (1.0 + SHIFT_PART * nuisances.len() as f64);
        for mass_gev in &study.resonance.masses_gev {
            bar.set_message(format!("{} at {mass_gev} GeV", channel.name));
            let failed = |error: &dyn std::fmt::Display| {
                Failure::Input(format!("channel {} at {mass_gev} GeV: {error}", channel.name))
            };
            let before = results.records.len() as u64 * STEPS;
            // Reports come from several threads and start as guesses; the bar only moves forward.
            let furthest = Mutex::new(before);
            let advance = |from: f64, part: f64, fraction: f64| {
                let here = before + ((from + part * fraction.clamp(0.0, 1.0)) * STEPS as f64) as u64;
                let mut furthest = furthest.lock().unwrap_or_else(PoisonError::into_inner);
                if here > *furthest {
                    *furthest = here;
                    bar.set_position(here);
                }
            };
            let folded = fold_channel(study, index, *mass_gev, &|p| advance(0.0, nominal_part, p.fraction))
                .map_err(|error| failed(&error))?;
            let shift_progress = |p: Progress| advance(nominal_part, 1.0 - nominal_part, p.fraction);
            let shifts = fold_shifts(study, index, &folded, &shift_progress).map_err(|error| failed(&error))?;
            let Folded { templates, record } = folded;
            let ChannelShifts { templates: shifted, responses, cpu_seconds } = shifts;
            results.templates.extend(templates.into_iter().chain(shifted));
            results.records.push(record);
            results.responses.extend(responses);
            results.shift_seconds += cpu_seconds;
            bar.set_position(results.records.len() as u64 * STEPS);
        }
        for nuisance in nuisances {
            if !results.nuisances.contains(&nuisance) {
                results.nuisances.push(nuisance);
            }
        }
    }
    Ok(())
}

fn progress_bar(folds: u64, quiet: bool) -> ProgressBar {
    let shown = !quiet && io::stderr().is_terminal();
    let target = if shown { ProgressDrawTarget::stderr() } else { ProgressDrawTarget::hidden() };
    let bar = ProgressBar::with_draw_target(Some(folds * STEPS), target);
    // The template is fixed; should it ever be wrong, the plain bar serves.
    if let Ok(style) = ProgressStyle::with_template("{bar:30} {percent:>3} %  {eta} left  {msg}") {
        bar.set_style(style);
    }
    if shown {
        bar.enable_steady_tick(std::time::Duration::from_millis(200));
    }
    bar
}

const HEADER: [&str; 8] =
    ["channel", "category", "mass [GeV]", "acceptance", EFFICIENCY, "peak [GeV]", "sigma_eff [GeV]", "FWHM [GeV]"];

/// A column that is shown only where some efficiency is not 1.
const EFFICIENCY: &str = "efficiency";

/// What is shown of the templates.
struct Table {
    header: Vec<&'static str>,
    rows: Vec<Vec<String>>,
}

impl Table {
    fn new(templates: &[LabelledTemplate]) -> Self {
        let mut table = Table { header: HEADER.to_vec(), rows: rows(templates) };
        let place = HEADER.iter().position(|title| *title == EFFICIENCY);
        let shown = templates.iter().any(|labelled| labelled.template.efficiency != 1.0);
        if let Some(column) = place.filter(|_| !shown) {
            table.header.remove(column);
            for row in &mut table.rows {
                row.remove(column);
            }
        }
        table
    }
}

fn rows(templates: &[LabelledTemplate]) -> Vec<Vec<String>> {
    let mut rows = Vec::new();
    for labelled in templates.iter().filter(|labelled| labelled.shift == NOMINAL) {
        let t = &labelled.template;
        let widths = t.widths().unwrap_or_default();
        let cell = |measured: Measured| with_error(measured.value, measured.error);
        // Both errors of an acceptance count: that of the points and that of the event list.
        let error = libm::hypot(t.acceptance_error, t.acceptance_list_error);
        let efficiency_error = libm::hypot(t.efficiency_error, t.efficiency_list_error);
        rows.push(vec![
            labelled.channel.clone(),
            labelled.category.clone(),
            labelled.mass_gev.to_string(),
            with_error(Some(t.acceptance), Some(error)),
            with_error(Some(t.efficiency), Some(efficiency_error)),
            cell(widths.peak_gev),
            cell(widths.sigma_eff_gev),
            cell(widths.fwhm_gev),
        ]);
    }
    rows
}

fn report(
    out: &mut impl Write,
    table: &Table,
    records: &[FoldRecord],
    responses: &[LabelledResponse],
    path: &Path,
) -> io::Result<()> {
    write_table(out, &table.header, &table.rows, 2)?;
    let list = if records.iter().any(|record| record.events_used.is_some()) {
        "; that of an acceptance or efficiency\nincludes the statistics of the event list"
    } else {
        ""
    };
    writeln!(
        out,
        "\nDigits in parentheses: numerical standard error of the last digits{list}; -: not on the mass axis."
    )?;
    for record in records {
        if let Some(used) = record.events_used {
            writeln!(out, "{} at {} GeV: {used} events used", record.channel, record.mass_gev)?;
            for (reason, events) in &record.events_skipped {
                writeln!(out, "  {events} events skipped: {reason}")?;
            }
        }
        for note in &record.notes {
            writeln!(out, "{} at {} GeV: {note}", record.channel, record.mass_gev)?;
        }
    }
    shift_lines(out, responses)?;
    writeln!(out, "Written to {}", path.display())?;
    out.flush()
}

/// How many shifts there are, the largest, and which were clipped or pruned.
fn shift_lines(out: &mut impl Write, responses: &[LabelledResponse]) -> io::Result<()> {
    let names = |keep: &dyn Fn(&&LabelledResponse) -> bool| -> Vec<String> {
        let mut names: Vec<String> = Vec::new();
        for labelled in responses.iter().filter(keep) {
            if !names.contains(&labelled.response.nuisance) {
                names.push(labelled.response.nuisance.clone());
            }
        }
        names
    };
    let all = names(&|_| true);
    if all.is_empty() {
        return Ok(());
    }
    writeln!(out, "{} calibration uncertainties folded up and down: shifts.csv, responses.csv", all.len())?;
    let kept = names(&|labelled| !labelled.pruned);
    let pruned: Vec<String> = all.iter().filter(|name| !kept.contains(name)).cloned().collect();
    if !pruned.is_empty() {
        writeln!(out, "  pruned in every template (below prune_shifts_below): {}", pruned.join(", "))?;
    }
    let clipped = names(&|labelled| !labelled.clipped.is_empty());
    if !clipped.is_empty() {
        writeln!(out, "  clipped at the end of what their numbers may be: {}", clipped.join(", "))?;
    }
    Ok(())
}
