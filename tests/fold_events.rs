//! Folds of events read from a file: against the plain path, against the truth, and what is told of them.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod common;
mod lhe_support;

use peakfold::detector::{EtaRange, Object};
use peakfold::events::{EventBatch, Selector};
use peakfold::events::{EventFile, Options};
use peakfold::fold::{FoldError, Folded, fold_channel, plain};
use peakfold::kinematics::TruthEvent;
use peakfold::process::{Decay, EventList, EventSource, MassAxis, Study};
use std::path::{Path, PathBuf};

/// 200 events of `dilepton_events.lhe.gz` (open test data from scikit-hep-testdata, BSD-3).
fn extract() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/dilepton_200.lhe.gz")
}

/// All 10 000 events, where they are at hand: `PEAKFOLD_SHARED_DATA` or `../shared/data`.
fn whole() -> Option<PathBuf> {
    let folder = std::env::var_os("PEAKFOLD_SHARED_DATA")
        .map_or_else(|| Path::new(env!("CARGO_MANIFEST_DIR")).join("../shared/data"), PathBuf::from);
    let path = folder.join("dilepton_events.lhe.gz");
    path.is_file().then_some(path)
}

/// Unbiased Gaussian responses of about 1.5 %, no cuts but the detector's reach, an axis around the Z mass.
fn study(object: Object, path: &Path) -> Study {
    let mut detector = common::empty_detector();
    let reach = EtaRange { low: 0.0, high: 4.0 };
    detector.calorimeters = vec![common::calorimeter("calorimeter", Object::Electron, reach, 0.015)];
    detector.trackers = vec![common::tracker("tracker", Object::Muon, reach, 2e-4, 0.012)];
    let mut channel = common::channel("pair", Decay::Direct(vec![object; 2]));
    channel.axis = MassAxis { low: 70.0, high: 110.0, bins: 160, relative: false };
    let mut study = common::study(detector, 91.188, channel);
    study.resonance.source = EventSource::File(EventList { path: path.to_path_buf(), weight: None });
    study.precision = 1e-3;
    study
}

fn fold(study: &Study) -> Folded {
    fold_channel(study, 0, 91.188, &|_| ()).expect("a template")
}

/// The truth events of the channel, as the reader picks them.
fn truth(study: &Study, path: &Path) -> Vec<TruthEvent> {
    let selector = Selector::new(&study.channels[0].decay, 91.188).unwrap();
    let mut file = EventFile::open(path, &Options::default()).unwrap();
    let (mut batch, mut events) = (EventBatch::default(), Vec::new());
    while file.next_batch(&mut batch).unwrap() {
        events.extend(batch.events().filter_map(|event| selector.select(&event).ok()));
    }
    events
}

/// Where the running sum of weighted entries reaches half of its end.
fn median(mut entries: Vec<(f64, f64)>) -> f64 {
    entries.sort_by(|a, b| a.0.total_cmp(&b.0));
    let total: f64 = entries.iter().map(|(_, w)| w).sum();
    let mut sum = 0.0;
    for (value, weight) in entries {
        sum += weight;
        if sum >= 0.5 * total {
            return value;
        }
    }
    f64::NAN
}

/// The same list smeared plainly, 4000 times an event.
#[test]
fn a_short_list_agrees_with_plain_smearing_of_the_same_events() {
    for object in [Object::Electron, Object::Muon] {
        let study = study(object, &extract());
        let folded = fold(&study);
        let events = truth(&study, &extract());
        assert_eq!(folded.record.events_used, Some(events.len() as u64));
        assert!(events.iter().any(|event| event.weight < 0.0), "the extract has negative weights");
        let sample = plain::smear_events(&study, 0, &events, 4000, 3).expect("plain masses");
        let template = &folded.templates[0].template;
        // Smearings of one list scatter less than independent events: the bound is that of the smearing alone, from
        // bins summed to 16 wide ones.
        let mut counts = [0.0; 16];
        let mut squares = [0.0; 16];
        for (mass, weight) in sample.categories[0].masses_gev.iter().zip(&sample.categories[0].weights) {
            let bin = ((mass - 70.0) / 2.5).floor();
            if (0.0..16.0).contains(&bin) {
                counts[bin as usize] += weight;
                squares[bin as usize] += weight * weight;
            }
        }
        let accepted: f64 = sample.categories[0].weights.iter().sum();
        for (bin, count) in counts.iter().enumerate() {
            let told: f64 = template.probability[10 * bin..10 * bin + 10].iter().sum();
            let error = squares[bin].sqrt() / accepted + template.error[10 * bin..10 * bin + 10].iter().sum::<f64>();
            assert!(
                (count / accepted - told).abs() < 4.5 * error,
                "{object} bin {bin}: {} {told} {error}",
                count / accepted
            );
        }
        let acceptance = accepted / sample.generated_weight;
        assert!((acceptance - template.acceptance).abs() < 2e-3, "{acceptance} {}", template.acceptance);
    }
}

/// With the demo's detector freed of its biases and tails, the median of the template is the median of the accepted truth
/// masses on the same axis, to 0.1 %; events are counted, and fewer are effective where weights are negative.
#[test]
fn all_events_keep_the_median_of_the_truth() {
    let Some(path) = whole() else {
        println!("skipped: dilepton_events.lhe.gz is not at hand");
        return;
    };
    let demo = Path::new(env!("CARGO_MANIFEST_DIR")).join("calib-demo/detector.toml");
    let mut detector = peakfold::files::load_detector(&demo).expect("the demo's detector").detector;
    for entry in &mut detector.calorimeters {
        entry.bias = 0.0;
        entry.tail = None;
    }
    for (object, used) in [(Object::Electron, 4966), (Object::Muon, 5033)] {
        let mut study = study(object, &path);
        study.detector = detector.clone();
        study.channels[0].cuts.max_abs_eta = Some(2.4);
        let folded = fold(&study);
        assert_eq!(folded.record.events_used, Some(used), "counted by tests/interop/lhe_read.py");
        let skipped: u64 = folded.record.events_skipped.iter().map(|(_, count)| count).sum();
        assert_eq!(used + skipped, 10_000);
        assert!(folded.record.reached);
        // All weights have the same size: (n+ - n-)²/n events count.
        assert!(folded.record.events_effective.unwrap() < used as f64);
        let reach = libm::sinh(2.4);
        let accepted = truth(&study, &path).into_iter().filter(|event| {
            event.legs[..2].iter().all(|leg| leg.pz_gev.abs() < reach * leg.px_gev.hypot(leg.py_gev))
                && (70.0..110.0).contains(&event.mass_gev)
        });
        let truth_median = median(accepted.map(|event| (event.mass_gev, event.weight)).collect());
        let template = &folded.templates[0].template;
        let half = 0.5 * template.probability.iter().sum::<f64>();
        let mut below = 0.0;
        let bin = template.probability.iter().position(|p| {
            below += p;
            below >= half
        });
        let bin = bin.unwrap();
        let inside = 1.0 - (below - half) / template.probability[bin];
        let folded_median = template.edges_gev[bin] + inside * (template.edges_gev[bin + 1] - template.edges_gev[bin]);
        assert!((folded_median / truth_median - 1.0).abs() < 1e-3, "{object}: {folded_median} {truth_median}");
        let list: f64 = template.list_error.iter().zip(&template.error).map(|(a, b)| a / b.max(1e-300)).sum();
        assert!(list / 160.0 > 3.0, "the list dominates the error");
    }
}

/// The error of the list by the formula for a ratio of sums, p = sum q/sum a: variance sum (q - p a)²/(sum a)² (standard
/// error propagation), with each event's share q of a bin and accepted weight a from 20 000 plain smearings of it.
#[test]
fn the_error_of_the_list_is_that_of_a_ratio_of_sums() {
    let mut study = study(Object::Muon, &extract());
    study.channels[0].axis.bins = 16;
    let template = &fold(&study).templates[0].template;
    let mut shares = Vec::new();
    for (index, event) in truth(&study, &extract()).iter().enumerate() {
        let sample = plain::smear_events(&study, 0, &[*event], 20_000, index as u64).unwrap();
        let mut share = [0.0; 17];
        for (mass, weight) in sample.categories[0].masses_gev.iter().zip(&sample.categories[0].weights) {
            let bin = ((mass - 70.0) / 2.5).floor();
            if (0.0..16.0).contains(&bin) {
                share[bin as usize] += weight / 20_000.0;
            }
            share[16] += weight / 20_000.0;
        }
        shares.push(share);
    }
    let accepted: f64 = shares.iter().map(|share| share[16]).sum();
    for bin in 0..16 {
        let p = shares.iter().map(|share| share[bin]).sum::<f64>() / accepted;
        let error = shares.iter().map(|share| (share[bin] - p * share[16]).powi(2)).sum::<f64>().sqrt() / accepted;
        // 20 000 smearings know a share of a few per cent to a few per cent of itself.
        let difference = (template.list_error[bin] - error).abs();
        assert!(difference < 0.05 * error + 1e-4, "bin {bin}: {} {error}", template.list_error[bin]);
    }
}

#[test]
fn a_file_without_the_channel_is_told_with_reasons() {
    let error = fold_channel(&study(Object::Photon, &extract()), 0, 91.188, &|_| ()).unwrap_err();
    assert!(matches!(error, FoldError::Events(_)), "{error}");
    assert!(error.to_string().contains("no event serves channel `pair`"), "{error}");
    assert!(error.to_string().contains("dilepton_200.lhe.gz"), "{error}");
    let gone = fold_channel(&study(Object::Muon, Path::new("gone.lhe")), 0, 91.188, &|_| ()).unwrap_err();
    assert!(matches!(gone, FoldError::Events(_)), "{gone}");
}

#[test]
fn threads_do_not_change_a_bit() {
    let study = study(Object::Electron, &extract());
    let with = |threads| {
        let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap();
        pool.install(|| fold(&study)).templates
    };
    assert_eq!(with(1), with(3));
}

/// The extract with every event written `copies` times, in one group or not, and all of it `repeats` times.
fn copied(copies: usize, grouped: bool, repeats: usize) -> tempfile::NamedTempFile {
    let text = lhe_support::extract();
    let start = text.find("  <event").unwrap();
    let events = text[start..].strip_suffix("</LesHouchesEvents>\n").unwrap();
    let (open, close) = if grouped { ("<eventgroup>\n", "</eventgroup>\n") } else { ("", "") };
    let once: String =
        events.split_inclusive("</event>\n").map(|event| format!("{open}{}{close}", event.repeat(copies))).collect();
    let file = tempfile::NamedTempFile::new().unwrap();
    let whole = format!("{}{}</LesHouchesEvents>\n", &text[..start], once.repeat(repeats));
    std::fs::write(file.path(), whole).unwrap();
    file
}

/// Events of one group are fully correlated here: copies of one event know no more than the event. As independent events they
/// would seem to know sqrt(copies) times more (standard error propagation).
#[test]
fn a_group_of_events_counts_as_one() {
    // 1500 used events in groups of 3 straddle the batches of 512; 200 would not.
    for (copies, repeats) in [(2, 1), (3, 5)] {
        let fold_of = |copies: usize, grouped: bool| {
            let file = copied(copies, grouped, repeats);
            let mut study = study(Object::Muon, file.path());
            study.channels[0].axis.bins = 16;
            study.precision = 1e-4;
            let folded = fold(&study);
            let one = rayon::ThreadPoolBuilder::new().num_threads(1).build().unwrap();
            assert_eq!(one.install(|| fold(&study)).templates, folded.templates);
            folded
        };
        let (single, group, loose) = (fold_of(1, false), fold_of(copies, true), fold_of(copies, false));
        let n = copies as f64;
        let [a, b, c] = [&single, &group, &loose].map(|folded| &folded.templates[0].template);
        let close = |x: f64, y: f64| (x - y).abs() < 1e-3 * x.abs().max(0.01);
        assert!(close(a.acceptance_list_error, b.acceptance_list_error));
        assert!(close(a.acceptance_list_error, c.acceptance_list_error * n.sqrt()));
        let mut compared = 0;
        for bin in 0..16 {
            let numerical = 5.0 * (a.error[bin] + b.error[bin]) + 1e-12;
            assert!((a.probability[bin] - b.probability[bin]).abs() < numerical, "{bin}");
            // What an event gives to a bin far from its own mass is known from few points only.
            if a.probability[bin] > 0.01 {
                let ratio = b.list_error[bin] / a.list_error[bin];
                assert!((ratio - 1.0).abs() < 0.02, "bin {bin}: {ratio}");
                let ratio = a.list_error[bin] / c.list_error[bin] / n.sqrt();
                assert!((ratio - 1.0).abs() < 0.02, "bin {bin}: {ratio}");
                compared += 1;
            }
        }
        assert!(compared > 4, "{compared}");
        let effective = |folded: &Folded| folded.record.events_effective.unwrap();
        assert!((effective(&group) / effective(&single) - 1.0).abs() < 1e-12);
        assert!((effective(&loose) / effective(&single) - n).abs() < 1e-12 * n);
    }
}

#[test]
fn a_named_weight_is_taken() {
    let path = lhe_support::data("lhe/x_gammagamma_v3weights.lhe");
    let mut study = study(Object::Photon, &path);
    study.detector.calorimeters[0].object = Object::Photon;
    let EventSource::File(list) = &mut study.resonance.source else { panic!("a file") };
    list.weight = Some("1002".to_owned());
    study.channels[0].axis = MassAxis { low: 0.5, high: 1.5, bins: 20, relative: true };
    let named = fold_channel(&study, 0, 125.0, &|_| ()).expect("a template");
    let EventSource::File(list) = &mut study.resonance.source else { panic!("a file") };
    list.weight = Some("1999".to_owned());
    let unknown = fold_channel(&study, 0, 125.0, &|_| ()).unwrap_err();
    assert!(unknown.to_string().contains("weight `1999` is not declared"), "{unknown}");
    let EventSource::File(list) = &mut study.resonance.source else { panic!("a file") };
    list.weight = None;
    let plain = fold_channel(&study, 0, 125.0, &|_| ()).expect("a template");
    // (sum w)²/sum w² of the weights in the file.
    let expected = (44.1_f64 - 43.9 + 44.0).powi(2) / (44.1_f64.powi(2) + 43.9_f64.powi(2) + 44.0_f64.powi(2));
    assert!((named.record.events_effective.unwrap() - expected).abs() < 1e-12);
    assert!((plain.record.events_effective.unwrap() - 1.0 / 3.0).abs() < 1e-12);
}

/// One group alone has no spread: q = p a exactly. It goes over several batches of 512 events.
#[test]
fn a_group_may_be_of_any_length() {
    let text = lhe_support::extract();
    let start = text.find("  <event").unwrap();
    let events = text[start..].strip_suffix("</LesHouchesEvents>\n").unwrap();
    let whole = format!("{}<eventgroup>\n{}</eventgroup>\n</LesHouchesEvents>\n", &text[..start], events.repeat(20));
    let file = tempfile::NamedTempFile::new().unwrap();
    std::fs::write(file.path(), whole).unwrap();
    let folded = fold(&study(Object::Muon, file.path()));
    assert!(folded.record.events_used.unwrap() > 1024);
    assert!((folded.record.events_effective.unwrap() - 1.0).abs() < 1e-12);
    let template = &folded.templates[0].template;
    // The root of what rounding leaves of a difference of numbers of order 1.
    assert!(template.acceptance_list_error < 1e-7);
    assert!(template.list_error.iter().all(|error| *error < 1e-7), "{:?}", template.list_error);
}

/// The stated numerical error is that of the difference from a fold with many more points: lists of 40, of all 200 and of
/// 6000 events (the extract thirty times), twelve seeds each. The error over the bins is compared as RMS; twelve seeds of
/// bins that are correlated tell it to about a quarter. It may be overstated: that the points of one run are even with those
/// of another is not seen, and thirty times the same events profit most from it (0.6 was found).
#[test]
fn the_numerical_error_is_honest() {
    let text = lhe_support::extract();
    let start = text.find("  <event").unwrap();
    let body = text[start..].strip_suffix("</LesHouchesEvents>\n").unwrap();
    let folder = tempfile::tempdir().unwrap();
    let pieces: Vec<&str> = body.split_inclusive("</event>").collect();
    for (name, events) in [("few", pieces[..40].concat()), ("all", body.to_owned()), ("many", body.repeat(30))] {
        let path = folder.path().join(format!("{name}.lhe"));
        std::fs::write(&path, format!("{}{}\n</LesHouchesEvents>\n", &text[..start], events)).unwrap();
        let mut study = study(Object::Muon, &path);
        study.precision = 2e-4;
        study.seed = 1000;
        let reference = fold(&study);
        study.precision = 4e-3;
        let (mut found, mut stated) = (0.0, 0.0);
        for seed in 1..=12 {
            study.seed = seed;
            let folded = fold(&study);
            let (a, b) = (&folded.templates[0].template, &reference.templates[0].template);
            found += a.probability.iter().zip(&b.probability).map(|(a, b)| (a - b) * (a - b)).sum::<f64>();
            stated += a.error.iter().map(|e| e * e).sum::<f64>();
        }
        let ratio = f64::sqrt(found / stated);
        println!("{name}: true over stated error {ratio:.2}");
        assert!((0.4..1.4).contains(&ratio), "{name}: {ratio}");
    }
}
