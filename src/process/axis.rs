//! The axis of reconstructed mass.

/// Equal bins of reconstructed mass.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct MassAxis {
    /// Lower edge: GeV, or units of the mass point when `relative`.
    pub low: f64,
    /// Upper edge, in the same unit.
    pub high: f64,
    /// Number of bins, 1 or more.
    pub bins: usize,
    /// Whether the edges are in units of the mass point.
    pub relative: bool,
}

impl MassAxis {
    /// Lower and upper edge in GeV at a mass point.
    pub fn range_gev(&self, mass_point_gev: f64) -> (f64, f64) {
        let unit = if self.relative { mass_point_gev } else { 1.0 };
        (self.low * unit, self.high * unit)
    }

    /// The `bins + 1` edges in GeV at a mass point; the first and the last are exactly those of [`Self::range_gev`].
    pub fn edges_gev(&self, mass_point_gev: f64) -> Vec<f64> {
        let (low, high) = self.range_gev(mass_point_gev);
        let bins = self.bins as f64;
        (0..=self.bins).map(|i| if i == self.bins { high } else { low + (high - low) * (i as f64 / bins) }).collect()
    }
}
