//! The table of an efficiency, CSV.

use std::path::Path;

use super::FileDigest;
use super::domain::{ABS_ETA, NOT_NEGATIVE, SHARE};
use super::number_table::{self, Column, not_empty};
use super::source::{InputText, Unreadable, read_text};
use crate::detector::{EfficiencyCell, EtaRange};
use crate::problem::Problem;

/// The last two together or not at all.
const COLUMNS: [Column; 5] = [
    ("pt_low_gev", &NOT_NEGATIVE),
    ("pt_high_gev", &NOT_NEGATIVE),
    ("efficiency", &SHARE),
    ("abs_eta_low", &ABS_ETA),
    ("abs_eta_high", &ABS_ETA),
];
const REQUIRED: usize = 3;

/// Most cells of a table; any two are compared.
const MOST_CELLS: usize = 4000;

/// The cells of an efficiency file, its digest, and every problem of its lines.
pub(super) fn read(path: &Path) -> Result<(Vec<EfficiencyCell>, FileDigest, Vec<Problem>), Unreadable> {
    let InputText { text, input } = read_text(path)?;
    let mut problems = Vec::new();
    let mut cells: Vec<(usize, EfficiencyCell)> = Vec::new();
    for row in number_table::read(path, &text, COLUMNS, REQUIRED, &mut problems) {
        let [pt_low, pt_high, efficiency, eta_low, eta_high] = row.values;
        not_empty(path, row.line, "pt_low_gev", (pt_low, pt_high), &mut problems);
        not_empty(path, row.line, "abs_eta_low", (eta_low, eta_high), &mut problems);
        // Without the columns, and after a problem, NaN.
        let eta = EtaRange {
            low: if eta_low.is_nan() { 0.0 } else { eta_low },
            high: if eta_high.is_nan() { f64::INFINITY } else { eta_high },
        };
        cells.push((row.line, EfficiencyCell { pt_gev: (pt_low, pt_high), eta, efficiency }));
    }
    if problems.is_empty() {
        if cells.len() > MOST_CELLS {
            let message = format!("found {} cells, must be at most {MOST_CELLS}", cells.len());
            problems.push(Problem::of_file(path, message));
        } else if !cells.iter().any(|(_, cell)| cell.efficiency > 0.0) {
            problems.push(Problem::of_file(path, "no cell has an efficiency larger than 0; give at least one"));
        } else {
            overlaps(path, &cells, &mut problems);
        }
    }
    problems.sort_by_key(|problem| problem.line);
    Ok((cells.into_iter().map(|(_, cell)| cell).collect(), input, problems))
}

/// Of each cell that shares a part with one before it, the first such.
fn overlaps(path: &Path, cells: &[(usize, EfficiencyCell)], problems: &mut Vec<Problem>) {
    let apart = |a: (f64, f64), b: (f64, f64)| a.1 <= b.0 || b.1 <= a.0;
    for (index, (line, cell)) in cells.iter().enumerate() {
        let eta = |cell: &EfficiencyCell| (cell.eta.low, cell.eta.high);
        let share =
            |(_, other): &&(usize, EfficiencyCell)| !apart(cell.pt_gev, other.pt_gev) && !apart(eta(cell), eta(other));
        if let Some((other, _)) = cells[..index].iter().find(share) {
            let message =
                format!("the cell overlaps that of line {other}; every pT and |eta| may lie in one cell only");
            problems.push(Problem::at_line(path, *line, message));
        }
    }
}
