//! Bad detector and study files: which line and key is named, and what is said.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use std::path::{Path, PathBuf};

use peakfold::files::{LoadedStudy, load_study};
use peakfold::problem::{Problem, Problems};
use peakfold::process::{Ancestry, LegChoice, Pairing, Pick, Radiation, Simulated, SimulatedUse};

const DETECTOR: &str = include_str!("inputs/detector.toml");
const STUDY: &str = include_str!("inputs/study.toml");
const SPECTRUM: &str = include_str!("inputs/spectrum.csv");
const EFFICIENCY: &str = include_str!("inputs/efficiency.csv");

/// A directory with the three files, each as given.
struct Pair {
    directory: tempfile::TempDir,
}

impl Pair {
    fn new(study: &str, detector: &str) -> Self {
        let directory = tempfile::tempdir().unwrap();
        let write = |name: &str, text: &str| std::fs::write(directory.path().join(name), text).unwrap();
        write("study.toml", study);
        write("detector.toml", detector);
        write("spectrum.csv", SPECTRUM);
        write("efficiency.csv", EFFICIENCY);
        // Read as bytes only here.
        write("truth.lhe", "abc");
        Pair { directory }
    }

    fn path(&self, name: &str) -> PathBuf {
        self.directory.path().join(name)
    }

    fn load(&self) -> Result<LoadedStudy, Problems> {
        load_study(&self.path("study.toml"))
    }

    fn problems(&self) -> Vec<Problem> {
        self.load().expect_err("the study should be refused").0
    }
}

/// Which file is changed, what is replaced by what; then where the one problem must stand: text of its line, key, parts
/// of the message.
type Case = (&'static str, &'static str, &'static str, &'static str, &'static str, &'static [&'static str]);

const S: &str = "study.toml";
const D: &str = "detector.toml";
const AXIS: &str = "mass_axis = { low_gev = 0.8, high_gev = 1.2, bins = 200, relative = true }";
const GEOMETRY: &str = "points = 12";

#[rustfmt::skip]
const BAD: &[Case] = &[
    // Keys.
    (D, "constant = 0.007", "constnat = 0.007", "constnat", "calorimeter.photon-plain.constnat", &["unknown key", "did you mean `constant`?"]),
    (D, "noise_gev = 0.25", "noise = 0.25", "noise = ", "calorimeter.photon-plain.noise", &["unknown key", "did you mean `noise_gev`?"]),
    (D, "alpha_low = 1.6", "alphalow = 1.6, alpha_low = 1.6", "tail =", "calorimeter.photon-plain.tail.alphalow", &["`alpha_low`"]),
    (D, "stochastic = 0.12\n", "", "[[calorimeter]]\nname = \"photon-converted\"", "calorimeter.photon-converted.stochastic", &["missing", "0 or more"]),
    (S, "seed = 20261", "sede = 20261", "sede", "sede", &["did you mean `seed`?"]),
    (S, "[resonance]", "[resonnance]", "name = \"All", "resonance", &["missing"]),
    (S, "max_abs_eta = 0.8", "max_eta = 0.8", "max_eta", "channel.two-photon.category.central.max_eta", &["did you mean `max_abs_eta`?"]),
    (S, "shape = ", "zzz = ", "zzz", "channel.two-photon.zzz", &["unknown key: allowed: ", "`shape`"]),
    // Numbers.
    (D, "stochastic = 0.095", "stochastic = -0.095", "-0.095", "calorimeter.photon-plain.stochastic", &["found -0.095", "0 or more"]),
    (D, "constant = 0.007", "constant = nan", "= nan", "calorimeter.photon-plain.constant", &["found nan", "finite"]),
    (D, "constant = 0.007", "constant = inf", "= inf", "calorimeter.photon-plain.constant", &["found inf", "finite"]),
    (D, "constant = 0.007", "constant = 1e400", "1e400", "calorimeter.photon-plain.constant", &["found 1e400", "finite"]),
    (D, "constant = 0.007", "constant = \"0.007\"", "\"0.007\"", "calorimeter.photon-plain.constant", &["found \"0.007\"", "number"]),
    (D, "bias = -0.001", "bias = -1.0", "bias", "calorimeter.photon-plain.bias", &["larger than -1"]),
    (D, "eta = [0, 1.4]", "eta = [1.4, 1.4]", "[1.4, 1.4]", "calorimeter.electron-barrel.eta", &["empty"]),
    (D, "eta = [0, 1.4]", "eta = [-1, 1.4]", "[-1, 1.4]", "calorimeter.electron-barrel.eta[1]", &["found -1", "from 0 to 20"]),
    (D, "eta = [0, 1.4]", "eta = [0, 1, 2]", "[0, 1, 2]", "calorimeter.electron-barrel.eta", &["found 3 numbers", "two"]),
    (D, "alpha_low = 1.6", "alpha_low = 0", "tail =", "calorimeter.photon-plain.tail.alpha_low", &["found 0", "larger than 0"]),
    (D, "n_high = 8.0", "n_high = 1.0", "tail =", "calorimeter.photon-plain.tail.n_high", &["found 1.0", "larger than 1"]),
    (D, "fraction = 0.3", "fraction = 0.2", "[[calorimeter]]", "calorimeter.photon-plain.fraction", &["add to 0.8999999999999999", "photon-plain 0.7, photon-converted 0.2", "must add to 1"]),
    (D, "right_choice = 0.8", "right_choice = 1.1", "right_choice", "vertex.right_choice", &["from 0 to 1"]),
    (D, GEOMETRY, "points = 1", "points = 1", "tracker.electron-track.geometry.points", &["found 1", "from 2 to"]),
    (D, "points = 12\npoint_resolution_um = 25.0\nradiation_lengths = 0.3\nvertex_constraint = true", "points = 2\npoint_resolution_um = 25.0\nradiation_lengths = 0.3", "points = 2", "tracker.electron-track.geometry.points", &["found 2", "from 3 to"]),
    (D, GEOMETRY, "points = 12.0", "points = 12.0", "tracker.electron-track.geometry.points", &["found 12.0", "whole number"]),
    (D, "field_t = 3.0", "field_t = 0.0", "field_t", "tracker.electron-track.geometry.field_t", &["larger than 0"]),
    (D, "\n[tracker.geometry]", "scattering = 0.1\n[tracker.geometry]", "scattering = 0.1", "tracker.electron-track.scattering", &["not both"]),
    // Names, objects.
    (D, "name = \"electron-track\"", "name = \"photon-plain\"", "[[tracker]]\nname = \"photon-plain\"", "tracker.photon-plain.name", &["names another entry (line 3)"]),
    (D, "name = \"electron-track\"", "name = \"a/b\"", "a/b", "tracker[2].name", &["slashes"]),
    (D, "name = \"electron-track\"", "name = \"\"", "name = \"\"", "tracker[2].name", &["must not be empty"]),
    (D, "object = \"muon\"", "object = \"moun\"", "moun", "tracker.muon-central.object", &["found \"moun\"", "did you mean `muon`?"]),
    (D, "object = \"muon\"", "object = \"jet\"", "\"jet\"", "tracker.muon-central.object", &["found \"jet\"", "`electron`, `muon`"]),
    (D, "[vertex]", "[[direction]]\nobject = \"photon\"\nsigma_theta_mrad = 1\nsigma_phi_mrad = 1\n[vertex]", "[[direction]]\nobject = \"photon\"\nsigma_theta_mrad = 1\n", "direction.object", &["second direction of the photon"]),
    // Uncertainties.
    (D, "constant = 0.0015", "constnat = 0.0015", "constnat", "calorimeter.photon-plain.uncertainty.constnat", &["did you mean `constant`?"]),
    (D, "constant = 0.0015", "constant = -1", "= -1,", "calorimeter.photon-plain.uncertainty.constant", &["found -1", "0 or more"]),
    (D, "{ right_choice = \"vertex\" }", "{ spread_right_mm = \"vertex\" }", "share = { spread", "vertex.share.spread_right_mm", &["nothing to share", "no uncertainty"]),
    (D, "share.scale = \"em-scale\"", "share.scale = \"a:b\"", "a:b", "calorimeter.electron-barrel.share.scale", &["colons"]),
    (D, "{ geometry = { radiation_lengths = 0.02 } }", "{ scattering = 0.1 }", "scattering = 0.1", "tracker.electron-track.uncertainty.scattering", &["no such number"]),
    // Efficiencies.
    (D, "threshold_gev = 30.0", "threshold_gev = -1", "threshold_gev = -1", "efficiency[1].threshold_gev", &["found -1", "0 or more"]),
    (D, "width_gev = 3.0", "width_gev = -3", "width_gev", "efficiency[1].width_gev", &["found -3", "0 or more"]),
    (D, "plateau = 0.97", "plateau = 1.01", "plateau = 1.01", "efficiency[1].plateau", &["found 1.01", "larger than 0, up to 1"]),
    (D, "plateau = 0.97", "plateau = 0", "plateau = 0\n", "efficiency[1].plateau", &["found 0", "larger than 0"]),
    (D, "plateau = 0.97\n", "", "[[efficiency]]", "efficiency[1].plateau", &["missing"]),
    (D, "plateau = 0.97", "plateau = 0.97\nplatau = 1", "platau", "efficiency[1].platau", &["did you mean `plateau`?"]),
    (D, "{ threshold_gev = 0.5", "{ threshold = 0.5", "uncertainty = { threshold", "efficiency[1].uncertainty.threshold", &["did you mean `threshold_gev`?"]),
    (D, "name = \"electron-trigger\"", "name = \"photon-efficiency\"", "[[efficiency]]\nname = ", "efficiency.photon-efficiency.name", &["names another entry", "its own `name`"]),
    (D, "table = \"efficiency.csv\"", "table = \"efficiency.csv\"\nplateau = 1.0", "plateau = 1.0", "efficiency.electron-trigger.plateau", &["not both"]),
    (D, "table = \"efficiency.csv\"", "table = \"efficiency.csv\"\nuncertainty = { plateau = 0.1 }", "uncertainty = { plateau = 0.1 }", "efficiency.electron-trigger.uncertainty", &["no number that could move"]),
    (D, "table = \"efficiency.csv\"", "table = \"gone.csv\"", "gone", "efficiency.electron-trigger.table", &["there is no file"]),
    (D, "eta = [0.0, 1.4]\ntable", "eta = [0.0, 1.2]\ntable", "[[efficiency]]\nname = ", "efficiency.electron-trigger.eta", &["the electron at |eta| 1.2 to 1.4", "add an entry"]),
    (S, "min_efficient_legs = 3", "min_efficient_legs = 5", "min_efficient_legs", "channel.mixed.min_efficient_legs", &["found 5", "from 1 to 4"]),
    (S, "min_efficient_legs = 3", "min_efficient_legs = 0", "min_efficient_legs", "channel.mixed.min_efficient_legs", &["found 0", "from 1 to 4"]),
    // Not yet.
    (D, "stochastic = 0.12", "stochastic = 0.12\ncalibration = \"terms.toml\"", "calibration", "calorimeter.photon-converted.calibration", &["not available in this version yet"]),
    (S, "falloff_power = 4.0", "radiation = { recombination_delta_r = 0.1 }", "radiation", "resonance.radiation", &["not available in this version yet"]),
    // Generated legs are known.
    (S, "legs = [\"photon\", \"photon\"]", "legs = [\"photon\", \"photon\"]\npick = \"nearest\"", "pick", "channel.two-photon.pick", &["only with `events`", "remove it"]),
    (S, "legs = [\"photon\", \"photon\"]", "legs = [\"photon\", \"photon\"]\nancestry = \"ignore\"", "ancestry", "channel.two-photon.ancestry", &["only with `events`", "remove it"]),
    (S, "name = \"mixed\"", "name = \"mixed\"\npairing = \"nearest-sum\"", "pairing", "channel.mixed.pairing", &["only with `events`", "remove it"]),
    (S, "[150, 180.0, 210.0]\nwidth = { relative = 0.02 }\nnatural = \"running-width\"\nfalloff_power = 4.0\nproduction = { table = \"spectrum.csv\" }", "[150]\nevents = \"/dev/null\"", "events = ", "resonance.events", &["is a device or a pipe"]),
    // Names.
    (S, "name = \"two-photon\"", "name = \"two-photon \"", "two-photon \"", "channel[1].name", &["must not begin or end with a blank"]),
    (D, "share = { right_choice = \"vertex\" }", "share = { right_choice = \"muon-central.scale\" }", "name", "share", &["names two different uncertainties"]),
    // The study's own numbers.
    (S, "precision = 1e-3", "precision = 0.0", "precision", "precision", &["found 0.0", "larger than 0"]),
    (S, "precision = 1e-3", "precision = 1", "precision", "precision", &["smaller than 1"]),
    (S, "max_points = 65536", "max_points = 4095", "4095", "max_points", &["found 4095", "from 4096"]),
    (S, "seed = 20261", "seed = -1", "seed", "seed", &["found -1", "whole number"]),
    (S, "detector = \"detector.toml\"", "detector = \"nowhere.toml\"", "nowhere", "detector", &["there is no file", "nowhere.toml"]),
    (S, "detector = \"detector.toml\"", "detector = \".\"", "\".\"", "detector", &["is a directory"]),
    (S, "[150, 180.0, 210.0]", "[]", "masses_gev", "resonance.masses_gev", &["found no mass"]),
    (S, "[150, 180.0, 210.0]", "[150,\n0.0, 210.0]", "0.0, 210.0", "resonance.masses_gev[2]", &["found 0.0", "larger than 0"]),
    (S, "[150, 180.0, 210.0]", "[150,\n150, 210.0]", "150, 210.0", "resonance.masses_gev[2]", &["found 150 after 150", "rise"]),
    (S, "[150, 180.0, 210.0]", "[0.2, 180, 210]", "masses_gev", "resonance.masses_gev", &["found 0.2", "\"mixed\"", "0.21233874"]),
    (S, "relative = 0.02", "relative = -0.02", "width", "resonance.width.relative", &["found -0.02"]),
    (S, "{ relative = 0.02 }", "{ relative = 0.02, gev = 1 }", "width", "resonance.width", &["both"]),
    (S, "{ relative = 0.02 }", "{}", "width", "resonance.width", &["neither"]),
    (S, "\"running-width\"", "\"runing-width\"", "natural", "resonance.natural", &["did you mean `running-width`?"]),
    (S, "production = { table = \"spectrum.csv\" }\n", "", "[resonance]", "resonance.production", &["missing", "events"]),
    (S, "falloff_power = 4.0", "weight = \"1002\"", "1002", "resonance.weight", &["there is no `events`"]),
    (S, "[150, 180.0, 210.0]\nwidth = { relative = 0.02 }\nnatural = \"running-width\"\nfalloff_power = 4.0\nproduction = { table = \"spectrum.csv\" }", "[150]\nevents = \"truth.lhe\"\nweight = 1002", "weight = 1002", "resonance.weight", &["found 1002", "text in quotes"]),
    (S, "[150, 180.0, 210.0]\nwidth = { relative = 0.02 }\nnatural = \"running-width\"\nfalloff_power = 4.0\nproduction = { table = \"spectrum.csv\" }", "[150]\nevents = \"truth.lhe\"\nweight = \" \"", "weight = ", "resonance.weight", &["name of a weight"]),
    (S, "falloff_power = 4.0", "events = \"truth.lhe\"", "truth.lhe", "resonance.events", &["not both"]),
    (S, "production = { table = \"spectrum.csv\" }", "events = \"truth.lhe\"", "masses_gev", "resonance.masses_gev", &["found 3 masses", "must be one"]),
    (S, "[150, 180.0, 210.0]\nwidth = { relative = 0.02 }\nnatural = \"running-width\"\nfalloff_power = 4.0\nproduction = { table = \"spectrum.csv\" }", "[150]\nevents = \"gone.lhe\"", "gone", "resonance.events", &["there is no file"]),
    (S, "table = \"spectrum.csv\"", "pt_mean_gev = -1, rapidity_sigma = 1", "pt_mean", "resonance.production.pt_mean_gev", &["found -1"]),
    (S, "table = \"spectrum.csv\"", "table = \"spectrum.csv\", rapidity_sigma = 1", "production", "resonance.production.rapidity_sigma", &["not both"]),
    (S, "width_gev = 2.0", "width_gev = 0", "intermediate", "resonance.intermediate.width_gev", &["larger than 0"]),
    // Channels.
    (S, "legs = [\"photon\", \"photon\"]", "legs = [\"photon\"]", "legs", "channel.two-photon.legs", &["found 1 legs", "must be 2"]),
    (S, "legs = [\"photon\", \"photon\"]", "legs = [\"photon\", \"photon\", \"photon\"]", "legs", "channel.two-photon.legs", &["found 3 legs", "must be 2"]),
    (S, "legs = [\"photon\", \"photon\"]", "legs = [\"photon\", \"foton\"]", "legs", "channel.two-photon.legs[2]", &["did you mean `photon`?"]),
    (S, "legs = [\"photon\", \"photon\"]\n", "", "[[channel]]", "channel.two-photon.legs", &["missing", "`via`"]),
    (S, "via = ", "legs = [\"muon\", \"muon\"]\nvia = ", "via", "channel.mixed.via", &["`legs` is there too"]),
    (S, "[\"muon\", \"muon\"]]", "[\"muon\"]]", "via", "channel.mixed.via[2]", &["found 1 legs", "two pairs"]),
    (S, ", [\"muon\", \"muon\"]]", "]", "via", "channel.mixed.via", &["two pairs"]),
    (S, "legs = [\"photon\", \"photon\"]", "legs = [\"jet\", \"jet\"]", "legs", "channel.two-photon.legs", &["no entry of the detector measures the leg \"jet\""]),
    (S, "max_abs_eta = 1.4\ngap_abs_eta = [0.4, 0.5]", "max_abs_eta = 1.4\ngap_abs_eta = [0.0, 1.4]", "legs", "channel.two-photon.legs", &["within the acceptance", "nowhere", "0 to 1.4"]),
    (S, "gap_abs_eta = [0.4, 0.5]", "gap_abs_eta = [0.5, 0.4]", "gap", "channel.two-photon.gap_abs_eta", &["empty"]),
    (S, "max_abs_eta = 1.4", "max_abs_eta = 0", "max_abs_eta = 0\n", "channel.two-photon.max_abs_eta", &["larger than 0"]),
    (S, "min_pt_gev = [30.0]", "min_pt_gev = [30, 20, 10]", "min_pt_gev", "channel.two-photon.min_pt_gev", &["found 3 values", "(2)"]),
    (S, "min_pt_gev = [30.0]", "min_pt_gev = [30, -20]", "min_pt_gev", "channel.two-photon.min_pt_gev[2]", &["found -20"]),
    (S, "bins = 200", "bins = 0", "bins = 0", "channel.two-photon.mass_axis.bins", &["found 0", "from 1 to 100000"]),
    (S, "bins = 200", "bins = 1000000000", "bins = 1", "channel.two-photon.mass_axis.bins", &["from 1 to 100000"]),
    (S, "low_gev = 0.8", "low_gev = 1.2", "mass_axis", "channel.two-photon.mass_axis.low_gev", &["1.2 to 1.2", "below"]),
    (S, "low_gev = 0.8", "low_gev = -0.8", "mass_axis", "channel.two-photon.mass_axis.low_gev", &["found -0.8"]),
    (S, "relative = true", "relative = 1", "mass_axis", "channel.two-photon.mass_axis.relative", &["true or false"]),
    (S, AXIS, "", "[[channel]]", "channel.two-photon.mass_axis", &["missing"]),
    (S, "\"gauss-exp\"", "\"gaus\"", "gaus", "channel.two-photon.shape", &["did you mean `gaussian`?"]),
    (S, "name = \"mixed\"", "name = \"two-photon\"", "name = \"two-photon\"\nvia", "channel.two-photon.name", &["another channel (line 15)"]),
    (S, "name = \"mixed\"", "name = \"a,b\"", "a,b", "channel[2].name", &["commas"]),
    (S, "name = \"rest\"", "name = \"central\"", "name = \"central\"\n\n", "channel.two-photon.category.central.name", &["another category"]),
    (S, "name = \"rest\"", "name = \"re'st\"", "re'st", "channel.two-photon.category[2].name", &["quotes"]),
    // Not TOML.
    (S, "seed = 20261", "seed = ", "seed = ", "", &["not TOML"]),
];

/// What is wrong with the answer to a case; `None` when nothing is.
fn fault((file, from, to, line_text, key, parts): &Case) -> Option<String> {
    let original = if *file == S { STUDY } else { DETECTOR };
    assert!(original.contains(from), "{from:?} stands in {file}");
    let changed = original.replacen(from, to, 1);
    let pair = if *file == S { Pair::new(&changed, DETECTOR) } else { Pair::new(STUDY, &changed) };
    let problems = pair.problems();
    let line = changed[..changed.find(line_text).expect(line_text)].matches('\n').count() + 1;
    let found = problems.iter().find(|problem| problem.key.as_deref().unwrap_or("") == *key);
    let why = match found {
        None => "no problem of this key".to_owned(),
        // A misspelt required table is unknown and missing.
        Some(_) if problems.len() > 1 && *key != "resonance" => "more than one problem".to_owned(),
        Some(found) if found.file != pair.path(file) => "another file".to_owned(),
        Some(found) if found.line != Some(line) => format!("line {line} expected"),
        Some(found) => {
            let missing = parts.iter().find(|part| !found.message.contains(**part))?;
            format!("{missing:?} expected in the message")
        }
    };
    Some(format!("{from:?} -> {to:?}: {why}, for {key}\n{}\n", Problems(problems)))
}

#[test]
fn bad_inputs_name_line_key_and_what_to_do() {
    let faults: Vec<String> = BAD.iter().filter_map(fault).collect();
    assert!(faults.is_empty(), "{}", faults.join("\n"));
}

/// Keys of a study that reads events: what is typed, and what is refused.
#[test]
fn choice_of_legs_and_radiation() {
    let source = "production = { table = \"spectrum.csv\" }";
    let base = STUDY
        .replace("[150, 180.0, 210.0]", "[150]")
        .replace(source, "events = \"truth.lhe\"\nradiation = { recombination_delta_r = 0.1 }")
        .replace("name = \"two-photon\"", "name = \"two-photon\"\npick = \"nearest\"\nancestry = \"ignore\"")
        .replace("name = \"mixed\"", "name = \"mixed\"\npairing = \"nearest-sum\"\nancestry = \"require\"");
    let study = Pair::new(&base, DETECTOR).load().unwrap().study;
    assert_eq!(study.resonance.radiation, Some(Radiation { recombination_delta_r: 0.1 }));
    let choice = |ancestry, pick, pairing| LegChoice { ancestry, pick, pairing };
    assert_eq!(study.channels[0].choice, choice(Ancestry::Ignore, Pick::Nearest, Pairing::NearestPair));
    assert_eq!(study.channels[1].choice, choice(Ancestry::Require, Pick::Hardest, Pairing::NearestSum));
    let cases: [(&str, &str, &str, &[&str]); 9] = [
        ("\"nearest\"", "\"neerest\"", "channel.two-photon.pick", &["did you mean `nearest`?", "`hardest`"]),
        ("\"ignore\"", "\"no\"", "channel.two-photon.ancestry", &["`prefer`, `ignore`, `require`"]),
        ("\"nearest-sum\"", "\"sum\"", "channel.mixed.pairing", &["`nearest-pair`", "`nearest-sum`"]),
        ("pick = ", "pairing = \"nearest-pair\"\npick = ", "channel.two-photon.pairing", &["only with `via`"]),
        (
            "legs = [\"photon\", ",
            "legs = [\"photon\", \"photon\", ",
            "channel.two-photon.pick",
            &["for 3 legs", "\"hardest\""],
        ),
        (
            "delta_r = 0.1",
            "delta_r = 0.0",
            "resonance.radiation.recombination_delta_r",
            &["found 0.0", "larger than 0, up to 2"],
        ),
        (
            "delta_r = 0.1",
            "delta_r = 10",
            "resonance.radiation.recombination_delta_r",
            &["found 10", "larger than 0, up to 2"],
        ),
        (
            "recombination_delta_r",
            "delta_r",
            "resonance.radiation.delta_r",
            &["unknown key", "`recombination_delta_r`"],
        ),
        ("{ recombination_delta_r = 0.1 }", "{}", "resonance.radiation.recombination_delta_r", &["missing"]),
    ];
    for (from, to, key, parts) in cases {
        assert!(base.contains(from), "{from}");
        let problems = Pair::new(&base.replacen(from, to, 1), DETECTOR).problems();
        let found = problems.iter().find(|p| p.key.as_deref() == Some(key)).unwrap_or_else(|| panic!("{problems:?}"));
        assert!(found.line.is_some() && parts.iter().all(|part| found.message.contains(part)), "{found}");
    }
}

#[test]
fn problems_of_all_files_are_reported_together() {
    let study = STUDY.replace("seed = 20261", "sed = 20261").replace("bins = 100 ", "bins = 0 ");
    let detector = DETECTOR.replace("noise_gev = 0.25", "noise_gev = -1").replace("field_t = 3.0\n", "");
    let pair = Pair::new(&study, &detector);
    std::fs::write(pair.path("spectrum.csv"), format!("{SPECTRUM}50,40,-1,1,1\n60,70,a,1,-1\n70,80\n")).unwrap();
    let found: Vec<_> = pair
        .problems()
        .into_iter()
        .map(|p| (p.file.file_name().unwrap().to_str().unwrap().to_owned(), p.line.unwrap(), p.key.unwrap()))
        .collect();
    let line = |text: &str, part: &str| text[..text.find(part).unwrap()].matches('\n').count() + 1;
    let expected = [
        ("study.toml", 3, "sed"),
        ("study.toml", line(&study, "bins = 0"), "channel.mixed.mass_axis.bins"),
        ("detector.toml", line(&detector, "noise_gev = -1"), "calorimeter.photon-plain.noise_gev"),
        ("detector.toml", line(&detector, "[tracker.geometry]"), "tracker.electron-track.geometry.field_t"),
        ("spectrum.csv", 5, "pt_low_gev"),
        ("spectrum.csv", 6, "rapidity_low"),
        ("spectrum.csv", 6, "weight"),
        ("spectrum.csv", 7, "pt_low_gev,pt_high_gev,rapidity_low,rapidity_high,weight"),
    ];
    assert_eq!(found, expected.map(|(file, line, key)| (file.to_owned(), line, key.to_owned())));
}

#[test]
fn spectrum_without_weight_or_with_other_columns() {
    let pair = Pair::new(STUDY, DETECTOR);
    let refused = |text: &str, part: &str| {
        std::fs::write(pair.path("spectrum.csv"), text).unwrap();
        let problems = pair.problems();
        assert_eq!(problems.len(), 1, "{problems:?}");
        assert!(problems[0].message.contains(part), "{problems:?}");
        assert_eq!(problems[0].file, pair.path("spectrum.csv"));
    };
    refused("pt_low_gev,pt_high_gev,rapidity_low,rapidity_high,weight\n0,1,-1,1,0\n", "no cell has a weight");
    refused("pt_low_gev,pt_high_gev,rapidity_low,rapidity_high\n0,1,-1,1\n", "must be pt_low_gev,");
    refused("", "must be pt_low_gev,");
    std::fs::remove_file(pair.path("spectrum.csv")).unwrap();
    let problems = pair.problems();
    assert_eq!(problems[0].key.as_deref(), Some("resonance.production.table"));
}

#[test]
fn efficiency_tables() {
    let pair = Pair::new(STUDY, DETECTOR);
    let found = |text: &str| -> Vec<(Option<usize>, String, String)> {
        std::fs::write(pair.path("efficiency.csv"), text).unwrap();
        let problems = pair.problems();
        assert!(problems.iter().all(|problem| problem.file == pair.path("efficiency.csv")), "{problems:?}");
        problems.into_iter().map(|p| (p.line, p.key.unwrap_or_default(), p.message)).collect()
    };
    // Cells that touch do not overlap; those of lines 6 and 8 reach into others.
    let lines = found(&format!("{EFFICIENCY}30,50,0.9,1.0,0.5\n0,20,0,1.4,0.1\n25,1e7,1.3,1.5,0\n"));
    let (places, messages): (Vec<_>, Vec<_>) = lines.into_iter().map(|(line, key, m)| ((line, key), m)).unzip();
    assert_eq!(places, [(Some(6), String::new()), (Some(8), String::new())]);
    assert!(messages[0].contains("overlaps that of line 3") && messages[1].contains("line 3"), "{messages:?}");
    // Without the columns of |eta| all cells are everywhere.
    let lines = found("pt_low_gev,pt_high_gev,efficiency\n0,20,0.5\n19,30,0.5\n");
    assert!(lines.len() == 1 && lines[0].0 == Some(3), "{lines:?}");

    let header = "pt_low_gev,pt_high_gev,abs_eta_low,abs_eta_high,efficiency\n";
    let rows = "-1,20,0,1,1.5\n30,20,1,1,0.5\n0,10,0,21,x\n0,10,0.5\n";
    let places: Vec<_> =
        found(&format!("{header}{rows}")).into_iter().map(|(line, key, _)| (line.unwrap(), key)).collect();
    let all = "pt_low_gev,pt_high_gev,efficiency,abs_eta_low,abs_eta_high";
    let expected = [(2, "pt_low_gev"), (2, "efficiency"), (3, "pt_low_gev"), (3, "abs_eta_low")];
    let expected = expected.into_iter().chain([(4, "efficiency"), (4, "abs_eta_high"), (5, all)]);
    assert_eq!(places, expected.map(|(line, key)| (line, key.to_owned())).collect::<Vec<_>>());

    for (text, part) in [
        (
            "pt_low_gev,pt_high_gev\n0,1\n",
            "must be pt_low_gev,pt_high_gev,efficiency,abs_eta_low,abs_eta_high or pt_low_gev,pt_high_gev,efficiency",
        ),
        ("pt_low_gev,pt_high_gev,efficiency,abs_eta_low\n0,1,1,0\n", "found the columns"),
        ("pt_low_gev,pt_high_gev,abs_eta_low\n0,1,1\n", "found the columns"),
        ("pt_low_gev,pt_high_gev,efficiency,efficiency\n0,1,1,1\n", "found the columns"),
        ("pt_low_gev,pt_high_gev,efficiency\n", "no cell has an efficiency larger than 0"),
        ("pt_low_gev,pt_high_gev,efficiency\n0,1e6,0\n", "no cell has an efficiency larger than 0"),
        ("", "found the columns"),
    ] {
        let problems = found(text);
        assert!(problems.len() == 1 && problems[0].2.contains(part), "{text:?}: {problems:?}");
    }
    let mut many = String::from("pt_low_gev,pt_high_gev,efficiency\n");
    (0..4001).for_each(|i| many.push_str(&format!("{i},{},1\n", i + 1)));
    assert!(found(&many)[0].2.contains("at most 4000"));
}

#[test]
fn efficiencies_that_are_likely_not_meant() {
    let warnings = |study: &str, detector: &str, table: &str| -> Vec<String> {
        let pair = Pair::new(study, detector);
        std::fs::write(pair.path("efficiency.csv"), table).unwrap();
        let warnings = pair.load().unwrap().warnings;
        warnings.iter().map(|w| format!("{}: {}", w.key.as_deref().unwrap_or(""), w.message)).collect()
    };
    assert_eq!(warnings(STUDY, DETECTOR, EFFICIENCY), [""; 0]);
    let one = |found: Vec<String>, key: &str, part: &str| {
        assert!(found.len() == 1 && found[0].starts_with(key) && found[0].contains(part), "{found:?}");
    };
    // The two muons have no efficiency.
    let study = STUDY.replace("min_efficient_legs = 3", "min_efficient_legs = 2");
    one(warnings(&study, DETECTOR, EFFICIENCY), "channel.mixed.min_efficient_legs: ", "for 2 of the legs");
    let table = EFFICIENCY.replace("0.8, 1.4, 0.9", "0.8, 1.3, 0.9").replace("0,1.4,0.8", "0,1.3,0.8");
    one(warnings(STUDY, DETECTOR, &table), "efficiency.electron-trigger.table: ", "no cell at |eta| 1.3 to 1.4");
    let hidden =
        "[[efficiency]]\nname = \"late\"\nobject = \"photon\"\nthreshold_gev = 1\nwidth_gev = 0\nplateau = 1\n";
    one(warnings(STUDY, &format!("{DETECTOR}\n{hidden}"), EFFICIENCY), "efficiency.late: ", "never used");
}

#[test]
fn files_that_cannot_be_read() {
    let pair = Pair::new(STUDY, DETECTOR);
    let of = |path: &Path| load_study(path).expect_err("refused").0.remove(0);
    let missing = of(&pair.path("gone.toml"));
    assert!(missing.message.contains("there is no file"), "{missing}");
    let directory = of(pair.directory.path());
    assert!(directory.message.contains("is a directory"), "{directory}");
    std::fs::write(pair.path("study.toml"), b"name = \"a\"\nx = \"\xff\"\n").unwrap();
    let bytes = of(&pair.path("study.toml"));
    assert!(bytes.message.contains("not UTF-8") && bytes.line == Some(2), "{bytes}");
    std::fs::write(pair.path("study.toml"), STUDY).unwrap();
    std::fs::write(pair.path("detector.toml"), b"name = \"a\"\n\n\"\xff\"\n").unwrap();
    let bytes = of(&pair.path("study.toml"));
    assert!(bytes.file == pair.path("detector.toml") && bytes.line == Some(3), "{bytes}");
    std::fs::write(pair.path("study.toml"), "").unwrap();
    let keys: Vec<_> = pair.problems().into_iter().filter_map(|problem| problem.key).collect();
    assert_eq!(keys, ["name", "detector", "resonance", "channel"]);
}

#[test]
fn a_file_cut_anywhere_is_no_panic() {
    let pair = Pair::new(STUDY, DETECTOR);
    let mut refused = 0;
    for (name, text) in
        [("study.toml", STUDY), ("detector.toml", DETECTOR), ("spectrum.csv", SPECTRUM), ("efficiency.csv", EFFICIENCY)]
    {
        for end in (0..text.len()).step_by(3) {
            std::fs::write(pair.path(name), &text[..end]).unwrap();
            if let Err(problems) = pair.load() {
                assert!(!problems.0.is_empty() && !problems.to_string().is_empty());
                refused += 1;
            }
        }
        std::fs::write(pair.path(name), text).unwrap();
    }
    assert!(refused > 500, "{refused}");
}

/// A sample of `count` masses around a mass.
fn sample(mass: f64, count: usize) -> String {
    let row = |i: usize| format!("{},x\n", mass * (0.99 + 0.02 * i as f64 / count as f64));
    std::iter::once("mass_gev,note\n".to_owned()).chain((0..count).map(row)).collect()
}

const CHANNEL: &str = "shape = \"gauss-exp\"\n";
const NARROW: (&str, &str) = ("width = { relative = 0.02 }", "width = { gev = 0.0 }");

/// A study with these lines in its first channel, and what is read of it.
fn with_samples(in_channel: &str, tables: &str, narrow: bool) -> (Pair, Result<LoadedStudy, Problems>) {
    let tables = format!("{tables}\n[[channel]]\nname = \"mixed\"");
    let mut study = STUDY.replacen(CHANNEL, &format!("{CHANNEL}{in_channel}\n"), 1);
    study = study.replacen("[[channel]]\nname = \"mixed\"", &tables, 1);
    if narrow {
        study = study.replacen(NARROW.0, NARROW.1, 1);
    }
    let pair = Pair::new(&study, DETECTOR);
    std::fs::write(pair.path("sim180.csv"), sample(180.0, 2000)).unwrap();
    std::fs::write(pair.path("sim220.csv"), sample(220.0, 2000)).unwrap();
    std::fs::write(pair.path("few.csv"), sample(180.0, 999)).unwrap();
    std::fs::write(pair.path("text.csv"), "mass_gev\n180\nabc\n").unwrap();
    std::fs::write(pair.path("histogram.csv"), "low_gev,high_gev,count\n1,2,3\n").unwrap();
    let read = pair.load();
    (pair, read)
}

#[test]
fn simulated_samples_are_read() {
    let tables = "[[channel.simulated]]\nmass_gev = 180\ncategory = \"rest\"\nfile = \"sim180.csv\"\ngenerated = 1e4\n\
                  [[channel.simulated]]\nmass_gev = 220.0\ncategory = \"central\"\nfile = \"sim220.csv\"\ngenerated = 5e4\n";
    let (pair, read) = with_samples("simulated_use = \"instead\"", tables, true);
    let LoadedStudy { study, inputs, .. } = read.unwrap();
    let Simulated { usage, samples } = &study.channels[0].simulated;
    assert_eq!((*usage, samples.len()), (SimulatedUse::Instead, 2));
    assert_eq!((samples[0].mass_gev, samples[0].category, samples[0].generated), (180.0, 1, Some(1e4)));
    assert_eq!((samples[1].mass_gev, samples[1].category), (220.0, 0));
    assert_eq!(samples[0].masses.gev().len(), 2000);
    assert_eq!(study.channels[1].simulated, Simulated::default());
    // What was read is among the inputs.
    let names: Vec<&str> = inputs.iter().map(|input| input.path.as_str()).collect();
    for file in ["sim180.csv", "sim220.csv"] {
        let path = pair.path(file).display().to_string();
        assert_eq!(names.iter().filter(|name| **name == path).count(), 1, "{names:?}");
    }
    // The only category needs no name.
    let (_, read) = with_samples("", "", false);
    assert_eq!(read.unwrap().study.channels[0].simulated, Simulated::default());
}

#[test]
fn bad_simulated_samples() {
    let key = "channel.two-photon.simulated[1]";
    let table = |lines: &str| format!("[[channel.simulated]]\n{lines}\n");
    let good = "mass_gev = 180\ncategory = \"rest\"\nfile = \"sim180.csv\"";
    let instead = "simulated_use = \"instead\"";
    let at = |k: &str| format!("{key}.{k}");
    // Key of the channel, tables, narrow or not, where the problem stands (key or file), parts of the message.
    let cases: Vec<(&str, String, bool, String, &[&str])> = vec![
        ("", table(&good.replace("rest", "rset")), true, at("category"), &["rset", "did you mean `rest`?"]),
        (
            "",
            table(&good.replace("category = \"rest\"\n", "")),
            true,
            at("category"),
            &["missing", "`central`, `rest`"],
        ),
        ("", table(&good.replace("mass_gev = 180\n", "")), true, at("mass_gev"), &["missing"]),
        ("", table(&good.replace("180\n", "-1\n")), true, at("mass_gev"), &["found -1"]),
        ("", table(&good.replace("sim180", "gone")), true, at("file"), &["there is no file", "gone.csv"]),
        ("", table("mass_gev = 180\ncategory = \"rest\""), true, at("file"), &["missing"]),
        ("", table(&format!("{good}\nwieght = 1")), true, at("wieght"), &["unknown key"]),
        ("", table(&format!("{good}\ngenerated = 0")), true, at("generated"), &["larger than 0"]),
        (
            "",
            table(&good.replace("sim180", "few")),
            true,
            "few.csv".into(),
            &["999 entries", "at least 1000", "144 to 216"],
        ),
        ("", table(&good.replace("sim180", "text")), true, "text.csv".into(), &["found \"abc\"", "finite number"]),
        ("", table(&good.replace("sim180", "histogram")), true, "histogram.csv".into(), &["histogram", "mass_gev"]),
        ("", table(&format!("{good}\ngenerated = 1500")), true, "sim180.csv".into(), &["2000", "1500", "`generated`"]),
        ("", table(&good.replace("180\n", "195\n")), true, at("mass_gev"), &["150, 180, 210", "instead"]),
        (
            instead,
            table(&good.replace("180", "220")),
            true,
            at("mass_gev"),
            &["outside of the folded masses", "generated"],
        ),
        (instead, table(good), false, "channel.two-photon.simulated_use".into(), &["natural width", "beside"]),
        (instead, String::new(), true, "channel.two-photon.simulated_use".into(), &["no [[channel.simulated]]"]),
        ("simulated_use = \"besides\"", table(good), true, "channel.two-photon.simulated_use".into(), &["`beside`"]),
        ("", table(good) + &table(good), true, "channel.two-photon.simulated[2]".into(), &["already", "rest"]),
    ];
    for (in_channel, tables, narrow, place, parts) in cases {
        let (_, read) = with_samples(in_channel, &tables, narrow);
        let problems = read.expect_err(&format!("{in_channel} {tables}")).0;
        assert_eq!(problems.len(), 1, "{problems:?}");
        let text = problems[0].to_string();
        let here = problems[0].key.as_deref() == Some(place.as_str()) || problems[0].file.ends_with(&place);
        assert!(here, "{text} not at {place}");
        assert!(parts.iter().all(|part| text.contains(part)), "{text} lacks one of {parts:?}");
    }
}
