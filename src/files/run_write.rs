//! The files of a run directory: `templates.csv`, `shifts.csv`, `responses.csv`, `summary.csv`, `model.json`,
//! `closure.csv`, `anchors.csv`, `run.json`.

use super::anchor_table::{self, ANCHORS_FILE};
use super::closure_table::{self, CLOSURE_FILE};
use super::model_file::{self, MODEL_FILE, RunModels};
use super::number::{shortest, shortest_or_empty};
use super::response_table::{self, RESPONSES_FILE};
use super::run_record::{FoldSummary, RunRecord};
use super::run_target::{Committed, RUN_FILE, Staging, Target, TargetError};
use crate::lineshape::Parameter;
use crate::model::{Fitted, Simulation};
use crate::shift::LabelledResponse;
use crate::template::{LabelledTemplate, Measured, SIGMA_EFF_FRACTION};
use std::io::{self, Write};

/// `shift` of the templates that no uncertainty moves.
pub const NOMINAL: &str = "nominal";

pub(super) const TEMPLATES_FILE: &str = "templates.csv";
pub(super) const SHIFTS_FILE: &str = "shifts.csv";
pub(super) const SUMMARY_FILE: &str = "summary.csv";

pub(super) const TEMPLATE_COLUMNS: [&str; 10] =
    ["channel", "category", "mass_gev", "shift", "bin", "low_gev", "high_gev", "probability", "error", "list_error"];

const SUMMARY_COLUMNS: [&str; 35] = [
    "channel",
    "category",
    "mass_gev",
    "shift",
    "acceptance",
    "acceptance_error",
    "acceptance_list_error",
    "efficiency",
    "efficiency_error",
    "efficiency_list_error",
    "below_axis",
    "below_axis_error",
    "above_axis",
    "above_axis_error",
    "lost",
    "mean_gev",
    "mean_gev_error",
    "standard_deviation_gev",
    "standard_deviation_gev_error",
    "peak_gev",
    "peak_gev_error",
    "fwhm_gev",
    "fwhm_gev_error",
    "sigma_eff_gev",
    "sigma_eff_gev_error",
    "sigma_eff_fraction",
    "central_68_gev",
    "central_68_gev_error",
    "monotone",
    "points",
    "precision_reached",
    "reached",
    "events_used",
    "events_effective",
    "events_skipped",
];

/// Everything that a run writes.
#[derive(Clone, Debug)]
pub struct RunContents {
    /// What `run.json` says; `files` is filled in while writing.
    pub record: RunRecord,
    /// All templates; those with another `shift` than [`NOMINAL`] go to `shifts.csv`.
    pub templates: Vec<LabelledTemplate>,
    /// What the nuisances do to the templates.
    pub responses: Vec<LabelledResponse>,
    /// The shapes fitted to the templates of width 0.
    pub fitted: Vec<Fitted>,
    /// Simulated samples against the folded templates.
    pub simulations: Vec<Simulation>,
    /// The mass models; `None` where there is none.
    pub models: Option<RunModels>,
    /// Further files: path in the run (with `/`, e.g. `figures/two-photon.svg`) and contents.
    pub further: Vec<(String, Vec<u8>)>,
}

impl RunContents {
    /// Writes the run and puts it in its place.
    ///
    /// # Errors
    /// When the system refuses, or a template cannot be written as it is (a number that is not finite, unequal bins).
    /// Nothing is changed then.
    pub fn commit(self, target: Target) -> Result<Committed, TargetError> {
        target.commit(|staging| self.write(staging))
    }

    fn write(mut self, staging: &mut Staging<'_>) -> Result<(), TargetError> {
        let nominal = |template: &&LabelledTemplate| template.shift == NOMINAL;
        staging.write(TEMPLATES_FILE, |out| write_templates(out, self.templates.iter().filter(nominal)))?;
        if self.templates.iter().any(|template| template.shift != NOMINAL) {
            let shifted = |template: &&LabelledTemplate| template.shift != NOMINAL;
            staging.write(SHIFTS_FILE, |out| write_templates(out, self.templates.iter().filter(shifted)))?;
        }
        if !self.responses.is_empty() {
            staging.write(RESPONSES_FILE, |out| response_table::write(out, &self.responses))?;
        }
        staging.write(SUMMARY_FILE, |out| write_summary(out, &self.templates, &self.record.folds, &self.fitted))?;
        if !self.simulations.is_empty() {
            staging.write(ANCHORS_FILE, |out| anchor_table::write(out, &self.simulations))?;
        }
        if let Some(models) = &self.models {
            let text = model_file::to_json(models, &self.record.study)
                .map_err(|error| TargetError::from_json(MODEL_FILE, error))?;
            staging.write(MODEL_FILE, |out| out.write_all(&text))?;
            staging.write(CLOSURE_FILE, |out| closure_table::write(out, &models.categories))?;
        }
        for (name, bytes) in &self.further {
            staging.write(name, |out| out.write_all(bytes))?;
        }
        self.record.files = staging.files().to_vec();
        staging.write(RUN_FILE, |out| {
            serde_json::to_writer_pretty(&mut *out, &self.record)?;
            out.write_all(b"\n")
        })
    }
}

/// Writes templates as CSV, one row per bin.
///
/// # Errors
/// When writing fails or a number is not finite.
pub fn write_templates<'a>(out: impl Write, templates: impl Iterator<Item = &'a LabelledTemplate>) -> io::Result<()> {
    let mut csv = csv::Writer::from_writer(out);
    csv.write_record(TEMPLATE_COLUMNS)?;
    for labelled in templates {
        let t = &labelled.template;
        let bins = t.probability.len();
        if t.edges_gev.len() != bins + 1 || t.error.len() != bins || t.list_error.len() != bins {
            return Err(refuse(labelled, "edges, bins and errors differ in number"));
        }
        let mass = shortest(labelled.mass_gev);
        for bin in 0..bins {
            let numbers = [t.edges_gev[bin], t.edges_gev[bin + 1], t.probability[bin], t.error[bin], t.list_error[bin]];
            if numbers.iter().any(|number| !number.is_finite()) {
                return Err(refuse(labelled, &format!("bin {bin} is not a finite number")));
            }
            let [low, high, probability, error, list_error] = numbers.map(shortest);
            csv.write_record([
                &labelled.channel,
                &labelled.category,
                &mass,
                &labelled.shift,
                &bin.to_string(),
                &low,
                &high,
                &probability,
                &error,
                &list_error,
            ])?;
        }
    }
    csv.flush()
}

/// Parameters of the shapes, as they are named there, and their units.
const SHAPE_PARAMETERS: [(&str, &str); 10] = [
    ("bias", "_gev"),
    ("sigma", "_gev"),
    ("sigma_low", "_gev"),
    ("sigma_high", "_gev"),
    ("alpha_low", ""),
    ("n_low", ""),
    ("alpha_high", ""),
    ("n_high", ""),
    ("k_low", ""),
    ("k_high", ""),
];

/// What the misfit of the shape does.
const MISFIT_COLUMNS: [&str; 6] = [
    "shape_cdf_difference",
    "shape_converged",
    "mass_bias_mev",
    "mass_bias_left_out_mev",
    "mass_error_of_one_event_mev",
    "events_at_half_error",
];

fn shape_columns() -> Vec<String> {
    let parameters = SHAPE_PARAMETERS
        .iter()
        .flat_map(|(name, unit)| [format!("shape_{name}{unit}"), format!("shape_{name}{unit}_error")]);
    let misfit = MISFIT_COLUMNS.iter().map(|name| (*name).to_owned());
    std::iter::once("shape".to_owned()).chain(parameters).chain(misfit).collect()
}

/// The cells of [`shape_columns`]; empty where no shape was fitted.
fn shape_cells(fitted: Option<&Fitted>) -> Vec<String> {
    let Some(fitted) = fitted else { return vec![String::new(); shape_columns().len()] };
    let response = &fitted.response;
    let (parameters, errors) = (response.parameters(), response.errors());
    let mut cells = vec![response.shape.name().to_owned()];
    for (name, _) in SHAPE_PARAMETERS {
        let place = parameters.iter().position(|parameter: &Parameter| parameter.name == name);
        cells.push(shortest_or_empty(place.map(|k| parameters[k].value)));
        cells.push(shortest_or_empty(place.zip(errors.as_ref()).and_then(|(k, errors)| errors.get(k).copied())));
    }
    cells.push(shortest(response.largest_cdf_difference));
    cells.push(response.converged().to_string());
    let bias = fitted.bias.as_ref();
    cells.push(shortest_or_empty(bias.map(|b| b.bias_mev)));
    cells.push(shortest_or_empty(bias.and_then(|b| b.bias_left_out_mev)));
    cells.push(shortest_or_empty(bias.map(|b| b.error_of_one_event_mev)));
    let events = bias.map(|b| b.events_at_half_error()).filter(|events| events.is_finite());
    cells.push(shortest_or_empty(events));
    cells
}

fn write_summary(
    out: impl Write,
    templates: &[LabelledTemplate],
    folds: &[FoldSummary],
    fitted: &[Fitted],
) -> io::Result<()> {
    let mut csv = csv::Writer::from_writer(out);
    csv.write_record(SUMMARY_COLUMNS.iter().map(|name| (*name).to_owned()).chain(shape_columns()))?;
    for labelled in templates {
        let t = &labelled.template;
        let w = t.widths().map_err(|error| refuse(labelled, &error.to_string()))?;
        let efficiency = [t.efficiency, t.efficiency_error, t.efficiency_list_error];
        let plain = [t.acceptance, t.acceptance_error, t.acceptance_list_error, t.lost];
        if plain.iter().chain(&efficiency).any(|number| !number.is_finite()) {
            return Err(refuse(labelled, "acceptance, efficiency or loss is not a finite number"));
        }
        let mut row = vec![
            labelled.channel.clone(),
            labelled.category.clone(),
            shortest(labelled.mass_gev),
            labelled.shift.clone(),
            shortest(t.acceptance),
            shortest(t.acceptance_error),
            shortest(t.acceptance_list_error),
        ];
        row.extend(efficiency.map(shortest));
        let pair = |measured: Measured| [shortest_or_empty(measured.value), shortest_or_empty(measured.error)];
        row.extend([w.below_axis, w.above_axis].into_iter().flat_map(pair));
        row.push(shortest(t.lost));
        let lengths = [w.mean_gev, w.standard_deviation_gev, w.peak_gev, w.fwhm_gev, w.sigma_eff_gev];
        row.extend(lengths.into_iter().flat_map(pair));
        row.push(shortest(SIGMA_EFF_FRACTION));
        row.extend(pair(w.central_68_gev));
        row.push(w.monotone.to_string());
        let fold = folds.iter().find(|f| f.channel == labelled.channel && f.mass_gev == labelled.mass_gev);
        let skipped = |f: &FoldSummary| f.events_skipped.iter().map(|s| s.events).sum::<u64>();
        row.push(fold.map(|f| f.points.to_string()).unwrap_or_default());
        row.push(shortest_or_empty(fold.and_then(|f| f.precision_reached)));
        row.push(fold.map(|f| f.reached.to_string()).unwrap_or_default());
        row.push(fold.and_then(|f| f.events_used).map(|n| n.to_string()).unwrap_or_default());
        row.push(shortest_or_empty(fold.and_then(|f| f.events_effective)));
        let list = fold.filter(|f| f.events_used.is_some());
        row.push(list.map(|f| skipped(f).to_string()).unwrap_or_default());
        let own = fitted.iter().find(|fitted| {
            labelled.shift == NOMINAL
                && fitted.channel == labelled.channel
                && fitted.category == labelled.category
                && fitted.response.mass_gev == labelled.mass_gev
        });
        row.extend(shape_cells(own));
        csv.write_record(&row)?;
    }
    csv.flush()
}

fn refuse(labelled: &LabelledTemplate, reason: &str) -> io::Error {
    let LabelledTemplate { channel, category, mass_gev, shift, .. } = labelled;
    io::Error::new(
        io::ErrorKind::InvalidData,
        format!("the template of {channel}, {category}, {mass_gev} GeV, {shift} cannot be written: {reason}"),
    )
}
