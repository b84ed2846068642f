//! Shifted templates: the same points folded with the moved detector.
//!
//! What a shift changes is much smaller than a template, and so is its error at equal points. So a leading subset of the
//! points does: the subset is folded with the nominal and with the moved detector, and their difference is added to the
//! nominal template of all points. The subset is doubled until the error of the difference is small enough.

use super::nuisance::{Nuisance, Sign};
use crate::fold::{FoldError, Folded, fold_shifted};
use crate::process::Study;
use crate::template::{LabelledTemplate, Replicate, Template, standard_error};

/// Error aimed at for the difference of shifted and nominal template: RMS over the bins, relative to the highest bin. Not
/// more than the study's precision.
pub const DIFFERENCE_AIM: f64 = 1e-4;

/// The smallest subset is this part of the points.
const SMALLEST_PART: u64 = 16;

/// The templates of one channel and mass point under one shift.
#[derive(Clone, Debug, PartialEq)]
pub struct FoldedShift {
    /// Name of the nuisance.
    pub nuisance: String,
    /// Its direction.
    pub sign: Sign,
    /// One template per category, labelled `nuisance:plus` or `nuisance:minus`.
    pub templates: Vec<LabelledTemplate>,
    /// Nominal templates from the same points as the shifted ones: their differences carry no noise of the points, by
    /// category.
    pub counterparts: Vec<(Template, Template)>,
    /// Numbers of the detector that were clipped at the end of their domain.
    pub clipped: Vec<String>,
    /// Points of the subset.
    pub points: u64,
    /// Error of the difference that was reached, in the worst category.
    pub difference_error: f64,
    /// CPU time in seconds, that of the nominal subset included where it was folded for this shift.
    pub cpu_seconds: f64,
}

/// The nominal template on a leading subset of the points, kept from shift to shift.
#[derive(Clone, Debug, Default)]
pub struct Subsets(Vec<Folded>);

/// Folds a channel at a mass point under one nuisance, up and down, on the points of the `nominal` fold or a leading subset
/// of them.
///
/// # Errors
/// As for the nominal fold.
pub fn fold_shift(
    study: &Study,
    channel: usize,
    nominal: &Folded,
    nuisance: &Nuisance,
    subsets: &mut Subsets,
) -> Result<[FoldedShift; 2], FoldError> {
    let all = nominal.record.final_points;
    let aim = DIFFERENCE_AIM.min(study.precision);
    let mut points = (all / SMALLEST_PART).max(1);
    let mut cpu_seconds = 0.0;
    loop {
        let (base, spent) = subsets.at(study, channel, nominal, points)?;
        cpu_seconds += spent;
        // A fold takes whole blocks, or an event list at least one point an event.
        let taken = base.record.final_points;
        let mut pair = Vec::with_capacity(2);
        for sign in [Sign::Plus, Sign::Minus] {
            let shifted = nuisance.apply(&study.detector, sign.factor());
            let folded = fold_shifted(study, &shifted.detector, channel, &base.record, &|_| ())?;
            cpu_seconds += folded.record.cpu_seconds;
            let differences = base.templates.iter().zip(&folded.templates);
            let error = differences.map(|(a, b)| difference_error(&a.template, &b.template)).fold(0.0, f64::max);
            pair.push((sign, shifted.clipped, folded, error));
        }
        let error = pair.iter().fold(0.0, |worst: f64, (.., error)| worst.max(*error));
        if error <= aim || taken >= all {
            let mut made = pair.into_iter().map(|(sign, clipped, folded, error)| FoldedShift {
                nuisance: nuisance.name.clone(),
                sign,
                templates: moved(nominal, base, &folded, &format!("{}:{sign}", nuisance.name)),
                counterparts: base
                    .templates
                    .iter()
                    .zip(folded.templates)
                    .map(|(a, b)| (a.template.clone(), b.template))
                    .collect(),
                clipped,
                points: taken,
                difference_error: error,
                cpu_seconds: 0.5 * cpu_seconds,
            });
            if let (Some(plus), Some(minus)) = (made.next(), made.next()) {
                return Ok([plus, minus]);
            }
        }
        // The error falls about as points^-0.8.
        let growth = libm::pow(error / aim, 1.25).clamp(2.0, SMALLEST_PART as f64);
        points = (taken as f64 * growth) as u64;
        points = points.next_power_of_two().clamp(2 * taken, all.max(2 * taken));
        points = points.min(all.max(1));
    }
}

impl Subsets {
    /// The nominal fold on the first points, and the CPU time that it took now.
    fn at(
        &mut self,
        study: &Study,
        channel: usize,
        nominal: &Folded,
        points: u64,
    ) -> Result<(&Folded, f64), FoldError> {
        let fits = |folded: &Folded| folded.record.points == points;
        let mut spent = 0.0;
        if !self.0.iter().any(fits) {
            let mut folded = if points >= nominal.record.final_points {
                nominal.clone()
            } else {
                let record = nominal.record.leading(points);
                let folded = fold_shifted(study, &study.detector, channel, &record, &|_| ())?;
                spent = folded.record.cpu_seconds;
                folded
            };
            // Found again by the points that were asked for.
            folded.record.points = points;
            self.0.push(folded);
        }
        let place = self.0.iter().position(fits).unwrap_or(0);
        Ok((&self.0[place], spent))
    }
}

/// RMS over the bins of the standard error of `b - a`, relative to the highest bin of `a`.
fn difference_error(a: &Template, b: &Template) -> f64 {
    let bins = a.probability.len();
    let highest = a.probability.iter().fold(0.0_f64, |most, p| most.max(p.abs()));
    if highest == 0.0 || bins == 0 {
        return 0.0;
    }
    let squares: f64 = (0..bins)
        .map(|bin| {
            let pairs = a.replicates.iter().zip(&b.replicates);
            let error = standard_error(pairs.map(|(a, b)| b.probability[bin] - a.probability[bin])).unwrap_or(0.0);
            error * error
        })
        .sum();
    (squares / bins as f64).sqrt() / highest
}

/// The nominal templates moved by the difference of the subsets.
fn moved(nominal: &Folded, base: &Folded, shifted: &Folded, label: &str) -> Vec<LabelledTemplate> {
    let pairs = base.templates.iter().zip(&shifted.templates);
    nominal
        .templates
        .iter()
        .zip(pairs)
        .map(|(nominal, (from, to))| LabelledTemplate {
            shift: label.to_owned(),
            template: add_difference(&nominal.template, &from.template, &to.template),
            ..nominal.clone()
        })
        .collect()
}

fn add_difference(nominal: &Template, from: &Template, to: &Template) -> Template {
    let bins = |nominal: &[f64], from: &[f64], to: &[f64]| -> Vec<f64> {
        nominal.iter().zip(from).zip(to).map(|((n, f), t)| n + (t - f)).collect()
    };
    let replicates: Vec<Replicate> = nominal
        .replicates
        .iter()
        .zip(&from.replicates)
        .zip(&to.replicates)
        .map(|((n, f), t)| Replicate {
            probability: bins(&n.probability, &f.probability, &t.probability),
            below_axis: n.below_axis + (t.below_axis - f.below_axis),
            above_axis: n.above_axis + (t.above_axis - f.above_axis),
            acceptance: n.acceptance + (t.acceptance - f.acceptance),
        })
        .collect();
    let error = (0..nominal.probability.len())
        .map(|bin| standard_error(replicates.iter().map(|r| r.probability[bin])).unwrap_or(0.0))
        .collect();
    Template {
        probability: bins(&nominal.probability, &from.probability, &to.probability),
        error,
        below_axis: nominal.below_axis + (to.below_axis - from.below_axis),
        above_axis: nominal.above_axis + (to.above_axis - from.above_axis),
        acceptance: nominal.acceptance + (to.acceptance - from.acceptance),
        acceptance_error: standard_error(replicates.iter().map(|r| r.acceptance)).unwrap_or(0.0),
        efficiency: nominal.efficiency + (to.efficiency - from.efficiency),
        lost: nominal.lost + (to.lost - from.lost),
        replicates,
        ..nominal.clone()
    }
}
