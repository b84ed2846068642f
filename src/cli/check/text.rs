//! Plain text: lists, numbers, lines of bounded length.

use std::fmt::Display;

/// The longest line of a report, in characters.
const LINE: usize = 100;

/// Adds `text`, broken at spaces so that no line is too long unless a single word is; `first` begins the first line,
/// `next` the others.
pub fn wrapped(report: &mut String, first: &str, next: &str, text: &str) {
    let mut line = first.to_owned();
    let mut empty = true;
    for word in text.split_whitespace() {
        if !empty && line.chars().count() + 1 + word.chars().count() > LINE {
            report.push_str(line.trim_end());
            report.push('\n');
            line = next.to_owned();
            empty = true;
        }
        if !empty {
            line.push(' ');
        }
        line.push_str(word);
        empty = false;
    }
    report.push_str(line.trim_end());
    report.push('\n');
}

/// Values separated by commas.
pub fn list<T: Display>(values: &[T]) -> String {
    values.iter().map(T::to_string).collect::<Vec<_>>().join(", ")
}

/// A whole number with its digits in groups of three.
pub fn grouped(number: u64) -> String {
    let digits = number.to_string();
    let mut text = String::with_capacity(digits.len() * 4 / 3);
    for (i, digit) in digits.chars().enumerate() {
        if i > 0 && (digits.len() - i).is_multiple_of(3) {
            text.push(',');
        }
        text.push(digit);
    }
    text
}

/// A count with its noun.
pub fn plural(count: usize, noun: &str) -> String {
    format!("{count} {noun}{}", if count == 1 { "" } else { "s" })
}
