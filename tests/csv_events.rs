//! Events as CSV: both layouts, what is recovered, left out and refused, and the same templates as from LHE.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod common;
mod lhe_support;

use std::fmt::Write as _;
use std::io::{Read, Write};
use std::path::Path;

use lhe_support::*;
use peakfold::detector::{EtaRange, Object};
use peakfold::events::{Inconsistency, Options, Selector, Skip};
use peakfold::fold::{Folded, fold_channel};
use peakfold::process::{Decay, EventList, EventSource, MassAxis};

const WIDE: &str = "code1,pt1_gev,eta1,phi1_rad,code2,pt2_gev,eta2,phi2_rad,weight,true_mass_gev\n\
                    13,45.5,0.5,1.25,-13,44.5,-0.25,-1.875,1.5,91.25\n\
                    22,62.5,-1.5,3.0,22,60,0.0,-0.125,-0.5,\n";

const LONG: &str = "event,code,pt_gev,eta,phi_rad,weight,true_mass_gev\n\
                    7,13,45.5,0.5,1.25,1.5,91.25\n7,-13,44.5,-0.25,-1.875,1.5,91.25\n\
                    9,22,62.5,-1.5,3.0,-0.5,\n9,22,60,0.0,-0.125,-0.5,\n";

fn without_places(reading: &Reading) -> Vec<Owned> {
    reading.events.iter().map(|event| Owned { line: 0, group: 0, ..event.clone() }).collect()
}

#[test]
fn both_layouts_give_the_same_events() {
    let (wide, long) = (read_text(WIDE), read_text(LONG));
    assert_eq!(wide.report().events, 2);
    assert_eq!(without_places(&wide), without_places(&long));
    assert_eq!(wide.events.iter().map(|e| e.line).collect::<Vec<_>>(), [2, 3]);
    assert_eq!(long.events.iter().map(|e| e.line).collect::<Vec<_>>(), [2, 4]);
    assert!(wide.events[0].group < wide.events[1].group);
    let [dimuon, diphoton] = [&wide.events[0], &wide.events[1]];
    assert_eq!((dimuon.weight, dimuon.true_mass_gev), (1.5, Some(91.25)));
    assert_eq!((diphoton.weight, diphoton.true_mass_gev), (-0.5, None));
    // Definitions: px = pT cos phi, py = pT sin phi, pz = pT sinh eta, E² = p² + m²; the muon's mass is that of the Review of
    // Particle Physics.
    let muon = dimuon.particles[0];
    assert_eq!((muon.code, muon.status, muon.mass), (13, 1, 0.1056583755));
    let expected = [45.5 * 1.25_f64.cos(), 45.5 * 1.25_f64.sin(), 45.5 * 0.5_f64.sinh()];
    for (value, expected) in [muon.px, muon.py, muon.pz].into_iter().zip(expected) {
        assert!((value - expected).abs() < 1e-12, "{value} {expected}");
    }
    let e = ((45.5 * 0.5_f64.cosh()).powi(2) + 0.1056583755_f64.powi(2)).sqrt();
    assert!((muon.e - e).abs() < 1e-12);
    assert_eq!(diphoton.particles[1].mass, 0.0);
    let select = |decay: &[Object], event: &Owned| {
        Selector::new(&Decay::Direct(decay.to_vec()), 91.188).unwrap().select(&event.event())
    };
    // The true mass of the file, else the invariant mass: m² = 2 pT1 pT2 (cosh(d eta) - cos(d phi)).
    assert_eq!(select(&[Object::Muon; 2], dimuon).unwrap().mass_gev, 91.25);
    let mass = (2.0 * 62.5 * 60.0 * (1.5_f64.cosh() - 3.125_f64.cos())).sqrt();
    assert!((select(&[Object::Photon; 2], diphoton).unwrap().mass_gev / mass - 1.0).abs() < 1e-12);
    assert_eq!(select(&[Object::Electron; 2], diphoton), Err(Skip::WrongKinds));
}

#[test]
fn unusual_writing_is_read() {
    let plain = without_places(&read_text(WIDE));
    let quoted: String = WIDE
        .lines()
        .map(|line| line.split(',').map(|f| format!("\"{f}\"")).collect::<Vec<_>>().join(",") + "\n")
        .collect();
    let mut mixed = String::from("\u{feff}# comment, \"with a quote\n\n");
    for (number, line) in WIDE.lines().enumerate() {
        mixed += line;
        mixed += if number % 2 == 0 { "\r\n" } else { "\n# more\n   \r\n" };
    }
    for text in [
        WIDE.replace('\n', "\r\n"),
        WIDE.replace(',', " ,\t"),
        WIDE.trim_end().to_owned(),
        WIDE.replace("45.5", "4.55D+01").replace("44.5", "0.445e2").replace("22,", "22.0,"),
        quoted,
        mixed,
    ] {
        let reading = read_text(&text);
        reading.report();
        assert_eq!(without_places(&reading), plain, "{text}");
    }
    let cut = read_text(WIDE.trim_end()).report();
    assert!(cut.warnings()[0].contains("no line end"), "{:?}", cut.warnings());
    assert_eq!(read_text(WIDE).report().warnings(), Vec::<String>::new());
    // Columns in another order, momenta by components, a mass, particles that are not there.
    let text = "weight,pz2_gev,py2_gev,px2_gev,code2,mass1_gev,eta1,code1,pt1_gev,phi1_rad\n\
                2,3,2,1,11,,0,13,5,0\n1,,,,,0.25,0,21,3,0\n";
    let reading = read_text(text);
    let [both, one] = [&reading.events[0], &reading.events[1]];
    let electron = both.particles[1];
    assert_eq!([electron.px, electron.py, electron.pz, electron.mass], [1.0, 2.0, 3.0, 0.51099895069e-3]);
    assert_eq!((both.particles[0].mass, both.particles.len(), both.weight), (0.1056583755, 2, 2.0));
    assert_eq!((one.particles[0].mass, one.particles.len()), (0.25, 1));
}

/// The text, the line, and words of the message.
type Case<'a> = (String, Option<usize>, &'a [&'a str]);

#[test]
fn broken_files_are_refused() {
    let w = |from: &str, to: &str| WIDE.replacen(from, to, 1);
    let l = |from: &str, to: &str| LONG.replacen(from, to, 1);
    let cases: Vec<Case> = vec![
        (w("eta1", "etta1"), Some(1), &["etta1: unknown column", "did you mean `eta1`"]),
        (w("weight", "wieght"), Some(1), &["did you mean `weight`"]),
        (w("phi1_rad", "phi1_deg"), Some(1), &["phi1_deg: unknown column", "`phi1_rad`"]),
        (w("eta1", "pt1_gev"), Some(1), &["pt1_gev: the column stands twice"]),
        (w("code1", "code"), Some(1), &["code", "without the column `event`", "`code1`"]),
        (l("code", "code1"), Some(1), &["code1", "have no number"]),
        (w("eta1,", "").replace("45.5,0.5", "45.5"), Some(1), &["eta1: the column is missing"]),
        (l("code,pt_gev,", ""), Some(1), &["these columns are missing: code, pt_gev"]),
        (w("code2,pt2_gev,eta2,phi2_rad", "code3,pt3_gev,eta3,phi3_rad"), Some(1), &["missing", "code2, pt2_gev"]),
        (w("weight", "px1_gev"), Some(1), &["both forms"]),
        (w(",1.5,91.25", ",1.5"), Some(2), &["9 fields", "header 10"]),
        (w("91.25\n", "91.25,1\n"), Some(2), &["11 fields"]),
        (w("62.5", "6x2.5"), Some(3), &["pt1_gev: is `6x2.5`", "not a number"]),
        (w("62.5", ""), Some(3), &["pt1_gev: is empty"]),
        (w("62.5", "nan"), Some(3), &["not finite"]),
        (w("62.5", "1e999"), Some(3), &["not finite"]),
        (w(",-0.5,", ",,"), Some(3), &["weight: is empty"]),
        (w("22,62.5", "22.5,62.5"), Some(3), &["code1", "not a whole number"]),
        (w("62.5", "\"62.5"), Some(3), &["quoted field does not end"]),
        (w("62.5", "62.5\r"), Some(3), &["carriage return"]),
        (w("62.5", "\u{0}62"), Some(3), &["not a number"]),
        (WIDE.replace(',', ";"), Some(1), &["not an event file", "semicolons"]),
        (WIDE.replace('\n', "\r"), Some(1), &["carriage return"]),
        (WIDE.lines().next().unwrap().to_owned() + "\n", None, &["no event"]),
        ("# nothing\n".to_owned(), None, &["no header"]),
        (l("7,-13", "5,-13"), Some(3), &["event: is 5 after 7", "rising order"]),
        (l("-1.875,1.5", "-1.875,1"), Some(3), &["weight: is 1, but 1.5 on line 2"]),
        (l("-1.875,1.5,91.25", "-1.875,1.5,91"), Some(3), &["true_mass_gev: is 91, but 91.25 on line 2"]),
        (l("9,22", "nine,22"), Some(4), &["event: is `nine`"]),
        (l("7,-13,44.5", "7,-13,"), Some(3), &["pt_gev: is empty"]),
        (format!("{WIDE}{}\n", "1".repeat(1 << 20)), Some(4), &["longer than 1048576"]),
        (format!("{LONG}{}", "11,22,50,0,1,1,\n".repeat(2001)), Some(2006), &["more than 2000 rows"]),
    ];
    for (text, line, words) in &cases {
        read_text(text).assert_refused(*line, words);
    }
    let named = Options { weight: Some("1002".to_owned()) };
    read_with(WIDE.as_bytes(), &named).assert_refused(None, &["no weight `1002`", "column `weight`"]);
}

/// 200 good events, and some with numbers that cannot be: left out up to 1 %, refused above.
#[test]
fn inconsistent_events_are_left_out_or_refused() {
    let good = WIDE.lines().nth(1).unwrap();
    let header = WIDE.lines().next().unwrap();
    for (from, to, kind) in [
        ("45.5", "-45.5", Inconsistency::Sign),
        ("91.25", "-91.25", Inconsistency::Sign),
        (",0.5,", ",20.5,", Inconsistency::OutOfRange),
        ("1.25,", "71.6,", Inconsistency::OutOfRange),
        ("45.5", "1e200", Inconsistency::OutOfRange),
    ] {
        let bad = good.replacen(from, to, 1);
        let text =
            |bads: usize| format!("{header}\n{}{}", format!("{good}\n").repeat(200), format!("{bad}\n").repeat(bads));
        let reading = read_text(&text(2));
        assert_eq!((reading.events.len(), reading.report().events), (200, 202));
        assert_eq!(reading.report().inconsistent_events().count, 2);
        assert_eq!(reading.report().inconsistent_events().first_line, 202);
        assert!(reading.report().warnings()[0].contains(&kind.to_string()), "{:?}", reading.report().warnings());
        read_text(&text(3)).assert_refused(Some(202), &["3 of 203 events", &kind.to_string()]);
    }
    let long = format!("event,code,px_gev,py_gev,pz_gev,mass_gev\n{}", "1,22,1,2,3,0\n1,22,4,5,6,-1\n");
    read_text(&long).assert_refused(Some(2), &["1 of 1 events", "negative"]);
}

/// The extract of 200 LHE events as CSV, with all digits, in one layout or the other.
fn as_csv(rows_per_event: bool, repeats: usize) -> String {
    let events = read_text(&extract()).events;
    let mut text = String::new();
    if rows_per_event {
        for n in 1..=4 {
            let _ = write!(text, "code{n},px{n}_gev,py{n}_gev,pz{n}_gev,mass{n}_gev,");
        }
        text += "weight,true_mass_gev\n";
    } else {
        text += "event,code,px_gev,py_gev,pz_gev,mass_gev,weight,true_mass_gev\n";
    }
    for repeat in 0..repeats {
        for (number, event) in events.iter().enumerate() {
            let finals = event.particles.iter().filter(|p| p.status == 1).collect::<Vec<_>>();
            let resonance =
                event.particles.iter().find(|p| p.status == 2).map(|p| p.mass.to_string()).unwrap_or_default();
            for p in &finals {
                let momentum = format!("{},{},{},{},{}", p.code, p.px, p.py, p.pz, p.mass);
                let _ = if rows_per_event {
                    write!(text, "{momentum},")
                } else {
                    writeln!(text, "{},{momentum},{},{resonance}", repeat * 1000 + number, event.weight)
                };
            }
            if rows_per_event {
                let _ = writeln!(text, "{}{},{resonance}", ",,,,,".repeat(4 - finals.len()), event.weight);
            }
        }
    }
    text
}

fn fold(path: &Path) -> Folded {
    let mut detector = common::empty_detector();
    let reach = EtaRange { low: 0.0, high: 4.0 };
    detector.trackers = vec![common::tracker("tracker", Object::Muon, reach, 2e-4, 0.012)];
    let mut channel = common::channel("pair", Decay::Direct(vec![Object::Muon; 2]));
    channel.axis = MassAxis { low: 70.0, high: 110.0, bins: 40, relative: false };
    let mut study = common::study(detector, 91.188, channel);
    study.resonance.source = EventSource::File(EventList { path: path.to_path_buf(), weight: None });
    study.precision = 1e-3;
    fold_channel(&study, 0, 91.188, &|_| ()).expect("a template")
}

#[test]
fn the_same_events_give_the_same_template_in_every_format() {
    let directory = tempfile::tempdir().unwrap();
    // The names say nothing: the content does.
    let lhe = fold(&data("dilepton_200.lhe.gz"));
    for rows_per_event in [true, false] {
        let path = directory.path().join("events.lhe");
        std::fs::write(&path, as_csv(rows_per_event, 1)).unwrap();
        let csv = fold(&path);
        assert_eq!(csv.templates, lhe.templates);
        assert_eq!(csv.record.events_effective, lhe.record.events_effective);
    }
}

/// Several chunks of both layouts, plain and gzip, and the same by the parallel way; events are not cut.
#[test]
fn long_files_are_read_in_parallel() {
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("many.csv");
    for rows_per_event in [true, false] {
        let text = as_csv(rows_per_event, 160);
        assert!(text.len() > 4 << 20, "{}", text.len());
        let serial = read_text(&text);
        assert_eq!(serial.report().events, 200 * 160);
        assert!(serial.events.iter().all(|event| event.particles.len() >= 2));
        for packed in [false, true] {
            if packed {
                let mut encoder =
                    flate2::write::GzEncoder::new(std::fs::File::create(&path).unwrap(), flate2::Compression::fast());
                encoder.write_all(text.as_bytes()).unwrap();
                encoder.finish().unwrap();
            } else {
                std::fs::write(&path, &text).unwrap();
            }
            let parallel = read_parallel(&path);
            assert_eq!(parallel.report(), serial.report());
            assert!(parallel.events == serial.events);
        }
        let broken = text + "x\n";
        std::fs::write(&path, &broken).unwrap();
        assert_eq!(read_parallel(&path).problem().line, read_text(&broken).problem().line);
    }
    // Two chunks of which the second goes back in number.
    let mut back = as_csv(false, 80);
    let body = back[back.find('\n').unwrap() + 1..].to_owned();
    back += &body;
    read_text(&back).assert_refused(Some(back.matches('\n').count() / 2 + 2), &["is 0 after", "rising order"]);
}

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

/// Up to 2 GB of garbage are refused after a bounded part of them.
#[test]
fn endless_garbage_is_refused_early() {
    let wide = WIDE.lines().next().unwrap().to_owned() + "\n";
    let cases: [(&str, &[u8], usize, &str); 6] = [
        ("", b"\0\x01\xff", 2 << 20, "longer than 1048576"),
        ("", b"garbage\n", 1 << 20, "not an event file"),
        (&wide, b"garbage", 2 << 20, "longer than 1048576"),
        (&wide, b"garbage\n", 3 << 20, "1 fields"),
        (&wide, b"\"", 2 << 20, "longer than 1048576"),
        (LONG, b"11,22,50,0,1,1,\n", 2 << 20, "more than 2000 rows"),
    ];
    for (start, pattern, most, words) in cases {
        let mut input = Endless { start: start.as_bytes(), pattern, given: 0, limit: 2 << 30 };
        let reading = read_with(&mut input, &Options::default());
        assert!(reading.problem().message.contains(words), "{}", reading.problem());
        assert!(input.given <= most, "{} bytes read", input.given);
    }
}

#[test]
fn what_is_no_text_is_refused() {
    let directory = tempfile::tempdir().unwrap();
    read_path(directory.path()).assert_refused(None, &["directory"]);
    let mut encoder = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
    encoder.write_all(as_csv(true, 2).as_bytes()).unwrap();
    let packed = encoder.finish().unwrap();
    for length in [3, 10, 100, packed.len() / 2, packed.len() - 8, packed.len() - 1] {
        let problem = read_with(&packed[..length], &Options::default()).problem();
        assert!(problem.message.contains("cut off"), "{problem}");
    }
    let mut damaged = packed.clone();
    damaged[packed.len() / 2] ^= 0x55;
    read_with(damaged.as_slice(), &Options::default()).problem();
}
