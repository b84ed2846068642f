//! A long list of events folds in flat memory: a gzip file that the test writes itself. 10^5 events by default; with
//! `PEAKFOLD_LONG=1` in the environment 10^7, which takes some minutes and 1 GB of disk. This is the only test of its file, so
//! that no other one shares its memory.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod common;

use std::fmt::Write as _;
use std::io::Write as _;
use std::time::Instant;

use flate2::{Compression, write::GzEncoder};
use peakfold::detector::Object;
use peakfold::fold::fold_channel;
use peakfold::process::{Decay, EventList, EventSource};
use rand::rngs::StdRng;
use rand::{RngExt, SeedableRng};

/// Chunks of text of all threads, batches of events and their sums; a list of 10^7 events would take 1.6 GB.
const MOST_GROWTH_MB: f64 = 50.0;

/// Largest resident memory of the process so far in MB, where /proc tells it.
fn peak_mb() -> Option<f64> {
    let status = std::fs::read_to_string("/proc/self/status").ok()?;
    let line = status.lines().find_map(|line| line.strip_prefix("VmHWM:"))?;
    Some(line.split_whitespace().next()?.parse::<f64>().ok()? / 1024.0)
}

const MASS: f64 = 180.0;

/// Two photons of an isotropic decay, boosted along the beam.
fn event(random: &mut StdRng, text: &mut String) {
    let (cos, phi) = (random.random_range(-1.0..1.0), random.random_range(0.0..std::f64::consts::TAU));
    let rapidity: f64 = random.random_range(-1.5..1.5);
    let sin = f64::sqrt(1.0 - cos * cos);
    let (px, py) = (0.5 * MASS * sin * f64::cos(phi), 0.5 * MASS * sin * f64::sin(phi));
    text.push_str("<event>\n2 1 1.0 180.0 -1 -1\n");
    for sign in [1.0, -1.0] {
        let (e, pz) = (0.5 * MASS, sign * 0.5 * MASS * cos);
        let boosted_e = e * rapidity.cosh() + pz * rapidity.sinh();
        let boosted_pz = pz * rapidity.cosh() + e * rapidity.sinh();
        let (px, py) = (sign * px, sign * py);
        let _ = writeln!(text, "22 1 0 0 0 0 {px:.10e} {py:.10e} {boosted_pz:.10e} {boosted_e:.10e} 0. 0. 9.");
    }
    text.push_str("</event>\n");
}

#[test]
fn a_long_list_folds_in_flat_memory() {
    let events: u64 = if std::env::var_os("PEAKFOLD_LONG").is_some() { 10_000_000 } else { 100_000 };
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("many.lhe.gz");
    let mut file = GzEncoder::new(std::fs::File::create(&path).unwrap(), Compression::fast());
    let head = "<LesHouchesEvents version=\"1.0\">\n<init>\n2212 2212 6500 6500 0 0 0 0 3 1\n1 0 1 1\n</init>\n";
    file.write_all(head.as_bytes()).unwrap();
    let mut random = StdRng::seed_from_u64(11);
    let mut text = String::new();
    for _ in 0..events {
        text.clear();
        event(&mut random, &mut text);
        file.write_all(text.as_bytes()).unwrap();
    }
    file.write_all(b"</LesHouchesEvents>\n").unwrap();
    file.finish().unwrap();

    let mut channel = common::channel("two-photon", Decay::Direct(vec![Object::Photon; 2]));
    channel.cuts.max_abs_eta = Some(2.4);
    channel.cuts.min_pt_over_mass = vec![0.35, 0.25];
    let mut study = common::study(common::full_detector(), MASS, channel);
    study.resonance.source = EventSource::File(EventList { path: path.clone(), weight: None });
    study.max_points = 1 << 32;
    let before = peak_mb();
    let start = Instant::now();
    let folded = fold_channel(&study, 0, MASS, &|_| ()).unwrap();
    let seconds = start.elapsed().as_secs_f64();
    println!(
        "{events} events, {} MB of gzip: {seconds:.1} s of which the fold takes {:.1} s of the threads, {} points, error {:.2e}",
        std::fs::metadata(&path).unwrap().len() / 1_000_000,
        folded.record.cpu_seconds,
        folded.record.points,
        folded.record.precision_reached
    );
    assert!(folded.record.reached);
    assert_eq!(folded.record.events_used, Some(events));
    // The peak is where the photons' responses have it.
    let peak = folded.templates[0].template.widths().unwrap().peak_gev.value.unwrap();
    assert!((peak / MASS - 1.0).abs() < 0.003, "{peak}");
    if let (Some(before), Some(after)) = (before, peak_mb()) {
        println!("peak memory {before:.1} MB before, {after:.1} MB after");
        assert!(after - before < MOST_GROWTH_MB);
    }
}
