//! The cumulative distribution of a template between its bin edges.
//!
//! # Method
//!
//! The running sum of the bins is exact at the edges. Between them it is a cubic Hermite polynomial, so the density is
//! a continuous, piecewise quadratic function whose integral over every bin is the bin's probability.
//!
//! * Slopes at inner edges are the sixth-order average of the six bins around, (1, -8, 37, 37, -8, 1)/60 of their
//!   densities: the derivative of the degree-6 polynomial through the seven edges. Nearer to an end of the axis the
//!   fourth-order formulas (-1, 7, 7, -1)/12, (3, 13, -5, 1)/12 and (25, -23, 13, -3)/12 serve; axes of less than four
//!   bins use the highest order that fits.
//! * Slopes are limited to `[0, 3 min(S-, S+)]` of the densities beside the edge, and to 0 where these differ in sign.
//!   This is sufficient for monotonicity: F. N. Fritsch and R. E. Carlson, SIAM J. Numer. Anal. 17 (1980) 238; the use
//!   as a filter on high-order slopes is that of J. M. Hyman, SIAM J. Sci. Stat. Comput. 4 (1983) 645. Both from
//!   memory; the tests check the property itself.
//!
//! With negative bins the interpolant is monotone inside every bin, rising or falling as the running sum does.

use super::Template;

/// Slopes are made for equal bins; edges may differ from equal spacing by this part of a bin.
const SPACING_TOLERANCE: f64 = 1e-6;

/// Why a template has no cumulative distribution.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum CumulativeError {
    /// The numbers of edges and bins do not belong together.
    #[error("a template of {bins} bins needs {} edges and at least one bin; it has {edges} edges", bins + 1)]
    Length {
        /// Number of edges.
        edges: usize,
        /// Number of bins.
        bins: usize,
    },
    /// Edges do not rise in equal steps.
    #[error("bin edges must be finite and rise in equal steps; edge {index} does not")]
    Edges {
        /// The first edge that is wrong.
        index: usize,
    },
    /// A probability is not a finite number.
    #[error("the probability of bin {bin} is not a finite number")]
    NotFinite {
        /// The first bin that is wrong; the number of bins stands for the parts off the axis.
        bin: usize,
    },
}

/// Cumulative distribution per accepted event, with the parts below and above the axis.
#[derive(Clone, Debug)]
pub struct Cumulative {
    edges: Vec<f64>,
    bin_width: f64,
    below: f64,
    above: f64,
    /// Probability per bin.
    probability: Vec<f64>,
    /// Running sum at the edges; begins with the part below the axis.
    sum: Vec<f64>,
    /// Largest running sum up to each edge: what a quantile searches.
    reached: Vec<f64>,
    /// Density at the edges, per bin width.
    slope: Vec<f64>,
    monotone: bool,
}

/// The density inside one bin as a t² + b t + c, t from 0 to 1 across the bin, per bin width.
#[derive(Clone, Copy)]
pub(super) struct BinDensity {
    pub a: f64,
    pub b: f64,
    pub c: f64,
}

impl BinDensity {
    pub fn at(self, t: f64) -> f64 {
        (self.a * t + self.b) * t + self.c
    }

    fn integral_to(self, t: f64) -> f64 {
        ((self.a / 3.0 * t + self.b / 2.0) * t + self.c) * t
    }

    /// Where the density has a given value, in rising order.
    pub fn crossings(self, value: f64) -> [Option<f64>; 2] {
        let c = self.c - value;
        let discriminant = self.b * self.b - 4.0 * self.a * c;
        if discriminant < 0.0 {
            return [None, None];
        }
        // The stable pair of formulas; a root at infinity (a = 0) or 0/0 is not finite and drops out.
        let q = -0.5 * (self.b + f64::sqrt(discriminant).copysign(self.b));
        let (first, second) = (q / self.a, c / q);
        let inside = |t: f64| (t.is_finite() && (0.0..=1.0).contains(&t)).then_some(t);
        if first <= second { [inside(first), inside(second)] } else { [inside(second), inside(first)] }
    }
}

impl Cumulative {
    /// The cumulative distribution of a template.
    ///
    /// # Errors
    /// When edges and bins do not belong together, edges are not equally spaced, or a number is not finite.
    pub fn of(template: &Template) -> Result<Self, CumulativeError> {
        Self::new(&template.edges_gev, &template.probability, template.below_axis, template.above_axis)
    }

    /// From bin edges in GeV (equally spaced), probabilities per bin, and the parts below and above the axis.
    ///
    /// # Errors
    /// As [`Self::of`].
    pub fn new(edges_gev: &[f64], probability: &[f64], below: f64, above: f64) -> Result<Self, CumulativeError> {
        let bins = probability.len();
        if bins == 0 || edges_gev.len() != bins + 1 {
            return Err(CumulativeError::Length { edges: edges_gev.len(), bins });
        }
        let bin_width = (edges_gev[bins] - edges_gev[0]) / bins as f64;
        if !(bin_width.is_finite() && bin_width > 0.0) {
            return Err(CumulativeError::Edges { index: bins });
        }
        for (index, edge) in edges_gev.iter().enumerate() {
            let equal = edges_gev[0] + bin_width * index as f64;
            let near = (edge - equal).abs() <= SPACING_TOLERANCE * bin_width;
            if !near || (index > 0 && *edge <= edges_gev[index - 1]) {
                return Err(CumulativeError::Edges { index });
            }
        }
        if let Some(bin) = probability.iter().position(|p| !p.is_finite()) {
            return Err(CumulativeError::NotFinite { bin });
        }
        if !(below.is_finite() && above.is_finite()) {
            return Err(CumulativeError::NotFinite { bin: bins });
        }
        let mut sum = Vec::with_capacity(bins + 1);
        let mut reached = Vec::with_capacity(bins + 1);
        let (mut running, mut highest) = (below, below);
        sum.push(running);
        reached.push(highest);
        for p in probability {
            running += p;
            highest = highest.max(running);
            sum.push(running);
            reached.push(highest);
        }
        Ok(Cumulative {
            edges: edges_gev.to_vec(),
            bin_width,
            below,
            above,
            probability: probability.to_vec(),
            sum,
            reached,
            slope: limited_slopes(probability),
            monotone: below >= 0.0 && above >= 0.0 && probability.iter().all(|p| *p >= 0.0),
        })
    }

    /// Whether the running sum never falls. Where it does (negative weights), a quantile is the first mass at which the
    /// running sum reaches the probability.
    pub fn monotone(&self) -> bool {
        self.monotone
    }

    /// Lower and upper edge of the axis in GeV.
    pub fn range_gev(&self) -> (f64, f64) {
        (self.edges[0], self.edges[self.probability.len()])
    }

    /// Cumulative probability at a mass; `None` off the axis.
    pub fn at(&self, mass_gev: f64) -> Option<f64> {
        let (bin, t) = self.locate(mass_gev)?;
        // From the nearer edge, so that both edges of a bin give exactly the running sum.
        Some(if t <= 0.5 {
            self.sum[bin] + self.bin_density(bin).integral_to(t)
        } else {
            self.sum[bin + 1] - self.mirrored(bin).integral_to(1.0 - t)
        })
    }

    /// Probability per GeV at a mass; `None` off the axis.
    pub fn density(&self, mass_gev: f64) -> Option<f64> {
        let (bin, t) = self.locate(mass_gev)?;
        Some(self.bin_density(bin).at(t) / self.bin_width)
    }

    /// The mass in GeV at which the running sum first reaches a probability; `None` where that lies off the axis.
    pub fn quantile(&self, probability: f64) -> Option<f64> {
        let bins = self.probability.len();
        if probability.is_nan() || probability < self.sum[0] || probability > self.reached[bins] {
            return None;
        }
        let edge = self.reached.partition_point(|sum| *sum < probability);
        if edge == 0 {
            return Some(self.edges[0]);
        }
        let bin = edge - 1;
        let t = self.invert(bin, probability - self.sum[bin]);
        Some(self.place(bin, t))
    }

    /// Part of a rising bin below which `probability` of it lies.
    fn invert(&self, bin: usize, probability: f64) -> f64 {
        let density = self.bin_density(bin);
        let (mut low, mut high) = (0.0, 1.0);
        let mut t = (probability / self.probability[bin]).clamp(0.0, 1.0);
        // Newton's steps, replaced by bisection where they leave the bracket.
        for _ in 0..100 {
            let excess = density.integral_to(t) - probability;
            if excess > 0.0 {
                high = t;
            } else {
                low = t;
            }
            let newton = t - excess / density.at(t);
            let next = if newton > low && newton < high { newton } else { 0.5 * (low + high) };
            if (next - t).abs() <= 1e-15 || high - low <= 1e-15 {
                return next;
            }
            t = next;
        }
        t
    }

    fn locate(&self, mass_gev: f64) -> Option<(usize, f64)> {
        let bins = self.probability.len();
        if !(self.edges[0]..=self.edges[bins]).contains(&mass_gev) {
            return None;
        }
        let bin = self.edges.partition_point(|edge| *edge <= mass_gev).saturating_sub(1).min(bins - 1);
        let t = (mass_gev - self.edges[bin]) / (self.edges[bin + 1] - self.edges[bin]);
        Some((bin, t.clamp(0.0, 1.0)))
    }

    pub(super) fn place(&self, bin: usize, t: f64) -> f64 {
        self.edges[bin] + t * (self.edges[bin + 1] - self.edges[bin])
    }

    pub(super) fn bin_density(&self, bin: usize) -> BinDensity {
        quadratic(self.slope[bin], self.slope[bin + 1], self.probability[bin])
    }

    fn mirrored(&self, bin: usize) -> BinDensity {
        quadratic(self.slope[bin + 1], self.slope[bin], self.probability[bin])
    }

    pub(super) fn bin_width(&self) -> f64 {
        self.bin_width
    }

    pub(super) fn probability(&self) -> &[f64] {
        &self.probability
    }

    pub(super) fn edges(&self) -> &[f64] {
        &self.edges
    }

    /// Largest and smallest running sum on the axis that a quantile can reach.
    pub(super) fn sum_range(&self) -> (f64, f64) {
        (self.sum[0], self.reached[self.probability.len()])
    }

    pub(super) fn outside(&self) -> (f64, f64) {
        (self.below, self.above)
    }

    /// Density at the edges of a bin, times the bin width.
    pub(super) fn edge_slopes(&self, bin: usize) -> (f64, f64) {
        (self.slope[bin], self.slope[bin + 1])
    }
}

/// The quadratic with the given values at both ends of a bin and the given integral.
fn quadratic(start: f64, end: f64, integral: f64) -> BinDensity {
    BinDensity { a: 3.0 * (start + end) - 6.0 * integral, b: 6.0 * integral - 4.0 * start - 2.0 * end, c: start }
}

/// Densities at the edges, per bin width, from bin probabilities.
fn limited_slopes(p: &[f64]) -> Vec<f64> {
    let n = p.len();
    // The formulas near an end, reading inwards from the end; `edge` counts from the end.
    let near_end = |edge: usize, bin: &dyn Fn(usize) -> f64| -> f64 {
        match (n, edge) {
            (1, _) => bin(0),
            (2, 0) => (3.0 * bin(0) - bin(1)) / 2.0,
            (2, _) => (bin(0) + bin(1)) / 2.0,
            (3, 0) => (11.0 * bin(0) - 7.0 * bin(1) + 2.0 * bin(2)) / 6.0,
            (3, _) => (2.0 * bin(0) + 5.0 * bin(1) - bin(2)) / 6.0,
            (_, 0) => (25.0 * bin(0) - 23.0 * bin(1) + 13.0 * bin(2) - 3.0 * bin(3)) / 12.0,
            (_, 1) => (3.0 * bin(0) + 13.0 * bin(1) - 5.0 * bin(2) + bin(3)) / 12.0,
            _ => (7.0 * (bin(1) + bin(2)) - bin(0) - bin(3)) / 12.0,
        }
    };
    (0..=n)
        .map(|edge| {
            let raw = if edge >= 3 && edge + 3 <= n {
                (37.0 * (p[edge - 1] + p[edge]) - 8.0 * (p[edge - 2] + p[edge + 1]) + p[edge - 3] + p[edge + 2]) / 60.0
            } else if edge <= n - edge {
                near_end(edge, &|bin| p[bin])
            } else {
                near_end(n - edge, &|bin| p[n - 1 - bin])
            };
            let left = if edge > 0 { p[edge - 1] } else { p[0] };
            let right = if edge < n { p[edge] } else { p[n - 1] };
            limit(raw, left, right)
        })
        .collect()
}

fn limit(slope: f64, left: f64, right: f64) -> f64 {
    if left > 0.0 && right > 0.0 {
        slope.clamp(0.0, 3.0 * left.min(right))
    } else if left < 0.0 && right < 0.0 {
        slope.clamp(3.0 * left.max(right), 0.0)
    } else {
        0.0
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    fn uniform_edges(bins: usize) -> Vec<f64> {
        (0..=bins).map(|i| i as f64).collect()
    }

    /// Bins of the polynomial density sum_k (k+1) c_k x^k; its integral over a bin is exact.
    fn polynomial_bins(bins: usize, coefficients: &[f64]) -> (Vec<f64>, impl Fn(f64) -> f64) {
        let owned = coefficients.to_vec();
        let cdf = move |x: f64| owned.iter().rev().fold(0.0, |sum, c| (sum + c) * x);
        let bins = (0..bins).map(|i| cdf(i as f64 + 1.0) - cdf(i as f64)).collect();
        (bins, cdf)
    }

    #[test]
    fn a_cubic_running_sum_is_reproduced_on_every_number_of_bins_that_can() {
        // Density 40 + 3x + x²/10: quadratic, so exact wherever the slopes are of third order or better (3 bins).
        for bins in [3, 4, 5, 6, 7, 12] {
            let (p, cdf) = polynomial_bins(bins, &[40.0, 1.5, 0.1 / 3.0]);
            let cumulative = Cumulative::new(&uniform_edges(bins), &p, 0.0, 0.0).unwrap();
            for k in 0..=20 * bins {
                let x = k as f64 / 20.0;
                // Rounding of sums up to 700.
                assert!((cumulative.at(x).unwrap() - cdf(x)).abs() < 1e-11, "{bins} bins at {x}");
            }
        }
    }

    #[test]
    fn inner_slopes_are_exact_for_a_degree_six_running_sum() {
        let (p, _) = polynomial_bins(8, &[50.0, 1.0, 0.5, 0.1, -0.01, 0.001]);
        let slopes = limited_slopes(&p);
        let density = |x: f64| 50.0 + x * (2.0 + x * (1.5 + x * (0.4 + x * (-0.05 + x * 0.006))));
        for (edge, slope) in slopes.iter().enumerate().take(6).skip(3) {
            assert!((slope - density(edge as f64)).abs() < 1e-11, "edge {edge}");
        }
    }

    #[test]
    fn rough_bins_stay_monotone() {
        // Spikes, gaps and cliffs, where the unlimited slopes overshoot.
        let p = [0.0, 0.0, 0.3, 0.0, 1e-6, 0.2, 0.2, 0.0, 0.05, 0.1, 1e-9, 0.15];
        let cumulative = Cumulative::new(&uniform_edges(12), &p, 0.0, 0.0).unwrap();
        for k in 0..12000 {
            let x = k as f64 / 1000.0;
            assert!(cumulative.density(x).unwrap() >= -1e-16, "density at {x}");
        }
        for (edge, expected) in p
            .iter()
            .scan(0.0, |s, p| {
                *s += p;
                Some(*s)
            })
            .enumerate()
        {
            assert_eq!(cumulative.at(edge as f64 + 1.0), Some(expected));
        }
    }

    #[test]
    fn quantile_is_the_inverse() {
        let p = [0.01, 0.04, 0.2, 0.3, 0.25, 0.0, 0.1, 0.02];
        let cumulative = Cumulative::new(&uniform_edges(8), &p, 0.03, 0.05).unwrap();
        for k in 0..=1000 {
            let target = 0.03 + 0.9199 * f64::from(k) / 1000.0;
            let x = cumulative.quantile(target).unwrap();
            assert!((cumulative.at(x).unwrap() - target).abs() < 1e-14, "{target}");
        }
        assert_eq!(cumulative.quantile(0.029), None, "below the axis");
        assert_eq!(cumulative.quantile(0.951), None, "above the axis");
        assert_eq!(cumulative.quantile(f64::NAN), None);
    }

    #[test]
    fn negative_bins_are_flagged_and_the_first_crossing_counts() {
        let p = [0.3, 0.4, -0.2, 0.1, 0.4];
        let cumulative = Cumulative::new(&uniform_edges(5), &p, 0.0, 0.0).unwrap();
        assert!(!cumulative.monotone());
        let x = cumulative.quantile(0.6).unwrap();
        assert!(x > 1.0 && x < 2.0, "0.6 is first reached in the second bin, not in the last: {x}");
        assert!(cumulative.density(2.5).unwrap() < 0.0);
        assert!(Cumulative::new(&uniform_edges(2), &[0.5, 0.5], 0.0, 0.0).unwrap().monotone());
    }

    #[test]
    fn impossible_input_is_an_error() {
        use CumulativeError as E;
        assert_eq!(Cumulative::new(&[0.0], &[], 0.0, 0.0).unwrap_err(), E::Length { edges: 1, bins: 0 });
        assert_eq!(Cumulative::new(&[0.0, 1.0], &[0.1, 0.2], 0.0, 0.0).unwrap_err(), E::Length { edges: 2, bins: 2 });
        assert_eq!(Cumulative::new(&[0.0, 1.0, 3.0], &[0.1, 0.2], 0.0, 0.0).unwrap_err(), E::Edges { index: 1 });
        assert_eq!(Cumulative::new(&[0.0, 0.0], &[0.1], 0.0, 0.0).unwrap_err(), E::Edges { index: 1 });
        assert_eq!(Cumulative::new(&[0.0, 1.0], &[f64::NAN], 0.0, 0.0).unwrap_err(), E::NotFinite { bin: 0 });
        assert_eq!(Cumulative::new(&[0.0, 1.0], &[1.0], f64::INFINITY, 0.0).unwrap_err(), E::NotFinite { bin: 1 });
    }
}
