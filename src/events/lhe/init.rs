//! The init block: beams and processes.

use super::weights::Declared;
use crate::events::numbers::{Cursor, float, integer, shown};

const BEAMS: [&str; 10] =
    ["IDBMUP1", "IDBMUP2", "EBMUP1", "EBMUP2", "PDFGUP1", "PDFGUP2", "PDFSUP1", "PDFSUP2", "IDWTUP", "NPRUP"];
const PROCESS: [&str; 4] = ["XSECUP", "XERRUP", "XMAXUP", "LPRUP"];

/// Reads the init block line by line. Nothing of it enters a template (weights are used as they stand), but a file
/// whose init block is damaged is not trusted.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Init {
    processes: Option<i64>,
    processes_read: i64,
}

impl Init {
    /// Reads one line and gives the number of D exponents in it. Lines of tags, comments and weight declarations are none
    /// of its own.
    pub(super) fn read(&mut self, line: &[u8], declared: &Declared) -> Result<u64, String> {
        let mut d_exponents = 0;
        let mut cursor = Cursor::new(line, 0);
        if declared.is_inside() || matches!(cursor.peek(), None | Some(b'#' | b'<')) {
            return Ok(0);
        }
        match self.processes {
            None => {
                let values = numbers(cursor, &BEAMS, &mut d_exponents)?;
                let processes = values.last().copied().unwrap_or_default();
                if !(processes >= 1.0 && processes == processes.trunc() && processes < 1e6) {
                    return Err(format!("NPRUP, the number of processes, is {processes}; 1 or more is allowed"));
                }
                self.processes = Some(processes as i64);
            }
            Some(processes) if self.processes_read < processes => {
                numbers(cursor, &PROCESS, &mut d_exponents)?;
                self.processes_read += 1;
            }
            Some(processes) => {
                if numbers(cursor, &PROCESS, &mut d_exponents).is_ok() {
                    return Err(format!(
                        "NPRUP promises {processes} process lines but more follow; the two must agree"
                    ));
                }
            }
        }
        Ok(d_exponents)
    }

    /// What is missing at the end of the block.
    pub(super) fn finish(&self) -> Result<(), String> {
        match self.processes {
            None => Err(format!("<init> has no line of {} numbers: {}", BEAMS.len(), BEAMS.join(" "))),
            Some(processes) if self.processes_read < processes => Err(format!(
                "NPRUP promises {processes} process lines but {} follow; the two must agree",
                self.processes_read
            )),
            Some(_) => Ok(()),
        }
    }
}

fn numbers(mut cursor: Cursor<'_>, columns: &[&str], d_exponents: &mut u64) -> Result<Vec<f64>, String> {
    let found = cursor.words_left();
    if found != columns.len() {
        let message = format!("the line has {found} columns, {} are needed: {}", columns.len(), columns.join(" "));
        return Err(message);
    }
    let mut values = Vec::with_capacity(found);
    for (index, name) in columns.iter().enumerate() {
        let word = cursor.word().unwrap_or_default();
        let whole = !matches!(*name, "EBMUP1" | "EBMUP2" | "XSECUP" | "XERRUP" | "XMAXUP");
        let value = if whole { integer(word, d_exponents).map(|value| value as f64) } else { float(word, d_exponents) };
        values.push(value.map_err(|fault| format!("column {} ({name}) is {}, {fault}", index + 1, shown(word)))?);
    }
    Ok(values)
}
