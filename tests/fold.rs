//! The folding engine against the plain path, against an exact distribution, and against itself.
//!
//! The plain path (`fold::plain`) shares no code with the engine. 10^6 plain events a channel by default; with
//! `PEAKFOLD_LONG=1` in the environment 2·10^7, which takes some minutes.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod common;

use common::product;
use peakfold::detector::{EtaRange, Object};
use peakfold::fold::{Folded, fold_channel, fold_shifted, plain};
use peakfold::process::{EventSource, Natural, Production, SpectrumCell, Study, Width};
use peakfold::template::Template;

fn plain_events() -> u64 {
    if std::env::var_os("PEAKFOLD_LONG").is_some() { 20_000_000 } else { 1_000_000 }
}

fn fold(study: &Study) -> Folded {
    fold_channel(study, 0, study.resonance.masses_gev[0], &|_| ()).expect("a template")
}

/// Every category of the engine's templates agrees with the plain path: bins, cumulative distribution, acceptance, and
/// what the measurement lost. The templates are made several times more precise than the plain masses are.
fn agrees(study: &Study, seed: u64) {
    let mut study = study.clone();
    if std::env::var_os("PEAKFOLD_LONG").is_some() {
        study.precision /= 4.0;
        study.max_points = 1 << 26;
    } else {
        study.precision = study.precision.max(2e-4);
    }
    let study = &study;
    let folded = fold(study);
    assert!(folded.record.reached, "precision {:e}", folded.record.precision_reached);
    let mass = study.resonance.masses_gev[0];
    let sample = plain::smear_generated(study, 0, mass, plain_events(), seed).expect("plain masses");
    for (index, labelled) in folded.templates.iter().enumerate() {
        let comparison = common::compare::compare(&sample, index, &labelled.template);
        let lost = sample.categories[index].lost_weight / sample.generated_weight;
        // The engine samples the losses of all legs but the last.
        let lost_error = (lost.max(1e-6) * (1.0 / sample.generated as f64 + 3.0 / folded.record.points as f64)).sqrt();
        println!(
            "{} {}: {comparison:?} lost {lost:e} {:e}",
            labelled.channel, labelled.category, labelled.template.lost
        );
        assert!(comparison.agrees(), "{} {}: {comparison:?}", labelled.channel, labelled.category);
        assert!((lost - labelled.template.lost).abs() < 5.0 * lost_error, "lost {lost:e} {:e}", labelled.template.lost);
    }
}

/// Every channel of the demo, at 190 GeV.
#[test]
fn the_demo_agrees_with_plain_smearing() {
    let path = std::path::Path::new(env!("CARGO_MANIFEST_DIR")).join("calib-demo/study.toml");
    let demo = peakfold::files::load_study(&path).expect("the demo").study;
    for (index, channel) in demo.channels.iter().enumerate() {
        let mut study = demo.clone();
        study.resonance.masses_gev = vec![190.0];
        study.channels = vec![channel.clone()];
        study.precision = 2e-4;
        agrees(&study, 40 + index as u64);
    }
}

#[test]
fn two_photons_agree_with_plain_smearing() {
    agrees(&common::photon_study(), 1);
}

#[test]
fn two_electrons_agree_with_plain_smearing() {
    agrees(&common::electron_study(), 2);
}

#[test]
fn two_muons_agree_with_plain_smearing() {
    agrees(&common::muon_study(), 3);
}

#[test]
fn two_jets_agree_with_plain_smearing() {
    agrees(&common::dijet_study(), 4);
}

#[test]
fn four_muons_below_and_above_threshold_agree_with_plain_smearing() {
    for (mass, seed) in [(125.0, 5), (240.0, 6)] {
        let mut study = common::cascade_study(mass, Object::Muon, Object::Muon);
        study.precision = 1e-3;
        agrees(&study, seed);
    }
}

#[test]
fn four_electrons_agree_with_plain_smearing() {
    let mut study = common::cascade_study(170.0, Object::Electron, Object::Electron);
    study.precision = 1e-3;
    agrees(&study, 7);
}

#[test]
fn mixed_leptons_of_a_wide_resonance_agree_with_plain_smearing() {
    let mut study = common::cascade_study(200.0, Object::Electron, Object::Muon);
    study.resonance.width = Width::Relative(0.05);
    study.channels[0].axis.low = 0.6;
    study.channels[0].axis.high = 1.4;
    study.precision = 1e-3;
    agrees(&study, 8);
}

#[test]
fn every_natural_shape_agrees_with_plain_smearing() {
    for (natural, falloff, seed) in
        [(Natural::BreitWigner, 0.0, 9), (Natural::Relativistic, 5.0, 10), (Natural::RunningWidth, 3.0, 11)]
    {
        let mut study = common::gaussian_pair_study(300.0, 0.01, 0.02);
        study.resonance.natural = natural;
        study.resonance.falloff_power = falloff;
        study.resonance.width = Width::Relative(0.05);
        agrees(&study, seed);
    }
}

#[test]
fn a_tabulated_spectrum_agrees_with_plain_smearing() {
    let mut study = common::photon_study();
    let cell = |pt_gev, rapidity, weight| SpectrumCell { pt_gev, rapidity, weight };
    study.resonance.source = EventSource::Generated(Production::Table(vec![
        cell((0.0, 20.0), (-2.0, 0.0), 3.0),
        cell((20.0, 80.0), (0.0, 1.0), 2.0),
        cell((80.0, 300.0), (-1.0, 3.0), 1.0),
    ]));
    agrees(&study, 12);
}

/// Widths of tens of per cent lose events and reach the power tails; the cuts are relative to the mass.
#[test]
fn coarse_responses_lose_events_as_plain_smearing_does() {
    let mut study = common::gaussian_pair_study(100.0, 0.35, 0.3);
    study.channels[0].axis.low = 0.0;
    study.channels[0].axis.high = 2.0;
    study.channels[0].cuts.min_pt_over_mass = vec![0.4, 0.3];
    agrees(&study, 13);
}

/// m = M sqrt((1 + s1 z1)(1 + s2 z2)) exactly, whatever the production: `tests/reference/two_leg_product.csv` (45-digit
/// integrals) gives its density, which `common::product` integrates over bins; `tests/plain.rs` compares the two.
#[test]
fn two_gaussian_legs_agree_with_the_exact_product_to_a_millionth_of_the_peak() {
    for (s1, s2) in [(0.01, 0.01), (0.012, 0.03), (0.05, 0.08)] {
        let mut study = common::at_rest(common::gaussian_pair_study(125.0, s1, s2));
        study.precision = 1e-12;
        study.max_points = 1 << 20;
        let template = &fold(&study).templates[0].template;
        let exact: Vec<f64> = template.edges_gev.iter().map(|m| product::cdf(*m, 125.0, s1, s2)).collect();
        let highest = template.probability.iter().fold(0.0, |a: f64, b| a.max(*b));
        for (bin, pair) in exact.windows(2).enumerate() {
            let difference = (template.probability[bin] - (pair[1] - pair[0])).abs();
            assert!(difference < 1e-6 * highest, "{s1} {s2} bin {bin}: {:e} of the peak", difference / highest);
        }
    }
}

/// Rows of the reference table itself: density in bins so narrow that the density at the centre is the bin's mean up to
/// a curvature term, which is taken from the table's own scale.
#[test]
fn narrow_bins_agree_with_the_reference_table() {
    let text = include_str!("reference/two_leg_product.csv");
    let rows = text.lines().filter(|line| !line.starts_with('#')).skip(1);
    let (mut checked, mut sharp) = (0, 0);
    for row in rows {
        let v: Vec<f64> = row.split(',').map(|word| word.parse().unwrap()).collect();
        let [m, mass, s1, s2, pdf] = v[..] else { panic!("{row}") };
        let mut study = common::at_rest(common::gaussian_pair_study(mass, s1, s2));
        let half = 1e-4 * mass * s1.min(s2);
        study.channels[0].axis.low = m - half;
        study.channels[0].axis.high = m + half;
        study.channels[0].axis.bins = 1;
        study.channels[0].axis.relative = false;
        // One smooth dimension matters, in which the error falls as points^-1.5.
        study.precision = 1e-12;
        study.max_points = 1 << 19;
        let template = &fold(&study).templates[0].template;
        let peak = 1.0 / (mass * 0.5 * s1.hypot(s2) * (2.0 * std::f64::consts::PI).sqrt());
        let density = template.probability[0] / (2.0 * half);
        let error = template.error[0] / (2.0 * half);
        // Far in the tails of wide legs the points converge slowly; the stated error says so.
        assert!(error < 1e-4 * peak && (density - pdf).abs() < 1e-6 * peak + 4.0 * error, "{row}: {density:e}");
        sharp += u32::from(error < 1e-6 * peak);
        checked += 1;
    }
    assert!(sharp >= 40, "{sharp} rows are known to a millionth of the peak");
    assert_eq!(checked, 56);
}

/// sigma_m/m = (sigma1/E1 (+) sigma2/E2 (+) sigma_theta/tan(theta/2))/2 (from m² = 2 E1 E2 (1 - cos theta)) for legs of a
/// resonance at rest, where the last term vanishes; 1.1 % and 2.6 % on both legs at 125 GeV give 0.972 and 2.298 GeV
/// (JINST 8 (2013) P09009 for the leg resolutions, first order). The second order is below 1e-3 of the width.
#[test]
fn monoenergetic_legs_have_the_textbook_width() {
    for (s, sigma) in [(0.011, 0.972), (0.026, 2.298)] {
        let mut study = common::at_rest(common::gaussian_pair_study(125.0, s, s));
        study.precision = 1e-5;
        let template = &fold(&study).templates[0].template;
        let (_, width) = moments(template);
        assert!((width - sigma).abs() < 1.5e-3 * sigma, "{width} {sigma}");
    }
}

/// Mean and standard deviation from the bins, each taken at its centre, less the width of a bin in quadrature.
fn moments(template: &Template) -> (f64, f64) {
    let centres = template.edges_gev.windows(2).map(|edge| 0.5 * (edge[0] + edge[1]));
    let total: f64 = template.probability.iter().sum();
    let rows: Vec<(f64, f64)> = centres.zip(&template.probability).map(|(m, p)| (m, p / total)).collect();
    let mean: f64 = rows.iter().map(|(m, p)| m * p).sum();
    let bin = template.edges_gev[1] - template.edges_gev[0];
    let variance = rows.iter().map(|(m, p)| (m - mean).powi(2) * p).sum::<f64>() - bin * bin / 12.0;
    (mean, variance.sqrt())
}

/// The stated error is honest: over 64 seeds, rms(difference from a 100 times longer run)/rms(stated error) = 1 ± 0.1.
#[test]
fn the_stated_error_is_the_scatter_over_seeds() {
    let mut study = common::photon_study();
    study.precision = 1e-12;
    study.max_points = 1 << 14;
    let runs: Vec<Folded> = (100..164)
        .map(|seed| {
            study.seed = seed;
            fold(&study)
        })
        .collect();
    study.seed = 7;
    study.max_points = 1 << 21;
    let long = fold(&study);
    for category in 0..2 {
        let (mut scatter, mut stated) = (0.0, 0.0);
        for run in &runs {
            let (a, b) = (&run.templates[category].template, &long.templates[category].template);
            for bin in 0..a.probability.len() {
                scatter += (a.probability[bin] - b.probability[bin]).powi(2);
                stated += a.error[bin].powi(2);
            }
        }
        let ratio = (scatter / stated).sqrt();
        println!("category {category}: {ratio}");
        assert!((ratio - 1.0).abs() < 0.1, "category {category}: {ratio}");
    }
}

/// The same bits for any number of threads.
#[test]
fn threads_do_not_change_a_bit() {
    let mut study = common::photon_study();
    study.max_points = 1 << 17;
    let with = |threads| {
        let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap();
        pool.install(|| fold(&study)).templates
    };
    let one = with(1);
    assert_eq!(one, with(2));
    assert_eq!(one, with(3));
}

/// Bins and the parts outside the axis add to 1; the categories share the accepted events.
#[test]
fn probabilities_add_to_one() {
    for study in [common::photon_study(), common::dijet_study()] {
        for labelled in fold(&study).templates {
            let t = labelled.template;
            let sum = t.below_axis + t.above_axis + t.probability.iter().sum::<f64>();
            assert!((sum - 1.0).abs() < 1e-12, "{sum}");
        }
    }
}

/// A leg that nothing measures, or that falls into the gap, is never accepted.
#[test]
fn uncovered_legs_are_not_accepted() {
    let mut study = common::gaussian_pair_study(125.0, 0.01, 0.02);
    study.detector.calorimeters[0].eta = EtaRange { low: 0.0, high: 1.0 };
    study.detector.calorimeters[1].eta = EtaRange { low: 0.5, high: 2.0 };
    study.channels[0].cuts.gap_abs_eta = Some(EtaRange { low: 0.7, high: 0.8 });
    agrees(&study, 14);
}

/// A scale of both legs moves every mass by exactly that factor: on an axis that moves along, the template of the shifted
/// detector at the same points is the nominal one to rounding, while another scrambling differs by the stated error.
#[test]
fn a_shift_at_the_same_points_carries_no_noise() {
    let mut study = common::gaussian_pair_study(125.0, 0.012, 0.03);
    study.max_points = 1 << 12;
    study.precision = 1e-9;
    let nominal = fold(&study);
    let mut shifted = study.detector.clone();
    shifted.calorimeters.iter_mut().for_each(|entry| entry.scale = 0.005);
    let mut moved = study.clone();
    moved.channels[0].axis.low *= 1.005;
    moved.channels[0].axis.high *= 1.005;
    let up = fold_shifted(&moved, &shifted, 0, &nominal.record, &|_| ()).unwrap();
    assert_eq!(up.record.final_points, nominal.record.final_points);
    study.seed = 2;
    let other = fold(&study);
    let (a, b, c) = (&nominal.templates[0].template, &up.templates[0].template, &other.templates[0].template);
    let largest =
        |x: &Template| a.probability.iter().zip(&x.probability).fold(0.0, |most: f64, (p, q)| most.max((p - q).abs()));
    assert!(largest(b) < 1e-10, "{:e}", largest(b));
    assert!(largest(c) > 1e-6, "{:e}", largest(c));
}

/// A constant-term shift changes the width as the quadratic sum says: sigma_m/m = c/sqrt(2) for two equal legs.
#[test]
fn a_shifted_constant_changes_the_width_by_the_quadratic_sum() {
    let mut study = common::at_rest(common::gaussian_pair_study(125.0, 0.01, 0.01));
    study.precision = 1e-4;
    let nominal = fold(&study);
    let mut shifted = study.detector.clone();
    shifted.calorimeters.iter_mut().for_each(|entry| entry.constant = 0.012);
    let up = fold_shifted(&study, &shifted, 0, &nominal.record, &|_| ()).unwrap();
    let ratio = moments(&up.templates[0].template).1 / moments(&nominal.templates[0].template).1;
    // Second-order terms of the mass in the response are below 1e-4 of the width.
    assert!((ratio - 1.2).abs() < 3e-4, "{ratio}");
}
