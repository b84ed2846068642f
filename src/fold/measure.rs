//! From truth events to what is measured of every leg but the last.

use super::aim::{Aimed, aim, point};
use super::efficiency::Found;
use super::last_leg::{LastLeg, Reading};
use super::plan::Plan;
use super::resolve::{Resolved, widths};
use super::spread::{add_vertex_lever, angle_levers, normal, turn_to};
use crate::events::{LegLanes, TruthBlock};
use crate::kinematics::MAX_LEGS;
use crate::numerics::normal::normal_cdf;
use crate::numerics::sobol::{BLOCK, Lane, Scrambling};

/// Measured values further than this many core widths from the peak are put there; nothing of a template is that far.
const FARTHEST: f64 = 1e6;

/// Memory of one worker, used again for every block.
#[derive(Clone, Debug)]
pub(super) struct Workspace {
    /// The events to measure.
    pub truth: TruthBlock,
    /// The last legs of the events that can still be accepted, with everything else measured.
    pub last: Vec<LastLeg>,
    /// The events of the block that `last` belong to.
    pub event: Vec<usize>,
    /// Weight lost by the other legs: event of the block, category, weight.
    pub lost: Vec<(usize, usize, f64)>,
    /// Weight of the events with a leg outside of what the efficiency tells; their efficiency is 0.
    pub outside: f64,
    total: LegLanes,
    aimed: Vec<Aimed>,
    resolved: Vec<Resolved>,
    /// Events still considered.
    live: Vec<usize>,
    /// By event: the legs, the last one last.
    order: Vec<[usize; MAX_LEGS]>,
    normals: Vec<Lane>,
    gradient: Vec<Lane>,
    /// Spread and shift of the vertex in calorimeter radii.
    spread: Lane,
    dz: Lane,
    found: Found,
}

impl Workspace {
    pub fn new(plan: &Plan) -> Self {
        let zero = [0.0; BLOCK];
        let legs = plan.legs.len();
        Workspace {
            truth: TruthBlock::new(legs),
            last: Vec::with_capacity(BLOCK),
            event: Vec::with_capacity(BLOCK),
            lost: Vec::with_capacity(BLOCK),
            outside: 0.0,
            total: LegLanes::default(),
            aimed: vec![Aimed::default(); legs],
            resolved: vec![Resolved::default(); legs],
            live: Vec::with_capacity(BLOCK),
            order: vec![[0; MAX_LEGS]; BLOCK],
            normals: vec![zero; plan.normals.count],
            gradient: vec![zero; plan.normals.count],
            spread: zero,
            dz: zero,
            found: Found::new(plan.efficiency.as_ref()),
        }
    }

    /// Measures the block in `truth` with the points `first..first + BLOCK`, and leaves the events that can still be
    /// accepted in `last`.
    pub fn measure(&mut self, plan: &Plan, points: &Scrambling, first: u64) {
        self.last.clear();
        self.event.clear();
        self.lost.clear();
        self.outside = 0.0;
        self.resolve(plan, points, first);
        if self.live.is_empty() {
            return;
        }
        self.find(plan);
        self.rank();
        self.spread(plan, points, first);
        for (leg, aimed) in self.aimed.iter_mut().enumerate() {
            aim(plan, leg, &self.normals, &self.dz, aimed);
        }
        for index in 0..self.live.len() {
            let i = self.live[index];
            if let Some(category) = self.category(plan, i) {
                self.collect(plan, i, category);
            }
        }
    }

    /// True directions, what measures each leg and how well; keeps the events of which every leg is measured.
    fn resolve(&mut self, plan: &Plan, points: &Scrambling, first: u64) {
        self.total = LegLanes::default();
        for (truth, aimed) in self.truth.legs.iter().zip(&mut self.aimed) {
            point(truth, aimed);
            add_momentum(truth, &mut self.total);
        }
        let weight = &self.truth.weight;
        self.live.clear();
        self.live.extend((0..BLOCK).filter(|i| weight[*i] != 0.0));
        for (leg, resolved) in self.resolved.iter_mut().enumerate() {
            let cot = &self.aimed[leg].cot_true;
            let mut choice = [0.0; BLOCK];
            if let Some(dimension) = plan.dimensions.choice[leg] {
                points.fill(dimension, first, &mut choice);
            }
            self.live.retain(|i| {
                let in_gap = plan.cuts.gap_cot.is_some_and(|(low, high)| low <= cot[*i] && cot[*i] < high);
                !in_gap && resolved.look_up(plan, leg, *i, cot[*i], choice[*i])
            });
        }
        for (leg, resolved) in self.resolved.iter_mut().enumerate() {
            widths(&self.truth.legs[leg], &self.aimed[leg].pt, &self.total, resolved);
        }
    }

    /// How likely the events are found. Their weights in `truth` stay as they are: they serve several scramblings.
    fn find(&mut self, plan: &Plan) {
        let Some(efficiency) = &plan.efficiency else { return };
        self.found.find(efficiency, &self.aimed, &self.live);
        self.outside = self.live.iter().filter(|i| self.found.outside[**i]).map(|i| self.truth.weight[*i]).sum();
    }

    /// Puts the leg that contributes most to the mass variance last, the others in their order.
    fn rank(&mut self) {
        let legs = self.resolved.len();
        for i in &self.live {
            let mut best = 0;
            for leg in 1..legs {
                // Of equal legs always the same one: rounding must not decide.
                if self.resolved[leg].pull(*i).abs() > (1.0 + 1e-9) * self.resolved[best].pull(*i).abs() {
                    best = leg;
                }
            }
            let order = &mut self.order[*i];
            for (rank, leg) in (0..legs).filter(|leg| *leg != best).enumerate() {
                order[rank] = leg;
            }
            order[legs - 1] = best;
        }
    }

    /// Draws the normals and the shift of the vertex.
    fn spread(&mut self, plan: &Plan, points: &Scrambling, first: u64) {
        for (k, lane) in self.normals.iter_mut().enumerate() {
            points.fill(plan.dimensions.normals + k, first, lane);
            normal(lane);
        }
        for (rank, gradient) in self.gradient[..plan.legs.len() - 1].iter_mut().enumerate() {
            for i in &self.live {
                gradient[*i] = self.resolved[self.order[*i][rank]].pull(*i);
            }
        }
        if let (Some(vertex), Some(dimension)) = (&plan.vertex, plan.dimensions.vertex_choice) {
            let mut choice = [0.0; BLOCK];
            points.fill(dimension, first, &mut choice);
            for i in 0..BLOCK {
                self.spread[i] =
                    if choice[i] < vertex.right_choice { vertex.spread_right } else { vertex.spread_wrong };
            }
            if let Some(index) = plan.normals.vertex {
                self.gradient[index] = [0.0; BLOCK];
            }
        }
        for (leg, leg_plan) in plan.legs.iter().enumerate() {
            let (mut theta, mut phi) = ([0.0; BLOCK], [0.0; BLOCK]);
            angle_levers(&self.truth.legs[leg], &self.aimed[leg].pt, &self.total, &mut theta, &mut phi);
            if let (Some(vertex), Some(index), true) = (&plan.vertex, plan.normals.vertex, leg_plan.trackless) {
                let cot = &self.aimed[leg].cot_true;
                // The vertex moves cot(theta) along the beam whatever the leg's side.
                add_vertex_lever(vertex.half_length, cot, &theta, &self.spread, &mut self.gradient[index]);
            }
            if let Some(index) = plan.normals.theta[leg] {
                self.gradient[index] = theta.map(|lever| lever * leg_plan.sigma_theta);
            }
            if let Some(index) = plan.normals.phi[leg] {
                self.gradient[index] = phi.map(|lever| lever * leg_plan.sigma_phi);
            }
            if let Some(index) = plan.normals.tracker[leg] {
                let r = &self.resolved[leg];
                for i in &self.live {
                    let used = r.reading[*i] == Reading::Both;
                    let part = (1.0 - r.share[*i]) * r.sigma_tracker[*i];
                    self.gradient[index][*i] = if used { -r.lever[*i] * part } else { 0.0 };
                }
            }
        }
        turn_to(&self.gradient, &mut self.normals);
        if let Some(index) = plan.normals.vertex {
            for i in 0..BLOCK {
                self.dz[i] = self.spread[i] * self.normals[index][i];
            }
        }
    }

    /// The category of an event whose measured directions pass the cuts.
    #[inline(always)]
    fn category(&self, plan: &Plan, i: usize) -> Option<usize> {
        let largest = self.aimed.iter().fold(0.0, |largest: f64, aimed| largest.max(aimed.cot[i]));
        if largest > plan.cuts.max_cot {
            return None;
        }
        plan.cuts.category_max_cot.iter().position(|limit| largest <= *limit)
    }

    /// What the tracker measures of an electron's momentum, GeV; `None` where it loses it.
    #[inline(always)]
    fn tracker_momentum(&self, plan: &Plan, leg: usize, i: usize) -> Option<f64> {
        let index = plan.normals.tracker[leg]?;
        self.curved(leg, i, self.normals[index][i])
    }

    /// Momentum from a curvature of (1 + sigma z)/(1 + scale) times the true one.
    #[inline(always)]
    fn curved(&self, leg: usize, i: usize, z: f64) -> Option<f64> {
        let (r, aimed) = (&self.resolved[leg], &self.aimed[leg]);
        let curvature = 1.0 + r.sigma_tracker[i] * z;
        (curvature > 0.0).then(|| aimed.pt[i] * r.gain_tracker[i] / (curvature * aimed.sin[i]))
    }

    /// Measured momentum of a leg that is not the last, GeV; `None` where the measurement loses it.
    #[inline(always)]
    fn momentum(&self, plan: &Plan, leg: usize, i: usize, z: f64) -> Option<f64> {
        let r = &self.resolved[leg];
        if r.reading[i] == Reading::Tracker {
            return self.curved(leg, i, z);
        }
        let truth = &self.truth.legs[leg];
        let t = match plan.tails.get(r.tail[i]) {
            Some(tail) => tail.quantile(normal_cdf(z)).clamp(-FARTHEST, FARTHEST),
            None => z,
        };
        let mut energy = truth.e[i] * r.gain_calorimeter[i] * (r.centre[i] + r.sigma_calorimeter[i] * t);
        if energy <= 0.0 {
            return None;
        }
        if r.reading[i] == Reading::Both {
            energy = r.share[i] * energy + (1.0 - r.share[i]) * self.tracker_momentum(plan, leg, i)?;
        }
        let mass = truth.mass[i];
        if mass == 0.0 {
            return Some(energy);
        }
        (energy > mass).then(|| ((energy - mass) * (energy + mass)).sqrt())
    }

    /// Measures the other legs of an event and files its last leg.
    #[inline(always)]
    fn collect(&mut self, plan: &Plan, i: usize, category: usize) {
        let weight = self.truth.weight[i] * self.found.probability[i];
        match self.last_leg(plan, i, category) {
            Some(last) => {
                self.last.push(last);
                self.event.push(i);
            }
            None => self.lost.push((i, category, weight)),
        }
    }

    #[inline(always)]
    fn last_leg(&self, plan: &Plan, i: usize, category: usize) -> Option<LastLeg> {
        let legs = plan.legs.len();
        let leg = self.order[i][legs - 1];
        let (r, aimed, truth) = (&self.resolved[leg], &self.aimed[leg], &self.truth.legs[leg]);
        let mass = truth.mass[i];
        let mut last = LastLeg {
            reading: r.reading[i],
            tail: r.tail[i],
            category,
            weight: self.truth.weight[i] * self.found.probability[i],
            unfiltered: self.truth.weight[i],
            mass,
            sin: aimed.sin[i],
            ..LastLeg::default()
        };
        let mut vectors = [[0.0; 4]; MAX_LEGS - 1];
        for rank in 0..legs - 1 {
            let other = self.order[i][rank];
            let p = self.momentum(plan, other, i, self.normals[rank][i])?;
            let direction = &self.aimed[other];
            let m = self.truth.legs[other].mass[i];
            let e = if m == 0.0 { p } else { (p * p + m * m).sqrt() };
            let vector = [e, p * direction.nx[i], p * direction.ny[i], p * direction.nz[i]];
            last.rest_energy += e;
            last.rest_along += vector[1] * aimed.nx[i] + vector[2] * aimed.ny[i] + vector[3] * aimed.nz[i];
            last.rest_mass_squared += m * m;
            for second in &vectors[..rank] {
                let product = e * second[0] - (vector[1] * second[1] + vector[2] * second[2] + vector[3] * second[3]);
                last.rest_mass_squared += 2.0 * product;
            }
            last.other_pt[rank] = p * direction.sin[i];
            vectors[rank] = vector;
        }
        if legs > 2 {
            last.other_pt[..legs - 1].sort_unstable_by(|a, b| b.total_cmp(a));
        }
        match r.reading[i] {
            Reading::Tracker => {
                last.slope = aimed.pt[i] * r.gain_tracker[i] / (aimed.sin[i] * r.sigma_tracker[i]);
                last.offset = 1.0 / r.sigma_tracker[i];
            }
            Reading::Calorimeter => {
                last.offset = -r.centre[i] / r.sigma_calorimeter[i];
                last.slope = 1.0 / (truth.e[i] * r.gain_calorimeter[i] * r.sigma_calorimeter[i]);
                last.least_energy = mass;
            }
            Reading::Both => {
                let rest = (1.0 - r.share[i]) * self.tracker_momentum(plan, leg, i)?;
                let unit = r.share[i] * truth.e[i] * r.gain_calorimeter[i];
                last.offset = -(rest / unit + r.centre[i]) / r.sigma_calorimeter[i];
                last.slope = 1.0 / (unit * r.sigma_calorimeter[i]);
                last.least_energy = if rest > mass { rest } else { mass };
            }
        }
        Some(last)
    }
}

fn add_momentum(leg: &LegLanes, total: &mut LegLanes) {
    for i in 0..BLOCK {
        total.e[i] += leg.e[i];
        total.px[i] += leg.px[i];
        total.py[i] += leg.py[i];
        total.pz[i] += leg.pz[i];
    }
}
