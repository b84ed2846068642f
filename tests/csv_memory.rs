//! Memory does not grow with a CSV file: 64 MB of rows and of comments, 2 GB with `PEAKFOLD_LONG`, made while they are read. This is the
//! only test of its file, so that no other one shares its memory.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use std::io::Read;
use std::path::Path;

use peakfold::events::{EventFile, Options};
use peakfold::problem::Problem;

/// Several chunks of 1 MiB per thread with their rows; the smallest text has 64 MB, whose rows would take more.
const MOST_GROWTH_MB: f64 = 50.0;

const WIDE: &str =
    "code1,pt1_gev,eta1,phi1_rad,code2,pt2_gev,eta2,phi2_rad,weight\n13,45.5,0.5,1.25,-13,44.5,-0.25,-1.875,1.5\n";

/// A start and then a pattern, without end but for a limit; counts what was taken.
struct Endless<'a> {
    start: &'a [u8],
    pattern: &'a [u8],
    given: usize,
    limit: usize,
}

impl Read for Endless<'_> {
    fn read(&mut self, buffer: &mut [u8]) -> std::io::Result<usize> {
        let room = buffer.len().min(self.limit - self.given);
        for byte in &mut buffer[..room] {
            *byte = match self.start.get(self.given) {
                Some(byte) => *byte,
                None => self.pattern[(self.given - self.start.len()) % self.pattern.len()],
            };
            self.given += 1;
        }
        Ok(room)
    }
}

/// Largest resident memory of the process so far in MB, where /proc tells it.
fn peak_mb() -> Option<f64> {
    let status = std::fs::read_to_string("/proc/self/status").ok()?;
    let line = status.lines().find_map(|line| line.strip_prefix("VmHWM:"))?;
    Some(line.split_whitespace().next()?.parse::<f64>().ok()? / 1024.0)
}

#[test]
fn memory_is_flat() {
    let row = WIDE.split_inclusive('\n').nth(1).unwrap();
    let most = if std::env::var_os("PEAKFOLD_LONG").is_some() { 2_000_000_000 } else { 64_000_000 };
    let before = peak_mb();
    for (pattern, events) in [(row, 1 + most / row.len()), ("# nothing\n", 1)] {
        let limit = WIDE.len() + most / pattern.len() * pattern.len();
        let input = Endless { start: WIDE.as_bytes(), pattern: pattern.as_bytes(), given: 0, limit };
        let mut file = EventFile::from_reader(Path::new("many"), input, &Options::default()).unwrap();
        let mut found = 0;
        file.for_each_batch(|batch| {
            found += batch.len();
            Ok::<(), Problem>(())
        })
        .unwrap();
        assert_eq!(found, events);
    }
    if let (Some(before), Some(after)) = (before, peak_mb()) {
        println!("peak memory {before:.1} MB before, {after:.1} MB after");
        assert!(after - before < MOST_GROWTH_MB, "{before} MB before, {after} MB after");
    }
}
