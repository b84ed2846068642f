//! Which entry of the detector measures a leg: disjoint regions of |eta|.

use super::{Detector, EtaRange, Object};

/// A range of |eta| where the same calorimeter entries measure an object.
#[derive(Clone, Debug, PartialEq)]
pub struct CalorimeterRegion {
    /// The range.
    pub eta: EtaRange,
    /// Indices of the entries that share its legs by their fractions, in file order.
    pub entries: Vec<usize>,
}

/// A range of |eta| where the same tracker entry measures an object.
#[derive(Clone, Debug, PartialEq)]
pub struct TrackerRegion {
    /// The range.
    pub eta: EtaRange,
    /// Index of the entry.
    pub entry: usize,
}

impl Detector {
    /// Disjoint calorimeter regions of an object in rising |eta|: the first entry in file order wins, together with the
    /// other entries of the same object and range.
    pub fn calorimeter_regions(&self, object: Object) -> Vec<CalorimeterRegion> {
        let entries: Vec<(usize, EtaRange)> = self.calorimeters_of(object).collect();
        winners(&entries)
            .into_iter()
            .map(|(eta, winner)| {
                let range = self.calorimeters[winner].eta;
                let sharing = entries.iter().filter(|(_, other)| *other == range).map(|(index, _)| *index);
                CalorimeterRegion { eta, entries: sharing.collect() }
            })
            .collect()
    }

    /// Disjoint tracker regions of an object in rising |eta|: the first entry in file order wins.
    pub fn tracker_regions(&self, object: Object) -> Vec<TrackerRegion> {
        let entries: Vec<(usize, EtaRange)> = self.trackers_of(object).collect();
        winners(&entries).into_iter().map(|(eta, entry)| TrackerRegion { eta, entry }).collect()
    }

    /// Disjoint, separated ranges of |eta|, rising, where calorimeter or tracker measures an object.
    pub fn coverage(&self, object: Object) -> Vec<EtaRange> {
        let mut ranges: Vec<EtaRange> =
            self.calorimeters_of(object).chain(self.trackers_of(object)).map(|(_, eta)| eta).collect();
        ranges.sort_by(|a, b| a.low.total_cmp(&b.low));
        let mut merged: Vec<EtaRange> = Vec::new();
        for range in ranges {
            match merged.last_mut() {
                Some(last) if range.low <= last.high => last.high = last.high.max(range.high),
                _ => merged.push(range),
            }
        }
        merged
    }

    fn calorimeters_of(&self, object: Object) -> impl Iterator<Item = (usize, EtaRange)> + '_ {
        let entries = self.calorimeters.iter().enumerate();
        entries.filter(move |(_, entry)| entry.object == object).map(|(index, entry)| (index, entry.eta))
    }

    fn trackers_of(&self, object: Object) -> impl Iterator<Item = (usize, EtaRange)> + '_ {
        let entries = self.trackers.iter().enumerate();
        entries.filter(move |(_, entry)| entry.object == object).map(|(index, entry)| (index, entry.eta))
    }
}

/// Cuts the ranges at all their bounds and gives each piece to the first entry that contains it; neighbouring pieces of
/// one entry become one again.
pub(super) fn winners(entries: &[(usize, EtaRange)]) -> Vec<(EtaRange, usize)> {
    let mut bounds: Vec<f64> = entries.iter().flat_map(|(_, eta)| [eta.low, eta.high]).collect();
    bounds.sort_by(f64::total_cmp);
    bounds.dedup();
    let mut pieces: Vec<(EtaRange, usize)> = Vec::new();
    for (low, high) in bounds.iter().zip(bounds.iter().skip(1)) {
        let Some((entry, _)) = entries.iter().find(|(_, eta)| eta.contains(*low)) else { continue };
        match pieces.last_mut() {
            Some((eta, last)) if *last == *entry && eta.high == *low => eta.high = *high,
            _ => pieces.push((EtaRange { low: *low, high: *high }, *entry)),
        }
    }
    pieces
}
