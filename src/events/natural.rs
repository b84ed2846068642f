//! Resonance masses drawn from the natural line shape.

use crate::numerics::kernel;
use crate::numerics::sobol::{BLOCK, Lane};
use crate::process::{Natural, Resonance};
use crate::wide;
use std::f64::consts::{FRAC_PI_2, TAU};

/// Cells of the table that turns a uniform number into a mass.
const CELLS: usize = 1024;

/// Draws masses of density natural(m) (m/M)^-falloff_power above a threshold, with weights.
///
/// The variable is the angle phi of m = M + Gamma/2 tan(phi), in which all natural shapes are bounded. A table maps a
/// uniform number to phi in straight pieces; the weight is the density over the density that the table draws, so that
/// the result is exact whatever the table. With a falloff only masses between M/2 and 2M are drawn: a power law says
/// nothing about production further away, and would not be integrable at 0.
#[derive(Clone, Debug)]
pub struct NaturalSampler {
    shape: Natural,
    mass: f64,
    width: f64,
    falloff_power: f64,
    /// Angles at uniform steps of the drawn number; empty for a line.
    angles: Vec<f64>,
}

impl NaturalSampler {
    /// The sampler at a mass point, above `threshold_gev`; `None` where the range of masses is empty.
    pub fn new(resonance: &Resonance, mass_gev: f64, threshold_gev: f64) -> Option<Self> {
        let width = resonance.width.at_gev(mass_gev);
        let mut sampler = NaturalSampler {
            shape: resonance.natural,
            mass: mass_gev,
            width,
            falloff_power: resonance.falloff_power,
            angles: Vec::new(),
        };
        if width == 0.0 {
            return (mass_gev > threshold_gev).then_some(sampler);
        }
        let (mut low, mut high) = (threshold_gev.max(0.0), f64::INFINITY);
        if resonance.falloff_power != 0.0 {
            low = low.max(0.5 * mass_gev);
            high = 2.0 * mass_gev;
        }
        if low >= high {
            return None;
        }
        sampler.angles = sampler.table(sampler.angle(low), sampler.angle(high));
        Some(sampler)
    }

    /// Whether every event has the same mass.
    pub fn is_line(&self) -> bool {
        self.angles.is_empty()
    }

    /// Range of masses that can be drawn, in GeV; the upper end may be infinite.
    pub fn range_gev(&self) -> (f64, f64) {
        match (self.angles.first(), self.angles.last()) {
            (Some(a), Some(b)) => (self.mass_at(*a), if *b >= FRAC_PI_2 { f64::INFINITY } else { self.mass_at(*b) }),
            _ => (self.mass, self.mass),
        }
    }

    fn angle(&self, mass: f64) -> f64 {
        if mass.is_infinite() { FRAC_PI_2 } else { libm::atan((mass - self.mass) / (0.5 * self.width)) }
    }

    fn mass_at(&self, angle: f64) -> f64 {
        let (cos, sin) = kernel::cos_sin_turns(angle / TAU);
        self.mass + 0.5 * self.width * sin / cos.max(1e-300)
    }

    /// Inverts the cumulative density in the angle, roughly: it only sets how even the weights are.
    fn table(&self, low: f64, high: f64) -> Vec<f64> {
        const STEPS: usize = 32 * CELLS;
        let step = (high - low) / STEPS as f64;
        let mut cumulative = Vec::with_capacity(STEPS + 1);
        let mut sum = 0.0;
        cumulative.push(sum);
        for i in 0..STEPS {
            let angle = low + (i as f64 + 0.5) * step;
            sum += density(self.shape, self.mass, self.width, self.falloff_power, self.mass_at(angle));
            cumulative.push(sum);
        }
        let mut angles = Vec::with_capacity(CELLS + 1);
        let mut i = 0;
        for cell in 0..CELLS {
            let target = sum * cell as f64 / CELLS as f64;
            while i + 1 < STEPS && cumulative[i + 1] <= target {
                i += 1;
            }
            let inside = (target - cumulative[i]) / (cumulative[i + 1] - cumulative[i]).max(f64::MIN_POSITIVE);
            angles.push(low + (i as f64 + inside.clamp(0.0, 1.0)) * step);
        }
        angles.push(high);
        angles
    }

    /// Masses and weights (of mean about 1 up to a common factor) for uniform numbers.
    pub fn fill(&self, uniform: &Lane, mass: &mut Lane, weight: &mut Lane) {
        if self.is_line() {
            *mass = [self.mass; BLOCK];
            *weight = [1.0; BLOCK];
            return;
        }
        let mut angle = [0.0; BLOCK];
        for i in 0..BLOCK {
            let position = uniform[i] * CELLS as f64;
            let cell = (position as usize).min(CELLS - 1);
            let (a, b) = (self.angles[cell], self.angles[cell + 1]);
            angle[i] = a + (position - cell as f64) * (b - a);
            weight[i] = (b - a) * CELLS as f64;
        }
        to_mass(self.mass, self.width, &angle, mass);
        match self.shape {
            Natural::BreitWigner => {
                weigh(Natural::BreitWigner, self.mass, self.width, self.falloff_power, mass, weight)
            }
            Natural::Relativistic => {
                weigh(Natural::Relativistic, self.mass, self.width, self.falloff_power, mass, weight)
            }
            Natural::RunningWidth => {
                weigh(Natural::RunningWidth, self.mass, self.width, self.falloff_power, mass, weight)
            }
        }
    }
}

/// Density in the angle, up to a constant factor that makes it of order 1.
#[inline(always)]
fn density(shape: Natural, pole: f64, width: f64, falloff_power: f64, m: f64) -> f64 {
    let half = 0.5 * width;
    let lorentz = (m - pole) * (m - pole) + half * half;
    let difference = (m - pole) * (m + pole);
    let ratio = m / pole;
    let natural = match shape {
        Natural::BreitWigner => 1.0,
        Natural::Relativistic => 4.0 * pole * pole * lorentz / (difference * difference + pole * pole * width * width),
        Natural::RunningWidth => {
            let running = m * m * width / pole;
            4.0 * m * m * lorentz / (difference * difference + running * running)
        }
    };
    if falloff_power == 0.0 { natural } else { natural * kernel::exp(-falloff_power * kernel::ln(ratio)) }
}

wide! {
    fn to_mass(pole: f64, width: f64, angle: &Lane, mass: &mut Lane) {
        for i in 0..BLOCK {
            let (cos, sin) = kernel::cos_sin_turns(angle[i] * (1.0 / TAU));
            // The cosine vanishes only at the open end of the range.
            let cos = if cos > 1e-300 { cos } else { 1e-300 };
            mass[i] = pole + 0.5 * width * sin / cos;
        }
    }
}

wide! {
    fn weigh(shape: Natural, pole: f64, width: f64, falloff_power: f64, mass: &Lane, weight: &mut Lane) {
        for i in 0..BLOCK {
            weight[i] *= density(shape, pole, width, falloff_power, mass[i]);
        }
    }
}
