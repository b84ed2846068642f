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
//! The weight is XWGTUP as it stands, or the named weight of [`Options::weight`]: found in `<rwgt>` by name, else in
//! `<weights>` by the order of the declarations in `<initrwgt>`. Weights may be negative. Events inside one `<eventgroup>`
//! carry the same group number.

mod init;
mod numbers;
mod parse;
mod report;
mod source;
mod structure;
mod tags;
mod weights;

use std::io::Read;
use std::path::Path;
use std::sync::Arc;

use rayon::prelude::*;

pub use report::{MOST_INCONSISTENT, Report, Tally};
pub use source::Progress;

use super::raw::EventBatch;
use crate::problem::Problem;
use parse::{Context, Span, parse_event};
use source::Source;
use structure::Scanner;

/// Text of a chunk, in bytes; a chunk ends after the event that reaches it.
const CHUNK_BYTES: usize = 1 << 20;

/// How an event file is read.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Options {
    /// Name of the weight to take; the event weight XWGTUP without.
    pub weight: Option<String>,
}

/// Text of consecutive events, ready to be parsed on any thread.
#[derive(Clone, Debug, Default)]
pub struct Chunk {
    text: Vec<u8>,
    spans: Vec<Span>,
    context: Option<Arc<Context>>,
}

impl Chunk {
    /// Parses the events into a batch, which is cleared first; gives what was noticed.
    ///
    /// # Errors
    ///
    /// The first event that is refused; the batch then holds those before it.
    pub fn parse(&self, batch: &mut EventBatch) -> Result<Report, Problem> {
        batch.clear();
        let mut report = Report::default();
        if let Some(context) = &self.context {
            for span in &self.spans {
                let text = self.text.get(span.start..span.end).unwrap_or_default();
                parse_event(text, *span, context, batch, &mut report)?;
            }
        }
        Ok(report)
    }
}

/// An event file that is being read.
pub struct EventFile<'a> {
    scanner: Scanner<'a>,
    progress: Progress,
    report: Report,
    chunk: Chunk,
    ended: bool,
}

impl EventFile<'static> {
    /// Opens a file.
    ///
    /// # Errors
    ///
    /// The file is missing, a directory, unreadable or empty.
    pub fn open(path: &Path, options: &Options) -> Result<Self, Problem> {
        Ok(Self::from_source(Source::open(path)?, options))
    }
}

impl<'a> EventFile<'a> {
    /// Reads from anything, under a name for messages.
    ///
    /// # Errors
    ///
    /// The input is unreadable or empty.
    pub fn from_reader(name: &Path, reader: impl Read + Send + 'a, options: &Options) -> Result<Self, Problem> {
        Ok(Self::from_source(Source::new(name, reader, None)?, options))
    }

    fn from_source((source, progress): (Source<'a>, Progress), options: &Options) -> Self {
        EventFile {
            scanner: Scanner::new(source, options.weight.clone()),
            progress,
            report: Report::default(),
            chunk: Chunk::default(),
            ended: false,
        }
    }

    /// How far the reading has come.
    pub fn progress(&self) -> &Progress {
        &self.progress
    }

    /// What was noticed so far.
    pub fn report(&self) -> &Report {
        &self.report
    }

    /// Reads the next events into a batch, which is cleared first; false when there are none left.
    ///
    /// # Errors
    ///
    /// Anything for which a file is refused. Events from earlier batches must then not be used. The events of the batch
    /// itself are those before the one refused.
    pub fn next_batch(&mut self, batch: &mut EventBatch) -> Result<bool, Problem> {
        batch.clear();
        let mut chunk = std::mem::take(&mut self.chunk);
        let more = self.next_chunk(&mut chunk);
        let parsed = chunk.parse(batch);
        self.chunk = chunk;
        // What is wrong with an earlier line is told first.
        self.ended |= parsed.is_err();
        self.report.merge(&parsed?);
        if more? {
            return Ok(true);
        }
        self.report.verdict(self.scanner.file())?;
        Ok(false)
    }

    /// Reads the text of the next events; false when there are none left. When it fails, the chunk holds the complete
    /// events before the failure.
    ///
    /// This is the serial part of the reading: chunks can be parsed on other threads. Whoever does so merges the reports of
    /// the chunks, in their order, into [`Self::report`] and asks for its [`Report::verdict`] at the end, as
    /// [`Self::for_each_batch`] does.
    ///
    /// # Errors
    ///
    /// The structure of the file is broken, or it cannot be read.
    pub fn next_chunk(&mut self, chunk: &mut Chunk) -> Result<bool, Problem> {
        chunk.text.clear();
        chunk.spans.clear();
        if self.ended {
            return Ok(false);
        }
        let scanned = self.scanner.scan(CHUNK_BYTES, &mut chunk.text, &mut chunk.spans, &mut self.report);
        chunk.context = self.scanner.context();
        self.ended = scanned.as_ref().map_or(true, |ended| *ended);
        scanned?;
        Ok(!chunk.spans.is_empty())
    }

    /// Reads the file to its end and hands out its batches in order: while some chunks are parsed in parallel, the next ones
    /// are read. The batches do not depend on the number of threads.
    ///
    /// # Errors
    ///
    /// As [`Self::next_batch`], or what `consume` returns.
    pub fn for_each_batch<E: From<Problem>>(
        &mut self,
        mut consume: impl FnMut(&EventBatch) -> Result<(), E>,
    ) -> Result<(), E> {
        let width = rayon::current_num_threads();
        let mut wave = Wave::new(width);
        let mut next = Wave::new(width);
        let mut batches: Vec<(EventBatch, Result<Report, Problem>)> =
            (0..width).map(|_| (EventBatch::default(), Ok(Report::default()))).collect();
        wave.fill(self);
        while wave.filled > 0 || wave.failure.is_some() {
            let read_on = wave.failure.is_none();
            rayon::join(
                || {
                    if read_on {
                        next.fill(self);
                    }
                },
                || {
                    let work = batches.par_iter_mut().zip(wave.chunks.par_iter().take(wave.filled));
                    work.for_each(|((batch, report), chunk)| *report = chunk.parse(batch));
                },
            );
            for (batch, report) in batches.iter_mut().take(wave.filled) {
                self.report.merge(&std::mem::replace(report, Ok(Report::default()))?);
                consume(batch)?;
            }
            if let Some(problem) = wave.failure.take() {
                return Err(problem.into());
            }
            std::mem::swap(&mut wave, &mut next);
            next.filled = 0;
        }
        self.report.verdict(self.scanner.file())?;
        Ok(())
    }
}

/// Chunks that are parsed side by side.
struct Wave {
    chunks: Vec<Chunk>,
    filled: usize,
    failure: Option<Problem>,
}

impl Wave {
    fn new(width: usize) -> Self {
        Wave { chunks: vec![Chunk::default(); width], filled: 0, failure: None }
    }

    /// Reads as many chunks as there is room for. A failed chunk still has the events before the failure.
    fn fill(&mut self, file: &mut EventFile<'_>) {
        self.filled = 0;
        for chunk in &mut self.chunks {
            match file.next_chunk(chunk) {
                Ok(true) => self.filled += 1,
                Ok(false) => return,
                Err(problem) => {
                    self.filled += 1;
                    self.failure = Some(problem);
                    return;
                }
            }
        }
    }
}
