//! The plain smearing path against exact distributions, integrals and published tables.

#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod common;

use common::compare::{compare, kolmogorov_probability, template_of};
use common::*;
use peakfold::detector::{EtaRange, Object, Tail, Vertex};
use peakfold::fold::plain::{PlainError, PlainSample, generate_truth, smear_events, smear_generated};
use peakfold::process::{Category, Decay, EventList, EventSource, Natural, Production, SpectrumCell, Study, Width};
use quadrature::integrate;

const MILLION: u64 = 1_000_000;

/// Rows of a table in tests/reference, without comments and header.
fn table(file: &str) -> Vec<Vec<f64>> {
    let path = format!("{}/tests/reference/{file}", env!("CARGO_MANIFEST_DIR"));
    let mut reader = csv::ReaderBuilder::new().comment(Some(b'#')).from_path(path).unwrap();
    reader.records().map(|row| row.unwrap().iter().map(|cell| cell.parse().unwrap()).collect()).collect()
}

/// Fails when values could come from the distribution with a probability below 1e-4 only.
fn assert_distributed(values: &[f64], cdf: impl Fn(f64) -> f64) {
    let distance = kolmogorov_distance(values, cdf);
    let p = kolmogorov_probability(distance * (values.len() as f64).sqrt());
    assert!(p > 1e-4, "distance {distance} of {} values has probability {p}", values.len());
}

/// Fails when a share differs from its expectation by more than 4.5 standard errors (7e-6 by chance).
fn assert_share(found: f64, expected: f64, events: f64) {
    let error = (expected * (1.0 - expected) / events).sqrt();
    assert!((found - expected).abs() <= 4.5 * error, "share {found}, expected {expected} +- {error}");
}

fn normal_cdf(z: f64) -> f64 {
    0.5 * libm::erfc(-z / std::f64::consts::SQRT_2)
}

fn masses(sample: &PlainSample) -> &[f64] {
    &sample.categories[0].masses_gev
}

// --- response ---

#[test]
fn product_distribution_is_that_of_the_table() {
    // tests/reference/two_leg_product.csv; the integrals here aim at 1e-14 absolute in variables of order 1.
    for row in table("two_leg_product.csv") {
        let found = product::pdf(row[0], row[1], row[2], row[3]);
        let peak = 1.0 / (row[1] * libm::hypot(row[2], row[3]));
        assert!((found - row[4]).abs() < 1e-11 * (row[4] + 0.1 * peak), "{row:?}: {found}");
    }
}

#[test]
fn cumulative_product_distribution_is_the_integral_of_its_density() {
    for (s1, s2, low, high) in [(0.01, 0.01, 124.0, 125.5), (0.008, 0.03, 120.0, 126.0), (0.1, 0.1, 100.0, 130.0)] {
        let difference = product::cdf(high, 125.0, s1, s2) - product::cdf(low, 125.0, s1, s2);
        let middle = 125.0;
        let density = |m: f64| product::pdf(m, 125.0, s1, s2);
        let integral =
            integrate(density, low, middle, 1e-11).integral + integrate(density, middle, high, 1e-11).integral;
        assert!((difference - integral).abs() < 1e-10, "{difference} {integral}");
    }
}

#[test]
fn two_gaussian_legs_follow_the_product_distribution() {
    for (seed, (mass, s1, s2)) in [(125.0, 0.01, 0.01), (91.188, 0.008, 0.03), (1.0, 0.1, 0.1)].into_iter().enumerate()
    {
        let study = gaussian_pair_study(mass, s1, s2);
        let sample = smear_generated(&study, 0, mass, MILLION, seed as u64).unwrap();
        // The exact CDF on a fine axis; between its points the distribution moves by less than the bound.
        let width = mass * 0.5 * libm::hypot(s1, s2);
        let edges: Vec<f64> = (-60..=60).map(|i| mass + width * 0.1 * f64::from(i)).collect();
        let mut sorted = masses(&sample).to_vec();
        sorted.sort_by(f64::total_cmp);
        let count = sorted.len() as f64;
        let distance = edges.iter().fold(0.0f64, |d, &edge| {
            let share = sorted.partition_point(|&m| m < edge) as f64 / count;
            d.max((share - product::cdf(edge, mass, s1, s2)).abs())
        });
        let p = kolmogorov_probability(distance * count.sqrt());
        assert!(p > 1e-4, "{mass} {s1} {s2}: {distance} {p}");
    }
}

#[test]
fn tailed_response_is_a_double_sided_crystal_ball() {
    // tests/reference/crystal_ball_double.csv, columns x, mu, sigmaL, sigmaR, alphaL, nL, alphaR, nR, pdf, cdf: the rows
    // with one width. The other leg is exact, so (m/M)² - 1 is the width times the unit response.
    let width = 0.01;
    for tail in [
        Tail { alpha_low: 1.4, n_low: 4.0, alpha_high: 1.7, n_high: 20.0 },
        Tail { alpha_low: 1.5, n_low: 3.0, alpha_high: 2.0, n_high: 5.0 },
        Tail { alpha_low: 2.0, n_low: 1.3, alpha_high: 40.0, n_high: 2.0 },
    ] {
        let mut study = gaussian_pair_study(100.0, width, 0.0);
        study.detector.calorimeters[0].tail = Some(tail);
        let sample = smear_generated(&study, 0, 100.0, MILLION, 5).unwrap();
        let rows: Vec<_> = table("crystal_ball_double.csv")
            .into_iter()
            .filter(|r| r[2] == r[3] && r[4..8] == [tail.alpha_low, tail.n_low, tail.alpha_high, tail.n_high])
            .collect();
        assert!(rows.len() >= 6);
        for row in rows {
            let t = (row[0] - row[1]) / row[2];
            // Beyond -1/width the energy is not positive: lost, and counted as below.
            let below = masses(&sample).iter().filter(|&&m| (m / 100.0).powi(2) - 1.0 < width * t).count() as u64;
            assert_share((below + sample.categories[0].lost) as f64 / MILLION as f64, row[9], MILLION as f64);
        }
    }
}

#[test]
fn bias_and_scale_move_the_energy() {
    let mut study = gaussian_pair_study(100.0, 0.0, 0.0);
    study.detector.calorimeters[0].bias = -0.02;
    study.detector.calorimeters[0].scale = 0.005;
    study.detector.calorimeters[1].bias = 0.01;
    let expected = 100.0 * (1.005f64 * 0.98 * 1.01).sqrt();
    for &mass in masses(&smear_generated(&study, 0, 100.0, 100, 1).unwrap()) {
        // Rounding of boosts at rapidities of a few.
        assert!((mass - expected).abs() < 1e-10 * expected);
    }
}

#[test]
fn calorimeter_terms_add_in_quadrature_at_the_true_energy() {
    let mut study = gaussian_pair_study(100.0, 0.0, 0.0);
    let entry = &mut study.detector.calorimeters[0];
    (entry.stochastic, entry.noise_gev, entry.constant) = (0.10, 0.3, 0.004);
    let event = truth_event(&[(25.0, 0.0, 0.0, 0.0), (30.0, 0.0, 2.0, 0.0)]);
    let sample = smear_events(&study, 0, &[event], MILLION, 2).unwrap();
    // 10 %/sqrt(25) = 2 %, 0.3/25 = 1.2 %, 0.4 %: quadratic sum 2.366431913 %.
    let values: Vec<f64> = masses(&sample).iter().map(|m| (m / event.mass_gev).powi(2)).collect();
    assert_distributed(&values, |u| normal_cdf((u - 1.0) / 0.02366431913));
}

#[test]
fn tracker_is_gaussian_in_curvature_and_loses_the_wrong_sign() {
    let mut study = gaussian_pair_study(100.0, 0.0, 0.0);
    study.channels[0].decay = Decay::Direct(vec![Object::Muon, Object::Photon]);
    study.detector.trackers = vec![tracker("muons", Object::Muon, EVERYWHERE, 0.3 / 50.0, 0.4)];
    study.detector.trackers[0].scale = 0.01;
    // A massless muon of pT 50 GeV: width 0.3 (+) 0.4 = 0.5. Wrong sign: two standard deviations, p = 0.022750131948
    // (published normal table).
    let event = truth_event(&[(50.0, 0.7, 0.0, 0.0), (50.0, -0.3, 2.0, 0.0)]);
    let sample = smear_events(&study, 0, &[event], MILLION, 4).unwrap();
    let lost = sample.categories[0].lost as f64 / MILLION as f64;
    assert_share(lost, 0.022750131948179207, MILLION as f64);
    let values: Vec<f64> = masses(&sample).iter().map(|m| (m / event.mass_gev).powi(2)).collect();
    assert_distributed(&values, |u| normal_cdf((1.0 - 1.01 / u) / 0.5) / (1.0 - 0.022750131948179207));
}

#[test]
fn entries_of_one_region_share_its_legs() {
    let mut study = gaussian_pair_study(100.0, 0.0, 0.0);
    let mut second = study.detector.calorimeters[0].clone();
    study.detector.calorimeters[0].fraction = 0.7;
    (second.fraction, second.bias) = (0.3, 0.1);
    study.detector.calorimeters.push(second);
    let sample = smear_generated(&study, 0, 100.0, 100_000, 8).unwrap();
    let high = masses(&sample).iter().filter(|&&m| m > 102.0).count();
    assert_share(high as f64 / 1e5, 0.3, 1e5);
}

#[test]
fn a_leg_that_nothing_covers_is_not_reconstructed_and_not_lost() {
    let mut study = at_rest(gaussian_pair_study(100.0, 0.01, 0.01));
    study.detector.calorimeters[0].eta = EtaRange { low: 0.0, high: 1.0 };
    let sample = smear_generated(&study, 0, 100.0, MILLION, 9).unwrap();
    // Isotropic: |cos theta| < tanh(1).
    assert_share(masses(&sample).len() as f64 / MILLION as f64, libm::tanh(1.0), MILLION as f64);
    assert_eq!(sample.categories[0].lost, 0);
    assert_eq!(sample.generated, MILLION);
}

// --- vertex ---

#[test]
fn the_vertex_moves_trackless_legs_together() {
    let mut study = gaussian_pair_study(100.0, 0.0, 0.0);
    let vertex = Vertex {
        calorimeter_radius_m: 1.5,
        calorimeter_half_length_m: 3.2,
        right_choice: 0.8,
        spread_right_mm: 1.0,
        spread_wrong_mm: 100.0,
        uncertainties: Vec::new(),
    };
    study.detector.vertex = Some(vertex);
    // Two legs of 50 GeV, back to back in azimuth at equal theta: m = 100 sin(theta'), cot(theta') = cot(theta) + dz/path.
    // At eta = 0 the path is the radius; at eta = 2, tan(theta) = 1/sinh(2) and 3.2 tan(theta) = 0.882 m is shorter.
    for (eta, path) in [(0.0, 1.5), (2.0, 3.2 / libm::sinh(2.0))] {
        let pt = 50.0 / libm::cosh(eta);
        let event = truth_event(&[(pt, eta, 0.0, 0.0), (pt, eta, std::f64::consts::PI, 0.0)]);
        let sample = smear_events(&study, 0, &[event], MILLION, 10).unwrap();
        let shifts = |spread_m: f64, z: f64| normal_cdf(z / spread_m);
        let at_most = |dz: f64| 0.8 * shifts(1e-3, dz) + 0.2 * shifts(0.1, dz);
        assert_distributed(masses(&sample), |mass| {
            // m below a value: cot(theta') outside +-c.
            let c = ((100.0 / mass).powi(2) - 1.0).max(0.0).sqrt();
            let cot = libm::sinh(eta);
            at_most((-c - cot) * path) + 1.0 - at_most((c - cot) * path)
        });
    }
}

#[test]
fn the_vertex_leaves_tracks_alone() {
    let mut study = muon_study();
    study
        .detector
        .trackers
        .iter_mut()
        .for_each(|entry| *entry = tracker(&entry.name, Object::Muon, entry.eta, 0.0, 0.0));
    study.detector.directions.clear();
    let sample = smear_generated(&study, 0, 500.0, 1000, 1).unwrap();
    for category in &sample.categories {
        assert!(!category.masses_gev.is_empty());
        assert!(category.masses_gev.iter().all(|m| (m - 500.0).abs() < 1e-8));
    }
}

// --- cuts ---

#[test]
fn cuts_and_categories_take_their_share_of_an_isotropic_decay() {
    let accepted = |change: &dyn Fn(&mut Study)| {
        let mut study = at_rest(gaussian_pair_study(100.0, 0.0, 0.0));
        change(&mut study);
        let sample = smear_generated(&study, 0, 100.0, MILLION, 12).unwrap();
        sample.categories.iter().map(|c| c.accepted_weight() / sample.generated_weight).collect::<Vec<_>>()
    };
    // Back-to-back massless legs of 50 GeV: |eta| < a is |cos theta| < tanh(a); pT > p is |cos theta| < sqrt(1 - p²/2500).
    let check = |found: Vec<f64>, expected: &[f64]| {
        assert_eq!(found.len(), expected.len());
        found.iter().zip(expected).for_each(|(&f, &e)| assert_share(f, e, MILLION as f64));
    };
    check(accepted(&|s| s.channels[0].cuts.max_abs_eta = Some(1.0)), &[libm::tanh(1.0)]);
    check(accepted(&|s| s.channels[0].cuts.min_pt_gev = vec![40.0]), &[0.6]);
    check(accepted(&|s| s.channels[0].cuts.min_pt_over_mass = vec![0.1, 0.3]), &[0.8]);
    let gap = EtaRange { low: 0.5, high: 1.0 };
    check(accepted(&|s| s.channels[0].cuts.gap_abs_eta = Some(gap)), &[1.0 - libm::tanh(1.0) + libm::tanh(0.5)]);
    let categories = [("inner", Some(0.5)), ("middle", Some(1.5)), ("rest", None)];
    check(
        accepted(&|s| {
            s.channels[0].categories =
                categories.map(|(name, max_abs_eta)| Category { name: name.into(), max_abs_eta }).to_vec();
        }),
        &[libm::tanh(0.5), libm::tanh(1.5) - libm::tanh(0.5), 1.0 - libm::tanh(1.5)],
    );
}

#[test]
fn cuts_on_pt_hold_in_falling_order() {
    let mut study = gaussian_pair_study(100.0, 0.0, 0.0);
    let event = truth_event(&[(30.0, 0.1, 0.0, 0.0), (60.0, -0.3, 2.0, 0.0)]);
    for (limits, passes) in [(vec![50.0, 20.0], true), (vec![50.0, 40.0], false), (vec![20.0, 50.0], false)] {
        study.channels[0].cuts.min_pt_gev = limits;
        assert_eq!(masses(&smear_events(&study, 0, &[event], 1, 1).unwrap()).len(), usize::from(passes));
    }
}

// --- natural width ---

fn natural_masses(shape: Natural, mass: f64, width: f64, falloff: f64, object: Object) -> Vec<f64> {
    let mut study = gaussian_pair_study(mass, 0.01, 0.01);
    study.channels[0].decay = Decay::Direct(vec![object; 2]);
    study.resonance.natural = shape;
    study.resonance.width = Width::Gev(width);
    study.resonance.falloff_power = falloff;
    generate_truth(&study, 0, mass, MILLION as usize, 21).unwrap().iter().map(|event| event.mass_gev).collect()
}

#[test]
fn breit_wigner_masses_follow_the_arctangent() {
    // Cauchy distribution above the threshold of 0 (photons).
    let cauchy = |m: f64| 0.5 + libm::atan((m - 20.0) / 1.5) / std::f64::consts::PI;
    let found = natural_masses(Natural::BreitWigner, 20.0, 3.0, 0.0, Object::Photon);
    assert_distributed(&found, |m| (cauchy(m) - cauchy(0.0)) / (1.0 - cauchy(0.0)));
}

#[test]
fn relativistic_masses_follow_the_table() {
    // tests/reference/rel_breit_wigner.csv, columns m, M, Gamma, pdf, cdf.
    for (mass, width) in [(91.188, 2.4955), (1.0, 0.5)] {
        let mut found = natural_masses(Natural::Relativistic, mass, width, 0.0, Object::Photon);
        found.sort_by(f64::total_cmp);
        let rows: Vec<_> =
            table("rel_breit_wigner.csv").into_iter().filter(|r| r[1] == mass && r[2] == width).collect();
        assert!(rows.len() >= 5);
        for row in rows {
            let below = found.partition_point(|&m| m < row[0]) as f64 / found.len() as f64;
            assert_share(below, row[4], found.len() as f64);
        }
    }
}

#[test]
fn falling_and_running_masses_follow_their_integrals() {
    let (mass, width, threshold) = (50.0, 5.0, 2.0 * Object::Muon.mass_gev());
    let relativistic = |m: f64| 1.0 / (((m - mass) * (m + mass)).powi(2) + (mass * width).powi(2));
    let running = |m: f64| m * m / (((m - mass) * (m + mass)).powi(2) + (m * m * width / mass).powi(2));
    for (shape, power, density) in [
        (Natural::Relativistic, 2.0, &relativistic as &dyn Fn(f64) -> f64),
        (Natural::RunningWidth, 0.0, &running),
        (Natural::RunningWidth, 3.5, &running),
    ] {
        // In ln m, scaled to order 1, pieces short against the peak; beyond 1e6 GeV less than 1e-5 of the events.
        let integrand = |x: f64| {
            let m = libm::exp(x);
            2500.0 * m * density(m) * libm::pow(m / mass, -power)
        };
        let pieces = |low: f64, high: f64| -> f64 {
            let (from, to) = (libm::log(low), libm::log(high));
            let count = ((to - from) / 0.05).ceil();
            (0..count as u32)
                .map(|i| {
                    let edge = |i: u32| from + (to - from) * f64::from(i) / count;
                    integrate(integrand, edge(i), edge(i + 1), 1e-10).integral
                })
                .sum()
        };
        // With a falloff only masses between M/2 and 2M are produced.
        let (least, most) = if power == 0.0 { (threshold, 1e7) } else { (0.5 * mass, 2.0 * mass) };
        let whole = pieces(least, most);
        let found = natural_masses(shape, mass, width, power, Object::Muon);
        for limit in [0.5, 5.0, 20.0, 30.0, 45.0, 48.0, 50.0, 52.0, 60.0, 200.0].map(|m: f64| m.clamp(least, most)) {
            let below = found.iter().filter(|&&m| m < limit).count() as f64 / found.len() as f64;
            assert_share(below, pieces(least, limit) / whole, found.len() as f64);
        }
    }
}

#[test]
fn a_resonance_needs_a_mass_above_threshold() {
    let mut muons = muon_study();
    muons.resonance.width = Width::Gev(0.0);
    let error = smear_generated(&muons, 0, 0.2, 10, 1).unwrap_err();
    assert!(matches!(error, PlainError::BelowThreshold { .. }), "{error}");
}

// --- production and decay ---

#[test]
fn production_follows_its_spectrum() {
    let events = generate_truth(&gaussian_pair_study(100.0, 0.0, 0.0), 0, 100.0, MILLION as usize, 31).unwrap();
    let totals: Vec<_> = events.iter().map(|event| event.legs[0].four_vector() + event.legs[1].four_vector()).collect();
    let pt: Vec<f64> = totals.iter().map(|v| v.pt()).collect();
    assert_distributed(&pt, |pt| -libm::expm1(-pt / 40.0));
    let rapidity: Vec<f64> = totals.iter().map(|v| libm::atanh(v.pz / v.e)).collect();
    assert_distributed(&rapidity, |y| normal_cdf(y / 1.2));
    let azimuth: Vec<f64> = totals.iter().map(|v| libm::atan2(v.py, v.px)).collect();
    assert_distributed(&azimuth, |phi| 0.5 + phi / std::f64::consts::TAU);
    assert!(totals.iter().all(|v| (v.mass() - 100.0).abs() < 1e-8));
}

#[test]
fn production_follows_its_table() {
    let mut study = gaussian_pair_study(100.0, 0.0, 0.0);
    let cell = |pt_gev, rapidity, weight| SpectrumCell { pt_gev, rapidity, weight };
    study.resonance.source = EventSource::Generated(Production::Table(vec![
        cell((0.0, 10.0), (-1.0, 0.0), 1.0),
        cell((10.0, 50.0), (0.0, 3.0), 3.0),
        cell((50.0, 60.0), (0.0, 1.0), 0.0),
    ]));
    let events = generate_truth(&study, 0, 100.0, 400_000, 32).unwrap();
    let totals = events.iter().map(|event| event.legs[0].four_vector() + event.legs[1].four_vector());
    let (pt, rapidity): (Vec<f64>, Vec<f64>) = totals.map(|v| (v.pt(), libm::atanh(v.pz / v.e))).unzip();
    assert_distributed(&pt, |pt| if pt < 10.0 { 0.025 * pt } else { 0.25 + 0.75 * (pt - 10.0) / 40.0 });
    assert_distributed(&rapidity, |y| if y < 0.0 { 0.25 * (1.0 + y) } else { 0.25 + 0.25 * y });
}

/// Mean and mean square of the lower pair mass, by direct integration of the density of A. Djouadi, Phys. Rept. 457
/// (2008) 1 in (m1², m2²), massless legs.
fn lower_pair_mass(parent: f64) -> (f64, f64) {
    let (v, width) = (91.188f64, 2.4955);
    // The Breit-Wigner factors are flat in the angles a with m² = v² + v width tan(a).
    let angle = |m: f64| libm::atan((m * m - v * v) / (v * width));
    let square = |a: f64| (v * v + v * width * libm::tan(a)).max(0.0);
    let moment = |power: i32| {
        let outer = |a1: f64| {
            let s1 = square(a1);
            let m1 = s1.sqrt();
            let inner = |a2: f64| {
                let s2 = square(a2);
                let (x, y) = (s1 / parent.powi(2), s2 / parent.powi(2));
                let lambda = ((1.0 - x - y).powi(2) - 4.0 * x * y).max(0.0);
                lambda.sqrt() * (lambda + 12.0 * x * y) * s2.sqrt().powi(power)
            };
            // The lower mass is m2, the other half of the plane is its mirror image.
            integrate(inner, angle(0.0), angle(m1.min(parent - m1)), 1e-9).integral
        };
        let ends = [0.0, 0.5 * parent, parent.min(v - 5.0), parent.min(v), parent.min(v + 5.0), parent];
        let mut ends: Vec<f64> = ends.into_iter().map(angle).collect();
        ends.sort_by(f64::total_cmp);
        ends.windows(2).filter(|p| p[1] > p[0]).map(|p| integrate(outer, p[0], p[1], 1e-9).integral).sum::<f64>()
    };
    let norm = moment(0);
    (moment(1) / norm, moment(2) / norm)
}

#[test]
fn cascade_masses_have_the_moments_of_the_integrated_density() {
    for parent in [60.0, 125.0, 170.0, 200.0, 400.0] {
        let study = cascade_study(parent, Object::Electron, Object::Muon);
        let events = generate_truth(&study, 0, parent, 200_000, 41).unwrap();
        let mut lower = Vec::new();
        let mut first_is_lower = 0u32;
        for event in &events {
            let v = |i: usize| event.legs[i].four_vector();
            let (first, second) = ((v(0) + v(1)).mass(), (v(2) + v(3)).mass());
            assert!(((v(0) + v(1) + v(2) + v(3)).mass() - parent).abs() < 1e-8 * parent);
            lower.push(first.min(second));
            first_is_lower += u32::from(first < second);
        }
        let (mean, square) = lower_pair_mass(parent);
        let (found_mean, found_sigma) = moments(&lower);
        let squares: Vec<f64> = lower.iter().map(|m| m * m).collect();
        let (found_square, sigma_of_square) = moments(&squares);
        let root = (lower.len() as f64).sqrt();
        // Statistical errors, plus 1e-4 for the masses of the muons (thresholds), absent from the integral.
        let tolerance = |sigma: f64, value: f64| 4.5 * sigma / root + 1e-4 * value;
        assert!((found_mean - mean).abs() < tolerance(found_sigma, mean), "{parent}: {found_mean} {mean}");
        assert!(
            (found_square - square).abs() < tolerance(sigma_of_square, square),
            "{parent}: {found_square} {square}"
        );
        assert_share(f64::from(first_is_lower) / lower.len() as f64, 0.5, lower.len() as f64);
        if parent == 125.0 {
            // About 25 GeV (common practice: the lighter pair of a 125 GeV scalar).
            assert!((mean - 25.0).abs() < 1.5, "{mean}");
        }
    }
}

#[test]
fn cascade_legs_are_isotropic_in_their_pair() {
    let mut study = at_rest(cascade_study(250.0, Object::Electron, Object::Electron));
    study.resonance.intermediate.width_gev = 1e-3;
    let events = generate_truth(&study, 0, 250.0, 200_000, 42).unwrap();
    // In the rest system of the resonance the energy of a massless leg of V is flat within gamma mV/2 (1 +- beta).
    let v = study.resonance.intermediate.mass_gev;
    let momentum = (125.0f64.powi(2) - v * v).sqrt();
    for leg in 0..4 {
        let energies: Vec<f64> = events.iter().map(|event| event.legs[leg].four_vector().e).collect();
        // The Breit-Wigner tails move a few events outside: well below the bound.
        assert_distributed(&energies, |e| ((e - 0.5 * (125.0 - momentum)) / momentum).clamp(0.0, 1.0));
    }
}

// --- lists of events, errors, repeatability ---

#[test]
fn weights_of_a_list_are_kept_with_their_sign() {
    let study = gaussian_pair_study(100.0, 0.01, 0.01);
    let mut events = [truth_event(&[(50.0, 0.0, 0.0, 0.0), (50.0, 0.0, 3.0, 0.0)]); 2];
    (events[0].weight, events[1].weight) = (2.0, -0.5);
    let sample = smear_events(&study, 0, &events, 3, 1).unwrap();
    assert_eq!(sample.generated, 6);
    assert_eq!(sample.generated_weight, 4.5);
    assert_eq!(sample.generated_weight_squared, 3.0 * 4.25);
    assert_eq!(sample.categories[0].weights, [2.0, 2.0, 2.0, -0.5, -0.5, -0.5]);
}

#[test]
fn lists_of_generated_truth_give_the_generated_result() {
    let study = photon_study();
    let truth = generate_truth(&study, 0, 125.0, 300_000, 51).unwrap();
    let from_list = smear_events(&study, 0, &truth, 1, 52).unwrap();
    let generated = smear_generated(&study, 0, 125.0, MILLION, 53).unwrap();
    let edges = study.channels[0].axis.edges_gev(125.0);
    for category in 0..2 {
        let result = compare(&from_list, category, &template_of(&generated, category, &edges));
        assert!(result.agrees(), "{result:?}");
    }
}

#[test]
fn the_same_seed_gives_the_same_result_for_any_number_of_threads() {
    let study = photon_study();
    let with = |threads: usize, seed: u64| {
        let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap();
        pool.install(|| smear_generated(&study, 0, 125.0, 100_000, seed).unwrap())
    };
    let one = with(1, 1);
    assert_eq!(one, with(3, 1));
    assert_ne!(one, with(1, 2));
}

#[test]
fn what_cannot_be_done_is_an_error() {
    let mut study = photon_study();
    assert_eq!(smear_generated(&study, 1, 125.0, 1, 1).unwrap_err(), PlainError::NoSuchChannel { index: 1, count: 1 });
    let event = truth_event(&[(50.0, 0.0, 0.0, 0.0); 3]);
    assert!(matches!(smear_events(&study, 0, &[event], 1, 1).unwrap_err(), PlainError::LegCount { found: 3, .. }));
    study.channels[0].decay = Decay::Direct(vec![Object::Photon; 3]);
    assert!(matches!(smear_generated(&study, 0, 125.0, 1, 1).unwrap_err(), PlainError::CannotDecay { legs: 3, .. }));
    study.resonance.source = EventSource::Generated(Production::Table(Vec::new()));
    assert_eq!(smear_generated(&study, 0, 125.0, 1, 1).unwrap_err(), PlainError::EmptyTable);
    study.resonance.source = EventSource::File(EventList { path: "events.lhe".into(), weight: None });
    assert_eq!(smear_generated(&study, 0, 125.0, 1, 1).unwrap_err(), PlainError::NotGenerated);
}

// --- the comparison itself ---

/// All calorimeter terms wider by a factor.
fn wider(mut study: Study, factor: f64) -> Study {
    for entry in &mut study.detector.calorimeters {
        entry.stochastic *= factor;
        entry.noise_gev *= factor;
        entry.constant *= factor;
    }
    study
}

#[test]
fn comparison_accepts_the_same_detector_and_rejects_one_that_is_2_percent_wider() {
    // One category: about 60 % of the events. A scale of 2 % moves the CDF of a peak by up to 0.005 (0.24 of the relative
    // change for a Gaussian), three to four times the Kolmogorov scale of these samples.
    let mut study = photon_study();
    study.channels[0].categories = vec![Category { name: "all".into(), max_abs_eta: None }];
    let edges = study.channels[0].axis.edges_gev(125.0);
    let plain = smear_generated(&study, 0, 125.0, 2 * MILLION, 61).unwrap();
    let same = smear_generated(&study, 0, 125.0, 3 * MILLION, 62).unwrap();
    let result = compare(&plain, 0, &template_of(&same, 0, &edges));
    assert!(result.agrees(), "{result:?}");
    assert!(result.degrees_of_freedom > 50, "{result:?}");
    let other = smear_generated(&wider(study, 1.02), 0, 125.0, 3 * MILLION, 63).unwrap();
    let result = compare(&plain, 0, &template_of(&other, 0, &edges));
    assert!(result.chi_square_p < 1e-4 && result.cdf_p < 1e-4, "{result:?}");
}

#[test]
fn comparison_rejects_another_acceptance() {
    let mut study = photon_study();
    let edges = study.channels[0].axis.edges_gev(125.0);
    let plain = smear_generated(&study, 0, 125.0, MILLION, 64).unwrap();
    study.channels[0].cuts.min_pt_over_mass = vec![0.36, 0.25];
    let other = smear_generated(&study, 0, 125.0, MILLION, 65).unwrap();
    assert!(compare(&plain, 1, &template_of(&other, 1, &edges)).acceptance_pull.abs() > 4.0);
}

#[test]
fn comparison_has_honest_probabilities() {
    // Sixteen independent pairs: chi-square summed over them within 4.5 standard deviations of its degrees of freedom,
    // acceptance pulls with unit spread (chi-square of 16 between its 1e-5 and 1 - 1e-5 quantiles, 2.8 and 51.9).
    let study = photon_study();
    let edges = study.channels[0].axis.edges_gev(125.0);
    let template = template_of(&smear_generated(&study, 0, 125.0, 2 * MILLION, 70).unwrap(), 0, &edges);
    let (mut sum, mut freedom, mut pulls) = (0.0, 0.0, 0.0);
    for seed in 71..87 {
        let result = compare(&smear_generated(&study, 0, 125.0, 50_000, seed).unwrap(), 0, &template);
        sum += result.chi_square;
        freedom += result.degrees_of_freedom as f64;
        pulls += result.acceptance_pull.powi(2);
    }
    assert!((sum - freedom).abs() < 4.5 * (2.0 * freedom).sqrt(), "{sum} for {freedom}");
    assert!((2.8..51.9).contains(&pulls), "{pulls}");
}

#[test]
fn kolmogorov_probabilities_are_the_tabulated_ones() {
    // Critical values 1.2238 (10 %), 1.3581 (5 %), 1.6276 (1 %): N. Smirnov, Ann. Math. Stat. 19 (1948) 279 (value from
    // memory). Half a unit of their last digit is up to 2.5e-5 in probability.
    for (x, p) in [(1.2238, 0.10), (1.3581, 0.05), (1.6276, 0.01)] {
        assert!((kolmogorov_probability(x) - p).abs() < 3e-5);
    }
}

#[test]
fn every_channel_runs_and_is_reasonable() {
    let at = |study: &Study| study.resonance.masses_gev[0];
    for study in [
        photon_study(),
        electron_study(),
        muon_study(),
        dijet_study(),
        cascade_study(125.0, Object::Muon, Object::Muon),
        cascade_study(200.0, Object::Electron, Object::Muon),
    ] {
        let sample = smear_generated(&study, 0, at(&study), 100_000, 81).unwrap();
        for category in &sample.categories {
            assert!(category.masses_gev.len() > 1000, "{}", study.channels[0].name);
            let mut sorted = category.masses_gev.clone();
            sorted.sort_by(f64::total_cmp);
            let median = sorted[sorted.len() / 2];
            assert!((median / at(&study) - 1.0).abs() < 0.02, "{}: {median}", study.channels[0].name);
        }
    }
}
