//! What several test files share: studies built in code, an exact product distribution, and the comparison of a
//! template with plainly smeared masses.
//!
//! All detectors and resonances here are invented.

#![allow(dead_code, clippy::unwrap_used, clippy::expect_used, clippy::panic)]

pub mod compare;
pub mod product;

use peakfold::detector::{
    Calorimeter, Detector, Direction, EtaRange, Object, Tail, Tracker, TrackerGeometry, TrackerResolution, Vertex,
};
use peakfold::kinematics::{MAX_LEGS, TruthEvent, TruthLeg};
use peakfold::process::{
    Category, Channel, Cuts, Decay, EventSource, Intermediate, LegChoice, MassAxis, Natural, Production, Resonance,
    ShapeChoice, Study, Width,
};

/// A range that takes every leg.
pub const EVERYWHERE: EtaRange = EtaRange { low: 0.0, high: 100.0 };

/// A calorimeter entry with a constant term alone, Gaussian, unbiased, for all legs of its range.
pub fn calorimeter(name: &str, object: Object, eta: EtaRange, constant: f64) -> Calorimeter {
    Calorimeter {
        name: name.into(),
        object,
        eta,
        stochastic: 0.0,
        noise_gev: 0.0,
        constant,
        bias: 0.0,
        scale: 0.0,
        tail: None,
        fraction: 1.0,
        uncertainties: Vec::new(),
    }
}

/// A tracker entry given by its two terms.
pub fn tracker(name: &str, object: Object, eta: EtaRange, curvature_per_gev: f64, scattering: f64) -> Tracker {
    Tracker {
        name: name.into(),
        object,
        eta,
        resolution: TrackerResolution::Terms { curvature_per_gev, scattering },
        scale: 0.0,
        uncertainties: Vec::new(),
    }
}

/// Direction resolution of one kind of object.
pub fn direction(object: Object, sigma_theta_mrad: f64, sigma_phi_mrad: f64) -> Direction {
    Direction { object, sigma_theta_mrad, sigma_phi_mrad, uncertainties: Vec::new() }
}

/// A detector with nothing in it; fill what a test needs.
pub fn empty_detector() -> Detector {
    Detector {
        name: "invented".into(),
        calorimeters: Vec::new(),
        trackers: Vec::new(),
        directions: Vec::new(),
        vertex: None,
        efficiencies: Vec::new(),
        covariances: Vec::new(),
    }
}

/// A channel without cuts, one category `all`, 200 bins within 20 % of the mass point.
pub fn channel(name: &str, decay: Decay) -> Channel {
    Channel {
        name: name.into(),
        decay,
        choice: LegChoice::default(),
        cuts: Cuts::default(),
        min_efficient_legs: None,
        axis: MassAxis { low: 0.8, high: 1.2, bins: 200, relative: true },
        shape: ShapeChoice::DoubleCrystalBall,
        categories: vec![Category { name: "all".into(), max_abs_eta: None }],
        simulated: Default::default(),
    }
}

/// A study of one channel at one mass: no width, produced with mean pT of 40 GeV and rapidity spread 1.2.
pub fn study(detector: Detector, mass_gev: f64, channel: Channel) -> Study {
    Study {
        name: "invented".into(),
        detector,
        seed: 1,
        precision: 1e-4,
        max_points: 1 << 24,
        prune_shifts_below: 0.0,
        expected_events: 1e4,
        resonance: Resonance {
            masses_gev: vec![mass_gev],
            width: Width::Gev(0.0),
            natural: Natural::Relativistic,
            falloff_power: 0.0,
            source: EventSource::Generated(Production::Spectrum { pt_mean_gev: 40.0, rapidity_sigma: 1.2 }),
            intermediate: Intermediate { mass_gev: 91.188, width_gev: 2.4955 },
            radiation: None,
        },
        channels: vec![channel],
    }
}

/// Makes a study produce its resonance at rest.
pub fn at_rest(mut study: Study) -> Study {
    study.resonance.source = EventSource::Generated(Production::Spectrum { pt_mean_gev: 0.0, rapidity_sigma: 0.0 });
    study
}

/// Two massless legs (a photon and a jet) with Gaussian responses of constant relative widths and exact directions:
/// the mass is exactly M sqrt((1 + s1 z1)(1 + s2 z2)), whatever the production.
pub fn gaussian_pair_study(mass_gev: f64, s1: f64, s2: f64) -> Study {
    let mut detector = empty_detector();
    detector.calorimeters =
        vec![calorimeter("photons", Object::Photon, EVERYWHERE, s1), calorimeter("jets", Object::Jet, EVERYWHERE, s2)];
    study(detector, mass_gev, channel("photon-jet", Decay::Direct(vec![Object::Photon, Object::Jet])))
}

/// The invented detector with everything: two calorimeter regions for every object, unconverted and converted photons
/// with their own tails, tracker by geometry in one region and by terms in another, directions and vertex.
pub fn full_detector() -> Detector {
    let central = EtaRange { low: 0.0, high: 1.4 };
    let forward = EtaRange { low: 1.4, high: 2.5 };
    let entry = |name: &str, object, eta, terms: (f64, f64, f64), tail: Option<Tail>, fraction| Calorimeter {
        stochastic: terms.0,
        noise_gev: terms.1,
        tail,
        fraction,
        ..calorimeter(name, object, eta, terms.2)
    };
    let tail = |alpha_low, n_low, alpha_high, n_high| Some(Tail { alpha_low, n_low, alpha_high, n_high });
    let mut detector = empty_detector();
    detector.calorimeters = vec![
        entry("photon-central", Object::Photon, central, (0.095, 0.25, 0.007), tail(1.6, 4.0, 2.0, 8.0), 0.7),
        Calorimeter {
            bias: -0.002,
            ..entry("converted-central", Object::Photon, central, (0.11, 0.3, 0.010), tail(1.2, 3.0, 2.0, 6.0), 0.3)
        },
        entry("photon-forward", Object::Photon, forward, (0.12, 0.4, 0.012), tail(1.5, 3.5, 1.9, 7.0), 1.0),
        entry("electron-central", Object::Electron, central, (0.10, 0.25, 0.008), tail(1.3, 3.5, 2.0, 8.0), 1.0),
        entry("electron-forward", Object::Electron, forward, (0.13, 0.4, 0.013), tail(1.2, 3.0, 1.9, 7.0), 1.0),
        entry("jet-central", Object::Jet, central, (0.70, 2.0, 0.04), None, 1.0),
        entry("jet-forward", Object::Jet, forward, (0.85, 3.0, 0.05), tail(2.0, 6.0, 2.2, 8.0), 1.0),
    ];
    let geometry = TrackerGeometry {
        field_t: 3.0,
        inner_radius_m: 0.05,
        lever_arm_m: 1.1,
        points: 12,
        point_resolution_um: 25.0,
        radiation_lengths: 0.3,
        vertex_constraint: false,
    };
    detector.trackers = vec![
        Tracker {
            resolution: TrackerResolution::Geometry(geometry),
            ..tracker("muon-central", Object::Muon, EtaRange { low: 0.0, high: 1.2 }, 0.0, 0.0)
        },
        tracker("muon-forward", Object::Muon, EtaRange { low: 1.2, high: 2.6 }, 3.5e-4, 0.014),
        tracker("electron-track", Object::Electron, EtaRange { low: 0.0, high: 1.2 }, 3.0e-4, 0.02),
    ];
    detector.directions = vec![
        direction(Object::Photon, 1.0, 1.0),
        direction(Object::Electron, 0.3, 0.3),
        direction(Object::Muon, 0.3, 0.2),
        direction(Object::Jet, 20.0, 20.0),
    ];
    detector.vertex = Some(Vertex {
        calorimeter_radius_m: 1.5,
        calorimeter_half_length_m: 3.2,
        right_choice: 0.8,
        spread_right_mm: 0.1,
        spread_wrong_mm: 45.0,
        uncertainties: Vec::new(),
    });
    detector
}

/// Categories `central` (every leg within 1.2) and `rest`.
fn two_categories() -> Vec<Category> {
    vec![
        Category { name: "central".into(), max_abs_eta: Some(1.2) },
        Category { name: "rest".into(), max_abs_eta: None },
    ]
}

/// Two photons in the full detector, 125 GeV, gap and cuts relative to the mass, two categories.
pub fn photon_study() -> Study {
    let mut photons = channel("two-photon", Decay::Direct(vec![Object::Photon; 2]));
    photons.cuts = Cuts {
        max_abs_eta: Some(2.4),
        gap_abs_eta: Some(EtaRange { low: 1.37, high: 1.52 }),
        min_pt_gev: Vec::new(),
        min_pt_over_mass: vec![0.35, 0.25],
    };
    photons.categories = two_categories();
    study(full_detector(), 125.0, photons)
}

/// Two electrons in the full detector (calorimeter and tracker within 1.2, calorimeter alone beyond), a resonance of
/// 91.188 GeV with its width, cuts on pT.
pub fn electron_study() -> Study {
    let mut electrons = channel("two-electron", Decay::Direct(vec![Object::Electron; 2]));
    electrons.cuts.min_pt_gev = vec![25.0, 20.0];
    electrons.categories = two_categories();
    let mut study = study(full_detector(), 91.188, electrons);
    study.resonance.width = Width::Gev(2.4955);
    study
}

/// Two muons in the full detector, 500 GeV, cut on the pT of the first muon alone.
pub fn muon_study() -> Study {
    let mut muons = channel("two-muon", Decay::Direct(vec![Object::Muon; 2]));
    muons.cuts.min_pt_gev = vec![30.0];
    muons.cuts.max_abs_eta = Some(2.4);
    muons.categories = two_categories();
    study(full_detector(), 500.0, muons)
}

/// Two jets in the full detector, 600 GeV of relative width 2 %, wide axis.
pub fn dijet_study() -> Study {
    let mut jets = channel("dijet", Decay::Direct(vec![Object::Jet; 2]));
    jets.cuts.min_pt_gev = vec![60.0, 40.0];
    jets.axis = MassAxis { low: 0.5, high: 1.5, bins: 200, relative: true };
    let mut study = study(full_detector(), 600.0, jets);
    study.resonance.width = Width::Relative(0.02);
    study
}

/// X -> V V(*) -> the legs of two pairs in the full detector, with falling cuts on pT.
pub fn cascade_study(mass_gev: f64, first: Object, second: Object) -> Study {
    let mut four = channel("four-lepton", Decay::Cascade([[first; 2], [second; 2]]));
    four.cuts.min_pt_gev = vec![20.0, 15.0, 10.0];
    four.cuts.max_abs_eta = Some(2.4);
    study(full_detector(), mass_gev, four)
}

/// A truth event of given legs, each (pT, eta, phi, mass) in GeV and rad, weight 1.
pub fn truth_event(legs: &[(f64, f64, f64, f64)]) -> TruthEvent {
    let mut event =
        TruthEvent { legs: [TruthLeg::default(); MAX_LEGS], leg_count: legs.len(), weight: 1.0, mass_gev: 0.0 };
    for (leg, &(pt, eta, phi, mass_gev)) in event.legs.iter_mut().zip(legs) {
        *leg = TruthLeg {
            px_gev: pt * libm::cos(phi),
            py_gev: pt * libm::sin(phi),
            pz_gev: pt * libm::sinh(eta),
            mass_gev,
        };
    }
    event.mass_gev = legs_mass(&event);
    event
}

/// Mass of a truth event by the pair formula `m² = sum of mi² + 2 sum over pairs of (Ei Ej - pi·pj)`.
fn legs_mass(event: &TruthEvent) -> f64 {
    let legs = &event.legs[..event.leg_count];
    let energy = |l: &TruthLeg| (l.px_gev.powi(2) + l.py_gev.powi(2) + l.pz_gev.powi(2) + l.mass_gev.powi(2)).sqrt();
    let mut squared = 0.0;
    for (i, a) in legs.iter().enumerate() {
        squared += a.mass_gev.powi(2);
        for b in &legs[i + 1..] {
            let dot = a.px_gev * b.px_gev + a.py_gev * b.py_gev + a.pz_gev * b.pz_gev;
            squared += 2.0 * (energy(a) * energy(b) - dot);
        }
    }
    squared.max(0.0).sqrt()
}

/// Mean and standard deviation.
pub fn moments(values: &[f64]) -> (f64, f64) {
    let n = values.len() as f64;
    let mean = values.iter().sum::<f64>() / n;
    (mean, (values.iter().map(|v| (v - mean).powi(2)).sum::<f64>() / (n - 1.0)).sqrt())
}

/// Largest distance between the empirical distribution of `values` and a cumulative distribution.
pub fn kolmogorov_distance(values: &[f64], cdf: impl Fn(f64) -> f64) -> f64 {
    let mut sorted = values.to_vec();
    sorted.sort_by(f64::total_cmp);
    let n = sorted.len() as f64;
    sorted.iter().enumerate().fold(0.0, |largest: f64, (i, &value)| {
        let exact = cdf(value);
        largest.max((exact - i as f64 / n).abs()).max((exact - (i + 1) as f64 / n).abs())
    })
}
