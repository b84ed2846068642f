//! Reading a run directory back.

use super::run_record::{PROGRAM, RunRecord};
use super::run_target::{RUN_FILE, digest_of};
use super::run_write::{SHIFTS_FILE, SUMMARY_FILE, TEMPLATES_FILE};
use crate::problem::{Problem, Problems};
use crate::template::{LabelledTemplate, Template};
use serde::Deserialize;
use serde::de::DeserializeOwned;
use std::fs;
use std::path::{Path, PathBuf};

/// A run that was read back.
#[derive(Clone, Debug, PartialEq)]
pub struct Run {
    /// The directory.
    pub directory: PathBuf,
    /// What `run.json` says.
    pub record: RunRecord,
    /// The templates in the order of the files, nominal ones first; without replicates, which are not written.
    pub templates: Vec<LabelledTemplate>,
}

#[derive(Deserialize)]
struct BinRow {
    channel: String,
    category: String,
    mass_gev: f64,
    shift: String,
    bin: usize,
    low_gev: f64,
    high_gev: f64,
    probability: f64,
    error: f64,
    list_error: f64,
}

#[derive(Deserialize)]
struct SummaryRow {
    channel: String,
    category: String,
    mass_gev: f64,
    shift: String,
    acceptance: f64,
    acceptance_error: f64,
    acceptance_list_error: f64,
    efficiency: f64,
    efficiency_error: f64,
    efficiency_list_error: f64,
    below_axis: f64,
    above_axis: f64,
    lost: f64,
}

/// Reads a run and checks that its tables are those that were written.
///
/// # Errors
/// When the directory holds no run, a table was changed since, or its rows do not fit together.
pub fn read_run(directory: &Path) -> Result<Run, Problems> {
    let file = directory.join(RUN_FILE);
    let bytes = read(&file)?;
    let record: RunRecord = serde_json::from_slice(&bytes).map_err(|error| {
        Problem::at_line(&file, error.line(), format!("is not the record of a run: {error}; fold the study again"))
    })?;
    if record.program != PROGRAM {
        let message = format!("was written by \"{}\", not by {PROGRAM}; give the directory of a run", record.program);
        return Err(Problem::of_file(&file, message).with_key("program").into());
    }
    let summary: Vec<(usize, SummaryRow)> = read_table(directory, SUMMARY_FILE, &record)?;
    let mut tables = vec![TEMPLATES_FILE];
    if record.files.iter().any(|file| file.path == SHIFTS_FILE) {
        tables.push(SHIFTS_FILE);
    }
    let mut templates = Vec::new();
    for name in tables {
        let rows = read_table(directory, name, &record)?;
        collect_templates(&directory.join(name), rows, &summary, &mut templates)?;
    }
    Ok(Run { directory: directory.to_path_buf(), record, templates })
}

fn read(file: &Path) -> Result<Vec<u8>, Problem> {
    fs::read(file).map_err(|error| {
        Problem::of_file(file, format!("cannot be read: {error}; give a directory that `peakfold fold` wrote"))
    })
}

/// The rows of a table with their line numbers, after a check of its digest.
fn read_table<Row: DeserializeOwned>(
    directory: &Path,
    name: &str,
    record: &RunRecord,
) -> Result<Vec<(usize, Row)>, Problem> {
    let file = directory.join(name);
    let Some(written) = record.files.iter().find(|digest| digest.path == name) else {
        return Err(Problem::of_file(&directory.join(RUN_FILE), format!("lists no {name}; fold the study again"))
            .with_key("files"));
    };
    let bytes = read(&file)?;
    if digest_of(&bytes) != written.sha256 {
        let message = format!("was changed after the run wrote it (its digest differs from {RUN_FILE}); fold again");
        return Err(Problem::of_file(&file, message));
    }
    let mut csv = csv::Reader::from_reader(bytes.as_slice());
    let mut rows = Vec::new();
    for row in csv.deserialize() {
        let row: Row = row.map_err(|error| {
            let line = error.position().map_or(1, |position| position.line() as usize);
            Problem::at_line(&file, line, format!("is not a row of this table: {error}"))
        })?;
        // Fields hold no line breaks, so rows are lines; the header is the first.
        rows.push((rows.len() + 2, row));
    }
    Ok(rows)
}

fn collect_templates(
    file: &Path,
    rows: Vec<(usize, BinRow)>,
    summary: &[(usize, SummaryRow)],
    templates: &mut Vec<LabelledTemplate>,
) -> Result<(), Problem> {
    let first = templates.len();
    for (line, row) in rows {
        if row.bin == 0 {
            let belongs = |s: &SummaryRow| {
                s.channel == row.channel
                    && s.category == row.category
                    && s.mass_gev == row.mass_gev
                    && s.shift == row.shift
            };
            let Some((_, s)) = summary.iter().find(|(_, s)| belongs(s)) else {
                return Err(Problem::at_line(file, line, format!("this template has no row in {SUMMARY_FILE}")));
            };
            templates.push(LabelledTemplate {
                channel: row.channel.clone(),
                category: row.category.clone(),
                mass_gev: row.mass_gev,
                shift: row.shift.clone(),
                template: Template {
                    edges_gev: vec![row.low_gev],
                    probability: Vec::new(),
                    error: Vec::new(),
                    list_error: Vec::new(),
                    below_axis: s.below_axis,
                    above_axis: s.above_axis,
                    acceptance: s.acceptance,
                    acceptance_error: s.acceptance_error,
                    acceptance_list_error: s.acceptance_list_error,
                    efficiency: s.efficiency,
                    efficiency_error: s.efficiency_error,
                    efficiency_list_error: s.efficiency_list_error,
                    lost: s.lost,
                    replicates: Vec::new(),
                },
            });
        }
        let continues = |l: &LabelledTemplate| {
            let t = &l.template;
            l.channel == row.channel
                && l.category == row.category
                && l.mass_gev == row.mass_gev
                && l.shift == row.shift
                && t.probability.len() == row.bin
                && t.edges_gev.last() == Some(&row.low_gev)
        };
        let Some(labelled) = templates[first..].last_mut().filter(|l| continues(l)) else {
            return Err(Problem::at_line(file, line, "does not continue the template of the row before it"));
        };
        labelled.template.edges_gev.push(row.high_gev);
        labelled.template.probability.push(row.probability);
        labelled.template.error.push(row.error);
        labelled.template.list_error.push(row.list_error);
    }
    Ok(())
}
