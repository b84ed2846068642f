//! The fit of shapes to templates, the mass model and the interpolation of quantiles, on templates in closed form.
//!
//! SciPy's values come from `python tests/reference/shape_fit.py`.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use peakfold::lineshape::{Resolution, Shape};
use peakfold::model::{
    MassModel, ModelError, ModelPoint, QuantileError, QuantileInterpolation, Residuals, Response, ResponseError,
    better_shape, closure, fit_response, mass_bias, quantile_closure,
};
use peakfold::process::ShapeChoice;
use peakfold::template::{Replicate, Template};

fn edges(low: f64, high: f64, bins: u32) -> Vec<f64> {
    (0..=bins).map(|i| low + (high - low) * f64::from(i) / f64::from(bins)).collect()
}

/// A template of these probabilities, without errors.
fn template(edges_gev: Vec<f64>, probability: Vec<f64>, below_axis: f64, above_axis: f64) -> Template {
    let bins = probability.len();
    Template {
        edges_gev,
        probability,
        error: vec![0.0; bins],
        list_error: vec![0.0; bins],
        below_axis,
        above_axis,
        acceptance: 0.5,
        acceptance_error: 0.001,
        acceptance_list_error: 0.0,
        efficiency: 0.9,
        efficiency_error: 0.001,
        efficiency_list_error: 0.0,
        lost: 0.0,
        replicates: Vec::new(),
    }
}

/// The exact template of a shape about a mass, on 200 bins from 0.8 to 1.2 of `mass_point`.
fn exact(shape: &Resolution, mass: f64, mass_point: f64) -> Template {
    let edges = edges(0.8 * mass_point, 1.2 * mass_point, 200);
    let own: Vec<f64> = edges.iter().map(|e| e - mass).collect();
    let mut probability = vec![0.0; 200];
    shape.bin_probabilities(&own, &mut probability);
    let (below, above) = (shape.cdf(own[0]), shape.sf(own[200]));
    template(edges, probability, below, above)
}

fn normal(x: f64) -> f64 {
    0.5 * libm::erfc(-x * std::f64::consts::FRAC_1_SQRT_2)
}

/// 0.6 N(125, 1.5) + 0.25 N(124.2, 2.5) + 0.15 N(122, 5), as in `shape_fit.py`.
fn three_gaussians() -> Template {
    let edges = edges(115.0, 135.0, 100);
    let cdf =
        |m: f64| 0.6 * normal((m - 125.0) / 1.5) + 0.25 * normal((m - 124.2) / 2.5) + 0.15 * normal((m - 122.0) / 5.0);
    let probability = edges.windows(2).map(|pair| cdf(pair[1]) - cdf(pair[0])).collect();
    let (below, above) = (cdf(115.0), 1.0 - cdf(135.0));
    template(edges, probability, below, above)
}

fn value(response: &Response, name: &str) -> f64 {
    response.parameters().into_iter().find(|p| p.name == name).unwrap().value
}

#[test]
fn a_shape_is_found_again_in_its_own_template() {
    let shapes = [
        (ShapeChoice::Gaussian, Resolution::gaussian(-0.1, 1.3).unwrap()),
        (ShapeChoice::CrystalBall, Resolution::crystal_ball(-0.1, 1.3, 1.2, 3.0).unwrap()),
        (ShapeChoice::DoubleCrystalBall, Resolution::double_crystal_ball(-0.1, 1.3, (1.2, 3.0), (1.6, 6.0)).unwrap()),
        (
            ShapeChoice::DoubleCrystalBallTwoSigmas,
            Resolution::double_crystal_ball_two_sigmas(0.1, (1.4, 1.2), (1.2, 3.0), (1.6, 6.0)).unwrap(),
        ),
        (ShapeChoice::GaussExp, Resolution::double_gauss_exp(-0.1, 1.3, 1.1, 1.8).unwrap()),
    ];
    for (choice, shape) in shapes {
        let response = fit_response(&exact(&shape, 125.0, 125.0), 125.0, choice).unwrap();
        assert!(response.converged());
        for (found, told) in response.parameters().iter().zip(shape.parameters()) {
            // The weak prior of the tails pulls a power by some 1e-4.
            let tolerance = if told.name.starts_with("n_") { 2e-3 } else { 2e-4 };
            assert!((found.value - told.value).abs() < tolerance * (1.0 + told.value.abs()), "{choice:?} {found:?}");
        }
        assert!(response.largest_cdf_difference < 1e-6, "{choice:?} {:e}", response.largest_cdf_difference);
        assert!(better_shape(&exact(&shape, 125.0, 125.0), &response).is_none_or(|r| r.largest_cdf_difference < 1e-6));
    }
}

#[test]
fn the_fit_agrees_with_scipy() {
    let template = three_gaussians();
    let response = fit_response(&template, 125.0, ShapeChoice::DoubleCrystalBall).unwrap();
    for (name, told) in [
        ("bias", 124.87486898128554 - 125.0),
        ("sigma", 1.7164754657648083),
        ("alpha_low", 1.2202750530061222),
        ("n_low", 2.8243269053863465),
        ("alpha_high", 1.7998812224787264),
        ("n_high", 5.035506842877634),
    ] {
        // What the prior of weight 1e-6 moves: the tails by up to 1e-3, the core by 3e-5.
        let tolerance = if name.contains('_') { 1e-3 } else { 3e-5 };
        assert!((value(&response, name) - told).abs() < tolerance, "{name} {}", value(&response, name));
    }
    assert!((response.divergence - 0.00010819760198915916).abs() < 1e-10, "{}", response.divergence);
    assert!((response.largest_cdf_difference - 0.0016100727348072243).abs() < 1e-6);

    let gaussian = fit_response(&template, 125.0, ShapeChoice::Gaussian).unwrap();
    assert!((value(&gaussian, "bias") - (124.4837648005024 - 125.0)).abs() < 1e-6);
    assert!((value(&gaussian, "sigma") - 2.4541653786090563).abs() < 1e-6);
    // A Gaussian is a bad shape here, and the one named instead is better.
    let better = better_shape(&template, &gaussian).expect("a better shape");
    assert!(better.largest_cdf_difference < 0.1 * gaussian.largest_cdf_difference);
}

/// Scramblings of a template: a smooth deviation of random size each. The errors by one Newton step must be those of
/// refitting every one of them.
#[test]
fn errors_from_scramblings_are_those_of_refits() {
    let shape = Resolution::double_crystal_ball(-0.1, 1.3, (1.2, 3.0), (1.6, 6.0)).unwrap();
    let mut whole = exact(&shape, 125.0, 125.0);
    let count = 16;
    for r in 0..count {
        let probability: Vec<f64> = whole
            .probability
            .iter()
            .enumerate()
            .map(|(i, p)| {
                let phase = 0.37 * (r * (i % 7 + 1)) as f64 + 0.11 * (i * r) as f64;
                p * (1.0 + 2e-3 * libm::sin(phase))
            })
            .collect();
        let (below_axis, above_axis) = (whole.below_axis, whole.above_axis);
        whole.replicates.push(Replicate { probability, below_axis, above_axis, acceptance: 0.5 });
    }
    let bins = whole.probability.len();
    whole.probability =
        (0..bins).map(|i| whole.replicates.iter().map(|r| r.probability[i]).sum::<f64>() / count as f64).collect();
    let response = fit_response(&whole, 125.0, ShapeChoice::DoubleCrystalBall).unwrap();
    let refits: Vec<Vec<f64>> = whole
        .replicates
        .iter()
        .map(|r| {
            let one = Template { probability: r.probability.clone(), replicates: Vec::new(), ..whole.clone() };
            let fit = fit_response(&one, 125.0, ShapeChoice::DoubleCrystalBall).unwrap();
            fit.parameters().iter().map(|p| p.value).collect()
        })
        .collect();
    for (k, error) in response.errors().unwrap().into_iter().enumerate() {
        let values: Vec<f64> = refits.iter().map(|v| v[k]).collect();
        let mean = values.iter().sum::<f64>() / count as f64;
        let slow = (values.iter().map(|v| (v - mean) * (v - mean)).sum::<f64>() / (count * (count - 1)) as f64).sqrt();
        assert!((error / slow - 1.0).abs() < 0.05, "parameter {k}: {error:e} {slow:e}");
    }

    // Without scramblings, from independent errors of the bins: the mean of a Gaussian has the error
    // sqrt(sum (m - mean)² error²), for it is linear in the bins.
    let gaussian = Resolution::gaussian(0.0, 1.3).unwrap();
    let mut bare = exact(&gaussian, 125.0, 125.0);
    bare.error = bare.probability.iter().map(|p| 1e-3 * p.sqrt()).collect();
    let response = fit_response(&bare, 125.0, ShapeChoice::Gaussian).unwrap();
    let squares: f64 = bare
        .edges_gev
        .windows(2)
        .zip(&bare.error)
        .map(|(pair, e)| {
            let d = (0.5 * (pair[0] + pair[1]) - 125.0) * e;
            d * d
        })
        .sum();
    assert!((response.errors().unwrap()[0] / squares.sqrt() - 1.0).abs() < 0.01);
}

#[test]
fn negative_bins_are_taken_up_to_a_bound() {
    let shape = Resolution::double_crystal_ball(-0.1, 1.3, (1.2, 3.0), (1.6, 6.0)).unwrap();
    let mut noisy = exact(&shape, 125.0, 125.0);
    for i in (0..40).step_by(2) {
        let moved = 1.2 * noisy.probability[i];
        noisy.probability[i] -= moved;
        noisy.probability[i + 1] += moved;
    }
    assert!(noisy.probability.iter().any(|p| *p < 0.0));
    let response = fit_response(&noisy, 125.0, ShapeChoice::DoubleCrystalBall).unwrap();
    assert!(response.converged());
    assert!((value(&response, "sigma") - 1.3).abs() < 0.01);
    noisy.probability[3] = -0.02;
    let refused = fit_response(&noisy, 125.0, ShapeChoice::DoubleCrystalBall);
    assert!(matches!(refused, Err(ResponseError::Negative(part)) if part > 0.01), "{refused:?}");
}

#[test]
fn what_is_no_template_is_refused() {
    let good = three_gaussians();
    let fit = |t: &Template| fit_response(t, 125.0, ShapeChoice::DoubleCrystalBall);
    let empty = Template { probability: vec![0.0; 100], ..good.clone() };
    assert!(matches!(fit(&empty), Err(ResponseError::Empty(_))));
    let short = Template { error: vec![0.0; 3], ..good.clone() };
    assert!(matches!(fit(&short), Err(ResponseError::Incomplete { .. })));
    let nan = Template { probability: vec![f64::NAN; 100], ..good.clone() };
    assert!(matches!(fit(&nan), Err(ResponseError::Empty(_))));
    let mut spike = Template { probability: vec![0.0; 100], ..good.clone() };
    spike.probability[50] = 1.0;
    assert!(matches!(fit(&spike), Err(ResponseError::TooFewBins { .. })));
    assert!(matches!(fit_response(&good, f64::NAN, ShapeChoice::Gaussian), Err(ResponseError::Mass(_))));
}

/// A family whose parameters are polynomials of the mass in the coordinates of the model.
fn family(mass: f64) -> Resolution {
    let u = (mass - 160.0) / 40.0;
    let sigma = mass * 0.011 * libm::exp(-0.15 * u + 0.03 * u * u);
    let alpha = 1.3 * libm::exp(0.05 * u);
    Resolution::double_crystal_ball(mass * (-0.001 + 0.0002 * u), sigma, (alpha, 4.0), (1.7, 7.0)).unwrap()
}

fn responses(masses: &[f64], templates: &[Template]) -> Vec<Response> {
    let fit = |(m, t): (&f64, &Template)| fit_response(t, *m, ShapeChoice::DoubleCrystalBall).unwrap();
    masses.iter().zip(templates).map(fit).collect()
}

fn points<'a>(templates: &'a [Template], responses: &'a [Response]) -> Vec<ModelPoint<'a>> {
    templates.iter().zip(responses).map(|(template, response)| ModelPoint { template, response }).collect()
}

#[test]
fn a_smooth_family_is_found_again_between_its_masses() {
    let masses = [120.0, 140.0, 160.0, 180.0, 200.0];
    let templates: Vec<Template> = masses.iter().map(|&m| exact(&family(m), m, m)).collect();
    let responses = responses(&masses, &templates);
    let points = points(&templates, &responses);
    let model = MassModel::fit(&points, None).unwrap();
    assert!(model.converged());
    assert_eq!(model.clone().checked().unwrap(), model);
    for mass in [125.0, 151.0, 193.0] {
        let told = family(mass);
        let found = model.at(mass, false).unwrap();
        for (a, b) in found.resolution.parameters().iter().zip(told.parameters()) {
            let scale = if a.name == "bias" { told.sigmas().0 } else { b.value };
            let tolerance = if a.name.starts_with("n_") { 5e-3 } else { 5e-4 };
            assert!((a.value - b.value).abs() < tolerance * scale, "{mass} {a:?} {b:?}");
        }
        assert!((found.acceptance - 0.5).abs() < 1e-9 && found.acceptance_error > 0.0);
        assert!((found.efficiency - 0.9).abs() < 1e-9 && found.efficiency_error > 0.0);
        let truth = exact(&told, mass, mass);
        let template = found.template(&truth.edges_gev).unwrap();
        let worst = template.probability.iter().zip(&truth.probability).map(|(a, b)| (a - b).abs()).fold(0.0, f64::max);
        assert!(worst < 1e-5, "{worst:e}");
        let whole: f64 = template.probability.iter().sum();
        assert!((whole + template.below_axis + template.above_axis - 1.0).abs() < 1e-12);
    }
    let largest = closure(&points, &model, false).unwrap().largest();
    assert!(largest.cdf < 2e-4 && largest.sigma_eff_relative < 5e-4, "{largest:?}");

    // At a mass point the residuals give back the template, parts off the axis included.
    let pairs: Vec<(f64, &Template)> = masses.iter().copied().zip(&templates).collect();
    let residuals = Residuals::new(&model, &pairs).unwrap();
    let again = residuals.template(&model.at(160.0, false).unwrap(), &templates[2].edges_gev).unwrap();
    assert!(again.probability.iter().zip(&templates[2].probability).all(|(a, b)| (a - b).abs() < 1e-14));
    assert!((again.below_axis - templates[2].below_axis).abs() < 1e-14);

    for (mass, expected) in [(119.0, "outside"), (201.0, "outside"), (f64::NAN, "the mass is")] {
        let refused = model.at(mass, false).unwrap_err();
        assert!(refused.to_string().contains(expected), "{refused}");
    }
    assert!(model.at(201.0, true).unwrap().extrapolated && !model.at(160.0, true).unwrap().extrapolated);
}

#[test]
fn two_masses_make_a_linear_model_and_one_makes_none() {
    let masses = [150.0, 170.0];
    let templates: Vec<Template> = masses.iter().map(|&m| exact(&family(m), m, m)).collect();
    let responses = responses(&masses, &templates);
    let both = points(&templates, &responses);
    let model = MassModel::fit(&both, None).unwrap();
    assert!(model.bases().iter().all(|b| b.order == 1 && !b.hinge));
    for (mass, template) in masses.iter().zip(&templates) {
        let found = model.at(*mass, false).unwrap().template(&template.edges_gev).unwrap();
        assert!(found.probability.iter().zip(&template.probability).all(|(a, b)| (a - b).abs() < 1e-6));
    }
    assert!(closure(&both, &model, false).unwrap_err().to_string().contains("3 are needed"));
    assert!(matches!(MassModel::fit(&both[..1], None), Err(ModelError::TooFewMasses(1))));
    assert!(matches!(MassModel::fit(&[both[1], both[0]], None), Err(ModelError::Order(170.0, 150.0))));
    let mut broken = model.clone();
    broken.covariance[(0, 1)] += 1.0;
    assert!(matches!(broken.checked(), Err(ModelError::Inconsistent(_))));
}

/// The template of a resonance 5 MeV above its mass point is a bias of 5 MeV for a model that knows nothing of it, and the
/// error of the mass is that of `shape_fit.py`.
#[test]
fn a_moved_template_is_a_mass_bias_of_its_move() {
    let gaussian = |mass: f64| Resolution::gaussian(0.0, 0.0128 * mass).unwrap();
    let masses = [115.0, 120.0, 125.0, 130.0, 135.0];
    let on_axis = |mass: f64, peak: f64, low: f64, high: f64| {
        let edges = edges(low, high, 100);
        let own: Vec<f64> = edges.iter().map(|e| e - peak).collect();
        let mut probability = vec![0.0; 100];
        gaussian(mass).bin_probabilities(&own, &mut probability);
        template(edges, probability, 0.0, 0.0)
    };
    let templates: Vec<Template> = masses.iter().map(|&m| on_axis(m, m, m - 10.0, m + 10.0)).collect();
    let fits: Vec<Response> =
        masses.iter().zip(&templates).map(|(&m, t)| fit_response(t, m, ShapeChoice::Gaussian).unwrap()).collect();
    let model = MassModel::fit(&points(&templates, &fits), None).unwrap();
    let mut moved = templates.clone();
    moved[2] = on_axis(125.005, 125.005, 115.0, 135.0);
    let bias = mass_bias(&points(&moved, &fits), &model, 2).unwrap();
    assert!((bias.bias_mev - 5.0).abs() < 0.01, "{bias:?}");
    // Left out, the others alone tell the model.
    assert!((bias.bias_left_out_mev.unwrap() - 5.0).abs() < 0.01, "{bias:?}");
    assert!((bias.error_of_one_event_mev / 2809.0589658897644 - 1.0).abs() < 1e-3, "{bias:?}");
    let events = bias.events_at_half_error();
    assert!((2.0 * bias.bias_mev - bias.error_of_one_event_mev / events.sqrt()).abs() < 1e-9);
    assert!(mass_bias(&points(&moved, &fits), &model, 0).unwrap().bias_left_out_mev.is_none());
}

fn gaussian_template(mass: f64, sigma: f64, low: f64, high: f64, bins: u32) -> Template {
    let edges = edges(low, high, bins);
    let sums: Vec<f64> = edges.iter().map(|e| normal((e - mass) / sigma)).collect();
    let probability = sums.windows(2).map(|pair| pair[1] - pair[0]).collect();
    template(edges, probability, sums[0], 1.0 - sums[sums.len() - 1])
}

/// N(120, 1.5) and N(130, 1.8) at their middle are N(125, 1.65), whose quantile at 0.9 is 127.1145600831486
/// (`scipy.stats.norm(125, 1.65).ppf(0.9)`).
#[test]
fn quantiles_of_a_location_scale_family_are_exact() {
    let (one, two) =
        (gaussian_template(120.0, 1.5, 90.0, 150.0, 600), gaussian_template(130.0, 1.8, 100.0, 160.0, 600));
    let interpolation = QuantileInterpolation::new(&[(120.0, &one), (130.0, &two)]).unwrap();
    let quantile = interpolation.quantile(125.0, 0.9, false).unwrap();
    // The running sum between bin edges is a cubic: 1e-6 of a width of 15 bins.
    assert!((quantile - 127.1145600831486).abs() < 2e-6, "{quantile}");
    for (mass, sigma) in [(120.0, 1.5), (123.0, 1.59), (125.0, 1.65), (130.0, 1.8)] {
        let told = gaussian_template(mass, sigma, mass - 10.0, mass + 12.0, 110);
        let found = interpolation.template(mass, &told.edges_gev, false).unwrap();
        for (a, b) in found.probability.iter().zip(&told.probability) {
            assert!((a - b).abs() < 1e-6, "{mass}: {a:e} {b:e}");
        }
        let whole: f64 = found.probability.iter().sum();
        assert!((whole + found.below_axis + found.above_axis - 1.0).abs() < 1e-12);
    }
    // Beyond the templates.
    assert!(matches!(interpolation.template(131.0, &one.edges_gev, false), Err(QuantileError::Outside { .. })));
    let told = gaussian_template(131.0, 1.83, 120.0, 142.0, 110);
    let found = interpolation.template(131.0, &told.edges_gev, true).unwrap();
    assert!(found.extrapolated);
    assert!(found.probability.iter().zip(&told.probability).all(|(a, b)| (a - b).abs() < 1e-6));
}

#[test]
fn an_axis_that_cuts_the_template_loses_nothing() {
    // A third of each template is below its axis, which moves with the mass as the template does.
    let cut = |mass: f64, sigma: f64| gaussian_template(mass, sigma, mass - 0.4 * sigma, mass + 6.0 * sigma, 200);
    let (one, middle, two) = (cut(120.0, 1.5), cut(125.0, 1.65), cut(130.0, 1.8));
    let interpolation = QuantileInterpolation::new(&[(120.0, &one), (130.0, &two)]).unwrap();
    let found = interpolation.template(125.0, &middle.edges_gev, false).unwrap();
    assert!((found.below_axis - normal(-0.4)).abs() < 1e-9, "{}", found.below_axis);
    assert!(found.probability.iter().zip(&middle.probability).all(|(a, b)| (a - b).abs() < 1e-7));
    let rows = quantile_closure(&[(120.0, &one), (125.0, &middle), (130.0, &two)], None).unwrap();
    assert!(rows.largest().cdf < 1e-6 && rows.rms().acceptance_relative < 1e-9);
}

#[test]
fn templates_without_quantiles_are_refused() {
    let good = gaussian_template(120.0, 1.5, 110.0, 130.0, 100);
    let mut bad = gaussian_template(130.0, 1.5, 120.0, 140.0, 100);
    bad.probability[2] = -0.001;
    assert!(matches!(
        QuantileInterpolation::new(&[(120.0, &good), (130.0, &bad)]),
        Err(QuantileError::NotMonotone(130.0))
    ));
    assert!(matches!(QuantileInterpolation::new(&[(120.0, &good)]), Err(QuantileError::Masses)));
}
