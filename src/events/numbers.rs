//! Words and numbers of event files, without any allocation.

use std::fmt;

/// Walks through a text line by line and word by word.
#[derive(Clone, Copy, Debug)]
pub(super) struct Cursor<'a> {
    rest: &'a [u8],
    /// Line of the file on which the cursor stands.
    pub line: usize,
}

impl<'a> Cursor<'a> {
    pub(super) fn new(text: &'a [u8], line: usize) -> Self {
        Cursor { rest: text, line }
    }

    /// The first byte of the next word of this line, which is not consumed.
    #[inline]
    pub(super) fn peek(&mut self) -> Option<u8> {
        while let [first, rest @ ..] = self.rest {
            match first {
                b'\n' => return None,
                b' ' | b'\t' | b'\r' | 0x0b | 0x0c => self.rest = rest,
                other => return Some(*other),
            }
        }
        None
    }

    /// The next word of this line.
    #[inline]
    pub(super) fn word(&mut self) -> Option<&'a [u8]> {
        self.peek()?;
        let end = self.rest.iter().position(|b| b.is_ascii_whitespace() || *b == 0x0b).unwrap_or(self.rest.len());
        let (word, rest) = self.rest.split_at(end);
        self.rest = rest;
        Some(word)
    }

    /// Steps to the next line; false at the end of the text.
    #[inline]
    pub(super) fn next_line(&mut self) -> bool {
        match self.rest.iter().position(|b| *b == b'\n') {
            Some(end) => {
                self.rest = self.rest.get(end + 1..).unwrap_or_default();
                self.line += 1;
                true
            }
            None => {
                self.rest = &[];
                false
            }
        }
    }

    /// What is left of the text.
    pub(super) fn rest(&self) -> &'a [u8] {
        self.rest
    }

    /// Number of words that are left on this line.
    pub(super) fn words_left(mut self) -> usize {
        let mut count = 0;
        while self.word().is_some() {
            count += 1;
        }
        count
    }
}

/// Why a word is not the number that belongs there.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum NumberFault {
    /// Not a number at all.
    Text,
    /// NaN, infinite or too large.
    NotFinite,
    /// A number, but not a whole one of the allowed range.
    NotWhole,
}

impl fmt::Display for NumberFault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            NumberFault::Text => "which is not a number; a finite number is needed",
            NumberFault::NotFinite => "which is not finite; a finite number is needed",
            NumberFault::NotWhole => "which is not a whole number in range; one is needed",
        })
    }
}

/// The longest word that is read as a number with a D exponent.
const LONGEST_D_NUMBER: usize = 64;

/// A finite number. `d_exponents` counts numbers with a Fortran D exponent.
#[inline]
pub(super) fn float(word: &[u8], d_exponents: &mut u64) -> Result<f64, NumberFault> {
    let parsed = std::str::from_utf8(word).ok().and_then(|text| text.parse::<f64>().ok());
    let value = match parsed {
        Some(value) => value,
        None => {
            let value = with_d_exponent(word).ok_or(NumberFault::Text)?;
            *d_exponents += 1;
            value
        }
    };
    if value.is_finite() { Ok(value) } else { Err(NumberFault::NotFinite) }
}

#[cold]
fn with_d_exponent(word: &[u8]) -> Option<f64> {
    let mut copy = [0_u8; LONGEST_D_NUMBER];
    let copy = copy.get_mut(..word.len())?;
    copy.copy_from_slice(word);
    let position = copy.iter().position(|b| matches!(b, b'd' | b'D'))?;
    // A digit or the point stands before the exponent, so that a word such as `Donut` is left alone.
    if !copy.get(position.checked_sub(1)?).is_some_and(|b| b.is_ascii_digit() || *b == b'.') {
        return None;
    }
    *copy.get_mut(position)? = b'e';
    std::str::from_utf8(copy).ok()?.parse().ok()
}

/// A whole number; one written as `21.0` or `2.1e1` is taken too.
#[inline]
pub(super) fn integer(word: &[u8], d_exponents: &mut u64) -> Result<i64, NumberFault> {
    if let Some(value) = std::str::from_utf8(word).ok().and_then(|text| text.parse::<i64>().ok()) {
        return Ok(value);
    }
    let value = float(word, d_exponents)?;
    // Up to here every whole number of double precision is exact.
    if value == value.trunc() && value.abs() < 9e15 { Ok(value as i64) } else { Err(NumberFault::NotWhole) }
}

/// Number of significant digits that a number was printed with, and of decimals once its exponent is applied.
pub(super) fn printed_digits(word: &[u8]) -> (i32, i32) {
    let exponent_at = word.iter().position(|b| matches!(b, b'e' | b'E' | b'd' | b'D')).unwrap_or(word.len());
    let (mantissa, exponent) = word.split_at(exponent_at);
    let mut significant = 0;
    let mut decimals = 0;
    let mut after_point = false;
    for byte in mantissa {
        match byte {
            b'.' => after_point = true,
            b'0'..=b'9' => {
                significant += i32::from(significant > 0 || *byte != b'0');
                decimals += i32::from(after_point);
            }
            _ => {}
        }
    }
    let exponent: i32 =
        exponent.get(1..).and_then(|e| std::str::from_utf8(e).ok()).and_then(|e| e.parse().ok()).unwrap_or(0);
    (significant, i32::saturating_sub(decimals, exponent).clamp(-300, 300))
}

/// A word as it is shown in a message: short and printable.
pub(super) fn shown(word: &[u8]) -> String {
    let text: String = String::from_utf8_lossy(word.get(..40).unwrap_or(word))
        .chars()
        .map(|c| if c.is_control() { '?' } else { c })
        .collect();
    if word.len() > 40 { format!("`{text}...`") } else { format!("`{text}`") }
}
