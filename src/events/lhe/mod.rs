//! Les Houches Event Files, versions 1 to 3, plain or gzip.
//!
//! J. Alwall et al., Comput. Phys. Commun. 176 (2007) 300 (hep-ph/0609017). Files are read as a stream: memory does not
//! grow with the file. Gzip is recognised by its first two bytes and may have several members.
//!
//! # What is recovered, what is left out, what is refused
//!
//! Recovered: Fortran D exponents (counted as a warning); an event that the end of a plain file cuts off, and a missing
//! closing tag (both reported); integers written as floats; CRLF line ends; any text in the header; unknown tags.
//!
//! Left out and counted, with the first line: events whose kinematics contradict themselves (see
//! [`Inconsistency`](super::Inconsistency)). A file with more than 1 % of them is refused.
//!
//! Refused with the line: everything else, such as a number of particle rows that differs from NUP, a mother that does
//! not exist, a wrong number of columns, a word or NaN where a finite number belongs, a missing init block, a weight that
//! is asked for and not there, a second set of events in the file, damaged or cut gzip data, lines longer than 1 MiB.
//!
//! Events that were handed out before a problem was met do not count: a file is used whole or not at all.
//!
//! # Weights
//!
//! The weight is XWGTUP as it stands, or the named weight of [`Options::weight`](super::Options::weight): found in `<rwgt>` by name, else in
//! `<weights>` by the order of the declarations in `<initrwgt>`. Weights may be negative. Events inside one `<eventgroup>`
//! carry the same group number.

mod init;
mod parse;
mod structure;
mod tags;
mod weights;

use std::sync::Arc;

use super::raw::EventBatch;
use super::report::Report;
use crate::problem::Problem;
use parse::{Context, Span, parse_event};
pub(super) use structure::Scanner;

/// Text of consecutive events.
#[derive(Clone, Debug, Default)]
pub(super) struct Chunk {
    text: Vec<u8>,
    spans: Vec<Span>,
    context: Option<Arc<Context>>,
}

impl Chunk {
    /// Adds the events to a batch; gives what was noticed.
    pub(super) fn parse(&self, batch: &mut EventBatch) -> Result<Report, Problem> {
        let mut report = Report::default();
        if let Some(context) = &self.context {
            for span in &self.spans {
                let text = self.text.get(span.start..span.end).unwrap_or_default();
                parse_event(text, *span, context, batch, &mut report)?;
            }
        }
        Ok(report)
    }

    pub(super) fn clear(&mut self) {
        self.text.clear();
        self.spans.clear();
    }

    pub(super) fn is_empty(&self) -> bool {
        self.spans.is_empty()
    }
}
