//! How likely enough legs of each event are found, at their true pT and |eta|.

use super::aim::Aimed;
use super::plan::{Regions, cot};
use crate::detector::{Detector, EfficiencyCurve, LEAST_TURN_ON_WIDTH_GEV};
use crate::numerics::erfc::erfc;
use crate::numerics::sobol::{BLOCK, Lane};
use crate::process::Channel;
use crate::wide;

/// Above any threshold: erfc of minus this is 2 to the last bit.
const FAR_ABOVE: f64 = 30.0;

/// A cell of a table: from and to a pT in GeV, and the efficiency.
type Cell = (f64, f64, f64);

/// The efficiency of one leg in one range of |cot theta|.
#[derive(Clone, Debug)]
enum Curve {
    TurnOn {
        threshold: f64,
        /// 1/(sqrt2 width), 1/GeV.
        steepness: f64,
        plateau: f64,
    },
    /// Indices of cells in rising pT.
    Cells(Vec<u32>),
}

/// The efficiency of one leg.
#[derive(Clone, Debug)]
struct LegEfficiency {
    /// Which of the channel's legs.
    leg: usize,
    curves: Regions<Option<Curve>>,
    has_turn_on: bool,
}

/// The efficiencies of a channel.
#[derive(Clone, Debug)]
pub(super) struct EfficiencyPlan {
    /// Legs whose efficiency is told; the others are always found.
    legs: Vec<LegEfficiency>,
    cells: Vec<Cell>,
    /// How many of `legs` must be found, 1 or more.
    at_least: usize,
}

impl EfficiencyPlan {
    /// `None` where every event is found.
    pub fn new(detector: &Detector, channel: &Channel) -> Option<Self> {
        let objects = channel.decay.legs();
        let mut cells = Vec::new();
        let legs: Vec<LegEfficiency> = objects
            .iter()
            .enumerate()
            .filter(|(_, object)| detector.has_efficiency(**object))
            .map(|(leg, object)| {
                let mut curves = Regions::default();
                let mut has_turn_on = false;
                for region in detector.efficiency_regions(*object) {
                    let (low, high) = (region.eta.low, region.eta.high);
                    match &detector.efficiencies[region.entry].curve {
                        EfficiencyCurve::TurnOn { threshold_gev, width_gev, plateau } => {
                            has_turn_on = true;
                            let width = width_gev.max(LEAST_TURN_ON_WIDTH_GEV);
                            let curve = Curve::TurnOn {
                                threshold: *threshold_gev,
                                steepness: std::f64::consts::FRAC_1_SQRT_2 / width,
                                plateau: *plateau,
                            };
                            curves.push(cot(low), cot(high), Some(curve));
                        }
                        EfficiencyCurve::Table(table) => {
                            let first = cells.len() as u32;
                            cells.extend(table.iter().map(|cell| (cell.pt_gev.0, cell.pt_gev.1, cell.efficiency)));
                            // Strips of |eta| within which the same cells count.
                            let mut bounds = vec![low, high];
                            bounds.extend(table.iter().flat_map(|cell| [cell.eta.low, cell.eta.high]));
                            bounds.retain(|bound| low <= *bound && *bound <= high);
                            bounds.sort_by(f64::total_cmp);
                            bounds.dedup();
                            for strip in bounds.windows(2) {
                                let mut here: Vec<u32> = (0..table.len() as u32)
                                    .filter(|index| table[*index as usize].eta.contains(strip[0]))
                                    .collect();
                                let start = |index: &u32| table[*index as usize].pt_gev.0;
                                here.sort_by(|a, b| start(a).total_cmp(&start(b)));
                                let here = here.into_iter().map(|index| first + index).collect();
                                curves.push(cot(strip[0]), cot(strip[1]), Some(Curve::Cells(here)));
                            }
                        }
                    }
                }
                LegEfficiency { leg, curves, has_turn_on }
            })
            .collect();
        let always = objects.len() - legs.len();
        let at_least = channel.min_efficient_legs.unwrap_or(objects.len()).saturating_sub(always);
        (at_least > 0).then_some(EfficiencyPlan { legs, cells, at_least })
    }
}

/// The efficiencies of a block of events.
#[derive(Clone, Debug)]
pub(super) struct Found {
    /// Probability that enough legs are found, by event.
    pub probability: Lane,
    /// Whether a leg lies outside of every entry, or of every cell of its table.
    pub outside: [bool; BLOCK],
    /// By leg whose efficiency is told.
    legs: Vec<Lane>,
    /// (pT - threshold)/(sqrt2 width).
    distance: Lane,
    /// By number of legs.
    exactly: Vec<Lane>,
}

impl Found {
    pub fn new(plan: Option<&EfficiencyPlan>) -> Self {
        let zero = [0.0; BLOCK];
        let legs = plan.map_or(0, |plan| plan.legs.len());
        Found {
            probability: [1.0; BLOCK],
            outside: [false; BLOCK],
            legs: vec![zero; legs],
            distance: zero,
            exactly: vec![zero; legs + 1],
        }
    }

    /// Works out the events `live` of a block.
    pub fn find(&mut self, plan: &EfficiencyPlan, aimed: &[Aimed], live: &[usize]) {
        self.outside = [false; BLOCK];
        for (entry, efficiency) in plan.legs.iter().zip(&mut self.legs) {
            let Aimed { pt, cot_true, .. } = &aimed[entry.leg];
            *efficiency = [0.0; BLOCK];
            self.distance = [FAR_ABOVE; BLOCK];
            for i in live.iter().copied() {
                let told = match entry.curves.at(cot_true[i]) {
                    Some(Some(Curve::TurnOn { threshold, steepness, plateau })) => {
                        self.distance[i] = (pt[i] - threshold) * steepness;
                        Some(*plateau)
                    }
                    Some(Some(Curve::Cells(cells))) => cell_at(&plan.cells, cells, pt[i]),
                    Some(None) | None => None,
                };
                match told {
                    Some(value) => efficiency[i] = value,
                    None => self.outside[i] = true,
                }
            }
            if entry.has_turn_on {
                turn_on(&self.distance, efficiency);
            }
        }
        if plan.at_least == plan.legs.len() {
            all(&self.legs, &mut self.probability);
        } else {
            at_least(plan.at_least, &self.legs, &mut self.exactly, &mut self.probability);
        }
    }
}

/// The efficiency of the cell that holds a pT, of cells in rising pT that do not overlap.
fn cell_at(cells: &[Cell], here: &[u32], pt: f64) -> Option<f64> {
    let above = here.partition_point(|index| cells[*index as usize].0 <= pt);
    let (_, high, efficiency) = cells[*here.get(above.checked_sub(1)?)? as usize];
    (pt < high).then_some(efficiency)
}

wide! {
    /// Multiplies plateaus by the turn-on.
    fn turn_on(distance: &Lane, efficiency: &mut Lane) {
        for i in 0..BLOCK {
            efficiency[i] *= 0.5 * erfc(-distance[i]);
        }
    }
}

wide! {
    /// Probability that all legs are found.
    fn all(legs: &[Lane], probability: &mut Lane) {
        *probability = [1.0; BLOCK];
        for leg in legs {
            for i in 0..BLOCK {
                probability[i] *= leg[i];
            }
        }
    }
}

wide! {
    /// Probability that at least `count` legs are found: that of exactly j of the first legs, one leg after the other.
    fn at_least(count: usize, legs: &[Lane], exactly: &mut [Lane], probability: &mut Lane) {
        exactly.fill([0.0; BLOCK]);
        exactly[0] = [1.0; BLOCK];
        for (done, leg) in legs.iter().enumerate() {
            for j in (1..=done + 1).rev() {
                for i in 0..BLOCK {
                    exactly[j][i] = exactly[j][i] * (1.0 - leg[i]) + exactly[j - 1][i] * leg[i];
                }
            }
            for i in 0..BLOCK {
                exactly[0][i] *= 1.0 - leg[i];
            }
        }
        *probability = [0.0; BLOCK];
        for part in &exactly[count..] {
            for i in 0..BLOCK {
                probability[i] += part[i];
            }
        }
    }
}
