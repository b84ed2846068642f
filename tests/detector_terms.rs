//! Resolution terms of calorimeters and trackers against published formulas, worked examples and direct least squares.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use nalgebra::{Matrix2, Matrix3, Vector2, Vector3};
use peakfold::detector::{
    Calorimeter, CalorimeterRegion, Detector, Efficiency, EfficiencyCell, EfficiencyCurve, EfficiencyRegion, EtaRange,
    Object, Tracker, TrackerGeometry, TrackerRegion, TrackerResolution,
};

fn close(found: f64, expected: f64, relative: f64, what: &str) {
    let off = (found / expected - 1.0).abs();
    assert!(off <= relative, "{what}: found {found}, expected {expected}, off by {off:e}");
}

fn geometry(field_t: f64, lever_arm_m: f64, points: u32, point_resolution_um: f64) -> TrackerGeometry {
    TrackerGeometry {
        field_t,
        inner_radius_m: 0.05,
        lever_arm_m,
        points,
        point_resolution_um,
        radiation_lengths: 0.0,
        vertex_constraint: false,
    }
}

fn calorimeter(object: Object, eta: (f64, f64), terms: (f64, f64, f64)) -> Calorimeter {
    Calorimeter {
        name: "entry".into(),
        object,
        eta: EtaRange { low: eta.0, high: eta.1 },
        stochastic: terms.0,
        noise_gev: terms.1,
        constant: terms.2,
        bias: 0.0,
        scale: 0.0,
        tail: None,
        fraction: 1.0,
        uncertainties: Vec::new(),
    }
}

fn tracker(object: Object, eta: (f64, f64), resolution: TrackerResolution) -> Tracker {
    Tracker {
        name: "entry".into(),
        object,
        eta: EtaRange { low: eta.0, high: eta.1 },
        resolution,
        scale: 0.0,
        uncertainties: Vec::new(),
    }
}

/// Exact factors for uniform spacing, computed by direct least squares in double precision, and Gluckstern's
/// approximation sqrt(720/(n+4)), Nucl. Instrum. Methods 24 (1963) 381.
const FACTORS: [(u32, f64, f64); 5] = [
    (3, 9.797958971, 10.1419),
    (10, 7.050145066, 7.171371656),
    (13, 6.436658250, 6.507913735),
    (50, 3.648110526, 3.651483717),
    (150, 2.162015962, 2.162249910),
];

#[test]
fn uniform_spacing_factor() {
    for (n, exact, approximate) in FACTORS {
        // 1e6 um over 1 m: the curvature error is the factor itself.
        let factor = geometry(1.0, 1.0, n, 1e6).curvature_error_per_m();
        close(factor, exact, 1e-9, &format!("{n} points"));
        close((720.0 / f64::from(n + 4)).sqrt(), approximate, 1e-5, "the approximation of the table");
    }
}

#[test]
fn uniform_spacing_against_direct_least_squares() {
    for n in [3, 4, 7, 12, 40] {
        let mut normal = Matrix3::zeros();
        for i in 0..n {
            // Centred, which changes the offset and the slope but not the curvature.
            let x = f64::from(i) / f64::from(n - 1) - 0.5;
            let row = Vector3::new(1.0, x, 0.5 * x * x);
            normal += row * row.transpose();
        }
        let expected = normal.try_inverse().unwrap()[(2, 2)].sqrt();
        close(geometry(1.0, 1.0, n, 1e6).curvature_error_per_m(), expected, 1e-11, &format!("{n} points"));
    }
}

#[test]
fn vertex_constraint_against_direct_least_squares() {
    for (n, inner, arm) in
        [(2, 0.3, 1.0), (3, 0.0, 1.0), (3, 0.05, 1.1), (12, 0.05, 1.1), (12, 0.6, 0.9), (150, 0.2, 2.0)]
    {
        let mut normal = Matrix2::zeros();
        for i in 0..n {
            let x = inner + arm * f64::from(i) / f64::from(n - 1);
            let row = Vector2::new(x, 0.5 * x * x);
            normal += row * row.transpose();
        }
        let expected = normal.try_inverse().unwrap()[(1, 1)].sqrt();
        let constrained =
            TrackerGeometry { inner_radius_m: inner, vertex_constraint: true, ..geometry(1.0, arm, n, 1e6) };
        close(constrained.curvature_error_per_m(), expected, 1e-10, &format!("{n} points from {inner} m"));
    }
}

#[test]
fn vertex_constraint_has_the_limit_320() {
    // Points from the vertex on, many of them: sqrt(320/N) replaces sqrt(720/N) (value from memory; the integrals
    // int x² = 1/3, int x³ = 1/4, int x⁴ = 1/5 give 4 (1/3)/(1/15 - 1/16) = 320).
    let n = 1_000_000;
    let constrained = TrackerGeometry { inner_radius_m: 0.0, vertex_constraint: true, ..geometry(1.0, 1.0, n, 1e6) };
    let factor = constrained.curvature_error_per_m();
    close(factor * factor * f64::from(n), 320.0, 1e-5, "320");
}

#[test]
fn vertex_far_from_the_points_does_not_lose_digits() {
    // Two points at x = r and r + 1 and none at 0: k = 2 (y2/x2 - y1/x1)/(x2 - x1), so the factor is 2 sqrt(1/x1² + 1/x2²).
    let r: f64 = 1e6;
    let constrained = TrackerGeometry { inner_radius_m: r, vertex_constraint: true, ..geometry(1.0, 1.0, 2, 1e6) };
    let expected = 2.0 * (1.0 / (r * r) + 1.0 / ((r + 1.0) * (r + 1.0))).sqrt();
    close(constrained.curvature_error_per_m(), expected, 1e-8, "two far points");
}

#[test]
fn measurement_term_worked_examples() {
    // (error per point um, lever arm m, points, field T, curvature error 1/m and sigma/pT² in 1/GeV with the factor
    // sqrt(720/(n+4))), computed from R. L. Gluckstern, Nucl. Instrum. Methods 24 (1963) 381. The exact factor replaces
    // the approximate one here.
    let rows = [
        (100.0, 1.0, 10, 4.0, 7.171371656006362e-4, 5.980280244e-4),
        (150.0, 1.5, 150, 1.5, 1.441499940312894e-4, 3.205550822e-4),
        (20.0, 1.1, 13, 3.8, 1.075688220588378e-4, 9.442393895e-5),
    ];
    for (error_um, arm, points, field, curvature, per_gev) in rows {
        let (_, exact, approximate) = *FACTORS.iter().find(|row| row.0 == points).unwrap();
        let tracker = geometry(field, arm, points, error_um);
        close(tracker.curvature_error_per_m() * approximate / exact, curvature, 1e-9, "curvature error");
        close(tracker.curvature_per_gev() * approximate / exact, per_gev, 1e-9, "per GeV");
    }
}

#[test]
fn scattering_term_worked_examples() {
    // (beta, dip angle rad, track length m, radiation length m, field T, sigma/pT), computed from the term
    // 0.016 GeV/(L p beta cos²(dip)) sqrt(L/X0) with 0.299792458 (the 0.016: published form, second-hand).
    let pion_beta = 1.0 / (1.0_f64 + 0.13957039 * 0.13957039).sqrt();
    let rows: [(f64, f64, f64, f64, f64, f64); 3] = [
        (pion_beta, 0.0, 1.0, 100.0, 2.0, 0.26943785758e-2),
        (1.0, 0.0, 1.1, 2.75, 3.8, 0.80751945375e-2),
        (1.0, 0.5, 1.5, 120.0, 2.0, 0.22664442803e-2),
    ];
    for (beta, dip, length, x0, field, expected) in rows {
        let arm = length * dip.cos();
        let mut geometry = geometry(field, arm, 10, 100.0);
        geometry.radiation_lengths = arm / x0;
        // sinh(eta) = cot(theta) = tan(dip).
        let eta = dip.tan().asinh();
        close(geometry.scattering(eta) / beta, expected, 1e-10, "scattering");
    }
}

#[test]
fn scattering_squared_grows_as_one_over_sin_theta() {
    let geometry = TrackerGeometry { radiation_lengths: 0.3, ..geometry(3.0, 1.1, 12, 25.0) };
    let ratio = geometry.scattering(1.3) / geometry.scattering(0.0);
    let theta = 2.0 * (-1.3_f64).exp().atan();
    close(ratio * ratio, 1.0 / theta.sin(), 1e-13, "1/sin(theta)");
}

#[test]
fn vertex_constraint_lengthens_the_span_of_the_scattering() {
    let free = TrackerGeometry { inner_radius_m: 0.4, radiation_lengths: 0.3, ..geometry(3.0, 1.0, 12, 25.0) };
    let constrained = TrackerGeometry { vertex_constraint: true, ..free };
    close(free.scattering(0.0) / constrained.scattering(0.0), 1.4, 1e-14, "span 1.4 m over 1 m");
}

#[test]
fn tracker_width_is_the_quadratic_sum() {
    // 3-4-5: 3 % from the curvature at 100 GeV, 4 % scattering.
    let terms = TrackerResolution::Terms { curvature_per_gev: 3e-4, scattering: 0.04 };
    let entry = tracker(Object::Muon, (0.0, 1.0), terms);
    assert_eq!(entry.terms_at(0.7), (3e-4, 0.04));
    close(entry.relative_sigma(100.0, 0.7), 0.05, 1e-15, "3-4-5");
    let geometry = TrackerGeometry { radiation_lengths: 0.3, ..geometry(3.0, 1.1, 12, 25.0) };
    let entry = tracker(Object::Muon, (0.0, 1.0), TrackerResolution::Geometry(geometry));
    assert_eq!(entry.terms_at(0.7), (geometry.curvature_per_gev(), geometry.scattering(0.7)));
}

#[test]
fn calorimeter_curves() {
    // Energies in GeV and sigma_E/E in %, computed from published parameters: lead tungstate 2.8 %, 0.3 %, Adzic et al.,
    // JINST 2 (2007) P04004 (0.12 GeV: second-hand); liquid argon 10 %, Aharrouche et al., NIM A 568 (2006) 601 (0.17 %:
    // value from memory); liquid krypton 4.1 %, 50 MeV, 0.4 %, report 93-210; silicon-tungsten, NIM A 608 (2009) 372;
    // lead/scintillator shashlik, NIM A 615 (2010) 6.
    let energies = [1.0, 10.0, 45.0, 62.5, 100.0, 120.0, 180.0, 250.0];
    let curves = [
        ((0.028, 0.12, 0.003), [12.326, 1.5212, 0.5791, 0.5023, 0.4276, 0.4066, 0.3715, 0.3517]),
        ((0.10, 0.0, 0.0017), [10.0014, 3.1668, 1.5004, 1.2763, 1.0143, 0.9286, 0.7645, 0.6549]),
        ((0.041, 0.05, 0.004), [6.4784, 1.4460, 0.7389, 0.6598, 0.5750, 0.5494, 0.5041, 0.4771]),
        ((0.166, 0.0, 0.011), [16.6364, 5.3634, 2.7081, 2.3704, 1.9914, 1.8725, 1.6556, 1.5206]),
        ((0.11, 0.0, 0.017), [11.1306, 3.8717, 2.3620, 2.1968, 2.0248, 1.9744, 1.8874, 1.8368]),
    ];
    for (terms, percents) in curves {
        let entry = calorimeter(Object::Electron, (0.0, 1.0), terms);
        for (energy, percent) in energies.into_iter().zip(percents) {
            let found = 100.0 * entry.relative_sigma(energy);
            // Half a unit of the last printed digit (the first column of lead tungstate has three decimals).
            let half = if percent == 12.326 { 0.5e-3 } else { 0.5e-4 };
            assert!((found - percent).abs() <= half * 1.0001, "{terms:?} at {energy} GeV: {found}, expected {percent}");
        }
    }
}

#[test]
fn regions_are_disjoint_and_the_first_entry_wins() {
    let terms = (0.1, 0.0, 0.01);
    let muon = TrackerResolution::Terms { curvature_per_gev: 1e-4, scattering: 0.01 };
    let detector = Detector {
        name: "test".into(),
        calorimeters: vec![
            calorimeter(Object::Photon, (0.2, 0.5), terms),
            calorimeter(Object::Photon, (0.0, 1.4), terms),
            calorimeter(Object::Jet, (0.0, 4.0), terms),
            calorimeter(Object::Photon, (0.0, 1.4), terms),
            calorimeter(Object::Photon, (1.6, 2.5), terms),
        ],
        trackers: vec![tracker(Object::Muon, (0.5, 2.4), muon), tracker(Object::Muon, (0.0, 1.0), muon)],
        directions: Vec::new(),
        vertex: None,
        efficiencies: Vec::new(),
        covariances: Vec::new(),
    };
    let region =
        |low, high, entries: &[usize]| CalorimeterRegion { eta: EtaRange { low, high }, entries: entries.to_vec() };
    assert_eq!(
        detector.calorimeter_regions(Object::Photon),
        [region(0.0, 0.2, &[1, 3]), region(0.2, 0.5, &[0]), region(0.5, 1.4, &[1, 3]), region(1.6, 2.5, &[4])]
    );
    assert_eq!(
        detector.tracker_regions(Object::Muon),
        [
            TrackerRegion { eta: EtaRange { low: 0.0, high: 0.5 }, entry: 1 },
            // The bound at 1.0 of the losing entry does not cut the winner.
            TrackerRegion { eta: EtaRange { low: 0.5, high: 2.4 }, entry: 0 },
        ]
    );
    let ranges = |pairs: &[(f64, f64)]| -> Vec<EtaRange> {
        pairs.iter().map(|(low, high)| EtaRange { low: *low, high: *high }).collect()
    };
    assert_eq!(detector.coverage(Object::Photon), ranges(&[(0.0, 1.4), (1.6, 2.5)]));
    assert_eq!(detector.coverage(Object::Muon), ranges(&[(0.0, 2.4)]));
    assert!(detector.coverage(Object::Electron).is_empty());
}

#[test]
fn efficiencies_by_region_and_curve() {
    let turn_on = |threshold_gev, width_gev, plateau| EfficiencyCurve::TurnOn { threshold_gev, width_gev, plateau };
    let entry = |object, eta: (f64, f64), curve| Efficiency {
        name: "entry".into(),
        object,
        eta: EtaRange { low: eta.0, high: eta.1 },
        curve,
        uncertainties: Vec::new(),
    };
    let cell = |pt_gev, eta: (f64, f64), efficiency| EfficiencyCell {
        pt_gev,
        eta: EtaRange { low: eta.0, high: eta.1 },
        efficiency,
    };
    let cells = vec![cell((20.0, 40.0), (0.0, 2.0), 0.5), cell((40.0, 1e6), (0.5, 2.0), 0.9)];
    let detector = Detector {
        name: "test".into(),
        calorimeters: Vec::new(),
        trackers: Vec::new(),
        directions: Vec::new(),
        vertex: None,
        efficiencies: vec![
            entry(Object::Photon, (1.0, 1.5), turn_on(40.0, 0.0, 0.8)),
            entry(Object::Photon, (0.0, 2.5), turn_on(30.0, 3.0, 0.96)),
            entry(Object::Electron, (0.0, f64::INFINITY), EfficiencyCurve::Table(cells)),
        ],
        covariances: Vec::new(),
    };
    let photon = |pt, eta| detector.efficiency(Object::Photon, pt, eta);
    // Standard normal distribution function at 0, 1 and -2 (published tables: 0.5, 0.841344746, 0.022750132).
    close(photon(30.0, 0.0), 0.96 * 0.5, 1e-15, "half of the plateau");
    close(photon(33.0, 2.0), 0.96 * 0.841344746, 1e-9, "one width above");
    close(photon(24.0, 0.5), 0.96 * 0.022750132, 1e-7, "two widths below");
    // A step; the first entry wins; nothing beyond the last.
    assert_eq!([39.9, 40.1].map(|pt| photon(pt, 1.2)), [0.0, 0.8]);
    assert_eq!(photon(100.0, 2.5), 0.0);
    // A leg without entries is found.
    assert_eq!(detector.efficiency(Object::Muon, 1.0, 0.0), 1.0);
    // Cells hold their lower ends; 0 outside.
    let electron = |pt, eta| detector.efficiency(Object::Electron, pt, eta);
    assert_eq!([19.9, 20.0, 39.9, 40.0].map(|pt| electron(pt, 0.5)), [0.0, 0.5, 0.5, 0.9]);
    assert_eq!([0.4, 1.9, 2.0].map(|eta| electron(50.0, eta)), [0.0, 0.9, 0.0]);
    let region = |low, high, entry| EfficiencyRegion { eta: EtaRange { low, high }, entry };
    assert_eq!(
        detector.efficiency_regions(Object::Photon),
        [region(0.0, 1.0, 1), region(1.0, 1.5, 0), region(1.5, 2.5, 1)]
    );
    let names: Vec<_> = detector.terms().iter().map(|term| term.key).collect();
    assert_eq!(names, ["threshold_gev", "width_gev", "plateau", "threshold_gev", "width_gev", "plateau"]);
}
