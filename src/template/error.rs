//! The standard error that independent replicates give.

/// Standard error of the mean of independent values; `None` for less than two of them.
pub fn standard_error(values: impl Iterator<Item = f64> + Clone) -> Option<f64> {
    let count = values.clone().count() as f64;
    if count < 2.0 {
        return None;
    }
    let mean = values.clone().sum::<f64>() / count;
    let squares: f64 = values.map(|value| (value - mean) * (value - mean)).sum();
    Some((squares / (count * (count - 1.0))).sqrt())
}
