//! Folds of events read from a file: the points are those of the smearing only, several for every event.

use super::engine::{REPLICATES, Total, scramblings};
use super::estimate::{self, ListSums};
use super::last_leg::{Sums, add};
use super::measure::Workspace;
use super::plan::Plan;
use super::{FoldError, FoldRecord, Folded, Progress};
use crate::detector::Detector;
use crate::events::lhe::{EventFile, Options};
use crate::events::{Selection, Selector, TruthDimensions};
use crate::kinematics::TruthEvent;
use crate::numerics::sobol::{BLOCK, MAX_POINTS, Scrambling};
use crate::process::Study;
use rayon::prelude::*;
use std::path::Path;
use std::time::Instant;

/// Events that add up on their own before they join the total: a multiple of [`BLOCK`].
const BATCH: usize = 512;

/// Batches at work at once; the number must not depend on the number of threads.
const WAVE: usize = 16;

/// A list of up to this many events stays in memory between the passes; a longer one is read again.
const KEPT: usize = 1 << 16;

/// What a pass over the list gave.
struct Pass {
    totals: Vec<Total>,
    list: ListSums,
    cpu_seconds: f64,
    points: u64,
}

/// One pass over the events: `per_event` points of every scrambling for each, a power of two.
struct Folder<'a> {
    plan: &'a Plan,
    scramblings: &'a [Scrambling],
    categories: usize,
    per_event: u64,
    queue: Vec<TruthEvent>,
    folded: u64,
    pass: Pass,
}

impl Folder<'_> {
    /// Takes events; folds when enough for a wave have come, or all when `last`.
    fn take(&mut self, events: impl IntoIterator<Item = TruthEvent>, last: bool) {
        self.queue.extend(events);
        while self.queue.len() >= BATCH * WAVE || (last && !self.queue.is_empty()) {
            let count = self.queue.len().min(BATCH * WAVE);
            let (plan, scramblings, categories) = (self.plan, self.scramblings, self.categories);
            let (per_event, folded) = (self.per_event, self.folded);
            let results: Vec<Pass> = self.queue[..count]
                .par_chunks(BATCH)
                .enumerate()
                .map_init(
                    || Workspace::new(plan),
                    |workspace, (batch, events)| {
                        let start = (folded + (batch * BATCH) as u64) * per_event;
                        fold_batch(plan, scramblings, categories, events, per_event, start, workspace)
                    },
                )
                .collect();
            for result in &results {
                for (total, part) in self.pass.totals.iter_mut().zip(&result.totals) {
                    total.add(part);
                }
                self.pass.list.add(&result.list);
                self.pass.cpu_seconds += result.cpu_seconds;
                self.pass.points += result.points;
            }
            self.folded += count as u64;
            self.queue.drain(..count);
        }
    }
}

/// Folds the events of a file for one channel, in one pass with `exactly` so many points an event if that is given.
pub(super) fn fold_file(
    study: &Study,
    detector: &Detector,
    channel_index: usize,
    mass_gev: f64,
    path: &Path,
    exactly: Option<u64>,
    progress: &(dyn Fn(Progress) + Sync),
) -> Result<Folded, FoldError> {
    let started = Instant::now();
    let channel = study.channels.get(channel_index).ok_or(FoldError::NoSuchChannel(channel_index))?;
    let selector = Selector::new(&channel.decay, study.resonance.intermediate.mass_gev)
        .ok_or_else(|| FoldError::CannotPick { channel: channel.name.clone() })?
        .with_choice(channel.choice, mass_gev)
        .with_recombination(study.resonance.radiation.map(|radiation| radiation.recombination_delta_r));
    let plan = Plan::new(detector, channel, mass_gev, &TruthDimensions::default());
    let scramblings = scramblings(study.seed, &plan)?;
    let (categories, edges) = (channel.categories.len(), plan.axis.squares.len());
    let mut kept: Option<Vec<TruthEvent>> = None;
    let mut record = FoldRecord { channel: channel.name.clone(), mass_gev, ..FoldRecord::default() };
    let mut per_event = exactly.unwrap_or(1);
    loop {
        let mut folder = Folder {
            plan: &plan,
            scramblings: &scramblings,
            categories,
            per_event,
            queue: Vec::new(),
            folded: 0,
            pass: Pass {
                totals: vec![Total::new(categories, edges); REPLICATES],
                list: ListSums::new(categories, edges - 1),
                cpu_seconds: 0.0,
                points: 0,
            },
        };
        match &kept {
            Some(events) => folder.take(events.iter().copied(), true),
            None => {
                let mut all = Some(Vec::new());
                let (selection, warnings) = read(path, &selector, progress, |events: Vec<TruthEvent>| {
                    if let Some(list) = &mut all {
                        list.extend_from_slice(&events);
                    }
                    if all.as_ref().is_some_and(|list| list.len() > KEPT) {
                        all = None;
                    }
                    folder.take(events, false);
                })?;
                folder.take([], true);
                selection.verdict(path, &channel.name)?;
                kept = all;
                record.events_used = Some(selection.used);
                record.events_skipped = skips(&selection);
                record.notes = warnings;
            }
        }
        let used = record.events_used.unwrap_or(0);
        let pass = folder.pass;
        record.cpu_seconds += pass.cpu_seconds;
        record.points += pass.points;
        let reached = estimate::precision(&pass.totals);
        let next = next_per_event(
            per_event,
            reached / study.precision,
            used,
            study.max_points - record.points.min(study.max_points),
        );
        if reached <= study.precision || next <= per_event || exactly.is_some() {
            record.final_points = pass.points;
            record.precision_reached = reached;
            record.reached = reached <= study.precision;
            record.notes.extend(estimate::notes(&pass.totals));
            record.wall_seconds = started.elapsed().as_secs_f64();
            record.events_effective = Some(pass.list.weights * pass.list.weights / pass.list.weight_squares);
            let templates = estimate::templates(channel, mass_gev, &pass.totals, Some(&pass.list));
            return Ok(Folded { templates, record });
        }
        per_event = next;
    }
}

/// Points per event of the next pass, for an error that is `excess` times too large: each pass stands alone, since more
/// points of one event are worth more than those of two passes. After the first the error falls about as points^-0.8;
/// no pass takes more than is `left`, and one that could not take more points than the last is not made.
fn next_per_event(per_event: u64, excess: f64, events: u64, left: u64) -> u64 {
    let wanted = if per_event == 1 { 4.0 } else { per_event as f64 * libm::pow(excess, 1.25).max(2.0) };
    // `as` saturates; the clamp leaves room for the next power of two.
    let wanted = (wanted.min(1e9) as u64).next_power_of_two();
    let per_pass = events.max(1);
    let most = (left / REPLICATES as u64).min(MAX_POINTS) / per_pass;
    if most == 0 { 0 } else { wanted.min(1 << most.ilog2()) }
}

/// Reads the file once and hands on the events of the channel, in the order of the file.
fn read(
    path: &Path,
    selector: &Selector,
    progress: &(dyn Fn(Progress) + Sync),
    mut consume: impl FnMut(Vec<TruthEvent>),
) -> Result<(Selection, Vec<String>), FoldError> {
    let mut file = EventFile::open(path, &Options::default())?;
    let mut selection = Selection::default();
    let position = file.progress().clone();
    file.for_each_batch(|batch| -> Result<(), FoldError> {
        let mut events = Vec::with_capacity(batch.len());
        for event in batch.events() {
            let outcome = selector.select(&event);
            selection.add(&event, &outcome);
            events.extend(outcome.ok());
        }
        consume(events);
        let total = position.total_bytes.unwrap_or(0) as f64;
        let fraction = if total > 0.0 { position.bytes_read() as f64 / total } else { 0.0 };
        progress(Progress { fraction: fraction.min(1.0) });
        Ok(())
    })?;
    selection.add_left_out(file.report());
    Ok((selection, file.report().warnings()))
}

fn skips(selection: &Selection) -> Vec<(String, u64)> {
    selection
        .reasons()
        .filter(|(_, tally)| tally.count > 0)
        .map(|(skip, tally)| (skip.to_string(), tally.count))
        .collect()
}

/// Folds up to [`BATCH`] events with `per_event` points of every scrambling.
fn fold_batch(
    plan: &Plan,
    scramblings: &[Scrambling],
    categories: usize,
    events: &[TruthEvent],
    per_event: u64,
    first_point: u64,
    workspace: &mut Workspace,
) -> Pass {
    let begun = Instant::now();
    let edges = plan.axis.squares.len();
    let mut totals = vec![Total::new(categories, edges); REPLICATES];
    let mut list = ListSums::new(categories, edges - 1);
    // A block of points holds several events, or an event takes several blocks.
    let together = (BLOCK as u64 / per_event).max(1) as usize;
    let blocks = (per_event / BLOCK as u64).max(1);
    let lanes = per_event.min(BLOCK as u64) as usize;
    // Of each event and category: one scrambling, and all.
    let mut one = vec![Sums::new(edges); together * categories];
    let mut all = one.clone();
    let mut touched = vec![false; together * categories];
    let mut point = first_point;
    for group in events.chunks(together) {
        for i in 0..BLOCK {
            match group.get(i / lanes) {
                Some(event) => workspace.truth.set(i, event),
                None => workspace.truth.clear(i),
            }
        }
        for (scrambling, total) in scramblings.iter().zip(&mut totals) {
            for block in 0..blocks {
                total.generated += workspace.truth.generated.iter().sum::<f64>();
                workspace.measure(plan, scrambling, point + block * BLOCK as u64);
                total.outside += workspace.outside;
                for (last, lane) in workspace.last.iter().zip(&workspace.event) {
                    let slot = lane / lanes * categories + last.category;
                    touched[slot] = true;
                    add(plan, last, &mut one[slot]);
                }
                for (lane, category, weight) in &workspace.lost {
                    let slot = lane / lanes * categories + category;
                    touched[slot] = true;
                    one[slot].lost += weight;
                }
            }
            for (slot, (sums, touched)) in one.iter_mut().zip(&mut touched).enumerate() {
                if std::mem::take(touched) {
                    total.sums[slot % categories].add(sums);
                    all[slot].add(sums);
                    sums.clear();
                }
            }
        }
        let unit = 1.0 / (per_event * REPLICATES as u64) as f64;
        for (event, sums) in group.iter().zip(all.chunks_mut(categories)) {
            list.add_event(event.weight, sums, unit);
            sums.iter_mut().for_each(Sums::clear);
        }
        point += blocks * BLOCK as u64;
    }
    let points = events.len() as u64 * per_event * REPLICATES as u64;
    Pass { totals, list, cpu_seconds: begun.elapsed().as_secs_f64(), points }
}
