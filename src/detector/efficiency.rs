//! How often a leg is found: trigger, reconstruction and identification together.

use super::regions::winners;
use super::{Detector, EtaRange, Object, Uncertainty};

/// Width in GeV that stands in for a turn-on of width 0: below the rounding of any pT, and finite when divided by.
pub const LEAST_TURN_ON_WIDTH_GEV: f64 = 1e-12;

/// One cell of an efficiency table.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct EfficiencyCell {
    /// True pT in GeV, `low <= pT < high`.
    pub pt_gev: (f64, f64),
    /// True |eta|.
    pub eta: EtaRange,
    /// Efficiency, 0 to 1.
    pub efficiency: f64,
}

/// Efficiency as a function of the true pT.
#[derive(Clone, Debug, PartialEq)]
pub enum EfficiencyCurve {
    /// `plateau/2 (1 + erf((pT - threshold_gev)/(sqrt2 width_gev)))`: a threshold on a measured pT of Gaussian resolution
    /// `width_gev`.
    TurnOn {
        /// pT of half the plateau, in GeV.
        threshold_gev: f64,
        /// Standard deviation of the turn-on, in GeV; 0 for a step.
        width_gev: f64,
        /// Efficiency far above the threshold, larger than 0, up to 1.
        plateau: f64,
    },
    /// Cells that do not overlap; 0 outside of them.
    Table(Vec<EfficiencyCell>),
}

/// One entry of the efficiency: how often one region finds one kind of object.
#[derive(Clone, Debug, PartialEq)]
pub struct Efficiency {
    /// Unique name of the entry.
    pub name: String,
    /// What it concerns.
    pub object: Object,
    /// Where, in the leg's true |eta|; up to infinity for everywhere.
    pub eta: EtaRange,
    /// The efficiency there.
    pub curve: EfficiencyCurve,
    /// How well its numbers are known.
    pub uncertainties: Vec<Uncertainty>,
}

/// A range of |eta| where the same entry tells the efficiency of an object.
#[derive(Clone, Debug, PartialEq)]
pub struct EfficiencyRegion {
    /// The range.
    pub eta: EtaRange,
    /// Index of the entry.
    pub entry: usize,
}

impl EfficiencyCurve {
    /// The efficiency at a true pT in GeV and an absolute pseudorapidity.
    pub fn at(&self, pt_gev: f64, abs_eta: f64) -> f64 {
        match self {
            EfficiencyCurve::TurnOn { threshold_gev, width_gev, plateau } => {
                let width = width_gev.max(LEAST_TURN_ON_WIDTH_GEV);
                0.5 * plateau * libm::erfc((threshold_gev - pt_gev) / (std::f64::consts::SQRT_2 * width))
            }
            EfficiencyCurve::Table(cells) => {
                let here = |cell: &&EfficiencyCell| {
                    cell.pt_gev.0 <= pt_gev && pt_gev < cell.pt_gev.1 && cell.eta.contains(abs_eta)
                };
                cells.iter().find(here).map_or(0.0, |cell| cell.efficiency)
            }
        }
    }
}

impl Detector {
    /// Efficiency of a leg at its true pT in GeV and absolute pseudorapidity: 1 for an object without any entry, that of
    /// the first entry that matches otherwise, and 0 where none does.
    pub fn efficiency(&self, object: Object, pt_gev: f64, abs_eta: f64) -> f64 {
        if !self.has_efficiency(object) {
            return 1.0;
        }
        let entry = self.efficiencies.iter().find(|entry| entry.object == object && entry.eta.contains(abs_eta));
        entry.map_or(0.0, |entry| entry.curve.at(pt_gev, abs_eta))
    }

    /// Whether any entry tells the efficiency of an object.
    pub fn has_efficiency(&self, object: Object) -> bool {
        self.efficiencies.iter().any(|entry| entry.object == object)
    }

    /// Disjoint efficiency regions of an object in rising |eta|: the first entry in file order wins.
    pub fn efficiency_regions(&self, object: Object) -> Vec<EfficiencyRegion> {
        let of_object = self.efficiencies.iter().enumerate().filter(|(_, entry)| entry.object == object);
        let entries: Vec<(usize, EtaRange)> = of_object.map(|(index, entry)| (index, entry.eta)).collect();
        winners(&entries).into_iter().map(|(eta, entry)| EfficiencyRegion { eta, entry }).collect()
    }
}
