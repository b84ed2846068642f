//! Widths of a template: where its peak is and how wide it is, each with its numerical error.
//!
//! All are per accepted event and read the interpolated cumulative ([`Cumulative`]). A value that would depend on what
//! lies off the axis is `None`: a quantile that falls there, or a peak or narrowest interval that touches an end of the
//! axis beyond which there is probability.
//!
//! The widths of a shape ([`crate::lineshape::widths`]) search a smooth density with one peak through its quantiles. Here
//! peak and FWHM are exact in each bin's quadratic, every bin is searched (a template may be noisy, and its sum may fall),
//! and what lies off the axis is unknown; so the two share definitions and the minimiser, not the search.
//!
//! # Tested bounds
//!
//! Bins of 0.2 core widths (200 bins across ±20 % with a 1 % wide peak), any position of the peak in its bin, Gaussian
//! and double-sided Crystal Ball of equal core widths: peak 5e-4 core widths, FWHM 2e-4 and `sigma_eff` 2e-5 relative.
//! With unequal core widths the density has a kink in its slope at the peak and the bounds are 0.04 core widths, 1e-3
//! and 1e-4. Bins of 0.4 core widths: 3e-3, 2e-3 and 2e-4 (0.08, 5e-3 and 5e-4). (`tests/template_widths.rs`.)

use super::cumulative::{Cumulative, CumulativeError};
use super::{Replicate, Template, standard_error};
use crate::lineshape::widths::ONE_SIGMA;
use crate::numerics::root;

/// The fraction that `sigma_eff` and the central width hold: that of a Gaussian within one standard deviation.
pub const SIGMA_EFF_FRACTION: f64 = ONE_SIGMA;

/// Less probability than this beyond an end of the axis counts as none.
const NOTHING: f64 = 1e-12;

/// Starting points per bin in the search for the narrowest interval.
const STARTS_PER_BIN: usize = 4;

/// A value with its numerical standard error.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Measured {
    /// The value; `None` where it is not defined on the axis.
    pub value: Option<f64>,
    /// Standard error of the mean over the replicates; `None` without a value, with less than two replicates, or when
    /// a replicate has no value.
    pub error: Option<f64>,
}

/// Position and width of a template, masses in GeV.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Widths {
    /// Mean of the part on the axis, of the interpolated density (not of bin centres).
    pub mean_gev: Measured,
    /// Standard deviation of the part on the axis, of the interpolated density (no bin-width variance added).
    pub standard_deviation_gev: Measured,
    /// Where the interpolated density is highest.
    pub peak_gev: Measured,
    /// Full width at half maximum: between the half-maximum points nearest to the peak on either side.
    pub fwhm_gev: Measured,
    /// Half-width of the narrowest interval that holds [`SIGMA_EFF_FRACTION`] of the accepted events.
    pub sigma_eff_gev: Measured,
    /// Half the distance between the quantiles (1 ± [`SIGMA_EFF_FRACTION`])/2.
    pub central_68_gev: Measured,
    /// Probability below the axis.
    pub below_axis: Measured,
    /// Probability above the axis.
    pub above_axis: Measured,
    /// Whether the running sum never falls; where it does, quantiles are first crossings.
    pub monotone: bool,
}

/// Values of one cumulative distribution, without errors.
#[derive(Clone, Copy)]
struct Values([Option<f64>; 8]);

impl Values {
    fn of(cumulative: &Cumulative) -> Self {
        let (mean, deviation) = moments(cumulative);
        let (peak, fwhm) = peak_and_fwhm(cumulative);
        let (below, above) = cumulative.outside();
        let (sigma_eff, central) = (sigma_eff(cumulative), central_68(cumulative));
        Values([mean, deviation, peak, fwhm, sigma_eff, central, Some(below), Some(above)])
    }
}

impl Cumulative {
    /// Where the interpolated density is highest; `None` where that is not on the axis.
    pub fn peak(&self) -> Option<f64> {
        peak_and_fwhm(self).0
    }

    /// Half-width of the narrowest interval that holds [`SIGMA_EFF_FRACTION`] of the accepted events.
    pub fn sigma_eff(&self) -> Option<f64> {
        sigma_eff(self)
    }
}

impl Template {
    /// Widths with their numerical errors.
    ///
    /// # Errors
    /// When the template or one of its replicates has no cumulative distribution ([`Cumulative::new`]).
    pub fn widths(&self) -> Result<Widths, CumulativeError> {
        let cumulative = Cumulative::of(self)?;
        let values = Values::of(&cumulative);
        let of_replicate = |r: &Replicate| {
            Cumulative::new(&self.edges_gev, &r.probability, r.below_axis, r.above_axis).map(|c| Values::of(&c))
        };
        let replicates = self.replicates.iter().map(of_replicate).collect::<Result<Vec<_>, _>>()?;
        let measured = |k: usize| {
            let value = values.0[k];
            let spread: Option<Vec<f64>> = replicates.iter().map(|r| r.0[k]).collect();
            let error = value.and(spread).and_then(|v| standard_error(v.iter().copied()));
            Measured { value, error }
        };
        Ok(Widths {
            mean_gev: measured(0),
            standard_deviation_gev: measured(1),
            peak_gev: measured(2),
            fwhm_gev: measured(3),
            sigma_eff_gev: measured(4),
            central_68_gev: measured(5),
            below_axis: measured(6),
            above_axis: measured(7),
            monotone: cumulative.monotone(),
        })
    }
}

/// Mean and standard deviation of the interpolated density on the axis.
fn moments(cumulative: &Cumulative) -> (Option<f64>, Option<f64>) {
    let width = cumulative.bin_width();
    let edges = cumulative.edges();
    let origin = 0.5 * (edges[0] + edges[edges.len() - 1]);
    let (mut total, mut first, mut second) = (0.0, 0.0, 0.0);
    for (bin, p) in cumulative.probability().iter().enumerate() {
        let (start, end) = cumulative.edge_slopes(bin);
        // Moments about the bin's centre of the quadratic with these end values and integral p.
        let inner_first = width * (end - start) / 12.0;
        let inner_second = width * width * ((start + end) / 60.0 + p / 20.0);
        let centre = 0.5 * (edges[bin] + edges[bin + 1]) - origin;
        total += p;
        first += p * centre + inner_first;
        second += centre * (p * centre + 2.0 * inner_first) + inner_second;
    }
    if total <= 0.0 {
        return (None, None);
    }
    let mean = first / total;
    let variance = second / total - mean * mean;
    (Some(origin + mean), (variance >= 0.0).then(|| f64::sqrt(variance)))
}

fn peak_and_fwhm(cumulative: &Cumulative) -> (Option<f64>, Option<f64>) {
    let bins = cumulative.probability().len();
    let (mut highest, mut peak_bin, mut peak_t) = (0.0, 0, 0.0);
    for bin in 0..bins {
        let density = cumulative.bin_density(bin);
        let vertex = -0.5 * density.b / density.a;
        for t in [0.0, vertex, 1.0] {
            if (0.0..=1.0).contains(&t) && density.at(t) > highest {
                (highest, peak_bin, peak_t) = (density.at(t), bin, t);
            }
        }
    }
    let (below, above) = cumulative.outside();
    let at_low_end = peak_bin == 0 && peak_t == 0.0;
    let at_high_end = peak_bin + 1 == bins && peak_t == 1.0;
    if highest <= 0.0 || (at_low_end && below.abs() > NOTHING) || (at_high_end && above.abs() > NOTHING) {
        return (None, None);
    }
    let half = 0.5 * highest;
    // Each side: the crossing nearest to the peak, else the end of the axis where nothing lies beyond it.
    let (low_edge, high_edge) = cumulative.range_gev();
    let left = (0..=peak_bin)
        .rev()
        .find_map(|bin| {
            let limit = if bin == peak_bin { peak_t } else { 1.0 };
            let crossings = cumulative.bin_density(bin).crossings(half);
            crossings.into_iter().rev().flatten().find(|t| *t <= limit).map(|t| cumulative.place(bin, t))
        })
        .or_else(|| (below.abs() <= NOTHING).then_some(low_edge));
    let right = (peak_bin..bins)
        .find_map(|bin| {
            let limit = if bin == peak_bin { peak_t } else { 0.0 };
            let crossings = cumulative.bin_density(bin).crossings(half);
            crossings.into_iter().flatten().find(|t| *t >= limit).map(|t| cumulative.place(bin, t))
        })
        .or_else(|| (above.abs() <= NOTHING).then_some(high_edge));
    let fwhm = left.zip(right).map(|(left, right)| right - left);
    (Some(cumulative.place(peak_bin, peak_t)), fwhm)
}

fn central_68(cumulative: &Cumulative) -> Option<f64> {
    let tail = 0.5 * (1.0 - SIGMA_EFF_FRACTION);
    let low = cumulative.quantile(tail)?;
    let high = cumulative.quantile(1.0 - tail)?;
    Some(0.5 * (high - low))
}

fn sigma_eff(cumulative: &Cumulative) -> Option<f64> {
    let (first, last) = cumulative.sum_range();
    if last - first < SIGMA_EFF_FRACTION {
        return None;
    }
    let (low, high) = cumulative.range_gev();
    // With a falling running sum no single start is the last; the search then runs over the whole axis.
    let latest = if cumulative.monotone() { cumulative.quantile(last - SIGMA_EFF_FRACTION)? } else { high };
    let width_from = |start: f64| -> f64 {
        let end = cumulative.at(start).and_then(|sum| {
            let target = sum + SIGMA_EFF_FRACTION;
            // At the latest start rounding may ask for a hair more than there is.
            let reachable = if target > last && target - last < 1e-14 { last } else { target };
            cumulative.quantile(reachable)
        });
        end.filter(|end| *end > start).map_or(f64::INFINITY, |end| end - start)
    };
    let step = cumulative.bin_width() / STARTS_PER_BIN as f64;
    let steps = (((latest - low) / step).ceil() as usize).max(1);
    let start_at = |k: usize| if k >= steps { latest } else { low + step * k as f64 };
    let mut best = (f64::INFINITY, 0);
    for k in 0..=steps {
        let width = width_from(start_at(k));
        if width < best.0 {
            best = (width, k);
        }
    }
    if !best.0.is_finite() {
        return None;
    }
    let bracket = (start_at(best.1.saturating_sub(1)), start_at(best.1 + 1));
    // The width is flat at its minimum: 1e-8 of the bracket is exact to rounding.
    let found = root::minimise(bracket.0, bracket.1, 1e-8 * (bracket.1 - bracket.0), width_from);
    let known = (start_at(best.1), best.0);
    let (start, width) = if width_from(found) < known.1 { (found, width_from(found)) } else { known };
    let (below, above) = cumulative.outside();
    let margin = 1e-6 * step;
    let touches_low = start - low < margin && below.abs() > NOTHING;
    let touches_high = high - (start + width) < margin && above.abs() > NOTHING;
    (!touches_low && !touches_high).then_some(0.5 * width)
}
