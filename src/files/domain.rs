//! What values are allowed: numbers, names, words.

/// A set of finite numbers and its description, which completes "must be …".
#[derive(Debug)]
pub(super) struct Domain {
    pub contains: fn(f64) -> bool,
    pub text: &'static str,
}

/// Larger numbers are impossible as input and overflow when squared twice.
const LARGEST: f64 = 1e30;

impl Domain {
    /// Whether the number is finite, not absurdly large and in the set.
    pub fn allows(&self, number: f64) -> bool {
        number.abs() <= LARGEST && (self.contains)(number)
    }
}

pub(super) const ANY: Domain = Domain { contains: |_| true, text: "a finite number" };
pub(super) const NOT_NEGATIVE: Domain = Domain { contains: |x| x >= 0.0, text: "a finite number, 0 or more" };
pub(super) const POSITIVE: Domain = Domain { contains: |x| x > 0.0, text: "a finite number larger than 0" };
pub(super) const ABOVE_ONE: Domain = Domain { contains: |x| x > 1.0, text: "a finite number larger than 1" };
pub(super) const ABOVE_MINUS_ONE: Domain = Domain { contains: |x| x > -1.0, text: "a finite number larger than -1" };
pub(super) const SHARE: Domain = Domain { contains: |x| (0.0..=1.0).contains(&x), text: "a number from 0 to 1" };
pub(super) const PLATEAU: Domain =
    Domain { contains: |x| x > 0.0 && x <= 1.0, text: "a number larger than 0, up to 1" };
pub(super) const INSIDE_UNIT: Domain =
    Domain { contains: |x| x > 0.0 && x < 1.0, text: "a number larger than 0 and smaller than 1" };
pub(super) const ABS_ETA: Domain = Domain { contains: |x| (0.0..=20.0).contains(&x), text: "an |eta| from 0 to 20" };
pub(super) const MASS: Domain =
    Domain { contains: |x| (1e-6..=1e9).contains(&x), text: "a mass in GeV larger than 0, from 1e-6 to 1e9" };

/// Why a text cannot name an entry, a channel or a category: names stand in tables, in file names and before the `:` of
/// a shift.
pub(super) fn name_fault(name: &str) -> Option<&'static str> {
    const RESERVED: &[char] = &[',', '"', '\'', '/', '\\', ':'];
    if name.trim().is_empty() {
        Some("must not be empty")
    } else if name.trim() != name {
        Some("must not begin or end with a blank")
    } else if name.chars().any(char::is_control) || name.contains(RESERVED) {
        Some("must not contain commas, quotes, slashes, colons or control characters")
    } else {
        None
    }
}
