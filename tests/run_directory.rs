//! Run directories: written whole or not at all, replaced only by the rules, and read back as they were written.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use peakfold::detector::Detector;
use peakfold::files::{FileDigest, RunContents, RunRecord, Target, TargetError, read_run, shortest};
use peakfold::fold::FoldRecord;
use peakfold::process::{EventSource, Intermediate, Natural, Production, Resonance, Study, Width};
use peakfold::template::{LabelledTemplate, Replicate, Template};
use std::fs;
use std::path::{Path, PathBuf};
use std::process::{Command, Stdio};
use std::time::{Duration, Instant};

fn digest(path: &str, fill: char) -> FileDigest {
    FileDigest { path: path.to_owned(), sha256: fill.to_string().repeat(64) }
}

fn inputs() -> Vec<FileDigest> {
    vec![digest("study.toml", 'a'), digest("detector.toml", 'b')]
}

fn study() -> Study {
    Study {
        name: "a \"quoted\", study".to_owned(),
        detector: Detector {
            name: "none".to_owned(),
            calorimeters: Vec::new(),
            trackers: Vec::new(),
            directions: Vec::new(),
            vertex: None,
            efficiencies: Vec::new(),
            covariances: Vec::new(),
        },
        seed: 7,
        precision: 1e-4,
        max_points: 1 << 20,
        prune_shifts_below: 0.0,
        expected_events: 1e4,
        resonance: Resonance {
            masses_gev: vec![150.0, 180.5],
            width: Width::Gev(0.0),
            natural: Natural::Relativistic,
            falloff_power: 0.0,
            source: EventSource::Generated(Production::Spectrum { pt_mean_gev: 40.0, rapidity_sigma: 1.0 }),
            intermediate: Intermediate { mass_gev: 91.188, width_gev: 2.4955 },
            radiation: None,
        },
        channels: Vec::new(),
    }
}

fn template(mass_gev: f64) -> LabelledTemplate {
    let probability = vec![1e-9, 0.1, 0.5, 1.0 / 3.0, 0.02];
    let replicate = |shift: f64| Replicate {
        probability: probability.iter().map(|p| p * (1.0 + shift)).collect(),
        below_axis: 0.01,
        above_axis: 0.02,
        acceptance: 0.4,
    };
    LabelledTemplate {
        channel: "two-photon".to_owned(),
        category: "central, good".to_owned(),
        mass_gev,
        shift: "nominal".to_owned(),
        template: Template {
            edges_gev: (0..6).map(|k| mass_gev * 0.9 + f64::from(k) * 0.1 * mass_gev / 3.0).collect(),
            error: vec![1e-6; 5],
            list_error: vec![0.0; 5],
            below_axis: 0.01,
            above_axis: 1.0 - 0.01 - probability.iter().sum::<f64>(),
            acceptance: 0.4,
            acceptance_error: 1.25e-5,
            acceptance_list_error: 0.0,
            efficiency: 0.8,
            efficiency_error: 2.5e-6,
            efficiency_list_error: 0.0,
            lost: 3e-21,
            replicates: vec![replicate(-1e-4), replicate(1e-4)],
            probability,
        },
    }
}

fn contents() -> RunContents {
    let folds: Vec<FoldRecord> = [150.0, 180.5]
        .map(|mass_gev| FoldRecord {
            channel: "two-photon".to_owned(),
            mass_gev,
            points: 65536,
            final_points: 65536,
            precision_reached: if mass_gev > 160.0 { f64::INFINITY } else { 8e-5 },
            reached: mass_gev < 160.0,
            cpu_seconds: 0.5,
            wall_seconds: 0.25,
            notes: vec!["a note".to_owned()],
            points_per_event: None,
            events_used: (mass_gev > 160.0).then_some(9000),
            events_effective: (mass_gev > 160.0).then_some(8999.5),
            events_skipped: if mass_gev > 160.0 { vec![("no photon pair".to_owned(), 1000)] } else { Vec::new() },
        })
        .to_vec();
    RunContents {
        record: RunRecord::new(&study(), inputs(), &folds),
        templates: vec![template(150.0), template(180.5)],
        responses: Vec::new(),
        fitted: Vec::new(),
        simulations: Vec::new(),
        models: None,
        further: vec![("figures/two-photon.svg".to_owned(), b"<svg/>".to_vec())],
    }
}

fn write(path: &Path, replace: bool, inputs: &[FileDigest]) -> Result<(), TargetError> {
    let mut contents = contents();
    contents.record.inputs = inputs.to_vec();
    contents.commit(Target::prepare(path, replace, inputs)?).map(|_| ())
}

/// Names in a directory, hidden ones too.
fn names(directory: &Path) -> Vec<String> {
    let mut names: Vec<String> =
        fs::read_dir(directory).unwrap().map(|e| e.unwrap().file_name().into_string().unwrap()).collect();
    names.sort();
    names
}

#[test]
fn a_run_is_read_back_as_it_was_written() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    write(&out, false, &inputs()).unwrap();
    assert_eq!(names(place.path()), ["out"]);
    assert_eq!(names(&out), ["figures", "run.json", "summary.csv", "templates.csv"]);
    let run = read_run(&out).unwrap();
    let mut expected = contents();
    for labelled in &mut expected.templates {
        labelled.template.replicates.clear();
    }
    assert_eq!(run.templates, expected.templates, "every number has the same bits");
    expected.record.files = run.record.files.clone();
    assert_eq!(run.record, expected.record);
    let listed: Vec<&str> = run.record.files.iter().map(|f| f.path.as_str()).collect();
    assert_eq!(listed, ["templates.csv", "summary.csv", "figures/two-photon.svg"]);
    assert_eq!(run.record.not_reached.len(), 1);
    assert!(run.record.not_reached[0].contains("two-photon at 180.5 GeV"), "{:?}", run.record.not_reached);
}

#[test]
fn tables_have_the_promised_columns_and_numbers() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    write(&out, false, &inputs()).unwrap();
    let templates = fs::read_to_string(out.join("templates.csv")).unwrap();
    let mut lines = templates.lines();
    assert_eq!(lines.next(), Some("channel,category,mass_gev,shift,bin,low_gev,high_gev,probability,error,list_error"));
    assert_eq!(lines.next(), Some("two-photon,\"central, good\",150,nominal,0,135,140,1e-9,1e-6,0"));
    assert_eq!(lines.nth(2), Some("two-photon,\"central, good\",150,nominal,3,150,155,0.3333333333333333,1e-6,0"));
    assert_eq!(templates.lines().count(), 11);
    let mut summary = csv::Reader::from_path(out.join("summary.csv")).unwrap();
    let header = summary.headers().unwrap().clone();
    let rows: Vec<csv::StringRecord> = summary.records().map(Result::unwrap).collect();
    let get =
        |row: usize, name: &str| rows[row].get(header.iter().position(|h| h == name).unwrap()).unwrap().to_owned();
    assert_eq!(get(0, "sigma_eff_fraction"), "0.6826894921370859");
    assert_eq!(get(0, "lost"), "3e-21");
    assert_eq!(get(0, "monotone"), "true");
    assert_eq!(
        (get(0, "points"), get(0, "precision_reached"), get(0, "reached")),
        ("65536".into(), "8e-5".into(), "true".into())
    );
    assert_eq!((get(0, "events_used"), get(0, "events_skipped")), (String::new(), String::new()));
    assert_eq!((get(1, "precision_reached"), get(1, "reached")), (String::new(), "false".into()));
    assert_eq!(
        (get(1, "events_used"), get(1, "events_effective"), get(1, "events_skipped")),
        ("9000".into(), "8999.5".into(), "1000".into())
    );
    let widths = template(150.0).template.widths().unwrap();
    assert_eq!(get(0, "peak_gev"), shortest(widths.peak_gev.value.unwrap()));
    assert_eq!(get(0, "sigma_eff_gev_error"), shortest(widths.sigma_eff_gev.error.unwrap()));
}

#[test]
fn the_same_inputs_replace_and_others_need_the_flag() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    write(&out, false, &inputs()).unwrap();
    let templates = fs::read(out.join("templates.csv")).unwrap();
    // Same digests under other names and in another order: the same inputs.
    write(&out, false, &[digest("moved/detector.toml", 'b'), digest("moved/study.toml", 'a')]).unwrap();
    assert_eq!(fs::read(out.join("templates.csv")).unwrap(), templates, "byte-identical");
    let others = [digest("study.toml", 'c'), digest("detector.toml", 'b')];
    let error = write(&out, false, &others).unwrap_err();
    assert!(matches!(error, TargetError::NeedsReplace(_)) && error.to_string().contains("--replace"), "{error}");
    assert_eq!(read_run(&out).unwrap().record.inputs[0].sha256, "b".repeat(64), "the old result is unharmed");
    write(&out, true, &others).unwrap();
    assert_eq!(read_run(&out).unwrap().record.inputs, others);
    // Another version of the program is another result.
    let text = fs::read_to_string(out.join("run.json")).unwrap();
    let version = format!("\"version\": \"{}\"", env!("CARGO_PKG_VERSION"));
    assert!(text.contains(&version));
    fs::write(out.join("run.json"), text.replace(&version, "\"version\": \"0.0.0\"")).unwrap();
    assert!(matches!(write(&out, false, &others), Err(TargetError::NeedsReplace(_))));
    assert_eq!(names(place.path()), ["out"]);
}

#[test]
fn what_no_run_wrote_is_never_deleted() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    fs::create_dir(&out).unwrap();
    assert!(matches!(write(&out, false, &inputs()), Err(TargetError::NeedsReplace(_))), "an empty directory exists");
    write(&out, true, &inputs()).unwrap();
    for foreign in ["notes.txt", "figures/mine.svg", "more/deep.txt"] {
        fs::create_dir_all(out.join(foreign).parent().unwrap()).unwrap();
        fs::write(out.join(foreign), "mine").unwrap();
        let error = write(&out, true, &inputs()).unwrap_err();
        assert!(error.to_string().contains(foreign), "{error}");
        assert_eq!(fs::read_to_string(out.join(foreign)).unwrap(), "mine");
        fs::remove_file(out.join(foreign)).unwrap();
        let _ = fs::remove_dir(out.join("more"));
    }
    let mine = place.path().join("mine");
    fs::create_dir(&mine).unwrap();
    for contents in ["", "{}", "{\"program\":\"other\",\"version\":\"1\",\"inputs\":[],\"files\":[]}"] {
        fs::write(mine.join("run.json"), contents).unwrap();
        assert!(matches!(write(&mine, true, &inputs()), Err(TargetError::NotARun(_))), "{contents}");
        assert_eq!(fs::read_to_string(mine.join("run.json")).unwrap(), contents);
    }
    assert_eq!(names(place.path()), ["mine", "out"]);
}

#[test]
fn impossible_places_are_named_before_the_work() {
    let place = tempfile::tempdir().unwrap();
    let file = place.path().join("file");
    fs::write(&file, "mine").unwrap();
    let prepare = |path: PathBuf| Target::prepare(&path, true, &inputs()).unwrap_err();
    let error = prepare(file.clone());
    assert!(matches!(error, TargetError::NotADirectory(_)) && error.to_string().contains("file"), "{error}");
    assert!(matches!(prepare(file.join("below")), TargetError::NoParent { .. }));
    assert!(matches!(prepare(place.path().join("none/out")), TargetError::NoParent { .. }));
    assert!(matches!(prepare(PathBuf::from("/")), TargetError::NoName(_)));
    assert!(matches!(prepare(PathBuf::from("..")), TargetError::NoName(_)));
    assert!(matches!(prepare(PathBuf::new()), TargetError::NoName(_)));
    // No process may make a directory there, not even one of the superuser.
    if cfg!(target_os = "linux") {
        let error = prepare(PathBuf::from("/proc/out"));
        assert!(matches!(error, TargetError::Io { .. }) && error.to_string().contains("/proc/out"), "{error}");
    }
    assert_eq!(fs::read_to_string(&file).unwrap(), "mine");
    assert_eq!(names(place.path()), ["file"]);
}

#[test]
fn a_failure_in_the_middle_leaves_the_old_result() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    let fail = |out: &Path| {
        Target::prepare(out, true, &inputs()).unwrap().commit(|staging| {
            staging.write("templates.csv", |file| file.write_all(b"half"))?;
            staging.write("summary.csv", |_| Err(std::io::Error::from(std::io::ErrorKind::StorageFull)))
        })
    };
    let error = fail(&out).unwrap_err();
    assert!(error.to_string().contains("summary.csv"), "{error}");
    assert!(names(place.path()).is_empty());
    write(&out, false, &inputs()).unwrap();
    let before = read_run(&out).unwrap();
    fail(&out).unwrap_err();
    // A number that cannot be written, found after templates of earlier masses have been.
    let mut bad = contents();
    bad.templates[1].template.probability[3] = f64::NAN;
    let error = bad.commit(Target::prepare(&out, true, &inputs()).unwrap()).unwrap_err();
    assert!(error.to_string().contains("180.5 GeV"), "{error}");
    // Given up, and panicked.
    drop(Target::prepare(&out, true, &inputs()).unwrap());
    let target = Target::prepare(&out, true, &inputs()).unwrap();
    let panicked = std::panic::catch_unwind(std::panic::AssertUnwindSafe(|| target.commit(|_| panic!("on purpose"))));
    assert!(panicked.is_err());
    assert_eq!(names(place.path()), ["out"]);
    assert_eq!(read_run(&out).unwrap(), before);
}

#[test]
fn what_appears_during_the_work_is_not_overwritten() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    let target = Target::prepare(&out, false, &inputs()).unwrap();
    fs::create_dir(&out).unwrap();
    fs::write(out.join("notes.txt"), "mine").unwrap();
    assert!(matches!(contents().commit(target), Err(TargetError::NotARun(_))));
    assert_eq!(fs::read_to_string(out.join("notes.txt")).unwrap(), "mine");
    assert_eq!(names(place.path()), ["out"]);
}

#[cfg(unix)]
#[test]
fn a_link_is_kept_and_its_directory_replaced() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    write(&out, false, &inputs()).unwrap();
    let link = place.path().join("link");
    std::os::unix::fs::symlink(&out, &link).unwrap();
    write(&link, false, &inputs()).unwrap();
    assert!(fs::symlink_metadata(&link).unwrap().is_symlink());
    read_run(&link).unwrap();
    fs::remove_dir_all(&out).unwrap();
    assert!(matches!(write(&link, true, &inputs()), Err(TargetError::Io { .. })), "it leads nowhere");
}

#[test]
fn changed_files_are_noticed() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    for name in ["templates.csv", "summary.csv"] {
        write(&out, false, &inputs()).unwrap();
        let text = fs::read_to_string(out.join(name)).unwrap();
        fs::write(out.join(name), text.replace("150", "151")).unwrap();
        let problems = read_run(&out).unwrap_err().to_string();
        assert!(problems.contains(name) && problems.contains("changed"), "{problems}");
        fs::remove_file(out.join(name)).unwrap();
        let problems = read_run(&out).unwrap_err().to_string();
        assert!(problems.contains(name) && problems.contains("cannot be read"), "{problems}");
    }
    fs::write(out.join("run.json"), "{\n\"program\": 3}").unwrap();
    let problems = read_run(&out).unwrap_err().to_string();
    assert!(problems.contains("run.json:2"), "{problems}");
    assert!(read_run(&place.path().join("none")).is_err());
}

/// Not a test by itself: what the interrupted process of the next test does.
#[test]
fn waits_to_be_interrupted() {
    let Some(out) = std::env::var_os("PEAKFOLD_TEST_INTERRUPT") else { return };
    peakfold::files::remove_unfinished_on_interrupt().unwrap();
    let target = Target::prepare(Path::new(&out), true, &inputs()).unwrap();
    let _ = target.commit(|staging| {
        staging.write("templates.csv", |file| file.write_all(b"half"))?;
        fs::write(Path::new(&out).with_file_name("ready"), "").unwrap();
        std::thread::sleep(Duration::from_secs(60));
        Ok(())
    });
}

#[cfg(unix)]
#[test]
fn an_interrupt_leaves_the_old_result_and_status_130() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    write(&out, false, &inputs()).unwrap();
    let before = read_run(&out).unwrap();
    let mut child = Command::new(std::env::current_exe().unwrap())
        .args(["--exact", "waits_to_be_interrupted", "--nocapture"])
        .env("PEAKFOLD_TEST_INTERRUPT", &out)
        .stdout(Stdio::null())
        .stderr(Stdio::null())
        .spawn()
        .unwrap();
    let started = Instant::now();
    while !place.path().join("ready").exists() {
        assert!(started.elapsed() < Duration::from_secs(30), "the child did not start");
        std::thread::sleep(Duration::from_millis(10));
    }
    assert_eq!(names(place.path()).len(), 3, "result, ready, and the hidden sibling");
    assert!(Command::new("kill").args(["-INT", &child.id().to_string()]).status().unwrap().success());
    assert_eq!(child.wait().unwrap().code(), Some(130));
    assert_eq!(names(place.path()), ["out", "ready"]);
    assert_eq!(read_run(&out).unwrap(), before);
}
