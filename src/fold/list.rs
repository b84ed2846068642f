//! Folds of events read from a file: the points are those of the smearing only, several for every event.

use super::engine::scramblings;
use super::estimate;
use super::event_list::{ChannelEvents, KEPT, Listed, read, selector};
use super::last_leg::{Sums, add};
use super::list_sums::ListSums;
use super::measure::Workspace;
use super::paired::{Paired, Pairing};
use super::plan::Plan;
use super::{FoldError, FoldRecord, Folded, Progress};
use crate::detector::Detector;
use crate::events::{Selection, TruthDimensions};
use crate::numerics::sobol::{BLOCK, MAX_POINTS, Scrambling};
use crate::process::{EventList, Study};
use rayon::prelude::*;
use std::borrow::Cow;
use std::time::Instant;

/// Most events that add up on their own before they join the total: a multiple of [`BLOCK`].
const BATCH: usize = 2048;

/// Points of one scrambling that a batch has at least, where there are events enough.
const BATCH_POINTS: u64 = 1 << 14;

/// Batches at work at once; the number must not depend on the number of threads.
const WAVE: usize = 16;

/// Lists with fewer events have each event, or group of events, as a unit of the list's statistics; longer ones those that
/// share a block of points, which are many still.
const SINGLE_UNITS: u64 = 64 * BLOCK as u64;

/// How one pass folds each event.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
struct Scheme {
    /// Points of every scrambling for each event, a power of two.
    per_event: u64,
    pairing: Pairing,
    /// Whether the events of a block are one unit of the list's statistics.
    block_units: bool,
}

impl Scheme {
    /// For a list of so many events; `None` for a list whose length is not known yet. A list that is not kept in memory is
    /// folded as one of unknown length.
    fn new(per_event: u64, events: Option<u64>) -> Self {
        let events = events.filter(|events| *events <= KEPT as u64);
        let points = events.map(|events| events.max(1).saturating_mul(per_event));
        let pairing = Pairing::new(points, per_event.max(BLOCK as u64));
        Scheme { per_event, pairing, block_units: events.is_none_or(|events| events >= SINGLE_UNITS) }
    }

    /// Points for each event, of all scramblings.
    fn points(self) -> u64 {
        self.per_event * self.pairing.scramblings() as u64
    }

    /// Events of a batch.
    fn batch(self) -> usize {
        ((BATCH_POINTS / self.per_event) as usize).clamp(BLOCK, BATCH)
    }
}

/// What a pass over the list gave.
struct Pass {
    paired: Paired,
    list: ListSums,
    cpu_seconds: f64,
}

/// One pass over the events.
struct Folder<'a> {
    plan: &'a Plan,
    scramblings: &'a [Scrambling],
    categories: usize,
    scheme: Scheme,
    queue: Vec<Listed>,
    folded: u64,
    pass: Pass,
}

impl<'a> Folder<'a> {
    fn new(plan: &'a Plan, scramblings: &'a [Scrambling], categories: usize, scheme: Scheme) -> Self {
        let edges = plan.axis.squares.len();
        let pass = Pass {
            paired: Paired::new(categories, edges),
            list: ListSums::new(categories, edges - 1),
            cpu_seconds: 0.0,
        };
        Folder { plan, scramblings, categories, scheme, queue: Vec::new(), folded: 0, pass }
    }

    /// Takes events; folds when enough for a wave have come, or all when `last`.
    fn take(&mut self, events: impl IntoIterator<Item = Listed>, last: bool) {
        self.queue.extend(events);
        let batch_size = self.scheme.batch();
        while self.queue.len() >= batch_size * WAVE || (last && !self.queue.is_empty()) {
            let count = self.queue.len().min(batch_size * WAVE);
            let (plan, scramblings, categories) = (self.plan, self.scramblings, self.categories);
            let (scheme, folded) = (self.scheme, self.folded);
            let results: Vec<Pass> = self.queue[..count]
                .par_chunks(batch_size)
                .enumerate()
                .map_init(
                    || Workspace::new(plan),
                    |workspace, (batch, events)| {
                        let start = (folded + (batch * batch_size) as u64) * scheme.per_event;
                        fold_batch(plan, scramblings, categories, events, scheme, start, workspace)
                    },
                )
                .collect();
            for result in &results {
                self.pass.paired.add(&result.paired);
                self.pass.list.add(&result.list);
                self.pass.cpu_seconds += result.cpu_seconds;
            }
            self.folded += count as u64;
            self.queue.drain(..count);
        }
    }
}

/// Folds the events of a file for one channel, in one pass at `exactly` the points of an earlier fold if that is given; or
/// those that are known already.
#[allow(clippy::too_many_arguments)]
pub(super) fn fold_file(
    study: &Study,
    detector: &Detector,
    channel_index: usize,
    mass_gev: f64,
    file: &EventList,
    known: Option<&ChannelEvents>,
    exactly: Option<&FoldRecord>,
    progress: &(dyn Fn(Progress) + Sync),
) -> Result<Folded, FoldError> {
    let started = Instant::now();
    let channel = study.channels.get(channel_index).ok_or(FoldError::NoSuchChannel(channel_index))?;
    let selector = selector(study, channel, mass_gev)?;
    let plan = Plan::new(detector, channel, mass_gev, &TruthDimensions::default());
    let scramblings = scramblings(study.seed, &plan)?;
    let categories = channel.categories.len();
    let mut kept: Option<Cow<'_, [Listed]>> = known.map(|known| Cow::Borrowed(known.events.as_slice()));
    let mut record = FoldRecord { channel: channel.name.clone(), mass_gev, ..FoldRecord::default() };
    if let Some(known) = known {
        known.selection.verdict(&file.path, &channel.name)?;
        record.events_used = Some(known.events.len() as u64);
        record.events_effective = Some(known.selection.effective_events());
    }
    let mut scheme = match exactly {
        Some(earlier) => Scheme::new(earlier.points_per_event.unwrap_or(1), earlier.events_used),
        None => Scheme::new(1, record.events_used),
    };
    loop {
        let mut folder = Folder::new(&plan, &scramblings, categories, scheme);
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
        let points = used * scheme.points();
        let pass = folder.pass;
        record.cpu_seconds += pass.cpu_seconds;
        record.points += points;
        let totals = pass.paired.replicates();
        let reached = estimate::precision(&totals);
        let fitting = Scheme::new(scheme.per_event, Some(used));
        let next = if exactly.is_some() {
            scheme
        } else if scheme != fitting {
            // The length was not known: the pass was a first look.
            fitting
        } else {
            let left = study.max_points.saturating_sub(record.points);
            next_scheme(scheme, reached / study.precision, used, left).unwrap_or(scheme)
        };
        if next == scheme {
            record.final_points = points;
            record.points_per_event = Some(scheme.per_event);
            record.precision_reached = reached;
            record.reached = reached <= study.precision;
            record.notes.extend(estimate::notes(&totals));
            record.wall_seconds = started.elapsed().as_secs_f64();
            let templates = estimate::templates(channel, mass_gev, &totals, Some(&pass.list.finish()));
            return Ok(Folded { templates, record });
        }
        scheme = next;
    }
}

/// The next pass, for an error that is `excess` times too large; `None` when none is needed or allowed. Each pass stands
/// alone, since more points of one event are worth more than those of two passes. The error falls about as points^-0.8, and
/// no pass takes more than is `left`.
fn next_scheme(scheme: Scheme, excess: f64, events: u64, left: u64) -> Option<Scheme> {
    if !(excess > 1.0) {
        return None;
    }
    let wanted = (events * scheme.points()) as f64 * libm::pow(excess, 1.25);
    let mut best = None;
    for power in 1..48 {
        let next = Scheme::new(scheme.per_event.checked_shl(power)?, Some(events));
        let points = events.checked_mul(next.points())?;
        if points > left || points / next.pairing.scramblings() as u64 > MAX_POINTS {
            break;
        }
        best = Some(next);
        if points as f64 >= wanted {
            break;
        }
    }
    best
}

fn skips(selection: &Selection) -> Vec<(String, u64)> {
    selection
        .reasons()
        .filter(|(_, tally)| tally.count > 0)
        .map(|(skip, tally)| (skip.to_string(), tally.count))
        .collect()
}

/// Folds a batch of events.
fn fold_batch(
    plan: &Plan,
    scramblings: &[Scrambling],
    categories: usize,
    events: &[Listed],
    scheme: Scheme,
    first_point: u64,
    workspace: &mut Workspace,
) -> Pass {
    let begun = Instant::now();
    let edges = plan.axis.squares.len();
    let per_event = scheme.per_event;
    let mut paired = Paired::new(categories, edges);
    let mut list = ListSums::new(categories, edges - 1);
    // A block of points holds several events, or an event takes several blocks.
    let together = (BLOCK as u64 / per_event).max(1) as usize;
    let blocks = (per_event / BLOCK as u64).max(1);
    // Lanes of a block that belong to one unit.
    let lanes = if scheme.block_units { BLOCK } else { per_event.min(BLOCK as u64) as usize };
    let units = BLOCK / lanes;
    // Of each unit and category: one scrambling, and all.
    let mut one = vec![Sums::new(edges); units * categories];
    let mut all = one.clone();
    let mut touched = vec![false; units * categories];
    let mut point = first_point;
    for some in events.chunks(together) {
        for i in 0..BLOCK {
            match some.get(i * together / BLOCK) {
                Some(listed) => workspace.truth.set(i, &listed.event),
                None => workspace.truth.clear(i),
            }
        }
        for (number, scrambling) in scramblings.iter().enumerate().take(scheme.pairing.scramblings()) {
            let place = scheme.pairing.place(number, point);
            for block in 0..blocks {
                let generated = workspace.truth.generated.iter().sum::<f64>();
                workspace.measure(plan, scrambling, point + block * BLOCK as u64);
                paired.add_events(generated, workspace.outside);
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
                    paired.add_sums(place, slot % categories, sums);
                    all[slot].add(sums);
                    sums.clear();
                }
            }
        }
        let unit = 1.0 / scheme.points() as f64;
        let members = if scheme.block_units { together } else { 1 };
        for (members, sums) in some.chunks(members).zip(all.chunks_mut(categories)) {
            list.add_unit(members, sums, unit);
            sums.iter_mut().for_each(Sums::clear);
        }
        point += blocks * BLOCK as u64;
    }
    Pass { paired, list, cpu_seconds: begun.elapsed().as_secs_f64() }
}
