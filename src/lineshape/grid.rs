//! The fast path of a convolution: Chebyshev panels in x, made once per slice.
//!
//! A panel holds the density and, for fits, its gradient as Chebyshev series of degree 15, interpolated at the roots of
//! T16 from the reference path. It is halved until the last coefficients of the density are below 1e-11 of the smallest
//! density met in it (or 1e-16 of the largest of all), and the series agrees at both ends. What remains is below [`LineShape::GRID_ERROR`]; the tests compare
//! with the point by point path. Probabilities are integrals of the series.

use super::LineShape;

/// Coefficients per panel and component.
const ORDER: usize = 16;
/// Slices up to this length are cheaper point by point.
const SHORT: usize = 48;
/// Halvings of a first panel.
const DEPTH: usize = 40;
/// Cells of the table that finds a panel.
const CELLS: usize = 2048;
/// Points that are sorted and evaluated together.
const BLOCK: usize = 2048;
/// Tolerances: of the density, of its gradient (relative to the largest in the panel).
const DENSITY_TOLERANCE: f64 = 1e-11;
const GRADIENT_TOLERANCE: f64 = 1e-8;
/// Relative difference of density and series at the ends of a panel, where a series is worst.
const END_TOLERANCE: f64 = 1e-10;

/// See the module.
pub(super) struct Grid {
    /// Rising panel edges.
    edges: Vec<f64>,
    /// `components × ORDER` numbers per panel.
    coefficients: Vec<f64>,
    /// 1, or 1 + number of parameters.
    components: usize,
    /// First panel that each cell of equal length meets.
    table: Vec<u32>,
    inverse_cell: f64,
}

impl Grid {
    /// The grid for a slice; `None` where it does not pay or cannot be (a point that is not finite).
    pub(super) fn of(shape: &LineShape, m: &[f64], with_gradient: bool) -> Option<Grid> {
        if m.len() <= SHORT {
            return None;
        }
        let breaks = shape.grid_breaks()?;
        let (low, high) = m.iter().fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), &x| (l.min(x), h.max(x)));
        // A sum is finite only if every term is.
        if !(high > low) || !m.iter().sum::<f64>().is_finite() {
            return None;
        }
        let components = if with_gradient { 1 + shape.parameter_count() } else { 1 };
        let shared = shape.shared_nodes(low, high, with_gradient);
        Grid::build(low, high, &breaks, components, |x, out| {
            if let Some((value, gradient)) = out.split_first_mut() {
                *value = if gradient.is_empty() {
                    shape.pdf_by(&shared, x)
                } else {
                    shape.pdf_gradient_by(&shared, x, gradient)
                };
            }
        })
    }

    fn build(
        low: f64,
        high: f64,
        breaks: &[f64],
        components: usize,
        mut evaluate: impl FnMut(f64, &mut [f64]),
    ) -> Option<Grid> {
        let cosine = cosines();
        let mut first: Vec<f64> = breaks.iter().copied().filter(|&b| b > low && b < high).collect();
        first.extend([low, high]);
        first.sort_by(f64::total_cmp);
        first.dedup();
        // A stack, leftmost on top, so that panels come out in rising order.
        let mut open: Vec<(f64, f64, usize)> = first.windows(2).rev().map(|pair| (pair[0], pair[1], 0)).collect();
        let mut grid = Grid { edges: vec![low], coefficients: vec![], components, table: vec![], inverse_cell: 0.0 };
        let mut top = 0.0_f64;
        let mut values = vec![0.0; components * ORDER];
        let mut point = vec![0.0; components];
        let mut series = vec![0.0; components * ORDER];
        while let Some((a, b, depth)) = open.pop() {
            let (centre, half) = (0.5 * (a + b), 0.5 * (b - a));
            for j in 0..ORDER {
                evaluate(centre + half * cosine[1][j], &mut point);
                for (c, &value) in point.iter().enumerate() {
                    values[c * ORDER + j] = value;
                }
            }
            for c in 0..components {
                for k in 0..ORDER {
                    let sum: f64 = (0..ORDER).map(|j| values[c * ORDER + j] * cosine[k][j]).sum();
                    series[c * ORDER + k] = sum * if k == 0 { 1.0 } else { 2.0 } / ORDER as f64;
                }
            }
            let density = &values[..ORDER];
            let smallest = density.iter().copied().fold(f64::INFINITY, f64::min);
            top = density.iter().copied().fold(top, f64::max);
            let rest = |c: usize| (ORDER - 3..ORDER).map(|k| series[c * ORDER + k].abs()).fold(0.0, f64::max);
            let fine = rest(0) <= (DENSITY_TOLERANCE * smallest).max(1e-16 * top)
                && (1..components).all(|c| {
                    let row = &values[c * ORDER..(c + 1) * ORDER];
                    let largest = row.iter().map(|v| v.abs()).fold(0.0, f64::max);
                    rest(c) <= GRADIENT_TOLERANCE * largest
                });
            // The nodes stop short of the ends; something steep may hide there.
            let fine = fine
                && [(a, -1.0), (b, 1.0)].into_iter().all(|(end, sign)| {
                    evaluate(end, &mut point);
                    let sum = (0..ORDER).rev().fold(0.0, |sum, k| series[k] + sign * sum);
                    (sum - point[0]).abs() <= (END_TOLERANCE * point[0]).max(5e-16 * top)
                });
            if fine || depth >= DEPTH {
                if !fine {
                    return None;
                }
                grid.edges.push(b);
                grid.coefficients.extend_from_slice(&series);
            } else {
                open.push((centre, b, depth + 1));
                open.push((a, centre, depth + 1));
            }
        }
        grid.index();
        Some(grid)
    }

    fn index(&mut self) {
        let (low, high) = (self.edges[0], self.edges[self.edges.len() - 1]);
        let cell = (high - low) / CELLS as f64;
        self.inverse_cell = 1.0 / cell;
        let mut panel = 0;
        for i in 0..CELLS {
            // One cell of margin against rounding.
            let start = low + (i as f64 - 1.0) * cell;
            while panel + 2 < self.edges.len() && self.edges[panel + 1] <= start {
                panel += 1;
            }
            self.table.push(panel as u32);
        }
    }

    fn panel(&self, x: f64) -> usize {
        let cell = ((x - self.edges[0]) * self.inverse_cell) as usize;
        let mut panel = self.table[cell.min(CELLS - 1)] as usize;
        while panel + 2 < self.edges.len() && x > self.edges[panel + 1] {
            panel += 1;
        }
        panel
    }

    /// Calls `block` with the points of one panel after the other: its number, the places of the points in the slice and
    /// their local coordinates from -1 to 1.
    fn for_each_panel(&self, m: &[f64], mut work: impl FnMut(usize, &[u32], &[f64])) {
        let panels = self.edges.len() - 1;
        let mut first = vec![0_u32; panels + 1];
        let mut number = [0_u32; BLOCK];
        let mut place = [0_u32; BLOCK];
        let mut local = [0.0; BLOCK];
        for (block, m) in m.chunks(BLOCK).enumerate() {
            // A counting sort by panel.
            first.fill(0);
            for (slot, &x) in number.iter_mut().zip(m) {
                let panel = self.panel(x);
                *slot = panel as u32;
                first[panel + 1] += 1;
            }
            for panel in 0..panels {
                first[panel + 1] += first[panel];
            }
            for (i, &x) in m.iter().enumerate() {
                let panel = number[i] as usize;
                let slot = first[panel] as usize;
                first[panel] += 1;
                let (a, b) = (self.edges[panel], self.edges[panel + 1]);
                place[slot] = (block * BLOCK + i) as u32;
                local[slot] = ((x - a) - (b - x)) / (b - a);
            }
            let mut start = 0;
            for (panel, &end) in first.iter().enumerate().take(panels) {
                let end = end as usize;
                if end > start {
                    work(panel, &place[start..end], &local[start..end]);
                }
                start = end;
            }
        }
    }

    fn series(&self, panel: usize, component: usize) -> &[f64] {
        let start = (panel * self.components + component) * ORDER;
        &self.coefficients[start..start + ORDER]
    }

    /// Densities.
    pub(super) fn value(&self, m: &[f64], out: &mut [f64]) {
        let m = &m[..m.len().min(out.len())];
        let mut buffer = [0.0; BLOCK];
        self.for_each_panel(m, |panel, place, local| {
            clenshaw(self.series(panel, 0), local, &mut buffer);
            for (&place, value) in place.iter().zip(&buffer) {
                out[place as usize] = *value;
            }
        });
    }

    /// The lowest point.
    pub(super) fn low(&self) -> f64 {
        self.edges[0]
    }

    /// The highest point.
    pub(super) fn high(&self) -> f64 {
        self.edges[self.edges.len() - 1]
    }

    /// Probabilities below each point, or above it, from the probability `beyond` the first end of the grid: the density
    /// integrated from there, so that every term is positive.
    pub(super) fn probability(&self, beyond: f64, m: &[f64], out: &mut [f64], above: bool) {
        let m = &m[..m.len().min(out.len())];
        let panels = self.edges.len() - 1;
        let mut integrals = vec![[0.0; ORDER]; panels];
        let mut reached = beyond;
        for i in 0..panels {
            let panel = if above { panels - 1 - i } else { i };
            let half = 0.5 * (self.edges[panel + 1] - self.edges[panel]);
            let (density, integral) = (self.series(panel, 0), &mut integrals[panel]);
            // The integral of T_k is T_(k+1)/(2k + 2) - T_(k-1)/(2k - 2); the coefficient that has no place is below the
            // tolerance.
            for k in 1..ORDER {
                let before = if k == 1 { 2.0 * density[0] } else { density[k - 1] };
                let after = density.get(k + 1).copied().unwrap_or(0.0);
                integral[k] = half * (before - after) / (2 * k) as f64;
            }
            let low_end: f64 = integral.iter().enumerate().map(|(k, c)| if k % 2 == 0 { *c } else { -c }).sum();
            let high_end: f64 = integral.iter().sum();
            if above {
                integral.iter_mut().for_each(|c| *c = -*c);
                integral[0] = reached + high_end;
            } else {
                integral[0] = reached - low_end;
            }
            reached += high_end - low_end;
        }
        let mut buffer = [0.0; BLOCK];
        self.for_each_panel(m, |panel, place, local| {
            clenshaw(&integrals[panel], local, &mut buffer);
            for (&place, value) in place.iter().zip(&buffer) {
                out[place as usize] = value.clamp(0.0, 1.0);
            }
        });
    }

    /// Logarithms of densities and their gradient, parameter-major.
    pub(super) fn ln_value_and_gradient(&self, m: &[f64], ln_pdf: &mut [f64], gradient: &mut [f64]) {
        let points = m.len();
        if ln_pdf.len() < points || gradient.len() < points * (self.components - 1) {
            return;
        }
        let mut inverse = [0.0; BLOCK];
        let mut buffer = [0.0; BLOCK];
        self.for_each_panel(m, |panel, place, local| {
            clenshaw(self.series(panel, 0), local, &mut buffer);
            for ((&place, inverse), &value) in place.iter().zip(&mut inverse).zip(&buffer) {
                ln_pdf[place as usize] = value;
                *inverse = 1.0 / value;
            }
            for c in 1..self.components {
                clenshaw(self.series(panel, c), local, &mut buffer);
                let row = &mut gradient[(c - 1) * points..c * points];
                for ((&place, inverse), &value) in place.iter().zip(&inverse).zip(&buffer) {
                    row[place as usize] = value * inverse;
                }
            }
        });
        crate::numerics::kernel::ln_in_place(&mut ln_pdf[..points]);
    }
}

/// `T_k` at the roots of `T_ORDER`.
fn cosines() -> [[f64; ORDER]; ORDER] {
    let mut table = [[0.0; ORDER]; ORDER];
    for (k, row) in table.iter_mut().enumerate() {
        for (j, value) in row.iter_mut().enumerate() {
            *value = libm::cos(std::f64::consts::PI * (k * (2 * j + 1)) as f64 / (2 * ORDER) as f64);
        }
    }
    table
}

crate::wide! {
    fn clenshaw(series: &[f64], local: &[f64], out: &mut [f64]) {
        let Some(series) = series.first_chunk::<ORDER>() else { return };
        for (value, &x) in out.iter_mut().zip(local) {
            let (mut b1, mut b2) = (series[ORDER - 1], 0.0);
            let twice = 2.0 * x;
            for k in (1..ORDER - 1).rev() {
                (b1, b2) = (series[k] + (twice * b1 - b2), b1);
            }
            *value = series[0] + (x * b1 - b2);
        }
    }
}
