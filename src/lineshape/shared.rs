//! Natural ⊗ resolution on nodes that all points of a slice share.
//!
//! `f(x) = Σ_j W_j q(x - u_j)`: Gauss-Legendre panels over the resolution, fine enough for the natural shape wherever its
//! peak can fall for the points of the slice, and growing with the distance elsewhere. The weights `W_j` hold the
//! resolution (and its derivatives) once for all points. It serves where the natural width is not far below the window.

use std::sync::OnceLock;

use super::convolution::{Convolution, Gradient};
use super::half::Tail;
use super::resolution::MAX_PARAMETERS;
use super::true_mass::TrueMass;
use super::{Resolution, Shape};

/// Nodes per panel.
const ORDER: usize = 16;
/// Beyond this many nodes the adaptive path is no slower.
const MAX_NODES: usize = 6000;

/// See the module.
pub(super) struct SharedNodes {
    u: Vec<f64>,
    /// Rows of weights: the resolution, then its derivatives in its parameters.
    rows: Vec<Vec<f64>>,
}

impl SharedNodes {
    /// Nodes for points between `low` and `high`; `None` where they would not serve.
    pub(super) fn new(convolution: &Convolution<'_>, low: f64, high: f64, with_gradient: bool) -> Option<Self> {
        let (truth, resolution) = (convolution.truth, convolution.resolution);
        if convolution.proportional || truth.cut.is_some() || truth.power.is_some() {
            return None;
        }
        let range = (high - low) + truth.half + resolution.sigmas().0 + resolution.sigmas().1;
        if truth.natural.poles().is_some() {
            // The shape lives on t > 0, but is even and smooth across 0, as the rule takes it. That is right only if
            // the resolution does not reach 0: below the error asked for, beside a lower bound of the density.
            let least = truth.half / (std::f64::consts::PI * range * range);
            if !(low > 0.0 && resolution.pdf(low) < 1e-12 * least * truth.half / low) {
                return None;
            }
        }
        // Where the peak of the natural shape falls, in u.
        let window = (low - truth.centre, high - truth.centre);
        let breaks = breaks(resolution, truth.half, window, range)?;
        let panels = breaks.len().checked_sub(1)?;
        if panels * ORDER > MAX_NODES {
            return None;
        }
        let count = if with_gradient { resolution.parameter_count() } else { 0 };
        let mut nodes = SharedNodes { u: Vec::with_capacity(panels * ORDER), rows: vec![vec![]; 1 + count] };
        let mut own = [0.0; MAX_PARAMETERS];
        for pair in breaks.windows(2) {
            let (centre, half) = (0.5 * (pair[0] + pair[1]), 0.5 * (pair[1] - pair[0]));
            for &(node, weight) in legendre() {
                let u = centre + half * node;
                nodes.u.push(u);
                let weight = half * weight;
                if with_gradient {
                    let value = weight * libm::exp(resolution.ln_pdf_gradient(u, &mut own[..count]));
                    nodes.rows[0].push(value);
                    for (row, g) in nodes.rows[1..].iter_mut().zip(&own) {
                        row.push(value * g);
                    }
                } else {
                    nodes.rows[0].push(weight * resolution.pdf(u));
                }
            }
        }
        Some(nodes)
    }

    /// Density at x.
    pub(super) fn pdf(&self, truth: &TrueMass, x: f64) -> f64 {
        let (strength, squared, mirrored) = constants(truth);
        sum(&self.u, &self.rows[0], x - truth.centre, truth.half, strength, squared, mirrored)
    }

    /// Density at x with its derivatives, but for that in the mass of a relativistic shape, which `complete` adds.
    pub(super) fn gradient(&self, convolution: &Convolution<'_>, x: f64) -> Gradient {
        let truth = convolution.truth;
        let mut natural = vec![0.0; self.u.len()];
        let mut by_width = vec![0.0; self.u.len()];
        for ((u, natural), by_width) in self.u.iter().zip(&mut natural).zip(&mut by_width) {
            let t = x - u;
            *natural = truth.pdf_everywhere(t);
            *by_width = *natural * truth.ln_gradient(t)[0];
        }
        let dot = |a: &[f64], b: &[f64]| a.iter().zip(b).map(|(a, b)| a * b).sum::<f64>();
        let mut resolution = [0.0; MAX_PARAMETERS];
        for (slot, row) in resolution.iter_mut().zip(&self.rows[1..]) {
            *slot = dot(row, &natural);
        }
        let value = self.pdf(truth, x);
        convolution.with_mass(x, value, dot(&self.rows[0], &by_width), resolution)
    }
}

/// Strength, whether m² stands in the numerator, and the centre of the mirrored pole (none for the Breit-Wigner).
fn constants(truth: &TrueMass) -> (f64, bool, f64) {
    let kernel = truth.kernel();
    if kernel.poles {
        (kernel.strength, kernel.squared, truth.centre)
    } else {
        (kernel.strength * kernel.half, false, f64::NAN)
    }
}

/// Panel limits in u: joins, growth with the distance from the core and from the window.
fn breaks(resolution: &Resolution, half: f64, window: (f64, f64), range: f64) -> Option<Vec<f64>> {
    let mut list = vec![resolution.bias()];
    for (tail, sigma, sign) in
        [(resolution.low, resolution.sigmas().0, -1.0), (resolution.high, resolution.sigmas().1, 1.0)]
    {
        let join = tail.join();
        let mut t = 0.0;
        loop {
            // How far the resolution is smooth from here, in sigma.
            let smooth = if t < join {
                1.5_f64.min(join - t)
            } else {
                match tail {
                    Tail::None => 1.5,
                    Tail::Power { alpha, n } => {
                        let distance = n / alpha + (t - join);
                        distance.min(8.0 * distance / n)
                    }
                    Tail::Exponential { k } => 8.0 / k,
                }
            };
            let u = resolution.bias() + sign * sigma * t;
            let outside = if sign > 0.0 { (window.0 - u).max(u - window.1) } else { (u - window.1).max(window.0 - u) };
            // A panel that heads for the window must stop before it; one that leaves it may grow with the distance.
            let heading = if sign > 0.0 { u < window.0 } else { u > window.1 };
            let room = if outside <= 0.0 {
                2.0 * half
            } else if heading {
                (0.5 * outside).max(2.0 * half)
            } else {
                outside.max(2.0 * half)
            };
            let mut next = t + smooth.min(room / sigma);
            if t < join && next > join {
                next = join;
            }
            if !(next > t) {
                return None;
            }
            t = next;
            let u = resolution.bias() + sign * sigma * t;
            list.push(u);
            if list.len() * ORDER > MAX_NODES {
                return None;
            }
            // What is left out, beside the least density of the window.
            let beyond = if sign > 0.0 { u - window.1 } else { window.0 - u };
            let left = if sign > 0.0 { resolution.sf(u) } else { resolution.cdf(u) };
            if beyond > 0.0 && left * (range / (beyond + range)).powi(2) < 1e-14 || left == 0.0 {
                break;
            }
        }
    }
    list.sort_by(f64::total_cmp);
    Some(list)
}

crate::wide! {
    fn sum(u: &[f64], weights: &[f64], x: f64, half: f64, strength: f64, squared: bool, mirrored: f64) -> f64 {
        // Eight sums side by side, so that the additions vectorise; always in this order.
        let mut lanes = [0.0; 8];
        let square = half * half;
        for (u, w) in u.chunks_exact(8).zip(weights.chunks_exact(8)) {
            if mirrored.is_nan() {
                for i in 0..8 {
                    let d = x - u[i];
                    lanes[i] += w[i] / (d * d + square);
                }
            } else {
                for i in 0..8 {
                    let d = x - u[i];
                    let t = d + mirrored;
                    let other = (t + mirrored) * (t + mirrored) + square;
                    let numerator = if squared { t * t } else { 1.0 };
                    lanes[i] += w[i] * numerator / ((d * d + square) * other);
                }
            }
        }
        let [a, b, c, d, e, f, g, h] = lanes;
        strength * (((a + e) + (b + f)) + ((c + g) + (d + h)))
    }
}

/// Nodes and weights of the Gauss-Legendre rule on [-1, 1], by Newton's method on the Legendre polynomial.
fn legendre() -> &'static [(f64, f64); ORDER] {
    static RULE: OnceLock<[(f64, f64); ORDER]> = OnceLock::new();
    RULE.get_or_init(|| {
        let mut rule = [(0.0, 0.0); ORDER];
        for (i, slot) in rule.iter_mut().enumerate() {
            let mut x = libm::cos(std::f64::consts::PI * (i as f64 + 0.75) / (ORDER as f64 + 0.5));
            let mut slope = 1.0;
            for _ in 0..8 {
                let (mut p, mut before) = (x, 1.0);
                for k in 2..=ORDER {
                    let k = k as f64;
                    (p, before) = (((2.0 * k - 1.0) * x * p - (k - 1.0) * before) / k, p);
                }
                slope = ORDER as f64 * (x * p - before) / (x * x - 1.0);
                x -= p / slope;
            }
            *slot = (x, 2.0 / ((1.0 - x * x) * slope * slope));
        }
        rule
    })
}
