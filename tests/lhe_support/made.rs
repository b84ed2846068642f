//! Events built in a test.

use peakfold::events::{FINAL, Particle, RawEvent};
use peakfold::kinematics::TruthEvent;

/// Mass of the intermediate particle in these tests, in GeV.
pub const V_MASS: f64 = 91.188;

pub fn row(code: i64, status: i32, mother: u32, p: [f64; 3], mass: f64) -> Particle {
    let e = (p[0] * p[0] + p[1] * p[1] + p[2] * p[2] + mass * mass).sqrt();
    Particle { code, status, mothers: [mother, mother], px: p[0], py: p[1], pz: p[2], e, mass }
}

pub fn leg(code: i64, mother: u32, pt: f64, phi: f64) -> Particle {
    row(code, FINAL, mother, [pt * phi.cos(), pt * phi.sin(), 0.3 * pt], 0.0)
}

pub fn event(particles: &[Particle], weight: f64, line: usize, group: u64) -> RawEvent<'_> {
    RawEvent { particles, weight, true_mass_gev: None, line, group }
}

/// Rows of the legs, found by their momenta.
pub fn rows_of(truth: &TruthEvent, particles: &[Particle]) -> Vec<usize> {
    let legs = truth.legs.iter().take(truth.leg_count);
    legs.map(|l| {
        particles
            .iter()
            .position(|p| p.status == FINAL && [p.px, p.py, p.pz] == [l.px_gev, l.py_gev, l.pz_gev])
            .unwrap()
    })
    .collect()
}

/// Invariant mass by the other formula: m² = sum of m_i² + 2 sum over pairs of (E_i E_j - p_i p_j), energies as stored.
pub fn mass_of(particles: &[Particle], rows: &[usize]) -> f64 {
    let mut m2: f64 = rows.iter().map(|i| particles[*i].mass.powi(2)).sum();
    for (k, i) in rows.iter().enumerate() {
        for j in &rows[..k] {
            let (a, b) = (particles[*i], particles[*j]);
            m2 += 2.0 * (a.e * b.e - a.px * b.px - a.py * b.py - a.pz * b.pz);
        }
    }
    m2.sqrt()
}
