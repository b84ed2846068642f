//! Goodness of fit, binned also where the fit is not.

use statrs::distribution::{ChiSquared, ContinuousCDF};

use super::binned::expected;
use super::data::{Data, Masses};
use super::model::Model;

/// Bins are joined until each expects this many events: common practice for Pearson's chi-square.
const LEAST_EXPECTED: f64 = 10.0;
/// Most bins of the binned equivalent of an unbinned fit.
const MOST_BINS: usize = 100;

/// What was found and expected in one bin.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct GoodnessBin {
    /// Lower edge in GeV.
    pub low_gev: f64,
    /// Upper edge in GeV.
    pub high_gev: f64,
    /// Sum of the weights, or the count.
    pub found: f64,
    /// Variance of what was found if the fit is right.
    pub variance: f64,
    /// Expected events.
    pub expected: f64,
    /// Of which background.
    pub background: f64,
}

impl GoodnessBin {
    /// (found - expected) in standard deviations.
    pub fn pull(&self) -> f64 {
        (self.found - self.expected) / self.variance.sqrt()
    }
}

/// Pearson's chi-square of a fit.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Goodness {
    /// Chi-square over bins joined until each expects 10 events (bins with given errors are not joined).
    pub chi_square: f64,
    /// Bins less free parameters (and less 1 where the number of events is not fitted).
    pub degrees_of_freedom: usize,
    /// Probability of a larger chi-square. After an unbinned fit the true one lies between this and that for as many
    /// degrees more as there are free parameters (H. Chernoff and E. L. Lehmann, Ann. Math. Stat. 25 (1954) 579).
    pub p_value: f64,
}

/// Bins for the figure, and the goodness where enough bins are left.
pub(super) fn goodness(
    model: &Model,
    values: &[f64],
    data: &Data,
    free: usize,
) -> Option<(Vec<GoodnessBin>, Option<Goodness>)> {
    let bins = match data {
        Data::Masses(masses) => of_masses(model, values, masses)?,
        Data::Histogram(histogram) => {
            let expected = expected(model, values, histogram.bins(), false)?;
            let errors = histogram.errors();
            (0..histogram.bins().len())
                .map(|i| GoodnessBin {
                    low_gev: histogram.bins()[i].0,
                    high_gev: histogram.bins()[i].1,
                    found: histogram.counts()[i],
                    variance: errors.map_or(expected.events[i], |e| e[i] * e[i]),
                    expected: expected.events[i],
                    background: expected.background[i],
                })
                .collect()
        }
    };
    let joins = !matches!(data, Data::Histogram(histogram) if histogram.errors().is_some());
    let joined = if joins { join(&bins) } else { bins.clone() };
    let counted = usize::from(!model.counted);
    let goodness = (joined.len() > free + counted).then(|| {
        let chi_square = joined.iter().map(|bin| bin.pull() * bin.pull()).sum();
        let degrees_of_freedom = joined.len() - free - counted;
        let p_value = ChiSquared::new(degrees_of_freedom as f64).map_or(f64::NAN, |law| law.sf(chi_square));
        Goodness { chi_square, degrees_of_freedom, p_value }
    });
    Some((bins, goodness))
}

/// Equal bins across the window; where it is open, across the bulk of the masses with one outer bin on that side.
fn of_masses(model: &Model, values: &[f64], masses: &Masses) -> Option<Vec<GoodnessBin>> {
    let gev = masses.gev();
    let n = gev.len();
    let count = (n / 5).clamp(10, MOST_BINS);
    let ends = (
        if model.window.0.is_finite() { model.window.0 } else { gev[n / 500] },
        if model.window.1.is_finite() { model.window.1 } else { gev[n - 1 - n / 500] },
    );
    let mut edges: Vec<f64> = (0..=count).map(|i| ends.0 + (ends.1 - ends.0) * i as f64 / count as f64).collect();
    if !(edges[count] > edges[0]) {
        return None;
    }
    edges[count] = ends.1;
    let mut bins: Vec<(f64, f64)> = edges.windows(2).map(|pair| (pair[0], pair[1])).collect();
    if !model.window.0.is_finite() {
        bins.insert(0, (f64::NEG_INFINITY, edges[0]));
    }
    if !model.window.1.is_finite() {
        bins.push((edges[count], f64::INFINITY));
    }
    let told = expected(model, values, &bins, false)?;
    // Without yields the expectation is per event.
    let scale = if model.counted { 1.0 } else { masses.total() };
    let found: Vec<(f64, f64)> = bins
        .iter()
        .enumerate()
        .map(|(i, bin)| {
            // The last edge of a closed window belongs to it.
            let from = gev.partition_point(|&m| m < bin.0);
            let to = if i + 1 == bins.len() { n } else { gev.partition_point(|&m| m < bin.1) };
            match masses.weights() {
                None => ((to - from) as f64, (to - from) as f64),
                Some(w) => w[from..to].iter().fold((0.0, 0.0), |sum, w| (sum.0 + w, sum.1 + w * w)),
            }
        })
        .collect();
    let list = bins.iter().enumerate().map(|(i, &(low_gev, high_gev))| {
        let expected = scale * told.events[i];
        let variance = if masses.weights().is_some() { found[i].1 } else { expected };
        GoodnessBin { low_gev, high_gev, found: found[i].0, variance, expected, background: told.background[i] }
    });
    Some(list.collect())
}

/// Joins neighbours until each expects enough; what is left over at the end goes to the last.
fn join(bins: &[GoodnessBin]) -> Vec<GoodnessBin> {
    let mut list: Vec<GoodnessBin> = vec![];
    let mut open: Option<GoodnessBin> = None;
    let add = |a: &GoodnessBin, b: &GoodnessBin| GoodnessBin {
        high_gev: b.high_gev,
        found: a.found + b.found,
        variance: a.variance + b.variance,
        expected: a.expected + b.expected,
        background: a.background + b.background,
        ..*a
    };
    for bin in bins {
        let sum = open.map_or(*bin, |o| add(&o, bin));
        // As many events of weight 1 as would fluctuate alike.
        let effective = sum.expected * sum.expected / sum.variance;
        if sum.variance > 0.0 && effective >= LEAST_EXPECTED {
            list.push(sum);
            open = None;
        } else {
            open = Some(sum);
        }
    }
    if let (Some(rest), Some(last)) = (open, list.last_mut()) {
        *last = add(last, &rest);
    }
    list
}
