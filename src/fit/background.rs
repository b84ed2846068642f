//! Smooth backgrounds, normalised in the window.

use crate::numerics::quadrature::GAUSS_8 as RULE;

/// The highest degree of a polynomial background.
pub const MAX_DEGREE: usize = 8;

/// A smooth background.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Background {
    /// Density proportional to `exp(-background_slope m)`. Parameters `background_yield`, `background_slope` (1/GeV).
    Exponential,
    /// A polynomial of this degree d, at most [`MAX_DEGREE`], as a sum of Bernstein polynomials
    /// `b_k(u) = (d + 1) C(d, k) u^k (1 - u)^(d - k) / (high - low)` with u from 0 to 1 across the window. Parameters
    /// `background_0` to `background_d`: how many events each of them holds. None is negative, so the background is
    /// positive everywhere in the window (S. Bernstein, Comm. Soc. Math. Kharkov 13 (1912) 1).
    Polynomial(usize),
}

impl Background {
    /// Names of its parameters.
    pub(super) fn names(self) -> Vec<String> {
        match self {
            Background::Exponential => vec!["background_yield".to_owned(), "background_slope".to_owned()],
            Background::Polynomial(degree) => (0..=degree).map(|k| format!("background_{k}")).collect(),
        }
    }

    pub(super) fn count(self) -> usize {
        match self {
            Background::Exponential => 2,
            Background::Polynomial(degree) => degree + 1,
        }
    }

    /// Events of the background in the window.
    pub(super) fn events(self, values: &[f64]) -> f64 {
        match self {
            Background::Exponential => values.first().copied().unwrap_or(0.0),
            Background::Polynomial(_) => values.iter().sum(),
        }
    }

    /// The derivative of [`Background::events`] in each parameter.
    pub(super) fn events_gradient(self, out: &mut [f64]) {
        match self {
            Background::Exponential => {
                for (k, slot) in out.iter_mut().enumerate() {
                    *slot = if k == 0 { 1.0 } else { 0.0 };
                }
            }
            Background::Polynomial(_) => out.fill(1.0),
        }
    }

    /// Events per GeV at each mass, and the derivatives of it, parameter-major.
    pub(super) fn density(self, values: &[f64], window: (f64, f64), m: &[f64], out: &mut [f64], gradient: &mut [f64]) {
        let points = m.len();
        match self {
            Background::Exponential => {
                let (events, slope) = (values[0], values[1]);
                let centre = 0.5 * (window.0 + window.1);
                let half = 0.5 * (window.1 - window.0);
                let (ln_area, by_slope) = ln_area(slope * half);
                let (by_events, by_slope_row) = gradient.split_at_mut(points);
                for i in 0..points {
                    let d = m[i] - centre;
                    let shape = crate::numerics::kernel::exp(-slope * d - ln_area) / (2.0 * half);
                    out[i] = events * shape;
                    by_events[i] = shape;
                    by_slope_row[i] = -events * shape * (d + half * by_slope);
                }
            }
            Background::Polynomial(degree) => {
                let width = window.1 - window.0;
                out[..points].fill(0.0);
                let mut binomial = 1.0;
                for k in 0..=degree {
                    let factor = (degree + 1) as f64 * binomial / width;
                    let row = &mut gradient[k * points..(k + 1) * points];
                    for i in 0..points {
                        let u = (m[i] - window.0) / width;
                        row[i] = factor * whole_power(u, k) * whole_power(1.0 - u, degree - k);
                        out[i] += values[k] * row[i];
                    }
                    binomial *= (degree - k) as f64 / (k + 1) as f64;
                }
            }
        }
    }

    /// Events in a bin, and the derivatives of it.
    pub(super) fn bin(self, values: &[f64], window: (f64, f64), bin: (f64, f64), gradient: &mut [f64]) -> f64 {
        // The rule is exact for the polynomials; an exponential is cut where it falls by more than e^2.
        let parts = match self {
            Background::Exponential => (0.5 * values[1].abs() * (bin.1 - bin.0)).clamp(0.0, 1000.0) as usize + 1,
            Background::Polynomial(_) => 1,
        };
        let step = (bin.1 - bin.0) / parts as f64;
        let (mut total, mut out, mut rows) = (0.0, [0.0; 8], [0.0; 8 * (MAX_DEGREE + 1)]);
        gradient.fill(0.0);
        for part in 0..parts {
            let low = bin.0 + part as f64 * step;
            let mut nodes = [0.0; 8];
            for (i, &(x, _)) in RULE.iter().enumerate() {
                nodes[2 * i] = low + 0.5 * step * (1.0 - x);
                nodes[2 * i + 1] = low + 0.5 * step * (1.0 + x);
            }
            self.density(values, window, &nodes, &mut out, &mut rows[..8 * self.count()]);
            for i in 0..8 {
                let weight = 0.5 * step * RULE[i / 2].1;
                total += weight * out[i];
                for (k, slot) in gradient.iter_mut().enumerate() {
                    *slot += weight * rows[8 * k + i];
                }
            }
        }
        total
    }
}

fn whole_power(x: f64, power: usize) -> f64 {
    (0..power).fold(1.0, |product, _| product * x)
}

/// `ln(sinh(y)/y)` and its derivative.
fn ln_area(y: f64) -> (f64, f64) {
    let a = y.abs();
    if a < 0.05 {
        let z = y * y;
        // Series; the next terms are below 1e-14.
        return (
            z * (1.0 / 6.0 - z * (1.0 / 180.0 - z * (1.0 / 2835.0 - z / 37800.0))),
            y * (1.0 / 3.0 - z * (1.0 / 45.0 - z * (2.0 / 945.0 - z / 4725.0))),
        );
    }
    let fall = libm::exp(-2.0 * a);
    let value = a + libm::log((1.0 - fall) / (2.0 * a));
    let slope = (1.0 + fall) / (1.0 - fall) - 1.0 / a;
    (value, if y < 0.0 { -slope } else { slope })
}
