//! Numbers in machine files.

/// The shortest decimal text that reads back as the same number: plain, or with an exponent where that is shorter.
///
/// ```
/// use peakfold::files::shortest;
/// assert_eq!(shortest(150.0), "150");
/// assert_eq!(shortest(0.1), "0.1");
/// assert_eq!(shortest(2.5e-17), "2.5e-17");
/// ```
pub fn shortest(value: f64) -> String {
    let plain = format!("{value}");
    let exponent = format!("{value:e}");
    if exponent.len() < plain.len() { exponent } else { plain }
}

/// [`shortest`] of a value, nothing for an undefined one.
pub(super) fn shortest_or_empty(value: Option<f64>) -> String {
    value.map(shortest).unwrap_or_default()
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn reads_back_as_the_same_bits() {
        let mut bits = 0x9e37_79b9_7f4a_7c15u64;
        for _ in 0..100_000 {
            bits = bits.wrapping_mul(6364136223846793005).wrapping_add(1442695040888963407);
            let value = f64::from_bits(bits);
            if value.is_finite() {
                let text = shortest(value);
                assert_eq!(text.parse::<f64>().unwrap().to_bits(), bits, "{text}");
                assert!(text.len() <= 24, "{text}");
            }
        }
        for value in [0.0, -0.0, 1.0, f64::MIN_POSITIVE, f64::MAX, 5e-324, 1e23, 123456789.125] {
            assert_eq!(shortest(value).parse::<f64>().unwrap().to_bits(), f64::to_bits(value));
        }
    }
}
