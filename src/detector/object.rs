//! The kinds of reconstructed object.

use std::fmt;

/// What a leg is reconstructed as.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Object {
    /// A photon: calorimeter, no track.
    Photon,
    /// An electron or positron: calorimeter, tracker or both.
    Electron,
    /// A muon: tracker.
    Muon,
    /// A jet: calorimeter, pointed at the chosen vertex.
    Jet,
}

impl Object {
    /// Every object, in the order of the documentation.
    pub const ALL: [Object; 4] = [Object::Photon, Object::Electron, Object::Muon, Object::Jet];

    /// Its word in the files.
    pub fn name(self) -> &'static str {
        match self {
            Object::Photon => "photon",
            Object::Electron => "electron",
            Object::Muon => "muon",
            Object::Jet => "jet",
        }
    }

    /// The object of that word.
    pub fn from_name(name: &str) -> Option<Self> {
        Object::ALL.into_iter().find(|object| object.name() == name)
    }

    /// Whether a calorimeter can measure it.
    pub fn has_calorimeter(self) -> bool {
        self != Object::Muon
    }

    /// Whether a tracker can measure it.
    pub fn has_track(self) -> bool {
        matches!(self, Object::Electron | Object::Muon)
    }

    /// Mass in GeV that generated legs have. Review of Particle Physics, 2026 edition (electron, muon).
    pub fn mass_gev(self) -> f64 {
        match self {
            Object::Photon | Object::Jet => 0.0,
            Object::Electron => 0.510_998_950_69e-3,
            Object::Muon => 0.105_658_375_5,
        }
    }
}

impl fmt::Display for Object {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(self.name())
    }
}
