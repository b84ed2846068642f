//! What is fitted: masses or a histogram.

/// Why data cannot be fitted. Rows are counted from 1.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum DataError {
    /// No row at all.
    #[error("there is no data; give at least one row")]
    Empty,
    /// A mass that is no finite number.
    #[error("row {row}: the mass is {value}; it must be a finite number")]
    Mass {
        /// Row.
        row: usize,
        /// What was found.
        value: f64,
    },
    /// A weight that is no finite number.
    #[error("row {row}: the weight is {value}; it must be a finite number")]
    Weight {
        /// Row.
        row: usize,
        /// What was found.
        value: f64,
    },
    /// Not one weight per mass.
    #[error("there are {masses} masses but {weights} weights; give one weight per mass")]
    WeightCount {
        /// Number of masses.
        masses: usize,
        /// Number of weights.
        weights: usize,
    },
    /// The weights in the window do not add to a positive number.
    #[error("the weights in the window add to {0}; their sum must be positive")]
    WeightSum(f64),
    /// A bin whose edges are not finite and rising.
    #[error("row {row}: the bin goes from {low} to {high}; its edges must be finite and rising")]
    Edges {
        /// Row.
        row: usize,
        /// Lower edge.
        low: f64,
        /// Upper edge.
        high: f64,
    },
    /// A bin that begins before the one above it ends.
    #[error(
        "row {row}: the bin begins at {low}, before the end of the bin above it at {previous}; bins must rise and not overlap"
    )]
    Order {
        /// Row.
        row: usize,
        /// Lower edge.
        low: f64,
        /// Upper edge of the bin before.
        previous: f64,
    },
    /// A count that is not allowed.
    #[error(
        "row {row}: the count is {value}; it must be a finite number of at least 0 (with errors: any finite number)"
    )]
    Count {
        /// Row.
        row: usize,
        /// What was found.
        value: f64,
    },
    /// An error that is not positive.
    #[error(
        "row {row}: the error is {value}; it must be positive (leave the column out for counts, or merge empty bins)"
    )]
    Error {
        /// Row.
        row: usize,
        /// What was found.
        value: f64,
    },
    /// Not one number per bin.
    #[error("there are {bins} bins but {counts} counts and {errors} errors; give one per bin")]
    BinCount {
        /// Number of bins.
        bins: usize,
        /// Number of counts.
        counts: usize,
        /// Number of errors.
        errors: usize,
    },
    /// Nothing in the window.
    #[error(
        "all {rows} rows lie outside the window from {low} to {high} GeV; the data reach from {first} to {last} GeV"
    )]
    OutsideWindow {
        /// Rows.
        rows: usize,
        /// Window.
        low: f64,
        /// Window.
        high: f64,
        /// Lowest mass.
        first: f64,
        /// Highest mass.
        last: f64,
    },
    /// All masses in the window are equal.
    #[error("all {rows} masses in the window are {value} GeV; a shape cannot be fitted to one value")]
    Constant {
        /// Rows in the window.
        rows: usize,
        /// The mass.
        value: f64,
    },
    /// A histogram without a count in the window.
    #[error("no bin in the window has a count above 0")]
    NoCount,
    /// Fewer rows than parameters.
    #[error(
        "{rows} {what} in the window cannot determine {parameters} free parameters; fix some (--fix NAME=VALUE) or widen the window"
    )]
    TooFew {
        /// Rows in the window.
        rows: usize,
        /// `masses`, `filled bins`.
        what: &'static str,
        /// Number of free parameters.
        parameters: usize,
    },
}

/// Measured masses in GeV, each with a weight or none.
#[derive(Clone, Debug, PartialEq)]
pub struct Masses {
    gev: Vec<f64>,
    weights: Option<Vec<f64>>,
}

impl Masses {
    /// Masses with optional weights, in any order.
    ///
    /// # Errors
    /// No mass; a mass or weight that is not finite; a wrong number of weights.
    pub fn new(gev: Vec<f64>, weights: Option<Vec<f64>>) -> Result<Self, DataError> {
        if gev.is_empty() {
            return Err(DataError::Empty);
        }
        let bad = |list: &[f64]| list.iter().position(|v| !v.is_finite()).map(|i| (i + 1, list[i]));
        if let Some((row, value)) = bad(&gev) {
            return Err(DataError::Mass { row, value });
        }
        if let Some(weights) = &weights {
            if weights.len() != gev.len() {
                return Err(DataError::WeightCount { masses: gev.len(), weights: weights.len() });
            }
            if let Some((row, value)) = bad(weights) {
                return Err(DataError::Weight { row, value });
            }
        }
        Ok(Masses { gev, weights })
    }

    /// The masses in GeV.
    pub fn gev(&self) -> &[f64] {
        &self.gev
    }

    /// The weights.
    pub fn weights(&self) -> Option<&[f64]> {
        self.weights.as_deref()
    }

    /// The masses in a closed window, in rising order.
    pub(super) fn inside(&self, window: (f64, f64)) -> Result<Self, DataError> {
        let inside = |m: f64| m >= window.0 && m <= window.1;
        let sorted = match &self.weights {
            None => {
                let mut gev: Vec<f64> = self.gev.iter().copied().filter(|&m| inside(m)).collect();
                gev.sort_unstable_by(f64::total_cmp);
                Masses { gev, weights: None }
            }
            Some(weights) => {
                let mut pairs: Vec<(f64, f64)> =
                    self.gev.iter().copied().zip(weights.iter().copied()).filter(|&(m, _)| inside(m)).collect();
                pairs.sort_by(|a, b| a.0.total_cmp(&b.0));
                let (gev, weights) = pairs.into_iter().unzip();
                Masses { gev, weights: Some(weights) }
            }
        };
        let (Some(&first), Some(&last)) = (sorted.gev.first(), sorted.gev.last()) else {
            let (first, last) =
                self.gev.iter().fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), &m| (l.min(m), h.max(m)));
            return Err(DataError::OutsideWindow { rows: self.gev.len(), low: window.0, high: window.1, first, last });
        };
        if first == last {
            return Err(DataError::Constant { rows: sorted.gev.len(), value: first });
        }
        let total = sorted.total();
        if !(total > 0.0) {
            return Err(DataError::WeightSum(total));
        }
        Ok(sorted)
    }

    /// Sum of the weights.
    pub(super) fn total(&self) -> f64 {
        self.weights.as_ref().map_or(self.gev.len() as f64, |weights| weights.iter().sum())
    }

    /// Every `step`-th mass, from the middle of the first `step`.
    pub(super) fn thinned(&self, step: usize) -> Self {
        let every = |list: &[f64]| list.iter().copied().skip(step / 2).step_by(step).collect();
        Masses { gev: every(&self.gev), weights: self.weights.as_deref().map(every) }
    }
}

/// Counts, or values with errors, in rising bins that may leave gaps.
#[derive(Clone, Debug, PartialEq)]
pub struct Histogram {
    bins: Vec<(f64, f64)>,
    counts: Vec<f64>,
    errors: Option<Vec<f64>>,
}

impl Histogram {
    /// Bins as (low, high) in GeV, their counts, and their errors if they are not plain counts.
    ///
    /// # Errors
    /// No bin; edges not rising or overlapping; a negative count (without errors), an error that is not positive.
    pub fn new(bins: Vec<(f64, f64)>, counts: Vec<f64>, errors: Option<Vec<f64>>) -> Result<Self, DataError> {
        if bins.is_empty() {
            return Err(DataError::Empty);
        }
        let error_count = errors.as_ref().map_or(bins.len(), Vec::len);
        if counts.len() != bins.len() || error_count != bins.len() {
            return Err(DataError::BinCount { bins: bins.len(), counts: counts.len(), errors: error_count });
        }
        let mut previous = f64::NEG_INFINITY;
        for (i, (&(low, high), &count)) in bins.iter().zip(&counts).enumerate() {
            let row = i + 1;
            if !(low.is_finite() && high.is_finite() && low < high) {
                return Err(DataError::Edges { row, low, high });
            }
            // Printed edges may differ in the last digit.
            if low < previous - 1e-9 * (high - low) {
                return Err(DataError::Order { row, low, previous });
            }
            previous = high;
            if !count.is_finite() || (errors.is_none() && count < 0.0) {
                return Err(DataError::Count { row, value: count });
            }
            if let Some(&error) = errors.as_ref().and_then(|list| list.get(i))
                && !(error.is_finite() && error > 0.0)
            {
                return Err(DataError::Error { row, value: error });
            }
        }
        Ok(Histogram { bins, counts, errors })
    }

    /// The bins, (low, high) in GeV.
    pub fn bins(&self) -> &[(f64, f64)] {
        &self.bins
    }

    /// Counts.
    pub fn counts(&self) -> &[f64] {
        &self.counts
    }

    /// Errors of the counts, where they are not plain counts.
    pub fn errors(&self) -> Option<&[f64]> {
        self.errors.as_deref()
    }

    /// The bins that lie wholly in a window.
    pub(super) fn inside(&self, window: (f64, f64)) -> Result<Self, DataError> {
        let slack = |&(low, high): &(f64, f64)| 1e-9 * (high - low);
        let keep: Vec<bool> =
            self.bins.iter().map(|b| b.0 >= window.0 - slack(b) && b.1 <= window.1 + slack(b)).collect();
        let some = |list: &[f64]| list.iter().zip(&keep).filter(|(_, k)| **k).map(|(v, _)| *v).collect::<Vec<f64>>();
        let bins: Vec<(f64, f64)> = self.bins.iter().zip(&keep).filter(|(_, k)| **k).map(|(b, _)| *b).collect();
        if bins.is_empty() {
            let (first, last) = (self.bins[0].0, self.bins[self.bins.len() - 1].1);
            return Err(DataError::OutsideWindow { rows: self.bins.len(), low: window.0, high: window.1, first, last });
        }
        let inside = Histogram { bins, counts: some(&self.counts), errors: self.errors.as_deref().map(some) };
        if !inside.counts.iter().any(|&count| count > 0.0) {
            return Err(DataError::NoCount);
        }
        Ok(inside)
    }

    pub(super) fn total(&self) -> f64 {
        self.counts.iter().sum()
    }
}

/// Either kind of data.
#[derive(Clone, Debug, PartialEq)]
pub enum Data {
    /// Masses, fitted without binning.
    Masses(Masses),
    /// A histogram.
    Histogram(Histogram),
}

impl From<Masses> for Data {
    fn from(masses: Masses) -> Self {
        Data::Masses(masses)
    }
}

impl From<Histogram> for Data {
    fn from(histogram: Histogram) -> Self {
        Data::Histogram(histogram)
    }
}
