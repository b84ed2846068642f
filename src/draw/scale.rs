//! Axes: where ticks stand and how numbers are written.

/// Round tick values inside a range.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Ticks {
    pub values: Vec<f64>,
    decimals: usize,
}

impl Ticks {
    /// Ticks at multiples of 1, 2 or 5 times a power of ten, at most `most` of them (at least one step fits).
    pub fn new(low: f64, high: f64, most: usize) -> Self {
        let rough = (high - low) / most.max(1) as f64;
        if !(rough.is_finite() && rough > 0.0) {
            return Ticks { values: Vec::new(), decimals: 0 };
        }
        let exponent = libm::floor(libm::log10(rough));
        let decade = libm::pow(10.0, exponent);
        let (factor, carry) = [1.0, 2.0, 5.0]
            .into_iter()
            .find(|factor| factor * decade >= rough * (1.0 - 1e-9))
            .map_or((1.0, 1.0), |factor| (factor, 0.0));
        let step = factor * libm::pow(10.0, exponent + carry);
        let decimals = libm::fmax(-(exponent + carry), 0.0) as usize;
        let first = libm::ceil(low / step - 1e-9) as i64;
        let last = libm::floor(high / step + 1e-9) as i64;
        Ticks { values: (first..=last).map(|k| k as f64 * step).collect(), decimals }
    }

    pub fn label(&self, value: f64) -> String {
        let text = format!("{value:.*}", self.decimals);
        // A zero that rounding made negative.
        if text.trim_start_matches(['-', '0', '.']).is_empty() { text.trim_start_matches('-').to_owned() } else { text }
    }
}

/// A positive number with three significant digits, without exponent where that stays short.
pub(super) fn three_digits(value: f64) -> String {
    if value == 0.0 || !value.is_finite() {
        return format!("{value}");
    }
    let magnitude = libm::floor(libm::log10(value.abs())) as i32;
    if !(-4..=6).contains(&magnitude) {
        return format!("{value:.2e}");
    }
    format!("{value:.*}", usize::try_from(2 - magnitude).unwrap_or(0))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn ticks_are_round_few_and_inside() {
        for (low, high, most) in [(0.0, 0.27, 5), (120.0, 180.0, 4), (86.1, 97.3, 3), (-0.01, 0.3, 4), (0.0, 1e-7, 4)] {
            let ticks = Ticks::new(low, high, most);
            assert!(!ticks.values.is_empty() && ticks.values.len() <= most + 1, "{ticks:?}");
            assert!(ticks.values.iter().all(|v| *v >= low - 1e-9 && *v <= high + 1e-9), "{ticks:?}");
            for value in &ticks.values {
                let read: f64 = ticks.label(*value).parse().unwrap_or(f64::NAN);
                assert!((read - value).abs() <= 1e-9 * high.abs(), "{ticks:?}");
            }
        }
        assert_eq!(Ticks::new(0.0, 1.0, 5).values.len(), 6);
        assert_eq!(Ticks::new(1.0, 1.0, 5).values.len(), 0);
        assert_eq!(Ticks::new(-0.3, 0.3, 3).label(-0.0), "0.0");
    }

    #[test]
    fn three_digits_are_three() {
        assert_eq!(three_digits(1.23456), "1.23");
        assert_eq!(three_digits(12.3456), "12.3");
        assert_eq!(three_digits(0.0123456), "0.0123");
        assert_eq!(three_digits(1234.56), "1235");
        assert_eq!(three_digits(1.5e-9), "1.50e-9");
        assert_eq!(three_digits(0.0), "0");
    }
}
