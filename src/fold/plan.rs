//! A fold made ready: one channel at one mass point, with everything looked up that the inner loops need.

use super::efficiency::EfficiencyPlan;
use super::response::UnitTail;
use crate::detector::{Detector, Object, Tracker, TrackerResolution};
use crate::events::TruthDimensions;
use crate::process::{Channel, Cuts, MassAxis};

/// Smallest relative width that a fold resolves; a perfect leg is given this one.
const LEAST_SIGMA: f64 = 1e-10;

/// Numbers of one calorimeter entry.
#[derive(Clone, Debug)]
pub(super) struct CalorimeterTerms {
    pub stochastic_squared: f64,
    pub noise_squared: f64,
    pub constant_squared: f64,
    /// 1 + scale.
    pub gain: f64,
    /// 1 + bias.
    pub centre: f64,
    /// Index into [`Plan::tails`].
    pub tail: Option<usize>,
}

/// Numbers of one tracker entry.
#[derive(Clone, Debug)]
pub(super) struct TrackerTerms {
    pub curvature_squared: f64,
    pub scattering_squared: f64,
    /// Whether the scattering term grows as 1/sqrt(sin theta).
    pub slanted: bool,
    /// 1 + scale.
    pub gain: f64,
}

/// Disjoint regions in |cot theta|: `bounds[r] <= |cot| < bounds[r + 1]` is region r.
#[derive(Clone, Debug)]
pub(super) struct Regions<T> {
    bounds: Vec<f64>,
    regions: Vec<T>,
}

impl<T> Default for Regions<T> {
    fn default() -> Self {
        Regions { bounds: Vec::new(), regions: Vec::new() }
    }
}

impl<T: Default> Regions<T> {
    /// Appends a region, with an empty one before it where there is a hole and one after it that the next may replace.
    pub fn push(&mut self, low: f64, high: f64, region: T) {
        match self.bounds.last() {
            Some(end) if *end == low => {
                self.regions.pop();
            }
            _ => self.bounds.push(low),
        }
        self.regions.push(region);
        self.bounds.push(high);
        self.regions.push(T::default());
    }
}

impl<T> Regions<T> {
    /// What serves a leg at |cot theta|.
    #[inline(always)]
    pub fn at(&self, abs_cot: f64) -> Option<&T> {
        let above = self.bounds.iter().filter(|bound| **bound <= abs_cot).count();
        if above == 0 { None } else { self.regions.get(above - 1) }
    }
}

/// The calorimeter entries of one region with the running sum of their fractions.
pub(super) type SharedRegion = Vec<(f64, usize)>;

/// How one leg is measured.
#[derive(Clone, Debug)]
pub(super) struct LegPlan {
    pub calorimeter: Option<Regions<SharedRegion>>,
    pub tracker: Option<Regions<Option<usize>>>,
    /// Spread of the polar angle and the azimuth, rad.
    pub sigma_theta: f64,
    pub sigma_phi: f64,
    /// Whether the leg is pointed at the chosen vertex.
    pub trackless: bool,
}

/// The vertex, in units of the calorimeter radius.
#[derive(Clone, Debug)]
pub(super) struct VertexPlan {
    /// Half length over radius.
    pub half_length: f64,
    pub right_choice: f64,
    pub spread_right: f64,
    pub spread_wrong: f64,
}

/// Cuts on directions as limits of |cot theta|, the others as they are.
#[derive(Clone, Debug)]
pub(super) struct CutPlan {
    pub max_cot: f64,
    pub gap_cot: Option<(f64, f64)>,
    pub min_pt: Vec<f64>,
    pub min_pt_over_mass: Vec<f64>,
    pub category_max_cot: Vec<f64>,
}

/// The edges of the axis.
#[derive(Clone, Debug)]
pub(super) struct AxisPlan {
    pub low: f64,
    pub per_gev: f64,
    /// Edges squared, GeV².
    pub squares: Vec<f64>,
}

impl AxisPlan {
    fn new(axis: &MassAxis, mass_gev: f64) -> Self {
        let edges = axis.edges_gev(mass_gev);
        let (low, high) = axis.range_gev(mass_gev);
        AxisPlan {
            low,
            per_gev: axis.bins as f64 / (high - low),
            squares: edges.iter().map(|edge| edge * edge).collect(),
        }
    }

    /// Index of the first edge not below a mass whose square is given, up to rounding; the number of edges if none.
    #[inline(always)]
    pub fn first_edge(&self, mass_squared: f64) -> usize {
        let mass = (if mass_squared > 0.0 { mass_squared } else { 0.0 }).sqrt();
        let position = (mass - self.low) * self.per_gev;
        // `as` saturates: a negative or undefined position becomes 0.
        let whole = position as usize;
        let index = if position > whole as f64 { whole + 1 } else { whole };
        if index < self.squares.len() { index } else { self.squares.len() }
    }
}

/// Which dimension of the sequence feeds what.
#[derive(Clone, Debug, Default)]
pub(super) struct Dimensions {
    /// Which of several entries measures the leg, by leg.
    pub choice: Vec<Option<usize>>,
    /// Whether the right vertex is chosen.
    pub vertex_choice: Option<usize>,
    /// The first of the standard normals; see [`Normals`].
    pub normals: usize,
    /// For every dimension, those of the truth events first, its place in the sequence.
    pub places: Vec<usize>,
}

/// The standard normal numbers of one event, as places in one list: first the measured values of all legs but the last,
/// by rank, then what stands here.
#[derive(Clone, Debug, Default)]
pub(super) struct Normals {
    pub vertex: Option<usize>,
    /// Tracker value of an electron, by leg.
    pub tracker: Vec<Option<usize>>,
    pub theta: Vec<Option<usize>>,
    pub phi: Vec<Option<usize>>,
    pub count: usize,
}

/// A channel at a mass point, ready to fold.
#[derive(Clone, Debug)]
pub(super) struct Plan {
    pub legs: Vec<LegPlan>,
    pub calorimeters: Vec<CalorimeterTerms>,
    pub tails: Vec<UnitTail>,
    pub trackers: Vec<TrackerTerms>,
    pub vertex: Option<VertexPlan>,
    pub cuts: CutPlan,
    pub axis: AxisPlan,
    pub dimensions: Dimensions,
    pub normals: Normals,
    /// `None` where every event is found.
    pub efficiency: Option<EfficiencyPlan>,
}

impl Plan {
    pub fn new(detector: &Detector, channel: &Channel, mass_gev: f64, truth: &TruthDimensions) -> Self {
        let mut tails = Vec::new();
        let calorimeters = detector
            .calorimeters
            .iter()
            .map(|entry| CalorimeterTerms {
                stochastic_squared: entry.stochastic * entry.stochastic,
                noise_squared: entry.noise_gev * entry.noise_gev,
                constant_squared: entry.constant * entry.constant + LEAST_SIGMA * LEAST_SIGMA,
                gain: 1.0 + entry.scale,
                centre: 1.0 + entry.bias,
                tail: entry.tail.as_ref().map(|tail| {
                    tails.push(UnitTail::new(tail));
                    tails.len() - 1
                }),
            })
            .collect();
        let trackers = detector.trackers.iter().map(tracker_terms).collect();
        let legs: Vec<LegPlan> = channel.decay.legs().iter().map(|object| leg_plan(detector, *object)).collect();
        let vertex = detector.vertex.as_ref().map(|vertex| VertexPlan {
            half_length: vertex.calorimeter_half_length_m / vertex.calorimeter_radius_m,
            right_choice: vertex.right_choice,
            spread_right: 1e-3 * vertex.spread_right_mm / vertex.calorimeter_radius_m,
            spread_wrong: 1e-3 * vertex.spread_wrong_mm / vertex.calorimeter_radius_m,
        });
        let vertex = vertex.filter(|_| legs.iter().any(|leg| leg.trackless));
        let normals = normals(&legs, vertex.is_some());
        let dimensions = dimensions(&legs, vertex.is_some(), normals.count, truth);
        Plan {
            legs,
            calorimeters,
            tails,
            trackers,
            vertex,
            cuts: cut_plan(&channel.cuts, channel),
            axis: AxisPlan::new(&channel.axis, mass_gev),
            dimensions,
            normals,
            efficiency: EfficiencyPlan::new(detector, channel),
        }
    }
}

impl Plan {
    /// The |rapidity| beyond which a leg is hardly ever accepted: the cut or the detector's coverage, and a margin for
    /// directions and vertex. Only the speed depends on it.
    pub fn rapidity_reach(&self) -> f64 {
        const MARGIN: f64 = 0.1;
        let coverage = |leg: &LegPlan| {
            let calorimeter = leg.calorimeter.as_ref().and_then(|regions| regions.bounds.last());
            let tracker = leg.tracker.as_ref().and_then(|regions| regions.bounds.last());
            calorimeter.into_iter().chain(tracker).fold(0.0, |a: f64, b| a.max(*b))
        };
        let covered = self.legs.iter().map(coverage).fold(0.0, f64::max);
        libm::asinh(covered.min(self.cuts.max_cot)) + MARGIN
    }
}

fn tracker_terms(entry: &Tracker) -> TrackerTerms {
    // At normal incidence; a geometry's scattering term grows with the slant of the track.
    let (curvature, scattering) = entry.terms_at(0.0);
    TrackerTerms {
        curvature_squared: curvature * curvature,
        scattering_squared: scattering * scattering + LEAST_SIGMA * LEAST_SIGMA,
        slanted: matches!(entry.resolution, TrackerResolution::Geometry(_)),
        gain: 1.0 + entry.scale,
    }
}

fn leg_plan(detector: &Detector, object: Object) -> LegPlan {
    let direction = detector.directions.iter().find(|direction| direction.object == object);
    let calorimeter_regions = detector.calorimeter_regions(object);
    let calorimeter = (!calorimeter_regions.is_empty()).then(|| {
        let mut regions = Regions::default();
        for region in &calorimeter_regions {
            let mut sum = 0.0;
            let shares = region.entries.iter().map(|entry| {
                sum += detector.calorimeters[*entry].fraction;
                (sum, *entry)
            });
            regions.push(cot(region.eta.low), cot(region.eta.high), shares.collect());
        }
        regions
    });
    let tracker_regions = detector.tracker_regions(object);
    let tracker = (!tracker_regions.is_empty()).then(|| {
        let mut regions = Regions::default();
        for region in &tracker_regions {
            regions.push(cot(region.eta.low), cot(region.eta.high), Some(region.entry));
        }
        regions
    });
    LegPlan {
        calorimeter,
        tracker,
        sigma_theta: direction.map_or(0.0, |d| 1e-3 * d.sigma_theta_mrad),
        sigma_phi: direction.map_or(0.0, |d| 1e-3 * d.sigma_phi_mrad),
        trackless: !object.has_track(),
    }
}

/// |cot theta| of an |eta|.
pub(super) fn cot(eta: f64) -> f64 {
    if eta.is_finite() { libm::sinh(eta) } else { f64::INFINITY }
}

fn cut_plan(cuts: &Cuts, channel: &Channel) -> CutPlan {
    let limit = |eta: Option<f64>| eta.map_or(f64::INFINITY, libm::sinh);
    CutPlan {
        max_cot: limit(cuts.max_abs_eta),
        gap_cot: cuts.gap_abs_eta.map(|gap| (libm::sinh(gap.low), libm::sinh(gap.high))),
        min_pt: cuts.min_pt_gev.clone(),
        min_pt_over_mass: cuts.min_pt_over_mass.clone(),
        category_max_cot: channel.categories.iter().map(|category| limit(category.max_abs_eta)).collect(),
    }
}

fn normals(legs: &[LegPlan], vertex: bool) -> Normals {
    let mut next = legs.len() - 1;
    let mut take = |wanted: bool| {
        wanted.then(|| {
            next += 1;
            next - 1
        })
    };
    let vertex = take(vertex);
    let tracker = legs.iter().map(|leg| take(leg.calorimeter.is_some() && leg.tracker.is_some())).collect();
    let theta = legs.iter().map(|leg| take(leg.sigma_theta > 0.0)).collect();
    let phi = legs.iter().map(|leg| take(leg.sigma_phi > 0.0)).collect();
    Normals { vertex, tracker, theta, phi, count: next }
}

fn dimensions(legs: &[LegPlan], vertex: bool, normals: usize, truth: &TruthDimensions) -> Dimensions {
    let mut next = truth.count;
    let mut take = |count: usize| {
        next += count;
        next - count
    };
    let shares = |leg: &LegPlan| leg.calorimeter.as_ref().is_some_and(|c| c.regions.iter().any(|r| r.len() > 1));
    let choice: Vec<Option<usize>> = legs.iter().map(|leg| shares(leg).then(|| take(1))).collect();
    let vertex_choice = vertex.then(|| take(1));
    let first_normal = take(normals);
    // The first places of the sequence are the most even, so they go to what moves the mass and the acceptance most. Of
    // the normals the first, after the rotation (see `spread`), carries nearly all.
    let order = [first_normal]
        .into_iter()
        .chain(truth.leading.iter().copied())
        .chain(vertex_choice)
        .chain(truth.following.iter().copied())
        .chain(choice.iter().flatten().copied())
        .chain(first_normal + 1..next);
    let mut places = vec![usize::MAX; next];
    let mut used = 0;
    for dimension in order {
        places[dimension] = used;
        used += 1;
    }
    // What nothing uses comes last.
    for place in places.iter_mut().filter(|place| **place == usize::MAX) {
        *place = used;
        used += 1;
    }
    Dimensions { choice, vertex_choice, normals: first_normal, places }
}
