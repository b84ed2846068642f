//! Typed access to a parsed TOML file: every access that fails leaves a problem with its line and key.
//!
//! A number that could not be read is NaN and a text that could not be read is empty, so that reading goes on and later
//! comparisons stay silent. The file is refused anyway: the problem has been noted.

use toml::de::{DeTable, DeValue};

use super::domain::{Domain, name_fault};
use super::source::Sheet;
use crate::problem::suggestion;

/// One value, with where it stands.
#[derive(Clone, Debug)]
pub(super) struct Item<'a> {
    sheet: &'a Sheet,
    pub line: usize,
    /// The full key, as messages name it.
    pub key: String,
    value: &'a DeValue<'a>,
}

impl<'a> Item<'a> {
    pub fn problem(&self, message: impl Into<String>) {
        self.sheet.problem(self.line, &self.key, message);
    }

    /// Notes that the value is not what it must be.
    pub fn reject(&self, allowed: &str) {
        self.problem(format!("found {}, must be {allowed}", describe(self.value)));
    }

    pub fn number(&self, domain: &Domain) -> f64 {
        let number = match self.value {
            DeValue::Float(float) => float.as_str().parse().ok(),
            DeValue::Integer(integer) => i128::from_str_radix(integer.as_str(), integer.radix()).ok().map(|i| i as f64),
            _ => None,
        };
        match number {
            Some(number) if domain.allows(number) => number,
            _ => {
                self.reject(domain.text);
                f64::NAN
            }
        }
    }

    /// A whole number in a range.
    pub fn whole(&self, low: u64, high: u64) -> Option<u64> {
        let number = match self.value {
            DeValue::Integer(integer) => u64::from_str_radix(integer.as_str(), integer.radix()).ok(),
            _ => None,
        };
        let allowed = number.filter(|number| (low..=high).contains(number));
        if allowed.is_none() {
            self.reject(&format!("a whole number from {low} to {high}"));
        }
        allowed
    }

    pub fn flag(&self) -> Option<bool> {
        match self.value {
            DeValue::Boolean(flag) => Some(*flag),
            _ => {
                self.reject("true or false");
                None
            }
        }
    }

    pub fn text(&self) -> Option<&'a str> {
        match self.value {
            DeValue::String(text) => Some(text.as_ref()),
            _ => {
                self.reject("a text in quotes");
                None
            }
        }
    }

    /// A text that names something in tables and file names.
    pub fn name(&self) -> String {
        let Some(name) = self.text() else { return String::new() };
        match name_fault(name) {
            Some(fault) => {
                self.problem(format!("found {}: a name {fault}", describe(self.value)));
                String::new()
            }
            None => name.to_owned(),
        }
    }

    /// The value that a word stands for.
    pub fn word<T: Copy>(&self, words: &[(&str, T)]) -> Option<T> {
        let text = self.text()?;
        let found = words.iter().find(|(word, _)| *word == text).map(|(_, value)| *value);
        if found.is_none() {
            let allowed: Vec<&str> = words.iter().map(|(word, _)| *word).collect();
            self.problem(format!(
                "found {}, which is not known here: {}",
                describe(self.value),
                suggestion(text, &allowed)
            ));
        }
        found
    }

    /// The elements of a list; their lines are their own.
    pub fn list(&self) -> Option<Vec<Item<'a>>> {
        let DeValue::Array(array) = self.value else {
            self.reject("a list in [ ]");
            return None;
        };
        let element = |(index, value): (usize, &'a toml::Spanned<DeValue<'a>>)| Item {
            sheet: self.sheet,
            line: self.sheet.line_at(value.span().start),
            key: format!("{}[{}]", self.key, index + 1),
            value: value.get_ref(),
        };
        Some(array.iter().enumerate().map(element).collect())
    }

    /// Numbers of a list; empty after a problem.
    pub fn numbers(&self, domain: &Domain) -> Vec<f64> {
        self.list().unwrap_or_default().iter().map(|item| item.number(domain)).collect()
    }

    /// Two rising numbers of a list; NaN after a problem.
    pub fn rising_pair(&self, domain: &Domain) -> (f64, f64) {
        let Some(items) = self.list() else { return (f64::NAN, f64::NAN) };
        let [low, high] = items.as_slice() else {
            self.problem(format!("found {} numbers, must be two: [low, high]", items.len()));
            return (f64::NAN, f64::NAN);
        };
        let (low, high) = (low.number(domain), high.number(domain));
        if low >= high {
            self.problem(format!("found [{low}, {high}], which is empty: the first number must be below the second"));
            return (f64::NAN, f64::NAN);
        }
        (low, high)
    }

    pub fn is_table(&self) -> bool {
        matches!(self.value, DeValue::Table(_))
    }

    pub fn section(&self) -> Option<Section<'a>> {
        match self.value {
            DeValue::Table(table) => Some(Section::new(self.sheet, self.line, self.key.clone(), table)),
            _ => {
                self.reject("a table of keys");
                None
            }
        }
    }
}

/// A table of the file; remembers which keys were asked for, so that the others can be reported.
#[derive(Debug)]
pub(super) struct Section<'a> {
    pub sheet: &'a Sheet,
    pub line: usize,
    pub path: String,
    table: &'a DeTable<'a>,
    known: Vec<&'static str>,
}

impl<'a> Section<'a> {
    pub fn new(sheet: &'a Sheet, line: usize, path: String, table: &'a DeTable<'a>) -> Self {
        Section { sheet, line, path, table, known: Vec::new() }
    }

    /// The full name of a key of this table.
    pub fn key(&self, key: &str) -> String {
        if self.path.is_empty() { key.to_owned() } else { format!("{}.{key}", self.path) }
    }

    /// A problem of the table or of one of its keys.
    pub fn problem(&self, key: &str, message: impl Into<String>) {
        self.sheet.problem(self.line_of(key), &self.key(key), message);
    }

    /// A warning about one of its keys.
    pub fn warn(&self, key: &str, message: impl Into<String>) {
        self.sheet.warn(self.line_of(key), &self.key(key), message);
    }

    /// The line of a key, or of the table where it is absent.
    pub fn line_of(&self, key: &str) -> usize {
        self.items().into_iter().find(|item| item.key == self.key(key)).map_or(self.line, |item| item.line)
    }

    /// All values, in the order of the file, known or not.
    pub fn items(&self) -> Vec<Item<'a>> {
        let mut entries: Vec<_> = self.table.iter().collect();
        entries.sort_by_key(|(key, _)| key.span().start);
        let item = |(key, value): (&'a toml::Spanned<toml::de::DeString<'a>>, &'a toml::Spanned<DeValue<'a>>)| Item {
            sheet: self.sheet,
            line: self.sheet.line_at(key.span().start),
            key: self.key(key.get_ref()),
            value: value.get_ref(),
        };
        entries.into_iter().map(item).collect()
    }

    pub fn optional(&mut self, key: &'static str) -> Option<Item<'a>> {
        if !self.known.contains(&key) {
            self.known.push(key);
        }
        let full = self.key(key);
        self.items().into_iter().find(|item| item.key == full)
    }

    /// A value that must be there; `what` says what it is.
    pub fn required(&mut self, key: &'static str, what: &str) -> Option<Item<'a>> {
        let item = self.optional(key);
        if item.is_none() {
            self.sheet.problem(self.line, &self.key(key), format!("missing; give {what}"));
        }
        item
    }

    pub fn number(&mut self, key: &'static str, domain: &Domain) -> f64 {
        self.required(key, domain.text).map_or(f64::NAN, |item| item.number(domain))
    }

    pub fn number_or(&mut self, key: &'static str, domain: &Domain, default: f64) -> f64 {
        self.optional(key).map_or(default, |item| item.number(domain))
    }

    pub fn whole_or(&mut self, key: &'static str, range: (u64, u64), default: u64) -> u64 {
        self.optional(key).and_then(|item| item.whole(range.0, range.1)).unwrap_or(default)
    }

    pub fn flag_or(&mut self, key: &'static str, default: bool) -> bool {
        self.optional(key).and_then(|item| item.flag()).unwrap_or(default)
    }

    pub fn name(&mut self, key: &'static str, what: &str) -> String {
        self.required(key, what).map_or_else(String::new, |item| item.name())
    }

    /// A text for people: not empty, without control characters.
    pub fn title(&mut self, key: &'static str) -> String {
        let Some(item) = self.required(key, "a name in quotes") else { return String::new() };
        let Some(text) = item.text() else { return String::new() };
        if text.trim().is_empty() || text.chars().any(char::is_control) {
            item.reject("a name that is not empty and has no control characters");
        }
        text.to_owned()
    }

    pub fn table(&mut self, key: &'static str) -> Option<Section<'a>> {
        self.optional(key).and_then(|item| item.section())
    }

    /// The tables of a list of tables, `[[key]]`, each called by its name where it has one and by its number otherwise.
    pub fn tables(&mut self, key: &'static str) -> Vec<Section<'a>> {
        let Some(item) = self.optional(key) else { return Vec::new() };
        if item.is_table() {
            item.problem(format!("found one table, must be a list: write [[{}]] instead of [{}]", item.key, item.key));
            return Vec::new();
        }
        let mut sections: Vec<Section<'a>> =
            item.list().unwrap_or_default().iter().filter_map(|element| element.section()).collect();
        for section in &mut sections {
            let name = section.items().into_iter().find(|entry| entry.key == section.key("name"));
            if let Some(DeValue::String(name)) = name.map(|entry| entry.value)
                && name_fault(name).is_none()
            {
                section.path = format!("{}.{name}", item.key);
            }
        }
        sections
    }

    /// Refuses a key that a later version will read.
    pub fn not_yet(&mut self, key: &'static str) {
        if let Some(item) = self.optional(key) {
            item.problem("not available in this version yet; remove it");
        }
    }

    /// Reports every key that nothing has asked for.
    pub fn finish(self) {
        for item in self.items() {
            let prefix = if self.path.is_empty() { 0 } else { self.path.len() + 1 };
            let key = &item.key[prefix..];
            if !self.known.contains(&key) {
                item.problem(format!("unknown key: {}", suggestion(key, &self.known)));
            }
        }
    }
}

/// A value as a message shows it.
fn describe(value: &DeValue) -> String {
    match value {
        DeValue::String(text) => {
            let start: String = text.chars().take(40).collect();
            format!("{start:?}{}", if start.len() < text.len() { "…" } else { "" })
        }
        DeValue::Integer(integer) => integer.to_string(),
        DeValue::Float(float) => float.to_string(),
        DeValue::Boolean(flag) => flag.to_string(),
        DeValue::Datetime(date) => format!("the date {date}"),
        DeValue::Array(array) => format!("a list of {}", array.len()),
        DeValue::Table(_) => "a table".to_owned(),
    }
}
