//! From the text of events to particle rows.

use std::path::PathBuf;

use super::weights::WeightChoice;
use crate::events::consistency::{FLOOR, Precision, contradiction};
use crate::events::numbers::{Cursor, float, integer, printed_digits, shown};
use crate::events::raw::{EventBatch, Particle};
use crate::events::report::Report;
use crate::problem::Problem;

/// Most particle rows of an event; the common block of the accord holds 500.
const MOST_ROWS: i64 = 2_000;

/// Columns of a particle row, as the accord names them.
const ROW: [&str; 13] =
    ["IDUP", "ISTUP", "MOTHUP1", "MOTHUP2", "ICOLUP1", "ICOLUP2", "px", "py", "pz", "E", "mass", "VTIMUP", "SPINUP"];

/// What parsing needs to know about the whole file.
#[derive(Clone, Debug)]
pub(super) struct Context {
    /// The file, for messages.
    pub file: PathBuf,
    /// The weight to take.
    pub weight: WeightChoice,
}

/// Where an event stands in the text of a chunk.
#[derive(Clone, Copy, Debug)]
pub(super) struct Span {
    pub start: usize,
    pub end: usize,
    pub line: usize,
    pub group: u64,
}

/// What is wrong with an event, and on which line.
struct Fault {
    line: usize,
    message: String,
}

/// Parses one event and adds it to the batch, or counts it in the report when its kinematics contradict themselves.
pub(super) fn parse_event(
    text: &[u8],
    span: Span,
    context: &Context,
    batch: &mut EventBatch,
    report: &mut Report,
) -> Result<(), Problem> {
    let mut d_exponents = 0;
    let weight = read_event(text, span.line, context, batch, &mut d_exponents).map_err(|fault| {
        let bare = text.windows(2).any(|pair| matches!(pair, [b'\r', next] if *next != b'\n'));
        let hint =
            if bare { "; some lines end with a bare carriage return: write line ends as LF or CRLF" } else { "" };
        Problem::at_line(&context.file, fault.line, fault.message + hint)
    })?;
    report.events += 1;
    report.d_exponents.add(d_exponents, span.line);
    let mut found = contradiction(batch.pending(), Precision::BEST);
    if found.is_some() {
        // Only now is it worth looking at how many digits were printed.
        let mut masses_gev = Vec::new();
        found = contradiction(batch.pending(), event_precision(text, &mut masses_gev));
    }
    match found {
        Some(kind) => {
            batch.drop_pending();
            report.count_inconsistent(kind, span.line);
        }
        None => batch.complete(weight, None, span.line, span.group),
    }
    Ok(())
}

/// Steps to the next line with content; false at the end of the text.
#[inline]
fn to_content(cursor: &mut Cursor<'_>) -> bool {
    loop {
        match cursor.peek() {
            None | Some(b'#') => {
                if !cursor.next_line() {
                    return false;
                }
            }
            Some(_) => return true,
        }
    }
}

#[inline]
fn to_numbers(cursor: &mut Cursor<'_>) -> bool {
    to_content(cursor) && cursor.peek() != Some(b'<')
}

/// A word of the current line as a number, with a message that names its column.
#[inline]
fn column<T>(
    cursor: &mut Cursor<'_>,
    columns: &[&str],
    index: usize,
    read: impl FnOnce(&[u8]) -> Result<T, crate::events::numbers::NumberFault>,
) -> Result<T, Fault> {
    let line = cursor.line;
    let word = cursor.word().ok_or_else(|| Fault {
        line,
        message: format!("the line has {index} columns, {} are needed: {}", columns.len(), columns.join(" ")),
    })?;
    read(word).map_err(|fault| Fault {
        line,
        message: format!(
            "column {} ({}) is {}, {fault}",
            index + 1,
            columns.get(index).copied().unwrap_or_default(),
            shown(word)
        ),
    })
}

fn end_of_columns(cursor: &mut Cursor<'_>, columns: &[&str]) -> Result<(), Fault> {
    if cursor.peek().is_none() {
        return Ok(());
    }
    let found = columns.len() + cursor.words_left();
    let message = format!("the line has {found} columns, {} are allowed: {}", columns.len(), columns.join(" "));
    Err(Fault { line: cursor.line, message })
}

/// Reads head and rows of an event into the batch; gives the weight.
fn read_event(
    text: &[u8],
    line: usize,
    context: &Context,
    batch: &mut EventBatch,
    d_exponents: &mut u64,
) -> Result<f64, Fault> {
    const HEAD: [&str; 6] = ["NUP", "IDPRUP", "XWGTUP", "SCALUP", "AQEDUP", "AQCDUP"];
    let cursor = &mut Cursor::new(text, line);
    if !to_numbers(cursor) {
        let message = format!("the event has no line of {} numbers: {}", HEAD.len(), HEAD.join(" "));
        return Err(Fault { line, message });
    }
    let head_line = cursor.line;
    let rows = column(cursor, &HEAD, 0, |w| integer(w, d_exponents))?;
    column(cursor, &HEAD, 1, |w| integer(w, d_exponents))?;
    let event_weight = column(cursor, &HEAD, 2, |w| float(w, d_exponents))?;
    for index in 3..HEAD.len() {
        column(cursor, &HEAD, index, |w| float(w, d_exponents))?;
    }
    end_of_columns(cursor, &HEAD)?;
    cursor.next_line();
    if !(0..=MOST_ROWS).contains(&rows) {
        let message = format!("NUP, the number of particle rows, is {rows}; 0 to {MOST_ROWS} are allowed");
        return Err(Fault { line: head_line, message });
    }
    for row in 0..rows {
        if !to_numbers(cursor) {
            let message = format!("NUP promises {rows} particle rows but {row} follow; the two must agree");
            return Err(Fault { line: head_line, message });
        }
        let particle = read_row(cursor, rows, row, d_exponents)?;
        batch.push_particle(particle);
        cursor.next_line();
    }
    if to_numbers(cursor) && looks_like_row(*cursor) {
        let message = format!("NUP promises {rows} particle rows but more follow; the two must agree");
        return Err(Fault { line: head_line, message });
    }
    if let Some(row) = circular(batch.pending()) {
        let message = format!("the mothers of particle row {} lead into a circle", row + 1);
        return Err(Fault { line: head_line, message });
    }
    context.weight.of_event(event_weight, cursor, d_exponents).map_err(|message| Fault { line: head_line, message })
}

#[inline]
fn read_row(cursor: &mut Cursor<'_>, rows: i64, row: i64, d_exponents: &mut u64) -> Result<Particle, Fault> {
    let line = cursor.line;
    let mut integers = [0_i64; 6];
    for (index, value) in integers.iter_mut().enumerate() {
        *value = column(cursor, &ROW, index, |w| integer(w, d_exponents))?;
    }
    let mut floats = [0.0_f64; 7];
    for (index, value) in floats.iter_mut().enumerate() {
        *value = column(cursor, &ROW, 6 + index, |w| float(w, d_exponents))?;
    }
    end_of_columns(cursor, &ROW)?;
    let [code, status, first, last, ..] = integers;
    let [px, py, pz, e, mass, ..] = floats;
    let mother = |value: i64, name: &str| {
        let own = value == row + 1;
        u32::try_from(value).ok().filter(|_| value <= rows && !own).ok_or_else(|| Fault {
            line,
            message: format!(
                "{name} of particle row {} is {value}; another row from 1 to {rows}, or 0 for none, is allowed",
                row + 1
            ),
        })
    };
    let mothers = [mother(first, "MOTHUP1")?, mother(last, "MOTHUP2")?];
    let status = i32::try_from(status)
        .map_err(|_| Fault { line, message: format!("ISTUP is {status}; a status code of the accord is allowed") })?;
    Ok(Particle { code, status, mothers, px, py, pz, e, mass })
}

/// Whether a line has as many columns as a particle row and begins like one.
fn looks_like_row(mut cursor: Cursor<'_>) -> bool {
    cursor.words_left() == ROW.len() && (0..2).all(|_| cursor.word().is_some_and(|word| integer(word, &mut 0).is_ok()))
}

/// The first row that is its own ancestor, or descends from one that is.
fn circular(particles: &[Particle]) -> Option<usize> {
    let rising = |(i, p): (usize, &Particle)| p.mothers.iter().all(|m| (*m as usize) <= i);
    if particles.iter().enumerate().all(rising) {
        return None;
    }
    // Rows are settled when their mothers are; in a circle nobody ever is. Row 0 stands for "no mother".
    let mut settled = vec![false; particles.len() + 1];
    if let Some(none) = settled.first_mut() {
        *none = true;
    }
    let is_settled = |settled: &[bool], row: usize| settled.get(row).copied().unwrap_or(true);
    loop {
        let mut changed = false;
        for (i, particle) in particles.iter().enumerate() {
            if !is_settled(&settled, i + 1) && particle.mothers.iter().all(|m| is_settled(&settled, *m as usize)) {
                if let Some(row) = settled.get_mut(i + 1) {
                    *row = true;
                }
                changed = true;
            }
        }
        if !changed {
            return settled.iter().skip(1).position(|done| !done);
        }
    }
}

/// What the printed digits of an event tell about its precision: the longest momentum or energy counts, and each mass by
/// itself, whose errors are written to `masses_gev`.
#[cold]
fn event_precision<'a>(text: &[u8], masses_gev: &'a mut Vec<f64>) -> Precision<'a> {
    let mut cursor = Cursor::new(text, 0);
    let (mut most_digits, mut most_decimals) = (1, -300);
    // The rows are known to be well formed, so that every line of 13 columns is one, and what follows does no harm.
    while to_content(&mut cursor) {
        if cursor.peek() != Some(b'<') && cursor.words_left() == ROW.len() {
            for index in 0..=10 {
                let word = cursor.word().unwrap_or_default();
                match index {
                    6..=9 => {
                        let (digits, decimals) = printed_digits(word);
                        most_digits = most_digits.max(digits);
                        most_decimals = most_decimals.max(decimals);
                    }
                    10 => masses_gev.push(half_of_power(-printed_digits(word).1)),
                    _ => {}
                }
            }
        }
        if !cursor.next_line() {
            break;
        }
    }
    let relative = FLOOR.max(half_of_power(1 - most_digits));
    Precision { relative, absolute_gev: half_of_power(-most_decimals), masses_gev }
}

/// Half of a power of ten.
fn half_of_power(exponent: i32) -> f64 {
    0.5 * libm::pow(10.0, f64::from(exponent))
}
