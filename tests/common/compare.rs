//! Comparison of a template with plainly smeared masses.
//!
//! Plain masses are independent draws, so their counts per bin are multinomial. Masses that come from several smearings
//! of one list of truth events vary less than that, so the comparison with a template of the same list is on the
//! lenient side.

use peakfold::fold::plain::{PlainCategory, PlainSample};
use peakfold::template::{Replicate, Template};
use statrs::distribution::{ChiSquared, ContinuousCDF};

/// Least expected number of plain events in a merged bin.
const LEAST_EXPECTED: f64 = 20.0;
/// Parts of a sample that serve as replicates of a template made from it.
const PARTS: usize = 16;

/// How a template compares with plain masses of one category.
#[derive(Clone, Copy, Debug)]
pub struct Comparison {
    /// Pearson's chi-square over merged bins, the parts below and above the axis included, given the accepted weight.
    pub chi_square: f64,
    /// Its degrees of freedom: merged bins minus 1.
    pub degrees_of_freedom: usize,
    /// Probability of a larger chi-square.
    pub chi_square_p: f64,
    /// Difference of the acceptances over its standard error.
    pub acceptance_pull: f64,
    /// Largest difference of the cumulative distributions at the bin edges.
    pub cdf_difference: f64,
    /// Kolmogorov's probability of a larger one (asymptotic; on the lenient side for binned values).
    pub cdf_p: f64,
}

impl Comparison {
    /// Whether nothing speaks against the template: both probabilities above 1e-4, acceptance within 4 standard errors.
    pub fn agrees(&self) -> bool {
        self.chi_square_p > 1e-4 && self.cdf_p > 1e-4 && self.acceptance_pull.abs() < 4.0
    }
}

/// Compares the template of one category with plain masses.
///
/// The numerical error of the template counts: its bins through the spread of its replicates over each merged bin (or
/// the sum of the errors when it has none), its CDF likewise.
pub fn compare(plain: &PlainSample, category: usize, template: &Template) -> Comparison {
    let sample = &plain.categories[category];
    let total = sample.accepted_weight();
    let squares: f64 = sample.weights.iter().map(|w| w * w).sum();
    // Events of weight 1 that would fluctuate as much.
    let effective = total * total / squares;

    let observed = probabilities(sample, &template.edges_gev);
    let expected = with_ends(template.below_axis, &template.probability, template.above_axis);
    let replicates: Vec<Vec<f64>> =
        template.replicates.iter().map(|r| with_ends(r.below_axis, &r.probability, r.above_axis)).collect();
    let errors = with_ends(0.0, &template.error, 0.0);
    let error_of = |range: std::ops::Range<usize>| -> f64 {
        if replicates.len() < 2 {
            return errors[range].iter().sum();
        }
        let sums: Vec<f64> = replicates.iter().map(|r| r[range.clone()].iter().sum()).collect();
        super::moments(&sums).1 / (sums.len() as f64).sqrt()
    };

    let merged = merge(&expected, effective);
    let chi_square: f64 = merged
        .iter()
        .map(|range| {
            let seen: f64 = observed[range.clone()].iter().sum();
            let told: f64 = expected[range.clone()].iter().sum();
            (seen - told).powi(2) / (told / effective + error_of(range.clone()).powi(2))
        })
        .sum();
    let degrees_of_freedom = merged.len() - 1;

    let (mut seen, mut told, mut cdf_difference, mut cdf_error) = (0.0, 0.0, 0.0f64, 0.0f64);
    for i in 0..expected.len() {
        seen += observed[i];
        told += expected[i];
        cdf_difference = cdf_difference.max((seen - told).abs());
        cdf_error = cdf_error.max(error_of(0..i + 1));
    }
    // The largest variance of an empirical CDF of n events is 1/(4n); the template's own adds to it.
    let scale = (1.0 / effective + 4.0 * cdf_error.powi(2)).sqrt();

    let acceptance = total / plain.generated_weight;
    let variance = (squares * (1.0 - 2.0 * acceptance) + acceptance * acceptance * plain.generated_weight_squared)
        / plain.generated_weight.powi(2);
    // No sample tells an acceptance of 1 (or 0) from one that differs by less than an event.
    let one_event = plain.generated_weight_squared / plain.generated_weight.powi(2);
    let error = (variance.max(one_event.powi(2)) + template.acceptance_error.powi(2)).sqrt();
    let acceptance_pull = (acceptance - template.acceptance) / error;

    Comparison {
        chi_square,
        degrees_of_freedom,
        chi_square_p: ChiSquared::new(degrees_of_freedom.max(1) as f64).unwrap().sf(chi_square),
        acceptance_pull,
        cdf_difference,
        cdf_p: kolmogorov_probability(cdf_difference / scale),
    }
}

/// A template made of plain masses, its errors from their number.
pub fn template_of(plain: &PlainSample, category: usize, edges_gev: &[f64]) -> Template {
    let sample = &plain.categories[category];
    let whole = probabilities(sample, edges_gev);
    let last = whole.len() - 1;
    let size = sample.masses_gev.len().div_ceil(PARTS);
    let acceptance = sample.accepted_weight() / plain.generated_weight;
    let events = plain.generated as f64;
    let replicates = sample
        .masses_gev
        .chunks(size)
        .zip(sample.weights.chunks(size))
        .map(|(masses, weights)| {
            let part = PlainCategory { masses_gev: masses.into(), weights: weights.into(), ..Default::default() };
            let bins = probabilities(&part, edges_gev);
            Replicate { probability: bins[1..last].into(), below_axis: bins[0], above_axis: bins[last], acceptance }
        })
        .collect();
    let count = sample.masses_gev.len() as f64;
    Template {
        edges_gev: edges_gev.into(),
        probability: whole[1..last].into(),
        error: whole[1..last].iter().map(|p| (p * (1.0 - p) / count).max(0.0).sqrt()).collect(),
        list_error: vec![0.0; last - 1],
        below_axis: whole[0],
        above_axis: whole[last],
        acceptance,
        acceptance_error: (acceptance * (1.0 - acceptance) / events).sqrt(),
        acceptance_list_error: 0.0,
        efficiency: 1.0,
        efficiency_error: 0.0,
        efficiency_list_error: 0.0,
        lost: sample.lost_weight / plain.generated_weight,
        replicates,
    }
}

/// Kolmogorov's asymptotic survival function, 2 sum of (-1)^(k-1) exp(-2 k² x²) (A. Kolmogorov, Giorn. Ist. Ital.
/// Attuari 4 (1933) 83).
pub fn kolmogorov_probability(x: f64) -> f64 {
    if x < 0.2 {
        // Smaller than 1 by less than 1e-12; the alternating sum converges badly here.
        return 1.0;
    }
    let term = |k: i32| libm::exp(-2.0 * f64::from(k * k) * x * x) * if k % 2 == 1 { 2.0 } else { -2.0 };
    (1..=100).map(term).sum::<f64>().clamp(0.0, 1.0)
}

fn with_ends(below: f64, bins: &[f64], above: f64) -> Vec<f64> {
    [&[below], bins, &[above]].concat()
}

/// Shares of the weight below the axis, per bin, above the axis.
fn probabilities(sample: &PlainCategory, edges: &[f64]) -> Vec<f64> {
    let mut sums = vec![0.0; edges.len() + 1];
    for (mass, weight) in sample.masses_gev.iter().zip(&sample.weights) {
        sums[edges.partition_point(|edge| edge <= mass)] += weight;
    }
    let total: f64 = sums.iter().sum();
    sums.iter().map(|sum| sum / total).collect()
}

/// Ranges of neighbouring bins that expect enough events each.
fn merge(expected: &[f64], events: f64) -> Vec<std::ops::Range<usize>> {
    let mut ranges: Vec<std::ops::Range<usize>> = Vec::new();
    let (mut start, mut sum) = (0, 0.0);
    for (i, p) in expected.iter().enumerate() {
        sum += p * events;
        if sum >= LEAST_EXPECTED {
            ranges.push(start..i + 1);
            (start, sum) = (i + 1, 0.0);
        }
    }
    match ranges.last_mut() {
        Some(last) => last.end = expected.len(),
        None => ranges.push(0..expected.len()),
    }
    ranges
}
