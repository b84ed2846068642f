//! Kinematics and resolution formulas against published or independently computed values.

#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod common;

use common::*;
use peakfold::detector::{Object, TrackerGeometry, TrackerResolution};
use peakfold::fold::plain::{smear_events, smear_generated, tracker_terms};
use peakfold::kinematics::{FourVector, two_body_momentum};
use peakfold::process::Decay;
use std::f64::consts::PI;

fn close(found: f64, expected: f64, relative: f64) {
    assert!((found - expected).abs() <= relative * expected.abs(), "found {found}, expected {expected}");
}

// Masses in MeV: Review of Particle Physics, 2026 edition.
const ELECTRON: f64 = 0.51099895069;
const MUON: f64 = 105.6583755;
const TAU: f64 = 1776.93;
const JPSI: f64 = 3096.900;
const PSI_2S: f64 = 3686.097;
const Z: f64 = 91187.9;

#[test]
fn decay_momenta_are_the_published_ones() {
    // Printed in the listings of the Review of Particle Physics, psi(2S) decay modes, p (MeV/c), whole numbers.
    for (lepton, printed) in [(MUON, 1840.0), (ELECTRON, 1843.0), (TAU, 489.0)] {
        let p = two_body_momentum(PSI_2S, lepton, lepton).unwrap();
        assert!((p - printed).abs() <= 0.5, "{p} against {printed}");
    }
    // Computed from the same masses in extended precision.
    for (parent, lepton, p) in [
        (JPSI, MUON, 1544.84099835119),
        (JPSI, ELECTRON, 1548.4499156834465),
        (PSI_2S, MUON, 1840.0174132434051),
        (PSI_2S, ELECTRON, 1843.0484291608625),
        (PSI_2S, TAU, 489.231589793883),
        (Z, MUON, 45593.82757468588),
        (Z, TAU, 45559.31075397871),
    ] {
        // Ten roundings at most.
        close(two_body_momentum(parent, lepton, lepton).unwrap(), p, 2e-15);
    }
    assert_eq!(two_body_momentum(JPSI, TAU, TAU), None);
}

#[test]
fn four_body_mass_is_right_both_ways() {
    // Two muons and two electrons; 129.91343703000055, 90.59145052143789, 34.27292421273449 GeV computed in extended
    // precision, with the masses of the Review of Particle Physics.
    let (mu, e) = (MUON * 1e-3, ELECTRON * 1e-3);
    let legs = [(45.0, 0.3, 0.1, mu), (40.0, -0.5, 2.9, mu), (20.0, 0.8, -1.2, e), (12.0, -0.2, 1.5, e)]
        .map(|(pt, eta, phi, m)| FourVector::from_pt_eta_phi(pt, eta, phi, m));
    let muons = legs[0] + legs[1];
    let electrons = legs[2] + legs[3];
    close((muons + electrons).mass(), 129.91343703000055, 1e-14);
    close(muons.mass(), 90.59145052143789, 1e-14);
    close(electrons.mass(), 34.27292421273449, 1e-14);
    // m² = sum over pairs of m_ij² - (n - 2) sum of m_i².
    let mut squared = -2.0 * (2.0 * mu * mu + 2.0 * e * e);
    for i in 0..4 {
        for j in i + 1..4 {
            squared += (legs[i] + legs[j]).mass_squared();
        }
    }
    close(squared.sqrt(), 129.91343703000055, 1e-14);
}

#[test]
fn photon_pair_mass() {
    // m² = 2 pT1 pT2 (cosh(delta eta) - cos(delta phi)) for pT of 60 and 50 GeV, 0.7, 2.8: computed in extended precision.
    let pair = FourVector::from_pt_eta_phi(60.0, 0.9, -0.4, 0.0) + FourVector::from_pt_eta_phi(50.0, 0.2, 2.4, 0.0);
    close(pair.mass(), 114.8231164783364, 1e-14);
}

#[test]
fn boosts_undo_each_other_and_keep_the_mass() {
    let vector = FourVector::from_momentum(3.0, -14.0, 7.0, 1.7);
    for (px, py, pz, mass) in [(0.0, 0.0, 0.0, 91.0), (10.0, -20.0, 400.0, 125.0), (1.0, 2.0, -0.5, 0.8)] {
        let frame = FourVector::from_momentum(px, py, pz, mass);
        let back = FourVector { px: -px, py: -py, pz: -pz, ..frame };
        let moved = vector.boosted_from_rest_of(&frame, mass);
        // Rounding grows with the square of the Lorentz factor.
        let tolerance = 8.0 * f64::EPSILON * (frame.e / mass).powi(2);
        let again = moved.boosted_from_rest_of(&back, mass);
        for (found, expected) in
            [(again.e, vector.e), (again.px, vector.px), (again.py, vector.py), (again.pz, vector.pz)]
        {
            assert!((found - expected).abs() < tolerance * vector.e, "{found} {expected}");
        }
        close(moved.mass(), vector.mass(), tolerance * (vector.e / 1.7).powi(2));
        // A particle at rest in the frame moves with it.
        let at_rest = FourVector { e: mass, px: 0.0, py: 0.0, pz: 0.0 }.boosted_from_rest_of(&frame, mass);
        close(at_rest.e, frame.e, 1e-15);
        assert!((at_rest.px - px).abs() + (at_rest.py - py).abs() + (at_rest.pz - pz).abs() < 1e-13 * frame.e);
    }
    // Along z with rapidity y: e' = e cosh y + pz sinh y, pz' = pz cosh y + e sinh y.
    let y: f64 = 1.3;
    let frame = FourVector { e: 2.0 * libm::cosh(y), px: 0.0, py: 0.0, pz: 2.0 * libm::sinh(y) };
    let moved = vector.boosted_from_rest_of(&frame, 2.0);
    close(moved.e, vector.e * libm::cosh(y) + vector.pz * libm::sinh(y), 1e-15);
    close(moved.pz, vector.pz * libm::cosh(y) + vector.e * libm::sinh(y), 1e-15);
}

fn geometry(points: u32, lever_arm_m: f64, field_t: f64, resolution_um: f64) -> TrackerGeometry {
    TrackerGeometry {
        field_t,
        inner_radius_m: 0.05,
        lever_arm_m,
        points,
        point_resolution_um: resolution_um,
        radiation_lengths: 0.3,
        vertex_constraint: false,
    }
}

#[test]
fn tracker_geometry_gives_the_worked_measurement_terms() {
    // Exact factor for n equally spaced points in delta_k = (resolution/length²) factor, computed in extended precision;
    // R. L. Gluckstern, NIM 24 (1963) 381 gives its limit sqrt(720/(n + 4)).
    for (points, factor) in
        [(3, 9.797958971), (10, 7.050145066), (13, 6.436658250), (50, 3.648110526), (150, 2.162015962)]
    {
        let given = geometry(points, 1.5, 3.8, 100.0);
        let (curvature, _) = tracker_terms(&TrackerResolution::Geometry(given), 1.0);
        // The table has 10 digits.
        close(curvature, factor * 1e-4 / (1.5 * 1.5 * 0.299792458 * 3.8), 2e-10);
    }
    // 100 um, 1 m, 10 points, 4 T: 5.980280244e-4 per GeV with Gluckstern's limit, which is 1.7 % too high.
    let (curvature, _) = tracker_terms(&TrackerResolution::Geometry(geometry(10, 1.0, 4.0, 100.0)), 0.3);
    close(curvature, 5.980280244e-4 / 1.0172, 2e-4);
}

#[test]
fn vertex_constraint_tends_to_its_published_limit() {
    // sqrt(320/(n + 4)) over the length from the vertex, for many points that begin at the vertex (value from memory;
    // a limit, so 1 % at 1000 points).
    let given = TrackerGeometry { inner_radius_m: 1e-6, vertex_constraint: true, ..geometry(1000, 1.0, 2.0, 50.0) };
    let (curvature, _) = tracker_terms(&TrackerResolution::Geometry(given), 1.0);
    close(curvature, (320.0f64 / 1004.0).sqrt() * 50e-6 / (0.299792458 * 2.0), 1e-2);
}

#[test]
fn scattering_terms_are_the_worked_ones() {
    // delta_k = 0.016 GeV sqrt(L/X0)/(L p beta cos²) (value from memory), beta = 1; delta_k in 1/m computed in extended
    // precision; sigma_pT/pT = delta_k pT/(0.299792458 B).
    let delta_k = |given: TrackerGeometry, sine: f64, pt: f64| {
        tracker_terms(&TrackerResolution::Geometry(given), sine).1 * 0.299792458 * given.field_t / pt
    };
    // p = 10 GeV, no dip, L = 1.1 m of X0 = 2.75 m.
    let flat = TrackerGeometry { radiation_lengths: 1.1 / 2.75, ..geometry(13, 1.1, 3.8, 20.0) };
    close(delta_k(flat, 1.0, 10.0), 9.199353193217104e-4, 1e-14);
    // p = 5 GeV, dip 0.5 rad, total length 1.5 m of X0 = 120 m. The projected length and the thickness at normal
    // incidence are smaller by the cosine of the dip, which is the sine of theta.
    let sine = libm::cos(0.5);
    let dipped = TrackerGeometry { radiation_lengths: 1.5 / 120.0 * sine, ..geometry(13, 1.5 * sine, 2.0, 20.0) };
    close(delta_k(dipped, sine, 5.0 * sine), 3.096975401404040e-4, 1e-14);
}

#[test]
fn terms_of_a_tracker_are_passed_on() {
    let terms = TrackerResolution::Terms { curvature_per_gev: 1.4e-4, scattering: 0.008 };
    assert_eq!(tracker_terms(&terms, 0.2), (1.4e-4, 0.008));
}

/// Four standard errors of a standard deviation from n values.
fn four_sigma(n: usize) -> f64 {
    4.0 / (2.0 * n as f64).sqrt()
}

#[test]
fn mass_resolution_of_equal_legs_at_rest() {
    // sigma_m/m = 1/2 (sigma1/E1 (+) sigma2/E2): 1.1 % and 2.6 % per leg at 125 GeV give 0.972 and 2.298 GeV (computed).
    for (leg, expected_gev) in [(0.011, 0.9723), (0.026, 2.2981)] {
        let sample = smear_generated(&at_rest(gaussian_pair_study(125.0, leg, leg)), 0, 125.0, 1_000_000, 7).unwrap();
        let masses = &sample.categories[0].masses_gev;
        // The formula is of first order; the next is sigma² relative.
        close(moments(masses).1, expected_gev, four_sigma(masses.len()) + leg * leg + 1e-4);
    }
}

#[test]
fn mass_resolution_with_opening_angle() {
    // sigma_m/m = 1/2 (sigma1/E1 (+) sigma2/E2 (+) sigma_theta/tan(theta/2)), monoenergetic massless legs.
    let (s1, s2) = (1.5e-3, 2.5e-3);
    let mut study = gaussian_pair_study(100.0, s1, s2);
    // In the transverse plane the azimuths make the opening angle; in the plane of the beam the polar angles do.
    study.detector.directions = vec![direction(Object::Photon, 2.0, 1.2), direction(Object::Jet, 1.0, 1.6)];
    let in_theta = libm::hypot(2.0e-3, 1.0e-3);
    let in_phi = libm::hypot(1.2e-3, 1.6e-3);
    let opening: f64 = 0.8;
    let eta = |theta: f64| -libm::log(libm::tan(0.5 * theta));
    let (a, b) = (0.5 * (PI - opening), 0.5 * (PI + opening));
    let transverse = truth_event(&[(60.0, 0.0, 0.3, 0.0), (45.0, 0.0, 0.3 + opening, 0.0)]);
    let polar = truth_event(&[(60.0, eta(a), 1.0, 0.0), (45.0, eta(b), 1.0, 0.0)]);
    for (event, angle) in [(transverse, in_phi), (polar, in_theta)] {
        let sample = smear_events(&study, 0, &[event], 1_000_000, 11).unwrap();
        let masses = &sample.categories[0].masses_gev;
        let expected = 0.5 * libm::hypot(libm::hypot(s1, s2), angle / libm::tan(0.5 * opening));
        // First order: the rest is a part in 1e4 here.
        close(moments(masses).1 / event.mass_gev, expected, four_sigma(masses.len()) + 2e-4);
    }
}

#[test]
fn mass_resolution_of_an_electron_measured_twice() {
    // The weighted mean of two measurements has sigma² = s1² s2²/(s1² + s2²); the other leg is exact.
    let mut study = gaussian_pair_study(80.0, 0.0, 0.0);
    study.channels[0].decay = Decay::Direct(vec![Object::Electron, Object::Photon]);
    study.detector.calorimeters.push(calorimeter("electrons", Object::Electron, EVERYWHERE, 4e-3));
    study.detector.trackers.push(tracker("tracks", Object::Electron, EVERYWHERE, 0.0, 3e-3));
    let event = truth_event(&[(40.0, 0.4, 0.0, 0.511e-3), (40.0, -0.4, 2.5, 0.0)]);
    let sample = smear_events(&study, 0, &[event], 1_000_000, 3).unwrap();
    let masses = &sample.categories[0].masses_gev;
    let (mean, sigma) = moments(masses);
    close(sigma / event.mass_gev, 0.5 * 4e-3 * 3e-3 / 5e-3, four_sigma(masses.len()) + 1e-4);
    // Curvature makes the mean of the tracker high by s2², of which the weight takes its part: below 1e-5.
    close(mean, event.mass_gev, 1e-5);
}
