//! Tags of an event file. The file is scanned line by line: headers of real files are often not valid XML.

/// Text without blanks at both ends.
pub(super) fn trimmed(line: &[u8]) -> &[u8] {
    line.trim_ascii()
}

/// A tag at the start of a line.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) struct Tag<'a> {
    /// Its name.
    pub name: &'a [u8],
    /// Whether it closes an element: `</name>`.
    pub closing: bool,
    /// Whether it is an element by itself: `<name/>`.
    pub empty: bool,
    /// What stands between name and `>`.
    pub attributes: &'a [u8],
    /// What follows `>` on the line; `None` when `>` is missing.
    pub rest: Option<&'a [u8]>,
}

impl<'a> Tag<'a> {
    /// The tag that a text begins with.
    pub(super) fn at_start(line: &'a [u8]) -> Option<Self> {
        let body = trimmed(line).strip_prefix(b"<")?;
        let (closing, body) = body.strip_prefix(b"/").map_or((false, body), |rest| (true, rest));
        let name_end = body.iter().position(|b| b.is_ascii_whitespace() || matches!(b, b'>' | b'/'));
        let (name, after) = body.split_at(name_end.unwrap_or(body.len()));
        let (inside, rest) = match after.iter().position(|b| *b == b'>') {
            Some(end) => (after.get(..end).unwrap_or_default(), after.get(end + 1..)),
            None => (after, None),
        };
        let empty = inside.ends_with(b"/");
        Some(Tag { name, closing, empty, attributes: inside, rest })
    }

    /// The value of an attribute in single or double quotes.
    pub(super) fn attribute(&self, name: &[u8]) -> Option<&'a [u8]> {
        let mut text = self.attributes;
        loop {
            let equals = text.iter().position(|b| *b == b'=')?;
            let key = trimmed(text.get(..equals)?);
            let value = text.get(equals + 1..)?.trim_ascii_start();
            let (quote, value) = value.split_first()?;
            if !matches!(quote, b'"' | b'\'') {
                return None;
            }
            let end = value.iter().position(|b| b == quote)?;
            if key == name {
                return value.get(..end).map(trimmed);
            }
            text = value.get(end + 1..)?;
        }
    }
}

/// Position of a pattern in a text.
pub(super) fn find(text: &[u8], pattern: &[u8]) -> Option<usize> {
    text.windows(pattern.len()).position(|window| window == pattern)
}
