//! What was noticed while an event file was read.

use std::path::Path;

use crate::events::consistency::Inconsistency;
use crate::problem::Problem;

/// A file is refused when more than this fraction of its events contradict themselves: then it is not a few broken
/// events but a broken file.
pub const MOST_INCONSISTENT: f64 = 0.01;

/// How often something was met, and where first.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Tally {
    /// How often.
    pub count: u64,
    /// Line of the first one, from 1; 0 when there was none.
    pub first_line: usize,
}

impl Tally {
    /// Counts some more that begin at a line.
    pub fn add(&mut self, count: u64, line: usize) {
        if count > 0 {
            if self.count == 0 {
                self.first_line = line;
            }
            self.count += count;
        }
    }

    fn merge(&mut self, later: Tally) {
        self.add(later.count, later.first_line);
    }
}

/// What was noticed in a file, or in a part of it.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Report {
    /// Complete events that were read.
    pub events: u64,
    /// Events that were left out because their kinematics contradict themselves, by the kinds of
    /// [`Inconsistency::ALL`].
    pub inconsistent: [Tally; 5],
    /// Numbers with a Fortran D exponent, which were read as E.
    pub d_exponents: Tally,
    /// Line of an event that the end of the file cuts off; it was left out.
    pub truncated_line: Option<usize>,
    /// Whether the file ends without its closing tag (LHE).
    pub end_missing: bool,
    /// Whether the last line has no line end (CSV).
    pub line_end_missing: bool,
}

impl Report {
    /// Counts an event that contradicts itself.
    pub(super) fn count_inconsistent(&mut self, kind: Inconsistency, line: usize) {
        for (tally, candidate) in self.inconsistent.iter_mut().zip(Inconsistency::ALL) {
            if candidate == kind {
                tally.add(1, line);
            }
        }
    }

    /// All events that contradict themselves.
    pub fn inconsistent_events(&self) -> Tally {
        let met = self.inconsistent.iter().filter(|tally| tally.count > 0);
        Tally {
            count: self.inconsistent.iter().map(|tally| tally.count).sum(),
            first_line: met.map(|tally| tally.first_line).min().unwrap_or(0),
        }
    }

    /// Adds what was noticed in a later part of the file.
    pub fn merge(&mut self, later: &Report) {
        self.events += later.events;
        for (tally, other) in self.inconsistent.iter_mut().zip(later.inconsistent) {
            tally.merge(other);
        }
        self.d_exponents.merge(later.d_exponents);
        self.truncated_line = self.truncated_line.or(later.truncated_line);
        self.end_missing |= later.end_missing;
        self.line_end_missing |= later.line_end_missing;
    }

    /// Whether a file that was read to its end can be used.
    ///
    /// # Errors
    ///
    /// Refused are a file without a complete event, and one with more than [`MOST_INCONSISTENT`] of its events
    /// contradicting themselves.
    pub fn verdict(&self, file: &Path) -> Result<(), Problem> {
        if self.events == 0 {
            return Err(match self.truncated_line {
                Some(line) => Problem::at_line(
                    file,
                    line,
                    "the file ends inside its first event; one complete event is needed at least",
                ),
                None => Problem::of_file(file, "the file has no event; one is needed at least"),
            });
        }
        let bad = self.inconsistent_events();
        if bad.count as f64 > MOST_INCONSISTENT * self.events as f64 {
            return Err(Problem::at_line(
                file,
                bad.first_line,
                format!(
                    "{} of {} events contradict themselves, at most {} % are left out: {}; the first one begins here; \
                     check the program that wrote the file",
                    bad.count,
                    self.events,
                    MOST_INCONSISTENT * 100.0,
                    self.inconsistent_kinds()
                ),
            ));
        }
        Ok(())
    }

    fn inconsistent_kinds(&self) -> String {
        let kinds = Inconsistency::ALL.iter().zip(self.inconsistent).filter(|(_, tally)| tally.count > 0);
        let texts: Vec<String> = kinds
            .map(|(kind, tally)| format!("{} x {kind} (first at line {})", tally.count, tally.first_line))
            .collect();
        texts.join(", ")
    }

    /// One sentence for each thing that a user should know of; empty for a clean file.
    pub fn warnings(&self) -> Vec<String> {
        let mut warnings = Vec::new();
        if self.d_exponents.count > 0 {
            warnings.push(format!(
                "{} numbers have a Fortran D exponent and were read as E (first in the event or line {})",
                self.d_exponents.count, self.d_exponents.first_line
            ));
        }
        let bad = self.inconsistent_events();
        if bad.count > 0 {
            warnings.push(format!(
                "{} of {} events were left out because they contradict themselves: {}",
                bad.count,
                self.events,
                self.inconsistent_kinds()
            ));
        }
        if self.line_end_missing {
            warnings.push("the last line of the file has no line end; the file may have been cut off".to_owned());
        }
        match self.truncated_line {
            Some(line) => {
                warnings.push(format!(
                    "the file ends inside the event of line {line}, which was left out; {} complete events \
                 come before",
                    self.events
                ));
            }
            None if self.end_missing => {
                warnings.push("the file ends without </LesHouchesEvents>; it may have been cut off".to_owned());
            }
            None => {}
        }
        warnings
    }
}
