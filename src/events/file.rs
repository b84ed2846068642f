//! A file of truth events in any of the formats, as batches of events.

use std::io::Read;
use std::path::Path;

use rayon::prelude::*;

use super::raw::EventBatch;
use super::report::Report;
use super::source::{Progress, Source};
use super::{csv, lhe};
use crate::problem::Problem;

/// Text of a chunk, in bytes; a chunk ends after the event that reaches it.
const CHUNK_BYTES: usize = 1 << 20;

/// How an event file is read.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Options {
    /// Name of the weight to take, which only LHE files have; the event weight without.
    pub weight: Option<String>,
}

/// Text of consecutive events, ready to be parsed on any thread.
#[derive(Clone, Debug, Default)]
pub struct Chunk {
    content: Content,
}

/// By format.
#[derive(Clone, Debug)]
enum Content {
    Lhe(lhe::Chunk),
    Csv(csv::Chunk),
}

impl Default for Content {
    fn default() -> Self {
        Content::Lhe(lhe::Chunk::default())
    }
}

impl Chunk {
    /// Parses the events into a batch, which is cleared first; gives what was noticed.
    ///
    /// # Errors
    ///
    /// The first event that is refused; the batch then holds those before it.
    pub fn parse(&self, batch: &mut EventBatch) -> Result<Report, Problem> {
        batch.clear();
        match &self.content {
            Content::Lhe(chunk) => chunk.parse(batch),
            Content::Csv(chunk) => chunk.parse(batch),
        }
    }

    fn clear(&mut self) {
        match &mut self.content {
            Content::Lhe(chunk) => chunk.clear(),
            Content::Csv(chunk) => chunk.clear(),
        }
    }

    fn is_empty(&self) -> bool {
        match &self.content {
            Content::Lhe(chunk) => chunk.is_empty(),
            Content::Csv(chunk) => chunk.is_empty(),
        }
    }
}

/// The serial part of a reading, by format: finds the events without reading their numbers.
enum Scanner<'a> {
    Lhe(lhe::Scanner<'a>),
    Csv(csv::Scanner<'a>),
}

impl Scanner<'_> {
    fn file(&self) -> &Path {
        match self {
            Scanner::Lhe(scanner) => scanner.file(),
            Scanner::Csv(scanner) => scanner.file(),
        }
    }

    /// Fills a chunk with events until its text has about [`CHUNK_BYTES`]; true when the file has ended.
    fn scan(&mut self, chunk: &mut Chunk, report: &mut Report) -> Result<bool, Problem> {
        match self {
            Scanner::Lhe(scanner) => {
                if !matches!(chunk.content, Content::Lhe(_)) {
                    chunk.content = Content::default();
                }
                let Content::Lhe(chunk) = &mut chunk.content else { return Ok(true) };
                scanner.scan(CHUNK_BYTES, chunk, report)
            }
            Scanner::Csv(scanner) => {
                if !matches!(chunk.content, Content::Csv(_)) {
                    chunk.content = Content::Csv(csv::Chunk::default());
                }
                let Content::Csv(chunk) = &mut chunk.content else { return Ok(true) };
                scanner.scan(CHUNK_BYTES, chunk, report)
            }
        }
    }
}

/// An event file that is being read. Its format is told by its content, not by its name: gzip by the first two bytes, and
/// what begins with `<` is [LHE](super::lhe), all else [CSV](super::csv).
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
    /// The file is missing, a directory, unreadable or empty, or has no such weight as its format goes.
    pub fn open(path: &Path, options: &Options) -> Result<Self, Problem> {
        Self::from_source(Source::open(path)?, options)
    }
}

impl<'a> EventFile<'a> {
    /// Reads from anything, under a name for messages.
    ///
    /// # Errors
    ///
    /// The input is unreadable or empty.
    pub fn from_reader(name: &Path, reader: impl Read + Send + 'a, options: &Options) -> Result<Self, Problem> {
        Self::from_source(Source::new(name, reader, None)?, options)
    }

    fn from_source((source, progress): (Source<'a>, Progress), options: &Options) -> Result<Self, Problem> {
        let scanner = if source.begins_with_tag() {
            Scanner::Lhe(lhe::Scanner::new(source, options.weight.clone()))
        } else {
            Scanner::Csv(csv::Scanner::new(source, options.weight.as_deref())?)
        };
        Ok(EventFile { scanner, progress, report: Report::default(), chunk: Chunk::default(), ended: false })
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
        chunk.clear();
        if self.ended {
            return Ok(false);
        }
        let scanned = self.scanner.scan(chunk, &mut self.report);
        self.ended = scanned.as_ref().map_or(true, |ended| *ended);
        scanned?;
        Ok(!chunk.is_empty())
    }

    /// Reads the file to its end and hands out its batches in order: while some chunks are parsed in parallel and consumed, the
    /// next ones are read. The batches do not depend on the number of threads.
    ///
    /// # Errors
    ///
    /// As [`Self::next_batch`], or what `consume` returns.
    pub fn for_each_batch<E: From<Problem> + Send>(
        &mut self,
        mut consume: impl FnMut(&EventBatch) -> Result<(), E> + Send,
    ) -> Result<(), E> {
        let width = rayon::current_num_threads();
        let mut wave = Wave::new(width);
        let mut next = Wave::new(width);
        let mut batches: Vec<(EventBatch, Result<Report, Problem>)> =
            (0..width).map(|_| (EventBatch::default(), Ok(Report::default()))).collect();
        wave.fill(self);
        while wave.filled > 0 || wave.failure.is_some() {
            let read_on = wave.failure.is_none();
            let ((), consumed) = rayon::join(
                || {
                    if read_on {
                        next.fill(self);
                    }
                },
                || -> Result<Report, E> {
                    let work = batches.par_iter_mut().zip(wave.chunks.par_iter().take(wave.filled));
                    work.for_each(|((batch, report), chunk)| *report = chunk.parse(batch));
                    let mut noticed = Report::default();
                    for (batch, report) in batches.iter_mut().take(wave.filled) {
                        noticed.merge(&std::mem::replace(report, Ok(Report::default()))?);
                        consume(batch)?;
                    }
                    Ok(noticed)
                },
            );
            // What the scanner has noticed in the meantime are other things, or those of the init block.
            self.report.merge(&consumed?);
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
