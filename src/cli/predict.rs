//! `peakfold predict`: a new mass point from a finished run.

use super::outcome::{Failure, Outcome, say};
use super::table::{with_error, write_table};
use crate::files::{LoadedModels, NOMINAL, RunContents, RunRecord, Target, load_models, shortest};
use crate::lineshape;
use crate::model::{CategoryModel, InterpolationError, Method, NaturalMass, Predicted, wide_template};
use crate::process::{Natural, Width};
use crate::template::{LabelledTemplate, Measured, Template};
use clap::Args;
use std::io::{self, Write};
use std::path::PathBuf;
use std::time::Instant;

/// Predict a new mass point from the mass model of a finished run
///
/// Templates and shapes at any mass between those of the run, in milliseconds. The study's own natural width is used unless
/// another one is given.
#[derive(Args, Clone, Debug)]
pub struct PredictArgs {
    /// The directory of a run of two or more masses
    pub run: PathBuf,
    /// The resonance mass in GeV
    #[arg(long, value_name = "GEV", allow_negative_numbers = true)]
    pub mass: f64,
    /// Natural width in GeV
    #[arg(long, value_name = "GEV", conflicts_with = "relative_width", allow_negative_numbers = true)]
    pub width: Option<f64>,
    /// Natural width in units of the mass
    #[arg(long, value_name = "RATIO", allow_negative_numbers = true)]
    pub relative_width: Option<f64>,
    /// How templates between the masses of the run are made; a resonance with a width takes the shape
    #[arg(long, value_name = "METHOD", default_value = "corrected", value_parser = ["corrected", "shape", "quantiles"])]
    pub method: String,
    /// Allow masses outside those of the run, and mark them
    #[arg(long)]
    pub extrapolate: bool,
    /// The directory to write; replaced if it holds a prediction of the same run
    #[arg(short, long, value_name = "DIR")]
    pub output: PathBuf,
    /// Replace DIR also when it holds something else that peakfold wrote
    #[arg(long)]
    pub replace: bool,
}

/// What is predicted of one category.
struct Row {
    channel: String,
    category: String,
    predicted: Predicted,
    template: Template,
    interpolation: Option<InterpolationError>,
    marked: bool,
}

/// Predicts, and writes `templates.csv`, `summary.csv` and `run.json`.
///
/// # Errors
/// A run without a model, a mass or width that it does not serve, or a directory that cannot be written.
pub fn run(args: &PredictArgs, out: &mut impl Write) -> Outcome {
    let started = Instant::now();
    let method = Method::from_name(&args.method).unwrap_or(Method::Corrected);
    let LoadedModels { record, inputs, models } = load_models(&args.run)?;
    let width = match (args.width, args.relative_width) {
        (Some(width), _) => Width::Gev(width),
        (None, Some(ratio)) => Width::Relative(ratio),
        (None, None) => models.natural.width,
    };
    let width_gev = width.at_gev(args.mass);
    if !(width_gev >= 0.0 && width_gev.is_finite()) {
        return Err(Failure::Input(format!("the width is {width_gev} GeV; it must be a finite number, 0 or more")));
    }
    let target = Target::prepare(&args.output, args.replace, &inputs)?;
    let mut rows = Vec::new();
    for own in &models.categories {
        let row = predict(own, args, method, width_gev, models.natural.natural, models.natural.falloff_power);
        rows.push(row.map_err(|error| Failure::Input(format!("{}, {}: {error}", own.channel, own.category)))?);
    }
    let templates: Vec<LabelledTemplate> = rows
        .iter()
        .map(|row| LabelledTemplate {
            channel: row.channel.clone(),
            category: row.category.clone(),
            mass_gev: args.mass,
            shift: NOMINAL.to_owned(),
            template: row.template.clone(),
        })
        .collect();
    let notes = notes(args, &rows, width_gev, method);
    let mut own = RunRecord::of_prediction(&record, inputs);
    own.model_notes.clone_from(&notes);
    own.wall_seconds = started.elapsed().as_secs_f64();
    let contents = RunContents {
        record: own,
        templates,
        responses: Vec::new(),
        fitted: Vec::new(),
        simulations: Vec::new(),
        models: None,
        further: vec![("shapes.csv".to_owned(), shapes(&rows, args.mass).map_err(Failure::Output)?)],
    };
    let committed = contents.commit(target)?;
    let _ = report(out, args, &rows, &notes);
    if let Some(old) = committed.old_left_at {
        say(&format!("warning: the old result could not be deleted and lies in {}", old.display()));
    }
    Ok(())
}

/// Predicts one category.
fn predict(
    own: &CategoryModel,
    args: &PredictArgs,
    method: Method,
    width_gev: f64,
    natural: Natural,
    falloff_power: f64,
) -> Result<Row, String> {
    let text = |error: &dyn std::fmt::Display| error.to_string();
    if width_gev == 0.0 {
        let prediction = own.predict(args.mass, method, args.extrapolate).map_err(|error| text(&error))?;
        let predicted = prediction.predicted;
        let mut template = prediction.template.into_template(predicted.acceptance, predicted.acceptance_error);
        template.efficiency = predicted.efficiency;
        template.efficiency_error = predicted.efficiency_error;
        return Ok(Row {
            channel: own.channel.clone(),
            category: own.category.clone(),
            marked: predicted.extrapolated,
            predicted,
            template,
            interpolation: own.interpolation_error(method),
        });
    }
    let shape = natural.shape_at(args.mass, width_gev).map_err(|error| text(&error))?;
    let truth = NaturalMass { natural: shape, falloff_power, threshold_gev: own.threshold_gev };
    let predicted = own.model.at(args.mass, args.extrapolate).map_err(|error| text(&error))?;
    let edges = own.axis.edges_gev(args.mass);
    let wide = wide_template(&own.model, &truth, &edges, args.extrapolate).map_err(|error| text(&error))?;
    let marked = predicted.extrapolated || wide.template.extrapolated;
    let mut template = wide.template.into_template(wide.acceptance, wide.acceptance_error);
    template.efficiency = predicted.efficiency;
    template.efficiency_error = predicted.efficiency_error;
    Ok(Row {
        channel: own.channel.clone(),
        category: own.category.clone(),
        predicted,
        template,
        interpolation: own.interpolation_error(Method::Shape),
        marked,
    })
}

/// What the user should know of the prediction.
fn notes(args: &PredictArgs, rows: &[Row], width_gev: f64, method: Method) -> Vec<String> {
    let mut notes = Vec::new();
    let how = if width_gev == 0.0 {
        format!("no natural width, method {}", method.name())
    } else {
        format!("natural width {} GeV over the shape of the mass model", shortest(width_gev))
    };
    notes.push(format!("predicted at {} GeV: {how}", shortest(args.mass)));
    let marked: Vec<String> =
        rows.iter().filter(|row| row.marked).map(|row| format!("{}, {}", row.channel, row.category)).collect();
    if !marked.is_empty() {
        notes.push(format!("extrapolated beyond the masses of the run: {}", marked.join("; ")));
    }
    notes
}

/// `shapes.csv`: parameters of the shape (of reconstructed mass less resonance mass, without natural width) and the yield
/// factors, with numerical errors and the errors of interpolating between masses.
fn shapes(rows: &[Row], mass_gev: f64) -> io::Result<Vec<u8>> {
    let mut csv = csv::Writer::from_writer(Vec::new());
    csv.write_record([
        "channel",
        "category",
        "mass_gev",
        "quantity",
        "value",
        "error",
        "interpolation_error",
        "extrapolated",
    ])?;
    for row in rows {
        let mut put = |quantity: &str, value: f64, error: f64, interpolation: Option<f64>| {
            csv.write_record([
                &row.channel,
                &row.category,
                &shortest(mass_gev),
                quantity,
                &shortest(value),
                &shortest(error),
                &interpolation.map(shortest).unwrap_or_default(),
                &row.marked.to_string(),
            ])
        };
        let parameters = lineshape::Shape::parameters(&row.predicted.resolution);
        for (parameter, error) in parameters.iter().zip(row.predicted.errors()) {
            let unit = if parameter.name == "bias" || parameter.name.starts_with("sigma") { "_gev" } else { "" };
            put(&format!("{}{unit}", parameter.name), parameter.value, error, None)?;
        }
        let i = row.interpolation;
        let widths = row.template.widths().unwrap_or_default();
        let (peak, width) = (widths.peak_gev.value, widths.sigma_eff_gev.value);
        if let (Some(peak), Some(width)) = (peak, width) {
            put("peak_gev", peak, 0.0, i.map(|i| i.peak_in_sigma_eff * width))?;
            put("sigma_eff_gev", width, 0.0, i.map(|i| i.sigma_eff_relative * width))?;
        }
        let (a, e) = (row.template.acceptance, row.template.acceptance_error);
        put("acceptance", a, e, i.map(|i| i.acceptance_relative * a))?;
        put("efficiency", row.predicted.efficiency, row.predicted.efficiency_error, None)?;
        put("cdf", 0.0, 0.0, i.map(|i| i.cdf))?;
    }
    csv.into_inner().map_err(|error| io::Error::other(error.to_string()))
}

fn report(out: &mut impl Write, args: &PredictArgs, rows: &[Row], notes: &[String]) -> io::Result<()> {
    let cells = rows.iter().map(|row| {
        let widths = row.template.widths().unwrap_or_default();
        let i = row.interpolation;
        let width = widths.sigma_eff_gev.value;
        let cell = |measured: Measured, error: Option<f64>| with_error(measured.value, error);
        let acceptance = row.template.acceptance;
        vec![
            row.channel.clone(),
            row.category.clone(),
            args.mass.to_string(),
            with_error(Some(acceptance), i.map(|i| i.acceptance_relative * acceptance)),
            cell(widths.peak_gev, i.zip(width).map(|(i, width)| i.peak_in_sigma_eff * width)),
            cell(widths.sigma_eff_gev, i.zip(width).map(|(i, width)| i.sigma_eff_relative * width)),
            cell(widths.fwhm_gev, None),
            if row.marked { "extrapolated".to_owned() } else { String::new() },
        ]
    });
    let header = ["channel", "category", "mass [GeV]", "acceptance", "peak [GeV]", "sigma_eff [GeV]", "FWHM [GeV]", ""];
    write_table(out, &header, &cells.collect::<Vec<_>>(), 2)?;
    writeln!(
        out,
        "\nDigits in parentheses: error of interpolating, RMS over the masses of the run left out one by one."
    )?;
    for note in notes {
        writeln!(out, "{note}")?;
    }
    writeln!(out, "Written to {}", args.output.display())?;
    out.flush()
}
