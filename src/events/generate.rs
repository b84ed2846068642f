//! Generated truth events: production, natural mass, decay.

use super::block::{LegLanes, TruthBlock};
use super::cascade::CascadeSampler;
use super::natural::NaturalSampler;
use crate::kinematics::phase_space_lambda;
use crate::numerics::kernel;
use crate::numerics::normal::normal_cdf;
use crate::numerics::sobol::{BLOCK, Lane, Scrambling};
use crate::process::{Decay, Production, Resonance, SpectrumCell};
use crate::wide;

/// Turns points of the unit cube into truth events of one channel at one mass point.
///
/// The azimuth of production is fixed (along x): the detector is the same all around. It is also the same on both sides:
/// of events that are mirror images in the transverse plane, or along the beam where the rapidities are symmetric, or that
/// differ by an exchange of equal decay products, one is drawn. That leaves all templates as they are and lets the points
/// fill an eighth of the space.
#[derive(Clone, Debug)]
pub struct Generator {
    production: Production,
    /// Running sums of the cells' weights, ending at 1; for a table.
    cell_sums: Vec<f64>,
    natural: NaturalSampler,
    masses: Vec<f64>,
    cascade: Option<CascadeSampler>,
    /// Legs beyond this |rapidity| are out of reach.
    reach: f64,
    /// Whether the resonance decays to two alike.
    alike: bool,
}

/// The dimensions of the sequence that truth events take.
#[derive(Clone, Debug, Default)]
pub struct TruthDimensions {
    /// How many.
    pub count: usize,
    /// Those that matter most for acceptance and mass, then those that matter less; some may be in neither.
    pub leading: Vec<usize>,
    /// See `leading`.
    pub following: Vec<usize>,
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
                let width = resonance.width.at_gev(mass_gev);
                let range = natural.range_gev();
                Some(CascadeSampler::new(&resonance.intermediate, thresholds, range, mass_gev, width))
            }
        };
        let alike = match decay {
            Decay::Direct(legs) => legs.windows(2).all(|pair| pair[0] == pair[1]),
            Decay::Cascade([first, second]) => first == second,
        };
        let cell_sums = match production {
            Production::Spectrum { .. } => Vec::new(),
            Production::Table(cells) => running_sums(cells),
        };
        Some(Generator {
            production: production.clone(),
            cell_sums,
            natural,
            masses,
            cascade,
            reach: f64::INFINITY,
            alike,
        })
    }

    /// Draws mostly events whose legs stay within this |rapidity|, with weights that make up for it exactly; the preference
    /// acts on a Gaussian spectrum only.
    pub fn restrict(&mut self, reach: f64) {
        self.reach = reach;
    }

    /// The dimensions that the events take.
    pub fn dimensions(&self) -> TruthDimensions {
        let count = if self.cascade.is_some() { CASCADE + 6 } else { CASCADE };
        let mut leading = vec![COS_THETA, RAPIDITY];
        if !self.natural.is_line() {
            leading.push(MASS);
        }
        let following = [PT, PHI].into_iter().chain(CASCADE..count).collect();
        TruthDimensions { count, leading, following }
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
        let mut u_cos = lane(COS_THETA);
        if self.alike {
            // The first of two alike may be the one with the larger momentum along the beam.
            u_cos = u_cos.map(|u| 0.5 + 0.5 * u);
        }
        let u_phi = lane(PHI).map(|u| 0.5 * u);
        match &self.cascade {
            None => {
                let (m1, m2) = ([self.masses[0]; BLOCK], [self.masses[1]; BLOCK]);
                let [a, b, ..] = block.legs.as_mut_slice() else { return };
                split(&u_cos, &u_phi, &block.mass, &m1, &m2, a, b);
            }
            Some(cascade) => {
                let (mut v1, mut v2) = (LegLanes::default(), LegLanes::default());
                let (mut m1, mut m2) = ([0.0; BLOCK], [0.0; BLOCK]);
                let weight = &mut block.weight;
                cascade.fill(&block.mass, &lane(CASCADE), &lane(CASCADE + 1), &mut m1, &mut m2, weight);
                split(&u_cos, &u_phi, &block.mass, &m1, &m2, &mut v1, &mut v2);
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
        block.generated = block.weight;
        self.produce(&lane(PT), &lane(RAPIDITY), block);
    }

    /// Moves the legs from the resonance's rest system to the laboratory.
    fn produce(&self, u_pt: &Lane, u_rapidity: &Lane, block: &mut TruthBlock) {
        let (mut pt, mut rapidity) = ([0.0; BLOCK], [0.0; BLOCK]);
        match &self.production {
            Production::Spectrum { pt_mean_gev, rapidity_sigma } => {
                exponential(*pt_mean_gev, u_pt, &mut pt);
                for leg in &mut block.legs {
                    boost_across(&block.mass, &pt, leg);
                }
                if self.reach.is_finite() && *rapidity_sigma > 0.0 {
                    let (mut low, mut high) = ([-f64::MAX; BLOCK], [f64::MAX; BLOCK]);
                    for leg in &block.legs {
                        narrow(self.reach, leg, &mut low, &mut high);
                    }
                    within(*rapidity_sigma, u_rapidity, &low, &high, &mut rapidity, &mut block.weight);
                } else {
                    gaussian(*rapidity_sigma, u_rapidity, &mut rapidity);
                }
            }
            Production::Table(cells) => {
                self.draw_cells(cells, u_pt, u_rapidity, &mut pt, &mut rapidity);
                for leg in &mut block.legs {
                    boost_across(&block.mass, &pt, leg);
                }
            }
        }
        for leg in &mut block.legs {
            boost_along(&rapidity, leg);
        }
    }

    fn draw_cells(&self, cells: &[SpectrumCell], u_pt: &Lane, u_y: &Lane, pt: &mut Lane, rapidity: &mut Lane) {
        let between = |(low, high): (f64, f64), u: f64| low + u * (high - low);
        for i in 0..BLOCK {
            let cell = self.cell_sums.partition_point(|sum| *sum <= u_pt[i]).min(cells.len() - 1);
            let start = if cell == 0 { 0.0 } else { self.cell_sums[cell - 1] };
            let inside = (u_pt[i] - start) / (self.cell_sums[cell] - start);
            pt[i] = between(cells[cell].pt_gev, inside);
            rapidity[i] = between(cells[cell].rapidity, u_y[i]);
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
    fn exponential(mean: f64, uniform: &Lane, values: &mut Lane) {
        for i in 0..BLOCK {
            values[i] = -mean * kernel::ln(uniform[i]);
        }
    }
}

wide! {
    /// The upper half of a Gaussian.
    fn gaussian(sigma: f64, uniform: &Lane, values: &mut Lane) {
        for i in 0..BLOCK {
            let u = 0.5 + 0.5 * uniform[i];
            let u = if u < 1.0 - 1.2e-16 { u } else { 1.0 - 1.2e-16 };
            values[i] = sigma * kernel::normal_quantile(u);
        }
    }
}

wide! {
    /// Narrows the range of the resonance's rapidity to what leaves a leg within reach.
    fn narrow(reach: f64, leg: &LegLanes, low: &mut Lane, high: &mut Lane) {
        for i in 0..BLOCK {
            let least = leg.e[i] * 1e-12;
            let (plus, minus) = (leg.e[i] + leg.pz[i], leg.e[i] - leg.pz[i]);
            let plus = if plus > least { plus } else { least };
            let minus = if minus > least { minus } else { least };
            let own = 0.5 * kernel::ln(plus / minus);
            let (from, to) = (-reach - own, reach - own);
            low[i] = if from > low[i] { from } else { low[i] };
            high[i] = if to < high[i] { to } else { high[i] };
        }
    }
}

/// Share of the events that are drawn from the whole spectrum all the same, so that no event has more than its inverse as
/// weight.
const DEFENSIVE: f64 = 1.0 / 16.0;

wide! {
    /// Rapidities of the upper half of a Gaussian, mostly between `low` and `high`: density over drawn density multiplies
    /// the weight.
    fn within(sigma: f64, uniform: &Lane, low: &Lane, high: &Lane, rapidity: &mut Lane, weight: &mut Lane) {
        for i in 0..BLOCK {
            let from = if low[i] > 0.0 { low[i] } else { 0.0 };
            let below = normal_cdf(from / sigma);
            let inside = normal_cdf(high[i] / sigma) - below;
            let reachable = inside > 1e-9;
            let anywhere = uniform[i] < DEFENSIVE || !reachable;
            let (start, length) = if reachable {
                if anywhere { (0.0, DEFENSIVE) } else { (DEFENSIVE, 1.0 - DEFENSIVE) }
            } else {
                (0.0, 1.0)
            };
            let u = (uniform[i] - start) / length;
            let u = if anywhere { 0.5 + 0.5 * u } else { below + u * inside };
            let u = if u > 1e-16 { u } else { 1e-16 };
            let u = if u < 1.0 - 1.2e-16 { u } else { 1.0 - 1.2e-16 };
            let y = sigma * kernel::normal_quantile(u);
            rapidity[i] = y;
            let preferred = !anywhere || (from < y && y < high[i]);
            // Of the half Gaussian, twice as dense, the share between the limits is 2 inside.
            let drawn = if preferred { (1.0 - DEFENSIVE) / (2.0 * inside) } else { 0.0 };
            let factor = 1.0 / (drawn + DEFENSIVE);
            weight[i] *= if reachable { factor } else { 1.0 };
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
    /// From the resonance's rest system to one in which it has its transverse momentum, along x.
    fn boost_across(mass: &Lane, pt: &Lane, leg: &mut LegLanes) {
        for i in 0..BLOCK {
            let inverse = 1.0 / mass[i];
            let (gamma, beta_gamma) = ((mass[i] * mass[i] + pt[i] * pt[i]).sqrt() * inverse, pt[i] * inverse);
            let e = gamma * leg.e[i] + beta_gamma * leg.px[i];
            leg.px[i] = beta_gamma * leg.e[i] + gamma * leg.px[i];
            leg.e[i] = e;
        }
    }
}

wide! {
    /// By a rapidity along the beam.
    fn boost_along(rapidity: &Lane, leg: &mut LegLanes) {
        for i in 0..BLOCK {
            let grown = kernel::exp(rapidity[i]);
            let shrunk = 1.0 / grown;
            let (cosh, sinh) = (0.5 * (grown + shrunk), 0.5 * (grown - shrunk));
            let e = leg.e[i] * cosh + leg.pz[i] * sinh;
            leg.pz[i] = leg.pz[i] * cosh + leg.e[i] * sinh;
            leg.e[i] = e;
        }
    }
}
