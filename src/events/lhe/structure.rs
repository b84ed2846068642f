//! The blocks of an event file: finds the events without reading their numbers.

use std::sync::Arc;

use super::Chunk;
use super::init::Init;
use super::parse::{Context, Span};
use super::tags::{Tag, find, trimmed};
use super::weights::{Declared, WeightChoice};
use crate::events::numbers::shown;
use crate::events::report::Report;
use crate::events::source::Source;
use crate::problem::Problem;

/// Longest text of one event, in bytes.
const LONGEST_EVENT: usize = 16 << 20;

/// Where in the file the scan stands.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Place {
    /// Before `<LesHouchesEvents>`.
    Start,
    /// Between blocks.
    Between,
    /// In the header, which is free text up to its end.
    Header,
    /// In the init block.
    Init,
    /// In a comment between blocks.
    Comment,
    /// In an event that begins at this offset of the text and this line of the file.
    Event { start: usize, line: usize },
    /// After `</LesHouchesEvents>`.
    End,
}

/// Finds the events of a file one after the other.
pub(in crate::events) struct Scanner<'a> {
    source: Source<'a>,
    weight: Option<String>,
    place: Place,
    /// Where the scan goes on after a comment.
    after_comment: Place,
    init: Option<Init>,
    declared: Declared,
    context: Option<Arc<Context>>,
    in_group: Option<usize>,
    next_group: u64,
}

impl<'a> Scanner<'a> {
    pub(in crate::events) fn new(source: Source<'a>, weight: Option<String>) -> Self {
        Scanner {
            source,
            weight,
            place: Place::Start,
            after_comment: Place::Start,
            init: None,
            declared: Declared::default(),
            context: None,
            in_group: None,
            next_group: 0,
        }
    }

    pub(in crate::events) fn file(&self) -> &std::path::Path {
        &self.source.file
    }

    /// Fills a chunk with events until its text has about `target` bytes; true when the file has ended.
    pub(in crate::events) fn scan(
        &mut self,
        target: usize,
        chunk: &mut Chunk,
        report: &mut Report,
    ) -> Result<bool, Problem> {
        chunk.clear();
        let scanned = self.scan_into(target, &mut chunk.text, &mut chunk.spans, report);
        chunk.context = self.context.clone();
        scanned
    }

    fn scan_into(
        &mut self,
        target: usize,
        text: &mut Vec<u8>,
        spans: &mut Vec<Span>,
        report: &mut Report,
    ) -> Result<bool, Problem> {
        loop {
            let begin = text.len();
            if !self.source.read_line(text)? {
                self.end_of_file(report)?;
                return Ok(true);
            }
            if let Place::Event { start, line } = self.place {
                if text.len() - start > LONGEST_EVENT {
                    let message = format!("the event is longer than {LONGEST_EVENT} bytes; </event> may be missing");
                    return Err(Problem::at_line(&self.source.file, line, message));
                }
                let content = text.get(begin..).unwrap_or_default().trim_ascii_start();
                if content.first() == Some(&b'<') && self.ends_event(content, line)? {
                    text.truncate(begin);
                    spans.push(Span { start, end: begin, line, group: self.next_group });
                    self.next_group += u64::from(self.in_group.is_none());
                    self.place = Place::Between;
                    if text.len() >= target {
                        return Ok(false);
                    }
                }
            } else {
                let rest = self.outside_event(text.get(begin..).unwrap_or_default(), report)?;
                text.drain(begin..begin + rest.unwrap_or(text.len() - begin));
                if matches!(self.place, Place::Event { .. }) {
                    self.place = Place::Event { start: begin, line: self.source.line };
                }
            }
        }
    }

    /// Whether a line that begins with `<` ends the event.
    fn ends_event(&self, line: &[u8], event_line: usize) -> Result<bool, Problem> {
        let Some(tag) = Tag::at_start(line) else { return Ok(false) };
        match (tag.name, tag.closing) {
            (b"event", true) => match tag.rest.map(trimmed) {
                Some([]) => Ok(true),
                _ => Err(self.source.problem("</event> must stand alone on its line")),
            },
            (b"event" | b"eventgroup" | b"init" | b"header" | b"LesHouchesEvents", _) => {
                let name = String::from_utf8_lossy(tag.name);
                let slash = if tag.closing { "/" } else { "" };
                Err(self.source.problem(format!(
                    "<{slash}{name}> inside the event that begins at line {event_line}; its </event> is missing"
                )))
            }
            _ => Ok(false),
        }
    }

    /// Reads a line outside events. When it begins an event, gives the offset of what follows the tag.
    fn outside_event(&mut self, line: &[u8], report: &mut Report) -> Result<Option<usize>, Problem> {
        let content = trimmed(line);
        match self.place {
            Place::Start => self.start(content)?,
            Place::Header => {
                self.declared.scan(line).map_err(|message| self.source.problem(message))?;
                if Tag::at_start(content).is_some_and(|tag| tag.closing && tag.name == b"header")
                    || content.ends_with(b"</header>")
                {
                    self.place = Place::Between;
                }
            }
            Place::Init => self.init_line(line, report)?,
            Place::Comment => {
                if find(content, b"-->").is_some() {
                    self.place = self.after_comment;
                }
            }
            Place::End => {
                if !content.is_empty() {
                    return Err(self.source.problem(
                        "text after </LesHouchesEvents>; a file holds one set of events: give the parts as files of \
                         their own",
                    ));
                }
            }
            Place::Between | Place::Event { .. } => return self.between(line, content),
        }
        Ok(None)
    }

    fn start(&mut self, content: &[u8]) -> Result<(), Problem> {
        let content = content.strip_prefix(b"\xef\xbb\xbf").unwrap_or(content);
        if content.is_empty() || content.starts_with(b"<?xml") {
            return Ok(());
        }
        if content.starts_with(b"<!--") {
            self.comment(content);
            return Ok(());
        }
        let Some(tag) = Tag::at_start(content).filter(|tag| tag.name == b"LesHouchesEvents" && !tag.closing) else {
            return Err(self.source.problem(
                "not an event file: it must begin with <LesHouchesEvents version=\"...\"> (Les Houches Event File, plain or \
                 gzip)",
            ));
        };
        if content.contains(&b'\r') {
            return Err(self.source.problem("a bare carriage return inside the line; write line ends as LF or CRLF"));
        }
        let version = tag.attribute(b"version").unwrap_or_default();
        if !matches!(version.split(|b| *b == b'.').next(), Some(b"1" | b"2" | b"3")) {
            return Err(self
                .source
                .problem(format!("the version of the event file is {}; 1.0 to 3.0 can be read", shown(version))));
        }
        self.place = Place::Between;
        Ok(())
    }

    fn comment(&mut self, content: &[u8]) {
        if find(content, b"-->").is_none() {
            self.after_comment = self.place;
            self.place = Place::Comment;
        }
    }

    fn init_line(&mut self, line: &[u8], report: &mut Report) -> Result<(), Problem> {
        let tag = Tag::at_start(line);
        if tag.is_some_and(|tag| tag.name == b"init" && tag.closing) {
            let init = self.init.unwrap_or_default();
            init.finish().map_err(|message| self.source.problem(message))?;
            self.place = Place::Between;
            return Ok(());
        }
        if tag.is_some_and(|tag| tag.name == b"event") {
            return Err(self.source.problem("<event> inside <init>; </init> is missing"));
        }
        self.declared.scan(line).map_err(|message| self.source.problem(message))?;
        let init = self.init.get_or_insert_default();
        let d_exponents = init.read(line, &self.declared).map_err(|message| self.source.problem(message))?;
        report.d_exponents.add(d_exponents, self.source.line);
        Ok(())
    }

    fn between(&mut self, line: &[u8], content: &[u8]) -> Result<Option<usize>, Problem> {
        if content.starts_with(b"<!--") {
            self.comment(content);
            return Ok(None);
        }
        // Text between blocks, and unknown tags, are of no concern.
        let Some(tag) = Tag::at_start(content) else { return Ok(None) };
        match (tag.name, tag.closing) {
            (b"event", false) => {
                let Some(rest) = tag.rest.filter(|_| !tag.empty) else {
                    return Err(self.source.problem("<event> is not closed by `>` on its line, or is empty"));
                };
                self.prepare_events()?;
                self.place = Place::Event { start: 0, line: self.source.line };
                // The end of the line stays, so that lines are counted.
                let tail = line.len() - (line.trim_ascii_end().len());
                return Ok(Some(line.len() - tail - rest.len()));
            }
            (b"event", true) => return Err(self.source.problem("</event> without <event>")),
            (b"eventgroup", false) => {
                if let Some(first) = self.in_group.replace(self.source.line) {
                    return Err(self.source.problem(format!(
                        "<eventgroup> inside the group that begins at line {first}; its </eventgroup> is missing"
                    )));
                }
            }
            (b"eventgroup", true) => {
                if self.in_group.take().is_none() {
                    return Err(self.source.problem("</eventgroup> without <eventgroup>"));
                }
                self.next_group += 1;
            }
            (b"header", false) => {
                let closed = tag.empty || content.ends_with(b"</header>");
                self.place = if closed { Place::Between } else { Place::Header };
            }
            (b"init", false) => {
                if self.init.is_some() {
                    return Err(self.source.problem("a second <init>; a file has one"));
                }
                self.init = Some(Init::default());
                self.place = Place::Init;
            }
            (b"LesHouchesEvents", true) => {
                if self.in_group.is_some() {
                    return Err(self.source.problem("</LesHouchesEvents> inside an <eventgroup>"));
                }
                self.place = Place::End;
            }
            (b"LesHouchesEvents", false) => {
                return Err(self.source.problem("a second <LesHouchesEvents>; give the parts as files of their own"));
            }
            _ => {}
        }
        Ok(None)
    }

    /// At the first event everything that concerns all of them is known.
    fn prepare_events(&mut self) -> Result<(), Problem> {
        if self.context.is_some() {
            return Ok(());
        }
        if self.init.is_none() {
            return Err(self.source.problem("<event> before any <init>; the init block is missing"));
        }
        let weight = match &self.weight {
            None => WeightChoice::Event,
            Some(name) => {
                WeightChoice::Named(self.declared.choose(name).map_err(|m| Problem::of_file(&self.source.file, m))?)
            }
        };
        self.context = Some(Arc::new(Context { file: self.source.file.clone(), weight }));
        Ok(())
    }

    fn end_of_file(&mut self, report: &mut Report) -> Result<(), Problem> {
        let cut = |what: &str| Err(self.source.problem(format!("the file ends inside {what}; it was cut off")));
        match self.place {
            Place::Start => cut("its first lines, before <LesHouchesEvents>"),
            Place::Header => cut("<header>"),
            Place::Init => cut("<init>"),
            Place::Comment => cut("a comment"),
            Place::Event { line, .. } => {
                report.truncated_line = Some(line);
                report.end_missing = true;
                Ok(())
            }
            Place::Between if self.init.is_none() => Err(Problem::of_file(
                &self.source.file,
                "the file has no <init> block; it was cut off or is not complete",
            )),
            Place::Between => {
                report.end_missing = true;
                Ok(())
            }
            Place::End => Ok(()),
        }
    }
}
