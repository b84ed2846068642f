//! Templates of a resonance with a natural width, from the mass model.

use nalgebra::DMatrix;

use super::mass_model::{MassModel, ModelError};
use super::shape::{PredictedTemplate, of_shape, rising};
use crate::lineshape::{FALLOFF_RANGE, Natural, Shape};
use crate::numerics::quadrature::GAUSS_8;

/// The part of the events on the axis that may come from true masses beyond the mass points.
const BEYOND: f64 = 1e-3;
/// Panels are at most so many core widths long where the resolution matters, and elsewhere this part of the distance from
/// the peak (or of half the width).
const PANEL_SIGMAS: f64 = 2.0;
const PANEL_DISTANCE: f64 = 0.5;
/// The resolution is followed closely within so many core widths of the axis.
const REACH: f64 = 4.0;
/// Longer panels and a shorter reach for the errors.
const ERROR_PANELS: f64 = 4.0;
const ERROR_REACH: f64 = 6.0;
/// Without a falloff, true masses are followed to this many nominal masses; less than 1e-7 of any shape lies beyond.
const FARTHEST: f64 = 1e4;

/// The distribution of the true mass.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct NaturalMass {
    /// Natural shape, not a line.
    pub natural: Natural,
    /// Production falls as `(t/M)^-falloff_power`; unless it is 0, true masses lie between M/2 and 2M.
    pub falloff_power: f64,
    /// True masses lie above this, in GeV: the sum of the masses of the legs.
    pub threshold_gev: f64,
}

/// Why a wide template cannot be made.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum WideError {
    /// The model.
    #[error(transparent)]
    Model(#[from] ModelError),
    /// A line.
    #[error("the resonance has no natural width; take the template of the mass model")]
    Line,
    /// A power outside its domain.
    #[error("falloff_power is {0}; it must be from 0 to 100")]
    Falloff(f64),
    /// No true mass left.
    #[error("no true mass lies above the threshold of {0} GeV")]
    Threshold(f64),
    /// True masses beyond the mass points.
    #[error(
        "{share:.4} of the events on the axis come from true masses outside the mass points of the model, {low_gev} to {high_gev} GeV ({BEYOND} is allowed); fold at further masses, narrow the axis, or ask for extrapolation"
    )]
    Beyond {
        /// Part of the events on the axis.
        share: f64,
        /// Lowest mass point.
        low_gev: f64,
        /// Highest mass point.
        high_gev: f64,
    },
}

/// A wide template.
#[derive(Clone, Debug, PartialEq)]
pub struct WideTemplate {
    /// The template; `extrapolated` is set where more of the axis than is allowed rests on true masses beyond the model.
    pub template: PredictedTemplate,
    /// Accepted over generated events.
    pub acceptance: f64,
    /// Its numerical error: that of the model at the nominal mass.
    pub acceptance_error: f64,
    /// Part of the accepted events on the axis that come from true masses beyond the mass points.
    pub beyond_on_axis: f64,
    /// Part of all accepted events that come from there. The acceptance rests on that of the nearest mass point for them.
    pub beyond: f64,
}

/// The template of a wide resonance: `∫ natural(t) A(t) R(m|t) (t/M)^-falloff dt`, normalised, with the response R and the
/// acceptance A of the model at the true mass t.
///
/// Beyond the mass points the curves of the model (bias and widths relative to the mass, tails, acceptance) keep the
/// values that they have at the nearest one. The integral is a sum of 8-point Gauss-Legendre panels; its error is below
/// 1e-5 of the highest bin (tested against panels of half the length and against the convolution of [`crate::lineshape::LineShape`]).
///
/// # Errors
/// See [`WideError`]; true masses beyond the mass points are an error without `extrapolate` when more than 0.1 % of the
/// events on the axis come from them.
pub fn wide_template(
    model: &MassModel,
    truth: &NaturalMass,
    edges_gev: &[f64],
    extrapolate: bool,
) -> Result<WideTemplate, WideError> {
    wide_with_panels(model, truth, edges_gev, extrapolate, 1.0)
}

/// The same with panels shorter by a factor.
pub(super) fn wide_with_panels(
    model: &MassModel,
    truth: &NaturalMass,
    edges_gev: &[f64],
    extrapolate: bool,
    shorter: f64,
) -> Result<WideTemplate, WideError> {
    let Some(shape) = truth.natural.shape() else { return Err(WideError::Line) };
    let mass = truth.natural.mass();
    let power = truth.falloff_power;
    if !(0.0..=100.0).contains(&power) {
        return Err(WideError::Falloff(power));
    }
    if !rising(edges_gev) {
        return Err(ModelError::Edges.into());
    }
    let nominal = model.at(mass, extrapolate)?;
    let (first, last) = (model.scale.low_gev, model.scale.high_gev);
    let mut low = truth.threshold_gev.max(0.0);
    let mut high = FARTHEST * mass;
    if power > 0.0 {
        low = low.max(FALLOFF_RANGE.0 * mass);
        high = FALLOFF_RANGE.1 * mass;
    }
    if !(low < high) {
        return Err(WideError::Threshold(truth.threshold_gev));
    }
    let bins = edges_gev.len() - 1;
    let mut sum = Sum { bins: vec![0.0; bins], ..Sum::default() };
    for pair in panels(model, truth, (low, high), (edges_gev[0], edges_gev[bins]), shorter)?.windows(2) {
        let half = 0.5 * (pair[1] - pair[0]);
        for (node, weight) in GAUSS_8.iter().flat_map(|&(x, w)| [(-x, w), (x, w)]) {
            let t = pair[0] + half * (1.0 + node);
            let falloff = if power > 0.0 { libm::pow(t / mass, -power) } else { 1.0 };
            let generated = half * weight * shape.pdf(t) * falloff;
            if !(generated > 0.0) {
                continue;
            }
            let inner = model.scale.nearest(t);
            let (acceptance, _) = model.acceptance.at(&model.scale, inner);
            let accepted = generated * acceptance;
            let resolution = model.resolution_for(inner, t)?;
            let (probability, below, above) = of_shape(&resolution, t, edges_gev);
            sum.generated += generated;
            sum.accepted += accepted;
            sum.below += accepted * below;
            sum.above += accepted * above;
            for (slot, p) in sum.bins.iter_mut().zip(&probability) {
                *slot += accepted * p;
            }
            if inner != t {
                sum.beyond += accepted;
                sum.beyond_on_axis += accepted * (1.0 - below - above);
            }
        }
    }
    if !(sum.accepted > 0.0) {
        return Err(WideError::Threshold(truth.threshold_gev));
    }
    let on_axis: f64 = sum.bins.iter().sum();
    let beyond_on_axis = if on_axis > 0.0 { sum.beyond_on_axis / on_axis } else { 1.0 };
    if beyond_on_axis > BEYOND && !extrapolate {
        return Err(WideError::Beyond { share: beyond_on_axis, low_gev: first, high_gev: last });
    }
    let error = errors(model, truth, (low, high), edges_gev, sum.accepted)?;
    Ok(WideTemplate {
        template: PredictedTemplate {
            edges_gev: edges_gev.to_vec(),
            probability: sum.bins.iter().map(|p| p / sum.accepted).collect(),
            error,
            below_axis: sum.below / sum.accepted,
            above_axis: sum.above / sum.accepted,
            extrapolated: nominal.extrapolated || beyond_on_axis > BEYOND,
        },
        acceptance: sum.accepted / sum.generated,
        acceptance_error: nominal.acceptance_error * sum.accepted / (sum.generated * nominal.acceptance),
        beyond_on_axis,
        beyond: sum.beyond / sum.accepted,
    })
}

#[derive(Clone, Debug, Default)]
struct Sum {
    bins: Vec<f64>,
    below: f64,
    above: f64,
    generated: f64,
    accepted: f64,
    beyond: f64,
    beyond_on_axis: f64,
}

/// Errors of the bins from the numerical covariance of the model, without that of the acceptance: the integral of the
/// derivatives in the coefficients, on panels long enough to be quick, for an error needs two digits only.
fn errors(
    model: &MassModel,
    truth: &NaturalMass,
    range: (f64, f64),
    edges_gev: &[f64],
    accepted: f64,
) -> Result<Vec<f64>, WideError> {
    let Some(shape) = truth.natural.shape() else { return Err(WideError::Line) };
    let mass = truth.natural.mass();
    let (bins, count) = (edges_gev.len() - 1, model.covariance.nrows());
    let mut derivatives = DMatrix::<f64>::zeros(count, bins);
    for pair in panels(model, truth, range, (edges_gev[0], edges_gev[bins]), 1.0 / ERROR_PANELS)?.windows(2) {
        let half = 0.5 * (pair[1] - pair[0]);
        for (node, weight) in GAUSS_8.iter().flat_map(|&(x, w)| [(-x, w), (x, w)]) {
            let t = pair[0] + half * (1.0 + node);
            let inner = model.scale.nearest(t);
            let resolution = model.resolution_for(inner, t)?;
            let (a, b) = resolution.sigmas();
            // Beyond this nothing of note moves.
            let reach = ERROR_REACH * a.max(b);
            let from = edges_gev.partition_point(|e| *e < t - reach).saturating_sub(1);
            let to = (edges_gev.partition_point(|e| *e <= t + reach) + 1).min(edges_gev.len());
            if to < from + 2 {
                continue;
            }
            let edges: Vec<f64> = edges_gev[from..to].iter().map(|e| e - t).collect();
            let n = edges.len() - 1;
            let mut gradient = vec![0.0; n * model.curves.len()];
            resolution.bin_probability_gradient(&edges, &mut gradient);
            let falloff = libm::pow(t / mass, -truth.falloff_power);
            let (acceptance, _) = model.acceptance.at(&model.scale, inner);
            let factor = half * weight * shape.pdf(t) * falloff * acceptance / accepted;
            let mut place = 0;
            for (k, curve) in model.curves.iter().enumerate() {
                let slope = curve.link.slope(curve.eta(&model.scale, inner), t);
                for basis in model.scale.row(curve.basis, inner) {
                    for i in 0..n {
                        derivatives[(place, from + i)] += factor * slope * basis * gradient[k * n + i];
                    }
                    place += 1;
                }
            }
        }
    }
    let spread = &model.covariance * &derivatives;
    Ok((0..bins).map(|i| derivatives.column(i).dot(&spread.column(i)).max(0.0).sqrt()).collect())
}

/// Rising limits of the panels.
fn panels(
    model: &MassModel,
    truth: &NaturalMass,
    (low, high): (f64, f64),
    (axis_low, axis_high): (f64, f64),
    shorter: f64,
) -> Result<Vec<f64>, ModelError> {
    let mass = truth.natural.mass();
    let half_width = 0.5 * truth.natural.width();
    let sigma = |t: f64| -> Result<f64, ModelError> {
        // A resonance of no mass has no resolution.
        let t = t.max(1e-6 * mass);
        let (a, b) = model.resolution_for(model.scale.nearest(t), t)?.sigmas();
        Ok(a.min(b))
    };
    // The curves have corners at the knot and at the ends.
    let corners = [Some(model.scale.low_gev), Some(model.scale.high_gev), model.scale.knot_gev];
    let mut stops: Vec<f64> = corners.into_iter().flatten().chain([low, high, mass]).collect();
    stops.retain(|s| (low..=high).contains(s));
    stops.sort_by(f64::total_cmp);
    stops.dedup();
    let mut limits = vec![low];
    for pair in stops.windows(2) {
        let mut t = pair[0];
        while t < pair[1] {
            // Steps shrink towards the peak and grow away from it.
            let near = if t < mass { (mass - t) / (1.0 + PANEL_DISTANCE) } else { t - mass };
            let mut step = PANEL_DISTANCE * near.max(half_width);
            let width = sigma(t)?;
            // Off the axis a tail changes on the scale of its distance from there.
            let (from, to) = (axis_low - REACH * width, axis_high + REACH * width);
            let off = (from - t).max(t - to).max(0.0);
            let near = if t < from { off / (1.0 + PANEL_DISTANCE) } else { off };
            step = step.min((PANEL_DISTANCE * near).max(PANEL_SIGMAS * width));
            let next = t + step / shorter;
            // No sliver at the end.
            t = if next + 0.1 * step < pair[1] { next } else { pair[1] };
            limits.push(t);
        }
    }
    Ok(limits)
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;
    use crate::fit::{Link, Stop};
    use crate::lineshape::{BreitWigner, LineShape, Relativistic, Resolution, RunningWidth, Scaling};
    use crate::model::{Basis, MassScale, SmoothCurve, YieldFactor, parameter_link, prototype};
    use crate::process::ShapeChoice;

    /// A model whose parameters are constants relative to the mass, from 20 to 2000 GeV, and an acceptance of 0.5.
    fn constant_model(values: [f64; 6]) -> MassModel {
        let basis = Basis { order: 0, hinge: false };
        let curves: Vec<SmoothCurve> = prototype(ShapeChoice::DoubleCrystalBall)
            .unwrap()
            .parameters()
            .iter()
            .zip(values)
            .map(|(p, v)| {
                let link = parameter_link(&p.name);
                SmoothCurve { name: p.name.clone(), link, basis, coefficients: vec![link.eta(v, 1.0)] }
            })
            .collect();
        let curve = SmoothCurve {
            name: "acceptance".into(),
            link: Link::Log { from: 0.0 },
            basis,
            coefficients: vec![libm::log(0.5)],
        };
        let model = MassModel {
            shape: ShapeChoice::DoubleCrystalBall,
            masses_gev: vec![20.0, 2000.0],
            scale: MassScale { low_gev: 20.0, high_gev: 2000.0, knot_gev: None },
            covariance: DMatrix::from_diagonal_element(6, 6, 1e-8),
            acceptance: YieldFactor { curve: curve.clone(), covariance: DMatrix::zeros(1, 1) },
            efficiency: YieldFactor { curve, covariance: DMatrix::zeros(1, 1) },
            curves,
            stop: Stop::Converged,
        };
        model.checked().unwrap()
    }

    fn edges() -> Vec<f64> {
        (0..=200).map(|i| 140.0 + 0.6 * f64::from(i)).collect()
    }

    /// The judge is [`LineShape`] with a resolution that grows with the true mass: adaptive panels, no code in common but
    /// the two factors of the integrand.
    #[test]
    fn a_model_of_constant_relative_shape_gives_the_convolution_of_a_proportional_resolution() {
        let (bias, sigma, low, high) = (-0.001, 0.01, (1.4, 5.0), (1.7, 9.0));
        let model = constant_model([bias, sigma, low.0, low.1, high.0, high.1]);
        let edges = edges();
        for width in [10.0, 2.0] {
            let naturals = [
                Natural::Relativistic(Relativistic::new(200.0, width).unwrap()),
                Natural::RunningWidth(RunningWidth::new(200.0, width).unwrap()),
            ];
            for natural in naturals {
                let power = 4.0;
                let truth = NaturalMass { natural, falloff_power: power, threshold_gev: 0.0 };
                let wide = wide_template(&model, &truth, &edges, false).unwrap();
                let resolution = Resolution::double_crystal_ball(200.0 * bias, 200.0 * sigma, low, high).unwrap();
                let judge =
                    LineShape::with_options(natural, Some(resolution.into()), Scaling::Proportional, Some(power))
                        .unwrap();
                let highest = wide.template.probability.iter().fold(0.0_f64, |a, b| a.max(*b));
                for (i, p) in wide.template.probability.iter().enumerate() {
                    let told = judge.window_probability(edges[i], edges[i + 1]);
                    assert!((p - told).abs() < 1e-5 * highest, "{natural:?} bin {i}: {p:e} {told:e}");
                }
                let whole: f64 = wide.template.probability.iter().sum();
                assert!((whole + wide.template.below_axis + wide.template.above_axis - 1.0).abs() < 1e-12);
                assert!((wide.acceptance - 0.5).abs() < 1e-12);
                assert_eq!(wide.beyond, 0.0);
            }
        }
    }

    #[test]
    fn panels_of_half_the_length_change_no_bin() {
        let mut model = constant_model([-0.001, 0.01, 1.4, 5.0, 1.7, 9.0]);
        // Curves with a slope and a corner.
        model.scale.knot_gev = Some(190.0);
        model.acceptance.curve.basis = Basis { order: 1, hinge: true };
        model.acceptance.curve.coefficients = vec![-1.0, 0.3, -0.5];
        model.curves[1].basis = Basis { order: 1, hinge: true };
        model.curves[1].coefficients = vec![-4.6, -0.3, 0.6];
        model.covariance = DMatrix::from_diagonal_element(8, 8, 1e-8);
        for width in [10.0, 0.1] {
            for natural in [
                Natural::Relativistic(Relativistic::new(200.0, width).unwrap()),
                Natural::BreitWigner(BreitWigner::new(200.0, width).unwrap()),
            ] {
                let truth = NaturalMass { natural, falloff_power: 0.0, threshold_gev: 0.0 };
                let one = wide_with_panels(&model, &truth, &edges(), true, 1.0).unwrap();
                let two = wide_with_panels(&model, &truth, &edges(), true, 2.0).unwrap();
                let highest = one.template.probability.iter().fold(0.0_f64, |a, b| a.max(*b));
                for (a, b) in one.template.probability.iter().zip(&two.template.probability) {
                    assert!((a - b).abs() < 1e-5 * highest, "{a:e} {b:e}");
                }
                assert!((one.acceptance / two.acceptance - 1.0).abs() < 1e-7);
            }
        }
    }
}
