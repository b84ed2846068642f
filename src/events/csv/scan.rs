//! Rows of a file, cut into chunks between events without reading more numbers than the cut needs.

use std::path::Path;
use std::sync::Arc;

use ::csv::{ByteRecord, ReaderBuilder, Trim};

use super::header::Header;
use super::parse::out_of_order;
use super::{Chunk, MOST_ROWS};
use crate::events::numbers::integer;
use crate::events::report::Report;
use crate::events::source::{BYTE_ORDER_MARK, Source};
use crate::problem::Problem;

/// Longest text of one event beyond a full chunk, in bytes.
const LONGEST_EVENT: usize = 16 << 20;

/// A reader of records for text in which every line is one.
pub(super) fn records(text: &[u8]) -> ::csv::Reader<&[u8]> {
    ReaderBuilder::new().has_headers(false).flexible(true).trim(Trim::All).from_reader(text)
}

/// Finds the rows of a file one after the other.
pub(in crate::events) struct Scanner<'a> {
    source: Source<'a>,
    header: Option<Arc<Header>>,
    /// The first row of the next chunk and its line.
    carried: Option<(Vec<u8>, usize)>,
}

impl<'a> Scanner<'a> {
    pub(in crate::events) fn new(source: Source<'a>, weight: Option<&str>) -> Result<Self, Problem> {
        if let Some(weight) = weight {
            let message = format!(
                "this is no LHE file, so that it has no weight `{weight}`; CSV has the one column `weight`: leave the name out"
            );
            return Err(Problem::of_file(&source.file, message));
        }
        Ok(Scanner { source, header: None, carried: None })
    }

    pub(in crate::events) fn file(&self) -> &Path {
        &self.source.file
    }

    /// Fills a chunk with rows of complete events until its text has about `target` bytes; true when the file has ended. On
    /// failure the chunk holds the rows before it.
    pub(in crate::events) fn scan(
        &mut self,
        target: usize,
        chunk: &mut Chunk,
        report: &mut Report,
    ) -> Result<bool, Problem> {
        chunk.clear();
        if let Some((row, line)) = self.carried.take() {
            chunk.text.extend(row);
            chunk.lines.push(line);
        }
        // The event of the last row; known only beyond the target.
        let mut event = None;
        let mut beyond = 0;
        loop {
            let begin = chunk.text.len();
            let full = begin >= target;
            if full && event.is_none() {
                match self.header.as_ref().and_then(|header| header.event) {
                    None => return Ok(false),
                    Some(column) => event = Some(last_event(&chunk.text, column)),
                }
            }
            let read = self.read_row(&mut chunk.text, report);
            chunk.header.clone_from(&self.header);
            match read {
                Ok(Row::Data) => chunk.lines.push(self.source.line),
                Ok(Row::None) => {
                    chunk.text.truncate(begin);
                    continue;
                }
                Ok(Row::End) => return Ok(true),
                Err(problem) => {
                    chunk.text.truncate(begin);
                    return Err(problem);
                }
            }
            let (Some(before), Some(header)) = (event, &self.header) else { continue };
            let now = header.event.and_then(|column| event_of(chunk.text.get(begin..).unwrap_or_default(), column));
            // A row whose event cannot be read is refused when it is parsed.
            if now.is_none() || now != before {
                chunk.lines.pop();
                self.carried = Some((chunk.text.split_off(begin), self.source.line));
                if let (Some(before), Some(now)) = (before, now)
                    && now < before
                {
                    return Err(out_of_order(header, self.source.line, before, now));
                }
                return Ok(false);
            }
            beyond += 1;
            if beyond > MOST_ROWS {
                let message = format!("event {} has more than {MOST_ROWS} rows", now.unwrap_or(0));
                return Err(self.source.problem(message));
            }
            if begin > target + LONGEST_EVENT {
                let message = format!("the rows of event {} are longer than {LONGEST_EVENT} bytes", now.unwrap_or(0));
                return Err(self.source.problem(message));
            }
        }
    }

    /// Appends the next line to a text and says what it is.
    fn read_row(&mut self, text: &mut Vec<u8>, report: &mut Report) -> Result<Row, Problem> {
        let begin = text.len();
        if !self.source.read_line(text)? {
            return match self.header {
                Some(_) => Ok(Row::End),
                None => Err(Problem::of_file(&self.source.file, "the file has no header and no events; give both")),
            };
        }
        let mut row = text.get(begin..).unwrap_or_default();
        let cut = !row.ends_with(b"\n");
        row = row.strip_suffix(b"\n").unwrap_or(row);
        row = row.strip_suffix(b"\r").unwrap_or(row);
        if self.source.line == 1 {
            row = row.strip_prefix(BYTE_ORDER_MARK).unwrap_or(row);
        }
        let content = row.trim_ascii();
        if content.is_empty() || content.starts_with(b"#") {
            return Ok(Row::None);
        }
        if row.contains(&b'\r') {
            return Err(self
                .source
                .problem("a bare carriage return inside of the line; write line ends as LF or CRLF"));
        }
        if !quotes_close(row) {
            return Err(self.source.problem("a quoted field does not end on its line; close the quotes"));
        }
        report.line_end_missing |= cut;
        if self.header.is_none() {
            self.header = Some(Arc::new(Header::new(&self.source.file, self.source.line, &record_of(row))?));
            return Ok(Row::None);
        }
        Ok(Row::Data)
    }
}

enum Row {
    Data,
    None,
    End,
}

/// The one record of a line.
fn record_of(line: &[u8]) -> ByteRecord {
    let mut record = ByteRecord::new();
    // Reading from memory does not fail.
    let _ = records(line).read_byte_record(&mut record);
    record
}

fn event_of(line: &[u8], column: usize) -> Option<i64> {
    record_of(line).get(column).and_then(|field| integer(field, &mut 0).ok())
}

/// The event of the last line of a text.
fn last_event(text: &[u8], column: usize) -> Option<i64> {
    let body = text.strip_suffix(b"\n").unwrap_or(text);
    let begin = body.iter().rposition(|byte| *byte == b'\n').map_or(0, |end| end + 1);
    event_of(body.get(begin..).unwrap_or_default(), column)
}

/// Whether every quoted field ends on the line: only then is a line one record. A quote opens a field at its beginning; inside,
/// two quotes stand for one.
fn quotes_close(line: &[u8]) -> bool {
    let (mut inside, mut opens) = (false, true);
    for byte in line {
        match byte {
            b'"' if inside => {
                inside = false;
                // Another quote right after goes on with the field.
                opens = true;
            }
            b'"' if opens => inside = true,
            _ => opens = *byte == b',' && !inside,
        }
    }
    !inside
}
