//! From truth events to what is measured of every leg but the last.

use super::last_leg::{LastLeg, Reading};
use super::plan::{CutPlan, Plan, VertexPlan};
use crate::events::{LegLanes, TruthBlock};
use crate::kinematics::MAX_LEGS;
use crate::numerics::kernel;
use crate::numerics::sobol::{BLOCK, Lane, Scrambling};
use crate::wide;

/// Measured values further than this many core widths from the peak are put there; nothing of a template is that far.
const FARTHEST: f64 = 1e6;

/// A leg as the detector sees it before its energy is known, per event of the block.
#[derive(Clone, Debug)]
struct Aimed {
    /// True transverse momentum, GeV.
    pt: Lane,
    /// True |cot theta|.
    cot_true: Lane,
    /// Measured direction, a unit vector, and its |cot theta|.
    nx: Lane,
    ny: Lane,
    nz: Lane,
    cot: Lane,
    /// Sine of the measured polar angle.
    sin: Lane,
}

/// How a leg is measured, per surviving event.
#[derive(Clone, Debug)]
struct Resolved {
    reading: [Reading; BLOCK],
    /// Relative width of the calorimeter and the tracker, true energy and pT.
    sigma_calorimeter: Lane,
    sigma_tracker: Lane,
    gain_calorimeter: Lane,
    centre: Lane,
    gain_tracker: Lane,
    tail: [usize; BLOCK],
    /// Weight of the calorimeter in the measured energy.
    share: Lane,
    /// Contribution to the mass variance, as a relative width; decides on the last leg.
    score: Lane,
    /// Squares of the terms.
    first: Lane,
    second: Lane,
    third: Lane,
    tracker_first: Lane,
    tracker_second: Lane,
    /// Of an electron: what its tracker measured, GeV; not positive where lost.
    tracker_momentum: Lane,
}

/// The measured other legs, per surviving event.
#[derive(Clone, Debug)]
struct Measured {
    e: Lane,
    px: Lane,
    py: Lane,
    pz: Lane,
    pt: Lane,
    mass: Lane,
    z: Lane,
    u: Lane,
}

/// No tail.
const GAUSSIAN: usize = usize::MAX;

/// Memory of one worker, used again for every block.
#[derive(Clone, Debug)]
pub(super) struct Workspace {
    pub truth: TruthBlock,
    aimed: Vec<Aimed>,
    resolved: Vec<Resolved>,
    others: Vec<Measured>,
    live: Vec<usize>,
    category: Vec<usize>,
    order: Vec<[usize; MAX_LEGS]>,
    dz: Lane,
    /// The last legs of the surviving events, with everything else measured.
    pub last: Vec<LastLeg>,
    /// The events of the block that `last` belong to.
    pub event: Vec<usize>,
    /// Weight lost by the other legs, by event of the block and category.
    pub lost: Vec<(usize, usize, f64)>,
}

impl Workspace {
    pub fn new(plan: &Plan) -> Self {
        let zero = [0.0; BLOCK];
        let legs = plan.legs.len();
        let aimed = Aimed { pt: zero, cot_true: zero, nx: zero, ny: zero, nz: zero, cot: zero, sin: zero };
        let resolved = Resolved {
            reading: [Reading::Calorimeter; BLOCK],
            sigma_calorimeter: zero,
            sigma_tracker: zero,
            gain_calorimeter: [1.0; BLOCK],
            centre: [1.0; BLOCK],
            gain_tracker: [1.0; BLOCK],
            tail: [GAUSSIAN; BLOCK],
            share: zero,
            score: zero,
            first: zero,
            second: zero,
            third: zero,
            tracker_first: zero,
            tracker_second: zero,
            tracker_momentum: zero,
        };
        let other = Measured { e: zero, px: zero, py: zero, pz: zero, pt: zero, mass: zero, z: zero, u: zero };
        Workspace {
            truth: TruthBlock::new(legs),
            aimed: vec![aimed; legs],
            resolved: vec![resolved; legs],
            others: vec![other; legs.saturating_sub(1)],
            live: Vec::with_capacity(BLOCK),
            category: Vec::with_capacity(BLOCK),
            order: Vec::with_capacity(BLOCK),
            dz: zero,
            last: Vec::with_capacity(BLOCK),
            event: Vec::with_capacity(BLOCK),
            lost: Vec::with_capacity(BLOCK),
        }
    }

    /// Measures the block in `truth` with the points `first..first + BLOCK`, and leaves the events that can still be
    /// accepted in `last`.
    pub fn measure(&mut self, plan: &Plan, points: &Scrambling, first: u64) {
        self.last.clear();
        self.event.clear();
        self.lost.clear();
        self.aim(plan, points, first);
        self.select(plan);
        if self.live.is_empty() {
            return;
        }
        self.resolve(plan, points, first);
        self.rank();
        self.measure_others(plan, points, first);
        self.collect(plan);
    }

    fn aim(&mut self, plan: &Plan, points: &Scrambling, first: u64) {
        let lane = |dimension: usize| {
            let mut lane = [0.0; BLOCK];
            points.fill(dimension, first, &mut lane);
            lane
        };
        if let (Some(vertex), Some(dimension)) = (&plan.vertex, plan.dimensions.vertex) {
            shift_vertex(vertex, &lane(dimension), &mut self.dz);
        }
        for (leg, aimed) in self.aimed.iter_mut().enumerate() {
            point(&self.truth.legs[leg], aimed);
            if let Some(dimension) = plan.dimensions.theta[leg] {
                turn_theta(plan.legs[leg].sigma_theta, &lane(dimension), aimed);
            }
            if let Some(dimension) = plan.dimensions.phi[leg] {
                turn_phi(plan.legs[leg].sigma_phi, &lane(dimension), aimed);
            }
            if let (Some(vertex), true) = (&plan.vertex, plan.legs[leg].trackless) {
                repoint(vertex.half_length, &self.dz, aimed);
            }
            finish_direction(aimed);
        }
    }

    /// Keeps the events whose directions pass the cuts and belong to a category.
    fn select(&mut self, plan: &Plan) {
        self.live.clear();
        self.category.clear();
        let cuts: &CutPlan = &plan.cuts;
        for i in 0..BLOCK {
            if self.truth.weight[i] == 0.0 {
                continue;
            }
            let mut largest = 0.0_f64;
            let mut in_gap = false;
            for aimed in &self.aimed {
                largest = largest.max(aimed.cot[i]);
                in_gap |= cuts.gap_cot.is_some_and(|(low, high)| low <= aimed.cot_true[i] && aimed.cot_true[i] < high);
            }
            if in_gap || largest > cuts.max_cot {
                continue;
            }
            if let Some(category) = cuts.category_max_cot.iter().position(|limit| largest <= *limit) {
                self.live.push(i);
                self.category.push(category);
            }
        }
    }

    /// Looks up what measures each leg; drops events with a leg that nothing measures.
    fn resolve(&mut self, plan: &Plan, points: &Scrambling, first: u64) {
        let mut covered = [true; BLOCK];
        for (leg, resolved) in self.resolved.iter_mut().enumerate() {
            let leg_plan = &plan.legs[leg];
            let aimed = &self.aimed[leg];
            let mut choice = [0.0; BLOCK];
            if let Some(dimension) = plan.dimensions.choice[leg] {
                points.fill(dimension, first, &mut choice);
            }
            for (c, i) in self.live.iter().enumerate() {
                let cot = aimed.cot_true[*i];
                let shares = leg_plan.calorimeter.as_ref().and_then(|regions| regions.at(cot));
                let entry = shares.and_then(|shares| {
                    shares.iter().find(|(sum, _)| choice[*i] < *sum).or(shares.last()).map(|(_, entry)| *entry)
                });
                let tracker = leg_plan.tracker.as_ref().and_then(|regions| regions.at(cot)).copied().flatten();
                resolved.reading[c] = match (entry, tracker) {
                    (Some(_), Some(_)) => Reading::Both,
                    (Some(_), None) => Reading::Calorimeter,
                    (None, Some(_)) => Reading::Tracker,
                    (None, None) => {
                        covered[c] = false;
                        Reading::Calorimeter
                    }
                };
                resolved.tail[c] = GAUSSIAN;
                if let Some(entry) = entry {
                    let terms = &plan.calorimeters[entry];
                    resolved.first[c] = terms.stochastic_squared;
                    resolved.second[c] = terms.noise_squared;
                    resolved.third[c] = terms.constant_squared;
                    resolved.gain_calorimeter[c] = terms.gain;
                    resolved.centre[c] = terms.centre;
                    resolved.tail[c] = terms.tail.unwrap_or(GAUSSIAN);
                }
                if let Some(entry) = tracker {
                    let terms = &plan.trackers[entry];
                    resolved.tracker_first[c] = terms.curvature_squared;
                    let slant = if terms.slanted { (1.0 + cot * cot).sqrt() } else { 1.0 };
                    resolved.tracker_second[c] = terms.scattering_squared * slant;
                    resolved.gain_tracker[c] = terms.gain;
                }
            }
        }
        if covered[..self.live.len()].contains(&false) {
            self.drop_uncovered(&covered);
        }
        let (mut e, mut pt, mut ex) = ([1.0; BLOCK], [1.0; BLOCK], [[0.0; BLOCK]; 4]);
        for leg in &self.truth.legs {
            for (c, i) in self.live.iter().enumerate() {
                ex[0][c] += leg.e[*i];
                ex[1][c] += leg.px[*i];
                ex[2][c] += leg.py[*i];
                ex[3][c] += leg.pz[*i];
            }
        }
        for (leg, resolved) in self.resolved.iter_mut().enumerate() {
            let truth = &self.truth.legs[leg];
            for (c, i) in self.live.iter().enumerate() {
                e[c] = truth.e[*i];
                pt[c] = self.aimed[leg].pt[*i];
            }
            widths(&e, &pt, resolved);
            for (c, i) in self.live.iter().enumerate() {
                let (calorimeter, tracker) = (resolved.sigma_calorimeter[c], resolved.sigma_tracker[c]);
                let (share, sigma) = match resolved.reading[c] {
                    Reading::Calorimeter => (1.0, calorimeter),
                    Reading::Tracker => (0.0, tracker),
                    Reading::Both => {
                        let share = tracker * tracker / (calorimeter * calorimeter + tracker * tracker);
                        (share, share * calorimeter)
                    }
                };
                resolved.share[c] = share;
                let reach = ex[0][c] * truth.e[*i]
                    - (ex[1][c] * truth.px[*i] + ex[2][c] * truth.py[*i] + ex[3][c] * truth.pz[*i]);
                resolved.score[c] = reach * sigma;
            }
            if let Some(dimension) = plan.dimensions.tracker[leg] {
                let mut lane = [0.0; BLOCK];
                points.fill(dimension, first, &mut lane);
                let mut z = [0.0; BLOCK];
                for (c, i) in self.live.iter().enumerate() {
                    z[c] = lane[*i];
                }
                normal(&mut z, self.live.len());
                for (c, i) in self.live.iter().enumerate() {
                    let curvature = 1.0 + resolved.sigma_tracker[c] * z[c];
                    resolved.tracker_momentum[c] =
                        self.aimed[leg].pt[*i] * resolved.gain_tracker[c] / (curvature * self.aimed[leg].sin[*i]);
                }
            }
        }
    }

    /// Removes events with an uncovered leg from the list and from what was looked up.
    fn drop_uncovered(&mut self, covered: &[bool; BLOCK]) {
        let mut kept = 0;
        for c in 0..self.live.len() {
            if !covered[c] {
                continue;
            }
            self.live[kept] = self.live[c];
            self.category[kept] = self.category[c];
            for r in &mut self.resolved {
                r.reading[kept] = r.reading[c];
                r.tail[kept] = r.tail[c];
                for lane in [
                    &mut r.first,
                    &mut r.second,
                    &mut r.third,
                    &mut r.gain_calorimeter,
                    &mut r.centre,
                    &mut r.tracker_first,
                    &mut r.tracker_second,
                    &mut r.gain_tracker,
                ] {
                    lane[kept] = lane[c];
                }
            }
            kept += 1;
        }
        self.live.truncate(kept);
        self.category.truncate(kept);
    }

    /// Puts the leg that contributes most last, the others in their order.
    fn rank(&mut self) {
        self.order.clear();
        let legs = self.resolved.len();
        for c in 0..self.live.len() {
            let mut best = 0;
            for leg in 1..legs {
                if self.resolved[leg].score[c] > self.resolved[best].score[c] {
                    best = leg;
                }
            }
            let mut order = [0; MAX_LEGS];
            let mut rank = 0;
            for leg in 0..legs {
                if leg != best {
                    order[rank] = leg;
                    rank += 1;
                }
            }
            order[legs - 1] = best;
            self.order.push(order);
        }
    }

    fn measure_others(&mut self, plan: &Plan, points: &Scrambling, first: u64) {
        let count = self.live.len();
        for (rank, other) in self.others.iter_mut().enumerate() {
            let mut lane = [0.0; BLOCK];
            points.fill(plan.dimensions.values[rank], first, &mut lane);
            for (c, i) in self.live.iter().enumerate() {
                other.u[c] = lane[*i];
                other.z[c] = lane[*i];
            }
            normal(&mut other.z, count);
            for (c, i) in self.live.iter().enumerate() {
                let leg = self.order[c][rank];
                let (r, aimed, truth) = (&self.resolved[leg], &self.aimed[leg], &self.truth.legs[leg]);
                let mass = truth.mass[*i];
                let momentum = if r.reading[c] == Reading::Tracker {
                    let curvature = 1.0 + r.sigma_tracker[c] * other.z[c];
                    if curvature > 0.0 {
                        aimed.pt[*i] * r.gain_tracker[c] / (curvature * aimed.sin[*i])
                    } else {
                        f64::NAN
                    }
                } else {
                    let t = match plan.tails.get(r.tail[c]) {
                        Some(tail) => tail.quantile(other.u[c]).clamp(-FARTHEST, FARTHEST),
                        None => other.z[c],
                    };
                    let measured = truth.e[*i] * r.gain_calorimeter[c] * (r.centre[c] + r.sigma_calorimeter[c] * t);
                    let mut energy = if measured > 0.0 { measured } else { f64::NAN };
                    if r.reading[c] == Reading::Both {
                        let tracker = r.tracker_momentum[c];
                        energy = if tracker > 0.0 {
                            r.share[c] * energy + (1.0 - r.share[c]) * tracker
                        } else {
                            f64::NAN
                        };
                    }
                    // The square root of a negative number is NaN: lost as well.
                    ((energy - mass) * (energy + mass)).sqrt()
                };
                // A lost leg carries NaN from here to `collect`.
                other.mass[c] = mass;
                other.e[c] = (momentum * momentum + mass * mass).sqrt();
                other.px[c] = momentum * aimed.nx[*i];
                other.py[c] = momentum * aimed.ny[*i];
                other.pz[c] = momentum * aimed.nz[*i];
                other.pt[c] = momentum * aimed.sin[*i];
            }
        }
    }

    fn collect(&mut self, plan: &Plan) {
        let legs = self.resolved.len();
        for (c, i) in self.live.iter().enumerate() {
            let weight = self.truth.weight[*i];
            let leg = self.order[c][legs - 1];
            let (r, aimed, truth) = (&self.resolved[leg], &self.aimed[leg], &self.truth.legs[leg]);
            let mass = truth.mass[*i];
            let mut last = LastLeg {
                reading: r.reading[c],
                tail: plan.tails.get(r.tail[c]).is_some().then_some(r.tail[c]),
                category: self.category[c],
                weight,
                mass,
                sin: aimed.sin[*i],
                ..LastLeg::default()
            };
            let mut along = 0.0;
            for (rank, other) in self.others.iter().enumerate() {
                last.rest_energy += other.e[c];
                along += other.px[c] * aimed.nx[*i] + other.py[c] * aimed.ny[*i] + other.pz[c] * aimed.nz[*i];
                last.rest_mass_squared += other.mass[c] * other.mass[c];
                for second in &self.others[..rank] {
                    last.rest_mass_squared += 2.0
                        * (other.e[c] * second.e[c]
                            - (other.px[c] * second.px[c] + other.py[c] * second.py[c] + other.pz[c] * second.pz[c]));
                }
                last.other_pt[rank] = other.pt[c];
            }
            last.rest_along = along;
            if !last.rest_energy.is_finite() || (r.reading[c] == Reading::Both && r.tracker_momentum[c] <= 0.0) {
                self.lost.push((*i, self.category[c], weight));
                continue;
            }
            match r.reading[c] {
                Reading::Tracker => {
                    last.slope = aimed.pt[*i] * r.gain_tracker[c] / (aimed.sin[*i] * r.sigma_tracker[c]);
                    last.offset = 1.0 / r.sigma_tracker[c];
                }
                Reading::Calorimeter | Reading::Both => {
                    let rest = if r.reading[c] == Reading::Both {
                        (1.0 - r.share[c]) * r.tracker_momentum[c]
                    } else {
                        0.0
                    };
                    let unit = r.share[c] * truth.e[*i] * r.gain_calorimeter[c];
                    last.slope = 1.0 / (unit * r.sigma_calorimeter[c]);
                    last.offset = -(rest / unit + r.centre[c]) / r.sigma_calorimeter[c];
                    last.least_energy = if rest > mass { rest } else { mass };
                }
            }
            last.other_pt[..legs - 1].sort_unstable_by(|a, b| b.total_cmp(a));
            self.last.push(last);
            self.event.push(*i);
        }
    }
}

wide! {
    fn normal(values: &mut Lane, count: usize) {
        let whole = if count < BLOCK { count } else { BLOCK };
        for value in &mut values[..whole] {
            *value = kernel::normal_quantile(*value);
        }
    }
}

wide! {
    fn widths(e: &Lane, pt: &Lane, r: &mut Resolved) {
        for i in 0..BLOCK {
            let inverse = 1.0 / e[i];
            let calorimeter = r.first[i] * inverse + r.second[i] * (inverse * inverse) + r.third[i];
            r.sigma_calorimeter[i] = calorimeter.sqrt();
            r.sigma_tracker[i] = (r.tracker_first[i] * (pt[i] * pt[i]) + r.tracker_second[i]).sqrt();
        }
    }
}

wide! {
    fn shift_vertex(vertex: &VertexPlan, uniform: &Lane, dz: &mut Lane) {
        let right = vertex.right_choice;
        for i in 0..BLOCK {
            // One number decides on the choice and, stretched, gives the shift.
            let is_right = uniform[i] < right;
            let (start, length) = if is_right { (0.0, right) } else { (right, 1.0 - right) };
            let spread = if is_right { vertex.spread_right } else { vertex.spread_wrong };
            let inside = (uniform[i] - start) / length;
            let inside = if inside > 1e-16 { inside } else { 1e-16 };
            let inside = if inside < 1.0 - 1.2e-16 { inside } else { 1.0 - 1.2e-16 };
            dz[i] = spread * kernel::normal_quantile(inside);
        }
    }
}

wide! {
    fn point(truth: &LegLanes, aimed: &mut Aimed) {
        for i in 0..BLOCK {
            let pt_squared = truth.px[i] * truth.px[i] + truth.py[i] * truth.py[i];
            let inverse = 1.0 / (pt_squared + truth.pz[i] * truth.pz[i]).sqrt();
            let pt = pt_squared.sqrt();
            aimed.pt[i] = pt;
            aimed.cot_true[i] = (truth.pz[i] / pt).abs();
            // The direction as azimuth (nx, ny)/sin and polar angle (sin, nz), until it is finished.
            aimed.nx[i] = truth.px[i] / pt;
            aimed.ny[i] = truth.py[i] / pt;
            aimed.sin[i] = pt * inverse;
            aimed.nz[i] = truth.pz[i] * inverse;
        }
    }
}

wide! {
    fn turn_theta(sigma: f64, uniform: &Lane, aimed: &mut Aimed) {
        let turns = sigma / std::f64::consts::TAU;
        for i in 0..BLOCK {
            let (cos, sin) = kernel::cos_sin_turns(turns * kernel::normal_quantile(uniform[i]));
            let (s, c) = (aimed.sin[i], aimed.nz[i]);
            aimed.sin[i] = s * cos + c * sin;
            aimed.nz[i] = c * cos - s * sin;
        }
    }
}

wide! {
    fn turn_phi(sigma: f64, uniform: &Lane, aimed: &mut Aimed) {
        let turns = sigma / std::f64::consts::TAU;
        for i in 0..BLOCK {
            let (cos, sin) = kernel::cos_sin_turns(turns * kernel::normal_quantile(uniform[i]));
            let (x, y) = (aimed.nx[i], aimed.ny[i]);
            aimed.nx[i] = x * cos - y * sin;
            aimed.ny[i] = x * sin + y * cos;
        }
    }
}

wide! {
    /// cot(theta') = cot(theta) + dz/min(R, Z |tan theta|), the front face met at the true angle.
    fn repoint(half_length: f64, dz: &Lane, aimed: &mut Aimed) {
        for i in 0..BLOCK {
            let reach = half_length / aimed.cot_true[i];
            let distance = if reach < 1.0 { reach } else { 1.0 };
            // A polar angle turned past the beam comes out on the other side.
            let side = if aimed.sin[i] < 0.0 { -1.0 } else { 1.0 };
            let cot = aimed.nz[i] / (side * aimed.sin[i]) + dz[i] / distance;
            let sin = 1.0 / (1.0 + cot * cot).sqrt();
            aimed.sin[i] = side * sin;
            aimed.nz[i] = cot * sin;
        }
    }
}

wide! {
    fn finish_direction(aimed: &mut Aimed) {
        for i in 0..BLOCK {
            let sin = aimed.sin[i];
            aimed.nx[i] *= sin;
            aimed.ny[i] *= sin;
            let sin = sin.abs();
            aimed.sin[i] = sin;
            aimed.cot[i] = (aimed.nz[i] / sin).abs();
        }
    }
}
