//! The folding engine: points in blocks, blocks in chunks, chunks in waves, doubled until the precision is met.

use super::last_leg::{Sums, add};
use super::measure::Workspace;
use super::plan::Plan;
use super::{FoldError, FoldRecord, Folded, Progress, estimate};
use crate::detector::Detector;
use crate::events::Generator;
use crate::numerics::sobol::{BLOCK, MAX_DIMENSIONS, MAX_POINTS, Scrambling};
use crate::process::{Production, Study};
use rayon::prelude::*;
use std::time::Instant;

/// Independent scramblings; their spread is the numerical error.
pub(super) const REPLICATES: usize = 16;

/// Points of one scrambling that add up on their own before they join the total.
const CHUNK: u64 = 4096;

/// Chunks at work at once; the number bounds the memory and must not depend on the number of threads.
const WAVE: usize = 64;

/// Points per scrambling of the first round.
const FIRST_ROUND: u64 = 256;

/// The totals of one scrambling.
#[derive(Clone, Debug)]
pub(super) struct Total {
    /// By category.
    pub sums: Vec<Sums>,
    /// Weight of all generated events.
    pub generated: f64,
    /// That of events with a leg outside of what the efficiency tells.
    pub outside: f64,
}

impl Total {
    pub fn new(categories: usize, edges: usize) -> Self {
        Total { sums: vec![Sums::new(edges); categories], generated: 0.0, outside: 0.0 }
    }

    pub fn add(&mut self, other: &Total) {
        for (a, b) in self.sums.iter_mut().zip(&other.sums) {
            a.add(b);
        }
        self.generated += other.generated;
        self.outside += other.outside;
    }

    /// The totals times a factor.
    pub fn scaled(&self, factor: f64) -> Self {
        let edges = self.sums.first().map_or(0, |sums| sums.below.len());
        let mut scaled = Total::new(self.sums.len(), edges);
        for (a, b) in scaled.sums.iter_mut().zip(&self.sums) {
            a.add_times(b, factor);
        }
        scaled.generated = factor * self.generated;
        scaled.outside = factor * self.outside;
        scaled
    }
}

/// Folds generated events of one channel at one mass point, with `exactly` so many points if that is given.
///
/// # Errors
/// When the study and the call do not fit together; a precision that is not reached is no error but said in the record.
pub(super) fn fold_generated(
    study: &Study,
    detector: &Detector,
    channel_index: usize,
    mass_gev: f64,
    production: &Production,
    exactly: Option<u64>,
    progress: &(dyn Fn(Progress) + Sync),
) -> Result<Folded, FoldError> {
    let started = Instant::now();
    let channel = study.channels.get(channel_index).ok_or(FoldError::NoSuchChannel(channel_index))?;
    let mut generator = Generator::new(&study.resonance, production, &channel.decay, mass_gev)
        .ok_or(FoldError::BelowThreshold { mass_gev })?;
    let plan = Plan::new(detector, channel, mass_gev, &generator.dimensions());
    generator.restrict(plan.rapidity_reach());
    let scramblings = scramblings(study.seed, &plan)?;
    let categories = channel.categories.len();
    let edges = plan.axis.squares.len();
    let mut totals = vec![Total::new(categories, edges); REPLICATES];
    let most = (study.max_points / REPLICATES as u64).clamp(BLOCK as u64, MAX_POINTS);
    // The largest power of two within the limit: the points are most even there.
    let most = 1 << most.ilog2();
    // Points of another fold are taken in one round.
    let exactly = exactly.map(|points| (points / REPLICATES as u64).clamp(BLOCK as u64, MAX_POINTS));
    let mut done = 0;
    let mut next = exactly.unwrap_or(FIRST_ROUND.min(most));
    let mut cpu_seconds = 0.0;
    let mut reached = f64::INFINITY;
    loop {
        let tasks: Vec<(usize, u64, u64)> = (0..REPLICATES)
            .flat_map(|r| (done..next).step_by(CHUNK as usize).map(move |start| (r, start, (start + CHUNK).min(next))))
            .collect();
        let mut finished = 0.0;
        // The points at which the error will be small enough: a guess, from the rate at which it usually falls.
        let goal = if done == 0 { f64::INFINITY } else { done as f64 * libm::pow(reached / study.precision, 1.25) };
        let goal = goal.clamp(next as f64, most.max(next) as f64);
        for wave in tasks.chunks(WAVE) {
            let results: Vec<(usize, Total, f64)> = wave
                .par_iter()
                .map_init(
                    || Workspace::new(&plan),
                    |workspace, (r, start, end)| {
                        let begun = Instant::now();
                        let total =
                            fold_chunk(&generator, &plan, &scramblings[*r], *start, *end, categories, workspace);
                        (*r, total, begun.elapsed().as_secs_f64())
                    },
                )
                .collect();
            for (r, total, seconds) in &results {
                totals[*r].add(total);
                cpu_seconds += seconds;
            }
            finished += results.len() as f64;
            let points = done as f64 + finished / tasks.len() as f64 * (next - done) as f64;
            progress(Progress { fraction: (points / goal).min(1.0) });
        }
        done = next;
        reached = estimate::precision(&totals);
        if reached <= study.precision || done >= most || exactly.is_some() {
            let record = FoldRecord {
                channel: channel.name.clone(),
                mass_gev,
                points: done * REPLICATES as u64,
                final_points: done * REPLICATES as u64,
                precision_reached: reached,
                reached: reached <= study.precision,
                cpu_seconds,
                wall_seconds: started.elapsed().as_secs_f64(),
                notes: estimate::notes(&totals),
                ..FoldRecord::default()
            };
            let templates = estimate::templates(channel, mass_gev, &totals, None);
            return Ok(Folded { templates, record });
        }
        next = next_round(done, reached / study.precision).min(most);
    }
}

/// The independent scramblings of a plan.
pub(super) fn scramblings(seed: u64, plan: &Plan) -> Result<Vec<Scrambling>, FoldError> {
    let places = &plan.dimensions.places;
    (0..REPLICATES as u64)
        .map(|r| Scrambling::new(seed, r, places))
        .collect::<Option<_>>()
        .ok_or(FoldError::TooManyDimensions { found: places.len(), allowed: MAX_DIMENSIONS })
}

/// The points of the next round, for an error that is `excess` times too large: as many as should do, at most twice as many
/// as before, in whole blocks. Points are most even at powers of two: one just above is taken instead.
fn next_round(done: u64, excess: f64) -> u64 {
    let growth = libm::pow(excess, 1.25).clamp(1.125, 2.0);
    let wanted = ((done as f64 * growth) as u64).next_multiple_of(BLOCK as u64);
    let even = wanted.next_power_of_two();
    if 16 * even <= 17 * wanted { even } else { wanted }
}

fn fold_chunk(
    generator: &Generator,
    plan: &Plan,
    points: &Scrambling,
    start: u64,
    end: u64,
    categories: usize,
    workspace: &mut Workspace,
) -> Total {
    let mut total = Total::new(categories, plan.axis.squares.len());
    for first in (start..end).step_by(BLOCK) {
        generator.fill(points, first, &mut workspace.truth);
        total.generated += workspace.truth.generated.iter().sum::<f64>();
        workspace.measure(plan, points, first);
        total.outside += workspace.outside;
        for last in &workspace.last {
            add(plan, last, &mut total.sums[last.category]);
        }
        for (_, category, weight) in &workspace.lost {
            total.sums[*category].lost += weight;
        }
    }
    total
}
