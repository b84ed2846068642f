//! Events as a file holds them, before legs are picked.

use crate::kinematics::FourVector;

/// A final particle (ISTUP = 1 of the Les Houches accord).
pub const FINAL: i32 = 1;
/// An intermediate resonance whose mass is kept (ISTUP = 2).
pub const RESONANCE: i32 = 2;
/// An incoming particle (ISTUP = -1).
pub const INCOMING: i32 = -1;

/// One particle row of an event file.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Particle {
    /// Particle code in the numbering scheme of the Review of Particle Physics.
    pub code: i64,
    /// Status code: [`FINAL`], [`RESONANCE`], [`INCOMING`] or another one of the accord.
    pub status: i32,
    /// First and last mother, numbered from 1; 0 for none.
    pub mothers: [u32; 2],
    /// Momentum along x, in GeV.
    pub px: f64,
    /// Momentum along y, in GeV.
    pub py: f64,
    /// Momentum along the beam, in GeV.
    pub pz: f64,
    /// Energy, in GeV.
    pub e: f64,
    /// Mass, in GeV.
    pub mass: f64,
}

impl Particle {
    /// The one mother, as an index from 0; `None` without any or with several.
    pub fn only_mother(&self) -> Option<usize> {
        let [first, last] = self.mothers;
        let single = match (first, last) {
            (0, m) | (m, 0) => m,
            (a, b) if a == b => a,
            _ => 0,
        };
        (single as usize).checked_sub(1)
    }

    /// Transverse momentum, in GeV.
    pub fn pt(&self) -> f64 {
        (self.px * self.px + self.py * self.py).sqrt()
    }

    /// The four-vector with the energy that follows from momentum and mass: the printed energy of a light particle says
    /// little about its mass.
    pub fn four_vector(&self) -> FourVector {
        FourVector::from_momentum(self.px, self.py, self.pz, self.mass)
    }
}

/// One event, borrowed from its batch.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct RawEvent<'a> {
    /// The particle rows in the order of the file.
    pub particles: &'a [Particle],
    /// The weight that was asked for; finite, may be negative.
    pub weight: f64,
    /// True mass of the resonance in GeV, where the file gives it apart from the particles.
    pub true_mass_gev: Option<f64>,
    /// Line of the file on which the event begins, from 1.
    pub line: usize,
    /// Number of the event group, rising through the file. Events of one group are correlated: statistics take a group
    /// as one unit. An event outside any group has a number of its own.
    pub group: u64,
}

#[derive(Clone, Copy, Debug)]
struct Entry {
    end: usize,
    weight: f64,
    true_mass_gev: Option<f64>,
    line: usize,
    group: u64,
}

/// Some consecutive events of a file. The rows of all events share one allocation, which is kept when the batch is
/// filled again.
#[derive(Clone, Debug, Default)]
pub struct EventBatch {
    particles: Vec<Particle>,
    entries: Vec<Entry>,
}

impl EventBatch {
    /// Number of events.
    pub fn len(&self) -> usize {
        self.entries.len()
    }

    /// Whether there is no event.
    pub fn is_empty(&self) -> bool {
        self.entries.is_empty()
    }

    /// The events in the order of the file.
    pub fn events(&self) -> impl Iterator<Item = RawEvent<'_>> {
        let mut start = 0;
        self.entries.iter().map(move |entry| {
            let particles = self.particles.get(start..entry.end).unwrap_or_default();
            start = entry.end;
            RawEvent {
                particles,
                weight: entry.weight,
                true_mass_gev: entry.true_mass_gev,
                line: entry.line,
                group: entry.group,
            }
        })
    }

    /// Forgets all events and keeps the memory.
    pub fn clear(&mut self) {
        self.particles.clear();
        self.entries.clear();
    }

    /// Adds a row to the event that is being built.
    pub(super) fn push_particle(&mut self, particle: Particle) {
        self.particles.push(particle);
    }

    /// The rows of the event that is being built.
    pub(super) fn pending(&self) -> &[Particle] {
        let start = self.entries.last().map_or(0, |entry| entry.end);
        self.particles.get(start..).unwrap_or_default()
    }

    /// Drops the event that is being built.
    pub(super) fn drop_pending(&mut self) {
        self.particles.truncate(self.entries.last().map_or(0, |entry| entry.end));
    }

    /// Completes the event that is being built.
    pub(super) fn complete(&mut self, weight: f64, true_mass_gev: Option<f64>, line: usize, group: u64) {
        self.entries.push(Entry { end: self.particles.len(), weight, true_mass_gev, line, group });
    }
}
