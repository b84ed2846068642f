//! Interim lookup.
use super::*;
/// Region.
#[derive(Clone, Debug, PartialEq)]
pub struct CalorimeterRegion {
    /// eta
    pub eta: EtaRange,
    /// entries
    pub entries: Vec<usize>,
}
/// Region.
#[derive(Clone, Debug, PartialEq)]
pub struct TrackerRegion {
    /// eta
    pub eta: EtaRange,
    /// entry
    pub entry: usize,
}
impl Detector {
    /// x
    pub fn calorimeter_regions(&self, object: Object) -> Vec<CalorimeterRegion> {
        let es: Vec<usize> = (0..self.calorimeters.len()).filter(|i| self.calorimeters[*i].object == object).collect();
        let mut b: Vec<f64> =
            es.iter().flat_map(|i| [self.calorimeters[*i].eta.low, self.calorimeters[*i].eta.high]).collect();
        b.sort_by(f64::total_cmp);
        b.dedup();
        b.windows(2)
            .filter_map(|w| {
                let f = es.iter().find(|i| self.calorimeters[**i].eta.contains(w[0]))?;
                let r = self.calorimeters[*f].eta;
                Some(CalorimeterRegion {
                    eta: EtaRange { low: w[0], high: w[1] },
                    entries: es.iter().copied().filter(|i| self.calorimeters[*i].eta == r).collect(),
                })
            })
            .collect()
    }
    /// x
    pub fn tracker_regions(&self, object: Object) -> Vec<TrackerRegion> {
        let es: Vec<usize> = (0..self.trackers.len()).filter(|i| self.trackers[*i].object == object).collect();
        let mut b: Vec<f64> = es.iter().flat_map(|i| [self.trackers[*i].eta.low, self.trackers[*i].eta.high]).collect();
        b.sort_by(f64::total_cmp);
        b.dedup();
        b.windows(2)
            .filter_map(|w| {
                let f = es.iter().find(|i| self.trackers[**i].eta.contains(w[0]))?;
                Some(TrackerRegion { eta: EtaRange { low: w[0], high: w[1] }, entry: *f })
            })
            .collect()
    }
}
impl Tracker {
    /// x
    pub fn terms_at(&self, _abs_eta: f64) -> (f64, f64) {
        match self.resolution {
            TrackerResolution::Terms { curvature_per_gev, scattering } => (curvature_per_gev, scattering),
            TrackerResolution::Geometry(_) => (1e-4, 0.01),
        }
    }
}
