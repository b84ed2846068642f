//! Named weights: declared in `<initrwgt>`, given per event in `<rwgt>` by name or in `<weights>` by position.

use super::tags::{Tag, find};
use crate::events::numbers::{Cursor, float, shown};

/// Most weights that are kept by name, so that a damaged file cannot fill the memory.
const MOST_DECLARED: usize = 20_000;
/// Longest name of a weight, in bytes.
const LONGEST_NAME: usize = 256;

/// The names of the declared weights, in the order of declaration.
#[derive(Clone, Debug, Default)]
pub(super) struct Declared {
    names: Vec<String>,
    inside: bool,
    hidden_until: Option<&'static [u8]>,
}

impl Declared {
    /// Reads one line of the header or the init block.
    pub(super) fn scan(&mut self, line: &[u8]) -> Result<(), String> {
        let mut text = line;
        loop {
            if let Some(end) = self.hidden_until {
                let Some(position) = find(text, end) else { return Ok(()) };
                self.hidden_until = None;
                text = text.get(position + end.len()..).unwrap_or_default();
            }
            let Some(position) = text.iter().position(|b| *b == b'<') else { return Ok(()) };
            text = text.get(position..).unwrap_or_default();
            if text.starts_with(b"<!--") {
                self.hidden_until = Some(b"-->");
            } else if text.starts_with(b"<![CDATA[") {
                self.hidden_until = Some(b"]]>");
            } else if let Some(tag) = Tag::at_start(text) {
                match tag.name {
                    b"initrwgt" => self.inside = !tag.closing && !tag.empty,
                    b"weight" if self.inside && !tag.closing => self.declare(&tag)?,
                    _ => {}
                }
            }
            text = text.get(1..).unwrap_or_default();
        }
    }

    fn declare(&mut self, tag: &Tag<'_>) -> Result<(), String> {
        let name = tag.attribute(b"id").unwrap_or_default();
        if self.names.len() >= MOST_DECLARED || name.len() > LONGEST_NAME {
            return Err(format!(
                "more than {MOST_DECLARED} declared weights, or a name of more than {LONGEST_NAME} bytes; the file is \
                 damaged or not an event file"
            ));
        }
        self.names.push(String::from_utf8_lossy(name).into_owned());
        Ok(())
    }

    /// Whether the scan stands between `<initrwgt>` and `</initrwgt>`.
    pub(super) fn is_inside(&self) -> bool {
        self.inside
    }

    /// The choice of one weight; an error says which names there are.
    pub(super) fn choose(&self, name: &str) -> Result<NamedWeight, String> {
        let mut positions = self.names.iter().enumerate().filter(|(_, n)| *n == name).map(|(i, _)| i);
        let position = positions.next();
        if positions.next().is_some() {
            return Err(format!("weight `{name}` is declared more than once, so that it is not clear which is meant"));
        }
        if position.is_none() && !self.names.is_empty() {
            let some: Vec<&str> = self.names.iter().take(8).map(String::as_str).collect();
            let more = if self.names.len() > some.len() { ", ..." } else { "" };
            return Err(format!(
                "weight `{name}` is not declared; the file declares {} weights: {}{more}; name one of them, or none for \
                 the event weight",
                self.names.len(),
                some.join(", ")
            ));
        }
        Ok(NamedWeight { name: name.to_owned(), position, declared: self.names.len() })
    }
}

/// One named weight of every event.
#[derive(Clone, Debug)]
pub(super) struct NamedWeight {
    name: String,
    position: Option<usize>,
    declared: usize,
}

impl NamedWeight {
    /// Its value in the text that follows the particle rows of an event.
    pub(super) fn value_in(&self, tail: &[u8], d_exponents: &mut u64) -> Result<f64, String> {
        let name = &self.name;
        let mut found: Option<&[u8]> = None;
        let mut listed: Option<&[u8]> = None;
        let mut text = tail;
        while let Some(position) = text.iter().position(|b| *b == b'<') {
            text = text.get(position..).unwrap_or_default();
            if let Some(Tag { name: tag_name, closing: false, rest: Some(rest), .. }) = Tag::at_start(text) {
                let content_end = rest.iter().position(|b| *b == b'<').unwrap_or(rest.len());
                let content = rest.get(..content_end).unwrap_or_default();
                if tag_name == b"wgt" && Tag::at_start(text).and_then(|t| t.attribute(b"id")) == Some(name.as_bytes()) {
                    if found.replace(content).is_some() {
                        return Err(format!("weight `{name}` stands twice in this event"));
                    }
                } else if tag_name == b"weights" && listed.replace(content).is_some() {
                    return Err("this event has two lists <weights>".to_owned());
                }
            }
            text = text.get(1..).unwrap_or_default();
        }
        let word = match (found, listed, self.position) {
            (Some(content), ..) => single_word(content),
            (None, Some(content), Some(position)) => self.listed_word(content, position)?,
            (None, Some(_), None) => {
                return Err(format!(
                    "the weights of this event are listed without names and the file declares none, so that `{name}` \
                     cannot be found"
                ));
            }
            (None, None, _) => return Err(format!("this event has no weight `{name}`")),
        };
        let word = word.ok_or_else(|| format!("weight `{name}` of this event is not one number"))?;
        float(word, d_exponents).map_err(|fault| format!("weight `{name}` of this event is {}, {fault}", shown(word)))
    }

    fn listed_word<'a>(&self, content: &'a [u8], position: usize) -> Result<Option<&'a [u8]>, String> {
        let words = content.split(u8::is_ascii_whitespace).filter(|word| !word.is_empty());
        let count = words.clone().count();
        if count != self.declared {
            return Err(format!(
                "this event lists {count} weights but the file declares {}, so that `{}` cannot be found by its position",
                self.declared, self.name
            ));
        }
        Ok(words.into_iter().nth(position))
    }
}

fn single_word(content: &[u8]) -> Option<&[u8]> {
    let mut words = content.split(u8::is_ascii_whitespace).filter(|word| !word.is_empty());
    let word = words.next()?;
    words.next().is_none().then_some(word)
}

/// The weight that the reader takes.
#[derive(Clone, Debug)]
pub(super) enum WeightChoice {
    /// XWGTUP.
    Event,
    /// A named one.
    Named(NamedWeight),
}

impl WeightChoice {
    /// The weight of an event whose rows have been read.
    pub(super) fn of_event(
        &self,
        event_weight: f64,
        cursor: &Cursor<'_>,
        d_exponents: &mut u64,
    ) -> Result<f64, String> {
        match self {
            WeightChoice::Event => Ok(event_weight),
            WeightChoice::Named(named) => named.value_in(cursor.rest(), d_exponents),
        }
    }
}
