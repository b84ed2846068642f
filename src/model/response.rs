//! The fit of a resolution shape to one template.

use nalgebra::{DMatrix, DVector};

use super::shape::{largest_cdf_difference, of_shape, parameter_link, prior, prototype, rising};
use crate::fit::{Curve, CurveFit, CurvePoint, Curves, FitError, Link, Stop, positive_inverse};
use crate::lineshape::widths::FWHM_PER_SIGMA;
use crate::lineshape::{Parameter, Resolution, Shape, ShapeError};
use crate::process::ShapeChoice;
use crate::template::{CumulativeError, Template};

/// Negative bins may hold this part of a template: with more, the criterion may have no minimum.
const NEGATIVE: f64 = 0.01;
/// Least number of bins per parameter that a fit is tried with.
const BINS_PER_PARAMETER: usize = 1;

/// Why a shape cannot be fitted to a template.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum ResponseError {
    /// The bins are not those of a template.
    #[error(transparent)]
    Cumulative(#[from] CumulativeError),
    /// Numbers of bins and errors differ, or edges do not rise.
    #[error(
        "the template is not whole: {edges} edges, {bins} bins, {errors} errors; edges must rise, one more than bins"
    )]
    Incomplete {
        /// Edges.
        edges: usize,
        /// Bins.
        bins: usize,
        /// Errors.
        errors: usize,
    },
    /// The mass point is no positive number.
    #[error("the mass point is {0} GeV; it must be a positive number")]
    Mass(f64),
    /// Nothing on the axis.
    #[error("the bins on the axis add to {0}; a shape needs a positive probability there")]
    Empty(f64),
    /// Too much of it is negative.
    #[error("negative bins hold {0:.4} of the template; a shape can be fitted up to {NEGATIVE}")]
    Negative(f64),
    /// Too few bins that hold something.
    #[error("{filled} bins hold something, for {parameters} parameters of the shape; use more bins or a simpler shape")]
    TooFewBins {
        /// Bins that are not empty.
        filled: usize,
        /// Parameters.
        parameters: usize,
    },
    /// A shape that cannot be made.
    #[error(transparent)]
    Shape(#[from] ShapeError),
    /// The minimiser could not start.
    #[error(transparent)]
    Fit(#[from] FitError),
}

/// A resolution shape fitted to a template: the minimum of `-Σ p ln q`, p and q normalised on the axis.
///
/// Bins of weighted lists may be negative, together up to 1 % of the template: they count in the criterion as they are,
/// which keeps its minimum while the rest outweighs them.
#[derive(Clone, Debug, PartialEq)]
pub struct Response {
    /// Kind of shape.
    pub shape: ShapeChoice,
    /// Mass point in GeV.
    pub mass_gev: f64,
    /// The shape; its bias is the position of its peak less the mass point.
    pub resolution: Resolution,
    /// Numerical covariance of its parameters, from the scramblings of the template or, without them, from the errors of
    /// its bins as if these were independent. `None` where the second derivatives at the minimum are not positive.
    pub covariance: Option<DMatrix<f64>>,
    /// How the minimiser ended; anything but [`Stop::Converged`] is a fit that failed.
    pub stop: Stop,
    /// Largest |ΔCDF| between shape and template at the bin edges, both normalised on the axis.
    pub largest_cdf_difference: f64,
    /// `Σ p ln(p/q)`, the information that is lost per event; half the chi-square that N events would find is N times
    /// this.
    pub divergence: f64,
    pub(super) etas: Vec<f64>,
    /// Expected second derivatives of the criterion in the etas.
    pub(super) information: DMatrix<f64>,
}

impl Response {
    /// Parameters with their values.
    pub fn parameters(&self) -> Vec<Parameter> {
        self.resolution.parameters()
    }

    /// Numerical standard error of each parameter.
    pub fn errors(&self) -> Option<Vec<f64>> {
        self.covariance.as_ref().map(|c| c.diagonal().iter().map(|v| v.max(0.0).sqrt()).collect())
    }

    /// Whether the minimum was reached.
    pub fn converged(&self) -> bool {
        self.stop == Stop::Converged
    }
}

/// A template as the fit takes it, checked.
pub(super) fn curve_point(template: &Template, mass_gev: f64) -> Result<CurvePoint, ResponseError> {
    let (edges, bins, errors) = (template.edges_gev.len(), template.probability.len(), template.error.len());
    if edges != bins + 1 || errors != bins || !rising(&template.edges_gev) {
        return Err(ResponseError::Incomplete { edges, bins, errors });
    }
    if !(mass_gev > 0.0 && mass_gev.is_finite()) {
        return Err(ResponseError::Mass(mass_gev));
    }
    let whole: f64 = template.probability.iter().sum();
    if !(whole > 0.0 && whole.is_finite()) {
        return Err(ResponseError::Empty(whole));
    }
    let negative = -template.probability.iter().filter(|p| **p < 0.0).sum::<f64>() / whole;
    if negative > NEGATIVE {
        return Err(ResponseError::Negative(negative));
    }
    Ok(CurvePoint {
        unit_gev: mass_gev,
        edges_gev: template.edges_gev.iter().map(|e| e - mass_gev).collect(),
        probability: normalised(&template.probability),
    })
}

pub(super) fn normalised(p: &[f64]) -> Vec<f64> {
    let whole: f64 = p.iter().sum();
    p.iter().map(|p| p / whole).collect()
}

/// Replicates normalised on the axis; `None` without at least two.
pub(super) fn replicates(template: &Template) -> Option<Vec<Vec<f64>>> {
    let bins = template.probability.len();
    let good = template.replicates.len() > 1
        && template.replicates.iter().all(|r| r.probability.len() == bins && r.probability.iter().sum::<f64>() > 0.0);
    good.then(|| template.replicates.iter().map(|r| normalised(&r.probability)).collect())
}

/// Fits a kind of shape to the template of a mass point.
///
/// A fit that does not converge is an outcome: see [`Response::stop`].
///
/// # Errors
/// A template that no shape can be fitted to.
pub fn fit_response(template: &Template, mass_gev: f64, choice: ShapeChoice) -> Result<Response, ResponseError> {
    let point = curve_point(template, mass_gev)?;
    let kind = prototype(choice)?;
    let parameters = kind.parameters();
    let filled = point.probability.iter().filter(|p| **p > 0.0).count();
    if filled < BINS_PER_PARAMETER * parameters.len() {
        return Err(ResponseError::TooFewBins { filled, parameters: parameters.len() });
    }
    let curves: Vec<Curve> = parameters
        .iter()
        .map(|p| Curve { link: parameter_link(&p.name), prior: prior(&p.name), basis: vec![vec![1.0]] })
        .collect();
    let links: Vec<Link> = curves.iter().map(|c| c.link).collect();
    let fit = Curves { kind, points: vec![&point], curves };
    let (peak, sigma) = peak_and_sigma(template, mass_gev)?;
    let mut best: Option<CurveFit> = None;
    // Long tails, short tails, and a core that is too narrow.
    for (width, alpha, n) in [(0.95, 1.5, 5.0), (1.0, 2.0, 10.0), (0.7, 1.0, 3.0)] {
        let start: Vec<f64> = parameters
            .iter()
            .zip(&links)
            .map(|(p, link)| {
                let value = match p.name.as_str() {
                    "bias" => peak,
                    name if name.starts_with("sigma") => width * sigma,
                    name if name.starts_with("n_") => n,
                    _ => alpha,
                };
                link.eta(value, mass_gev)
            })
            .collect();
        match fit.fit(&start) {
            Ok(found) => {
                let better = best.as_ref().is_none_or(|b| b.stop != Stop::Converged && found.distance < b.distance);
                if better {
                    best = Some(found);
                }
            }
            Err(error) if best.is_none() && n == 3.0 => return Err(error.into()),
            Err(_) => {}
        }
        if best.as_ref().is_some_and(|b| b.stop == Stop::Converged) {
            break;
        }
    }
    let Some(found) = best else { return Err(ResponseError::Empty(0.0)) };
    let theta: Vec<f64> = links.iter().zip(&found.coefficients).map(|(l, &eta)| l.value(eta, mass_gev)).collect();
    let resolution = kind.with_parameters(&theta)?;
    let slopes = DVector::from_fn(links.len(), |k, _| links[k].slope(found.coefficients[k], mass_gev));
    let covariance = numerical_covariance(&fit, &found, &[template])
        .map(|c| DMatrix::from_fn(c.nrows(), c.ncols(), |i, j| c[(i, j)] * slopes[i] * slopes[j]));
    let (q, _, _) = of_shape(&resolution, mass_gev, &template.edges_gev);
    Ok(Response {
        shape: choice,
        mass_gev,
        largest_cdf_difference: largest_cdf_difference(&point.probability, &q),
        divergence: divergence(&point.probability, &normalised(&q)),
        resolution,
        covariance,
        stop: found.stop,
        etas: found.coefficients,
        information: found.information,
    })
}

/// The kind of shape with the smallest |ΔCDF| that fits better than `response` does, if there is one.
pub fn better_shape(template: &Template, response: &Response) -> Option<Response> {
    ShapeChoice::ALL
        .into_iter()
        .filter(|kind| *kind != response.shape)
        .filter_map(|kind| fit_response(template, response.mass_gev, kind).ok())
        .filter(|r| r.converged() && r.largest_cdf_difference < response.largest_cdf_difference)
        .min_by(|a, b| a.largest_cdf_difference.total_cmp(&b.largest_cdf_difference))
}

pub(super) fn divergence(p: &[f64], q: &[f64]) -> f64 {
    p.iter().zip(q).filter(|(p, q)| **p != 0.0 && **q > 0.0).map(|(p, q)| p * libm::log(p.abs() / q)).sum()
}

/// Where the peak lies less the mass point, and the width of the core, in GeV.
fn peak_and_sigma(template: &Template, mass_gev: f64) -> Result<(f64, f64), ResponseError> {
    // The errors of the widths are not asked for here.
    let bare = Template { replicates: Vec::new(), ..template.clone() };
    let widths = bare.widths()?;
    let bin = template.edges_gev[1] - template.edges_gev[0];
    let (low, high) = (template.edges_gev[0], template.edges_gev[template.edges_gev.len() - 1]);
    let peak = widths.peak_gev.value.or(widths.mean_gev.value).unwrap_or(0.5 * (low + high));
    let fwhm = widths.fwhm_gev.value.map(|v| v / FWHM_PER_SIGMA);
    let sigma = fwhm.into_iter().chain(widths.sigma_eff_gev.value).fold(f64::INFINITY, f64::min);
    let sigma = if sigma.is_finite() { sigma } else { widths.standard_deviation_gev.value.unwrap_or(high - low) };
    Ok((peak - mass_gev, sigma.clamp(0.3 * bin, high - low)))
}

/// Covariance of the coefficients from the errors of the templates: `δ = -H⁻¹ δg`, g the derivative of the criterion.
/// Scramblings of mass points that have equally many are taken in step, for they may be the same. A template without
/// scramblings counts with the errors of its bins, numerical and statistical, as if bins were independent: for the counts
/// of a sample this is exact, since the part of their correlation that normalisation makes is `g²`, 0 at the minimum.
pub(super) fn numerical_covariance(
    fit: &Curves<'_>,
    found: &CurveFit,
    templates: &[&Template],
) -> Option<DMatrix<f64>> {
    let count = found.coefficients.len();
    let mut score = DMatrix::zeros(count, count);
    // For each number of scramblings their sums over the mass points.
    let mut in_step: Vec<Vec<DVector<f64>>> = Vec::new();
    for (point, template) in templates.iter().enumerate() {
        let Some(own) = replicates(template) else {
            let whole: f64 = template.probability.iter().sum();
            let errors: Vec<f64> = template.bin_errors().iter().map(|e| e / whole).collect();
            score += fit.score_covariance(point, &found.coefficients, &errors)?;
            continue;
        };
        let place = in_step.iter().position(|sums| sums.len() == own.len()).unwrap_or_else(|| {
            in_step.push(vec![DVector::zeros(count); own.len()]);
            in_step.len() - 1
        });
        for (sum, probability) in in_step[place].iter_mut().zip(&own) {
            *sum += fit.score(point, &found.coefficients, probability)?;
        }
    }
    for sums in &in_step {
        let number = sums.len();
        let mean = sums.iter().fold(DVector::zeros(count), |sum: DVector<f64>, s| sum + s) / number as f64;
        for s in sums {
            let d = s - &mean;
            score += &d * d.transpose() / (number * (number - 1)) as f64;
        }
    }
    let inverse = positive_inverse(&found.hessian).or_else(|| positive_inverse(&found.information))?;
    Some(&inverse * score * &inverse)
}
