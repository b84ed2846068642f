//! Masses of the two intermediate particles of X -> V V(*).

use crate::kinematics::phase_space_lambda;
use crate::numerics::kernel;
use crate::numerics::sobol::{BLOCK, Lane};
use crate::process::Intermediate;
use std::f64::consts::TAU;

/// Draws (m1, m2) with weights from the density in (m1², m2²)
/// sqrt(lambda)(lambda + 12 m1² m2²/M⁴) / prod((mi² - mV²)² + mV² GammaV²)
/// (A. Djouadi, Phys. Rept. 457 (2008) 1), lambda the phase-space function in units of M.
///
/// The density is symmetric: one number says which of the two is the heavier; the heavier one is drawn first in the
/// angle of its Breit-Wigner, then the lighter one in what is left. So below threshold one V is near its shell.
#[derive(Clone, Debug)]
pub struct CascadeSampler {
    v_mass: f64,
    v_width: f64,
    /// Thresholds of the first and the second pair, GeV.
    pair_threshold: [f64; 2],
    /// ln of the total rate at uniform steps of ln M, where M varies.
    rate: Option<RateTable>,
}

#[derive(Clone, Debug)]
struct RateTable {
    ln_low: f64,
    step: f64,
    ln_rate: Vec<f64>,
}

impl CascadeSampler {
    /// The sampler for pairs with these thresholds (sums of leg masses), for resonance masses between `range_gev`; with
    /// equal ends the total rate is a constant that drops out.
    pub fn new(intermediate: &Intermediate, pair_threshold: [f64; 2], range_gev: (f64, f64)) -> Self {
        let mut sampler = CascadeSampler {
            v_mass: intermediate.mass_gev,
            v_width: intermediate.width_gev,
            pair_threshold,
            rate: None,
        };
        if range_gev.0 < range_gev.1 {
            sampler.rate = Some(sampler.rate_table(range_gev));
        }
        sampler
    }

    /// Pair masses and the weight factor of each event: `first` and `second` are uniform numbers.
    pub fn fill(&self, parent: &Lane, first: &Lane, second: &Lane, m1: &mut Lane, m2: &mut Lane, weight: &mut Lane) {
        pairs(self.v_mass, self.v_width, self.pair_threshold, parent, first, second, m1, m2, weight);
        if let Some(rate) = &self.rate {
            for i in 0..BLOCK {
                weight[i] /= rate.at(parent[i]);
            }
        }
    }

    /// Mean weight before division by the rate: the integral of the density up to a constant, by the midpoint rule in the
    /// same variables (periodic enough: 1e-5 of the value, tested through the width of wide resonances).
    fn total_rate(&self, parent: f64) -> f64 {
        const SIDE: usize = 2 * BLOCK;
        let mut sum = 0.0;
        let (mut m1, mut m2) = ([0.0; BLOCK], [0.0; BLOCK]);
        for i in 0..SIDE {
            for j in (0..SIDE).step_by(BLOCK) {
                let mut second = [0.0; BLOCK];
                for (k, value) in second.iter_mut().enumerate() {
                    *value = ((j + k) as f64 + 0.5) / SIDE as f64;
                }
                let first = [(i as f64 + 0.5) / SIDE as f64; BLOCK];
                let mut weight = [1.0; BLOCK];
                pairs(
                    self.v_mass,
                    self.v_width,
                    self.pair_threshold,
                    &[parent; BLOCK],
                    &first,
                    &second,
                    &mut m1,
                    &mut m2,
                    &mut weight,
                );
                sum += weight.iter().sum::<f64>();
            }
        }
        sum / (SIDE * SIDE) as f64
    }

    fn rate_table(&self, range_gev: (f64, f64)) -> RateTable {
        const NODES: usize = 512;
        let threshold = self.pair_threshold[0] + self.pair_threshold[1];
        // Beyond 50 V masses the rate no longer matters: natural shapes have nothing left there.
        let high = range_gev.1.min(50.0 * self.v_mass).max(range_gev.0 * 2.0);
        let low = range_gev.0.max(threshold).max(1e-3 * self.v_mass) * (1.0 + 1e-9);
        let (ln_low, ln_high) = (libm::log(low), libm::log(high));
        let step = (ln_high - ln_low) / (NODES - 1) as f64;
        let ln_rate = (0..NODES)
            .map(|i| libm::log(self.total_rate(libm::exp(ln_low + i as f64 * step)).max(f64::MIN_POSITIVE)))
            .collect();
        RateTable { ln_low, step, ln_rate }
    }
}

impl RateTable {
    fn at(&self, parent: f64) -> f64 {
        let position = ((libm::log(parent) - self.ln_low) / self.step).clamp(0.0, (self.ln_rate.len() - 1) as f64);
        let node = (position as usize).min(self.ln_rate.len() - 2);
        let inside = position - node as f64;
        libm::exp(self.ln_rate[node] * (1.0 - inside) + self.ln_rate[node + 1] * inside)
    }
}

/// Arc tangent by libm; not vectorised, four a point.
fn angle(mass_squared: f64, v_mass: f64, v_width: f64) -> f64 {
    libm::atan((mass_squared - v_mass * v_mass) / (v_mass * v_width))
}

#[allow(clippy::too_many_arguments)]
fn pairs(
    v_mass: f64,
    v_width: f64,
    threshold: [f64; 2],
    parent: &Lane,
    first: &Lane,
    second: &Lane,
    m1: &mut Lane,
    m2: &mut Lane,
    weight: &mut Lane,
) {
    let least = threshold[0].min(threshold[1]);
    let floor = angle(least * least, v_mass, v_width);
    for i in 0..BLOCK {
        let swap = first[i] < 0.5;
        let stretched = if swap { 2.0 * first[i] } else { 2.0 * first[i] - 1.0 };
        let most = parent[i] - least;
        let top = angle(most.max(least) * most.max(least), v_mass, v_width);
        let heavy_squared = square_at(floor + stretched * (top - floor), v_mass, v_width);
        let heavy = heavy_squared.max(0.0).sqrt();
        let room = heavy.min(parent[i] - heavy).max(least);
        let end = angle(room * room, v_mass, v_width);
        let light_squared = square_at(floor + second[i] * (end - floor), v_mass, v_width);
        let light = light_squared.max(0.0).sqrt();
        let (a, b) = if swap { (light, heavy) } else { (heavy, light) };
        let lambda = phase_space_lambda(parent[i], a, b).max(0.0);
        let x = a * b / (parent[i] * parent[i]);
        let allowed = a >= threshold[0] && b >= threshold[1] && a + b < parent[i];
        m1[i] = a;
        m2[i] = b;
        let density = lambda.sqrt() * (lambda + 12.0 * x * x) * (top - floor) * (end - floor);
        weight[i] *= if allowed { density } else { 0.0 };
    }
}

fn square_at(angle: f64, v_mass: f64, v_width: f64) -> f64 {
    let (cos, sin) = kernel::cos_sin_turns(angle / TAU);
    v_mass * v_mass + v_mass * v_width * sin / cos
}
