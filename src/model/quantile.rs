//! Templates between mass points by interpolating quantiles.
//!
//! A. L. Read, Nucl. Instrum. Meth. A 425 (1999) 357: the quantile function at a mass is the weighted mean of those at its
//! two neighbours, `Q(y) = a Q1(y) + b Q2(y)` with a + b = 1, linear in the mass. This is exact for any family whose
//! location and scale are linear in the mass.

use std::cell::Cell;

use super::shape::{PredictedTemplate, rising};
use crate::numerics::root;
use crate::template::{Cumulative, CumulativeError, Template};

/// Negative probabilities up to this are rounding.
const ROUNDING: f64 = 1e-12;

/// Why templates cannot be interpolated.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum QuantileError {
    /// One mass point, or masses that do not rise.
    #[error("the interpolation needs at least two templates of rising mass")]
    Masses,
    /// A template.
    #[error(transparent)]
    Cumulative(#[from] CumulativeError),
    /// Negative bins.
    #[error("the running sum of the template at {0} GeV is not monotone or not positive, so it has no quantiles")]
    NotMonotone(f64),
    /// A mass outside the mass points.
    #[error(
        "{mass_gev} GeV lies outside the templates, {low_gev} to {high_gev} GeV; fold at further masses, or ask for extrapolation"
    )]
    Outside {
        /// The mass.
        mass_gev: f64,
        /// Lowest mass point.
        low_gev: f64,
        /// Highest mass point.
        high_gev: f64,
    },
    /// Edges that do not rise.
    #[error("bin edges must be finite and rise")]
    Edges,
    /// So far beyond the mass points that quantiles would cross.
    #[error("at {0} GeV extrapolated quantiles cross; stay nearer to the mass points")]
    Crossing(f64),
}

/// Interpolation between the templates of one channel and category.
#[derive(Clone, Debug)]
pub struct QuantileInterpolation {
    points: Vec<Point>,
}

#[derive(Clone, Debug)]
struct Point {
    mass_gev: f64,
    cumulative: Cumulative,
    below: f64,
    above: f64,
    edges_gev: Vec<f64>,
    error: Vec<f64>,
}

impl Point {
    /// The mass below which y lies, and the density there. Beyond the axis the running sum goes on in a straight line.
    fn quantile(&self, y: f64) -> (f64, f64) {
        let (low, high) = self.cumulative.range_gev();
        let flat = |part: f64, at: f64| self.cumulative.density(at).unwrap_or(0.0).max(part / (high - low)).max(1e-300);
        if y < self.below {
            let density = flat(self.below, low);
            return (low - (self.below - y) / density, density);
        }
        match self.cumulative.quantile(y) {
            Some(m) => (m, self.cumulative.density(m).unwrap_or(0.0)),
            None => {
                let density = flat(self.above, high);
                (high + (y - 1.0 + self.above).max(0.0) / density, density)
            }
        }
    }

    /// Error of the running sum's slope at a mass, per GeV.
    fn error_density(&self, m: f64) -> f64 {
        let bin = self.edges_gev.partition_point(|e| *e <= m);
        match (bin.checked_sub(1).and_then(|b| self.error.get(b)), self.edges_gev.get(bin)) {
            (Some(error), Some(high)) => error / (high - self.edges_gev[bin - 1]),
            _ => 0.0,
        }
    }
}

impl QuantileInterpolation {
    /// From templates at rising mass points, in GeV.
    ///
    /// # Errors
    /// See [`QuantileError`].
    pub fn new(templates: &[(f64, &Template)]) -> Result<Self, QuantileError> {
        if templates.len() < 2 || templates.windows(2).any(|pair| !(pair[0].0 < pair[1].0)) {
            return Err(QuantileError::Masses);
        }
        let points = templates
            .iter()
            .map(|&(mass_gev, template)| {
                // Differences of running sums can be negative by their rounding.
                let clean = |p: f64| if p < 0.0 && p > -ROUNDING { 0.0 } else { p };
                let probability: Vec<f64> = template.probability.iter().map(|&p| clean(p)).collect();
                let (below, above) = (clean(template.below_axis), clean(template.above_axis));
                let cumulative = Cumulative::new(&template.edges_gev, &probability, below, above)?;
                let whole: f64 = probability.iter().sum();
                if !cumulative.monotone() || !(whole > 0.0) {
                    return Err(QuantileError::NotMonotone(mass_gev));
                }
                Ok(Point {
                    mass_gev,
                    cumulative,
                    below,
                    above,
                    edges_gev: template.edges_gev.clone(),
                    error: template.bin_errors(),
                })
            })
            .collect::<Result<Vec<_>, _>>()?;
        Ok(QuantileInterpolation { points })
    }

    /// The neighbours and the weight of the upper one.
    fn neighbours(&self, mass_gev: f64, extrapolate: bool) -> Result<(&Point, &Point, f64, bool), QuantileError> {
        let last = self.points.len() - 1;
        let (low_gev, high_gev) = (self.points[0].mass_gev, self.points[last].mass_gev);
        let outside = !(low_gev..=high_gev).contains(&mass_gev);
        if !mass_gev.is_finite() || (outside && !extrapolate) {
            return Err(QuantileError::Outside { mass_gev, low_gev, high_gev });
        }
        let upper = self.points.partition_point(|p| p.mass_gev <= mass_gev).clamp(1, last);
        let (one, two) = (&self.points[upper - 1], &self.points[upper]);
        Ok((one, two, (mass_gev - one.mass_gev) / (two.mass_gev - one.mass_gev), outside))
    }

    /// The mass below which the probability is y, at a mass point of `mass_gev`.
    ///
    /// # Errors
    /// A mass outside the templates without `extrapolate`.
    pub fn quantile(&self, mass_gev: f64, y: f64, extrapolate: bool) -> Result<f64, QuantileError> {
        let (one, two, b, _) = self.neighbours(mass_gev, extrapolate)?;
        Ok((1.0 - b) * one.quantile(y).0 + b * two.quantile(y).0)
    }

    /// The template at a mass on edges in GeV.
    ///
    /// # Errors
    /// See [`QuantileError`].
    pub fn template(
        &self,
        mass_gev: f64,
        edges_gev: &[f64],
        extrapolate: bool,
    ) -> Result<PredictedTemplate, QuantileError> {
        if !rising(edges_gev) {
            return Err(QuantileError::Edges);
        }
        let (one, two, b, extrapolated) = self.neighbours(mass_gev, extrapolate)?;
        let a = 1.0 - b;
        // The root finder asks for value and slope at the same place: one search serves both.
        let last = Cell::new((f64::NAN, 0.0, 0.0));
        let at = |y: f64| {
            let (known, place, slope) = last.get();
            if known == y {
                return (place, slope);
            }
            let ((m1, f1), (m2, f2)) = (one.quantile(y), two.quantile(y));
            let found = (a * m1 + b * m2, a / f1 + b / f2);
            last.set((y, found.0, found.1));
            found
        };
        let place = |y: f64| at(y).0;
        let highest = place(1.0);
        let mut sums = Vec::with_capacity(edges_gev.len());
        let mut from = 0.0;
        for &edge in edges_gev {
            let y = if place(from) >= edge {
                from
            } else if highest <= edge {
                1.0
            } else {
                root::find(from, 1.0, |y| place(y) - edge, |y| at(y).1)
            };
            // Where an extrapolation lets quantiles cross, the root is none.
            if extrapolated && y > from && y < 1.0 && (place(y) - edge).abs() > 1e-6 * (1.0 + edge.abs()) {
                return Err(QuantileError::Crossing(mass_gev));
            }
            sums.push(y);
            from = y;
        }
        let mut error = Vec::with_capacity(edges_gev.len() - 1);
        for (pair, sum) in edges_gev.windows(2).zip(sums.windows(2)) {
            let y = 0.5 * (sum[0] + sum[1]);
            let squares: f64 = [(one, a), (two, b)]
                .into_iter()
                .map(|(point, w)| {
                    // The bin's width in the neighbour, in proportion to the densities.
                    let (m, density) = point.quantile(y);
                    let width = if density > 0.0 { (sum[1] - sum[0]) / density } else { pair[1] - pair[0] };
                    let e = w * point.error_density(m) * width.min(2.0 * (pair[1] - pair[0]));
                    e * e
                })
                .sum();
            error.push(squares.sqrt());
        }
        let last = sums[sums.len() - 1];
        Ok(PredictedTemplate {
            edges_gev: edges_gev.to_vec(),
            probability: sums.windows(2).map(|pair| pair[1] - pair[0]).collect(),
            error,
            below_axis: sums[0],
            above_axis: 1.0 - last,
            extrapolated,
        })
    }
}
