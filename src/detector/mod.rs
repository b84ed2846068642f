//! The detector as it was calibrated or proposed: what each region resolves, and how well that is known.

mod interim;
mod object;

pub use interim::*;
pub use object::Object;

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

/// Power-law tails of a calorimeter response: a double-sided Crystal Ball core with these tails.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Tail {
    /// Where the low tail begins, in core widths below the peak; larger than 0.
    pub alpha_low: f64,
    /// Power of the low tail; larger than 1.
    pub n_low: f64,
    /// Where the high tail begins, in core widths above the peak; larger than 0.
    pub alpha_high: f64,
    /// Power of the high tail; larger than 1.
    pub n_high: f64,
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

/// One entry of the calorimeter: what one region measures of one kind of object.
///
/// measured/true = (1 + scale)(1 + bias + sigma t), with t a unit shape whose *peak* is at 0 and sigma the core width
/// `stochastic/sqrt(E) (+) noise_gev/E (+) constant` at the true E in GeV, (+) the quadratic sum.
#[derive(Clone, Debug, PartialEq)]
pub struct Calorimeter {
    /// Unique name of the entry.
    pub name: String,
    /// What it measures.
    pub object: Object,
    /// Where, in the leg's true |eta| seen from the detector centre.
    pub eta: EtaRange,
    /// Stochastic term in sqrt(GeV).
    pub stochastic: f64,
    /// Noise term in GeV.
    pub noise_gev: f64,
    /// Constant term.
    pub constant: f64,
    /// Position of the core relative to the true value, minus 1.
    pub bias: f64,
    /// Energy scale, minus 1; 0 unless a shift or a calibration moves it.
    pub scale: f64,
    /// Tails; Gaussian without.
    pub tail: Option<Tail>,
    /// Share of the legs of this region that this entry takes, 0 to 1.
    pub fraction: f64,
    /// How well its numbers are known.
    pub uncertainties: Vec<Uncertainty>,
}

/// A tracker given by its geometry: equally spaced measurement planes in a uniform field.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TrackerGeometry {
    /// Magnetic field in tesla.
    pub field_t: f64,
    /// Radius of the first measured point, in m.
    pub inner_radius_m: f64,
    /// Distance between the first and the last point, in m.
    pub lever_arm_m: f64,
    /// Number of measured points, 3 or more.
    pub points: u32,
    /// Error of one point across the track, in um.
    pub point_resolution_um: f64,
    /// Thickness at normal incidence in radiation lengths.
    pub radiation_lengths: f64,
    /// Whether the vertex is one more exact point of the fit.
    pub vertex_constraint: bool,
}

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
}
