//! Reading of event files: the samples, good and malformed, and bad input of every kind.
//!
//! Expected values stand in the samples themselves (they are text); what must happen to each malformed one follows from the
//! accord (J. Alwall et al., Comput. Phys. Commun. 176 (2007) 300) and is said at each test.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod lhe_support;

use std::io::{Read, Write};
use std::path::Path;

use flate2::Compression;
use flate2::write::GzEncoder;
use lhe_support::*;
use peakfold::events::Options;
use peakfold::events::{FINAL, RESONANCE};

fn gzip(text: &[u8]) -> Vec<u8> {
    let mut encoder = GzEncoder::new(Vec::new(), Compression::default());
    encoder.write_all(text).unwrap();
    encoder.finish().unwrap()
}

fn named(weight: &str) -> Options {
    Options { weight: Some(weight.to_owned()) }
}

/// Plain sample: three events of five rows, read number by number.
#[test]
fn good_plain() {
    let reading = read_text(&sample("x_gammagamma.lhe"));
    let report = reading.report();
    assert_eq!((report.events, reading.events.len()), (3, 3));
    assert!(report.warnings().is_empty(), "{:?}", report.warnings());
    let event = &reading.events[0];
    assert_eq!((event.line, event.weight, event.particles.len()), (9, 1.0, 5));
    let (resonance, photon) = (event.particles[2], event.particles[4]);
    assert_eq!((resonance.code, resonance.status, resonance.mothers), (25, RESONANCE, [1, 2]));
    assert_eq!((resonance.mass, resonance.only_mother()), (125.0, None));
    assert_eq!((photon.code, photon.status, photon.only_mother()), (22, FINAL, Some(2)));
    assert_eq!([photon.px, photon.py, photon.pz, photon.e], [-48.3253305, 36.419757663, 2.6866296923, 60.571893608]);
    let groups: Vec<u64> = reading.events.iter().map(|e| e.group).collect();
    assert_eq!(groups, [0, 1, 2]);
}

/// Gzip is told by its first bytes: the sample, the same under a plain name, several members, one of them empty.
#[test]
fn good_gzip() {
    let plain = sample("x_gammagamma.lhe");
    let expected = read_text(&plain);
    let packed = std::fs::read(data("lhe/x_gammagamma.lhe.gz")).unwrap();
    let (first, second) = plain.as_bytes().split_at(1234);
    let members = [gzip(first), gzip(b""), gzip(second)].concat();
    for bytes in [packed, members] {
        let reading = read_with(bytes.as_slice(), &Options::default());
        assert_eq!(reading.report(), expected.report());
        assert_eq!(reading.events, expected.events);
    }
}

/// Two processes, one negative weight, two status-2 rows per event.
#[test]
fn good_four_leptons() {
    let reading = read_text(&sample("x_zz4l.lhe"));
    assert!(reading.report().warnings().is_empty());
    let weights: Vec<f64> = reading.events.iter().map(|e| e.weight).collect();
    assert_eq!(weights, [1.0, -1.0, 1.0]);
    assert!(reading.events.iter().all(|e| e.particles.len() == 9));
}

/// Version 3: attributes on events, weights by name in two events and by order of declaration in the third.
#[test]
fn good_named_weights() {
    let text = sample("x_gammagamma_v3weights.lhe");
    let weights = |options: &Options| -> Vec<f64> {
        let reading = read_with(text.as_bytes(), options);
        assert!(reading.report().warnings().is_empty());
        reading.events.iter().map(|e| e.weight).collect()
    };
    assert_eq!(weights(&Options::default()), [48.6, -48.6, 48.6]);
    assert_eq!(weights(&named("1001")), [48.6, -48.6, 48.6]);
    assert_eq!(weights(&named("1002")), [44.1, -43.9, 44.0]);
    assert_eq!(weights(&named("2001")), [49.0, -48.1, 49.0]);
    // A comment that hides a declaration must not shift the order; declarations may stand in the init block.
    let block = &text[text.find("<initrwgt>").unwrap()..text.find("</header>").unwrap()];
    let hidden = block.replace("<initrwgt>\n", "<initrwgt>\n<!-- <weight id='9'> old\n </weight> -->\n");
    let moved = text.replace(block, "").replace("</init>", &format!("{hidden}</init>"));
    let reading = read_with(moved.as_bytes(), &named("1002"));
    assert_eq!(reading.report().events, 3);
    assert_eq!(reading.events[2].weight, 44.0);
}

/// A weight that is not there is never replaced by another.
#[test]
fn missing_weights_are_refused() {
    let text = sample("x_gammagamma_v3weights.lhe");
    read_with(text.as_bytes(), &named("1003")).assert_refused(None, &["`1003`", "1001, 1002, 2001"]);
    let unnamed = text.replace("<wgt id='2001'> -4.8100000e+01 </wgt>\n", "");
    read_with(unnamed.as_bytes(), &named("2001")).assert_refused(Some(31), &["no weight `2001`"]);
    let twice = text.replace("<wgt id='2001'> -4", "<wgt id='2001'> 1 </wgt><wgt id='2001'> -4");
    read_with(twice.as_bytes(), &named("2001")).assert_refused(Some(31), &["twice"]);
    let nan = text.replace("-4.8100000e+01", "NaN");
    read_with(nan.as_bytes(), &named("2001")).assert_refused(Some(31), &["`NaN`", "not finite"]);
    assert_eq!(read_with(nan.as_bytes(), &named("1001")).events.len(), 3);
    let short = text.replace("4.86e+01 4.40e+01 4.90e+01", "4.86e+01 4.40e+01");
    read_with(short.as_bytes(), &named("1001")).assert_refused(Some(45), &["lists 2 weights", "declares 3"]);
    let plain = sample("x_gammagamma.lhe");
    read_with(plain.as_bytes(), &named("1001")).assert_refused(Some(10), &["no weight `1001`"]);
}

/// D exponents: all numbers are those of the good sample, and the user is told.
#[test]
fn bad1_d_exponents_are_recovered() {
    let reading = read_text(&sample("bad1_fortran_D.lhe"));
    assert_eq!(reading.events, read_text(&sample("x_gammagamma.lhe")).events);
    // Init: 2 beam energies, 3 of the process; each event: 4 of the head, 7 of each of 5 rows.
    let report = reading.report();
    assert_eq!((report.d_exponents.count, report.d_exponents.first_line), (5 + 3 * (4 + 35), 6));
    assert_eq!(report.warnings().len(), 1);
}

/// Cut inside the third event: the first two are used, the cut is reported.
#[test]
fn bad2_truncated_keeps_earlier_events() {
    let reading = read_text(&sample("bad2_truncated.lhe"));
    let report = reading.report();
    assert_eq!((report.events, report.truncated_line), (2, Some(26)));
    assert_eq!(reading.events, read_text(&sample("x_gammagamma.lhe")).events[..2]);
    assert!(report.warnings()[0].contains("line 26"), "{:?}", report.warnings());
}

/// Structural contradictions are refused with the line: which number is wrong cannot be known.
#[test]
fn bad3_to_bad8_are_refused() {
    let refused = |name: &str, line: Option<usize>, words: &[&str]| {
        read_text(&sample(name)).assert_refused(line, words);
    };
    refused("bad3_nup_mismatch.lhe", Some(10), &["NUP promises 6", "5 follow"]);
    refused("bad4_mother_out_of_range.lhe", Some(14), &["MOTHUP2", "is 9", "1 to 5"]);
    refused("bad5_missing_column.lhe", Some(15), &["12 columns", "13 are needed"]);
    refused("bad6_no_init.lhe", Some(5), &["init block is missing"]);
    refused("bad8_nan_weight.lhe", Some(10), &["XWGTUP", "`NaN`", "not finite"]);
    // A photon energy 5 % too large. One event of three is more than a few: the file is refused, and the event itself is
    // never handed out.
    refused("bad7_bad_kinematics.lhe", Some(9), &["1 of 3 events", "far from its m²"]);
    assert_eq!(read_text(&sample("bad7_bad_kinematics.lhe")).events.len(), 2);
}

/// Raw `&` and `<` in the header are common, and the header is free text.
#[test]
fn bad9_raw_ampersand_is_read() {
    let reading = read_text(&sample("bad9_raw_ampersand.lhe"));
    assert!(reading.report().warnings().is_empty());
    assert_eq!(reading.events.len(), 3);
}

/// Unusual but legal writing: tabs, CRLF, mixed line ends, integers as floats, comments, blanks, unknown tags, attributes
/// in single quotes, tags in comments and CDATA of the header, a head on the line of the tag.
#[test]
fn unusual_writing_is_read() {
    let text = sample("x_gammagamma.lhe");
    let expected = read_text(&text);
    let rows =
        |reading: &Reading| -> Vec<_> { reading.events.iter().map(|e| (e.weight, e.particles.clone())).collect() };
    let crlf = text.replace('\n', "\r\n");
    let mixed: String = text
        .split_inclusive('\n')
        .enumerate()
        .map(|(i, l)| if i % 3 == 0 { l.replace('\n', "\r\n") } else { l.into() })
        .collect();
    let header = "<header>\n<![CDATA[\n<event>\n<init>\n]]>\n<!-- <event> a < b && c\n-->\n";
    let variants = [
        crlf,
        mixed,
        text.replace("  5 1 +1", "\t5.0  1.0E0\t+1").replace(" 22  1 ", "\t22.\t+1\t"),
        text.replace("<header>\n", header),
        text.replace("<event>\n", "<event npLO=' 0 ' npNLO='-1'>\n\n# a comment\n"),
        text.replace("<event>\n", "<!-- <event>\n </event> -->\n<event>"),
        text.replace("</event>\n", "<mgrwt>\n1 2 3\n</mgrwt>\n#aux 1 2\n  </event>\n<extra>\nfree text\n</extra>\n"),
        text.replace("version=\"1.0\"", "version = '3.0'")
            .replace("</init>", "<generator name='a'> b </generator>\n</init>"),
        format!("\u{feff}<?xml version=\"1.0\"?>\n<!-- text\n more -->\n\n{text}\n\n"),
    ];
    for variant in &variants {
        let reading = read_text(variant);
        assert!(reading.report().warnings().is_empty(), "{:?}", reading.report().warnings());
        assert_eq!(rows(&reading), rows(&expected), "{variant}");
    }
}

/// Events of one group share a number, so that statistics can take them as one unit.
#[test]
fn groups_are_kept_together() {
    let event = format!("<event>\n{}</event>\n", photon_event());
    let text = framed(&format!(
        "{event}<eventgroup n='2'>\n{event}{event}</eventgroup>\n{event}<eventgroup>\n</eventgroup>\n{event}"
    ));
    let reading = read_text(&text);
    let groups: Vec<u64> = reading.events.iter().map(|e| e.group).collect();
    assert_eq!(groups, [0, 1, 1, 2, 4]);
    read_text(&framed(&format!("<eventgroup>\n{event}<eventgroup>\n"))).assert_refused(Some(16), &["line 6"]);
    read_text(&framed(&format!("{event}</eventgroup>\n"))).assert_refused(Some(15), &["without <eventgroup>"]);
}

/// Broken structure: nothing is guessed, the line is told.
#[test]
fn broken_structure_is_refused() {
    let body = photon_event();
    let event = format!("<event>\n{body}</event>\n");
    let refused =
        |events: &str, line: usize, words: &[&str]| read_text(&framed(events)).assert_refused(Some(line), words);
    refused(&format!("<event>\n{body}{event}"), 14, &["begins at line 6", "</event> is missing"]);
    refused(&format!("{event}</event>\n"), 15, &["without <event>"]);
    refused(&format!("{event}<init>\n"), 15, &["second <init>"]);
    refused(&format!("{event}</LesHouchesEvents>\n{event}"), 16, &["text after"]);
    refused("<event>\n</event>\n", 6, &["no line of 6 numbers"]);
    refused(&event.replacen("  5 1", "  4 1", 1), 7, &["NUP promises 4", "more follow"]);
    refused(&event.replacen("  5 1", "  -5 1", 1), 7, &["-5"]);
    refused(&event.replacen("  5 1", "  5.5 1", 1), 7, &["NUP", "`5.5`"]);
    refused(&event.replacen(" 1.2500000e+02 7", " 1.2500000e+02 many 7", 1), 7, &["AQEDUP", "`many`"]);
    refused(&event.replacen("9.0000e+00\n", "9.0000e+00 1\n", 1), 8, &["14 columns, 13 are allowed"]);
    refused(&event.replacen("+8.4366175474e+01", "1e999", 1), 8, &["`1e999`", "not finite"]);
    refused(&event.replacen("25  2    1    2", "25  2    3    3", 1), 10, &["row 3", "is 3"]);
    refused(&event.replacen("21 -1    0    0", "21 -1    5    5", 1), 7, &["circle"]);
    refused(&event.replace("9.0000e+00\n", "9.0000e+00\r"), 8, &["columns", "carriage return"]);
    let (head, rest) = framed(&event).split_once("<init>").map(|(a, b)| (a.to_owned(), b.to_owned())).unwrap();
    read_text(&format!("{head}<init>{}", rest.replace("1 0.1 1 1\n", "")))
        .assert_refused(Some(4), &["NPRUP promises 1", "0 follow"]);
    read_text(&format!("{head}<init>{}", rest.replace("1 0.1", "x 0.1"))).assert_refused(Some(4), &["XSECUP", "`x`"]);
    for version in ["version=\"4.0\"", "version=\"\"", ""] {
        let text = framed(&event).replace("version=\"1.0\"", version);
        read_text(&text).assert_refused(Some(1), &["version", "1.0 to 3.0"]);
    }
    read_text(&framed("")).assert_refused(None, &["no event"]);
    read_text(&framed(&event).replace('\n', "\r")).assert_refused(Some(1), &["carriage return"]);
}

/// What is not an event file at all.
#[test]
fn not_an_event_file() {
    let directory = tempfile::tempdir().unwrap();
    read_path(directory.path()).assert_refused(None, &["directory"]);
    read_path(&directory.path().join("missing.lhe")).assert_refused(None, &["cannot be read"]);
    let empty = directory.path().join("empty.lhe");
    std::fs::write(&empty, b"").unwrap();
    read_path(&empty).assert_refused(None, &["is empty"]);
    read_text("m_gev,weight\n1,2\n").assert_refused(Some(1), &["m_gev", "unknown column"]);
    read_text("\n\n").assert_refused(None, &["no header"]);
    read_with(gzip(b"").as_slice(), &Options::default()).assert_refused(None, &["is empty"]);
    for cut in ["<header>", "<init>"] {
        let text = sample("x_gammagamma.lhe");
        let end = text.find(cut).unwrap() + cut.len();
        assert!(read_text(&text[..end]).problem().message.contains("ends inside"));
    }
}

/// Gzip data that are cut or damaged are refused: their checksum cannot be verified.
#[test]
fn damaged_gzip_is_refused() {
    let packed = gzip(extract().as_bytes());
    for length in [3, 10, 100, packed.len() / 2, packed.len() - 8, packed.len() - 1] {
        let reading = read_with(&packed[..length], &Options::default());
        assert!(reading.problem().message.contains("cut off"), "{length}: {}", reading.problem());
    }
    let mut damaged = packed.clone();
    let end = damaged.len();
    damaged[end - 6] ^= 1;
    let problem = read_with(damaged.as_slice(), &Options::default()).problem();
    assert!(problem.message.contains("damaged"), "{problem}");
}

/// Counts what is taken from it.
struct Endless<'a> {
    start: &'a [u8],
    pattern: &'a [u8],
    given: usize,
    limit: usize,
}

impl Read for Endless<'_> {
    fn read(&mut self, buffer: &mut [u8]) -> std::io::Result<usize> {
        if self.given >= self.limit {
            return Ok(0);
        }
        for byte in buffer.iter_mut() {
            let position = self.given;
            *byte = match self.start.get(position) {
                Some(byte) => *byte,
                None => self.pattern[(position - self.start.len()) % self.pattern.len()],
            };
            self.given += 1;
        }
        Ok(buffer.len())
    }
}

/// Two gigabytes of garbage are refused after a bounded part of them: at the first line, at the longest line (1 MiB) or at the
/// longest event (16 MiB). More is read only where text is legal and not kept.
#[test]
fn endless_garbage_is_refused_early() {
    let limit = 2 << 30;
    let begin = framed("");
    let begin = begin.strip_suffix("</LesHouchesEvents>\n").unwrap();
    let in_event = format!("{begin}<event>\n");
    let in_header = "<LesHouchesEvents version='1.0'>\n<header>\n";
    let weights = format!("{in_header}<initrwgt>\n");
    let cases: [(&str, &[u8], usize, &str); 6] = [
        ("", b"garbage ", 2 << 20, "longer than 1048576"),
        ("", b"garbage\n", 1 << 20, "not an event file"),
        (begin, b"\0\x01\xff", 2 << 20, "longer than 1048576"),
        (&in_event, b"1 2 3\n", 18 << 20, "longer than 16777216"),
        (in_header, b"x", 2 << 20, "longer than 1048576"),
        (&weights, b"<weight id='1'>\n", 2 << 20, "declared weights"),
    ];
    for (start, pattern, most, words) in cases {
        let mut input = Endless { start: start.as_bytes(), pattern, given: 0, limit };
        let reading = read_with(&mut input, &Options::default());
        assert!(reading.problem().message.contains(words), "{}", reading.problem());
        assert!(input.given <= most, "{} bytes read", input.given);
    }
}

/// The parallel way gives the same events in the same order, the same report and the same refusals.
#[test]
fn parallel_reading_is_the_same() {
    let directory = tempfile::tempdir().unwrap();
    let text = extract();
    let start = text.find("  <event").unwrap();
    let (frame, events) = (&text[..start], text[start..].strip_suffix("</LesHouchesEvents>\n").unwrap());
    // About 5 MB: several chunks, and more than one wave.
    let many = format!("{frame}{}</LesHouchesEvents>\n", events.repeat(30));
    let broken = many.replace("</LesHouchesEvents>", "<event>\n5 x\n</event>\n</LesHouchesEvents>");
    let cut = &many[..many.len() - 500];
    for (name, text) in [("many", many.as_str()), ("broken", broken.as_str()), ("cut", cut)] {
        let path = directory.path().join(name);
        std::fs::write(&path, text).unwrap();
        let (serial, parallel) = (read_path(&path), read_parallel(&path));
        assert_eq!(serial.outcome, parallel.outcome);
        let handed_out = if name == "broken" { parallel.events.len() } else { serial.events.len() };
        assert_eq!(serial.events[..handed_out], parallel.events);
        assert!(handed_out > 4000);
        assert_eq!(serial.outcome.is_err(), name == "broken");
    }
}

/// Progress is counted in bytes of the file as it lies on disk.
#[test]
fn progress_reaches_the_size_of_the_file() {
    let path = data("dilepton_200.lhe.gz");
    let mut file = peakfold::events::EventFile::open(Path::new(&path), &Options::default()).unwrap();
    let progress = file.progress().clone();
    let mut batch = peakfold::events::EventBatch::default();
    while file.next_batch(&mut batch).unwrap() {}
    assert_eq!(Some(progress.bytes_read()), progress.total_bytes);
    assert_eq!(progress.total_bytes, Some(std::fs::metadata(&path).unwrap().len()));
}
