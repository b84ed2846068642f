//! Every number of a detector by its name: what an uncertainty moves, what a budget switches off, what a requirement
//! solves for.

use super::{Detector, EfficiencyCurve, Object, TrackerResolution, Uncertainty};

/// The part of a detector that a number belongs to; indices are those of the detector's lists.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Part {
    /// A calorimeter entry.
    Calorimeter(usize),
    /// A tracker entry.
    Tracker(usize),
    /// The direction of an object.
    Direction(usize),
    /// The vertex.
    Vertex,
    /// An efficiency entry.
    Efficiency(usize),
}

/// One number of a detector.
#[derive(Clone, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub struct Term {
    /// Where it stands.
    pub part: Part,
    /// Its key there, that of a nested table with a dot (`constant`, `tail.alpha_low`).
    pub key: &'static str,
}

/// The values that a number may take; the ends belong to it unless they are open.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Allowed {
    /// Lower end.
    pub low: f64,
    /// Whether the lower end itself is not allowed.
    pub low_is_open: bool,
    /// Upper end.
    pub high: f64,
}

impl Allowed {
    /// Whether a value may be taken.
    pub fn contains(self, value: f64) -> bool {
        value >= self.low && value <= self.high && !(self.low_is_open && value == self.low)
    }

    /// The value itself where it is allowed; else the nearest that is. From an allowed `from` towards an open end, that is
    /// 99 % of the way.
    pub fn nearest(self, value: f64, from: f64) -> f64 {
        if self.contains(value) {
            value
        } else if value > self.high {
            self.high
        } else if self.low_is_open {
            self.low + 0.01 * (from - self.low)
        } else {
            self.low
        }
    }
}

const CALORIMETER_KEYS: [&str; 10] = [
    "scale",
    "stochastic",
    "noise_gev",
    "constant",
    "bias",
    "fraction",
    "tail.alpha_low",
    "tail.n_low",
    "tail.alpha_high",
    "tail.n_high",
];
const TRACKER_KEYS: [&str; 8] = [
    "scale",
    "curvature_per_gev",
    "scattering",
    "geometry.field_t",
    "geometry.inner_radius_m",
    "geometry.lever_arm_m",
    "geometry.point_resolution_um",
    "geometry.radiation_lengths",
];
const DIRECTION_KEYS: [&str; 2] = ["sigma_theta_mrad", "sigma_phi_mrad"];
const VERTEX_KEYS: [&str; 5] =
    ["calorimeter_radius_m", "calorimeter_half_length_m", "right_choice", "spread_right_mm", "spread_wrong_mm"];
const EFFICIENCY_KEYS: [&str; 3] = ["threshold_gev", "width_gev", "plateau"];

impl Term {
    /// The values that the number may take.
    pub fn allowed(&self) -> Allowed {
        let (low, low_is_open, high) = match self.key {
            "scale" | "bias" => (-1.0, true, f64::INFINITY),
            "tail.n_low" | "tail.n_high" => (1.0, true, f64::INFINITY),
            "tail.alpha_low" | "tail.alpha_high" | "geometry.field_t" | "geometry.lever_arm_m" => {
                (0.0, true, f64::INFINITY)
            }
            "calorimeter_radius_m" | "calorimeter_half_length_m" => (0.0, true, f64::INFINITY),
            "plateau" => (0.0, true, 1.0),
            "fraction" | "right_choice" => (0.0, false, 1.0),
            _ => (0.0, false, f64::INFINITY),
        };
        Allowed { low, low_is_open, high }
    }
}

impl Detector {
    /// Every number that the detector has, entry by entry.
    pub fn terms(&self) -> Vec<Term> {
        let mut copy = self.clone();
        let parts = self.parts().into_iter();
        let candidates = parts.flat_map(|part| keys(part).iter().map(move |key| Term { part, key }));
        candidates.filter(|term| copy.slot(term).is_some()).collect()
    }

    /// The number of a name such as `photon-barrel.constant`, `direction-photon.sigma_phi_mrad` or
    /// `vertex.spread_wrong_mm`.
    pub fn find_term(&self, name: &str) -> Option<Term> {
        self.terms().into_iter().find(|term| self.term_name(term) == name)
    }

    /// The name of a number: that of its part, a dot, its key.
    pub fn term_name(&self, term: &Term) -> String {
        format!("{}.{}", self.part_name(term.part), term.key)
    }

    /// The name of a part: that of the entry, `direction-` and the object, or `vertex`.
    pub fn part_name(&self, part: Part) -> String {
        match part {
            Part::Calorimeter(i) => self.calorimeters.get(i).map(|entry| entry.name.clone()),
            Part::Tracker(i) => self.trackers.get(i).map(|entry| entry.name.clone()),
            Part::Direction(i) => self.directions.get(i).map(|entry| format!("direction-{}", entry.object)),
            Part::Vertex => Some("vertex".to_owned()),
            Part::Efficiency(i) => self.efficiencies.get(i).map(|entry| entry.name.clone()),
        }
        .unwrap_or_default()
    }

    /// The objects that a part measures.
    pub fn objects_of(&self, part: Part) -> Vec<Object> {
        match part {
            Part::Calorimeter(i) => self.calorimeters.get(i).map(|entry| vec![entry.object]),
            Part::Tracker(i) => self.trackers.get(i).map(|entry| vec![entry.object]),
            Part::Direction(i) => self.directions.get(i).map(|entry| vec![entry.object]),
            Part::Efficiency(i) => self.efficiencies.get(i).map(|entry| vec![entry.object]),
            // The vertex moves what has no track.
            Part::Vertex => Some(Object::ALL.into_iter().filter(|object| !object.has_track()).collect()),
        }
        .unwrap_or_default()
    }

    /// Every part of the detector, in the order of its lists.
    pub fn parts(&self) -> Vec<Part> {
        (0..self.calorimeters.len())
            .map(Part::Calorimeter)
            .chain((0..self.trackers.len()).map(Part::Tracker))
            .chain((0..self.directions.len()).map(Part::Direction))
            .chain(self.vertex.is_some().then_some(Part::Vertex))
            .chain((0..self.efficiencies.len()).map(Part::Efficiency))
            .collect()
    }

    /// How well the numbers of a part are known.
    pub fn uncertainties_of(&self, part: Part) -> &[Uncertainty] {
        match part {
            Part::Calorimeter(i) => self.calorimeters.get(i).map(|entry| entry.uncertainties.as_slice()),
            Part::Tracker(i) => self.trackers.get(i).map(|entry| entry.uncertainties.as_slice()),
            Part::Direction(i) => self.directions.get(i).map(|entry| entry.uncertainties.as_slice()),
            Part::Vertex => self.vertex.as_ref().map(|vertex| vertex.uncertainties.as_slice()),
            Part::Efficiency(i) => self.efficiencies.get(i).map(|entry| entry.uncertainties.as_slice()),
        }
        .unwrap_or_default()
    }

    /// The number of a part and a key as it stands in the files.
    pub fn term(&self, part: Part, key: &str) -> Option<Term> {
        let key = keys(part).iter().find(|known| **known == key)?;
        Some(Term { part, key }).filter(|term| self.value(term).is_some())
    }

    /// The value of a number; `None` where the detector has no such number.
    pub fn value(&self, term: &Term) -> Option<f64> {
        // Only reads through the copy, so that one place says where every number stands.
        self.clone().slot(term).map(|slot| *slot)
    }

    /// Gives a number another value, which is taken as it is. The fractions of the entries that share a region with a
    /// `fraction` are scaled so that all of them still add to 1. Nothing changes where there is no such number.
    pub fn set_value(&mut self, term: &Term, value: f64) {
        if let (Part::Calorimeter(index), "fraction") = (term.part, term.key) {
            self.set_fraction(index, value);
        } else if let Some(slot) = self.slot(term) {
            *slot = value;
        }
    }

    fn set_fraction(&mut self, index: usize, value: f64) {
        let Some(entry) = self.calorimeters.get(index) else { return };
        let (object, eta) = (entry.object, entry.eta);
        let others: Vec<usize> = (0..self.calorimeters.len())
            .filter(|&i| i != index && self.calorimeters[i].object == object && self.calorimeters[i].eta == eta)
            .collect();
        if others.is_empty() {
            // The only entry of its region measures all of its legs.
            return;
        }
        let sum: f64 = others.iter().map(|&i| self.calorimeters[i].fraction).sum();
        for &i in &others {
            let share = if sum > 0.0 { self.calorimeters[i].fraction / sum } else { 1.0 / others.len() as f64 };
            self.calorimeters[i].fraction = (1.0 - value) * share;
        }
        self.calorimeters[index].fraction = value;
    }

    fn slot(&mut self, term: &Term) -> Option<&mut f64> {
        match term.part {
            Part::Calorimeter(index) => {
                let entry = self.calorimeters.get_mut(index)?;
                match term.key {
                    "scale" => Some(&mut entry.scale),
                    "stochastic" => Some(&mut entry.stochastic),
                    "noise_gev" => Some(&mut entry.noise_gev),
                    "constant" => Some(&mut entry.constant),
                    "bias" => Some(&mut entry.bias),
                    "fraction" => Some(&mut entry.fraction),
                    "tail.alpha_low" => entry.tail.as_mut().map(|tail| &mut tail.alpha_low),
                    "tail.n_low" => entry.tail.as_mut().map(|tail| &mut tail.n_low),
                    "tail.alpha_high" => entry.tail.as_mut().map(|tail| &mut tail.alpha_high),
                    "tail.n_high" => entry.tail.as_mut().map(|tail| &mut tail.n_high),
                    _ => None,
                }
            }
            Part::Tracker(index) => {
                let entry = self.trackers.get_mut(index)?;
                match (term.key, &mut entry.resolution) {
                    ("scale", _) => Some(&mut entry.scale),
                    ("curvature_per_gev", TrackerResolution::Terms { curvature_per_gev, .. }) => {
                        Some(curvature_per_gev)
                    }
                    ("scattering", TrackerResolution::Terms { scattering, .. }) => Some(scattering),
                    ("geometry.field_t", TrackerResolution::Geometry(g)) => Some(&mut g.field_t),
                    ("geometry.inner_radius_m", TrackerResolution::Geometry(g)) => Some(&mut g.inner_radius_m),
                    ("geometry.lever_arm_m", TrackerResolution::Geometry(g)) => Some(&mut g.lever_arm_m),
                    ("geometry.point_resolution_um", TrackerResolution::Geometry(g)) => {
                        Some(&mut g.point_resolution_um)
                    }
                    ("geometry.radiation_lengths", TrackerResolution::Geometry(g)) => Some(&mut g.radiation_lengths),
                    _ => None,
                }
            }
            Part::Direction(index) => {
                let entry = self.directions.get_mut(index)?;
                match term.key {
                    "sigma_theta_mrad" => Some(&mut entry.sigma_theta_mrad),
                    "sigma_phi_mrad" => Some(&mut entry.sigma_phi_mrad),
                    _ => None,
                }
            }
            Part::Efficiency(index) => match (term.key, &mut self.efficiencies.get_mut(index)?.curve) {
                ("threshold_gev", EfficiencyCurve::TurnOn { threshold_gev, .. }) => Some(threshold_gev),
                ("width_gev", EfficiencyCurve::TurnOn { width_gev, .. }) => Some(width_gev),
                ("plateau", EfficiencyCurve::TurnOn { plateau, .. }) => Some(plateau),
                _ => None,
            },
            Part::Vertex => {
                let vertex = self.vertex.as_mut()?;
                match term.key {
                    "calorimeter_radius_m" => Some(&mut vertex.calorimeter_radius_m),
                    "calorimeter_half_length_m" => {
                        Some(&mut vertex.calorimeter_half_length_m).filter(|length| length.is_finite())
                    }
                    "right_choice" => Some(&mut vertex.right_choice),
                    "spread_right_mm" => Some(&mut vertex.spread_right_mm),
                    "spread_wrong_mm" => Some(&mut vertex.spread_wrong_mm),
                    _ => None,
                }
            }
        }
    }
}

fn keys(part: Part) -> &'static [&'static str] {
    match part {
        Part::Calorimeter(_) => &CALORIMETER_KEYS,
        Part::Tracker(_) => &TRACKER_KEYS,
        Part::Direction(_) => &DIRECTION_KEYS,
        Part::Vertex => &VERTEX_KEYS,
        Part::Efficiency(_) => &EFFICIENCY_KEYS,
    }
}
