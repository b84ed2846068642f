//! Whether the kinematics of an event hold together, to the digits that were printed.
//!
//! An event whose momenta contradict each other must never shape a template. What is checked:
//!
//! * every incoming, intermediate and final particle: `E² - p² = m²`, and no negative energy (which generators do write now
//!   and then) or negative mass;
//! * where incoming particles are listed: their momenta add up to those of the final ones;
//! * where an intermediate row has daughters (rows with it as their only mother): their momenta add up to its own.
//!
//! # Tolerance
//!
//! A printed number is wrong by up to half a unit of its last digit. How many digits a program prints shows in the longest
//! numbers of an event (a number may be short because trailing zeros were left out): n significant digits, and d decimals
//! after the exponent is applied. A momentum component or energy of a row with energy E is then known to
//!
//! `err = max(E max(10^(1-n)/2, 1e-7), 10^-d/2)`,
//!
//! because no component is larger than E; the first part is that of numbers with an exponent, the second that of numbers with a
//! fixed point. The floor of 1e-7 is the rounding of single precision, in which some generators compute whatever they print; an
//! error of that size moves a mass by about 1e-7 of itself. Hence, by adding up the worst cases:
//!
//! * `|E² - p² - m²| <= 2 (1 + sqrt 3) E err + 4 err² + 2 m dm`, which for a massless particle is the well-known apparent mass
//!   of order `sqrt(2 E dE)`; `dm` is half a unit of the last digit of the mass column, at most 1e-3 m;
//! * each component of a sum: the sum of `err` of all rows that enter.

use std::fmt;

use super::raw::{FINAL, INCOMING, Particle, RESONANCE};

/// Relative precision that is taken as given, whatever was printed: single precision.
pub(super) const FLOOR: f64 = 1e-7;

/// `2 (1 + sqrt 3)`: worst sum of the errors of an energy and three components of one size, twice.
const SHELL_FACTOR: f64 = 5.464_101_615_137_754;

/// A mass column is never taken to be less precise than this part of itself.
const LARGEST_MASS_ERROR: f64 = 1e-3;

/// How the kinematics of an event contradict each other.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum Inconsistency {
    /// An energy, a transverse momentum or a mass is negative.
    Sign,
    /// `E² - p²` is far from `m²`.
    OffShell,
    /// Incoming and final momenta differ.
    Unbalanced,
    /// An intermediate particle and its daughters differ.
    ResonanceUnbalanced,
    /// A momentum or a direction beyond what a file can mean.
    OutOfRange,
}

impl Inconsistency {
    /// All kinds.
    pub const ALL: [Inconsistency; 5] = [
        Inconsistency::Sign,
        Inconsistency::OffShell,
        Inconsistency::Unbalanced,
        Inconsistency::ResonanceUnbalanced,
        Inconsistency::OutOfRange,
    ];
}

impl fmt::Display for Inconsistency {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Inconsistency::Sign => "an energy, a transverse momentum or a mass is negative",
            Inconsistency::OffShell => "E² - p² of a particle is far from its m²",
            Inconsistency::Unbalanced => "incoming and final momenta do not balance",
            Inconsistency::ResonanceUnbalanced => "a resonance and its daughters do not balance",
            Inconsistency::OutOfRange => "a momentum, |eta| (at most 20) or |phi| (at most 2 pi rad) is out of range",
        })
    }
}

/// How precisely the numbers of an event are known.
#[derive(Clone, Copy, Debug)]
pub(super) struct Precision<'a> {
    /// Error of a momentum component or an energy over the energy of the row.
    pub relative: f64,
    /// Error of a momentum component or an energy in GeV, where it is larger.
    pub absolute_gev: f64,
    /// Error of each mass in GeV; empty: exact.
    pub masses_gev: &'a [f64],
}

impl Precision<'_> {
    /// The best precision that is ever asked for.
    pub(super) const BEST: Precision<'static> = Precision { relative: FLOOR, absolute_gev: 0.0, masses_gev: &[] };

    fn error_gev(&self, particle: &Particle) -> f64 {
        (self.relative * particle.e).max(self.absolute_gev)
    }
}

/// The first contradiction in an event, if there is any.
pub(super) fn contradiction(particles: &[Particle], precision: Precision<'_>) -> Option<Inconsistency> {
    let mut balance = Balance::default();
    let mut incoming = false;
    for (i, particle) in particles.iter().enumerate() {
        match particle.status {
            INCOMING => {
                incoming = true;
                balance.add(particle, -1.0, precision);
            }
            FINAL => balance.add(particle, 1.0, precision),
            RESONANCE => {}
            _ => continue,
        }
        if particle.e < 0.0 || (particle.mass < 0.0 && particle.status != INCOMING) {
            return Some(Inconsistency::Sign);
        }
        let mass_error = precision.masses_gev.get(i).copied().unwrap_or(0.0);
        if !on_shell(particle, precision.error_gev(particle), mass_error) {
            return Some(Inconsistency::OffShell);
        }
    }
    if incoming && !balance.holds() {
        return Some(Inconsistency::Unbalanced);
    }
    for (i, resonance) in particles.iter().enumerate().filter(|(_, p)| p.status == RESONANCE) {
        let mut balance = Balance::default();
        let daughters = particles.iter().filter(|p| matches!(p.status, FINAL | RESONANCE));
        let mut any = false;
        for daughter in daughters.filter(|p| p.only_mother() == Some(i)) {
            any = true;
            balance.add(daughter, 1.0, precision);
        }
        balance.add(resonance, -1.0, precision);
        if any && !balance.holds() {
            return Some(Inconsistency::ResonanceUnbalanced);
        }
    }
    None
}

fn on_shell(particle: &Particle, error: f64, mass_error: f64) -> bool {
    let Particle { px, py, pz, e, mass, .. } = *particle;
    let excess = e * e - (px * px + py * py + pz * pz) - mass * mass.abs();
    let mass_error = mass_error.min(LARGEST_MASS_ERROR * mass.abs());
    let tolerance = SHELL_FACTOR * error * e + 4.0 * error * error + 2.0 * mass.abs() * mass_error;
    // An overflow makes the excess infinite or NaN, which is never consistent.
    excess.is_finite() && excess.abs() <= tolerance
}

/// A signed sum of momenta with the sum of the errors that entered.
#[derive(Clone, Copy, Debug, Default)]
struct Balance {
    sum: [f64; 4],
    error: f64,
}

impl Balance {
    fn add(&mut self, particle: &Particle, sign: f64, precision: Precision<'_>) {
        for (sum, value) in self.sum.iter_mut().zip([particle.px, particle.py, particle.pz, particle.e]) {
            *sum += sign * value;
        }
        self.error += precision.error_gev(particle);
    }

    fn holds(&self) -> bool {
        self.error.is_finite() && self.sum.iter().all(|component| component.abs() <= self.error)
    }
}
