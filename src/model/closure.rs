//! Closure: what a mass model predicts for a mass point that it has not seen.

use super::acceptance::{YieldFactor, acceptances};
use super::mass_model::{MassModel, ModelError, ModelPoint};
use super::quantile::{QuantileError, QuantileInterpolation};
use super::residual::{ResidualError, Residuals};
use super::shape::{PredictedTemplate, largest_cdf_difference, of_shape};
use super::smooth::MassScale;
use crate::template::{CumulativeError, Template};

/// Why there is no closure.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum ClosureError {
    /// No interior mass point.
    #[error("closure leaves out interior mass points; with {0} mass points there is none (3 are needed)")]
    TooFewMasses(usize),
    /// The model without the mass point.
    #[error("without the mass point at {0} GeV: {1}")]
    Model(f64, ModelError),
    /// The residuals without the mass point.
    #[error("without the mass point at {0} GeV: {1}")]
    Residual(f64, ResidualError),
    /// The interpolation without the mass point.
    #[error("without the mass point at {0} GeV: {1}")]
    Quantile(f64, QuantileError),
    /// A template without a running sum.
    #[error("the template at {0} GeV: {1}")]
    Cumulative(f64, CumulativeError),
    /// An acceptance that cannot be made smooth.
    #[error("without the mass point at {0} GeV there is no smooth acceptance: it must be positive at every mass point")]
    Acceptance(f64),
}

/// How far a prediction is from what it should be.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Deviation {
    /// Predicted less true position of the peak, over the true sigma_eff; `None` where one of these is not on the axis.
    pub peak_in_sigma_eff: Option<f64>,
    /// Predicted over true sigma_eff.
    pub sigma_eff_ratio: Option<f64>,
    /// Largest |ΔCDF| at the bin edges, both normalised on the axis.
    pub largest_cdf_difference: f64,
}

/// Closure at one interior mass point.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ClosurePoint {
    /// The mass point in GeV, which the prediction has not seen.
    pub mass_gev: f64,
    /// Prediction against the folded template: interpolation and misfit of the shape together.
    pub total: Deviation,
    /// Interpolation alone. For the shape: the predicted shape against the one fitted to the template of this mass point
    /// itself. Without a shape: the same as `total`.
    pub interpolation: Deviation,
    /// Predicted over folded acceptance.
    pub acceptance_ratio: f64,
}

/// Closure of one channel and category.
#[derive(Clone, Debug, PartialEq)]
pub struct Closure {
    /// One row per interior mass point.
    pub points: Vec<ClosurePoint>,
}

/// The uncertainty of interpolating, each number as one standard deviation of a nuisance parameter of its own: the RMS, or
/// the largest, over the interior mass points of what [`ClosurePoint::interpolation`] and the acceptance are off by. It is
/// the same at every mass, and cautious: each point was predicted across a gap of two steps of the mass points, a mass
/// between them lies in a gap of one. It contains the numerical errors of the templates.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct InterpolationError {
    /// Of the position of the peak, in units of sigma_eff.
    pub peak_in_sigma_eff: f64,
    /// Of sigma_eff, relative.
    pub sigma_eff_relative: f64,
    /// Of the acceptance, relative.
    pub acceptance_relative: f64,
    /// Of the running sum.
    pub cdf: f64,
}

impl Closure {
    fn errors(&self, join: impl Fn(&[f64]) -> f64) -> InterpolationError {
        let of = |value: &dyn Fn(&ClosurePoint) -> Option<f64>| {
            join(&self.points.iter().filter_map(value).map(f64::abs).collect::<Vec<f64>>())
        };
        InterpolationError {
            peak_in_sigma_eff: of(&|p| p.interpolation.peak_in_sigma_eff),
            sigma_eff_relative: of(&|p| p.interpolation.sigma_eff_ratio.map(|r| r - 1.0)),
            acceptance_relative: of(&|p| Some(p.acceptance_ratio - 1.0)),
            cdf: of(&|p| Some(p.interpolation.largest_cdf_difference)),
        }
    }

    /// RMS over the interior mass points.
    pub fn rms(&self) -> InterpolationError {
        self.errors(|v| (v.iter().map(|x| x * x).sum::<f64>() / v.len().max(1) as f64).sqrt())
    }

    /// Largest over the interior mass points.
    pub fn largest(&self) -> InterpolationError {
        self.errors(|v| v.iter().fold(0.0, |a, b| a.max(*b)))
    }
}

/// Predicted against true: position, width and running sum on the same edges.
///
/// # Errors
/// Bins that no running sum can be made of.
pub fn deviation(predicted: &PredictedTemplate, truth: &Template) -> Result<Deviation, CumulativeError> {
    let one = predicted.clone().into_template(1.0, 0.0).widths()?;
    let two = Template { replicates: Vec::new(), ..truth.clone() }.widths()?;
    let peaks = one.peak_gev.value.zip(two.peak_gev.value);
    let widths = one.sigma_eff_gev.value.zip(two.sigma_eff_gev.value);
    Ok(Deviation {
        peak_in_sigma_eff: peaks.zip(widths).map(|((one, two), (_, width))| (one - two) / width),
        sigma_eff_ratio: widths.map(|(one, two)| one / two),
        largest_cdf_difference: largest_cdf_difference(&predicted.probability, &truth.probability),
    })
}

/// Leaves each interior mass point out, fits the others with the functions of `model`, and compares what that predicts.
///
/// With `residuals` the template is corrected by [`Residuals`] of the other mass points; else it is that of the shape.
///
/// # Errors
/// See [`ClosureError`].
pub fn closure(points: &[ModelPoint<'_>], model: &MassModel, residuals: bool) -> Result<Closure, ClosureError> {
    let mut rows = Vec::new();
    for out in interior(points.len())? {
        let left = &points[out];
        let mass = left.response.mass_gev;
        let others: Vec<ModelPoint<'_>> =
            points.iter().enumerate().filter(|(j, _)| *j != out).map(|(_, p)| *p).collect();
        let failed = |error| ClosureError::Model(mass, error);
        let fitted = without(&others, model).map_err(failed)?;
        let at = fitted.at(mass, false).map_err(failed)?;
        let edges = &left.template.edges_gev;
        let wrong = |error| ClosureError::Cumulative(mass, error);
        let shape = at.template(edges).map_err(failed)?;
        let (total, interpolation) = if residuals {
            let templates: Vec<(f64, &Template)> = others.iter().map(|p| (p.response.mass_gev, p.template)).collect();
            let residuals = Residuals::new(&fitted, &templates).map_err(|e| ClosureError::Residual(mass, e))?;
            let corrected = residuals.template(&at, edges).map_err(failed)?;
            let total = deviation(&corrected, left.template).map_err(wrong)?;
            (total, total)
        } else {
            let (probability, below_axis, above_axis) = of_shape(&left.response.resolution, mass, edges);
            let own =
                PredictedTemplate { probability, below_axis, above_axis, ..shape.clone() }.into_template(1.0, 0.0);
            (deviation(&shape, left.template).map_err(wrong)?, deviation(&shape, &own).map_err(wrong)?)
        };
        let acceptance_ratio = at.acceptance / left.template.acceptance;
        rows.push(ClosurePoint { mass_gev: mass, total, interpolation, acceptance_ratio });
    }
    Ok(Closure { points: rows })
}

/// The model of some of the mass points, with the functions of the whole one; where these points do not determine them,
/// with functions chosen anew.
pub(super) fn without(others: &[ModelPoint<'_>], model: &MassModel) -> Result<MassModel, ModelError> {
    match MassModel::fit_with(others, model.scale.knot_gev, Some(model)) {
        Err(ModelError::Undetermined) => MassModel::fit(others, model.scale.knot_gev),
        other => other,
    }
}

/// The same for [`QuantileInterpolation`], from templates at rising mass points in GeV.
///
/// # Errors
/// See [`ClosureError`].
pub fn quantile_closure(templates: &[(f64, &Template)], knot_gev: Option<f64>) -> Result<Closure, ClosureError> {
    let mut rows = Vec::new();
    for out in interior(templates.len())? {
        let (mass, left) = templates[out];
        let others: Vec<(f64, &Template)> =
            templates.iter().enumerate().filter(|(j, _)| *j != out).map(|(_, t)| *t).collect();
        let failed = |error| ClosureError::Quantile(mass, error);
        let interpolation = QuantileInterpolation::new(&others).map_err(failed)?;
        let predicted = interpolation.template(mass, &left.edges_gev, false).map_err(failed)?;
        let total = deviation(&predicted, left).map_err(|e| ClosureError::Cumulative(mass, e))?;
        let scale = MassScale { low_gev: templates[0].0, high_gev: templates[templates.len() - 1].0, knot_gev };
        let acceptance = YieldFactor::fit("acceptance", &acceptances(&others), &scale, None)
            .ok_or(ClosureError::Acceptance(mass))?;
        let acceptance_ratio = acceptance.at(&scale, mass).0 / left.acceptance;
        rows.push(ClosurePoint { mass_gev: mass, total, interpolation: total, acceptance_ratio });
    }
    Ok(Closure { points: rows })
}

fn interior(points: usize) -> Result<std::ops::Range<usize>, ClosureError> {
    if points < 3 { Err(ClosureError::TooFewMasses(points)) } else { Ok(1..points - 1) }
}
