//! Widths of a distribution, for shapes and templates alike.

use super::Shape;
use crate::numerics::root;

/// Probability of a Gaussian within one standard deviation of its mean: the fraction at which sigma_eff and the central
/// interval give exactly sigma.
pub const ONE_SIGMA: f64 = 0.682_689_492_137_085_9;

/// FWHM of a Gaussian in standard deviations, `2 sqrt(2 ln 2)`.
pub const FWHM_PER_SIGMA: f64 = 2.354_820_045_030_949_4;

/// What the widths ask of a distribution with one peak.
pub trait Distribution {
    /// Density, in 1/GeV.
    fn density(&self, m: f64) -> f64;
    /// The mass below which the probability is p.
    fn lower_quantile(&self, p: f64) -> f64;
    /// The mass above which the probability is q.
    fn higher_quantile(&self, q: f64) -> f64;
}

impl<S: Shape + ?Sized> Distribution for S {
    fn density(&self, m: f64) -> f64 {
        self.pdf(m)
    }

    fn lower_quantile(&self, p: f64) -> f64 {
        self.quantile(p)
    }

    fn higher_quantile(&self, q: f64) -> f64 {
        self.upper_quantile(q)
    }
}

/// A range of mass in GeV.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Interval {
    /// Lower end.
    pub low_gev: f64,
    /// Upper end.
    pub high_gev: f64,
}

impl Interval {
    /// Half of its length: of the narrowest interval, sigma_eff.
    pub fn half_width(&self) -> f64 {
        0.5 * (self.high_gev - self.low_gev)
    }

    /// Its length.
    pub fn width(&self) -> f64 {
        self.high_gev - self.low_gev
    }
}

/// Points that a search over an interval starts with.
const SCAN: usize = 64;

/// Position of the highest density, to about 1e-8 of the width; `None` if the distribution gives no finite numbers.
pub fn peak(of: &(impl Distribution + ?Sized)) -> Option<f64> {
    let (low, high) = (of.lower_quantile(0.01), of.higher_quantile(0.01));
    if !(high > low) || !(high - low).is_finite() {
        return None;
    }
    // Quantiles are dense where the density is high, however narrow the peak.
    let at = |i: usize| match i {
        0 => low,
        SCAN => high,
        _ => of.lower_quantile(0.01 + 0.98 * i as f64 / SCAN as f64),
    };
    let nodes: Vec<f64> = (0..=SCAN).map(at).collect();
    let best = (0..=SCAN).max_by(|&a, &b| of.density(nodes[a]).total_cmp(&of.density(nodes[b])))?;
    let (from, to) = (nodes[best.saturating_sub(1)], nodes[(best + 1).min(SCAN)]);
    Some(root::minimise(from, to, 1e-9 * (to - from), |m| -of.density(m)))
}

/// Full width at half maximum: the outermost points around the peak at half the peak density; `None` where the density
/// does not fall to half on either side.
pub fn full_width_at_half_maximum(of: &(impl Distribution + ?Sized)) -> Option<Interval> {
    let peak = peak(of)?;
    let half = 0.5 * of.density(peak);
    let step = 0.1 * (of.higher_quantile(0.16) - of.lower_quantile(0.16)).abs();
    let side = |sign: f64| {
        let mut near = 0.0;
        let mut far = step;
        while of.density(peak + sign * far) > half {
            near = far;
            far *= 1.5;
            if far > 1e6 * step {
                return None;
            }
        }
        // No slope: bisection.
        Some(sign * root::find(near, far, |d| half - of.density(peak + sign * d), |_| 0.0))
    };
    Some(Interval { low_gev: peak + side(-1.0)?, high_gev: peak + side(1.0)? })
}

/// The narrowest interval that holds `fraction` of the probability; half its width is sigma_eff. `None` for a fraction
/// that is not strictly between 0 and 1.
pub fn narrowest_interval(of: &(impl Distribution + ?Sized), fraction: f64) -> Option<Interval> {
    if !(fraction > 0.0 && fraction < 1.0) {
        return None;
    }
    let rest = 1.0 - fraction;
    let ends = |below: f64| {
        let below = below.clamp(0.0, rest);
        Interval { low_gev: of.lower_quantile(below), high_gev: of.higher_quantile(rest - below) }
    };
    let width = |below: f64| {
        let width = ends(below).width();
        if width.is_nan() { f64::INFINITY } else { width }
    };
    let node = |i: usize| rest * i as f64 / SCAN as f64;
    let best = (0..=SCAN).min_by(|&a, &b| width(node(a)).total_cmp(&width(node(b))))?;
    let (from, to) = (node(best.saturating_sub(1)), node((best + 1).min(SCAN)));
    let inside = root::minimise(from, to, 1e-7 * (to - from), width);
    // The minimum may be the very end, as for a falling exponential.
    let found = [inside, from, to].into_iter().min_by(|a, b| width(*a).total_cmp(&width(*b)))?;
    Some(ends(found)).filter(|interval| interval.width().is_finite())
}

/// The interval that leaves the same probability on either side; `None` for a fraction that is not strictly between 0
/// and 1.
pub fn central_interval(of: &(impl Distribution + ?Sized), fraction: f64) -> Option<Interval> {
    if !(fraction > 0.0 && fraction < 1.0) {
        return None;
    }
    let side = 0.5 * (1.0 - fraction);
    let interval = Interval { low_gev: of.lower_quantile(side), high_gev: of.higher_quantile(side) };
    Some(interval).filter(|interval| interval.width().is_finite())
}
