//! A CSV table of numbers under named columns.

use std::path::Path;

use super::domain::Domain;
use crate::problem::Problem;

/// A column and what its values may be.
pub(super) type Column = (&'static str, &'static Domain);

/// One row: its line, and its values in the order of the columns; NaN after a problem.
#[derive(Debug)]
pub(super) struct Row<const N: usize> {
    pub line: usize,
    pub values: [f64; N],
}

/// The rows of a table with exactly these columns, in any order, and every problem of its lines. Columns from `required`
/// on may be absent, all of them together; their values are NaN then.
pub(super) fn read<const N: usize>(
    path: &Path,
    text: &str,
    columns: [Column; N],
    required: usize,
    problems: &mut Vec<Problem>,
) -> Vec<Row<N>> {
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
    let places = columns.map(|(column, _)| header.iter().position(|title| title == column));
    let names = |count: usize| columns[..count].iter().map(|(column, _)| *column).collect::<Vec<_>>().join(",");
    let here = places.iter().flatten().count();
    let fits =
        header.len() == here && (here == N || here == required && places[..required].iter().all(Option::is_some));
    if !fits {
        let found = header.iter().collect::<Vec<_>>().join(",");
        let or = if required < N { format!(" or {}", names(required)) } else { String::new() };
        let message = format!("found the columns {found:?}, must be {}{or}", names(N));
        problems.push(Problem::at_line(path, header_line, message));
        return Vec::new();
    }

    let mut rows = Vec::new();
    for record in reader.records() {
        let record = match record {
            Ok(record) => record,
            Err(error) => {
                problems.push(Problem::of_file(path, format!("cannot be read as CSV: {error}")));
                break;
            }
        };
        let line = record.position().map_or(1, |position| position.line() as usize);
        if record.len() != here {
            let message = format!("found {} values, must be {here}", record.len());
            problems.push(Problem::at_line(path, line, message).with_key(names(here)));
            continue;
        }
        let mut values = [f64::NAN; N];
        for ((value, place), (column, domain)) in values.iter_mut().zip(places).zip(columns) {
            let Some(place) = place else { continue };
            let found = record.get(place).unwrap_or_default();
            match found.parse() {
                Ok(number) if domain.allows(number) => *value = number,
                _ => {
                    let message = format!("found {found:?}, must be {}", domain.text);
                    problems.push(Problem::at_line(path, line, message).with_key(column));
                }
            }
        }
        rows.push(Row { line, values });
    }
    rows
}

/// Notes a range of a row that holds nothing.
pub(super) fn not_empty(path: &Path, line: usize, column: &str, (low, high): (f64, f64), problems: &mut Vec<Problem>) {
    if low >= high {
        let message = format!("found {low} to {high}, which is empty: the lower end must be below the upper");
        problems.push(Problem::at_line(path, line, message).with_key(column));
    }
}
