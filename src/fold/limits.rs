//! Cuts as limits on the last leg's momentum.

use super::last_leg::LastLeg;
use super::plan::Plan;
use crate::kinematics::MAX_LEGS;

/// Disjoint intervals of momentum, rising; few.
#[derive(Clone, Copy, Debug)]
pub(super) struct Intervals {
    list: [(f64, f64); MAX_LEGS + 2],
    count: usize,
}

impl Intervals {
    #[inline(always)]
    fn one(from: f64, to: f64) -> Self {
        Intervals { list: [(from, to); MAX_LEGS + 2], count: 1 }
    }

    #[inline(always)]
    pub fn iter(&self) -> std::slice::Iter<'_, (f64, f64)> {
        self.list[..self.count].iter()
    }

    /// Keeps what lies in an interval.
    #[inline(always)]
    fn keep(&mut self, low: f64, high: f64) {
        let mut kept = 0;
        for index in 0..self.count {
            let (from, to) = self.list[index];
            let piece = (if from > low { from } else { low }, if to < high { to } else { high });
            if piece.0 < piece.1 {
                self.list[kept] = piece;
                kept += 1;
            }
        }
        self.count = kept;
    }

    /// Keeps what lies in one of two intervals, `a` before `b` and apart from it.
    #[inline(never)]
    fn keep_either(&mut self, a: (f64, f64), b: (f64, f64)) {
        let (mut first, mut second) = (*self, *self);
        first.keep(a.0, a.1);
        second.keep(b.0, b.1);
        self.count = 0;
        for piece in first.iter().chain(second.iter()) {
            if self.count < self.list.len() {
                self.list[self.count] = *piece;
                self.count += 1;
            }
        }
        self.list[..self.count].sort_unstable_by(|x, y| x.0.total_cmp(&y.0));
    }
}

/// The momenta of the last leg, above `least`, with which the event passes the cuts on transverse momenta.
///
/// A list of least transverse momenta in falling order holds when, for each j, at least j legs reach the j-th value.
/// With the others given, the last leg is needed for the j-th when just j - 1 of them reach it.
#[inline(always)]
pub(super) fn allowed(plan: &Plan, last: &LastLeg, least: f64) -> Intervals {
    let others = &last.other_pt[..plan.legs.len() - 1];
    let mut least = least;
    for (j, threshold) in plan.cuts.min_pt.iter().enumerate() {
        let reached = others.iter().filter(|pt| **pt >= *threshold).count();
        if reached < j {
            return Intervals { list: [(0.0, 0.0); MAX_LEGS + 2], count: 0 };
        }
        if reached == j {
            let needed = threshold / last.sin;
            least = if needed > least { needed } else { least };
        }
    }
    let mut intervals = Intervals::one(least, f64::INFINITY);
    for (j, ratio) in plan.cuts.min_pt_over_mass.iter().enumerate() {
        if *ratio <= 0.0 {
            continue;
        }
        // Enough of the others reach it without the last leg where the mass is small …
        let without = others.get(j).map_or((0.0, 0.0), |pt| momenta_below(last, pt / ratio));
        // … and with it where the mass is not too large for the one before.
        let with = if j == 0 { (0.0, f64::INFINITY) } else { momenta_below(last, others[j - 1] / ratio) };
        let needed = least_for_ratio(last, *ratio);
        let with = (if needed > with.0 { needed } else { with.0 }, with.1);
        if without.0 >= without.1 {
            intervals.keep(with.0, with.1);
        } else if with.0 <= without.1 {
            intervals.keep(without.0, if with.1 > without.1 { with.1 } else { without.1 });
        } else {
            intervals.keep_either(without, with);
        }
    }
    intervals
}

/// The momenta with which the mass is below a value; empty where none.
#[inline(always)]
fn momenta_below(last: &LastLeg, mass: f64) -> (f64, f64) {
    let (high, low) = last.momenta_at(mass * mass);
    // NaN where the mass is never that small: the comparison then gives an empty interval.
    if high > 0.0 { (if last.mass == 0.0 || low < 0.0 { 0.0 } else { low }, high) } else { (0.0, 0.0) }
}

/// The momentum from which the last leg's own pT is at least `ratio` times the mass.
#[inline(always)]
fn least_for_ratio(last: &LastLeg, ratio: f64) -> f64 {
    // p² sin² = ratio² m²(p); quadratic for a massless leg.
    let f = ratio * ratio;
    let s = last.sin * last.sin;
    let b = f * (last.rest_energy - last.rest_along);
    let c = f * (last.rest_mass_squared + last.mass * last.mass);
    let mut p = (b + (b * b + s * c).max(0.0).sqrt()) / s;
    if last.mass > 0.0 {
        // The mass of the leg changes the root little; Newton's method from there.
        for _ in 0..6 {
            let e = (p * p + last.mass * last.mass).sqrt();
            let value = p * p * s - f * last.mass_squared(p);
            let slope = 2.0 * (p * s - f * (last.rest_energy * p / e - last.rest_along));
            let next = p - value / slope;
            p = if next > 0.0 { next } else { 0.5 * p };
        }
    }
    p
}
