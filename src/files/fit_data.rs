//! Masses or a histogram to fit, CSV.

use std::fs::File;
use std::path::Path;

use crate::fit::{Data, Histogram, Masses};
use crate::problem::{Problem, Problems};

/// The most problems of one file that are told.
const MOST_PROBLEMS: usize = 20;

/// Reads a CSV file with the column `mass_gev` and perhaps `weight`, or with `low_gev`, `high_gev`, `count` and perhaps
/// `error`. Other columns are ignored; lines that begin with `#` are comments.
///
/// # Errors
/// A file that cannot be read; a missing column; text in place of a number; what [`Masses::new`] and [`Histogram::new`]
/// refuse. Each names its line.
pub fn load_fit_data(path: &Path) -> Result<Data, Problems> {
    let whole = |message: String| Problems::from(Problem::of_file(path, message));
    let is_directory = std::fs::metadata(path).is_ok_and(|data| data.is_dir());
    if is_directory {
        return Err(whole("this is a directory; name a file".to_owned()));
    }
    let file = File::open(path).map_err(|error| whole(format!("cannot be read: {error}")))?;
    let mut reader =
        csv::ReaderBuilder::new().trim(csv::Trim::All).comment(Some(b'#')).flexible(true).from_reader(file);
    let header = reader.headers().map_err(|error| whole(format!("cannot be read as CSV: {error}")))?.clone();
    let place = |column: &str| header.iter().position(|title| title.trim_start_matches('\u{feff}') == column);
    let line = header.position().map_or(1, |position| position.line() as usize);
    if header.iter().all(str::is_empty) {
        return Err(whole("the file is empty; give a header and at least one row".to_owned()));
    }
    let mut twice: Vec<&str> = header.iter().collect();
    twice.sort_unstable();
    let used = ["mass_gev", "weight", "low_gev", "high_gev", "count", "error"];
    if let Some(pair) = twice.windows(2).find(|pair| pair[0] == pair[1] && used.contains(&pair[0])) {
        return Err(Problem::at_line(path, line, "the column stands twice in the header").with_key(pair[0]).into());
    }
    let columns: Vec<(&str, usize)> = if let Some(mass) = place("mass_gev") {
        if place("low_gev").is_some() && place("count").is_some() {
            let message = "found masses and a histogram; leave the column mass_gev or the column count out";
            return Err(Problem::at_line(path, line, message).into());
        }
        std::iter::once(("mass_gev", mass)).chain(place("weight").map(|p| ("weight", p))).collect()
    } else if let (Some(low), Some(high), Some(count)) = (place("low_gev"), place("high_gev"), place("count")) {
        [("low_gev", low), ("high_gev", high), ("count", count)]
            .into_iter()
            .chain(place("error").map(|p| ("error", p)))
            .collect()
    } else {
        let found = header.iter().collect::<Vec<_>>().join(",");
        let message = format!(
            "found the columns {found:?}; masses need the column mass_gev (and may have weight), a histogram needs \
             low_gev,high_gev,count (and may have error)"
        );
        return Err(Problem::at_line(path, line, message).into());
    };
    let (rows, lines) = read_rows(path, &mut reader, &columns)?;
    let mut rows = rows.into_iter();
    let mut next = || rows.next().unwrap_or_default();
    let data = if columns[0].0 == "mass_gev" {
        let gev = next();
        Masses::new(gev, (columns.len() > 1).then(&mut next)).map(Data::from)
    } else {
        let (low, high, counts) = (next(), next(), next());
        let bins = low.into_iter().zip(high).collect();
        Histogram::new(bins, counts, (columns.len() > 3).then(&mut next)).map(Data::from)
    };
    data.map_err(|error| {
        let message = error.to_string();
        // Rows are lines here.
        let row = message.strip_prefix("row ").and_then(|rest| rest.split_once(": "));
        let placed = row.and_then(|(row, rest)| Some((*lines.get(row.parse::<usize>().ok()? - 1)?, rest.to_owned())));
        match placed {
            Some((line, rest)) => Problem::at_line(path, line, rest).into(),
            None => whole(message),
        }
    })
}

/// The numbers of the chosen columns, column by column, and the line of each row.
fn read_rows(
    path: &Path,
    reader: &mut csv::Reader<File>,
    columns: &[(&str, usize)],
) -> Result<(Vec<Vec<f64>>, Vec<usize>), Problems> {
    let mut values: Vec<Vec<f64>> = vec![vec![]; columns.len()];
    let mut lines = vec![];
    let mut problems = Problems::default();
    let mut record = csv::StringRecord::new();
    loop {
        match reader.read_record(&mut record) {
            Ok(true) => {}
            Ok(false) => break,
            Err(error) => {
                let line = error.position().map_or(1, |position| position.line() as usize);
                problems.0.push(Problem::at_line(path, line, format!("cannot be read as CSV: {error}")));
                break;
            }
        }
        let line = record.position().map_or(1, |position| position.line() as usize);
        lines.push(line);
        for (list, &(column, place)) in values.iter_mut().zip(columns) {
            let text = record.get(place);
            let number = text.and_then(|text| text.parse::<f64>().ok()).filter(|v| v.is_finite());
            if number.is_none() {
                let found = text.map_or_else(|| "nothing".to_owned(), |text| format!("{text:?}"));
                let message = format!("found {found}, must be a finite number");
                problems.0.push(Problem::at_line(path, line, message).with_key(column));
            }
            list.push(number.unwrap_or(f64::NAN));
        }
        if problems.0.len() >= MOST_PROBLEMS {
            problems.0.push(Problem::of_file(path, "there may be more problems; these are the first"));
            break;
        }
    }
    if problems.0.is_empty() { Ok((values, lines)) } else { Err(problems) }
}
