//! Folds of events read from a file: the points are those of the smearing only, several for every event.

use super::engine::{REPLICATES, Total, scramblings};
use super::estimate;
use super::event_list::{ChannelEvents, KEPT, Listed, read, selector};
use super::last_leg::{Sums, add};
use super::list_sums::ListSums;
use super::measure::Workspace;
use super::plan::Plan;
use super::{FoldError, FoldRecord, Folded, Progress};
use crate::detector::Detector;
use crate::events::{Selection, TruthDimensions};
use crate::numerics::sobol::{BLOCK, MAX_POINTS, Scrambling};
use crate::process::{EventList, Study};
use rayon::prelude::*;
use std::borrow::Cow;
use std::time::Instant;

/// Events that add up on their own before they join the total: a multiple of [`BLOCK`].
const BATCH: usize = 512;

/// Batches at work at once; the number must not depend on the number of threads.
const WAVE: usize = 16;

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
    queue: Vec<Listed>,
    folded: u64,
    pass: Pass,
}

impl Folder<'_> {
    /// Takes events; folds when enough for a wave have come, or all when `last`.
    fn take(&mut self, events: impl IntoIterator<Item = Listed>, last: bool) {
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

/// Folds the events of a file for one channel, in one pass with `exactly` so many points an event if that is given; or those
/// that are known already.
#[allow(clippy::too_many_arguments)]
pub(super) fn fold_file(
    study: &Study,
    detector: &Detector,
    channel_index: usize,
    mass_gev: f64,
    file: &EventList,
    known: Option<&ChannelEvents>,
    exactly: Option<u64>,
    progress: &(dyn Fn(Progress) + Sync),
) -> Result<Folded, FoldError> {
    let started = Instant::now();
    let channel = study.channels.get(channel_index).ok_or(FoldError::NoSuchChannel(channel_index))?;
    let selector = selector(study, channel, mass_gev)?;
    let plan = Plan::new(detector, channel, mass_gev, &TruthDimensions::default());
    let scramblings = scramblings(study.seed, &plan)?;
    let (categories, edges) = (channel.categories.len(), plan.axis.squares.len());
    let mut kept: Option<Cow<'_, [Listed]>> = known.map(|known| Cow::Borrowed(known.events.as_slice()));
    let mut record = FoldRecord { channel: channel.name.clone(), mass_gev, ..FoldRecord::default() };
    if let Some(known) = known {
        known.selection.verdict(&file.path, &channel.name)?;
        record.events_used = Some(known.events.len() as u64);
        record.events_effective = Some(known.selection.effective_events());
    }
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
                let selectors = std::slice::from_ref(&selector);
                let (selections, report) = read(file, selectors, progress, |_, events| {
                    if let Some(list) = &mut all {
                        list.extend_from_slice(&events);
                    }
                    if all.as_ref().is_some_and(|list| list.len() > KEPT) {
                        all = None;
                    }
                    folder.take(events, false);
                })?;
                folder.take([], true);
                let selection = selections.into_iter().next().unwrap_or_default();
                selection.verdict(&file.path, &channel.name)?;
                kept = all.map(Cow::Owned);
                record.events_used = Some(selection.used);
                record.events_effective = Some(selection.effective_events());
                record.events_skipped = skips(&selection);
                record.notes = report.warnings();
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
            let templates = estimate::templates(channel, mass_gev, &pass.totals, Some(&pass.list.finish()));
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
    events: &[Listed],
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
    for some in events.chunks(together) {
        for i in 0..BLOCK {
            match some.get(i / lanes) {
                Some(listed) => workspace.truth.set(i, &listed.event),
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
        for (listed, sums) in some.iter().zip(all.chunks_mut(categories)) {
            list.add_event(listed.group, listed.event.weight, sums, unit);
            sums.iter_mut().for_each(Sums::clear);
        }
        point += blocks * BLOCK as u64;
    }
    let points = events.len() as u64 * per_event * REPLICATES as u64;
    Pass { totals, list, cpu_seconds: begun.elapsed().as_secs_f64(), points }
}
