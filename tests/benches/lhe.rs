//! Speed of reading an event file and picking legs: plain and gzip, by one thread and side by side.
//!
//! `cargo bench --bench lhe`; writes 170 MB into a temporary directory. Beside the time stands the processor time, which says
//! more on a busy machine.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, missing_docs)]

#[path = "../lhe_support/mod.rs"]
mod lhe_support;

use lhe_support::extract;
use peakfold::detector::Object::Electron;
use peakfold::events::{Selection, Selector};
use peakfold::process::Decay;

/// Processor seconds of this process so far, from /proc (in steps of 0.01 s); NaN elsewhere.
fn processor_seconds() -> f64 {
    let stat = std::fs::read_to_string("/proc/self/stat").unwrap_or_default();
    let ticks = stat.rsplit(')').next().unwrap_or_default().split_whitespace().skip(11).take(2);
    let ticks: Vec<f64> = ticks.filter_map(|t| t.parse().ok()).collect();
    if ticks.len() == 2 { ticks.iter().sum::<f64>() * 0.01 } else { f64::NAN }
}

fn main() {
    let text = extract();
    let start = text.find("  <event").unwrap();
    let (frame, events) = (&text[..start], text[start..].strip_suffix("</LesHouchesEvents>\n").unwrap());
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("many.lhe");
    std::fs::write(&path, format!("{frame}{}</LesHouchesEvents>\n", events.repeat(1000))).unwrap();
    let packed = directory.path().join("many.lhe.gz");
    let mut encoder =
        flate2::write::GzEncoder::new(std::fs::File::create(&packed).unwrap(), flate2::Compression::fast());
    std::io::copy(&mut std::fs::File::open(&path).unwrap(), &mut encoder).unwrap();
    encoder.finish().unwrap();
    let selector = Selector::new(&Decay::Direct(vec![Electron; 2]), 91.188).unwrap();
    for path in [&path, &packed] {
        for parallel in [false, true] {
            let (begin, processor) = (std::time::Instant::now(), processor_seconds());
            let mut file = peakfold::events::EventFile::open(path, &Default::default()).unwrap();
            let (mut events, mut selection) = (0, Selection::default());
            let mut take = |batch: &peakfold::events::EventBatch| {
                events += batch.len();
                for event in batch.events() {
                    selection.add(&event, &selector.select(&event));
                }
            };
            if parallel {
                file.for_each_batch(|batch| {
                    take(batch);
                    Ok::<(), peakfold::problem::Problem>(())
                })
                .unwrap();
            } else {
                let mut batch = Default::default();
                while file.next_batch(&mut batch).unwrap() {
                    take(&batch);
                }
            }
            let seconds = begin.elapsed().as_secs_f64();
            let million = events as f64 * 1e-6;
            println!(
                "{}, parallel {parallel}: {:.2} us per event, {:.2} us of processor time",
                path.display(),
                seconds / million,
                (processor_seconds() - processor) / million
            );
        }
    }
}
