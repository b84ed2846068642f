//! From the totals of the scramblings to templates with errors.

use super::engine::Total;
use super::last_leg::Sums;
use super::list_sums::ListSums;
use crate::process::Channel;
use crate::template::{LabelledTemplate, Replicate, Template, standard_error};

/// The scramblings of one category, normalised.
fn replicates(totals: &[Total], category: usize) -> Vec<Replicate> {
    totals.iter().map(|total| normalised(&total.sums[category], total.generated)).collect()
}

fn normalised(sums: &Sums, generated: f64) -> Replicate {
    let cumulative = sums.cumulative();
    let accepted = sums.accepted;
    // Nothing accepted: probabilities of nothing are 0.
    let unit = if accepted == 0.0 { 0.0 } else { 1.0 / accepted };
    Replicate {
        probability: cumulative.windows(2).map(|pair| (pair[1] - pair[0]) * unit).collect(),
        below_axis: cumulative[0] * unit,
        above_axis: (accepted - cumulative[cumulative.len() - 1]) * unit,
        acceptance: if generated == 0.0 { 0.0 } else { accepted / generated },
    }
}

/// The pooled template of a category and the errors of its bins.
fn pooled(totals: &[Total], category: usize) -> (Replicate, Vec<f64>, Vec<Replicate>) {
    let mut sum = totals[0].clone();
    for total in &totals[1..] {
        sum.add(total);
    }
    let mean = normalised(&sum.sums[category], sum.generated);
    let replicates = replicates(totals, category);
    let errors = (0..mean.probability.len())
        .map(|bin| standard_error(replicates.iter().map(|replicate| replicate.probability[bin])).unwrap_or(0.0))
        .collect();
    (mean, errors, replicates)
}

/// RMS error over the bins relative to the highest bin, in the worst category.
pub(super) fn precision(totals: &[Total]) -> f64 {
    (0..totals[0].sums.len())
        .map(|category| {
            let (mean, errors, _) = pooled(totals, category);
            let highest = mean.probability.iter().fold(0.0_f64, |a, b| a.max(b.abs()));
            let rms = (errors.iter().map(|e| e * e).sum::<f64>() / errors.len().max(1) as f64).sqrt();
            if highest > 0.0 { rms / highest } else { 0.0 }
        })
        .fold(0.0, f64::max)
}

/// One template per category.
pub(super) fn templates(
    channel: &Channel,
    mass_gev: f64,
    totals: &[Total],
    list: Option<&ListSums>,
) -> Vec<LabelledTemplate> {
    let generated: f64 = totals.iter().map(|total| total.generated).sum();
    channel
        .categories
        .iter()
        .enumerate()
        .map(|(index, category)| {
            let (mean, error, replicates) = pooled(totals, index);
            let lost: f64 = totals.iter().map(|total| total.sums[index].lost).sum();
            let (list_error, acceptance_list_error) = match list {
                None => (vec![0.0; error.len()], 0.0),
                Some(list) => list_errors(list, index, &mean),
            };
            let weights: Vec<(f64, f64)> =
                totals.iter().map(|total| (total.sums[index].accepted, total.sums[index].unfiltered)).collect();
            let efficiency = efficiency(weights.iter().map(|w| w.0).sum(), weights.iter().map(|w| w.1).sum());
            let template = Template {
                edges_gev: channel.axis.edges_gev(mass_gev),
                acceptance_error: standard_error(replicates.iter().map(|replicate| replicate.acceptance))
                    .unwrap_or(0.0),
                probability: mean.probability,
                error,
                list_error,
                below_axis: mean.below_axis,
                above_axis: mean.above_axis,
                acceptance: mean.acceptance,
                acceptance_list_error,
                efficiency,
                efficiency_error: standard_error(weights.iter().map(|w| self::efficiency(w.0, w.1))).unwrap_or(0.0),
                efficiency_list_error: list.map_or(0.0, |list| efficiency_list_error(list, index, efficiency)),
                lost: if generated == 0.0 { 0.0 } else { lost / generated },
                replicates,
            };
            LabelledTemplate {
                channel: channel.name.clone(),
                category: category.name.clone(),
                mass_gev,
                shift: "nominal".to_string(),
                template,
            }
        })
        .collect()
}

/// Errors of ratios of sums over groups of events, to first order: with q_i the weighted probability of group i in the bin
/// and a_i its accepted weight, p = sum q/sum a has the variance sum (q_i - p a_i)²/(sum a)²; likewise the acceptance.
fn list_errors(list: &ListSums, category: usize, mean: &Replicate) -> (Vec<f64>, f64) {
    let accepted = mean.acceptance * list.weights;
    let unit = if accepted == 0.0 { 0.0 } else { 1.0 / accepted.abs() };
    let bins = mean
        .probability
        .iter()
        .enumerate()
        .map(|(bin, p)| {
            let variance = list.squares[category][bin] - 2.0 * p * list.products[category][bin]
                + p * p * list.accepted_squares[category];
            variance.max(0.0).sqrt() * unit
        })
        .collect();
    let a = mean.acceptance;
    let variance =
        list.accepted_squares[category] - 2.0 * a * list.accepted_products[category] + a * a * list.weight_squares;
    let acceptance = if list.weights == 0.0 { 0.0 } else { variance.max(0.0).sqrt() / list.weights.abs() };
    (bins, acceptance)
}

/// Accepted weight over what it would be at an efficiency of 1; 1 where nothing is accepted even then.
fn efficiency(accepted: f64, unfiltered: f64) -> f64 {
    if unfiltered == 0.0 { 1.0 } else { accepted / unfiltered }
}

/// As [`list_errors`]: the variance of sum a/sum u is sum (a_i - e u_i)²/(sum u)².
fn efficiency_list_error(list: &ListSums, category: usize, efficiency: f64) -> f64 {
    let variance = list.accepted_squares[category] - 2.0 * efficiency * list.unfiltered_products[category]
        + efficiency * efficiency * list.unfiltered_squares[category];
    let unfiltered = list.unfiltered[category];
    if unfiltered == 0.0 { 0.0 } else { variance.max(0.0).sqrt() / unfiltered.abs() }
}

/// What the user should hear of: events whose efficiency nothing tells.
pub(super) fn notes(totals: &[Total]) -> Vec<String> {
    let generated: f64 = totals.iter().map(|total| total.generated).sum();
    let outside: f64 = totals.iter().map(|total| total.outside).sum();
    if outside == 0.0 || generated == 0.0 {
        return Vec::new();
    }
    let percent = 100.0 * outside / generated;
    vec![format!(
        "{percent:.3} % of the generated weight has a leg outside of every cell of its efficiency table, where the \
         efficiency is 0"
    )]
}
