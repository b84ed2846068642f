//! Four-vectors with the metric (+, -, -, -).

use std::ops::{Add, Sub};

/// Energy and momentum of a particle or a system, in GeV.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct FourVector {
    /// Energy.
    pub e: f64,
    /// Momentum along x.
    pub px: f64,
    /// Momentum along y.
    pub py: f64,
    /// Momentum along the beam.
    pub pz: f64,
}

impl FourVector {
    /// A particle of given momentum and mass (GeV).
    pub fn from_momentum(px: f64, py: f64, pz: f64, mass: f64) -> Self {
        FourVector { e: (px * px + py * py + pz * pz + mass * mass).sqrt(), px, py, pz }
    }

    /// A particle of given transverse momentum, pseudorapidity, azimuth (rad) and mass (GeV).
    pub fn from_pt_eta_phi(pt: f64, eta: f64, phi: f64, mass: f64) -> Self {
        Self::from_momentum(pt * libm::cos(phi), pt * libm::sin(phi), pt * libm::sinh(eta), mass)
    }

    /// Squared invariant mass in GeV²; may be slightly negative from rounding.
    pub fn mass_squared(&self) -> f64 {
        let p2 = self.px * self.px + self.py * self.py + self.pz * self.pz;
        let p = p2.sqrt();
        (self.e - p) * (self.e + p)
    }

    /// Invariant mass in GeV, 0 where the square is negative.
    pub fn mass(&self) -> f64 {
        self.mass_squared().max(0.0).sqrt()
    }

    /// Magnitude of the momentum in GeV.
    pub fn p(&self) -> f64 {
        (self.px * self.px + self.py * self.py + self.pz * self.pz).sqrt()
    }

    /// Transverse momentum in GeV.
    pub fn pt(&self) -> f64 {
        (self.px * self.px + self.py * self.py).sqrt()
    }

    /// Pseudorapidity; infinite along the beam.
    pub fn eta(&self) -> f64 {
        libm::asinh(self.pz / self.pt())
    }

    /// The vector seen in a frame in which `frame`, given in the present frame, moves with its velocity and in whose
    /// rest system `self` is given: a boost from the rest system of `frame`.
    #[must_use]
    pub fn boosted_from_rest_of(&self, frame: &FourVector, frame_mass: f64) -> Self {
        let along = self.px * frame.px + self.py * frame.py + self.pz * frame.pz;
        let e = (self.e * frame.e + along) / frame_mass;
        let factor = (e + self.e) / (frame.e + frame_mass);
        FourVector {
            e,
            px: self.px + factor * frame.px,
            py: self.py + factor * frame.py,
            pz: self.pz + factor * frame.pz,
        }
    }
}

impl Add for FourVector {
    type Output = Self;
    fn add(self, o: Self) -> Self {
        FourVector { e: self.e + o.e, px: self.px + o.px, py: self.py + o.py, pz: self.pz + o.pz }
    }
}

impl Sub for FourVector {
    type Output = Self;
    fn sub(self, o: Self) -> Self {
        FourVector { e: self.e - o.e, px: self.px - o.px, py: self.py - o.py, pz: self.pz - o.pz }
    }
}
