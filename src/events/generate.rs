//! Generated truth events: production, natural mass, decay.

use super::block::{LegLanes, TruthBlock};
use super::cascade::CascadeSampler;
use super::natural::NaturalSampler;
use crate::kinematics::phase_space_lambda;
use crate::numerics::kernel;
use crate::numerics::sobol::{BLOCK, Lane, Scrambling};
use crate::process::{Decay, Production, Resonance, SpectrumCell};
use crate::wide;

/// Turns points of the unit cube into truth events of one channel at one mass point.
///
/// The azimuth of production is fixed (along x): the detector is the same all around.
#[derive(Clone, Debug)]
pub struct Generator {
    production: Production,
    /// Running sums of the cells' weights, ending at 1; for a table.
    cell_sums: Vec<f64>,
    natural: NaturalSampler,
    masses: Vec<f64>,
    cascade: Option<CascadeSampler>,
}

/// Dimensions of the production and of the first decay.
const COS_THETA: usize = 0;
const PHI: usize = 1;
const PT: usize = 2;
const RAPIDITY: usize = 3;
const MASS: usize = 4;
const CASCADE: usize = 5;

impl Generator {
    /// A generator of a decay at a mass point; `None` where the mass does not reach the legs' masses.
    pub fn new(resonance: &Resonance, production: &Production, decay: &Decay, mass_gev: f64) -> Option<Self> {
        let masses: Vec<f64> = decay.legs().iter().map(|object| object.mass_gev()).collect();
        let natural = NaturalSampler::new(resonance, mass_gev, masses.iter().sum())?;
        let cascade = match decay {
            Decay::Direct(_) => None,
            Decay::Cascade(_) => {
                let thresholds = [masses[0] + masses[1], masses[2] + masses[3]];
                Some(CascadeSampler::new(&resonance.intermediate, thresholds, natural.range_gev()))
            }
        };
        let cell_sums = match production {
            Production::Spectrum { .. } => Vec::new(),
            Production::Table(cells) => running_sums(cells),
        };
        Some(Generator { production: production.clone(), cell_sums, natural, masses, cascade })
    }

    /// Number of dimensions that the events take.
    pub fn dimensions(&self) -> usize {
        if self.cascade.is_some() { CASCADE + 6 } else { CASCADE }
    }

    /// The events of the points `first..first + BLOCK`.
    pub fn fill(&self, points: &Scrambling, first: u64, block: &mut TruthBlock) {
        let lane = |dimension: usize| {
            let mut lane = [0.0; BLOCK];
            points.fill(dimension, first, &mut lane);
            lane
        };
        if self.natural.is_line() {
            self.natural.fill(&[0.5; BLOCK], &mut block.mass, &mut block.weight);
        } else {
            self.natural.fill(&lane(MASS), &mut block.mass, &mut block.weight);
        }
        let (mut pt, mut rapidity) = ([0.0; BLOCK], [0.0; BLOCK]);
        self.produce(&lane(PT), &lane(RAPIDITY), &mut pt, &mut rapidity);
        match &self.cascade {
            None => {
                let (m1, m2) = ([self.masses[0]; BLOCK], [self.masses[1]; BLOCK]);
                let [a, b, ..] = block.legs.as_mut_slice() else { return };
                split(&lane(COS_THETA), &lane(PHI), &block.mass, &m1, &m2, a, b);
            }
            Some(cascade) => {
                let (mut v1, mut v2) = (LegLanes::default(), LegLanes::default());
                let (mut m1, mut m2) = ([0.0; BLOCK], [0.0; BLOCK]);
                let weight = &mut block.weight;
                cascade.fill(&block.mass, &lane(CASCADE), &lane(CASCADE + 1), &mut m1, &mut m2, weight);
                split(&lane(COS_THETA), &lane(PHI), &block.mass, &m1, &m2, &mut v1, &mut v2);
                let [a, b, c, d] = block.legs.as_mut_slice() else { return };
                let mass = |leg: usize| [self.masses[leg]; BLOCK];
                split(&lane(CASCADE + 2), &lane(CASCADE + 3), &m1, &mass(0), &mass(1), a, b);
                split(&lane(CASCADE + 4), &lane(CASCADE + 5), &m2, &mass(2), &mass(3), c, d);
                boost(&v1, a);
                boost(&v1, b);
                boost(&v2, c);
                boost(&v2, d);
            }
        }
        for leg in &mut block.legs {
            to_laboratory(&block.mass, &pt, &rapidity, leg);
        }
    }

    fn produce(&self, u_pt: &Lane, u_rapidity: &Lane, pt: &mut Lane, rapidity: &mut Lane) {
        match &self.production {
            Production::Spectrum { pt_mean_gev, rapidity_sigma } => {
                spectrum(*pt_mean_gev, *rapidity_sigma, u_pt, u_rapidity, pt, rapidity);
            }
            Production::Table(cells) => {
                for i in 0..BLOCK {
                    let cell = self.cell_sums.partition_point(|sum| *sum <= u_pt[i]).min(cells.len() - 1);
                    let start = if cell == 0 { 0.0 } else { self.cell_sums[cell - 1] };
                    let inside = (u_pt[i] - start) / (self.cell_sums[cell] - start);
                    let between = |(low, high): (f64, f64), u: f64| low + u * (high - low);
                    pt[i] = between(cells[cell].pt_gev, inside);
                    rapidity[i] = between(cells[cell].rapidity, u_rapidity[i]);
                }
            }
        }
    }
}

fn running_sums(cells: &[SpectrumCell]) -> Vec<f64> {
    let total: f64 = cells.iter().map(|cell| cell.weight).sum();
    let mut sum = 0.0;
    cells
        .iter()
        .map(|cell| {
            sum += cell.weight / total;
            sum
        })
        .collect()
}

wide! {
    fn spectrum(
        pt_mean: f64,
        rapidity_sigma: f64,
        u_pt: &Lane,
        u_rapidity: &Lane,
        pt: &mut Lane,
        rapidity: &mut Lane,
    ) {
        for i in 0..BLOCK {
            pt[i] = -pt_mean * kernel::ln(u_pt[i]);
        }
        for i in 0..BLOCK {
            rapidity[i] = rapidity_sigma * kernel::normal_quantile(u_rapidity[i]);
        }
    }
}

wide! {
    /// Two-body decay in the parent's rest system, isotropic in the two uniform numbers.
    fn split(
        u_cos: &Lane,
        u_phi: &Lane,
        parent: &Lane,
        m1: &Lane,
        m2: &Lane,
        a: &mut LegLanes,
        b: &mut LegLanes,
    ) {
        for i in 0..BLOCK {
            let cos_theta = 2.0 * u_cos[i] - 1.0;
            // (1 - c)(1 + c) = 4 u (1 - u), which is never negative.
            let sin_theta = 2.0 * (u_cos[i] * (1.0 - u_cos[i])).sqrt();
            let (cos_phi, sin_phi) = kernel::cos_sin_turns(u_phi[i]);
            let lambda = phase_space_lambda(parent[i], m1[i], m2[i]);
            let p = 0.5 * parent[i] * (if lambda > 0.0 { lambda } else { 0.0 }).sqrt();
            let (px, py, pz) = (p * sin_theta * cos_phi, p * sin_theta * sin_phi, p * cos_theta);
            a.px[i] = px;
            a.py[i] = py;
            a.pz[i] = pz;
            a.e[i] = (p * p + m1[i] * m1[i]).sqrt();
            a.mass[i] = m1[i];
            b.px[i] = -px;
            b.py[i] = -py;
            b.pz[i] = -pz;
            b.e[i] = (p * p + m2[i] * m2[i]).sqrt();
            b.mass[i] = m2[i];
        }
    }
}

wide! {
    /// From the rest system of `frame` to the system in which `frame` is given.
    fn boost(frame: &LegLanes, leg: &mut LegLanes) {
        for i in 0..BLOCK {
            let mass = frame.mass[i];
            let along = leg.px[i] * frame.px[i] + leg.py[i] * frame.py[i] + leg.pz[i] * frame.pz[i];
            let e = (leg.e[i] * frame.e[i] + along) / mass;
            let factor = (e + leg.e[i]) / (frame.e[i] + mass);
            leg.e[i] = e;
            leg.px[i] += factor * frame.px[i];
            leg.py[i] += factor * frame.py[i];
            leg.pz[i] += factor * frame.pz[i];
        }
    }
}

wide! {
    /// From the resonance's rest system to the laboratory: a boost along x, then one along the beam.
    fn to_laboratory(mass: &Lane, pt: &Lane, rapidity: &Lane, leg: &mut LegLanes) {
        for i in 0..BLOCK {
            let mt = (mass[i] * mass[i] + pt[i] * pt[i]).sqrt();
            let (gamma, beta_gamma) = (mt / mass[i], pt[i] / mass[i]);
            let grown = kernel::exp(rapidity[i]);
            let shrunk = 1.0 / grown;
            let (cosh, sinh) = (0.5 * (grown + shrunk), 0.5 * (grown - shrunk));
            let e = gamma * leg.e[i] + beta_gamma * leg.px[i];
            leg.px[i] = beta_gamma * leg.e[i] + gamma * leg.px[i];
            leg.e[i] = e * cosh + leg.pz[i] * sinh;
            leg.pz[i] = leg.pz[i] * cosh + e * sinh;
        }
    }
}
