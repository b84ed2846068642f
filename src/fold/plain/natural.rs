//! Natural masses, drawn from the natural shape times the fall of production.

use rand::RngExt;
use rand::rngs::StdRng;
use std::f64::consts::FRAC_PI_2;

use super::PlainError;
use crate::process::Natural;

/// Cells of equal angle across the peak.
const ANGLE_CELLS: u32 = 4096;
/// Further cell edges in geometric progression of the distance from the peak, on either side.
const DISTANCE_CELLS: u32 = 400;
/// Cells of equal ratio of masses far below the peak.
const RATIO_CELLS: u32 = 2000;
/// Mass ratio m/M above which cells are cells of angle.
const LOW_END: f64 = 0.5;
/// Least mass ratio that is drawn where there is no threshold.
const LEAST_RATIO: f64 = 1e-12;

/// Sampler of the natural mass m: its density per dm on m > threshold is proportional to
/// natural(m) (m/M)^-falloff_power.
///
/// The range is cut into some thousand cells, each integrated by a Gauss-Legendre rule; within a cell the density is
/// taken as linear. The variable is the angle atan(2(m - M)/Gamma) from M/2 up and ln m below. The cumulative
/// distribution is good to about 1e-6.
#[derive(Clone, Debug)]
pub struct NaturalMass {
    pole_gev: f64,
    width_gev: f64,
    cells: Vec<Cell>,
}

#[derive(Clone, Copy, Debug)]
enum Variable {
    /// atan(2(m - M)/Gamma)
    Angle,
    /// ln(m/M)
    LogRatio,
}

#[derive(Clone, Copy, Debug)]
struct Cell {
    variable: Variable,
    low: f64,
    high: f64,
    density_low: f64,
    density_high: f64,
    /// Probability up to the upper end of the cell.
    cumulative: f64,
}

/// Nodes and weights of the Gauss-Legendre rule of order 5 on (-1, 1) (Abramowitz & Stegun, Table 25.4).
const GAUSS_5: [(f64, f64); 5] = [
    (-0.906179845938664, 0.236926885056189),
    (-0.538469310105683, 0.478628670499366),
    (0.0, 0.568888888888889),
    (0.538469310105683, 0.478628670499366),
    (0.906179845938664, 0.236926885056189),
];

impl NaturalMass {
    /// The sampler of a resonance of pole mass and width above a threshold; a width of 0 always gives the pole mass.
    ///
    /// # Errors
    /// When the pole is below the threshold without a width, or the threshold above all masses that are produced.
    pub fn new(
        shape: Natural,
        pole_gev: f64,
        width_gev: f64,
        falloff_power: f64,
        threshold_gev: f64,
    ) -> Result<Self, PlainError> {
        if width_gev == 0.0 {
            return if pole_gev > threshold_gev {
                Ok(NaturalMass { pole_gev, width_gev, cells: Vec::new() })
            } else {
                Err(PlainError::BelowThreshold { mass_gev: pole_gev, legs_gev: threshold_gev })
            };
        }
        // With a falloff, masses outside M/2 to 2M are not produced.
        let (floor, ceiling) = if falloff_power == 0.0 { (0.0, f64::INFINITY) } else { (0.5, 2.0) };
        if threshold_gev >= ceiling * pole_gev {
            return Err(PlainError::BelowThreshold { mass_gev: pole_gev, legs_gev: threshold_gev });
        }

        let width = width_gev / pole_gev;
        let density = |ratio: f64| density_in_units_of_pole(shape, width, ratio) * libm::pow(ratio, -falloff_power);
        let least = (threshold_gev / pole_gev).max(LEAST_RATIO).max(floor);
        let mut cells = Vec::new();
        let mut cumulative = 0.0;
        let mut add = |variable: Variable, low: f64, high: f64| {
            let at = |x: f64| {
                let ratio = ratio_of(variable, width, x);
                density(ratio) * jacobian(variable, width, ratio)
            };
            let (half, middle) = (0.5 * (high - low), 0.5 * (high + low));
            cumulative += half * GAUSS_5.iter().map(|(node, weight)| weight * at(middle + half * node)).sum::<f64>();
            cells.push(Cell { variable, low, high, density_low: at(low), density_high: at(high), cumulative });
        };
        if least < LOW_END {
            let (from, to) = (libm::log(least), libm::log(LOW_END));
            let edge = |i: u32| from + (to - from) * f64::from(i) / f64::from(RATIO_CELLS);
            (0..RATIO_CELLS).for_each(|i| add(Variable::LogRatio, edge(i), edge(i + 1)));
        }
        angle_edges(width, least.max(LOW_END), ceiling)
            .windows(2)
            .for_each(|pair| add(Variable::Angle, pair[0], pair[1]));
        cells.iter_mut().for_each(|cell| cell.cumulative /= cumulative);
        Ok(NaturalMass { pole_gev, width_gev, cells })
    }

    /// Draws a mass in GeV.
    pub fn sample(&self, rng: &mut StdRng) -> f64 {
        if self.cells.is_empty() {
            return self.pole_gev;
        }
        let uniform: f64 = rng.random();
        let cell = &self.cells[self.cells.partition_point(|cell| cell.cumulative < uniform).min(self.cells.len() - 1)];
        let (a, b) = (cell.density_low, cell.density_high);
        let within: f64 = rng.random();
        // Solution of a t + (b - a) t²/2 = within (a + b)/2, written without cancellation.
        let t = within * (a + b) / (a + (a * a + within * (b * b - a * a)).sqrt());
        let x = cell.low + t * (cell.high - cell.low);
        self.pole_gev * ratio_of(cell.variable, self.width_gev / self.pole_gev, x)
    }
}

fn ratio_of(variable: Variable, width: f64, x: f64) -> f64 {
    match variable {
        Variable::Angle => 1.0 + 0.5 * width * libm::tan(x),
        Variable::LogRatio => libm::exp(x),
    }
}

/// d(m/M) over d(variable).
fn jacobian(variable: Variable, width: f64, ratio: f64) -> f64 {
    match variable {
        Variable::Angle => 0.5 * width + 2.0 * (ratio - 1.0) * (ratio - 1.0) / width,
        Variable::LogRatio => ratio,
    }
}

/// The natural density up to a constant, as function of m/M for a width in units of M.
fn density_in_units_of_pole(shape: Natural, width: f64, ratio: f64) -> f64 {
    let squared_distance = (ratio - 1.0) * (ratio - 1.0) * (ratio + 1.0) * (ratio + 1.0);
    match shape {
        Natural::BreitWigner => 1.0 / ((ratio - 1.0) * (ratio - 1.0) + 0.25 * width * width),
        Natural::Relativistic => 1.0 / (squared_distance + width * width),
        Natural::RunningWidth => {
            let square = ratio * ratio;
            square / (squared_distance + square * square * width * width)
        }
    }
}

/// Edges of the cells of angle between two mass ratios, the upper one perhaps infinite.
fn angle_edges(width: f64, from: f64, to: f64) -> Vec<f64> {
    let angle = |distance: f64| libm::atan(2.0 * distance / width);
    let first = angle(from - 1.0);
    let last = if to.is_finite() { angle(to - 1.0) } else { FRAC_PI_2 };
    let mut edges: Vec<f64> =
        (0..=ANGLE_CELLS).map(|i| first + (last - first) * f64::from(i) / f64::from(ANGLE_CELLS)).collect();
    for (sign, farthest) in [(-1.0, 1.0 - LOW_END), (1.0, 100.0)] {
        let step = libm::log(farthest / width) / f64::from(DISTANCE_CELLS);
        edges.extend((0..=DISTANCE_CELLS).map(|i| angle(sign * width * libm::exp(step * f64::from(i)))));
    }
    edges.retain(|edge| (first..=last).contains(edge));
    edges.sort_by(f64::total_cmp);
    edges.dedup();
    edges
}
