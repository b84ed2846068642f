//! Calibration shifts: which there are, what they move, and what they do to a template.
//!
//! The references are exact: a scale multiplies the mass, the mass of two Gaussian legs has a known distribution
//! (tests/common/product.rs), a covariance is rebuilt from its axes. All detectors are invented.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod common;

use common::{gaussian_pair_study, photon_study, product};
use nalgebra::DMatrix;
use peakfold::detector::{Detector, Object, Part, TermCovariance, Uncertainty};
use peakfold::fold::{Folded, fold_channel, fold_shifted};
use peakfold::process::{Decay, Study};
use peakfold::shift::{FoldedShift, Nuisance, NuisanceError, Response, Subsets, fold_shift, nuisances};
use peakfold::template::{Cumulative, Template};

fn uncertainty(key: &str, sigma: f64, share: Option<&str>) -> Uncertainty {
    Uncertainty { key: key.into(), sigma, share: share.map(str::to_owned) }
}

fn names(detector: &Detector) -> Vec<String> {
    nuisances(detector).unwrap().into_iter().map(|nuisance| nuisance.name).collect()
}

fn named(detector: &Detector, name: &str) -> Nuisance {
    nuisances(detector).unwrap().into_iter().find(|nuisance| nuisance.name == name).expect("a nuisance of that name")
}

fn fold(study: &Study) -> Folded {
    fold_channel(study, 0, study.resonance.masses_gev[0], &|_| ()).expect("a template")
}

fn shift(study: &Study, nominal: &Folded, name: &str) -> [FoldedShift; 2] {
    let nuisance = named(&study.detector, name);
    fold_shift(study, 0, nominal, &nuisance, &mut Subsets::default()).expect("shifted templates")
}

/// Two photons in the full detector with one scale for all of its photon entries, and more.
fn shifted_photons() -> Study {
    let mut study = photon_study();
    study.precision = 2e-4;
    for entry in &mut study.detector.calorimeters {
        entry.uncertainties = vec![
            uncertainty("scale", 0.002, Some(if entry.object == Object::Photon { "em-scale" } else { "jet-scale" })),
            uncertainty("constant", 0.001, None),
        ];
    }
    study.detector.calorimeters[0].uncertainties.push(uncertainty("fraction", 0.03, None));
    study.detector.calorimeters[0].uncertainties.push(uncertainty("tail.n_low", 0.0, None));
    study.detector.directions[0].uncertainties = vec![uncertainty("sigma_theta_mrad", 0.2, None)];
    study.detector.vertex.as_mut().unwrap().uncertainties = vec![uncertainty("right_choice", 0.05, None)];
    study.detector.trackers[1].uncertainties = vec![uncertainty("scale", 0.001, None)];
    study
}

#[test]
fn nuisances_are_named_by_their_number_or_what_they_share() {
    let study = shifted_photons();
    let expected = [
        "em-scale",
        "photon-central.constant",
        "photon-central.fraction",
        "converted-central.constant",
        "photon-forward.constant",
        "jet-scale",
        "electron-central.constant",
        "electron-forward.constant",
        "jet-central.constant",
        "jet-forward.constant",
        "muon-forward.scale",
        "direction-photon.sigma_theta_mrad",
        "vertex.right_choice",
    ];
    assert_eq!(names(&study.detector), expected);
    assert_eq!(named(&study.detector, "em-scale").moves.len(), 3);
    // Only what concerns a leg: the vertex moves photons and jets, not what has a track.
    let touching = |decay: &Decay| -> Vec<String> {
        let all = nuisances(&study.detector).unwrap().into_iter();
        all.filter(|nuisance| nuisance.touches(&study.detector, decay)).map(|nuisance| nuisance.name).collect()
    };
    assert_eq!(touching(&Decay::Direct(vec![Object::Muon; 2])), ["muon-forward.scale"]);
    let photons = touching(&study.channels[0].decay);
    assert_eq!(photons[..5], expected[..5]);
    assert_eq!(photons[5..], expected[11..]);
}

#[test]
fn a_name_of_two_uncertainties_is_refused() {
    let mut detector = shifted_photons().detector;
    // A shared name that is also the name of a number.
    detector.calorimeters[0].uncertainties[0].share = Some("photon-forward.constant".into());
    let error = nuisances(&detector).unwrap_err();
    assert_eq!(error, NuisanceError::SameName { name: "photon-forward.constant".into() });
}

#[test]
fn what_would_leave_its_domain_is_clipped_and_named() {
    let mut detector = shifted_photons().detector;
    detector.calorimeters[0].constant = 0.0004;
    let constant = named(&detector, "photon-central.constant");
    let (up, down) = (constant.apply(&detector, 1.0), constant.apply(&detector, -1.0));
    assert_eq!((up.detector.calorimeters[0].constant, up.clipped.len()), (0.0014, 0));
    assert_eq!(down.detector.calorimeters[0].constant, 0.0);
    assert_eq!(down.clipped, ["photon-central.constant"]);
    // An open end is approached, not reached: n_low of 3 with an error of 5 goes 99 % of the way to 1.
    detector.calorimeters[1].uncertainties.push(uncertainty("tail.n_low", 5.0, None));
    let power = named(&detector, "converted-central.tail.n_low").apply(&detector, -1.0);
    assert!((power.detector.calorimeters[1].tail.unwrap().n_low - 1.02).abs() < 1e-12);
    assert_eq!(power.clipped, ["converted-central.tail.n_low"]);
}

#[test]
fn the_fractions_of_a_region_still_add_to_1() {
    let detector = shifted_photons().detector;
    let fraction = named(&detector, "photon-central.fraction");
    let moved = fraction.apply(&detector, 1.0);
    assert!((moved.detector.calorimeters[0].fraction - 0.73).abs() < 1e-15);
    assert!((moved.detector.calorimeters[1].fraction - 0.27).abs() < 1e-15);
    let far = fraction.apply(&detector, 12.0);
    assert_eq!((far.detector.calorimeters[0].fraction, far.detector.calorimeters[1].fraction), (1.0, 0.0));
    assert_eq!(far.clipped, ["photon-central.fraction"]);
}

/// All photons scaled by 1 + s multiply the mass by 1 + s, and cuts relative to the mass do not see it:
/// P(m' < (1 + s) m) = P(m < m).
#[test]
fn a_scale_shift_moves_the_mass_by_exactly_that_fraction() {
    let study = shifted_photons();
    let nominal = fold(&study);
    let pair = shift(&study, &nominal, "em-scale");
    for (folded, s) in pair.iter().zip([0.002, -0.002]) {
        for (labelled, (base, shifted)) in folded.templates.iter().zip(&folded.counterparts) {
            let (before, after) = (Cumulative::of(base).unwrap(), Cumulative::of(shifted).unwrap());
            for k in 20..180 {
                let m = base.edges_gev[k];
                // The interpolation between the edges is good to 1e-6 of a probability here.
                let difference = after.at((1.0 + s) * m).unwrap() - before.at(m).unwrap();
                assert!(difference.abs() < 2e-6, "{} at {m}: {difference:e}", labelled.category);
            }
            // The low edge of the axis cuts a tail, so that the acceptance is the only number of both that must not move.
            assert!((shifted.acceptance / base.acceptance - 1.0).abs() < 1e-12);
        }
    }
    for category in 0..2 {
        let response = Response::of(&pair, category).unwrap().unwrap();
        let peak = response.peak.unwrap();
        assert!((peak.linear - 0.002).abs() < 2e-6, "{peak:?}");
        assert!(peak.quadratic.abs() < 2e-6, "{peak:?}");
        assert!((response.sigma_eff.unwrap().linear - 0.002).abs() < 2e-5, "{response:?}");
    }
}

/// The mass of two Gaussian legs, M sqrt((1 + s1 z1)(1 + s2 z2)), has the width M/2 (s1 (+) s2) to first order; the
/// shifted templates are those of the shifted widths.
#[test]
fn a_constant_term_changes_the_width_as_the_quadratic_sum_says() {
    let (s1, s2, by) = (0.010, 0.015, 0.003);
    let mut study = gaussian_pair_study(150.0, s1, s2);
    study.precision = 1e-5;
    study.detector.calorimeters[0].uncertainties = vec![uncertainty("constant", by, None)];
    let nominal = fold(&study);
    let pair = shift(&study, &nominal, "photons.constant");
    for (folded, moved) in pair.iter().zip([s1 + by, s1 - by]) {
        let template = &folded.templates[0].template;
        let mut sum = template.below_axis;
        for (k, p) in template.probability.iter().enumerate() {
            let exact = product::cdf(template.edges_gev[k], 150.0, moved, s2);
            // 1e-5 RMS of the highest bin (9 % of all) over 200 bins is 2e-6 in each of the 40 that have most of it; half of
            // these may err together, for nominal and difference.
            assert!((sum - exact).abs() < 6e-5, "{:?} edge {k}: {sum} {exact}", folded.sign);
            sum += p;
        }
    }
    let width = Response::of(&pair, 0).unwrap().unwrap().sigma_eff.unwrap();
    let relative = |s: f64| ((s * s + s2 * s2) / (s1 * s1 + s2 * s2)).sqrt() - 1.0;
    let (up, down) = (relative(s1 + by), relative(s1 - by));
    // Terms of second order in s: 1e-4 relative.
    assert!((width.linear - 0.5 * (up - down)).abs() < 2e-4 * 0.3, "{width:?} {up} {down}");
    assert!((width.quadratic - 0.5 * (up + down)).abs() < 2e-4 * 0.3, "{width:?} {up} {down}");
}

/// A leading subset plus difference agrees with all points within the error that was aimed at, and is much less work.
#[test]
fn the_subset_agrees_with_all_points() {
    let study = shifted_photons();
    let nominal = fold(&study);
    let mut subsets = Subsets::default();
    let mut points = 0;
    let some = ["em-scale", "photon-forward.constant", "vertex.right_choice"];
    for nuisance in some.map(|name| named(&study.detector, name)) {
        let pair = fold_shift(&study, 0, &nominal, &nuisance, &mut subsets).unwrap();
        for folded in &pair {
            let detector = nuisance.apply(&study.detector, folded.sign.factor()).detector;
            let all = fold_shifted(&study, &detector, 0, &nominal.record, &|_| ()).unwrap();
            assert!(folded.difference_error <= 1e-4);
            for (a, b) in folded.templates.iter().zip(&all.templates) {
                let difference = rms_difference(&a.template, &b.template);
                // Both differences carry their error; 3 of the one aimed at.
                assert!(difference < 3e-4, "{} {}: {difference:e}", a.shift, a.category);
            }
            points += folded.points;
        }
    }
    let per_pair = points as f64 / some.len() as f64 / nominal.record.points as f64;
    println!("points of a pair of shifts over those of the nominal: {per_pair}");
    assert!(per_pair < 1.3, "{per_pair}");
}

fn rms_difference(a: &Template, b: &Template) -> f64 {
    let highest = a.probability.iter().fold(0.0_f64, |x, y| x.max(*y));
    let squares: f64 = a.probability.iter().zip(&b.probability).map(|(a, b)| (a - b) * (a - b)).sum();
    (squares / a.probability.len() as f64).sqrt() / highest
}

/// The nominal template with peak and width moved by the response is the shifted template: |ΔCDF| < 0.003.
#[test]
fn the_parametric_response_reproduces_the_shifted_templates() {
    let study = shifted_photons();
    let nominal = fold(&study);
    for name in ["em-scale", "photon-central.constant", "photon-central.fraction", "vertex.right_choice"] {
        let pair = shift(&study, &nominal, name);
        for category in 0..2 {
            let response = Response::of(&pair, category).unwrap().unwrap();
            let (peak, width) = (response.peak.unwrap(), response.sigma_eff.unwrap());
            assert!(response.misfit.unwrap() < 0.003, "{name} {response:?}");
            for folded in &pair {
                let z = folded.sign.factor();
                let at = |c: peakfold::shift::Coefficients| 1.0 + c.linear * z + c.quadratic * z * z;
                let (base, shifted) = &folded.counterparts[category];
                let before = Cumulative::of(base).unwrap();
                let from = before.peak().unwrap();
                let mut sum = shifted.below_axis;
                for (k, p) in shifted.probability.iter().enumerate() {
                    let back = from + (shifted.edges_gev[k] - from * at(peak)) / at(width);
                    if let Some(expected) = before.at(back) {
                        assert!((sum - expected).abs() < 0.003, "{name} {category} {k}: {sum} {expected}");
                    }
                    sum += p;
                }
            }
        }
    }
}

/// Axes of an invented covariance of a stochastic and a constant term, correlation -0.8.
#[test]
fn the_axes_of_a_covariance_rebuild_it() {
    let mut detector = shifted_photons().detector;
    detector.calorimeters[0].uncertainties.clear();
    let term = |key| detector.term(Part::Calorimeter(0), key).unwrap();
    let (terms, sigma) = (vec![term("stochastic"), term("constant"), term("noise_gev")], [0.005, 0.0012, 0.03]);
    let correlation = [[1.0, -0.8, 0.3], [-0.8, 1.0, -0.1], [0.3, -0.1, 1.0]];
    let matrix = DMatrix::from_fn(3, 3, |i, j| correlation[i][j] * sigma[i] * sigma[j]);
    let covariance = TermCovariance { name: "barrel-terms".into(), terms, matrix: matrix.clone() };
    detector.covariances = vec![covariance.clone()];
    let all = nuisances(&detector).unwrap();
    let axes: Vec<&Nuisance> = all.iter().filter(|n| n.name.starts_with("barrel-terms.axis-")).collect();
    assert_eq!(axes.len(), 3);
    for i in 0..3 {
        for j in 0..3 {
            let rebuilt: f64 = axes
                .iter()
                .map(|axis| {
                    let by = |k: usize| axis.moves.iter().find(|m| m.term == covariance.terms[k]).map_or(0.0, |m| m.by);
                    by(i) * by(j)
                })
                .sum();
            assert!((rebuilt - matrix[(i, j)]).abs() < 1e-14 * sigma[i] * sigma[j] * 10.0, "{i} {j}");
        }
    }
    // numpy.linalg.eigh([[1, -0.8, 0.3], [-0.8, 1, -0.1], [0.3, -0.1, 1]]), NumPy 2.4.6: the largest eigenvalue is
    // 1.8909951445, its vector (0.6910138405, -0.6548035508, 0.3061571199).
    let expected = [0.6910138405, -0.6548035508, 0.3061571199].map(|v: f64| v * 1.8909951445_f64.sqrt());
    for (moved, (v, s)) in axes[0].moves.iter().zip(expected.iter().zip(sigma)) {
        assert!((moved.by / s - v).abs() < 1e-7, "{moved:?} {v}");
    }
}

#[test]
fn what_is_no_covariance_is_refused() {
    let detector = shifted_photons().detector;
    let terms: Vec<_> =
        ["stochastic", "noise_gev"].iter().map(|key| detector.term(Part::Calorimeter(2), key).unwrap()).collect();
    let refused = |entries: [f64; 4]| {
        let matrix = DMatrix::from_row_slice(2, 2, &entries);
        let mut detector = detector.clone();
        detector.covariances = vec![TermCovariance { name: "terms".into(), terms: terms.clone(), matrix }];
        nuisances(&detector).unwrap_err().to_string()
    };
    assert!(refused([1.0, 2.0, 2.0, 1.0]).contains("not positive semi-definite"));
    assert!(refused([-1.0, 0.0, 0.0, 1.0]).contains("not positive semi-definite"));
    assert!(refused([1.0, 0.5, 0.4, 1.0]).contains("not symmetric"));
    assert!(refused([1.0, f64::NAN, 0.4, 1.0]).contains("not finite"));
    let mut wrong_size = detector.clone();
    let matrix = DMatrix::from_row_slice(1, 1, &[1.0]);
    wrong_size.covariances = vec![TermCovariance { name: "terms".into(), terms: terms.clone(), matrix }];
    assert!(nuisances(&wrong_size).unwrap_err().to_string().contains("2 numbers need 2 rows"));
    let mut twice = detector.clone();
    twice.calorimeters[2].uncertainties.push(uncertainty("stochastic", 0.01, None));
    twice.covariances = vec![TermCovariance {
        name: "terms".into(),
        terms,
        matrix: DMatrix::from_row_slice(2, 2, &[1.0, 0.0, 0.0, 1.0]),
    }];
    assert!(nuisances(&twice).unwrap_err().to_string().contains("keep one"));
}
