//! The table of a production spectrum, CSV.

use std::path::Path;

use super::FileDigest;
use super::domain::{ANY, Domain, NOT_NEGATIVE};
use super::source::{InputText, Unreadable, read_text};
use crate::problem::Problem;
use crate::process::SpectrumCell;

/// The columns, in any order; others are refused.
const COLUMNS: [(&str, &Domain); 5] = [
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
    let cells = cells(path, &text, &mut problems);
    if problems.is_empty() && !cells.iter().any(|cell| cell.weight > 0.0) {
        problems.push(Problem::of_file(path, "no cell has a weight larger than 0; give at least one"));
    }
    Ok((cells, input, problems))
}

fn cells(path: &Path, text: &str, problems: &mut Vec<Problem>) -> Vec<SpectrumCell> {
    let mut reader =
        csv::ReaderBuilder::new().trim(csv::Trim::All).comment(Some(b'#')).flexible(true).from_reader(text.as_bytes());
    let header = match reader.headers() {
        Ok(header) => header.clone(),
        Err(error) => {
            problems.push(Problem::of_file(path, format!("cannot be read as CSV: {error}")));
            return Vec::new();
        }
    };
    let header_line = header.position().map_or(1, |position| position.line() as usize);
    let places = COLUMNS.map(|(column, _)| header.iter().position(|title| title == column));
    let expected = COLUMNS.map(|(column, _)| column).join(",");
    if places.contains(&None) || header.len() != COLUMNS.len() {
        let found = header.iter().collect::<Vec<_>>().join(",");
        let message = format!("found the columns {found:?}, must be {expected}");
        problems.push(Problem::at_line(path, header_line, message));
        return Vec::new();
    }
    let places = places.map(|place| place.unwrap_or_default());

    let mut cells = Vec::new();
    for record in reader.records() {
        let record = match record {
            Ok(record) => record,
            Err(error) => {
                problems.push(Problem::of_file(path, format!("cannot be read as CSV: {error}")));
                break;
            }
        };
        let line = record.position().map_or(1, |position| position.line() as usize);
        let mut report = |column: &str, message: String| {
            problems.push(Problem::at_line(path, line, message).with_key(column));
        };
        if record.len() != COLUMNS.len() {
            report(&expected, format!("found {} values, must be {}", record.len(), COLUMNS.len()));
            continue;
        }
        let mut values = [f64::NAN; COLUMNS.len()];
        for ((value, place), (column, domain)) in values.iter_mut().zip(places).zip(COLUMNS) {
            let found = record.get(place).unwrap_or_default();
            match found.parse() {
                Ok(number) if domain.allows(number) => *value = number,
                _ => report(column, format!("found {found:?}, must be {}", domain.text)),
            }
        }
        let [pt_low, pt_high, rapidity_low, rapidity_high, weight] = values;
        for (column, low, high) in [("pt_low_gev", pt_low, pt_high), ("rapidity_low", rapidity_low, rapidity_high)] {
            if low >= high {
                report(column, format!("found {low} to {high}, which is empty: the lower end must be below the upper"));
            }
        }
        cells.push(SpectrumCell { pt_gev: (pt_low, pt_high), rapidity: (rapidity_low, rapidity_high), weight });
    }
    cells
}
