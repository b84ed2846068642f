//! Memory does not grow with the file: 200 000 events, 167 MB of text, plain and as a gzip file of 1002 members, both made while
//! they are read. This is the only test of its file, so that no other one shares its memory.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod lhe_support;

use std::io::{Read, Write};
use std::path::Path;

use lhe_support::*;
use peakfold::events::{EventFile, Options};
use peakfold::problem::Problem;

/// Several chunks of 1 MiB per thread with their rows; far below the 167 MB of the text.
const MOST_GROWTH_MB: f64 = 40.0;

const REPEATS: usize = 1000;

/// Largest resident memory of the process so far in MB, where /proc tells it.
fn peak_mb() -> Option<f64> {
    let status = std::fs::read_to_string("/proc/self/status").ok()?;
    let line = status.lines().find_map(|line| line.strip_prefix("VmHWM:"))?;
    Some(line.split_whitespace().next()?.parse::<f64>().ok()? / 1024.0)
}

/// Head, then the middle many times, then the tail.
struct Repeated {
    parts: [Vec<u8>; 3],
    turn: usize,
    position: usize,
}

impl Read for Repeated {
    fn read(&mut self, buffer: &mut [u8]) -> std::io::Result<usize> {
        let part = match self.turn {
            0 => &self.parts[0],
            turn if turn <= REPEATS => &self.parts[1],
            turn if turn == REPEATS + 1 => &self.parts[2],
            _ => return Ok(0),
        };
        let count = (&part[self.position..]).read(buffer)?;
        self.position += count;
        if self.position == part.len() {
            (self.turn, self.position) = (self.turn + 1, 0);
        }
        Ok(count)
    }
}

#[test]
fn memory_is_flat() {
    let text = extract();
    let start = text.find("  <event").unwrap();
    let events = text[start..].strip_suffix("</LesHouchesEvents>\n").unwrap();
    let plain = [&text[..start], events, "</LesHouchesEvents>\n"].map(|part| part.as_bytes().to_vec());
    let packed = plain.clone().map(|part| {
        let mut encoder = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
        encoder.write_all(&part).unwrap();
        encoder.finish().unwrap()
    });
    let before = peak_mb();
    for parts in [plain, packed] {
        let input = Repeated { parts, turn: 0, position: 0 };
        let mut file = EventFile::from_reader(Path::new("many"), input, &Options::default()).unwrap();
        let (mut events, mut weight) = (0, 0.0);
        file.for_each_batch(|batch| {
            events += batch.len();
            weight += batch.events().map(|event| event.weight).sum::<f64>();
            Ok::<(), Problem>(())
        })
        .unwrap();
        assert_eq!((events, file.report().events), (200 * REPEATS, 200 * REPEATS as u64));
        // 42 of the 200 events are negative; all have the absolute weight 5394.4305.
        let expected = (200.0 - 2.0 * 42.0) * 5394.4305 * REPEATS as f64;
        assert!((weight / expected - 1.0).abs() < 1e-9, "{weight} {expected}");
    }
    if let (Some(before), Some(after)) = (before, peak_mb()) {
        println!("peak memory {before:.1} MB before, {after:.1} MB after");
        assert!(after - before < MOST_GROWTH_MB);
    }
}
