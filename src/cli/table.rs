//! Tables for people: aligned columns, numbers with their errors.

use std::io::{self, Write};

/// Most significant digits of a number on the screen.
const MOST_DIGITS: i32 = 7;

/// A value with its standard error in units of the last digits, as `149.9873(12)`; without where the error is below the
/// digits shown or not known.
pub(super) fn with_error(value: Option<f64>, error: Option<f64>) -> String {
    let Some(value) = value.filter(|value| value.is_finite()) else { return "-".to_owned() };
    let magnitude = if value == 0.0 { 0 } else { libm::floor(libm::log10(value.abs())) as i32 };
    let known = error.filter(|error| error.is_finite() && *error > 0.0);
    // Two digits of the error; five digits of a value whose error is not known.
    let wanted = known.map_or(4 - magnitude, |error| 1 - libm::floor(libm::log10(error)) as i32);
    let decimals = wanted.min(MOST_DIGITS - 1 - magnitude).max(0);
    let text = format!("{value:.*}", decimals as usize);
    let Some(error) = known else { return text };
    let last_digits = libm::round(error * libm::pow(10.0, f64::from(decimals)));
    if last_digits >= 1.0 { format!("{text}({last_digits})") } else { text }
}

/// Writes rows under a header; the first `left` columns to the left, the others to the right.
pub(super) fn write_table(out: &mut dyn Write, header: &[&str], rows: &[Vec<String>], left: usize) -> io::Result<()> {
    let header: Vec<String> = header.iter().map(|name| (*name).to_owned()).collect();
    let all = || std::iter::once(&header).chain(rows);
    let width = |column: usize| all().filter_map(|row| row.get(column)).map(|c| c.chars().count()).max().unwrap_or(0);
    let widths: Vec<usize> = (0..header.len()).map(width).collect();
    for row in all() {
        let mut line = String::new();
        for (column, (cell, width)) in row.iter().zip(&widths).enumerate() {
            let gap = " ".repeat(width - cell.chars().count());
            let separator = if column == 0 { "" } else { "  " };
            line += separator;
            line += &if column < left { format!("{cell}{gap}") } else { format!("{gap}{cell}") };
        }
        writeln!(out, "{}", line.trim_end())?;
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn errors_are_given_in_the_last_digits() {
        assert_eq!(with_error(Some(149.98734), Some(0.00121)), "149.9873(12)");
        assert_eq!(with_error(Some(1.5), Some(0.25)), "1.50(25)");
        assert_eq!(with_error(Some(1234.5), Some(31.0)), "1234(31)");
        assert_eq!(with_error(Some(150.0), Some(1e-9)), "150.0000");
        assert_eq!(with_error(Some(150.0), None), "150.00");
        assert_eq!(with_error(Some(0.0), Some(0.0)), "0.0000");
        assert_eq!(with_error(None, Some(1.0)), "-");
        assert_eq!(with_error(Some(f64::NAN), None), "-");
    }

    #[test]
    fn columns_line_up() {
        let mut out = Vec::new();
        let rows = vec![vec!["é".to_owned(), "1".to_owned()], vec!["long".to_owned(), "10".to_owned()]];
        write_table(&mut out, &["name", "n"], &rows, 1).unwrap();
        assert_eq!(String::from_utf8(out).unwrap(), "name   n\né      1\nlong  10\n");
    }
}
