//! What a misfit does to a measured mass.

use super::closure::without;
use super::mass_model::{MassModel, ModelError, ModelPoint};
use crate::fit::{Expected, FitError, Stop, fit_counts};
use crate::lineshape::Shape;
use crate::template::{Cumulative, CumulativeError, Template};

/// Signal events on the axis that the counts are made for; the bias does not depend on it.
const EVENTS: f64 = 1e6;
/// Half of the window in which signal and background are equal, in sigma_eff.
const WINDOW: f64 = 2.0;

/// Why no bias can be told.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum BiasError {
    /// The template.
    #[error(transparent)]
    Cumulative(#[from] CumulativeError),
    /// No peak or no width on the axis.
    #[error("the template has no peak or no sigma_eff on its axis")]
    NoPeak,
    /// The model.
    #[error(transparent)]
    Model(#[from] ModelError),
    /// The minimiser could not start.
    #[error(transparent)]
    Fit(#[from] FitError),
    /// The fit of the mass did not converge.
    #[error("the fit of the mass did not converge")]
    NotConverged,
    /// No such mass point.
    #[error("there is no mass point number {0}")]
    NoSuchPoint(usize),
}

/// The mass that a fit finds, less the true one.
///
/// The mass model, with the mass and the yields of signal and background free, is fitted to expected counts: the template
/// plus a flat background as large as the signal within ±2 sigma_eff of the peak.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct MassBias {
    /// M_fit - M in MeV with the model of all mass points.
    pub bias_mev: f64,
    /// Statistical error of the fitted mass for one signal event on the axis, in MeV; for S events it is this over sqrt(S).
    pub error_of_one_event_mev: f64,
    /// The same as `bias_mev` with a model that has not seen this mass point; `None` for the first and last mass point, or
    /// where the others make no model.
    pub bias_left_out_mev: Option<f64>,
}

impl MassBias {
    /// Signal events on the axis at which the bias is half of the statistical error.
    pub fn events_at_half_error(&self) -> f64 {
        half_error(self.error_of_one_event_mev, self.bias_mev)
    }

    /// The same for a model that has not seen the mass point.
    pub fn events_at_half_error_left_out(&self) -> Option<f64> {
        self.bias_left_out_mev.map(|bias| half_error(self.error_of_one_event_mev, bias))
    }
}

fn half_error(error: f64, bias: f64) -> f64 {
    let ratio = error / (2.0 * bias);
    ratio * ratio
}

/// The mass bias at mass point number `index`.
///
/// # Errors
/// See [`BiasError`].
pub fn mass_bias(points: &[ModelPoint<'_>], model: &MassModel, index: usize) -> Result<MassBias, BiasError> {
    let point = points.get(index).ok_or(BiasError::NoSuchPoint(index))?;
    let mass = point.response.mass_gev;
    let (bias, error) = fitted(model, point.template, mass)?;
    let mut left_out = None;
    if index > 0 && index + 1 < points.len() {
        let others: Vec<ModelPoint<'_>> =
            points.iter().enumerate().filter(|(j, _)| *j != index).map(|(_, p)| *p).collect();
        if let Ok(blind) = without(&others, model) {
            left_out = Some(1e3 * fitted(&blind, point.template, mass)?.0);
        }
    }
    Ok(MassBias { bias_mev: 1e3 * bias, error_of_one_event_mev: 1e3 * error, bias_left_out_mev: left_out })
}

/// Bias and error for one event, in GeV.
fn fitted(model: &MassModel, template: &Template, mass_gev: f64) -> Result<(f64, f64), BiasError> {
    let widths = Template { replicates: Vec::new(), ..template.clone() }.widths()?;
    let (Some(peak), Some(sigma_eff)) = (widths.peak_gev.value, widths.sigma_eff_gev.value) else {
        return Err(BiasError::NoPeak);
    };
    let edges = &template.edges_gev;
    let (low, high) = (edges[0], edges[edges.len() - 1]);
    let cumulative = Cumulative::of(template)?;
    let window = ((peak - WINDOW * sigma_eff).max(low), (peak + WINDOW * sigma_eff).min(high));
    let inside = cumulative.at(window.1).zip(cumulative.at(window.0)).map_or(0.0, |(b, a)| b - a);
    let on_axis: f64 = template.probability.iter().sum();
    // Background events per GeV for one signal event on the axis.
    let density = inside / on_axis / (window.1 - window.0);
    let bins = template.probability.len();
    let flat: Vec<f64> = edges.windows(2).map(|pair| (pair[1] - pair[0]) / (high - low)).collect();
    let background = EVENTS * density * (high - low);
    let counts: Vec<f64> =
        (0..bins).map(|i| EVENTS * template.probability[i] / on_axis + background * flat[i]).collect();
    let expected = |values: &[f64]| {
        let (m, signal, background) = (values[0], values[1], values[2]);
        let shape = model.resolution_at(m).ok()?;
        let own: Vec<f64> = edges.iter().map(|e| e - m).collect();
        let mut q = vec![0.0; bins];
        shape.bin_probabilities(&own, &mut q);
        let whole: f64 = q.iter().sum();
        let mut by_parameter = vec![0.0; bins * model.curves.len()];
        shape.bin_probability_gradient(&own, &mut by_parameter);
        // The mass moves the peak one to one, and all parameters along their curves.
        let mut slopes = model.slopes_at(m);
        slopes[0] += 1.0;
        let mut by_mass = vec![0.0; bins];
        for (row, slope) in by_parameter.chunks(bins).zip(&slopes) {
            by_mass.iter_mut().zip(row).for_each(|(sum, g)| *sum += slope * g);
        }
        let whole_by_mass: f64 = by_mass.iter().sum();
        let mut gradient = vec![0.0; 3 * bins];
        for i in 0..bins {
            q[i] /= whole;
            gradient[i] = signal * (by_mass[i] - q[i] * whole_by_mass) / whole;
            gradient[bins + i] = q[i];
            gradient[2 * bins + i] = flat[i];
        }
        let events = (0..bins).map(|i| signal * q[i] + background * flat[i]).collect();
        Some(Expected { events, gradient })
    };
    let reach = 5.0 * sigma_eff;
    let bounds = [(mass_gev - reach, mass_gev + reach), (0.01 * EVENTS, 100.0 * EVENTS), (0.0, 100.0 * background)];
    let fit = fit_counts(&counts, &[mass_gev, EVENTS, background], &bounds, &expected)?;
    if fit.stop != Stop::Converged {
        return Err(BiasError::NotConverged);
    }
    let variance = fit.covariance.map(|c| c[(0, 0)]).ok_or(BiasError::NotConverged)?;
    Ok((fit.values[0] - mass_gev, (variance * EVENTS).sqrt()))
}
