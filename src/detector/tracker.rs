//! What a tracker resolves.

use super::{EtaRange, Object, TrackerGeometry, Uncertainty};

/// How the resolution of a tracker entry is given.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum TrackerResolution {
    /// sigma_pT/pT = curvature_per_gev pT (+) scattering.
    Terms {
        /// Measurement term per GeV.
        curvature_per_gev: f64,
        /// Scattering term.
        scattering: f64,
    },
    /// Terms that follow from the geometry.
    Geometry(TrackerGeometry),
}

/// One entry of the tracker: what one region measures of one kind of object.
///
/// measured curvature = (q/pT)(1 + sigma z)/(1 + scale), z standard normal and sigma the relative width at the true pT.
#[derive(Clone, Debug, PartialEq)]
pub struct Tracker {
    /// Unique name of the entry.
    pub name: String,
    /// What it measures: muon or electron.
    pub object: Object,
    /// Where, in the leg's true |eta|.
    pub eta: EtaRange,
    /// Its resolution.
    pub resolution: TrackerResolution,
    /// Momentum scale, minus 1; 0 unless a shift or a calibration moves it.
    pub scale: f64,
    /// How well its numbers are known.
    pub uncertainties: Vec<Uncertainty>,
}

impl Tracker {
    /// Curvature term per GeV and scattering term at an absolute pseudorapidity: sigma_pT/pT = curvature pT (+)
    /// scattering.
    ///
    /// Given terms hold everywhere in the region. The scattering term of a geometry grows with the slant of the track.
    pub fn terms_at(&self, abs_eta: f64) -> (f64, f64) {
        match &self.resolution {
            TrackerResolution::Terms { curvature_per_gev, scattering } => (*curvature_per_gev, *scattering),
            TrackerResolution::Geometry(geometry) => (geometry.curvature_per_gev(), geometry.scattering(abs_eta)),
        }
    }

    /// Relative width of the measured curvature, sigma_pT/pT, at a true transverse momentum in GeV and an absolute
    /// pseudorapidity.
    pub fn relative_sigma(&self, pt_gev: f64, abs_eta: f64) -> f64 {
        let (curvature, scattering) = self.terms_at(abs_eta);
        let measurement = curvature * pt_gev;
        (measurement * measurement + scattering * scattering).sqrt()
    }
}
