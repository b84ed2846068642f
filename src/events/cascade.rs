//! Masses of the two intermediate particles of X -> V V(*).

use crate::kinematics::phase_space_lambda;
use crate::numerics::kernel;
use crate::numerics::sobol::{BLOCK, Lane};
use crate::process::Intermediate;
use rayon::prelude::*;
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
    /// The total rate, where M varies.
    rate: Option<RateTable>,
}

/// The total rate as a function of M, linear between nodes in the logarithms.
#[derive(Clone, Debug)]
struct RateTable {
    ln_mass: Vec<f64>,
    ln_rate: Vec<f64>,
}

impl CascadeSampler {
    /// The sampler for pairs with these thresholds (sums of leg masses), for resonance masses between `range_gev`; with
    /// equal ends the total rate is a constant that drops out. Pole and width of the resonance say where the events are.
    pub fn new(
        intermediate: &Intermediate,
        pair_threshold: [f64; 2],
        range_gev: (f64, f64),
        pole_gev: f64,
        width_gev: f64,
    ) -> Self {
        let mut sampler = CascadeSampler {
            v_mass: intermediate.mass_gev,
            v_width: intermediate.width_gev,
            pair_threshold,
            rate: None,
        };
        if range_gev.0 < range_gev.1 {
            sampler.rate = Some(sampler.rate_table(range_gev, pole_gev, width_gev));
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

    /// The integral of the density over both masses: Gauss-Legendre in the angles of the two Breit-Wigners, for either pair
    /// as the heavier one, split where the lighter mass stops being limited by the heavier. Relative error below 1e-4
    /// (tested through the comparison of wide resonances with plain smearing).
    fn total_rate(&self, parent: f64, rule: &[(f64, f64)]) -> f64 {
        let angle = |m: f64| angle(m * m, self.v_mass, self.v_width);
        let mass = |angle: f64| square_at(angle, self.v_mass, self.v_width).max(0.0).sqrt();
        let mut sum = 0.0;
        for [heavier, lighter] in [[0, 1], [1, 0]].map(|order: [usize; 2]| order.map(|pair| self.pair_threshold[pair]))
        {
            let bounds = [heavier.max(lighter), 0.5 * parent, parent - lighter].map(|m| m.max(heavier).max(lighter));
            for segment in bounds.windows(2) {
                let (from, to) = (angle(segment[0]), angle(segment[1]));
                if from >= to {
                    continue;
                }
                for (x, weight) in rule {
                    let heavy = mass(from + x * (to - from));
                    let (low, high) = (angle(lighter), angle(heavy.min(parent - heavy).max(lighter)));
                    let inner: f64 = rule
                        .iter()
                        .map(|(y, weight)| {
                            // The density ends like a square root: 1 - (1 - y)² makes that smooth.
                            let light = mass(low + y * (2.0 - y) * (high - low));
                            let product = heavy * light / (parent * parent);
                            let lambda = phase_space_lambda(parent, heavy, light).max(0.0);
                            2.0 * (1.0 - y) * weight * lambda.sqrt() * (lambda + 12.0 * product * product)
                        })
                        .sum();
                    sum += weight * (to - from) * (high - low) * inner;
                }
            }
        }
        sum
    }

    /// Nodes uniform in the logarithm of the mass, for the whole range, and dense around the pole, where the events are.
    fn rate_table(&self, range_gev: (f64, f64), pole: f64, width: f64) -> RateTable {
        const COARSE: usize = 256;
        const FINE: usize = 512;
        let threshold = self.pair_threshold[0] + self.pair_threshold[1];
        // Beyond 50 V masses the rate no longer matters: natural shapes have nothing left there.
        let high = range_gev.1.min(50.0 * self.v_mass).max(range_gev.0 * 2.0);
        let low = range_gev.0.max(threshold).max(1e-3 * self.v_mass) * (1.0 + 1e-9);
        let (ln_low, ln_high) = (libm::log(low), libm::log(high));
        let mut ln_mass: Vec<f64> =
            (0..=COARSE).map(|i| ln_low + (ln_high - ln_low) * i as f64 / COARSE as f64).collect();
        // Out to 10 widths, or 40 % of the mass.
        let reach = (10.0 * width).min(0.4 * pole);
        ln_mass.extend((0..=FINE).filter_map(|i| {
            let m = pole + reach * (2.0 * i as f64 / FINE as f64 - 1.0);
            (m > low && m < high).then(|| libm::log(m))
        }));
        ln_mass.sort_unstable_by(f64::total_cmp);
        ln_mass.dedup_by(|a, b| *a - *b < 1e-9);
        let rule = gauss_legendre(24);
        let ln_rate = ln_mass
            .par_iter()
            .map(|ln_m| libm::log(self.total_rate(libm::exp(*ln_m), &rule).max(f64::MIN_POSITIVE)))
            .collect();
        RateTable { ln_mass, ln_rate }
    }
}

/// Nodes and weights of the Gauss-Legendre rule on (0, 1), by Newton's method on the Legendre polynomial
/// (Abramowitz & Stegun 25.4.29, 22.7.10).
fn gauss_legendre(count: usize) -> Vec<(f64, f64)> {
    let n = count as f64;
    (0..count)
        .map(|i| {
            let mut x = libm::cos(std::f64::consts::PI * (i as f64 + 0.75) / (n + 0.5));
            let mut slope = 1.0;
            for _ in 0..20 {
                let (mut before, mut value) = (1.0, x);
                for k in 2..=count {
                    let k = k as f64;
                    (before, value) = (value, ((2.0 * k - 1.0) * x * value - (k - 1.0) * before) / k);
                }
                slope = n * (x * value - before) / (x * x - 1.0);
                x -= value / slope;
            }
            (0.5 * (1.0 + x), 1.0 / ((1.0 - x * x) * slope * slope))
        })
        .collect()
}

impl RateTable {
    fn at(&self, parent: f64) -> f64 {
        let ln_m = libm::log(parent);
        let node = self.ln_mass.partition_point(|x| *x <= ln_m).clamp(1, self.ln_mass.len() - 1);
        let (from, to) = (self.ln_mass[node - 1], self.ln_mass[node]);
        let inside = ((ln_m - from) / (to - from)).clamp(0.0, 1.0);
        libm::exp(self.ln_rate[node - 1] * (1.0 - inside) + self.ln_rate[node] * inside)
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
