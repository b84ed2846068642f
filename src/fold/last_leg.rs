//! The last leg, exactly: with everything else measured, the mass is a known function of its momentum, so the
//! probability below each edge of the axis is its response's distribution function there.

use super::limits::{Intervals, allowed};
use super::plan::{AxisPlan, Plan};
use super::response::{UnitTail, power_tail};
use crate::kinematics::MAX_LEGS;
use crate::numerics::normal::{NORMAL_REACH, normal_cdf};
use crate::wide;

/// What measures a leg.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub(super) enum Reading {
    #[default]
    Calorimeter,
    Tracker,
    Both,
}

/// The last leg of one event. Its response variable is `t = slope E + offset` where the calorimeter reads it, and
/// `t = offset - slope/p` for a tracker; the response's distribution function of t is a Gaussian's or a tailed one's.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct LastLeg {
    pub reading: Reading,
    /// Index of the tailed response; beyond the list for a Gaussian.
    pub tail: usize,
    pub category: usize,
    /// Weight with the efficiency of the event.
    pub weight: f64,
    /// Weight without it.
    pub unfiltered: f64,
    /// Mass of the leg, GeV.
    pub mass: f64,
    /// Sine of its measured polar angle.
    pub sin: f64,
    pub slope: f64,
    pub offset: f64,
    /// Measured energies at or below this lose the event.
    pub least_energy: f64,
    /// Energy, momentum along the last leg, and squared mass of the other legs together.
    pub rest_energy: f64,
    pub rest_along: f64,
    pub rest_mass_squared: f64,
    /// Measured pT of the other legs, falling.
    pub other_pt: [f64; MAX_LEGS - 1],
}

/// Sums over events: what an edge of the axis has below it.
#[derive(Clone, Debug)]
pub(super) struct Sums {
    /// Weight below each edge, except for what `steps` adds.
    pub below: Vec<f64>,
    /// Weight that lies below every edge from this one on.
    pub steps: Vec<f64>,
    /// Accepted weight.
    pub accepted: f64,
    /// What it would be with an efficiency of 1.
    pub unfiltered: f64,
    /// Weight lost by the measurement.
    pub lost: f64,
}

impl Sums {
    pub fn new(edges: usize) -> Self {
        Sums { below: vec![0.0; edges], steps: vec![0.0; edges + 1], accepted: 0.0, unfiltered: 0.0, lost: 0.0 }
    }

    pub fn clear(&mut self) {
        self.below.fill(0.0);
        self.steps.fill(0.0);
        self.accepted = 0.0;
        self.unfiltered = 0.0;
        self.lost = 0.0;
    }

    pub fn add(&mut self, other: &Sums) {
        self.add_times(other, 1.0);
    }

    /// Adds other sums times a factor.
    pub fn add_times(&mut self, other: &Sums, factor: f64) {
        for (a, b) in self.below.iter_mut().zip(&other.below) {
            *a += factor * b;
        }
        for (a, b) in self.steps.iter_mut().zip(&other.steps) {
            *a += factor * b;
        }
        self.accepted += factor * other.accepted;
        self.unfiltered += factor * other.unfiltered;
        self.lost += factor * other.lost;
    }

    /// Weight below each edge.
    pub fn cumulative(&self) -> Vec<f64> {
        let mut step = 0.0;
        self.below
            .iter()
            .zip(&self.steps)
            .map(|(below, s)| {
                step += s;
                below + step
            })
            .collect()
    }
}

impl LastLeg {
    /// Squared mass of the event with momentum p of the leg.
    #[inline(always)]
    pub fn mass_squared(&self, p: f64) -> f64 {
        let e = self.energy(p);
        // Of a massless leg 2 E (E_rest - P), free of cancellation between E and p.
        self.rest_mass_squared + self.mass * self.mass + 2.0 * (self.rest_energy * e - self.rest_along * p)
    }

    #[inline(always)]
    fn energy(&self, p: f64) -> f64 {
        if self.mass == 0.0 { p } else { (p * p + self.mass * self.mass).sqrt() }
    }

    /// The momentum at which the mass is least, 0 where it rises everywhere.
    #[inline(always)]
    pub fn turning_momentum(&self) -> f64 {
        if self.mass == 0.0 || self.rest_along <= 0.0 {
            return 0.0;
        }
        let c = self.rest_along / self.rest_energy;
        self.mass * c / ((1.0 - c) * (1.0 + c)).max(f64::MIN_POSITIVE).sqrt()
    }

    /// The larger and the smaller momentum at which the squared mass has a value; NaN where it never has.
    #[inline(always)]
    pub fn momenta_at(&self, mass_squared: f64) -> (f64, f64) {
        let half = 0.5 * (mass_squared - self.rest_mass_squared - self.mass * self.mass);
        let slope = self.rest_energy - self.rest_along;
        if self.mass == 0.0 {
            let p = half / slope;
            return (p, p);
        }
        let product = slope * (self.rest_energy + self.rest_along);
        let root = (half * half - self.mass * self.mass * product).sqrt();
        let (along, across) = (self.rest_along * half, self.rest_energy * root);
        ((along + across) / product, (along - across) / product)
    }

    /// The response variable at momentum p.
    #[inline(always)]
    pub fn value(&self, p: f64) -> f64 {
        match self.reading {
            Reading::Tracker => self.offset - self.slope / p,
            Reading::Calorimeter | Reading::Both => self.slope * self.energy(p) + self.offset,
        }
    }

    /// The momentum at a value of the response variable; infinite where there is none.
    #[inline(always)]
    fn momentum(&self, t: f64) -> f64 {
        match self.reading {
            Reading::Tracker => {
                let curvature = self.offset - t;
                if curvature > 0.0 { self.slope / curvature } else { f64::INFINITY }
            }
            Reading::Calorimeter | Reading::Both => {
                let e = (t - self.offset) / self.slope;
                if self.mass == 0.0 {
                    return e;
                }
                ((e - self.mass) * (e + self.mass)).max(0.0).sqrt()
            }
        }
    }

    /// The momentum below which the measurement loses the event.
    #[inline(always)]
    pub fn least_momentum(&self) -> f64 {
        match self.reading {
            Reading::Tracker => 0.0,
            Reading::Calorimeter | Reading::Both if self.mass == 0.0 => self.least_energy,
            Reading::Calorimeter | Reading::Both => {
                ((self.least_energy - self.mass) * (self.least_energy + self.mass)).max(0.0).sqrt()
            }
        }
    }
}

/// Distribution function of the response variable.
#[inline(always)]
fn response_cdf(tail: Option<&UnitTail>, t: f64) -> f64 {
    match tail {
        None => normal_cdf(t),
        Some(tail) => tail.cdf(t),
    }
}

/// Probability that the measurement of the last leg loses the event.
#[inline(always)]
fn lost_share(last: &LastLeg, tail: Option<&UnitTail>) -> f64 {
    // A tracker loses curvatures of the wrong sign, which is the upper end of its variable; a calorimeter the lower.
    let (t, upper) = if last.reading == Reading::Tracker {
        (-last.offset, true)
    } else {
        (last.slope * last.least_energy + last.offset, false)
    };
    if tail.is_none() && t < -NORMAL_REACH {
        return 0.0;
    }
    if upper { normal_cdf(t) } else { response_cdf(tail, t) }
}

wide! {
    /// Adds one event.
    pub(super) fn add(plan: &Plan, last: &LastLeg, sums: &mut Sums) {
        let tail = plan.tails.get(last.tail);
        let least = last.least_momentum();
        sums.lost += last.weight * lost_share(last, tail);
        let intervals: Intervals = allowed(plan, last, least);
        let turning = last.turning_momentum();
        for interval in intervals.iter() {
            let (from, to) = *interval;
            if from < turning {
                add_falling(&plan.axis, last, tail, from, if to < turning { to } else { turning }, sums);
            }
            let from = if from > turning { from } else { turning };
            if from < to {
                add_rising(&plan.axis, last, tail, from, to, sums);
            }
        }
    }
}

/// The branch on which the mass rises with the momentum: nearly always all there is.
#[inline(always)]
fn add_rising(axis: &AxisPlan, last: &LastLeg, tail: Option<&UnitTail>, from: f64, to: f64, sums: &mut Sums) {
    let edge = |t: f64| {
        let p = last.momentum(t);
        if p < f64::INFINITY { axis.first_edge(last.mass_squared(p)) } else { axis.squares.len() }
    };
    let end = if to < f64::INFINITY {
        last.value(to)
    } else if last.reading == Reading::Tracker {
        last.offset
    } else {
        f64::INFINITY
    };
    let start = last.value(from);
    let w = last.weight;
    match tail {
        None => {
            let (start, end) = (start.max(-NORMAL_REACH), end.min(NORMAL_REACH));
            if start >= end {
                return;
            }
            let low = if start > -NORMAL_REACH { normal_cdf(start) } else { 0.0 };
            let high = if end < NORMAL_REACH { normal_cdf(end) } else { 1.0 };
            let (first, mut last_edge) = (edge(start), edge(end));
            if end >= NORMAL_REACH {
                // All edges from here on have the whole weight below: a few more fill the last vector.
                last_edge = (first + (last_edge - first).next_multiple_of(4)).min(axis.squares.len());
            }
            sums.steps[first] -= w * low;
            sums.steps[last_edge] += w * high;
            sums.accepted += w * (high - low);
            sums.unfiltered += last.unfiltered * (high - low);
            fill(axis, last, first, last_edge, &mut sums.below, |t| w * normal_cdf(t));
        }
        Some(tail) => {
            let (low, high) = (tail.cdf(start), tail.cdf(end));
            let (first, last_edge) = (edge(start), edge(end));
            sums.steps[first] -= w * low;
            sums.steps[last_edge] += w * high;
            sums.accepted += w * (high - low);
            sums.unfiltered += last.unfiltered * (high - low);
            let core_first = if start < -tail.alpha_low { edge(-tail.alpha_low).min(last_edge) } else { first };
            let core_last =
                if end > tail.alpha_high { edge(tail.alpha_high).clamp(core_first, last_edge) } else { last_edge };
            let (scale, constant) = (w * tail.core, w * (tail.low - tail.core * tail.phi_low));
            fill(axis, last, core_first, core_last, &mut sums.below, |t| constant + scale * normal_cdf(t));
            if first < core_first {
                let scale = w * tail.low;
                fill(axis, last, first, core_first, &mut sums.below, |t| {
                    scale * power_tail(-t, tail.alpha_low, tail.n_low)
                });
            }
            if core_last < last_edge {
                let scale = w * tail.high;
                fill(axis, last, core_last, last_edge, &mut sums.below, |t| {
                    w - scale * power_tail(t, tail.alpha_high, tail.n_high)
                });
            }
        }
    }
}

/// Adds a function of the response variable at the edges `first..end`.
#[inline(always)]
fn fill(
    axis: &AxisPlan,
    last: &LastLeg,
    first: usize,
    end: usize,
    below: &mut [f64],
    probability: impl Fn(f64) -> f64,
) {
    if first >= end {
        return;
    }
    let edges = axis.squares[first..end].iter().zip(&mut below[first..end]);
    let (slope, offset) = (last.slope, last.offset);
    let difference = last.rest_energy - last.rest_along;
    if last.mass == 0.0 {
        if last.reading == Reading::Tracker {
            let slope = slope * 2.0 * difference;
            for (square, sum) in edges {
                *sum += probability(offset - slope / (square - last.rest_mass_squared));
            }
        } else {
            let slope = slope / (2.0 * difference);
            let offset = offset - slope * last.rest_mass_squared;
            for (square, sum) in edges {
                *sum += probability(slope * square + offset);
            }
        }
        return;
    }
    let shift = last.rest_mass_squared + last.mass * last.mass;
    let product = difference * (last.rest_energy + last.rest_along);
    let least = last.mass * last.mass * product;
    let inverse = 1.0 / product;
    if last.reading == Reading::Tracker {
        for (square, sum) in edges {
            let half = 0.5 * (square - shift);
            let under = half * half - least;
            let root = (if under > 0.0 { under } else { 0.0 }).sqrt();
            let p = (last.rest_along * half + last.rest_energy * root) * inverse;
            *sum += probability(offset - slope / p);
        }
    } else {
        for (square, sum) in edges {
            let half = 0.5 * (square - shift);
            let under = half * half - least;
            let root = (if under > 0.0 { under } else { 0.0 }).sqrt();
            // E = (half + P p)/E_rest.
            let e = (last.rest_energy * half + last.rest_along * root) * inverse;
            *sum += probability(slope * e + offset);
        }
    }
}

/// The branch at small momentum on which the mass of a massive leg falls: few edges, if any.
#[inline(never)]
fn add_falling(axis: &AxisPlan, last: &LastLeg, tail: Option<&UnitTail>, from: f64, to: f64, sums: &mut Sums) {
    let (low, high) = (response_cdf(tail, last.value(from)), response_cdf(tail, last.value(to)));
    let w = last.weight;
    if high - low <= 0.0 {
        return;
    }
    sums.accepted += w * (high - low);
    sums.unfiltered += last.unfiltered * (high - low);
    let (first, end) = (axis.first_edge(last.mass_squared(to)), axis.first_edge(last.mass_squared(from)));
    for k in first..end {
        let p = last.momenta_at(axis.squares[k]).1;
        let p = if p > from { p } else { from };
        sums.below[k] += w * (high - response_cdf(tail, last.value(p)));
    }
    sums.steps[end] += w * (high - low);
}
