//! A fit from start to end.

use argmin::core::{Executor, State as _};
use nalgebra::{Cholesky, DMatrix, DVector};

use super::binned::Binned;
use super::coordinates::Coordinates;
use super::data::{Data, DataError, Histogram};
use super::goodness::goodness;
use super::model::Model;
use super::newton::{CLOSE_ENOUGH, Newton, State};
use super::objective::Objective;
use super::outcome::{FitOutcome, Fitted, Stop, Warning};
use super::settings::{SettingError, Settings, Settled};
use super::start::yields;
use super::sums::Sums;
use super::unbinned::Unbinned;
use crate::lineshape::ShapeError;

/// The most iterations.
const MOST_STEPS: u64 = 300;
/// With more masses than this the general path first fits every 64th.
const MANY: usize = 1 << 17;
const THIN: usize = 64;
/// Below this part of a line shape in the window the fit says so.
const SMALL_WINDOW: f64 = 0.1;
/// With fewer errors than this between its events and 0 a background counts as compatible with none.
const FAINT: f64 = 2.0;
/// Below this probability of the chi-square the fit says so: 4 standard deviations.
const BAD: f64 = 6e-5;

/// Why a fit cannot be made.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum FitError {
    /// The data.
    #[error(transparent)]
    Data(#[from] DataError),
    /// The settings.
    #[error(transparent)]
    Setting(#[from] SettingError),
    /// The values that the fit should start from.
    #[error(transparent)]
    Shape(#[from] ShapeError),
    /// The likelihood has no value where the fit should start.
    #[error("the likelihood is 0 or not defined at the starting values ({0}); start elsewhere (--start NAME=VALUE)")]
    Start(String),
}

/// Fits a model to data.
///
/// The values of the model's line shape are where the fit starts, unless `settings` say otherwise; see
/// [`super::starting_shape`]. A fit that does not converge is an outcome, not an error: see [`FitOutcome::stop`].
///
/// # Errors
/// Data or settings that no fit can be made with.
pub fn fit(data: &Data, model: &Model, settings: &Settings) -> Result<FitOutcome, FitError> {
    let mut model = model.clone();
    let mut warnings = vec![];
    let data = inside(data, &mut model, &mut warnings)?;
    let range = range(&data, model.window);
    let settled = settings.settle(&model, range, &yields(&data, model.background, model.window))?;
    let start: Vec<f64> = settled.iter().map(|s| s.start).collect();
    model.line = model.line.with_parameters(&start[..model.line_count()])?;
    let free = settled.iter().filter(|s| s.free).count();
    let (rows, what) = match &data {
        Data::Masses(masses) => (masses.gev().len(), "masses"),
        Data::Histogram(histogram) if histogram.errors().is_some() => (histogram.bins().len(), "bins"),
        Data::Histogram(histogram) => (histogram.counts().iter().filter(|c| **c > 0.0).count(), "filled bins"),
    };
    if rows < free {
        return Err(DataError::TooFew { rows, what, parameters: free }.into());
    }
    match &data {
        Data::Masses(masses) => {
            if let Some(sums) = Sums::new(&model, masses) {
                return finish(&sums, &model, &data, &settled, start, warnings);
            }
            let mut start = start;
            if masses.gev().len() > MANY {
                let thin = masses.thinned(THIN);
                let share = thin.total() / masses.total();
                if share > 0.0 {
                    let mut few = start.clone();
                    scale_yields(&model, &mut few, share);
                    let objective = Unbinned { model: &model, masses: &thin };
                    let scaled: Vec<Settled> = settled
                        .iter()
                        .zip(&few)
                        .enumerate()
                        .map(|(k, (s, &start))| {
                            let factor = if is_yield(&model, k) { share } else { 1.0 };
                            Settled { start, low: factor * s.low, high: factor * s.high, ..s.clone() }
                        })
                        .collect();
                    if let Ok((values, _)) = minimise(&Coordinates::new(&objective, &scaled), &few) {
                        start = values;
                        scale_yields(&model, &mut start, 1.0 / share);
                    }
                }
            }
            finish(&Unbinned { model: &model, masses }, &model, &data, &settled, start, warnings)
        }
        Data::Histogram(histogram) => {
            finish(&Binned { model: &model, histogram }, &model, &data, &settled, start, warnings)
        }
    }
}

fn is_yield(model: &Model, k: usize) -> bool {
    let slope = model.background == Some(super::Background::Exponential) && k == model.background_start() + 1;
    k >= model.line_count() && !slope
}

fn scale_yields(model: &Model, values: &mut [f64], factor: f64) {
    for (k, value) in values.iter_mut().enumerate() {
        if is_yield(model, k) {
            *value *= factor;
        }
    }
}

/// The data inside the window; for a histogram the window becomes that of its bins.
fn inside(data: &Data, model: &mut Model, warnings: &mut Vec<Warning>) -> Result<Data, DataError> {
    match data {
        Data::Masses(masses) => Ok(Data::Masses(masses.inside(model.window)?)),
        Data::Histogram(histogram) => {
            let cut = histogram.inside(model.window)?;
            model.counted = true;
            let bins = cut.bins();
            let ends = (bins[0].0, bins[bins.len() - 1].1);
            let cuts = |edge: f64| {
                let slack = |b: &(f64, f64)| 1e-9 * (b.1 - b.0);
                histogram.bins().iter().any(|b| b.0 + slack(b) < edge && edge < b.1 - slack(b))
            };
            if cuts(model.window.0) || cuts(model.window.1) {
                warnings.push(Warning::CutBins(bins.len(), ends.0, ends.1));
            }
            if cut.errors().is_none() && cut.counts().iter().any(|c| *c != libm::round(*c)) {
                warnings.push(Warning::NotWhole);
            }
            model.window = ends;
            Ok(Data::Histogram(cut))
        }
    }
}

/// Range of the data, or of the window where that is closed.
fn range(data: &Data, window: (f64, f64)) -> (f64, f64) {
    let (low, high) = match data {
        Data::Masses(masses) => (masses.gev()[0], masses.gev()[masses.gev().len() - 1]),
        Data::Histogram(histogram) => ends(histogram),
    };
    (if window.0.is_finite() { window.0 } else { low }, if window.1.is_finite() { window.1 } else { high })
}

fn ends(histogram: &Histogram) -> (f64, f64) {
    (histogram.bins()[0].0, histogram.bins()[histogram.bins().len() - 1].1)
}

/// How a minimisation ended.
pub(super) struct Ended {
    pub stop: Stop,
    pub distance: f64,
    pub iterations: u64,
}

pub(super) fn minimise(coordinates: &Coordinates<'_>, start: &[f64]) -> Result<(Vec<f64>, Ended), FitError> {
    let names = || start.iter().map(|v| format!("{v:.6}")).collect::<Vec<_>>().join(", ");
    let z = coordinates.inner(start);
    // argmin takes the problem whole; it borrows the same likelihood.
    let problem = coordinates.clone();
    let run = Executor::new(problem, Newton::new())
        .configure(|state: State| state.param(z).max_iters(MOST_STEPS))
        .ctrlc(false)
        .timer(false)
        .run();
    let result = run.map_err(|_| FitError::Start(names()))?;
    let newton = result.solver;
    let iterations = result.state.get_iter();
    let stuck = newton.is_stuck();
    let distance = newton.distance;
    let Some((z, _)) = newton.current else { return Err(FitError::Start(names())) };
    let stop = if distance < CLOSE_ENOUGH {
        Stop::Converged
    } else if stuck {
        Stop::Stuck
    } else {
        Stop::TooManySteps
    };
    Ok((coordinates.outer(&z), Ended { stop, distance, iterations }))
}

fn finish(
    objective: &dyn Objective,
    model: &Model,
    data: &Data,
    settled: &[Settled],
    start: Vec<f64>,
    mut warnings: Vec<Warning>,
) -> Result<FitOutcome, FitError> {
    let coordinates = Coordinates::new(objective, settled);
    let (values, ended) = minimise(&coordinates, &start)?;
    let failed = || FitError::Start(values.iter().map(|v| format!("{v:.6}")).collect::<Vec<_>>().join(", "));
    let best = objective.evaluate(&values).ok_or_else(failed)?;
    let at_bound = |k: usize| {
        let s = &settled[k];
        let margin = 1e-9 * (s.high - s.low).clamp(1e-300, 1.0);
        let (low, high) = (values[k] - s.low <= margin, s.high - values[k] <= margin);
        s.free && ((low && best.gradient[k] >= 0.0) || (high && best.gradient[k] <= 0.0))
    };
    // No background, no slope of it.
    let empty = |k: usize| {
        let slope = model.background == Some(super::Background::Exponential) && k == model.background_start() + 1;
        slope && values[k - 1] == 0.0
    };
    let places: Vec<usize> = coordinates.free.iter().copied().filter(|&k| !at_bound(k) && !empty(k)).collect();
    // Away from the minimum second derivatives are no measure of errors.
    let converged = ended.stop == Stop::Converged;
    let covariance = if converged { covariance(objective, &coordinates, &values, &places) } else { None };
    let error = |k: usize| {
        let place = places.iter().position(|&p| p == k)?;
        covariance.as_ref().map(|c| c[(place, place)].sqrt())
    };
    let parameters: Vec<Fitted> = settled
        .iter()
        .enumerate()
        .map(|(k, s)| Fitted {
            name: s.name.clone(),
            value: values[k],
            error: if s.free { error(k) } else { Some(0.0) },
            free: s.free,
            at_bound: at_bound(k),
        })
        .collect();
    warnings.extend(
        (0..values.len()).filter(|&k| settled[k].free && empty(k)).map(|k| Warning::Empty(settled[k].name.clone())),
    );
    warnings.extend(warnings_of(&parameters, covariance.is_some() || places.is_empty() || !converged));
    let window_probability = model.at(&values).map_or(f64::NAN, |p| p.window_probability);
    if window_probability < SMALL_WINDOW {
        warnings.push(Warning::SmallWindow(window_probability));
    }
    let (bins, goodness) = goodness(model, &values, data, places.len()).ok_or_else(failed)?;
    if let Some(g) = goodness
        && g.p_value < BAD
    {
        warnings.push(Warning::BadDescription(g.chi_square, g.degrees_of_freedom, g.p_value));
    }
    let background_events = model.background.map(|kind| {
        let mut slopes = vec![0.0; kind.count()];
        kind.events_gradient(&mut slopes);
        let slope = DVector::from_fn(places.len(), |i, _| {
            places[i].checked_sub(model.background_start()).map_or(0.0, |k| slopes[k])
        });
        let error = covariance.as_ref().map(|c| slope.dot(&(c * &slope)).max(0.0).sqrt());
        (kind.events(model.background_values(&values)), error)
    });
    let (rows, total) = match data {
        Data::Masses(masses) => (masses.gev().len(), masses.total()),
        Data::Histogram(histogram) => (histogram.bins().len(), histogram.total()),
    };
    if let (Some(kind), Some((events, error))) = (model.background, background_events) {
        let shape = &settled[model.background_start()..];
        let shape = if kind == super::Background::Exponential { &shape[1..] } else { shape };
        // One free coefficient of a polynomial is its yield.
        let least = if kind == super::Background::Exponential { 1 } else { 2 };
        let shaped = shape.iter().filter(|s| s.free).count() >= least;
        let told = warnings.iter().any(|w| matches!(w, Warning::Empty(_)));
        // Without second derivatives an error is at most about that of all events.
        if converged && shaped && !told && events <= FAINT * error.unwrap_or_else(|| total.abs().sqrt()) {
            warnings.push(Warning::FaintBackground(events, error));
        }
    }
    Ok(FitOutcome {
        covariant: places.iter().map(|&k| settled[k].name.clone()).collect(),
        parameters,
        covariance,
        negative_log_likelihood: best.value,
        distance: ended.distance,
        stop: ended.stop,
        iterations: ended.iterations,
        rows,
        total,
        window_probability,
        background_events,
        bins,
        goodness,
        warnings,
        model: model.clone(),
    })
}

/// Inverse second derivatives, or the sandwich for weights; `None` where they are not positive.
fn covariance(
    objective: &dyn Objective,
    coordinates: &Coordinates<'_>,
    values: &[f64],
    places: &[usize],
) -> Option<DMatrix<f64>> {
    let hessian = coordinates.outer_hessian(values)?;
    let take = |m: &DMatrix<f64>| DMatrix::from_fn(places.len(), places.len(), |i, j| m[(places[i], places[j])]);
    let hessian = take(&hessian);
    if places.is_empty() || !hessian.diagonal().iter().all(|d| *d > 0.0) {
        return None;
    }
    let scale = hessian.diagonal().map(f64::sqrt);
    let scaled = DMatrix::from_fn(places.len(), places.len(), |i, j| hessian[(i, j)] / (scale[i] * scale[j]));
    let inverse = Cholesky::new(scaled)?.inverse();
    let inverse = DMatrix::from_fn(places.len(), places.len(), |i, j| inverse[(i, j)] / (scale[i] * scale[j]));
    let covariance = match objective.weighted_scores(values) {
        None => inverse,
        Some(scores) => &inverse * take(&scores) * &inverse,
    };
    covariance.diagonal().iter().all(|v| *v > 0.0 && v.is_finite()).then_some(covariance)
}

fn warnings_of(parameters: &[Fitted], positive: bool) -> Vec<Warning> {
    let mut list = vec![];
    if !positive {
        list.push(Warning::NotPositive);
    }
    for p in parameters.iter().filter(|p| p.free) {
        let tail = matches!(p.name.as_str(), "n_low" | "n_high");
        // Within 2 errors of 1 or beyond 100 any power will do.
        if tail && (p.at_bound || p.value > 100.0 || p.error.is_some_and(|e| e > 0.5 * p.value)) {
            list.push(Warning::TailPower(p.name.clone(), p.value));
        }
        if p.at_bound {
            list.push(Warning::AtBound(p.name.clone(), p.value));
        }
    }
    list
}
