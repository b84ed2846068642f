//! The truth events that a file holds for the channels of a study.

use super::{FoldError, Progress};
use crate::events::{EventFile, Options, Report, Selection, Selector};
use crate::kinematics::TruthEvent;
use crate::process::{Channel, EventList, EventSource, Study};

/// A list of up to this many events stays in memory; a longer one is read again for every pass.
pub(super) const KEPT: usize = 1 << 16;

/// A truth event with the number of its group: statistics take a group as one unit.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Listed {
    pub event: TruthEvent,
    pub group: u64,
}

/// What the file of a study holds for one channel.
#[derive(Clone, Debug, PartialEq)]
pub struct ChannelEvents {
    /// What became of the events of the file.
    pub selection: Selection,
    /// The first ones that serve the channel, at most [`KEPT`].
    pub(super) events: Vec<Listed>,
}

/// What the file of a study holds, by one reading.
#[derive(Clone, Debug, PartialEq)]
pub struct StudyEvents {
    /// What was noticed in the file.
    pub report: Report,
    /// By channel, in the order of the study. Whether a template can be made of them says [`Selection::verdict`].
    pub channels: Vec<ChannelEvents>,
}

/// Reads the events of a study for all of its channels at once; `None` when its events are generated.
///
/// # Errors
/// The file is refused, or a channel has legs that cannot be picked.
pub fn read_events(study: &Study, progress: &(dyn Fn(Progress) + Sync)) -> Result<Option<StudyEvents>, FoldError> {
    let EventSource::File(list) = &study.resonance.source else { return Ok(None) };
    // With events there is one mass.
    let mass_gev = study.resonance.masses_gev.first().copied().unwrap_or(f64::NAN);
    let selectors: Vec<Selector> =
        study.channels.iter().map(|channel| selector(study, channel, mass_gev)).collect::<Result<_, _>>()?;
    let mut kept: Vec<Vec<Listed>> = vec![Vec::new(); selectors.len()];
    let (selections, report) = read(list, &selectors, progress, |channel, events| {
        if let Some(kept) = kept.get_mut(channel) {
            let room = KEPT - kept.len();
            kept.extend(events.into_iter().take(room));
        }
    })?;
    let channels =
        selections.into_iter().zip(kept).map(|(selection, events)| ChannelEvents { selection, events }).collect();
    Ok(Some(StudyEvents { report, channels }))
}

/// What picks the legs of a channel.
pub(super) fn selector(study: &Study, channel: &Channel, mass_gev: f64) -> Result<Selector, FoldError> {
    let resonance = &study.resonance;
    Ok(Selector::new(&channel.decay, resonance.intermediate.mass_gev)
        .ok_or_else(|| FoldError::CannotPick { channel: channel.name.clone() })?
        .with_choice(channel.choice, mass_gev)
        .with_recombination(resonance.radiation.map(|radiation| radiation.recombination_delta_r)))
}

/// Reads the file once and hands on the events of each selector, by its number, in the order of the file.
pub(super) fn read(
    list: &EventList,
    selectors: &[Selector],
    progress: &(dyn Fn(Progress) + Sync),
    mut consume: impl FnMut(usize, Vec<Listed>) + Send,
) -> Result<(Vec<Selection>, Report), FoldError> {
    let mut file = EventFile::open(&list.path, &Options { weight: list.weight.clone() })?;
    let mut selections = vec![Selection::default(); selectors.len()];
    let position = file.progress().clone();
    file.for_each_batch(|batch| -> Result<(), FoldError> {
        for (number, (selector, selection)) in selectors.iter().zip(&mut selections).enumerate() {
            let mut events = Vec::with_capacity(batch.len());
            for raw in batch.events() {
                let outcome = selector.select(&raw);
                selection.add(&raw, &outcome);
                events.extend(outcome.ok().map(|event| Listed { event, group: raw.group }));
            }
            consume(number, events);
        }
        let total = position.total_bytes.unwrap_or(0) as f64;
        let fraction = if total > 0.0 { position.bytes_read() as f64 / total } else { 0.0 };
        progress(Progress { fraction: fraction.min(1.0) });
        Ok(())
    })?;
    selections.iter_mut().for_each(|selection| selection.add_left_out(file.report()));
    Ok((selections, *file.report()))
}
