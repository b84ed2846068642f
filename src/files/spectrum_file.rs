//! The table of a production spectrum, CSV.

use std::path::Path;

use super::FileDigest;
use super::domain::{ANY, NOT_NEGATIVE};
use super::number_table::{self, Column, not_empty};
use super::source::{InputText, Unreadable, read_text};
use crate::problem::Problem;
use crate::process::SpectrumCell;

const COLUMNS: [Column; 5] = [
    ("pt_low_gev", &NOT_NEGATIVE),
    ("pt_high_gev", &NOT_NEGATIVE),
    ("rapidity_low", &ANY),
    ("rapidity_high", &ANY),
    ("weight", &NOT_NEGATIVE),
];

/// The cells of a spectrum file, its digest, and every problem of its lines.
pub(super) fn read(path: &Path) -> Result<(Vec<SpectrumCell>, FileDigest, Vec<Problem>), Unreadable> {
    let InputText { text, input } = read_text(path)?;
    let mut problems = Vec::new();
    let mut cells = Vec::new();
    for row in number_table::read(path, &text, COLUMNS, COLUMNS.len(), &mut problems) {
        let [pt_low, pt_high, rapidity_low, rapidity_high, weight] = row.values;
        let (pt_gev, rapidity) = ((pt_low, pt_high), (rapidity_low, rapidity_high));
        not_empty(path, row.line, "pt_low_gev", pt_gev, &mut problems);
        not_empty(path, row.line, "rapidity_low", rapidity, &mut problems);
        cells.push(SpectrumCell { pt_gev, rapidity, weight });
    }
    if problems.is_empty() && !cells.iter().any(|cell| cell.weight > 0.0) {
        problems.push(Problem::of_file(path, "no cell has a weight larger than 0; give at least one"));
    }
    // Those of the values come before those of the ranges.
    problems.sort_by_key(|problem| problem.line);
    Ok((cells, input, problems))
}
