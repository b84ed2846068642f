//! Replays the corpus of the fuzz targets (`tests/fuzz`), small inputs that reach much of the readers, so that it needs no
//! fuzzer: nothing panics, and what is accepted is what the documentation promises.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod fuzz_support;

use std::path::Path;

fn replay(target: &str, read: impl Fn(&[u8])) {
    let directory = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/corpus").join(target);
    let mut count = 0;
    for entry in std::fs::read_dir(&directory).unwrap() {
        let path = entry.unwrap().path();
        println!("{}", path.display());
        let data = std::fs::read(&path).unwrap();
        read(&data);
        // An input cut short is another one.
        read(&data[..data.len() / 2]);
        count += 1;
    }
    assert!(count >= 5, "{} inputs in {}", count, directory.display());
}

#[test]
fn event_files() {
    replay("lhe", fuzz_support::lhe);
    replay("csv", fuzz_support::csv);
}

#[test]
fn detectors() {
    replay("detector", fuzz_support::detector);
}

#[test]
fn studies() {
    replay("study", fuzz_support::study);
}
