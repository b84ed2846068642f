//! The detector as it was calibrated or proposed: what each region resolves, and how well that is known.

mod calorimeter;
mod covariance;
mod efficiency;
mod geometry;
mod object;
mod regions;
mod terms;
mod tracker;

pub use calorimeter::{Calorimeter, Tail};
pub use covariance::TermCovariance;
pub use efficiency::{Efficiency, EfficiencyCell, EfficiencyCurve, EfficiencyRegion, LEAST_TURN_ON_WIDTH_GEV};
pub use geometry::TrackerGeometry;
pub use object::Object;
pub use regions::{CalorimeterRegion, TrackerRegion};
pub use terms::{Allowed, Part, Term};
pub use tracker::{Tracker, TrackerResolution};

/// A half-open range of absolute pseudorapidity, `low <= |eta| < high`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct EtaRange {
    /// Lower bound, 0 or more.
    pub low: f64,
    /// Upper bound, larger than `low`.
    pub high: f64,
}

impl EtaRange {
    /// Whether an absolute pseudorapidity lies in the range.
    pub fn contains(&self, abs_eta: f64) -> bool {
        self.low <= abs_eta && abs_eta < self.high
    }
}

/// How well one number of an entry is known: one standard deviation, and what it moves with.
#[derive(Clone, Debug, PartialEq)]
pub struct Uncertainty {
    /// The key of the entry (`constant`, `scale`, `tail.alpha_low`, `geometry.points`, …).
    pub key: String,
    /// One standard deviation, in the unit of the key; 0 or more.
    pub sigma: f64,
    /// Name shared by uncertainties that move together.
    pub share: Option<String>,
}

/// Resolution of the direction of one kind of object.
#[derive(Clone, Debug, PartialEq)]
pub struct Direction {
    /// What it concerns.
    pub object: Object,
    /// Polar angle, in mrad.
    pub sigma_theta_mrad: f64,
    /// Azimuth, in mrad.
    pub sigma_phi_mrad: f64,
    /// How well these are known.
    pub uncertainties: Vec<Uncertainty>,
}

/// The chosen interaction vertex, which every leg without a track is pointed at.
///
/// cot(theta') = cot(theta) + dz/min(R, Z |tan theta|) with one dz per event, chosen minus true vertex; the true vertex
/// sits at the detector centre.
#[derive(Clone, Debug, PartialEq)]
pub struct Vertex {
    /// Radius R of the calorimeter's front face, in m.
    pub calorimeter_radius_m: f64,
    /// Half length Z to the endcap's front face, in m; infinite without endcap.
    pub calorimeter_half_length_m: f64,
    /// Probability that the right vertex is chosen.
    pub right_choice: f64,
    /// Gaussian spread of dz when right, in mm.
    pub spread_right_mm: f64,
    /// Gaussian spread of dz when wrong, in mm.
    pub spread_wrong_mm: f64,
    /// How well these are known.
    pub uncertainties: Vec<Uncertainty>,
}

/// A detector, as its file describes it.
#[derive(Clone, Debug, PartialEq)]
pub struct Detector {
    /// Its name.
    pub name: String,
    /// Calorimeter entries, in the order of the file: the first whose object and region match a leg wins, together
    /// with the other entries of the same object and range, which share its legs by their fractions.
    pub calorimeters: Vec<Calorimeter>,
    /// Tracker entries, in the order of the file: the first that matches wins.
    pub trackers: Vec<Tracker>,
    /// Directions, at most one an object.
    pub directions: Vec<Direction>,
    /// The vertex; exact without.
    pub vertex: Option<Vertex>,
    /// Efficiencies, in the order of the file: the first whose object and region match a leg wins; 1 for an object
    /// without any.
    pub efficiencies: Vec<Efficiency>,
    /// Joint uncertainties of several numbers, as a calibration gives them.
    pub covariances: Vec<TermCovariance>,
}
