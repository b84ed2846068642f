//! Simulated samples as mass points, and their comparison with folded templates.
//!
//! The samples come from the plain reference path, which shares nothing with the folding engine, or from the quantile
//! function of a shape. What must be found again was put in.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use peakfold::detector::Object;
use peakfold::fit::Masses;
use peakfold::fold::{fold_channel, plain};
use peakfold::lineshape::{Resolution, Shape};
use peakfold::model::{
    Anchor, AnchorError, BinnedSample, LEAST_ENTRIES, MassModel, ModelPoint, Response, agreement, closure,
    compare_anchor, fit_response, merge_points,
};
use peakfold::process::{ShapeChoice, SimulatedUse, Study};
use peakfold::template::{Measured, Template};
use rand::rngs::StdRng;
use rand::{RngExt, SeedableRng};

/// Largest pull that is taken for a fluctuation.
const PULL: f64 = 4.0;

fn demo() -> Study {
    let path = std::path::Path::new(env!("CARGO_MANIFEST_DIR")).join("calib-demo/study.toml");
    let mut study = peakfold::files::load_study(&path).expect("the demo").study;
    study.channels.retain(|c| c.name == "two-photon");
    study.precision = 5e-4;
    study
}

/// Templates by mass, then category.
fn fold(study: &Study, masses: &[f64]) -> Vec<Vec<Template>> {
    let templates = |&m: &f64| fold_channel(study, 0, m, &|_| ()).expect("a template").templates;
    masses.iter().map(|m| templates(m).into_iter().map(|t| t.template).collect()).collect()
}

/// Anchors of one category from the plain path of a detector, one per mass.
fn anchors(study: &Study, masses: &[f64], folded: &[(f64, &Template)], category: usize, events: u64) -> Vec<Anchor> {
    let shape = study.channels[0].shape;
    masses
        .iter()
        .enumerate()
        .map(|(k, &mass)| {
            let sample = plain::smear_generated(study, 0, mass, events, 77 + k as u64).unwrap();
            let own = &sample.categories[category];
            let masses = Masses::new(own.masses_gev.clone(), Some(own.weights.clone())).unwrap();
            let edges = study.channels[0].axis.edges_gev(mass);
            Anchor::new(&masses, Some(sample.generated_weight), mass, &edges, shape, folded).unwrap()
        })
        .collect()
}

fn pull(what: &str, found: Measured, told: f64) -> f64 {
    let (value, error) = (found.value.expect(what), found.error.expect(what));
    println!("{what}: {value:.6} ± {error:.6}, told {told}");
    assert!(error > 0.0 && error.is_finite(), "{what} {error}");
    (value - told) / error
}

fn near(what: &str, found: Measured, told: f64) {
    let pull = pull(what, found, told);
    assert!(pull.abs() < PULL, "{what}: pull {pull}");
}

fn measured(value: f64, error: f64) -> Measured {
    Measured { value: Some(value), error: Some(error) }
}

#[test]
fn samples_of_the_same_detector_agree_with_the_fold() {
    let study = demo();
    let masses = [150.0, 190.0, 240.0];
    let folded = fold(&study, &masses);
    for category in 0..2 {
        let templates: Vec<(f64, &Template)> =
            masses.iter().zip(&folded).map(|(&m, all)| (m, &all[category])).collect();
        let anchors = anchors(&study, &masses, &templates, category, 400_000);
        let mut pairs = Vec::new();
        for (anchor, &(mass, template)) in anchors.iter().zip(&templates) {
            let response = fit_response(template, mass, study.channels[0].shape).unwrap();
            let row = compare_anchor(anchor, &ModelPoint { template, response: &response }).unwrap();
            near("sigma_eff ratio", row.sigma_eff_ratio, 1.0);
            near("peak shift [MeV]", row.peak_shift_mev, 0.0);
            near("peak shift [sigma_eff]", row.peak_shift_in_sigma_eff, 0.0);
            near("acceptance", row.acceptance_ratio.unwrap(), 1.0);
            // The error of a Gaussian's width is 1/sqrt(2N) and of its mean 1/sqrt(N) of the width; tails make both larger.
            let gaussian = 1.0 / row.effective_entries.sqrt();
            let (ratio, peak) = (row.sigma_eff_ratio.error.unwrap(), row.peak_shift_in_sigma_eff.error.unwrap());
            assert!(ratio > 0.7 * gaussian && ratio < 1.5 * gaussian, "{ratio} {gaussian}");
            assert!(peak > gaussian && peak < 3.0 * gaussian, "{peak} {gaussian}");
            // 2.2 times the mean of Kolmogorov's statistic is exceeded once in 1500 (its distribution, from memory).
            println!("|dCDF| {} expected {}", row.largest_cdf_difference, row.expected_cdf_difference);
            assert!(row.largest_cdf_difference < 2.2 * row.expected_cdf_difference);
            pairs.push((anchor, template));
        }
        let found = agreement(&pairs).unwrap();
        println!("{found:?}");
        near("scale", measured(found.scale, found.scale_error), 0.0);
        near("square", measured(found.squared_smearing, found.squared_smearing_error), 0.0);
        assert!(found.p_value > 1e-3 && found.p_value < 1.0 - 1e-3, "{found:?}");
        assert!(found.chi_square <= found.chi_square_as_folded);
    }
}

/// Gaussian photons; a further constant term c of each photon widens the mass by c/√2 (m² is a product of the energies),
/// and their scale is that of the mass. The smearing goes with m, not M: the difference is far below the errors.
#[test]
fn a_known_constant_term_and_scale_are_found() {
    let mut study = demo();
    for entry in study.detector.calorimeters.iter_mut().filter(|c| c.object == Object::Photon) {
        entry.tail = None;
        entry.bias = 0.0;
    }
    let (term, scale) = (0.009, 0.002);
    let mut worse = study.clone();
    for entry in worse.detector.calorimeters.iter_mut().filter(|c| c.object == Object::Photon) {
        entry.constant = libm::hypot(entry.constant, term);
        entry.scale = scale;
    }
    let masses = [150.0, 210.0];
    for (own, other, sign) in [(&study, &worse, 1.0), (&worse, &study, -1.0)] {
        let folded = fold(own, &masses);
        for category in 0..2 {
            let templates: Vec<(f64, &Template)> =
                masses.iter().zip(&folded).map(|(&m, all)| (m, &all[category])).collect();
            let anchors = anchors(other, &masses, &templates, category, 200_000);
            let pairs: Vec<(&Anchor, &Template)> =
                anchors.iter().zip(&templates).map(|(a, &(_, template))| (a, template)).collect();
            let start = std::time::Instant::now();
            let found = agreement(&pairs).unwrap();
            println!("{:?} {found:?}", start.elapsed());
            // The mean of √((1 + a)(1 + b)) lies term²/4 below 1.
            let second = -0.25 * term * term;
            let told_scale = if sign > 0.0 { scale + second } else { 1.0 / (1.0 + scale) - 1.0 - second };
            near("scale", measured(found.scale, found.scale_error), told_scale);
            let told = sign * 0.5 * term * term;
            if sign > 0.0 {
                near("square", measured(found.squared_smearing, found.squared_smearing_error), told);
            } else {
                // Two fifths of the variance: exact for a Gaussian only.
                assert!((found.squared_smearing / told - 1.0).abs() < 0.2, "{found:?}");
            }
            assert!(found.scale_error < 0.1 * scale && found.squared_smearing_error < 0.2 * told.abs());
            assert_eq!(found.narrower, sign < 0.0);
            assert!(found.chi_square_as_folded > found.chi_square + 100.0);
            if sign > 0.0 {
                assert!(found.p_value > 1e-3, "{found:?}");
                let smearing = measured(found.smearing, found.smearing_error);
                near("smearing", smearing, term * std::f64::consts::FRAC_1_SQRT_2);
            } else {
                assert_eq!(found.smearing, 0.0);
                assert!(found.smearing_error > 0.0);
            }
        }
    }
}

/// The exact template of a shape about a mass, on 100 bins.
fn exact(shape: &Resolution, mass: f64) -> Template {
    let bins = 100;
    let edges: Vec<f64> = (0..=bins).map(|i| mass * (0.93 + 0.13 * f64::from(i) / f64::from(bins))).collect();
    let own: Vec<f64> = edges.iter().map(|e| e - mass).collect();
    let mut probability = vec![0.0; 100];
    shape.bin_probabilities(&own, &mut probability);
    Template {
        probability,
        error: vec![0.0; 100],
        list_error: vec![0.0; 100],
        below_axis: shape.cdf(own[0]),
        above_axis: shape.sf(own[100]),
        edges_gev: edges,
        acceptance: 0.5,
        acceptance_error: 1e-4,
        acceptance_list_error: 0.0,
        efficiency: 0.9,
        efficiency_error: 0.0,
        efficiency_list_error: 0.0,
        lost: 0.0,
        replicates: Vec::new(),
    }
}

fn tailed() -> Resolution {
    Resolution::double_crystal_ball(-0.1, 1.3, (1.3, 4.0), (1.7, 7.0)).unwrap()
}

/// How a sample is weighted; all leave the distribution as it is.
#[derive(Clone, Copy, Debug)]
enum Weights {
    None,
    /// One in six entries counts -1; the others make up for it by their number.
    Signs,
    /// Three times fewer entries above 124.5 GeV, with three times the weight.
    Thinned,
}

fn sample(shape: &Resolution, mass: f64, entries: usize, weights: Weights, rng: &mut StdRng) -> Masses {
    let (mut gev, mut w) = (Vec::new(), Vec::new());
    for _ in 0..entries {
        let m = mass + shape.quantile(rng.random::<f64>());
        let (keep, weight) = match weights {
            Weights::None => (true, 1.0),
            Weights::Signs => (true, if rng.random::<f64>() < 1.0 / 6.0 { -1.0 } else { 1.0 }),
            Weights::Thinned if m > 124.5 => (rng.random::<f64>() < 1.0 / 3.0, 3.0),
            Weights::Thinned => (true, 1.0),
        };
        if keep {
            gev.push(m);
            w.push(weight);
        }
    }
    Masses::new(gev, if matches!(weights, Weights::None) { None } else { Some(w) }).unwrap()
}

/// Errors are what repeated samples scatter by, with any weights.
#[test]
fn errors_are_those_of_repeated_samples() {
    let shape = tailed();
    let (mass, scale, square) = (125.0, 4e-4, 3e-5_f64);
    let folded = exact(&shape, mass);
    let response = fit_response(&folded, mass, ShapeChoice::DoubleCrystalBall).unwrap();
    for weights in [Weights::None, Weights::Signs, Weights::Thinned] {
        let mut rng = StdRng::seed_from_u64(20261);
        let mut pulls: Vec<[f64; 5]> = Vec::new();
        let mut cdf = (0.0, 0.0);
        for _ in 0..30 {
            let one = |masses: &Masses| {
                Anchor::new(masses, None, mass, &folded.edges_gev, ShapeChoice::DoubleCrystalBall, &[(mass, &folded)])
                    .unwrap()
            };
            let plain = one(&sample(&shape, mass, 20_000, weights, &mut rng));
            let row = compare_anchor(&plain, &ModelPoint { template: &folded, response: &response }).unwrap();
            // The fold has no error here, so these are the sample's.
            let ratio = (row.sigma_eff_ratio.value.unwrap() - 1.0) / row.sigma_eff_ratio.error.unwrap();
            let peak = row.peak_shift_mev.value.unwrap() / row.peak_shift_mev.error.unwrap();
            cdf = (cdf.0 + row.largest_cdf_difference, cdf.1 + row.expected_cdf_difference);
            let same = agreement(&[(&plain, &folded)]).unwrap();
            // A smeared and scaled one.
            let smeared = sample(&shape, mass, 20_000, weights, &mut rng);
            let gev = smeared.gev().iter().map(|m| {
                let (u, v): (f64, f64) = (rng.random(), rng.random());
                let z = (-2.0 * libm::log(1.0 - u)).sqrt() * libm::cos(std::f64::consts::TAU * v);
                m * (1.0 + scale) + square.sqrt() * mass * z
            });
            let smeared = Masses::new(gev.collect(), smeared.weights().map(<[f64]>::to_vec)).unwrap();
            let found = agreement(&[(&one(&smeared), &folded)]).unwrap();
            pulls.push([
                ratio,
                peak,
                same.scale / same.scale_error,
                (found.scale - scale) / found.scale_error,
                (found.squared_smearing - square) / found.squared_smearing_error,
            ]);
        }
        let n = pulls.len() as f64;
        for (k, name) in ["sigma_eff", "peak", "scale", "scale found", "smearing found"].iter().enumerate() {
            let mean = pulls.iter().map(|p| p[k]).sum::<f64>() / n;
            let spread = (pulls.iter().map(|p| (p[k] - mean) * (p[k] - mean)).sum::<f64>() / (n - 1.0)).sqrt();
            println!("{weights:?} {name}: mean {mean:.3} spread {spread:.3}");
            // Mean to 0.18, spread to 0.13 at one standard deviation.
            assert!(mean.abs() < 0.6, "{weights:?} {name} {mean}");
            assert!(spread > 0.6 && spread < 1.4, "{weights:?} {name} {spread}");
        }
        println!("{weights:?} mean |dCDF| {} expected {}", cdf.0 / n, cdf.1 / n);
        if !matches!(weights, Weights::Thinned) {
            // Kolmogorov's mean is that of all masses; at the edges of some 40 filled bins it is about a tenth less. The mean
            // of 30 samples scatters by 6 %.
            assert!((cdf.0 / cdf.1 - 0.9).abs() < 0.2, "{} {}", cdf.0 / n, cdf.1 / n);
        }
    }
}

#[test]
fn a_sample_is_binned_with_its_weights() {
    let edges = [100.0, 110.0, 120.0, 130.0];
    let many = |m: f64, count: usize| vec![m; count];
    // Two entries below, the last edge on the axis, one entry above.
    let gev: Vec<f64> = [many(90.0, 2), many(100.0, 500), many(115.0, 900), many(130.0, 100), many(131.0, 1)].concat();
    let weights: Vec<f64> = gev.iter().map(|m| if *m == 115.0 { 2.0 } else { 1.0 }).collect();
    let binned = BinnedSample::new(&Masses::new(gev.clone(), Some(weights.clone())).unwrap(), &edges).unwrap();
    assert_eq!(binned.weight, [500.0, 1800.0, 100.0]);
    assert_eq!(binned.squared_weight, [500.0, 3600.0, 100.0]);
    assert_eq!((binned.below, binned.above, binned.entries), (2.0, 1.0, 1500));
    assert!((binned.effective_entries() - 2400.0 * 2400.0 / 4200.0).abs() < 1e-9);
    assert_eq!(binned.acceptance(4806.0).unwrap().0, 0.5);
    // Weights of 1: the binomial error.
    let ones = BinnedSample::new(&Masses::new(gev, None).unwrap(), &edges).unwrap();
    let (acceptance, error) = ones.acceptance(3006.0).unwrap();
    assert_eq!(acceptance, 0.5);
    assert!((error - (0.25_f64 / 3006.0).sqrt()).abs() < 1e-12);
    assert!(matches!(ones.acceptance(1500.0), Err(AnchorError::Generated { .. })));
}

#[test]
fn samples_that_tell_too_little_are_refused() {
    let folded = exact(&tailed(), 125.0);
    let mut rng = StdRng::seed_from_u64(1);
    let make = |masses: &Masses, folded: &[(f64, &Template)]| {
        let edges = exact(&tailed(), 125.0).edges_gev;
        Anchor::new(masses, None, 125.0, &edges, ShapeChoice::DoubleCrystalBall, folded)
    };
    let few = sample(&tailed(), 125.0, 900, Weights::None, &mut rng);
    let error = make(&few, &[(125.0, &folded)]).unwrap_err();
    assert!(matches!(error, AnchorError::TooFew { .. }), "{error}");
    assert!(error.to_string().contains(&format!("at least {LEAST_ENTRIES}")), "{error}");
    // As many entries as are needed, but not effectively.
    let signs = sample(&tailed(), 125.0, 2000, Weights::Signs, &mut rng);
    assert!(matches!(make(&signs, &[(125.0, &folded)]), Err(AnchorError::TooFew { .. })));
    let negative = Masses::new(vec![125.0; 2000], Some(vec![-1.0; 2000])).unwrap();
    assert!(matches!(make(&negative, &[(125.0, &folded)]), Err(AnchorError::WeightSum(_))));
    // The acceptance is not known beyond the folded masses.
    let good = sample(&tailed(), 125.0, 20_000, Weights::None, &mut rng);
    assert!(matches!(make(&good, &[(120.0, &folded)]), Err(AnchorError::Acceptance(_))));
    assert!(make(&good, &[(120.0, &folded), (130.0, &folded)]).is_ok());
    // Another axis.
    let anchor = make(&good, &[(125.0, &folded)]).unwrap();
    let other = exact(&tailed(), 126.0);
    assert!(agreement(&[(&anchor, &other)]).is_err());
    assert!(agreement(&[]).is_err());
}

/// Anchors in place of folded points, and at a mass of their own.
#[test]
fn a_model_of_folded_and_simulated_points() {
    let shape = |m: f64| Resolution::double_crystal_ball(-1e-3 * m, 0.01 * m, (1.4, 4.0), (1.8, 7.0)).unwrap();
    let masses = [110.0, 120.0, 130.0, 150.0, 160.0];
    let templates: Vec<Template> = masses
        .iter()
        .map(|&m| Template { acceptance: 0.3 + 0.001 * m, efficiency: 0.9 - 0.001 * m, ..exact(&shape(m), m) })
        .collect();
    let choice = ShapeChoice::DoubleCrystalBall;
    let responses: Vec<Response> =
        masses.iter().zip(&templates).map(|(&m, t)| fit_response(t, m, choice).unwrap()).collect();
    let folded: Vec<ModelPoint<'_>> =
        templates.iter().zip(&responses).map(|(template, response)| ModelPoint { template, response }).collect();
    let told: Vec<(f64, &Template)> = masses.iter().copied().zip(&templates).collect();
    let mut rng = StdRng::seed_from_u64(5);
    let anchors: Vec<Anchor> = [140.0, 120.0]
        .into_iter()
        .map(|m| {
            let sample = sample(&shape(m), m, 50_000, Weights::None, &mut rng);
            Anchor::new(&sample, None, m, &exact(&shape(m), m).edges_gev, choice, &told).unwrap()
        })
        .collect();
    // Between 0.43 and 0.45, and between 0.77 and 0.75.
    assert!((anchors[0].template.acceptance - 0.44).abs() < 2e-3 && !anchors[0].own_acceptance);
    assert!((anchors[0].template.efficiency - 0.76).abs() < 1e-3);
    assert_eq!(anchors[1].template.acceptance, 0.42);

    let gev = |points: &[ModelPoint<'_>]| -> Vec<f64> { points.iter().map(|p| p.response.mass_gev).collect() };
    assert_eq!(gev(&merge_points(&folded, &anchors, SimulatedUse::Beside)), masses);
    let points = merge_points(&folded, &anchors, SimulatedUse::Instead);
    assert_eq!(gev(&points), [110.0, 120.0, 130.0, 140.0, 150.0, 160.0]);
    assert_eq!(points[1].template, &anchors[1].template);

    let model = MassModel::fit(&points, None).unwrap();
    assert!(model.converged());
    let at = model.at(135.0, false).unwrap();
    // The statistics of the samples reach the model; the folded templates have no errors here.
    let errors = at.errors();
    for (k, told) in [(0, -0.135), (1, 1.35)] {
        let found = at.resolution.parameters()[k].value;
        println!("{found} ± {} told {told}", errors[k]);
        assert!(errors[k] > 0.0 && (found - told).abs() < PULL * errors[k]);
        // Two samples of 50 000: far better than 1 % of the width.
        assert!(errors[k] < 0.01 * 1.35);
    }
    let closed = closure(&points, &model, false).unwrap();
    for p in &closed.points {
        assert!(p.total.peak_in_sigma_eff.unwrap().abs() < 0.02 || p.mass_gev == 120.0 || p.mass_gev == 140.0, "{p:?}");
        assert!((p.interpolation.sigma_eff_ratio.unwrap() - 1.0).abs() < 0.02, "{p:?}");
        assert!((p.acceptance_ratio - 1.0).abs() < 0.01, "{p:?}");
    }
}
