//! `peakfold check`: the whole description of a small study, problems, usage and a reader that stops early.
#![allow(clippy::unwrap_used, clippy::expect_used)]

use std::io::{BufRead, BufReader};
use std::path::Path;
use std::process::{Command, Output, Stdio};

/// The PbWO4 matrix of P. Adzic et al., JINST 2 (2007) P04004 (its noise second-hand) as the photon's calorimeter, and
/// a tracker of 13 points without material, whose curvature term follows from the exact uniform-spacing factor.
const DETECTOR: &str = r#"
name = "Small detector"

[[calorimeter]]
name = "photon-crystals"
object = "photon"
eta = [0.0, 2.5]
stochastic = 0.028
noise_gev = 0.12
constant = 0.003
uncertainty = { scale = 0.001, constant = 0.0005 }
share = { scale = "em-scale" }

[[calorimeter]]
name = "electron-whole"
object = "electron"
eta = [0.0, 2.5]
stochastic = 0.1
fraction = 0.75

[[calorimeter]]
name = "electron-showering"
object = "electron"
eta = [0.0, 2.5]
stochastic = 0.2
bias = -0.01
tail = { alpha_low = 1.25, n_low = 3.0, alpha_high = 2.0, n_high = 8.0 }
fraction = 0.25

[[tracker]]
name = "electron-track"
object = "electron"
eta = [0.0, 1.0]
curvature_per_gev = 3e-4
scattering = 0.004

[[tracker]]
name = "muon-track"
object = "muon"
eta = [0.0, 2.5]
geometry = { field_t = 3.8, inner_radius_m = 0.04, lever_arm_m = 1.1, points = 13, point_resolution_um = 20.0, radiation_lengths = 0.0, vertex_constraint = false }

[[direction]]
object = "photon"
sigma_theta_mrad = 1.5
sigma_phi_mrad = 1.0

[vertex]
calorimeter_radius_m = 1.5
right_choice = 0.8
spread_right_mm = 0.1
spread_wrong_mm = 45.0
"#;

const STUDY: &str = r#"
name = "Small study"
detector = "detector.toml"
seed = 7
precision = 1e-2
max_points = 1048576

[resonance]
masses_gev = [125.0, 250.0]
width = { gev = 0.5 }
falloff_power = 4.0
production = { pt_mean_gev = 40.0, rapidity_sigma = 1.2 }

[[channel]]
name = "two-photon"
legs = ["photon", "photon"]
max_abs_eta = 2.4
gap_abs_eta = [1.4, 1.5]
min_pt_over_mass = [0.35, 0.25]
mass_axis = { low_gev = 0.8, high_gev = 1.2, bins = 100, relative = true }
[[channel.category]]
name = "central"
max_abs_eta = 1.4
[[channel.category]]
name = "rest"

[[channel]]
name = "four-lepton"
via = [["electron", "electron"], ["muon", "muon"]]
min_pt_gev = [20.0, 10.0]
mass_axis = { low_gev = 90.0, high_gev = 290.0, bins = 80 }
shape = "gauss-exp"
"#;

// Checked by hand. Photon: 2.8 %/sqrt(E) (+) 0.12 GeV/E (+) 0.3 %, as tabulated at 10 and 100 GeV to 1.5212 and
// 0.4276 %; electron: 10 % and 20 %/sqrt(E); electron track: 3e-4 pT (+) 0.4 %; muon track: curvature term
// 20e-6/(0.299792458 3.8 1.1^2) times the exact factor 6.436658250 for 13 points (R. L. Gluckstern, NIM 24 (1963) 381,
// by direct least squares) = 9.3390e-5 per GeV. "~" stands for what is estimated anew on each machine.
const EXPECTED: &str = r#"study "Small study" (study.toml)
  masses      125, 250 GeV
  width       0.5 GeV, relativistic Breit-Wigner, produced as (m/M)^-4 across it
  events      generated: exponential pT of mean 40 GeV, Gaussian rapidity of standard deviation 1.2
  cascade V   91.188 GeV with a width of 2.4955 GeV
  precision   0.01 of the highest bin, RMS over bins; at most 1,048,576 points per channel and mass
  seed        7

detector "Small detector"
  photon calorimeter: sigma_E/E, in % at E
    |eta|         entry                 10 GeV    50 GeV   100 GeV   200 GeV
    0 to 2.5      photon-crystals        1.521     0.552     0.428     0.364
                  Gaussian
                  known to: scale 0.001 (with em-scale), constant 0.0005
  photon direction: theta to 1.5 mrad, phi to 1 mrad
  electron calorimeter: sigma_E/E, in % at E
    |eta|         entry                 10 GeV    50 GeV   100 GeV   200 GeV
    0 to 2.5      electron-whole         3.162     1.414     1.000     0.707
                  fraction 0.75 of the electrons; Gaussian
    0 to 2.5      electron-showering     6.325     2.828     2.000     1.414
                  fraction 0.25 of the electrons; bias -0.01; tails from 1.25 sigma below (power 3)
                    and 2 sigma above (power 8)
  electron tracker: sigma_pT/pT, in the middle of the region, in % at pT
    |eta|         entry                 10 GeV    50 GeV   100 GeV   500 GeV
    0 to 1        electron-track         0.500     1.552     3.027    15.005
    where both measure, the energy is their mean weighted by 1/sigma^2
  muon tracker: sigma_pT/pT, in the middle of the region, in % at pT
    |eta|         entry                 10 GeV    50 GeV   100 GeV   500 GeV
    0 to 2.5      muon-track             0.093     0.467     0.934     4.670
                  13 points of 20 um from 0.04 m over 1.1 m in 3.8 T, 0 radiation lengths, without
                    vertex constraint
  vertex: right in a fraction 0.8 of events, to 0.1 mm; else off by 45 mm; calorimeter at radius 1.5
      m, no endcap

channel two-photon: X -> photon photon
  cuts        |eta| below 2.4; true |eta| outside 1.4 to 1.5; pT in falling order above 0.35, 0.25
              of the mass
  categories  central (every |eta| below 1.4); rest
  shape       double-sided Crystal Ball, for the fit of the templates
  mass axis   100 bins, in GeV:
    mass point         125       250
    from               100       200
    to                 150       300
    bin width          0.5         1

channel four-lepton: X -> V V(*), V -> electron electron, V -> muon muon
  cuts        |eta| within the detector's coverage; pT in falling order above 20, 10 GeV
  categories  all
  shape       Gaussian with exponential tails, for the fit of the templates
  mass axis   80 bins, in GeV:
    mass point         125       250
    from                90        90
    to                 290       290
    bin width          2.5       2.5

cost, with the points of one nominal template and the time of all masses and shifts: estimates
  channel      templates  shifts   points at most        points    CPU time
  two-photon 4 2 1,048,576 ~
  four-lepton 2 0 1,048,576 ~
  estimated time: ~ with 2 threads, from coarse folds and error ~ points^-0.6

no problems
"#;

fn write_study(directory: &Path, detector: &str, study: &str) {
    std::fs::write(directory.join("detector.toml"), detector).unwrap();
    std::fs::write(directory.join("study.toml"), study).unwrap();
}

fn peakfold(directory: &Path, arguments: &[&str]) -> Output {
    Command::new(env!("CARGO_BIN_EXE_peakfold"))
        .args(arguments)
        .current_dir(directory)
        .env("RAYON_NUM_THREADS", "2")
        .output()
        .unwrap()
}

fn stdout(output: &Output) -> String {
    String::from_utf8(output.stdout.clone()).unwrap()
}

fn stderr(output: &Output) -> String {
    String::from_utf8(output.stderr.clone()).unwrap()
}

/// The report with the estimated points and times replaced by `~`, and the points that were found.
fn without_estimates(report: &str, channels: &[&str]) -> (String, Vec<u64>) {
    let mut points = Vec::new();
    let mut lines = Vec::new();
    for line in report.lines() {
        let words: Vec<&str> = line.split_whitespace().collect();
        if channels.iter().any(|name| words.first() == Some(name)) {
            points.push(words[4].replace(',', "").parse().unwrap());
            assert!(line.ends_with(" s") || line.ends_with(" min") || line.ends_with(" h"), "{line}");
            lines.push(format!("  {} {} {} {} ~", words[0], words[1], words[2], words[3]));
        } else if let Some(time) = line.strip_prefix("  estimated time: ") {
            let (_, method) = time.split_once(" with ").unwrap();
            lines.push(format!("  estimated time: ~ with {method}"));
        } else {
            lines.push(line.to_owned());
        }
    }
    (lines.join("\n") + "\n", points)
}

#[test]
fn says_what_a_study_would_compute() {
    let directory = tempfile::tempdir().unwrap();
    write_study(directory.path(), DETECTOR, STUDY);
    let output = peakfold(directory.path(), &["check", "study.toml"]);
    assert_eq!(stderr(&output), "");
    assert_eq!(output.status.code(), Some(0));
    let (report, points) = without_estimates(&stdout(&output), &["two-photon", "four-lepton"]);
    assert_eq!(report, EXPECTED);
    assert_eq!(points.len(), 2);
    assert!(points.iter().all(|points| (4096..=1048576).contains(points)), "{points:?}");
    for line in stdout(&output).lines() {
        assert!(line.chars().count() <= 100, "too long: {line}");
    }
    let names: Vec<_> = std::fs::read_dir(directory.path()).unwrap().map(|entry| entry.unwrap().file_name()).collect();
    assert_eq!(names.len(), 2, "check writes nothing: {names:?}");
}

#[test]
fn expects_the_points_that_a_fold_takes() {
    // What the estimate says is compared with a fold at the precision itself; a factor of 4 either way is what an
    // estimate from a coarse fold can promise.
    let directory = tempfile::tempdir().unwrap();
    write_study(directory.path(), DETECTOR, &STUDY.replace("precision = 1e-2", "precision = 1e-3"));
    let output = peakfold(directory.path(), &["check", "study.toml"]);
    let (_, points) = without_estimates(&stdout(&output), &["two-photon", "four-lepton"]);
    let study = peakfold::files::load_study(&directory.path().join("study.toml")).unwrap().study;
    for (channel, expected) in points.iter().enumerate() {
        let used = peakfold::fold::fold_channel(&study, channel, 250.0, &|_| ()).unwrap().record.points;
        let ratio = *expected as f64 / used as f64;
        assert!((0.25..=4.0).contains(&ratio), "channel {channel}: expected {expected} points, used {used}");
    }
}

#[test]
fn warns_when_the_points_do_not_suffice() {
    let directory = tempfile::tempdir().unwrap();
    let study = STUDY.replace("precision = 1e-2", "precision = 1e-6").replace("1048576", "65536");
    write_study(directory.path(), DETECTOR, &study);
    let output = peakfold(directory.path(), &["check", "study.toml"]);
    assert_eq!(output.status.code(), Some(0));
    let short = "two-photon: the precision 0.000001 may take more than the 65,536 points allowed";
    assert!(stdout(&output).contains(short), "{}", stdout(&output));
}

#[test]
fn warns_when_no_event_passes() {
    let directory = tempfile::tempdir().unwrap();
    // Two photons of a 250 GeV resonance cannot both have 0.9 of its mass.
    write_study(directory.path(), DETECTOR, &STUDY.replace("[0.35, 0.25]", "[0.9, 0.9]"));
    let output = peakfold(directory.path(), &["check", "study.toml"]);
    assert_eq!(output.status.code(), Some(0));
    let notes = stdout(&output).lines().filter(|line| line.contains("no event")).map(str::to_owned).collect::<Vec<_>>();
    assert_eq!(notes, ["  two-photon: no event of the coarse fold passed the cuts; check them"]);
}

/// How legs are chosen is said for events of a file only.
#[test]
fn says_how_legs_are_chosen() {
    let directory = tempfile::tempdir().unwrap();
    let events = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/lhe/x_radiating.lhe.gz");
    std::fs::copy(events, directory.path().join("truth.lhe.gz")).unwrap();
    let detector =
        "name = \"d\"\n[[calorimeter]]\nname = \"e\"\nobject = \"electron\"\neta = [0, 4]\nstochastic = 0.1\n";
    let study = "name = \"s\"\ndetector = \"detector.toml\"\nprecision = 0.1\n[resonance]\nmasses_gev = [91.188]\n\
                 events = \"truth.lhe.gz\"\nradiation = { recombination_delta_r = 0.2 }\n\
                 [[channel]]\nname = \"ee\"\nlegs = [\"electron\", \"electron\"]\npick = \"nearest\"\n\
                 mass_axis = { low_gev = 20.0, high_gev = 200.0, bins = 60 }\n";
    write_study(directory.path(), detector, study);
    let output = peakfold(directory.path(), &["check", "study.toml"]);
    assert_eq!(output.status.code(), Some(0), "{}", stderr(&output));
    let words: Vec<String> = stdout(&output).split_whitespace().map(str::to_owned).collect();
    let said = "legs those that a resonance row decays to, else those nearest to the mass point; leptons with the photons \
                within a distance of 0.2";
    assert!(words.join(" ").contains(said), "{}", stdout(&output));
}

#[test]
fn names_all_problems_of_both_files_at_once() {
    let directory = tempfile::tempdir().unwrap();
    let detector = DETECTOR.replace("constant = 0.003", "constant = -0.003").replace("n_low = 3.0", "n_low = 0.5");
    let study = STUDY.replace("seed = 7", "sede = 7").replace("bins = 80", "bins = 0");
    write_study(directory.path(), &detector, &study);
    let output = peakfold(directory.path(), &["check", "study.toml"]);
    assert_eq!(output.status.code(), Some(1));
    assert_eq!(stdout(&output), "");
    let said = stderr(&output);
    assert!(said.lines().all(|line| line.starts_with("peakfold: ")), "{said}");
    for (file, part) in
        [("detector.toml", "constant"), ("detector.toml", "n_low"), ("study.toml", "sede"), ("study.toml", "bins")]
    {
        assert!(said.lines().any(|line| line.contains(file) && line.contains(part)), "{file} {part}: {said}");
    }
    assert_eq!(said.lines().count(), 4, "{said}");
}

#[test]
fn a_missing_study_is_a_problem_of_the_input() {
    let directory = tempfile::tempdir().unwrap();
    let output = peakfold(directory.path(), &["check", "nowhere.toml"]);
    assert_eq!(output.status.code(), Some(1));
    assert_eq!(stdout(&output), "");
    assert!(stderr(&output).starts_with("peakfold: nowhere.toml: "), "{}", stderr(&output));
}

#[test]
fn wrong_usage_has_its_own_status() {
    let directory = tempfile::tempdir().unwrap();
    for arguments in [&[][..], &["chekc"], &["check"], &["check", "a", "b"], &["check", "--deep", "a"]] {
        let output = peakfold(directory.path(), arguments);
        assert_eq!(output.status.code(), Some(2), "{arguments:?}");
        assert_eq!(stdout(&output), "", "{arguments:?}");
        assert!(!stderr(&output).is_empty(), "{arguments:?}");
    }
}

#[test]
fn help_and_version_are_results() {
    let directory = tempfile::tempdir().unwrap();
    let version = peakfold(directory.path(), &["--version"]);
    assert_eq!(version.status.code(), Some(0));
    assert_eq!(stdout(&version), format!("peakfold {}\n", env!("CARGO_PKG_VERSION")));
    let help = peakfold(directory.path(), &["--help"]);
    assert_eq!(help.status.code(), Some(0));
    for part in ["PEAKFOLD_VECTORS=narrow", "Exit status:", "check"] {
        assert!(stdout(&help).contains(part), "{part}: {}", stdout(&help));
    }
}

#[test]
fn a_reader_that_stops_early_is_no_failure() {
    let directory = tempfile::tempdir().unwrap();
    // Enough mass points that the description is longer than what a pipe holds (64 KiB on Linux).
    let masses: Vec<String> = (0..2000).map(|i| format!("{}.0", 100 + i)).collect();
    let study = STUDY.replace("125.0, 250.0", &masses.join(", "));
    write_study(directory.path(), DETECTOR, &study);
    let mut child = Command::new(env!("CARGO_BIN_EXE_peakfold"))
        .args(["check", "study.toml"])
        .current_dir(directory.path())
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .unwrap();
    let mut first = String::new();
    // The reader, and with it the pipe, is gone after one line.
    BufReader::with_capacity(16, child.stdout.take().unwrap()).read_line(&mut first).unwrap();
    assert!(first.starts_with("study "), "{first}");
    let output = child.wait_with_output().unwrap();
    assert_eq!(stderr(&output), "");
    assert_eq!(output.status.code(), Some(0));
}

/// A study of events from a file, in two channels.
fn list_study(events: &str) -> String {
    let study = STUDY
        .replace("production = { pt_mean_gev = 40.0, rapidity_sigma = 1.2 }", &format!("events = \"{events}\""))
        .replace("[125.0, 250.0]", "[125.0]")
        .replace("via = [[\"electron\", \"electron\"], [\"muon\", \"muon\"]]", "legs = [\"muon\", \"muon\"]")
        .replace("four-lepton", "two-muon");
    study.replace("min_pt_gev = [20.0, 10.0]\n", "")
}

/// Five events: two of two photons (m² = 2 pT1 pT2 (cosh(d eta) - cos(d phi)) = 50² 4 and 60² 4), two of two muons, one of them
/// with its true mass, and one photon alone.
const EVENTS_CSV: &str = "event,code,pt_gev,eta,phi_rad,weight,true_mass_gev\n\
                          1,22,50,0,0,2,\n1,22,50,0,3.141592653589793,2,\n\
                          2,22,60,0,0,-0.5,\n2,22,60,0,3.141592653589793,-0.5,\n\
                          3,13,50,0.5,0,1,125.5\n3,-13,50,-0.5,3,1,125.5\n\
                          4,13,40,0,0,1,130.25\n4,-13,40,0.25,3,1,130.25\n\
                          5,22,10,0,0,1,\n";

const EXPECTED_CSV: &str = "events, of 5 in the file; true mass in GeV
  channel           used     skipped    weight sum   effective  mass from         to
  two-photon           2           3           1.5    0.529412        100        120
  two-muon             2           3             2           2      125.5     130.25
  two-photon: 1 of the events used have a negative weight
  two-photon: 2 skipped, no particle of a kind that the channel needs (first at line 6)
  two-photon: 1 skipped, too few particles of a kind (first at line 10)
  two-muon: 3 skipped, no particle of a kind that the channel needs (first at line 2)
";

/// The part of a report between the channels and the cost, and the whole report without it.
fn events_part(report: &str) -> (String, String) {
    let begin = report.find("events, of ").unwrap();
    let end = report.find("\ncost, ").unwrap();
    (report[begin..end].to_owned(), format!("{}{}", &report[..begin], &report[end + 1..]))
}

#[test]
fn says_what_a_file_of_events_holds() {
    let directory = tempfile::tempdir().unwrap();
    write_study(directory.path(), DETECTOR, &list_study("truth.csv"));
    std::fs::write(directory.path().join("truth.csv"), EVENTS_CSV).unwrap();
    let output = peakfold(directory.path(), &["check", "study.toml"]);
    assert_eq!(stderr(&output), "");
    assert_eq!(output.status.code(), Some(0));
    let (part, rest) = events_part(&stdout(&output));
    // Effective: (2 - 0.5)²/(2² + 0.5²) = 2.25/4.25.
    assert_eq!(part, EXPECTED_CSV);
    // The rest is the report of a generated study but for what the study says differently.
    let (rest, points) = without_estimates(&rest, &["two-photon", "two-muon"]);
    assert_eq!(points.len(), 2);
    let generated = "generated: exponential pT of mean 40 GeV, Gaussian rapidity of standard deviation 1.2";
    let head = EXPECTED
        .split("\nchannel four-lepton")
        .next()
        .unwrap()
        .replace("masses      125, 250 GeV", "masses      125 GeV")
        .replace(generated, "read from truth.csv")
        .replace(
            "photon photon\n",
            "photon photon\n  legs        those that a resonance row decays to, else the hardest\n",
        )
        .replace("  cascade V   91.188 GeV with a width of 2.4955 GeV\n", "")
        .replace("       250\n    from               100       200", "\n    from               100")
        .replace("       300\n    bin width          0.5         1", "\n    bin width          0.5");
    assert!(rest.starts_with(&head), "{rest}\n{head}");
    assert!(rest.ends_with("no problems\n"));
    for line in stdout(&output).lines() {
        assert!(line.chars().count() <= 100, "too long: {line}");
    }
}

#[test]
fn the_same_for_les_houches_events() {
    let directory = tempfile::tempdir().unwrap();
    let sample = |name: &str| {
        std::fs::read_to_string(Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/lhe").join(name)).unwrap()
    };
    // Three events of two photons at 125 GeV with a named weight: 44.1, -43.9 and 44, of which 44.2²/5808.02 count; no muons.
    std::fs::write(directory.path().join("truth.lhe"), sample("x_gammagamma_v3weights.lhe")).unwrap();
    let study = list_study("truth.lhe").replace("events = ", "weight = \"1002\"\nevents = ");
    let (one, two) = (study.find("[[channel]]\nname = \"two-muon\"").unwrap(), study.len());
    let photons = study[..one].to_owned() + &study[two..];
    write_study(directory.path(), DETECTOR, &photons);
    let output = peakfold(directory.path(), &["check", "study.toml"]);
    assert_eq!(stderr(&output), "");
    assert!(stdout(&output).contains("  events      read from truth.lhe, weight `1002`\n"), "{}", stdout(&output));
    let expected = "events, of 3 in the file; true mass in GeV
  channel           used     skipped    weight sum   effective  mass from         to
  two-photon           3           0          44.2    0.336369        125        125
  two-photon: 1 of the events used have a negative weight
";
    assert_eq!(events_part(&stdout(&output)).0, expected);
    // A channel that no event serves is refused, with the reasons; a bad event is counted.
    write_study(directory.path(), DETECTOR, &study);
    let output = peakfold(directory.path(), &["check", "study.toml"]);
    assert_eq!(output.status.code(), Some(1));
    assert_eq!(stdout(&output), "");
    assert!(
        stderr(&output).contains("truth.lhe: no event serves channel `two-muon` (3: no particle"),
        "{}",
        stderr(&output)
    );
}

#[test]
fn kinematic_problems_are_counted() {
    let directory = tempfile::tempdir().unwrap();
    write_study(directory.path(), DETECTOR, &list_study("truth.csv"));
    let mut text = EVENTS_CSV.to_owned();
    for event in 6..200 {
        text += &format!("{event},22,10,0,0,1,\n");
    }
    text += "200,22,-10,0,0,1,\n";
    std::fs::write(directory.path().join("truth.csv"), text).unwrap();
    let output = peakfold(directory.path(), &["check", "study.toml"]);
    let said = stdout(&output);
    for part in [
        "two-muon: 1 skipped, kinematics that contradict themselves (first at line 205)",
        "note: 1 of 200 events were left out because they contradict themselves: 1 x an energy, a",
    ] {
        assert!(said.contains(part), "{part}: {said}");
    }
}
