//! The study file and everything that it names.

use std::path::Path;

use super::domain::{INSIDE_UNIT, POSITIVE, SHARE};
use super::reader::{Item, Section};
use super::resonance_table::{self, OtherFiles, file_name};
use super::source::{InputText, Sheet, Unreadable, read_text};
use super::{FileDigest, LoadedStudy, channel_tables, detector_file, study_checks};
use crate::detector::Detector;
use crate::problem::{Problem, Problems};
use crate::process::{EventSource, Study};

const SEED: u64 = 1;
const PRECISION: f64 = 1e-4;
const MAX_POINTS: u64 = 1 << 24;
const EXPECTED_EVENTS: f64 = 1e4;
const FEWEST_POINTS: u64 = 4096;
/// The largest number that TOML can write.
const LARGEST_WHOLE: u64 = i64::MAX as u64;

/// Reads a study file and the files that it names, and checks them alone and together.
///
/// # Errors
/// Every problem of all files, not only the first: those of the study, then of the detector, then of other files, each
/// in the order of the lines.
pub fn load_study(path: &Path) -> Result<LoadedStudy, Problems> {
    of_text(path, read_text(path).map_err(|unreadable| unreadable.of_file(path))?)
}

/// Reads a study from its text; `path` stands in messages, and the files that it names are relative to it.
///
/// # Errors
/// As [`load_study`].
pub fn parse_study(path: &Path, text: &str) -> Result<LoadedStudy, Problems> {
    of_text(path, InputText::of_memory(path, text))
}

fn of_text(path: &Path, InputText { text, input }: InputText) -> Result<LoadedStudy, Problems> {
    let sheet = Sheet::new(path, &text);
    let mut files = Files { detector: FileOfStudy::default(), others: OtherFiles::default() };
    let study =
        sheet.parse(&text).and_then(|table| study(Section::new(&sheet, 1, String::new(), table.get_ref()), &mut files));

    let (mut problems, mut warnings) = sheet.into_findings();
    problems.append(&mut files.detector.problems);
    problems.append(&mut files.others.problems);
    warnings.append(&mut files.detector.warnings);
    match study {
        Some(study) if problems.is_empty() => {
            let inputs = [input].into_iter().chain(files.detector.inputs).chain(files.others.inputs).collect();
            Ok(LoadedStudy { study, inputs, warnings })
        }
        _ => Err(Problems(problems)),
    }
}

/// What the files that the study names brought along.
struct Files {
    detector: FileOfStudy,
    others: OtherFiles,
}

#[derive(Default)]
struct FileOfStudy {
    inputs: Vec<FileDigest>,
    problems: Vec<Problem>,
    warnings: Vec<Problem>,
}

fn study(mut root: Section<'_>, files: &mut Files) -> Option<Study> {
    let sheet = root.sheet;
    let name = root.title("name");
    let detector_item = root.required("detector", "the path of the detector file, relative to this file");
    let detector = detector_item.and_then(|item| detector(sheet, &item, &mut files.detector));
    let seed = root.whole_or("seed", (0, LARGEST_WHOLE), SEED);
    let precision = root.number_or("precision", &INSIDE_UNIT, PRECISION);
    let max_points = root.whole_or("max_points", (FEWEST_POINTS, LARGEST_WHOLE), MAX_POINTS);

    let prune_shifts_below = root.number_or("prune_shifts_below", &SHARE, 0.0);
    let expected_events = root.number_or("expected_events", &POSITIVE, EXPECTED_EVENTS);

    let resonance_section = root.required("resonance", "the table [resonance]").and_then(|item| item.section());
    let masses_line = resonance_section.as_ref().map_or(1, |section| section.line_of("masses_gev"));
    let resonance = resonance_section.and_then(|section| resonance_table::read(section, &mut files.others));
    let generated = resonance.as_ref().map(|resonance| matches!(resonance.source, EventSource::Generated(_)));

    let sections = root.tables("channel");
    if sections.is_empty() && root.optional("channel").is_none_or(|item| !item.is_table()) {
        root.problem("channel", "no channel is there; give at least one [[channel]]");
    }
    let channels = channel_tables::read(sections, generated, &mut files.others);
    root.finish();

    if let Some(resonance) = &resonance {
        study_checks::masses(sheet, masses_line, resonance, &channels);
        study_checks::simulated(sheet, resonance, &channels);
    }
    if let Some(detector) = &detector {
        study_checks::coverage(sheet, detector, &channels);
        study_checks::efficient_legs(sheet, detector, &channels);
    }
    Some(Study {
        name,
        detector: detector?,
        seed,
        precision,
        max_points,
        prune_shifts_below,
        expected_events,
        resonance: resonance?,
        channels: channels.into_iter().map(|placed| placed.channel).collect(),
    })
}

/// Reads the detector file; what can be read of it is returned, its problems are kept apart.
fn detector(sheet: &Sheet, item: &Item<'_>, file: &mut FileOfStudy) -> Option<Detector> {
    match detector_file::read(&sheet.resolve(file_name(item)?)) {
        Ok(reading) => {
            file.inputs = reading.inputs;
            file.problems = reading.problems;
            file.warnings = reading.warnings;
            reading.detector
        }
        Err(Unreadable::Access(message)) => {
            item.problem(message);
            None
        }
        Err(Unreadable::Content(problem)) => {
            file.problems.push(problem);
            None
        }
    }
}
