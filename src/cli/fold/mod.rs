//! `peakfold fold`: the main job.

mod text;

use super::outcome::{Failure, Outcome, say};
use crate::draw::{LabelledClosure, closure_figure, template_figures};
use crate::files::{LoadedStudy, NaturalOfRun, NuisanceRecord, RunContents, RunModels, RunRecord, Target, load_study};
use crate::process::Study;
use crate::results::{Results, fold_study};
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};
use std::io::{self, IsTerminal, Write};
use std::path::PathBuf;
use std::time::Instant;
use text::{Shown, Table};

/// Steps of the progress bar.
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
    let results = pool.install(|| fold_all(&study, args.quiet))?;
    let Results { templates, records, responses, nuisances, fitted, models, simulations, failures, notes, cpu_seconds } =
        results;

    let mut record = RunRecord::new(&study, inputs, &records);
    record.threads = threads;
    record.cpu_seconds = cpu_seconds;
    record.not_reached.extend(failures);
    record.model_notes.clone_from(&notes);
    record.nuisances = nuisances.iter().map(|nuisance| NuisanceRecord::new(&study.detector, nuisance)).collect();
    let mut further = Vec::new();
    match template_figures(&templates) {
        Ok(figures) => further.extend(figures.into_iter().map(|(path, svg)| (path, svg.into_bytes()))),
        Err(error) => record.not_reached.push(format!("figures: {error}")),
    }
    for channel in &study.channels {
        let closures: Vec<LabelledClosure<'_>> = models
            .iter()
            .filter(|own| own.channel == channel.name)
            .flat_map(|own| own.closures.iter().map(move |closed| (own, closed)))
            .map(|(own, (method, closure))| LabelledClosure { category: &own.category, method: method.name(), closure })
            .collect();
        if closures.iter().all(|closed| closed.closure.points.is_empty()) {
            continue;
        }
        match closure_figure(&channel.name, &closures) {
            Ok(svg) => further.push((format!("figures/{}-closure.svg", channel.name), svg.into_bytes())),
            Err(error) => record.not_reached.push(format!("closure figure of {}: {error}", channel.name)),
        }
    }
    record.wall_seconds = started.elapsed().as_secs_f64();
    let not_reached = record.not_reached.clone();
    let shown =
        Shown { table: Table::new(&templates), records, responses: responses.clone(), fitted: fitted.clone(), notes };
    let models = (!models.is_empty()).then(|| RunModels {
        natural: NaturalOfRun {
            width: study.resonance.width,
            natural: study.resonance.natural,
            falloff_power: study.resonance.falloff_power,
        },
        masses_gev: study.resonance.masses_gev.clone(),
        categories: models,
    });
    let committed =
        RunContents { record, templates, responses, fitted, simulations, models, further }.commit(target)?;

    // The run is written; a reader of the table who has gone away changes nothing.
    let _ = shown.write(out, &args.output);
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

fn fold_all(study: &Study, quiet: bool) -> Result<Results, Failure> {
    let bar = progress_bar(quiet);
    let results = fold_study(study, &|step| {
        bar.set_message(step.text);
        bar.set_position((step.fraction * STEPS as f64) as u64);
    });
    bar.finish_and_clear();
    results.map_err(|error| Failure::Input(error.to_string()))
}

fn progress_bar(quiet: bool) -> ProgressBar {
    let shown = !quiet && io::stderr().is_terminal();
    let target = if shown { ProgressDrawTarget::stderr() } else { ProgressDrawTarget::hidden() };
    let bar = ProgressBar::with_draw_target(Some(STEPS), target);
    // The template is fixed; should it ever be wrong, the plain bar serves.
    if let Ok(style) = ProgressStyle::with_template("{bar:30} {percent:>3} %  {eta} left  {msg}") {
        bar.set_style(style);
    }
    if shown {
        bar.enable_steady_tick(std::time::Duration::from_millis(200));
    }
    bar
}
