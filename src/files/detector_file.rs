//! The detector file: all entries, and what they must satisfy together.

use std::path::Path;

use super::detector_entries as entries;
use super::reader::Section;
use super::resonance_table::OtherFiles;
use super::source::{InputText, Sheet, Unreadable, read_text};
use super::study_checks::{ranges, without};
use super::{FileDigest, LoadedDetector};
use crate::detector::{Calorimeter, Detector, EfficiencyCurve, EtaRange, Object};
use crate::problem::{Problem, Problems};
use crate::shift::nuisances;

/// How far from 1 the fractions of one region may add up.
const FRACTION_TOLERANCE: f64 = 1e-9;

/// Reads and checks a detector file.
///
/// # Errors
/// Every problem of the file, not only the first.
pub fn load_detector(path: &Path) -> Result<LoadedDetector, Problems> {
    loaded(read(path).map_err(|unreadable| unreadable.of_file(path))?)
}

/// Reads a detector from its text; `path` stands in messages.
///
/// # Errors
/// As [`load_detector`].
pub fn parse_detector(path: &Path, text: &str) -> Result<LoadedDetector, Problems> {
    loaded(of_text(path, InputText::of_memory(path, text)))
}

fn loaded(reading: DetectorReading) -> Result<LoadedDetector, Problems> {
    match reading.detector {
        Some(detector) if reading.problems.is_empty() => {
            Ok(LoadedDetector { detector, inputs: reading.inputs, warnings: reading.warnings })
        }
        _ => Err(Problems(reading.problems)),
    }
}

/// A detector file as far as it could be read.
#[derive(Debug)]
pub(super) struct DetectorReading {
    /// What could be read, for further checks even where there are problems; `None` where some entry's object or region
    /// is not known.
    pub detector: Option<Detector>,
    /// The file itself, then its tables.
    pub inputs: Vec<FileDigest>,
    pub problems: Vec<Problem>,
    pub warnings: Vec<Problem>,
}

pub(super) fn read(path: &Path) -> Result<DetectorReading, Unreadable> {
    Ok(of_text(path, read_text(path)?))
}

fn of_text(path: &Path, InputText { text, input }: InputText) -> DetectorReading {
    let sheet = Sheet::new(path, &text);
    let mut tables = OtherFiles::default();
    let detector = sheet.parse(&text).and_then(|table| {
        let root = Section::new(&sheet, 1, String::new(), table.get_ref());
        detector(root, &mut tables)
    });
    let (mut problems, warnings) = sheet.into_findings();
    problems.append(&mut tables.problems);
    let inputs = std::iter::once(input).chain(tables.inputs).collect();
    DetectorReading { detector, inputs, problems, warnings }
}

/// An entry as it was read, with its line for later messages.
struct Placed<T> {
    line: usize,
    entry: T,
}

fn detector(mut root: Section<'_>, tables: &mut OtherFiles) -> Option<Detector> {
    let sheet = root.sheet;
    let name = root.title("name");
    let (calorimeters, calorimeters_whole) = placed(root.tables("calorimeter"), entries::calorimeter);
    let (trackers, trackers_whole) = placed(root.tables("tracker"), entries::tracker);
    let (directions, _) = placed(root.tables("direction"), entries::direction);
    let vertex = root.table("vertex").map(entries::vertex);
    let (efficiencies, efficiencies_whole) =
        placed(root.tables("efficiency"), |section| entries::efficiency(section, tables));
    if root.optional("calorimeter").is_none() && root.optional("tracker").is_none() {
        root.problem("calorimeter", "neither [[calorimeter]] nor [[tracker]] is there; give at least one entry");
    }
    let whole = calorimeters_whole && trackers_whole;

    unique_names(
        sheet,
        calorimeters
            .iter()
            .map(|placed| (placed.line, "calorimeter", placed.entry.name.as_str()))
            .chain(trackers.iter().map(|placed| (placed.line, "tracker", placed.entry.name.as_str())))
            .chain(efficiencies.iter().map(|placed| (placed.line, "efficiency", placed.entry.name.as_str()))),
    );
    one_direction_an_object(sheet, directions.iter().map(|placed| (placed.line, placed.entry.object)));
    fractions(sheet, &calorimeters);
    let lines =
        Lines { calorimeters: lines(&calorimeters), trackers: lines(&trackers), efficiencies: lines(&efficiencies) };
    let detector = Detector {
        name,
        calorimeters: calorimeters.into_iter().map(|placed| placed.entry).collect(),
        trackers: trackers.into_iter().map(|placed| placed.entry).collect(),
        directions: directions.into_iter().map(|placed| placed.entry).collect(),
        vertex,
        efficiencies: efficiencies.into_iter().map(|placed| placed.entry).collect(),
        covariances: Vec::new(),
    };
    if let Err(error) = nuisances(&detector) {
        root.problem("share", error.to_string());
    }
    warn_of_hidden_entries(sheet, &detector, &lines);
    if whole && efficiencies_whole {
        efficiency_holes(sheet, &detector, &lines.efficiencies);
    }
    root.finish();
    whole.then_some(detector)
}

/// The entries that could be read, and whether all could.
fn placed<'a, T>(sections: Vec<Section<'a>>, mut read: impl FnMut(Section<'a>) -> Option<T>) -> (Vec<Placed<T>>, bool) {
    let count = sections.len();
    let entries: Vec<Placed<T>> = sections
        .into_iter()
        .filter_map(|section| {
            let line = section.line;
            read(section).map(|entry| Placed { line, entry })
        })
        .collect();
    let whole = entries.len() == count;
    (entries, whole)
}

/// Where the entries stand.
struct Lines {
    calorimeters: Vec<usize>,
    trackers: Vec<usize>,
    efficiencies: Vec<usize>,
}

fn lines<T>(entries: &[Placed<T>]) -> Vec<usize> {
    entries.iter().map(|placed| placed.line).collect()
}

fn unique_names<'n>(sheet: &Sheet, names: impl Iterator<Item = (usize, &'static str, &'n str)>) {
    let mut seen: Vec<(usize, &str)> = Vec::new();
    for (line, kind, name) in names.filter(|(_, _, name)| !name.is_empty()) {
        match seen.iter().find(|(_, other)| *other == name) {
            Some((first, _)) => sheet.problem(
                line,
                &format!("{kind}.{name}.name"),
                format!("{name:?} names another entry (line {first}) too; every calorimeter, tracker and efficiency entry needs its own `name`"),
            ),
            None => seen.push((line, name)),
        }
    }
}

fn one_direction_an_object(sheet: &Sheet, directions: impl Iterator<Item = (usize, Object)>) {
    let mut seen: Vec<(usize, Object)> = Vec::new();
    for (line, object) in directions {
        match seen.iter().find(|(_, other)| *other == object) {
            Some((first, _)) => sheet.problem(
                line,
                "direction.object",
                format!("a second direction of the {object} (the first is at line {first}); keep one an object"),
            ),
            None => seen.push((line, object)),
        }
    }
}

fn fractions(sheet: &Sheet, calorimeters: &[Placed<Calorimeter>]) {
    let mut seen: Vec<(Object, EtaRange)> = Vec::new();
    for Placed { line, entry } in calorimeters {
        if seen.contains(&(entry.object, entry.eta)) {
            continue;
        }
        seen.push((entry.object, entry.eta));
        let sharing: Vec<&Calorimeter> = calorimeters
            .iter()
            .map(|other| &other.entry)
            .filter(|other| other.object == entry.object && other.eta == entry.eta)
            .collect();
        let sum: f64 = sharing.iter().map(|other| other.fraction).sum();
        if (sum - 1.0).abs() > FRACTION_TOLERANCE {
            let terms = sharing.iter().map(|other| format!("{} {}", other.name, other.fraction)).collect::<Vec<_>>();
            let message = format!(
                "the fractions of the {} entries for |eta| {} to {} add to {sum} ({}), must add to 1",
                entry.object,
                entry.eta.low,
                entry.eta.high,
                terms.join(", ")
            );
            sheet.problem(*line, &format!("calorimeter.{}.fraction", entry.name), message);
        }
    }
}

fn warn_of_hidden_entries(sheet: &Sheet, detector: &Detector, lines: &Lines) {
    const MESSAGE: &str = "never used: entries before it serve its whole range; reorder the entries or remove it";
    let regions = |object| detector.calorimeter_regions(object);
    for (index, (entry, line)) in detector.calorimeters.iter().zip(&lines.calorimeters).enumerate() {
        if !regions(entry.object).iter().any(|region| region.entries.contains(&index)) {
            sheet.warn(*line, &format!("calorimeter.{}", entry.name), MESSAGE);
        }
    }
    for (index, (entry, line)) in detector.trackers.iter().zip(&lines.trackers).enumerate() {
        if !detector.tracker_regions(entry.object).iter().any(|region| region.entry == index) {
            sheet.warn(*line, &format!("tracker.{}", entry.name), MESSAGE);
        }
    }
    for (index, (entry, line)) in detector.efficiencies.iter().zip(&lines.efficiencies).enumerate() {
        if !detector.efficiency_regions(entry.object).iter().any(|region| region.entry == index) {
            sheet.warn(*line, &format!("efficiency.{}", entry.name), MESSAGE);
        }
    }
}

/// Where the detector measures an object, its efficiency must be told if it is told anywhere; the cells of a table may
/// leave a range of |eta| out, which is worth a warning.
fn efficiency_holes(sheet: &Sheet, detector: &Detector, lines: &[usize]) {
    for object in Object::ALL {
        let covered = detector.coverage(object);
        let regions = detector.efficiency_regions(object);
        let Some((first, line)) = detector.efficiencies.iter().zip(lines).find(|(entry, _)| entry.object == object)
        else {
            continue;
        };
        let told: Vec<EtaRange> = regions.iter().map(|region| region.eta).collect();
        let holes = without(&covered, &told);
        if !holes.is_empty() {
            let message = format!(
                "no entry tells the efficiency of the {object} at |eta| {}, where the detector measures it; add an entry for \
                 it, or leave `eta` out of the last one",
                ranges(&holes)
            );
            sheet.problem(*line, &format!("efficiency.{}.eta", first.name), message);
        }
        for region in &regions {
            let (entry, line) = (&detector.efficiencies[region.entry], lines[region.entry]);
            let EfficiencyCurve::Table(cells) = &entry.curve else { continue };
            let outside = without(&[region.eta], &covered);
            let here = without(&[region.eta], &outside);
            let empty = without(&here, &cells.iter().map(|cell| cell.eta).collect::<Vec<_>>());
            if !empty.is_empty() {
                let message = format!(
                    "the table has no cell at |eta| {}, where the detector measures the {object}; the efficiency is 0 there",
                    ranges(&empty)
                );
                sheet.warn(line, &format!("efficiency.{}.table", entry.name), message);
            }
        }
    }
}
