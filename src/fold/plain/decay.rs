//! Decays by explicit Lorentz matrices.

use nalgebra::{Matrix4, Vector3, Vector4};
use rand::RngExt;
use rand::rngs::StdRng;
use std::f64::consts::TAU;

/// Energy, then momentum, in GeV.
pub(super) type Momentum4 = Vector4<f64>;

/// A direction, isotropic.
fn isotropic(rng: &mut StdRng) -> Vector3<f64> {
    let cosine = 2.0 * rng.random::<f64>() - 1.0;
    let sine = (1.0 - cosine * cosine).sqrt();
    let (sin_phi, cos_phi) = libm::sincos(TAU * rng.random::<f64>());
    Vector3::new(sine * cos_phi, sine * sin_phi, cosine)
}

/// The two products of an isotropic decay in the rest system of the parent.
///
/// `E1 = (M² + m1² - m2²)/(2M)`, `p² = E1² - m1²` (Review of Particle Physics, Kinematics, two-body decays).
pub(super) fn two_body(parent: f64, m1: f64, m2: f64, rng: &mut StdRng) -> [Momentum4; 2] {
    let e1 = (parent * parent + m1 * m1 - m2 * m2) / (2.0 * parent);
    let p = isotropic(rng) * (e1 * e1 - m1 * m1).max(0.0).sqrt();
    [Vector4::new(e1, p.x, p.y, p.z), Vector4::new(parent - e1, -p.x, -p.y, -p.z)]
}

/// The matrix that takes vectors from the rest system of a particle to the system in which it has this momentum.
pub(super) fn boost_from_rest(particle: &Momentum4, mass: f64) -> Matrix4<f64> {
    let gamma = particle[0] / mass;
    let u = particle.fixed_rows::<3>(1) / mass;
    let mut matrix = Matrix4::identity();
    matrix[(0, 0)] = gamma;
    for i in 0..3 {
        matrix[(0, i + 1)] = u[i];
        matrix[(i + 1, 0)] = u[i];
        for j in 0..3 {
            matrix[(i + 1, j + 1)] += u[i] * u[j] / (gamma + 1.0);
        }
    }
    matrix
}

/// Masses of the two V of X -> V V(*), by rejection.
///
/// Density in (m1², m2²): sqrt(lambda)(lambda + 12 m1² m2²/M⁴) over the product of (mi² - mV²)² + mV² GammaV²
/// (A. Djouadi, Phys. Rept. 457 (2008) 1), above the thresholds of both pairs. The larger mass is drawn first, then the
/// smaller one under it, each from the Breit-Wigner factor; which pair has the larger is even.
#[derive(Clone, Copy, Debug)]
pub(super) struct PairMasses {
    /// Mass of V in GeV.
    pub mass: f64,
    /// Width of V in GeV.
    pub width: f64,
    /// Sum of the leg masses of each pair.
    pub thresholds: [f64; 2],
}

impl PairMasses {
    /// Angle of the Breit-Wigner factor: m² = mV² + mV GammaV tan(angle).
    fn angle(&self, m: f64) -> f64 {
        libm::atan((m - self.mass) * (m + self.mass) / (self.mass * self.width))
    }

    fn squared_mass(&self, angle: f64) -> f64 {
        self.mass * self.mass + self.mass * self.width * libm::tan(angle)
    }

    /// Draws the masses of both pairs for a resonance of mass `parent`, larger than both thresholds together.
    pub(super) fn sample(&self, parent: f64, rng: &mut StdRng) -> [f64; 2] {
        let least = self.thresholds[0].min(self.thresholds[1]);
        let most = self.thresholds[0].max(self.thresholds[1]);
        // The larger mass is above the larger threshold.
        let (lowest, highest) = (self.angle(least), self.angle(parent - least));
        let lowest_larger = self.angle(most);
        // Near threshold all of the density is small: lambda is at most that of both masses at their thresholds, and
        // x1 x2 at most s²(1 - s)² with s the least possible share of the larger mass, 1/16 from s = 1/2 down.
        let (a, b) = ((self.thresholds[0] / parent).powi(2), (self.thresholds[1] / parent).powi(2));
        let lambda_most = ((1.0 - a - b).powi(2) - 4.0 * a * b).max(0.0);
        let share = (most / parent).max(0.5);
        let ceiling = lambda_most.sqrt() * (lambda_most + 12.0 * (share * (1.0 - share)).powi(2)).min(1.0);
        // The smaller mass is at most half the parent's, so this is the widest range of its angle.
        let widest = self.angle(0.5 * parent) - lowest;
        loop {
            let larger_squared = self.squared_mass(lowest_larger + (highest - lowest_larger) * rng.random::<f64>());
            let larger = larger_squared.max(0.0).sqrt();
            let x = larger_squared / (parent * parent);
            let range = self.angle(larger.min(parent - larger)) - lowest;
            // For x2 between 0 and (1 - sqrt(x))²: sqrt(lambda) <= 1 - x; lambda + 12 x x2 = (1 - x - x2)² + 8 x x2 is
            // convex in x2, so its largest value is at one of the ends.
            let gap = 1.0 - x.sqrt();
            let bound = (1.0 - x) * ((1.0 - x) * (1.0 - x)).max(12.0 * x * gap * gap);
            let bound = bound.min(ceiling);
            // This first test accepts with bound/ceiling * range/widest.
            let height = rng.random::<f64>() * widest * ceiling;
            if height >= bound * range {
                continue;
            }
            let smaller_squared = self.squared_mass(lowest + range * rng.random::<f64>());
            let smaller = smaller_squared.max(0.0).sqrt();
            if larger + smaller >= parent {
                continue;
            }
            let y = smaller_squared / (parent * parent);
            let lambda = (1.0 - x - y) * (1.0 - x - y) - 4.0 * x * y;
            if height >= lambda.max(0.0).sqrt() * (lambda + 12.0 * x * y) * range {
                continue;
            }
            let masses = if rng.random::<bool>() { [larger, smaller] } else { [smaller, larger] };
            if masses[0] >= self.thresholds[0] && masses[1] >= self.thresholds[1] {
                return masses;
            }
        }
    }
}
