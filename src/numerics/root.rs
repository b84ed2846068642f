//! Roots between brackets.

/// The root of a rising function between `low` and `high`: Newton's method with its slope, kept inside the bracket by
/// bisection. Returns an end where the bracket holds no change of sign.
pub fn find(low: f64, high: f64, value: impl Fn(f64) -> f64, slope: impl Fn(f64) -> f64) -> f64 {
    let (mut low, mut high) = (low, high);
    let mut x = 0.5 * (low + high);
    let mut last_step = high - low;
    // Bisection alone ends after about 60 halvings of a bracket of like size; bad slopes cost twice that.
    for _ in 0..200 {
        let f = value(x);
        if f == 0.0 || f.is_nan() {
            return x;
        }
        if f < 0.0 {
            low = x;
        } else {
            high = x;
        }
        let newton = x - f / slope(x);
        let inside = newton > low && newton < high && (newton - x).abs() < 0.5 * last_step.abs();
        let next = if inside { newton } else { 0.5 * (low + high) };
        last_step = next - x;
        if next == x || (high - low).abs() <= 2.0 * f64::EPSILON * x.abs().max(f64::MIN_POSITIVE) {
            return next;
        }
        if inside && last_step.abs() <= f64::EPSILON * x.abs() {
            return next;
        }
        x = next;
    }
    x
}

/// The minimum of a function on an interval by golden sections; `tolerance` is the length at which it stops.
pub fn minimise(low: f64, high: f64, tolerance: f64, value: impl Fn(f64) -> f64) -> f64 {
    const SHRINK: f64 = 0.618_033_988_749_894_8;
    let (mut low, mut high) = (low, high);
    let (mut a, mut b) = (high - SHRINK * (high - low), low + SHRINK * (high - low));
    let (mut at_a, mut at_b) = (value(a), value(b));
    for _ in 0..200 {
        if high - low <= tolerance {
            break;
        }
        if at_a <= at_b {
            high = b;
            (b, at_b) = (a, at_a);
            a = high - SHRINK * (high - low);
            at_a = value(a);
        } else {
            low = a;
            (a, at_a) = (b, at_b);
            b = low + SHRINK * (high - low);
            at_b = value(b);
        }
    }
    0.5 * (low + high)
}
