//! Folded templates against simulated samples: per mass point, and what smearing and scale would make them agree.

use nalgebra::{DMatrix, DVector};
use statrs::distribution::{ChiSquared, ContinuousCDF};

use super::anchor::{Anchor, BinnedSample};
use super::mass_model::ModelPoint;
use super::response::Response;
use super::shape::{parameter_link, prototype};
use crate::fit::{Expected, FitError, fit_counts, positive_inverse};
use crate::lineshape::Resolution;
use crate::lineshape::widths::narrowest_interval;
use crate::template::{Cumulative, CumulativeError, Measured, SIGMA_EFF_FRACTION, Template};

/// Bins are joined until the fold expects this many effective entries of the sample.
const LEAST_EXPECTED: f64 = 20.0;
/// Least number of joined bins of a sample.
const LEAST_BINS: usize = 5;
/// Smearing below this part of sigma_eff is interpolated, for its derivative in the square is 0/0 at 0.
const SMALL: f64 = 0.1;
/// Steps of the sum over a standard normal, and where it ends. The sum over equal steps of a smooth function times a
/// Gaussian is exact to rounding at such steps.
const STEP: f64 = 0.25;
const STEPS: i32 = 28;
/// Largest distance of a minimum, in units of the logarithm of the likelihood, of which one standard error is 0.5.
const NEAR: f64 = 1e-3;
/// Step in a parameter's smooth coordinate for derivatives of sigma_eff.
const DIFFERENCE: f64 = 1e-4;

/// Why there is no comparison.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum AgreementError {
    /// Not a folded and a simulated template of the same mass and axis.
    #[error("the folded and the simulated template at {0} GeV are not on the same axis")]
    Axis(f64),
    /// A template without a running sum.
    #[error("the folded template at {0} GeV: {1}")]
    Cumulative(f64, CumulativeError),
    /// A folded template without a width.
    #[error("the folded template at {0} GeV has no sigma_eff on its axis")]
    NoWidth(f64),
    /// No anchor.
    #[error("there is no simulated mass point to compare with")]
    None,
    /// A peak so narrow that it fills a few bins.
    #[error("the sample at {mass_gev} GeV fills {bins} bins with enough entries, and {LEAST_BINS} are needed")]
    TooFewBins {
        /// Mass.
        mass_gev: f64,
        /// Joined bins.
        bins: usize,
    },
    /// The minimiser could not start.
    #[error(transparent)]
    Fit(#[from] FitError),
    /// No minimum.
    #[error("the fit of scale and smearing did not converge: fold and simulation differ by more than these can mend")]
    NotConverged,
}

/// A folded template against a simulated one, each with the statistical error (that of the fold included).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct AnchorComparison {
    /// Mass point in GeV.
    pub mass_gev: f64,
    /// Effective entries of the sample on the axis.
    pub effective_entries: f64,
    /// Simulated over folded sigma_eff, both of the fitted shapes: that of the sample's own bins would be too small, since
    /// the narrowest interval picks fluctuations.
    pub sigma_eff_ratio: Measured,
    /// Peak of the simulated less that of the folded, of the fitted shapes, in MeV.
    pub peak_shift_mev: Measured,
    /// The same in units of the folded sigma_eff.
    pub peak_shift_in_sigma_eff: Measured,
    /// Largest |ΔCDF| at the bin edges, both normalised on the axis.
    pub largest_cdf_difference: f64,
    /// Statistical error of the sample's running sum where this is.
    pub cdf_error: f64,
    /// The largest |ΔCDF| that the statistics of the sample give on average when there is no difference: sqrt(π/2) ln 2
    /// over the root of the effective entries, the mean of A. Kolmogorov's distribution (1933; from memory).
    pub expected_cdf_difference: f64,
    /// Simulated over folded acceptance, where the sample tells one.
    pub acceptance_ratio: Option<Measured>,
}

/// Compares a sample with the folded mass point of the same mass.
///
/// # Errors
/// Templates of different masses or axes.
pub fn compare_anchor(anchor: &Anchor, folded: &ModelPoint<'_>) -> Result<AnchorComparison, AgreementError> {
    let mass_gev = anchor.mass_gev;
    same_axis(anchor, folded.template)?;
    let (own, other) = (sigma_eff(&anchor.response), sigma_eff(folded.response));
    let ratio = own.value.zip(other.value).map(|(own, other)| own / other);
    let relative = |m: Measured| m.error.zip(m.value).map(|(error, value)| error / value);
    let relative = relative(own).zip(relative(other)).map(|(a, b)| libm::hypot(a, b));
    let ratio = Measured { value: ratio, error: ratio.zip(relative).map(|(a, b)| a * b) };
    let peak_error = |r: &Response| r.errors().and_then(|e| e.first().copied());
    let peak_error = peak_error(&anchor.response).zip(peak_error(folded.response)).map(|(a, b)| libm::hypot(a, b));
    let shift = anchor.response.resolution.bias() - folded.response.resolution.bias();
    let scaled = |by: Option<f64>| Measured {
        value: by.map(|by| shift * by),
        error: peak_error.zip(by).map(|(error, by)| error * by),
    };
    let effective_entries = anchor.sample.effective_entries();
    let (largest_cdf_difference, place) = largest(&anchor.template.probability, &folded.template.probability);
    let (sample, fold) = (&anchor.template, folded.template);
    let acceptance_ratio = anchor.own_acceptance.then(|| {
        let ratio = sample.acceptance / fold.acceptance;
        let fold_error = libm::hypot(fold.acceptance_error, fold.acceptance_list_error) / fold.acceptance;
        let error = ratio * libm::hypot(sample.acceptance_list_error / sample.acceptance, fold_error);
        Measured { value: Some(ratio), error: Some(error) }
    });
    Ok(AnchorComparison {
        mass_gev,
        effective_entries,
        sigma_eff_ratio: ratio,
        peak_shift_mev: scaled(Some(1e3)),
        peak_shift_in_sigma_eff: scaled(other.value.map(|width| 1.0 / width)),
        largest_cdf_difference,
        cdf_error: (place * (1.0 - place) / effective_entries).max(0.0).sqrt(),
        expected_cdf_difference: (0.5 * std::f64::consts::PI / effective_entries).sqrt() * std::f64::consts::LN_2,
        acceptance_ratio,
    })
}

fn same_axis(anchor: &Anchor, folded: &Template) -> Result<(), AgreementError> {
    let same = anchor.template.edges_gev == folded.edges_gev;
    if same { Ok(()) } else { Err(AgreementError::Axis(anchor.mass_gev)) }
}

/// Largest difference of two running sums, and the second one there.
fn largest(p: &[f64], q: &[f64]) -> (f64, f64) {
    let (all_p, all_q): (f64, f64) = (p.iter().sum(), q.iter().sum());
    let (mut sum_p, mut sum_q, mut found) = (0.0, 0.0, (0.0_f64, 0.0));
    for (p, q) in p.iter().zip(q) {
        sum_p += p / all_p;
        sum_q += q / all_q;
        let difference = f64::abs(sum_p - sum_q);
        if difference > found.0 {
            found = (difference, sum_q);
        }
    }
    found
}

/// sigma_eff of a fitted shape with its error.
fn sigma_eff(response: &Response) -> Measured {
    let of = |shape: &Resolution| narrowest_interval(shape, SIGMA_EFF_FRACTION).map(|interval| interval.half_width());
    let value = of(&response.resolution);
    let parameters = response.parameters();
    let slope = |k: usize| -> Option<f64> {
        let link = parameter_link(&parameters[k].name);
        let eta = link.eta(parameters[k].value, response.mass_gev);
        let moved = |by: f64| -> Option<(f64, f64)> {
            let mut theta: Vec<f64> = parameters.iter().map(|p| p.value).collect();
            theta[k] = link.value(eta + by, response.mass_gev);
            let shape = prototype(response.shape).and_then(|kind| kind.with_parameters(&theta)).ok()?;
            Some((theta[k], of(&shape)?))
        };
        let (up, down) = (moved(DIFFERENCE)?, moved(-DIFFERENCE)?);
        Some((up.1 - down.1) / (up.0 - down.0))
    };
    let slopes: Option<Vec<f64>> = (0..parameters.len()).map(slope).collect();
    let error = slopes.zip(response.covariance.as_ref()).map(|(slopes, covariance)| {
        let g = DVector::from_vec(slopes);
        g.dot(&(covariance * &g)).max(0.0).sqrt()
    });
    Measured { value, error: value.and(error) }
}

/// Scale and extra smearing of one category that bring the folded templates into agreement with the simulated samples.
///
/// The reconstructed mass becomes `(1 + scale) m + smearing M z`, M the mass point and z standard normal, with the same two
/// numbers at all its mass points; what the fold has off the axis stays there. The likelihood is that of the samples' bins,
/// joined until each expects 20 effective entries.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Agreement {
    /// Relative scale: positive when the simulated mass is larger.
    pub scale: f64,
    /// Its statistical error.
    pub scale_error: f64,
    /// Extra smearing, relative to the mass point, to be added in quadrature; 0 when [`Self::narrower`].
    pub smearing: f64,
    /// How far the smearing reaches up at one standard error of its square.
    pub smearing_error: f64,
    /// Signed square of the smearing, which has a symmetric error: negative when the simulated peak is narrower. Then
    /// every bin is divided by what smearing multiplies it by, so that a Gaussian gets the width `sqrt(w² +
    /// squared_smearing)`; of other shapes the number is approximate, and the chi-square may stay large.
    pub squared_smearing: f64,
    /// Its statistical error.
    pub squared_smearing_error: f64,
    /// Correlation of scale and squared smearing.
    pub correlation: f64,
    /// Whether the simulated peak is narrower than the folded one, so that no smearing helps.
    pub narrower: bool,
    /// Pearson's chi-square with these values.
    pub chi_square: f64,
    /// Joined bins less one per mass point (its yield) less two.
    pub degrees_of_freedom: usize,
    /// Probability of a larger chi-square.
    pub p_value: f64,
    /// The chi-square of the templates as folded, for two degrees of freedom more.
    pub chi_square_as_folded: f64,
    /// Number of samples.
    pub samples: usize,
}

/// Fits [`Agreement`] to the samples of one category and the folded templates at the same masses.
///
/// # Errors
/// See [`AgreementError`].
pub fn agreement(pairs: &[(&Anchor, &Template)]) -> Result<Agreement, AgreementError> {
    if pairs.is_empty() {
        return Err(AgreementError::None);
    }
    let mut parts = Vec::new();
    for (anchor, folded) in pairs {
        same_axis(anchor, folded)?;
        parts.push(Part::new(&anchor.sample, folded, anchor.mass_gev)?);
    }
    // The unit of both parameters.
    let unit = parts.iter().map(|p| p.width_gev / p.mass_gev).sum::<f64>() / parts.len() as f64;
    let counts: Vec<f64> = parts.iter().flat_map(|p| p.found.iter().copied()).collect();
    let expected = |values: &[f64]| {
        let (scale, square) = (values[0] * unit, values[1] * unit * unit);
        let mut events = Vec::with_capacity(counts.len());
        let (mut by_scale, mut by_square) = (Vec::new(), Vec::new());
        for part in &parts {
            let [own, scales, squares] = part.expected(scale, square)?;
            events.extend(own);
            by_scale.extend(scales.iter().map(|v| v * unit));
            by_square.extend(squares.iter().map(|v| v * unit * unit));
        }
        Some(Expected { events, gradient: by_scale.into_iter().chain(by_square).collect() })
    };
    let bounds = [(-3.0, 3.0), (-0.45, 9.0)];
    let fit = fit_counts(&counts, &[0.0, 0.0], &bounds, &expected)?;
    let at_bound = fit.values.iter().zip(&bounds).any(|(v, b)| v - b.0 < 1e-3 || b.1 - v < 1e-3);
    let at = expected(&fit.values).ok_or(AgreementError::NotConverged)?;
    // Derivatives are approximate where the smearing is interpolated, so that a minimiser that finds no lower value may be
    // at the minimum for all that matters.
    let near = distance(&counts, &at).is_some_and(|d| d < NEAR);
    if at_bound || !near {
        return Err(AgreementError::NotConverged);
    }
    let start = expected(&[0.0, 0.0]).ok_or(AgreementError::NotConverged)?;
    let covariance = covariance(&parts, &at).ok_or(AgreementError::NotConverged)?;
    let chi_square = |expected: &Expected| -> f64 {
        let variances = parts.iter().flat_map(|p| p.variance.iter());
        let terms = counts.iter().zip(&expected.events).zip(variances);
        terms.map(|((n, mu), numerical)| (n - mu) * (n - mu) / (mu + numerical)).sum()
    };
    let degrees_of_freedom = counts.len() - parts.len() - 2;
    let own = chi_square(&at);
    let p_value = ChiSquared::new(degrees_of_freedom as f64).map_or(f64::NAN, |d| d.sf(own));
    let error = |k: usize| covariance[(k, k)].max(0.0).sqrt();
    let (square, square_error) = (fit.values[1] * unit * unit, error(1) * unit * unit);
    let smearing = square.max(0.0).sqrt();
    Ok(Agreement {
        scale: fit.values[0] * unit,
        scale_error: error(0) * unit,
        smearing,
        smearing_error: (square.max(0.0) + square_error).sqrt() - smearing,
        squared_smearing: square,
        squared_smearing_error: square_error,
        correlation: covariance[(0, 1)] / (error(0) * error(1)),
        narrower: square < 0.0,
        chi_square: own,
        degrees_of_freedom,
        p_value,
        chi_square_as_folded: chi_square(&start),
        samples: parts.len(),
    })
}

/// How much lower than here the negative logarithm of the likelihood is at the minimum of its parabola.
fn distance(counts: &[f64], at: &Expected) -> Option<f64> {
    let bins = counts.len();
    let slope = |k: usize| (0..bins).map(|i| (1.0 - counts[i] / at.events[i]) * at.gradient[k * bins + i]).sum::<f64>();
    let g = DVector::from_fn(2, |k, _| slope(k));
    let inverse = positive_inverse(&products(at, &|i| 1.0 / at.events[i]))?;
    Some(0.5 * g.dot(&(&inverse * &g)))
}

/// Sums over the bins of products of derivatives.
fn products(at: &Expected, weight: &dyn Fn(usize) -> f64) -> DMatrix<f64> {
    let bins = at.events.len();
    DMatrix::from_fn(2, 2, |k, l| {
        (0..bins).map(|i| weight(i) * at.gradient[k * bins + i] * at.gradient[l * bins + i]).sum::<f64>()
    })
}

/// `H⁻¹ B H⁻¹`, B from the squared weights of the bins (P. J. Huber, Proc. Fifth Berkeley Symp. 1 (1967) 221), so that
/// weights that go with the mass are allowed for.
fn covariance(parts: &[Part], at: &Expected) -> Option<DMatrix<f64>> {
    let variance: Vec<f64> = parts.iter().flat_map(|p| p.squares.iter().copied()).collect();
    let hessian = products(at, &|i| 1.0 / at.events[i]);
    let scores = products(at, &|i| variance[i] / (at.events[i] * at.events[i]));
    let inverse = positive_inverse(&hessian)?;
    Some(&inverse * scores * &inverse)
}

/// One sample with its folded template. Events are effective ones: weights over the mean weight of an effective entry.
struct Part {
    mass_gev: f64,
    edges_gev: Vec<f64>,
    cumulative: Cumulative,
    width_gev: f64,
    below: f64,
    above: f64,
    events: f64,
    found: Vec<f64>,
    /// Sum of squared weights in the same unit.
    squares: Vec<f64>,
    /// Squared numerical error of the expected events.
    variance: Vec<f64>,
}

impl Part {
    fn new(sample: &BinnedSample, folded: &Template, mass_gev: f64) -> Result<Self, AgreementError> {
        let cumulative = Cumulative::of(folded).map_err(|error| AgreementError::Cumulative(mass_gev, error))?;
        let width_gev = cumulative.sigma_eff().ok_or(AgreementError::NoWidth(mass_gev))?;
        let events = sample.effective_entries();
        let unit = sample.on_axis() / events;
        let on_axis: f64 = folded.probability.iter().sum();
        let errors = folded.bin_errors();
        let last = folded.probability.len();
        let mut part = Part {
            mass_gev,
            edges_gev: vec![folded.edges_gev[0]],
            cumulative,
            width_gev,
            below: folded.below_axis,
            above: folded.above_axis,
            events,
            found: Vec::new(),
            squares: Vec::new(),
            variance: Vec::new(),
        };
        let (mut expected, mut from) = (0.0, 0);
        for bin in 0..last {
            expected += events * folded.probability[bin] / on_axis;
            if expected < LEAST_EXPECTED && bin + 1 < last {
                continue;
            }
            let range = from..=bin;
            let found = sample.weight[range.clone()].iter().sum::<f64>() / unit;
            let squares = sample.squared_weight[range.clone()].iter().sum::<f64>() / (unit * unit);
            let variance = errors[range].iter().map(|e| e * e).sum::<f64>() * (events / on_axis) * (events / on_axis);
            if expected < LEAST_EXPECTED && !part.found.is_empty() {
                // The rest joins the last bin.
                let own = part.found.len() - 1;
                part.found[own] += found;
                part.squares[own] += squares;
                part.variance[own] += variance;
                part.edges_gev[own + 1] = folded.edges_gev[bin + 1];
            } else {
                part.found.push(found);
                part.squares.push(squares);
                part.variance.push(variance);
                part.edges_gev.push(folded.edges_gev[bin + 1]);
            }
            (expected, from) = (0.0, bin + 1);
        }
        let bins = part.found.len();
        if bins < LEAST_BINS { Err(AgreementError::TooFewBins { mass_gev, bins }) } else { Ok(part) }
    }

    /// Running sum and density of the fold; beyond the axis the sum stays what it is at its end.
    fn folded(&self, m: f64) -> (f64, f64) {
        let (low, high) = self.cumulative.range_gev();
        if m <= low {
            (self.below, 0.0)
        } else if m >= high {
            (1.0 - self.above, 0.0)
        } else {
            (self.cumulative.at(m).unwrap_or(0.0), self.cumulative.density(m).unwrap_or(0.0))
        }
    }

    /// Running sum at a mass after scale and smearing, with its derivatives in the scale and the squared smearing.
    fn sum(&self, m: f64, scale: f64, square: f64) -> [f64; 3] {
        let width = self.width_gev / self.mass_gev;
        let stretch = 1.0 + scale;
        let place = m / stretch;
        let least = SMALL * SMALL * width * width;
        if square < least {
            // A parabola in the squared smearing from the fold to the least smearing, with the slope that is there.
            let (sum, density) = self.folded(place);
            let by_scale = -density * m / (stretch * stretch);
            let [end, end_by_scale, end_by_square] = self.sum(m, scale, least);
            let mean = (end - sum) / least;
            let bend = (end_by_square - mean) / least;
            let slope = mean - bend * least;
            let t = square / least;
            return [
                sum + square * (slope + square * bend),
                by_scale + t * (end_by_scale - by_scale),
                slope + 2.0 * square * bend,
            ];
        }
        let smearing = square.sqrt();
        let reach = smearing * self.mass_gev / stretch;
        let mut total = [0.0; 3];
        let mut norm = 0.0;
        for step in -STEPS..=STEPS {
            let z = STEP * f64::from(step);
            let weight = libm::exp(-0.5 * z * z);
            let u = place - reach * z;
            let (sum, density) = self.folded(u);
            norm += weight;
            total[0] += weight * sum;
            total[1] -= weight * density * u / stretch;
            total[2] -= weight * density * reach * z / (2.0 * square);
        }
        total.map(|v| v / norm)
    }

    /// Probabilities of the joined bins with their derivatives.
    fn bins(&self, scale: f64, square: f64) -> Vec<[f64; 3]> {
        let sums: Vec<[f64; 3]> = self.edges_gev.iter().map(|&m| self.sum(m, scale, square)).collect();
        sums.windows(2).map(|pair| std::array::from_fn(|k| pair[1][k] - pair[0][k])).collect()
    }

    /// Expected events per joined bin with their derivatives in scale and squared smearing; `None` where one is not
    /// positive.
    fn expected(&self, scale: f64, square: f64) -> Option<[Vec<f64>; 3]> {
        let mut bins = self.bins(scale, square.max(0.0));
        if square < 0.0 {
            // The inverse of what smearing by x (in w²) does to each bin, x such that a Gaussian of width w becomes one of
            // w² (1 - y).
            let width = self.width_gev / self.mass_gev;
            let y = -square / (width * width);
            if !(y < 0.5) {
                return None;
            }
            let x = y / (1.0 - 2.0 * y);
            let smeared = self.bins(scale, x * width * width);
            for ([p, by_scale, by_square], [q, q_by_scale, q_by_square]) in bins.iter_mut().zip(smeared) {
                let ratio = *p / q;
                *by_scale = ratio * (2.0 * *by_scale - ratio * q_by_scale);
                *by_square = ratio * ratio * q_by_square / ((1.0 - 2.0 * y) * (1.0 - 2.0 * y));
                *p *= ratio;
            }
        }
        let whole: [f64; 3] = std::array::from_fn(|k| bins.iter().map(|bin| bin[k]).sum());
        let mut all = [Vec::new(), Vec::new(), Vec::new()];
        for bin in bins {
            let share = bin[0] / whole[0];
            if !(share > 0.0) {
                return None;
            }
            all[0].push(self.events * share);
            for k in 1..3 {
                all[k].push(self.events * (bin[k] - share * whole[k]) / whole[0]);
            }
        }
        Some(all)
    }
}
