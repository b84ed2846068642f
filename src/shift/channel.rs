//! All shifts of one channel at one mass point.

use super::folds::{FoldedShift, Subsets, fold_shift};
use super::nuisance::{Nuisance, NuisanceError, nuisances};
use super::response::Response;
use crate::fold::{FoldError, Folded, Progress};
use crate::process::Study;
use crate::template::{CumulativeError, LabelledTemplate};

/// Why the shifts of a channel could not be made.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum ShiftError {
    /// The nuisances do not make sense.
    #[error(transparent)]
    Nuisance(#[from] NuisanceError),
    /// A shifted fold failed.
    #[error(transparent)]
    Fold(#[from] FoldError),
    /// A template is none.
    #[error(transparent)]
    Template(#[from] CumulativeError),
}

/// The response of one template, with what it belongs to.
#[derive(Clone, Debug, PartialEq)]
pub struct LabelledResponse {
    /// Name of the channel.
    pub channel: String,
    /// Name of the category.
    pub category: String,
    /// Mass point in GeV.
    pub mass_gev: f64,
    /// The response.
    pub response: Response,
    /// Names of the numbers that were clipped, up or down.
    pub clipped: Vec<String>,
    /// Whether the shift is below the study's threshold, so that its templates are left out.
    pub pruned: bool,
    /// Error of the difference between shifted and nominal template that was reached.
    pub difference_error: f64,
}

/// The shifts of one channel at one mass point.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct ChannelShifts {
    /// The shifted templates that were not pruned: by nuisance, category, then up and down.
    pub templates: Vec<LabelledTemplate>,
    /// The response of every template to every nuisance that touches the channel.
    pub responses: Vec<LabelledResponse>,
    /// CPU time in seconds.
    pub cpu_seconds: f64,
}

/// The nuisances of a study's detector that touch a leg of a channel.
///
/// # Errors
/// See [`NuisanceError`].
pub fn nuisances_of(study: &Study, channel: usize) -> Result<Vec<Nuisance>, NuisanceError> {
    let Some(channel) = study.channels.get(channel) else { return Ok(Vec::new()) };
    let mut list = nuisances(&study.detector)?;
    list.retain(|nuisance| nuisance.touches(&study.detector, &channel.decay));
    Ok(list)
}

/// Folds a channel at a mass point under every nuisance that touches one of its legs.
///
/// # Errors
/// See [`ShiftError`].
pub fn fold_shifts(
    study: &Study,
    channel: usize,
    nominal: &Folded,
    progress: &(dyn Fn(Progress) + Sync),
) -> Result<ChannelShifts, ShiftError> {
    let list = nuisances_of(study, channel)?;
    let mut shifts = ChannelShifts::default();
    let mut subsets = Subsets::default();
    for (done, nuisance) in list.iter().enumerate() {
        let pair = fold_shift(study, channel, nominal, nuisance, &mut subsets)?;
        add(&mut shifts, study, nominal, pair)?;
        progress(Progress { fraction: (done + 1) as f64 / list.len() as f64 });
    }
    Ok(shifts)
}

fn add(
    shifts: &mut ChannelShifts,
    study: &Study,
    nominal: &Folded,
    pair: [FoldedShift; 2],
) -> Result<(), CumulativeError> {
    let mut clipped: Vec<String> = pair.iter().flat_map(|shift| shift.clipped.iter().cloned()).collect();
    clipped.dedup();
    for (category, labelled) in nominal.templates.iter().enumerate() {
        let Some(response) = Response::of(&pair, category)? else { continue };
        let size = response.size.cdf.max(response.size.acceptance);
        let pruned = size < study.prune_shifts_below;
        if !pruned {
            shifts.templates.extend(pair.iter().filter_map(|shift| shift.templates.get(category).cloned()));
        }
        shifts.responses.push(LabelledResponse {
            channel: labelled.channel.clone(),
            category: labelled.category.clone(),
            mass_gev: labelled.mass_gev,
            response,
            clipped: clipped.clone(),
            pruned,
            difference_error: pair.iter().fold(0.0, |worst: f64, shift| worst.max(shift.difference_error)),
        });
    }
    shifts.cpu_seconds += pair.iter().map(|shift| shift.cpu_seconds).sum::<f64>();
    Ok(())
}
