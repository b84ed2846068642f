//! Detector and study files: what a good pair becomes.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use std::path::PathBuf;

use peakfold::detector::{
    Calorimeter, Detector, Direction, Efficiency, EfficiencyCell, EfficiencyCurve, EtaRange, Object, Tail, Tracker,
    TrackerGeometry, TrackerResolution, Uncertainty, Vertex,
};
use peakfold::files::{LoadedStudy, load_detector, load_study};
use peakfold::problem::Problems;
use peakfold::process::{
    Category, Channel, Cuts, Decay, EventList, EventSource, Intermediate, LegChoice, MassAxis, Natural, Production,
    Resonance, ShapeChoice, Simulated, SpectrumCell, Width,
};

const DETECTOR: &str = include_str!("inputs/detector.toml");

const STUDY: &str = include_str!("inputs/study.toml");

const SPECTRUM: &str = include_str!("inputs/spectrum.csv");
const EFFICIENCY: &str = include_str!("inputs/efficiency.csv");

/// A directory with the three files, each as given.
struct Pair {
    directory: tempfile::TempDir,
}

impl Pair {
    fn new(study: &str, detector: &str) -> Self {
        let directory = tempfile::tempdir().unwrap();
        let write = |name: &str, text: &str| std::fs::write(directory.path().join(name), text).unwrap();
        write("study.toml", study);
        write("detector.toml", detector);
        write("spectrum.csv", SPECTRUM);
        write("efficiency.csv", EFFICIENCY);
        // Read as bytes only here.
        write("truth.lhe", "abc");
        Pair { directory }
    }

    fn path(&self, name: &str) -> PathBuf {
        self.directory.path().join(name)
    }

    fn load(&self) -> Result<LoadedStudy, Problems> {
        load_study(&self.path("study.toml"))
    }
}

fn eta(low: f64, high: f64) -> EtaRange {
    EtaRange { low, high }
}

fn uncertainty(key: &str, sigma: f64, share: Option<&str>) -> Uncertainty {
    Uncertainty { key: key.into(), sigma, share: share.map(str::to_owned) }
}

fn expected_detector() -> Detector {
    let plain = Calorimeter {
        name: "photon-plain".into(),
        object: Object::Photon,
        eta: eta(0.0, 1.4),
        stochastic: 0.095,
        noise_gev: 0.25,
        constant: 0.007,
        bias: -0.001,
        scale: 0.002,
        tail: Some(Tail { alpha_low: 1.6, n_low: 4.0, alpha_high: 2.0, n_high: 8.0 }),
        fraction: 0.7,
        uncertainties: vec![
            uncertainty("scale", 0.001, Some("em-scale")),
            uncertainty("constant", 0.0015, None),
            uncertainty("tail.alpha_low", 0.1, Some("tails")),
        ],
    };
    let bare = Calorimeter {
        name: "photon-converted".into(),
        object: Object::Photon,
        eta: eta(0.0, 1.4),
        stochastic: 0.12,
        noise_gev: 0.0,
        constant: 0.0,
        bias: 0.0,
        scale: 0.0,
        tail: None,
        fraction: 0.3,
        uncertainties: Vec::new(),
    };
    let electron = Calorimeter {
        name: "electron-barrel".into(),
        object: Object::Electron,
        stochastic: 0.1,
        fraction: 1.0,
        uncertainties: vec![uncertainty("scale", 0.001, Some("em-scale"))],
        ..bare.clone()
    };
    Detector {
        name: "Invented, for tests".into(),
        calorimeters: vec![plain, bare, electron],
        trackers: vec![
            Tracker {
                name: "muon-central".into(),
                object: Object::Muon,
                eta: eta(0.0, 1.2),
                resolution: TrackerResolution::Terms { curvature_per_gev: 1.4e-4, scattering: 0.008 },
                scale: -0.001,
                uncertainties: vec![
                    uncertainty("scale", 0.0005, None),
                    uncertainty("curvature_per_gev", 1e-5, None),
                    uncertainty("scattering", 0.0004, None),
                ],
            },
            Tracker {
                name: "electron-track".into(),
                object: Object::Electron,
                eta: eta(0.0, 1.4),
                resolution: TrackerResolution::Geometry(TrackerGeometry {
                    field_t: 3.0,
                    inner_radius_m: 0.05,
                    lever_arm_m: 1.1,
                    points: 12,
                    point_resolution_um: 25.0,
                    radiation_lengths: 0.3,
                    vertex_constraint: true,
                }),
                scale: 0.0,
                uncertainties: vec![uncertainty("geometry.radiation_lengths", 0.02, None)],
            },
        ],
        directions: vec![Direction {
            object: Object::Photon,
            sigma_theta_mrad: 1.0,
            sigma_phi_mrad: 1.5,
            uncertainties: vec![uncertainty("sigma_theta_mrad", 0.1, None)],
        }],
        vertex: Some(Vertex {
            calorimeter_radius_m: 1.5,
            calorimeter_half_length_m: 3.2,
            right_choice: 0.8,
            spread_right_mm: 0.1,
            spread_wrong_mm: 45.0,
            uncertainties: vec![uncertainty("right_choice", 0.02, Some("vertex"))],
        }),
        efficiencies: vec![
            Efficiency {
                name: "photon-efficiency".into(),
                object: Object::Photon,
                eta: eta(0.0, f64::INFINITY),
                curve: EfficiencyCurve::TurnOn { threshold_gev: 30.0, width_gev: 3.0, plateau: 0.97 },
                uncertainties: vec![
                    uncertainty("threshold_gev", 0.5, None),
                    uncertainty("plateau", 0.01, Some("photon-quality")),
                ],
            },
            Efficiency {
                name: "electron-trigger".into(),
                object: Object::Electron,
                eta: eta(0.0, 1.4),
                curve: EfficiencyCurve::Table(vec![
                    EfficiencyCell { pt_gev: (20.0, 40.0), eta: eta(0.0, 1.4), efficiency: 0.8 },
                    EfficiencyCell { pt_gev: (40.0, 1e6), eta: eta(0.0, 0.8), efficiency: 0.95 },
                    EfficiencyCell { pt_gev: (40.0, 1e6), eta: eta(0.8, 1.4), efficiency: 0.9 },
                ]),
                uncertainties: Vec::new(),
            },
        ],
        covariances: Vec::new(),
    }
}

#[test]
fn every_key_of_a_good_pair() {
    let pair = Pair::new(STUDY, DETECTOR);
    let LoadedStudy { study, inputs, warnings } = pair.load().unwrap();
    assert_eq!(warnings, []);
    assert_eq!(study.name, "All keys");
    assert_eq!(study.detector, expected_detector());
    assert_eq!((study.seed, study.precision, study.max_points), (20261, 1e-3, 65536));
    let cell = |pt_gev, weight| SpectrumCell { pt_gev, rapidity: (-1.0, 1.0), weight };
    let resonance = Resonance {
        masses_gev: vec![150.0, 180.0, 210.0],
        width: Width::Relative(0.02),
        natural: Natural::RunningWidth,
        falloff_power: 4.0,
        source: EventSource::Generated(Production::Table(vec![cell((0.0, 20.0), 3.0), cell((20.0, 50.5), 0.5)])),
        intermediate: Intermediate { mass_gev: 80.0, width_gev: 2.0 },
        radiation: None,
    };
    assert_eq!(study.resonance, resonance);
    let photons = Channel {
        name: "two-photon".into(),
        decay: Decay::Direct(vec![Object::Photon; 2]),
        choice: LegChoice::default(),
        cuts: Cuts {
            max_abs_eta: Some(1.4),
            gap_abs_eta: Some(eta(0.4, 0.5)),
            min_pt_gev: vec![30.0],
            min_pt_over_mass: vec![0.35, 0.25],
        },
        min_efficient_legs: None,
        axis: MassAxis { low: 0.8, high: 1.2, bins: 200, relative: true },
        shape: ShapeChoice::GaussExp,
        categories: vec![
            Category { name: "central".into(), max_abs_eta: Some(0.8) },
            Category { name: "rest".into(), max_abs_eta: None },
        ],
        simulated: Simulated::default(),
    };
    let mixed = Channel {
        name: "mixed".into(),
        decay: Decay::Cascade([[Object::Electron; 2], [Object::Muon; 2]]),
        choice: LegChoice::default(),
        cuts: Cuts::default(),
        min_efficient_legs: Some(3),
        axis: MassAxis { low: 100.0, high: 300.0, bins: 100, relative: false },
        shape: ShapeChoice::DoubleCrystalBall,
        categories: vec![Category { name: "all".into(), max_abs_eta: None }],
        simulated: Simulated::default(),
    };
    assert_eq!(study.channels, [photons, mixed]);
    let names: Vec<_> = inputs.iter().map(|input| input.path.clone()).collect();
    assert_eq!(
        names,
        ["study.toml", "detector.toml", "efficiency.csv", "spectrum.csv"]
            .map(|name| pair.path(name).display().to_string())
    );
}

#[test]
fn what_stands_behind_optional_keys() {
    let study = r#"
name = "Few keys"
detector = "detector.toml"
[resonance]
masses_gev = [150.0]
events = "truth.lhe"
weight = "1002"
[[channel]]
name = "three"
legs = ["photon", "photon", "electron"]
mass_axis = { low_gev = 100.0, high_gev = 200.0, bins = 10 }
"#;
    let pair = Pair::new(study, DETECTOR);
    let loaded = pair.load().unwrap();
    let study = loaded.study;
    // The defaults of the files' description.
    assert_eq!((study.seed, study.precision, study.max_points), (1, 1e-4, 16777216));
    let resonance = Resonance {
        masses_gev: vec![150.0],
        width: Width::Gev(0.0),
        natural: Natural::Relativistic,
        falloff_power: 0.0,
        source: EventSource::File(EventList { path: pair.path("truth.lhe"), weight: Some("1002".to_owned()) }),
        intermediate: Intermediate { mass_gev: 91.188, width_gev: 2.4955 },
        radiation: None,
    };
    assert_eq!(study.resonance, resonance);
    // The digest of "abc": FIPS 180-2, appendix B.1.
    let digest = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad";
    assert_eq!(loaded.inputs.last().unwrap().sha256, digest);
    let bare = load_detector(&pair.path("detector.toml")).unwrap();
    assert_eq!(bare.detector, expected_detector());
    let no_endcap = DETECTOR.replace("calorimeter_half_length_m = 3.2\n", "");
    let pair = Pair::new(STUDY, &no_endcap);
    assert_eq!(pair.load().unwrap().study.detector.vertex.unwrap().calorimeter_half_length_m, f64::INFINITY);
}

#[test]
fn warnings_do_not_refuse() {
    // A photon hole from 1.4 to 2, an electron entry that another hides, masses off the axis.
    let detector = DETECTOR.replace(
        "[[tracker]]\nname = \"muon-central\"",
        "[[calorimeter]]\nname = \"hidden\"\nobject = \"electron\"\neta = [0.1, 0.2]\nstochastic = 0.1\n\n\
         [[calorimeter]]\nname = \"forward\"\nobject = \"photon\"\neta = [2.0, 3.0]\nstochastic = 0.1\n\n\
         [[tracker]]\nname = \"muon-central\"",
    );
    let study = STUDY.replace("max_abs_eta = 1.4\n", "").replace("low_gev = 100.0", "low_gev = 160.0");
    let pair = Pair::new(&study, &detector);
    let warnings = pair.load().unwrap().warnings;
    let line = |text: &str, part: &str| Some(text[..text.find(part).unwrap()].matches('\n').count() + 1);
    let found: Vec<_> = warnings.iter().map(|w| (w.line, w.key.as_deref().unwrap())).collect();
    let expected = [
        (line(&study, "legs = "), "channel.two-photon.legs"),
        (line(&study, "low_gev = 160"), "channel.mixed.mass_axis"),
        (line(&detector, "name = \"hidden\"").map(|l| l - 1), "calorimeter.hidden"),
    ];
    assert_eq!(found, expected);
    assert!(warnings[0].message.contains("1.4 to 2,"), "{}", warnings[0]);
    assert!(warnings[1].message.contains("150 GeV"), "{}", warnings[1]);
    assert!(warnings[2].message.contains("never used"), "{}", warnings[2]);
}
