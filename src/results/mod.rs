//! Everything that one study asks for: templates, shifts and models of all channels and mass points.

use crate::fold::{FoldError, FoldRecord, Folded, Progress, fold_channel};
use crate::model::{CategoryModel, Fitted, Modelled, Simulation, model_category};
use crate::process::{Channel, EventSource, Study, Width};
use crate::shift::{ChannelShifts, LabelledResponse, Nuisance, NuisanceError, ShiftError, fold_shifts, nuisances_of};
use crate::template::LabelledTemplate;
use rayon::prelude::*;
use std::sync::{Mutex, PoisonError};

/// What the folds of a study give.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Results {
    /// Nominal and shifted templates, by channel and mass point.
    pub templates: Vec<LabelledTemplate>,
    /// How each nominal fold went.
    pub records: Vec<FoldRecord>,
    /// What every nuisance does to every template.
    pub responses: Vec<LabelledResponse>,
    /// The nuisances that touch a channel.
    pub nuisances: Vec<Nuisance>,
    /// The shapes fitted to the templates of width 0.
    pub fitted: Vec<Fitted>,
    /// The mass models, one per channel and category where there is one.
    pub models: Vec<CategoryModel>,
    /// Simulated samples against the folded templates.
    pub simulations: Vec<Simulation>,
    /// What did not work, one sentence each.
    pub failures: Vec<String>,
    /// What the user should know of the models, one sentence each.
    pub notes: Vec<String>,
    /// CPU time of all folds, in seconds.
    pub cpu_seconds: f64,
}

/// Why a study cannot be folded.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum ResultsError {
    /// A nominal fold.
    #[error("channel {channel} at {mass_gev} GeV: {source}")]
    Fold {
        /// Name of the channel.
        channel: String,
        /// The mass point in GeV.
        mass_gev: f64,
        /// Why.
        source: FoldError,
    },
    /// A shifted fold.
    #[error("channel {channel} at {mass_gev} GeV: {source}")]
    Shift {
        /// Name of the channel.
        channel: String,
        /// The mass point in GeV.
        mass_gev: f64,
        /// Why.
        source: ShiftError,
    },
    /// The nuisances of the detector.
    #[error(transparent)]
    Nuisance(#[from] NuisanceError),
}

/// How far the work is.
#[derive(Clone, Debug, PartialEq)]
pub struct Step {
    /// What is at work.
    pub text: String,
    /// Share of all work done, 0 to 1, as far as it can be guessed; it never falls.
    pub fraction: f64,
}

/// Part of a fold's time that one shift takes; for the progress alone.
const SHIFT_PART: f64 = 0.65;

/// Share of the work that is kept for the models.
const MODEL_PART: f64 = 0.1;

/// Folds a study: every channel at every mass point, nominal and shifted, then the models. Where the resonance has a width,
/// the models need templates of width 0, which are folded too. Events from a file
/// make no model.
///
/// # Errors
/// See [`ResultsError`]. A precision that is not reached and a model that cannot be made are no errors: see
/// [`Results::records`] and [`Results::failures`].
pub fn fold_study(study: &Study, progress: &(dyn Fn(Step) + Sync)) -> Result<Results, ResultsError> {
    let mut results = Results::default();
    let masses = &study.resonance.masses_gev;
    let narrow = masses.iter().all(|mass| study.resonance.width.at_gev(*mass) == 0.0);
    let generated = matches!(study.resonance.source, EventSource::Generated(_));
    let mut width_zero = study.clone();
    width_zero.resonance.width = Width::Gev(0.0);
    let mut of_models: Vec<Vec<LabelledTemplate>> = Vec::new();
    let total = (study.channels.len() * masses.len()).max(1) as f64;
    let furthest = Mutex::new(0.0_f64);
    let report = |text: &str, fraction: f64| {
        // Reports come from several threads and start as guesses.
        let mut furthest = furthest.lock().unwrap_or_else(PoisonError::into_inner);
        if fraction > *furthest {
            *furthest = fraction;
            progress(Step { text: text.to_owned(), fraction });
        }
    };
    for (index, channel) in study.channels.iter().enumerate() {
        let nuisances = nuisances_of(study, index)?;
        let mut zero = Vec::new();
        for (number, &mass_gev) in masses.iter().enumerate() {
            let text = format!("{} at {mass_gev} GeV", channel.name);
            let before = (index * masses.len() + number) as f64;
            let parts = 1.0 + SHIFT_PART * nuisances.len() as f64 + if narrow { 0.0 } else { 1.0 };
            let advance = |done: f64, part: f64, fraction: f64| {
                let here = (done + part * fraction.clamp(0.0, 1.0)) / parts;
                report(&text, (1.0 - MODEL_PART) * (before + here) / total);
            };
            let failed = |source| ResultsError::Fold { channel: channel.name.clone(), mass_gev, source };
            let folded = fold_channel(study, index, mass_gev, &|p| advance(0.0, 1.0, p.fraction)).map_err(failed)?;
            let shift_progress = |p: Progress| advance(1.0, SHIFT_PART * nuisances.len() as f64, p.fraction);
            let shifts = fold_shifts(study, index, &folded, &shift_progress).map_err(|source| ResultsError::Shift {
                channel: channel.name.clone(),
                mass_gev,
                source,
            })?;
            // The events of a file have the width that their generator gave them: no shape of width 0 is fitted to them.
            if narrow && generated {
                zero.extend(folded.templates.iter().cloned());
            } else if generated && masses.len() > 1 {
                let folded = fold_channel(&width_zero, index, mass_gev, &|p| advance(parts - 1.0, 1.0, p.fraction))
                    .map_err(failed)?;
                results.cpu_seconds += folded.record.cpu_seconds;
                zero.extend(folded.templates);
            }
            let Folded { templates, record } = folded;
            let ChannelShifts { templates: shifted, responses, cpu_seconds } = shifts;
            results.cpu_seconds += record.cpu_seconds + cpu_seconds;
            results.templates.extend(templates.into_iter().chain(shifted));
            results.records.push(record);
            results.responses.extend(responses);
        }
        of_models.push(zero);
        for nuisance in nuisances {
            if !results.nuisances.contains(&nuisance) {
                results.nuisances.push(nuisance);
            }
        }
    }
    report("models", 1.0 - MODEL_PART);
    add_models(study, &of_models, &mut results);
    Ok(results)
}

/// Makes the models of all channels and categories.
fn add_models(study: &Study, of_models: &[Vec<LabelledTemplate>], results: &mut Results) {
    let work: Vec<(&Channel, Vec<&LabelledTemplate>)> = study
        .channels
        .iter()
        .zip(of_models)
        .flat_map(|(channel, templates)| {
            channel.categories.iter().map(move |category| {
                let own = templates.iter().filter(|labelled| labelled.category == category.name);
                (channel, own.collect())
            })
        })
        .collect();
    let modelled: Vec<Modelled> =
        work.par_iter().map(|(channel, templates)| model_category(study, channel, templates)).collect();
    for own in modelled {
        results.fitted.extend(own.fitted);
        results.models.extend(own.model);
        results.simulations.extend(own.simulation);
        results.failures.extend(own.failures);
        results.notes.extend(own.notes);
    }
}
