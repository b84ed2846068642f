//! `model.json`: the mass model of a run, from which new mass points are predicted.

use super::run_record::PROGRAM;
use super::run_target::{RUN_FILE, digest_of};
use super::{FileDigest, RunRecord};
use crate::fit::Stop;
use crate::model::{
    Basis, CategoryModel, Closure, ClosurePoint, Deviation, MassModel, MassScale, Method, SmoothCurve, YieldFactor,
    parameter_link,
};
use crate::problem::{Problem, Problems};
use crate::process::{MassAxis, Natural, ShapeChoice, Width};
use crate::template::Template;
use nalgebra::DMatrix;
use serde::{Deserialize, Serialize};
use std::fs;
use std::path::Path;

pub(super) const MODEL_FILE: &str = "model.json";

/// Version of the layout of the file.
const LAYOUT: u32 = 1;

const DESCRIPTION: &str = "Shapes of reconstructed mass less resonance mass, for a resonance of no width, as functions of its mass M in GeV. \
Each parameter is link(sum of coefficient times function of M): Chebyshev polynomials T_0 to T_order of \
u = (2 M - low - high)/(high - low), then, with a hinge, max(0, u - u_knot). Links: bias = M eta; sigma = M exp(eta); \
alpha and k = exp(eta); n = 1 + exp(eta); acceptance and efficiency = exp(eta). Covariances are numerical ones, of the coefficients \
in their order. Templates are those of width 0 that the model was made of: probability per accepted event.";

/// What a run knows of the natural width, which a prediction starts from.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct NaturalOfRun {
    /// Width of the study.
    pub width: Width,
    /// Natural shape.
    pub natural: Natural,
    /// Production falls as (m/M)^-falloff_power.
    pub falloff_power: f64,
}

/// The models of a run.
#[derive(Clone, Debug, PartialEq)]
pub struct RunModels {
    /// Natural width of the study.
    pub natural: NaturalOfRun,
    /// The mass points of the study, in GeV.
    pub masses_gev: Vec<f64>,
    /// One model per channel and category.
    pub categories: Vec<CategoryModel>,
}

#[derive(Serialize, Deserialize)]
struct FileRecord {
    program: String,
    version: String,
    layout: u32,
    description: String,
    study: String,
    units: String,
    natural: NaturalRecord,
    masses_gev: Vec<f64>,
    categories: Vec<CategoryRecord>,
}

#[derive(Serialize, Deserialize)]
struct NaturalRecord {
    shape: String,
    width_gev: Option<f64>,
    width_relative: Option<f64>,
    falloff_power: f64,
}

#[derive(Serialize, Deserialize)]
struct CategoryRecord {
    channel: String,
    category: String,
    axis: AxisRecord,
    threshold_gev: f64,
    shape: String,
    converged: bool,
    masses_gev: Vec<f64>,
    low_gev: f64,
    high_gev: f64,
    knot_gev: Option<f64>,
    curves: Vec<CurveRecord>,
    covariance: Vec<Vec<f64>>,
    acceptance: FactorRecord,
    efficiency: FactorRecord,
    closure: Vec<ClosureRecord>,
    templates: Vec<TemplateRecord>,
}

#[derive(Serialize, Deserialize)]
struct AxisRecord {
    low: f64,
    high: f64,
    bins: usize,
    relative: bool,
}

#[derive(Serialize, Deserialize)]
struct CurveRecord {
    name: String,
    order: usize,
    hinge: bool,
    coefficients: Vec<f64>,
}

#[derive(Serialize, Deserialize)]
struct FactorRecord {
    curve: CurveRecord,
    covariance: Vec<Vec<f64>>,
}

#[derive(Serialize, Deserialize)]
struct ClosureRecord {
    method: String,
    points: Vec<ClosurePointRecord>,
}

#[derive(Serialize, Deserialize)]
struct ClosurePointRecord {
    mass_gev: f64,
    total: DeviationRecord,
    interpolation: DeviationRecord,
    acceptance_ratio: f64,
}

#[derive(Serialize, Deserialize)]
struct DeviationRecord {
    peak_in_sigma_eff: Option<f64>,
    sigma_eff_ratio: Option<f64>,
    largest_cdf_difference: f64,
}

#[derive(Serialize, Deserialize)]
struct TemplateRecord {
    below_axis: f64,
    above_axis: f64,
    acceptance: f64,
    acceptance_error: f64,
    efficiency: f64,
    efficiency_error: f64,
    probability: Vec<f64>,
    error: Vec<f64>,
}

/// The text of `model.json`.
pub(super) fn to_json(models: &RunModels, study: &str) -> Result<Vec<u8>, serde_json::Error> {
    let (width_gev, width_relative) = match models.natural.width {
        Width::Gev(width) => (Some(width), None),
        Width::Relative(ratio) => (None, Some(ratio)),
    };
    let record = FileRecord {
        program: PROGRAM.to_owned(),
        version: env!("CARGO_PKG_VERSION").to_owned(),
        layout: LAYOUT,
        description: DESCRIPTION.to_owned(),
        study: study.to_owned(),
        units: "GeV".to_owned(),
        natural: NaturalRecord {
            shape: models.natural.natural.name().to_owned(),
            width_gev,
            width_relative,
            falloff_power: models.natural.falloff_power,
        },
        masses_gev: models.masses_gev.clone(),
        categories: models.categories.iter().map(category_record).collect(),
    };
    let mut text = serde_json::to_vec(&record)?;
    text.push(b'\n');
    Ok(text)
}

fn rows(matrix: &DMatrix<f64>) -> Vec<Vec<f64>> {
    matrix.row_iter().map(|row| row.iter().copied().collect()).collect()
}

fn curve_record(curve: &SmoothCurve) -> CurveRecord {
    CurveRecord {
        name: curve.name.clone(),
        order: curve.basis.order,
        hinge: curve.basis.hinge,
        coefficients: curve.coefficients.clone(),
    }
}

fn factor_record(factor: &YieldFactor) -> FactorRecord {
    FactorRecord { curve: curve_record(&factor.curve), covariance: rows(&factor.covariance) }
}

fn deviation_record(deviation: &Deviation) -> DeviationRecord {
    DeviationRecord {
        peak_in_sigma_eff: deviation.peak_in_sigma_eff,
        sigma_eff_ratio: deviation.sigma_eff_ratio,
        largest_cdf_difference: deviation.largest_cdf_difference,
    }
}

fn category_record(own: &CategoryModel) -> CategoryRecord {
    let model = &own.model;
    CategoryRecord {
        channel: own.channel.clone(),
        category: own.category.clone(),
        axis: AxisRecord { low: own.axis.low, high: own.axis.high, bins: own.axis.bins, relative: own.axis.relative },
        threshold_gev: own.threshold_gev,
        shape: model.shape.name().to_owned(),
        converged: model.converged(),
        masses_gev: model.masses_gev.clone(),
        low_gev: model.scale.low_gev,
        high_gev: model.scale.high_gev,
        knot_gev: model.scale.knot_gev,
        curves: model.curves.iter().map(curve_record).collect(),
        covariance: rows(&model.covariance),
        acceptance: factor_record(&model.acceptance),
        efficiency: factor_record(&model.efficiency),
        closure: own
            .closures
            .iter()
            .map(|(method, closure)| ClosureRecord {
                method: method.name().to_owned(),
                points: closure
                    .points
                    .iter()
                    .map(|point| ClosurePointRecord {
                        mass_gev: point.mass_gev,
                        total: deviation_record(&point.total),
                        interpolation: deviation_record(&point.interpolation),
                        acceptance_ratio: point.acceptance_ratio,
                    })
                    .collect(),
            })
            .collect(),
        templates: own
            .templates
            .iter()
            .map(|t| TemplateRecord {
                below_axis: t.below_axis,
                above_axis: t.above_axis,
                acceptance: t.acceptance,
                acceptance_error: t.acceptance_error,
                efficiency: t.efficiency,
                efficiency_error: t.efficiency_error,
                probability: t.probability.clone(),
                error: t.error.clone(),
            })
            .collect(),
    }
}

/// A model with the record of its run.
#[derive(Clone, Debug, PartialEq)]
pub struct LoadedModels {
    /// The record of the run.
    pub record: RunRecord,
    /// Digests of `run.json` and `model.json`.
    pub inputs: Vec<FileDigest>,
    /// The models.
    pub models: RunModels,
}

/// Reads the mass model of a run, and checks that it is the one that was written, by this version.
///
/// # Errors
/// When the directory holds no run, or none with a model; when a file was changed since; when another version wrote it.
pub fn load_models(directory: &Path) -> Result<LoadedModels, Problems> {
    let run = directory.join(RUN_FILE);
    let bytes = read(&run)?;
    let record: RunRecord = serde_json::from_slice(&bytes).map_err(|error| {
        Problem::at_line(&run, error.line(), format!("is not the record of a run: {error}; fold the study again"))
    })?;
    let version = env!("CARGO_PKG_VERSION");
    if record.program != PROGRAM || record.version != version {
        let message = format!(
            "was written by {} {}, this is {PROGRAM} {version}; fold the study again",
            record.program, record.version
        );
        return Err(Problem::of_file(&run, message).with_key("version").into());
    }
    let file = directory.join(MODEL_FILE);
    let Some(written) = record.files.iter().find(|digest| digest.path == MODEL_FILE) else {
        let why = if record.masses() < 2 {
            "the run has one mass point, and a model needs two; add masses to `masses_gev` and fold again".to_owned()
        } else {
            format!("the run made no mass model; its {RUN_FILE} says why")
        };
        return Err(Problem::of_file(directory, why).into());
    };
    let text = read(&file)?;
    if digest_of(&text) != written.sha256 {
        let message = format!("was changed after the run wrote it (its digest differs from {RUN_FILE}); fold again");
        return Err(Problem::of_file(&file, message).into());
    }
    let inputs = vec![
        FileDigest { path: run.display().to_string(), sha256: digest_of(&bytes) },
        FileDigest { path: file.display().to_string(), sha256: written.sha256.clone() },
    ];
    let own: FileRecord = serde_json::from_slice(&text)
        .map_err(|error| Problem::at_line(&file, error.line(), format!("is not a mass model: {error}; fold again")))?;
    let wrong = |what: String| Problem::of_file(&file, format!("{what}; fold the study again"));
    if own.layout != LAYOUT {
        return Err(wrong(format!("has the layout {}, this version reads {LAYOUT}", own.layout)).into());
    }
    let models = models(own).map_err(wrong)?;
    Ok(LoadedModels { record, inputs, models })
}

fn read(file: &Path) -> Result<Vec<u8>, Problem> {
    fs::read(file).map_err(|error| {
        Problem::of_file(file, format!("cannot be read: {error}; give a directory that `peakfold fold` wrote"))
    })
}

fn models(record: FileRecord) -> Result<RunModels, String> {
    let natural = Natural::from_name(&record.natural.shape)
        .ok_or_else(|| format!("names an unknown natural shape {:?}", record.natural.shape))?;
    let width = match (record.natural.width_gev, record.natural.width_relative) {
        (Some(width), None) => Width::Gev(width),
        (None, Some(ratio)) => Width::Relative(ratio),
        _ => return Err("gives no width, or two".to_owned()),
    };
    let categories = record.categories.into_iter().map(category).collect::<Result<Vec<_>, _>>()?;
    Ok(RunModels {
        natural: NaturalOfRun { width, natural, falloff_power: record.natural.falloff_power },
        masses_gev: record.masses_gev,
        categories,
    })
}

fn matrix(rows: &[Vec<f64>]) -> Result<DMatrix<f64>, String> {
    let columns = rows.first().map_or(0, Vec::len);
    if rows.iter().any(|row| row.len() != columns) {
        return Err("has a covariance with rows of different length".to_owned());
    }
    let matrix = DMatrix::from_fn(rows.len(), columns, |i, j| rows[i][j]);
    positive(&matrix)?;
    Ok(matrix)
}

/// Rounding of eigenvalues, relative to the largest.
const ROUNDING: f64 = 1e-9;

/// Checks that a symmetric matrix has no negative eigenvalue, in units in which its diagonal is 1.
fn positive(matrix: &DMatrix<f64>) -> Result<(), String> {
    if matrix.nrows() != matrix.ncols() || matrix.iter().any(|entry| !entry.is_finite()) {
        return Err("has a covariance that is not square and finite".to_owned());
    }
    let scale = matrix.diagonal().map(|v| if v > 0.0 { 1.0 / v.sqrt() } else { 0.0 });
    let scaled = DMatrix::from_fn(matrix.nrows(), matrix.ncols(), |i, j| matrix[(i, j)] * scale[i] * scale[j]);
    let lowest = nalgebra::SymmetricEigen::new(scaled).eigenvalues.iter().copied().fold(0.0, f64::min);
    if lowest < -ROUNDING * matrix.nrows().max(1) as f64 {
        return Err(format!("has a covariance that is not positive semi-definite (eigenvalue {lowest:e})"));
    }
    Ok(())
}

fn curve(record: CurveRecord, link: crate::fit::Link) -> SmoothCurve {
    SmoothCurve {
        link,
        name: record.name,
        basis: Basis { order: record.order, hinge: record.hinge },
        coefficients: record.coefficients,
    }
}

fn factor(record: FactorRecord) -> Result<YieldFactor, String> {
    let covariance = matrix(&record.covariance)?;
    Ok(YieldFactor { curve: curve(record.curve, crate::fit::Link::Log { from: 0.0 }), covariance })
}

fn deviation(record: DeviationRecord) -> Deviation {
    Deviation {
        peak_in_sigma_eff: record.peak_in_sigma_eff,
        sigma_eff_ratio: record.sigma_eff_ratio,
        largest_cdf_difference: record.largest_cdf_difference,
    }
}

fn category(record: CategoryRecord) -> Result<CategoryModel, String> {
    let label = format!("{}, {}", record.channel, record.category);
    let wrong = |what: &str| format!("{what} in {label}");
    let shape = ShapeChoice::from_name(&record.shape).ok_or_else(|| wrong("names an unknown shape"))?;
    let axis = MassAxis {
        low: record.axis.low,
        high: record.axis.high,
        bins: record.axis.bins,
        relative: record.axis.relative,
    };
    if !(axis.low < axis.high && axis.low.is_finite() && axis.high.is_finite()) || axis.bins == 0 {
        return Err(wrong("has an impossible axis"));
    }
    let curves = record.curves.into_iter().map(|own| {
        let link = parameter_link(&own.name);
        curve(own, link)
    });
    let model = MassModel {
        shape,
        masses_gev: record.masses_gev,
        scale: MassScale { low_gev: record.low_gev, high_gev: record.high_gev, knot_gev: record.knot_gev },
        curves: curves.collect(),
        covariance: matrix(&record.covariance)?,
        acceptance: factor(record.acceptance)?,
        efficiency: factor(record.efficiency)?,
        stop: if record.converged { Stop::Converged } else { Stop::Stuck },
    };
    let model = model.checked().map_err(|error| wrong(&format!("has a model that is none: {error}")))?;
    if record.templates.len() != model.masses_gev.len() {
        return Err(wrong("has more or fewer templates than mass points"));
    }
    let mut templates = Vec::new();
    for (t, mass_gev) in record.templates.into_iter().zip(&model.masses_gev) {
        let numbers = t.probability.iter().chain(&t.error).chain([&t.below_axis, &t.above_axis, &t.acceptance]);
        if t.probability.len() != axis.bins || t.error.len() != axis.bins || numbers.into_iter().any(|v| !v.is_finite())
        {
            return Err(wrong("has a template that does not fit its axis"));
        }
        templates.push(Template {
            edges_gev: axis.edges_gev(*mass_gev),
            list_error: vec![0.0; axis.bins],
            probability: t.probability,
            error: t.error,
            below_axis: t.below_axis,
            above_axis: t.above_axis,
            acceptance: t.acceptance,
            acceptance_error: t.acceptance_error,
            acceptance_list_error: 0.0,
            efficiency: t.efficiency,
            efficiency_error: t.efficiency_error,
            efficiency_list_error: 0.0,
            lost: 0.0,
            replicates: Vec::new(),
        });
    }
    let mut closures = Vec::new();
    for own in record.closure {
        let method = Method::from_name(&own.method).ok_or_else(|| wrong("names an unknown method"))?;
        let points = own.points.into_iter().map(|point| ClosurePoint {
            mass_gev: point.mass_gev,
            total: deviation(point.total),
            interpolation: deviation(point.interpolation),
            acceptance_ratio: point.acceptance_ratio,
        });
        closures.push((method, Closure { points: points.collect() }));
    }
    Ok(CategoryModel {
        channel: record.channel,
        category: record.category,
        axis,
        threshold_gev: record.threshold_gev,
        model,
        templates,
        closures,
    })
}
