//! `fold` and `check` with event files that cannot be used: exit 1, a message, nothing written.
#![allow(clippy::unwrap_used, clippy::expect_used)]

use std::io::Write;
use std::path::Path;
use std::process::Command;

const DETECTOR: &str = "name = \"D\"\n[[tracker]]\nname = \"t\"\nobject = \"muon\"\neta = [0.0, 4.0]\n\
                        curvature_per_gev = 2e-4\nscattering = 0.01\n";

const STUDY: &str = "name = \"S\"\ndetector = \"detector.toml\"\nprecision = 1e-2\n[resonance]\nmasses_gev = [91.2]\n\
                     events = \"events\"\n[[channel]]\nname = \"pair\"\nlegs = [\"muon\", \"muon\"]\n\
                     mass_axis = { low_gev = 70.0, high_gev = 110.0, bins = 20 }\n";

const GOOD: &str =
    "code1,pt1_gev,eta1,phi1_rad,code2,pt2_gev,eta2,phi2_rad,weight\n13,45.5,0.5,1.25,-13,44.5,-0.25,-1.875,1\n";

fn gzip(bytes: &[u8]) -> Vec<u8> {
    let mut encoder = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
    encoder.write_all(bytes).unwrap();
    encoder.finish().unwrap()
}

/// Runs both commands on the content of the event file; gives what they say.
fn run(directory: &Path, command: &[&str]) -> (Option<i32>, String, String) {
    let output = Command::new(env!("CARGO_BIN_EXE_peakfold")).args(command).current_dir(directory).output().unwrap();
    let text = |bytes: Vec<u8>| String::from_utf8(bytes).unwrap();
    (output.status.code(), text(output.stdout), text(output.stderr))
}

fn study(content: Option<&[u8]>) -> tempfile::TempDir {
    let directory = tempfile::tempdir().unwrap();
    std::fs::write(directory.path().join("detector.toml"), DETECTOR).unwrap();
    std::fs::write(directory.path().join("study.toml"), STUDY).unwrap();
    match content {
        Some(content) => std::fs::write(directory.path().join("events"), content).unwrap(),
        None => std::fs::create_dir(directory.path().join("events")).unwrap(),
    }
    directory
}

#[test]
fn bad_event_files_leave_nothing_behind() {
    let lhe = std::fs::read_to_string(Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/lhe/x_zz4l.lhe")).unwrap();
    let (first, rest) = lhe.split_once("<event>\n").unwrap();
    let weightless = {
        let mut words = rest.split_whitespace();
        let weight = words.nth(2).unwrap();
        format!("{first}<event>\n{}", rest.replace(weight, "0.0"))
    };
    let photons = std::fs::read(Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/lhe/x_gammagamma.lhe")).unwrap();
    let packed = [gzip(lhe.as_bytes()), gzip(GOOD.as_bytes())];
    let row = GOOD.split_once('\n').unwrap().1;
    let cases: Vec<(Option<Vec<u8>>, &str)> = vec![
        (None, "is a directory"),
        (Some(Vec::new()), "is empty"),
        (Some(packed[0][..packed[0].len() / 2].to_vec()), "cut off"),
        (Some(packed[1][..packed[1].len() - 3].to_vec()), "cut off"),
        (Some(b"\x00\x01\xfe".repeat(100_000)), "not an event file"),
        (Some(b"garbage\n".repeat(100_000)), "not an event file"),
        (Some(b"g".repeat(3 << 20)), "longer than 1048576"),
        (Some(format!("{lhe}{}", "x".repeat(2 << 20)).into_bytes()), "longer than 1048576"),
        (Some(format!("{GOOD}{}", "1".repeat(2 << 20)).into_bytes()), "longer than 1048576"),
        (Some(photons), "no event serves channel `pair`"),
        (Some(GOOD.replace("13,", "11,").into_bytes()), "no event serves channel `pair`"),
        (Some(weightless.into_bytes()), "have weight 0"),
        (Some(GOOD.replace(",1\n", ",0\n").into_bytes()), "have weight 0"),
        (Some(GOOD.replace(",1\n", ",-1\n").into_bytes()), "positive, finite sum"),
        (Some(lhe.replacen("e+01", "e+0x", 1).into_bytes()), "not a number"),
        (Some(GOOD.replace("45.5", "45,5").into_bytes()), "10 fields, the header 9"),
        (Some(GOOD.replace("45.5", "fast").into_bytes()), "pt1_gev: is `fast`, which is not a number"),
        (Some(GOOD.replace(",eta1", "").into_bytes()), "eta1: the column is missing"),
        (Some(format!("{GOOD}{}", row.replace("45.5", "-45.5")).into_bytes()), "1 of 2 events contradict themselves"),
    ];
    for (content, words) in cases {
        let directory = study(content.as_deref());
        for command in [&["fold", "study.toml", "-o", "out", "--quiet"][..], &["check", "study.toml"]] {
            let (status, out, err) = run(directory.path(), command);
            assert_eq!(status, Some(1), "{words}: {err}");
            assert_eq!(out, "", "{words}");
            assert!(err.contains(words) && err.contains("events"), "{words}: {err}");
            let left = std::fs::read_dir(directory.path()).unwrap().count();
            assert_eq!(left, 3, "{words}: something was written");
        }
    }
}

#[test]
fn mixed_line_ends_are_fine() {
    let directory = study(Some(GOOD.replacen('\n', "\r\n", 1).as_bytes()));
    let (status, _, err) = run(directory.path(), &["fold", "study.toml", "-o", "out", "--quiet"]);
    assert_eq!((status, err.as_str()), (Some(0), ""));
}
