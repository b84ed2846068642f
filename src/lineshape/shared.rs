//! Natural ⊗ resolution on nodes that all points of a slice share.
//!
//! With u the argument of the resolution R, `f(x) = ∫ R(u) q(x - u) du` for a constant resolution, and
//! `f(x) = ∫ R(u) q(x v) v du` with `v = M/(M + u)` for one that grows with the true mass. Gauss-Legendre panels over u
//! ([`super::panels`]) are fine enough for R and, wherever its poles can fall for the points of the slice, for q. The
//! weights `W_j`, which hold R and its derivatives, are worked out once; each point then costs a sum of rational terms.
//!
//! Where the true mass ends (at 0, or where a falloff cuts it) is an end of the integral that moves with x. Panels inside
//! are summed whole; the one in which the end falls is integrated up to it with nodes of its own. Every term is positive,
//! so no digits are lost in the tails. It serves where the natural width is not far below the window.

use super::Shape;
use super::convolution::{COMPONENTS, Convolution, Gradient, RESOLUTION_AT};
use super::half::{SideKernel, ln_raw};
use super::panels::{self, Window};
use super::resolution::MAX_PARAMETERS;
use super::true_mass::{Kind, NaturalKernel};
use crate::numerics::kernel;
use crate::numerics::quadrature::{ORDER, gauss_legendre};

/// What is left of a panel's probability beside the sum of the others, to be worth its own nodes.
const NEGLIGIBLE: f64 = 1e-17;

/// See the module.
pub(super) struct SharedNodes {
    /// Rising limits of the panels in u.
    ends: Vec<f64>,
    /// Where q is taken: u itself, or v of a proportional resolution.
    place: Vec<f64>,
    /// Rows of weights: the resolution, then its derivatives in its parameters.
    rows: Vec<Vec<f64>>,
    natural: NaturalKernel,
    low: SideKernel,
    high: SideKernel,
    bias: f64,
    inverse_norm: f64,
    proportional: bool,
    /// Range of the true mass.
    truth: (f64, f64),
    mass: f64,
    /// The points that it serves.
    window: Window,
}

impl SharedNodes {
    /// Nodes for points between `low` and `high`; `None` where they would not serve.
    pub(super) fn new(convolution: &Convolution<'_>, low: f64, high: f64, with_gradient: bool) -> Option<Self> {
        let (truth, resolution) = (convolution.truth, convolution.resolution);
        let window = Window::new(convolution, low, high)?;
        let ends = panels::limits(convolution, &window)?;
        let size = (ends.len() - 1) * ORDER;
        let count = if with_gradient { resolution.parameter_count() } else { 0 };
        let (low_sigma, high_sigma) = resolution.sigmas();
        let mut nodes = SharedNodes {
            ends,
            place: Vec::with_capacity(size),
            rows: vec![Vec::with_capacity(size); 1 + count],
            natural: truth.kernel(),
            low: SideKernel::new(low_sigma, resolution.low),
            high: SideKernel::new(high_sigma, resolution.high),
            bias: resolution.bias(),
            inverse_norm: 1.0 / resolution.norm(),
            proportional: convolution.proportional,
            truth: (truth.lowest(), truth.highest()),
            mass: truth.natural.mass(),
            window,
        };
        let mut own = [0.0; MAX_PARAMETERS];
        for panel in 0..nodes.ends.len() - 1 {
            let (u, weight) = nodes.panel(nodes.ends[panel], nodes.ends[panel + 1]);
            if with_gradient {
                for (u, weight) in u.iter().zip(&weight) {
                    let value = weight * libm::exp(resolution.ln_pdf_gradient(*u, &mut own[..count]));
                    nodes.rows[0].push(value);
                    for (row, g) in nodes.rows[1..].iter_mut().zip(&own) {
                        row.push(value * g);
                    }
                }
            } else {
                let mut density = [0.0; ORDER];
                resolution.pdf_slice(&u, &mut density);
                nodes.rows[0].extend(density.iter().zip(&weight).map(|(d, w)| d * w));
            }
            let place = u.map(|u| if nodes.proportional { nodes.shrink(u) } else { u });
            nodes.place.extend_from_slice(&place);
        }
        Some(nodes)
    }

    /// Whether these nodes serve the point x.
    pub(super) fn serve(&self, x: f64) -> bool {
        x >= self.window.low && x <= self.window.high
    }

    /// `v = M/(M + u)`, true over measured mass.
    fn shrink(&self, u: f64) -> f64 {
        self.mass / (self.mass + u)
    }

    /// Nodes u between two limits, and their weights with the factor v of a proportional resolution.
    fn panel(&self, from: f64, to: f64) -> ([f64; ORDER], [f64; ORDER]) {
        let (centre, half) = (0.5 * (from + to), 0.5 * (to - from));
        let u = gauss_legendre().map(|(node, _)| centre + half * node);
        let mut weight = gauss_legendre().map(|(_, weight)| half * weight);
        if self.proportional {
            weight.iter_mut().zip(&u).for_each(|(w, &u)| *w *= self.shrink(u));
        }
        (u, weight)
    }

    /// Range of u in which the true mass exists at x.
    fn range(&self, x: f64) -> (f64, f64) {
        let (lowest, highest) = self.truth;
        let at = |t: f64| if self.proportional { self.mass * (x / t) - self.mass } else { x - t };
        let from = if highest.is_finite() { at(highest) } else { f64::NEG_INFINITY };
        let to = if lowest.is_finite() && (lowest > 0.0 || !self.proportional) { at(lowest) } else { f64::INFINITY };
        (from.max(self.ends[0]), to.min(self.ends[self.ends.len() - 1]))
    }

    /// Calls `whole` with the range of nodes of the panels inside the limits at x, then `part` with the limits of what is
    /// left at either end.
    fn cover(&self, x: f64, whole: &mut dyn FnMut(usize, usize), part: &mut dyn FnMut(f64, f64)) {
        let (from, to) = self.range(x);
        if !(to > from) {
            return;
        }
        let first = self.ends.partition_point(|&end| end < from);
        let last = self.ends.partition_point(|&end| end <= to) - 1;
        if first > last {
            return part(from, to);
        }
        whole(first * ORDER, last * ORDER);
        if from < self.ends[first] {
            part(from, self.ends[first]);
        }
        if to > self.ends[last] {
            part(self.ends[last], to);
        }
    }

    /// Density at x.
    pub(super) fn pdf(&self, x: f64) -> f64 {
        let total = std::cell::Cell::new(0.0);
        let n = &self.natural;
        self.cover(
            x,
            &mut |first, last| {
                let (place, weights) = (&self.place[first..last], &self.rows[0][first..last]);
                let sum = match (n.kind, self.proportional) {
                    _ if n.power != 0.0 => sum_falling(place, weights, x, n, self.proportional),
                    (Kind::BreitWigner, false) => sum_breit_wigner(place, weights, x, n),
                    (Kind::Relativistic, false) => sum_relativistic(place, weights, x, n),
                    (Kind::RunningWidth, false) => sum_running(place, weights, x, n),
                    (Kind::BreitWigner, true) => sum_breit_wigner_proportional(place, weights, x, n),
                    (Kind::Relativistic, true) => sum_relativistic_proportional(place, weights, x, n),
                    (Kind::RunningWidth, true) => sum_running_proportional(place, weights, x, n),
                };
                total.set(n.amplitude * sum);
            },
            &mut |from, to| {
                // The largest that it can be: all of the natural shape under the higher end of the resolution.
                let nearest = self.bias.clamp(from, to);
                let bound = kernel::exp(ln_raw::<true>(&self.low, &self.high, nearest - self.bias)) * self.inverse_norm;
                if bound > NEGLIGIBLE * total.get() {
                    let (u, mut weight) = self.panel(from, to);
                    resolution_weights(&u, &mut weight, self);
                    let sum = u.iter().zip(&weight).map(|(&u, w)| w * self.density(self.true_mass(x, u))).sum::<f64>();
                    total.set(total.get() + sum);
                }
            },
        );
        total.get()
    }

    fn true_mass(&self, x: f64, u: f64) -> f64 {
        if self.proportional { x * self.shrink(u) } else { x - u }
    }

    fn density(&self, t: f64) -> f64 {
        let n = &self.natural;
        let (numerator, denominator) = fraction(n.kind, n, t);
        let falling = if n.power != 0.0 { falloff(n, t) } else { 1.0 };
        n.amplitude * falling * numerator / denominator
    }

    /// Density at x with its derivatives.
    pub(super) fn gradient(&self, convolution: &Convolution<'_>, x: f64) -> Gradient {
        let truth = convolution.truth;
        let count = convolution.resolution.parameter_count();
        let parts = std::cell::RefCell::new([0.0; COMPONENTS]);
        let add = |t: f64, value: f64, by: &dyn Fn(usize) -> f64| {
            let mut parts = parts.borrow_mut();
            let stretch = if self.proportional { self.mass / t } else { 1.0 };
            let [width, power] = truth.ln_gradient(t);
            parts[0] += value;
            parts[1] += value * width;
            parts[2] += value * power;
            parts[3] -= by(0) * stretch;
            for k in 0..count {
                parts[RESOLUTION_AT + k] += by(k);
            }
        };
        self.cover(
            x,
            &mut |first, last| {
                for i in first..last {
                    let t = if self.proportional { x * self.place[i] } else { x - self.place[i] };
                    let q = self.density(t);
                    add(t, self.rows[0][i] * q, &|k| self.rows[1 + k][i] * q);
                }
            },
            &mut |from, to| {
                let (u, weight) = self.panel(from, to);
                let mut own = [0.0; MAX_PARAMETERS];
                for (&u, weight) in u.iter().zip(&weight) {
                    let t = self.true_mass(x, u);
                    let r = libm::exp(convolution.resolution.ln_pdf_gradient(u, &mut own[..count]));
                    let value = weight * r * self.density(t);
                    add(t, value, &|k| value * own[k]);
                }
            },
        );
        let parts = parts.into_inner();
        let value = self.pdf(x);
        convolution.complete(x, value, parts[3], -value, &parts)
    }
}

/// The natural density at t over its strength, as a fraction.
#[inline(always)]
fn fraction(kind: Kind, n: &NaturalKernel, t: f64) -> (f64, f64) {
    let d = t - n.fixed_mass;
    let (numerator, denominator) = match kind {
        Kind::BreitWigner => (1.0, d * d + n.spread),
        Kind::Relativistic | Kind::RunningWidth => {
            let product = d * (t + n.fixed_mass);
            (if kind == Kind::RunningWidth { t * t } else { 1.0 }, product * product + n.spread)
        }
    };
    (numerator, denominator)
}

/// The production falloff at t.
#[inline(always)]
fn falloff(n: &NaturalKernel, t: f64) -> f64 {
    let ratio = t * n.inverse_mass;
    let ratio = if ratio > f64::MIN_POSITIVE { ratio } else { f64::MIN_POSITIVE };
    kernel::exp(-n.power * kernel::ln(ratio))
}

/// Sum of weights times densities over the strength; four lanes side by side, so that the additions vectorise, and always
/// in this order. Two terms share one division.
#[inline(always)]
fn sum<const FALLING: bool>(
    kind: Kind,
    proportional: bool,
    place: &[f64],
    weights: &[f64],
    x: f64,
    n: &NaturalKernel,
) -> f64 {
    let n = *n;
    let mut lanes = [0.0; 4];
    for (place, w) in place.chunks_exact(8).zip(weights.chunks_exact(8)) {
        for i in 0..4 {
            let (j, k) = (i, i + 4);
            let (s, t) = if proportional { (x * place[j], x * place[k]) } else { (x - place[j], x - place[k]) };
            let (a, b) = fraction(kind, &n, s);
            let (c, d) = fraction(kind, &n, t);
            let (mut a, mut c) = (w[j] * a, w[k] * c);
            if FALLING {
                a *= falloff(&n, s);
                c *= falloff(&n, t);
            }
            lanes[i] += (a * d + c * b) / (b * d);
        }
    }
    let [a, b, c, d] = lanes;
    (a + c) + (b + d)
}

/// A kernel with its choices made outside of the loop.
macro_rules! sums {
    ($($name:ident: $kind:ident, $proportional:literal;)*) => {
        $(crate::wide! {
            fn $name(place: &[f64], weights: &[f64], x: f64, n: &NaturalKernel) -> f64 {
                sum::<false>(Kind::$kind, $proportional, place, weights, x, n)
            }
        })*
    };
}

sums! {
    sum_breit_wigner: BreitWigner, false;
    sum_relativistic: Relativistic, false;
    sum_running: RunningWidth, false;
    sum_breit_wigner_proportional: BreitWigner, true;
    sum_relativistic_proportional: Relativistic, true;
    sum_running_proportional: RunningWidth, true;
}

crate::wide! {
    fn sum_falling(place: &[f64], weights: &[f64], x: f64, n: &NaturalKernel, proportional: bool) -> f64 {
        sum::<true>(n.kind, proportional, place, weights, x, n)
    }
}

crate::wide! {
    fn resolution_weights(u: &[f64; ORDER], weight: &mut [f64; ORDER], nodes: &SharedNodes) {
        let (low, high, bias) = (nodes.low, nodes.high, nodes.bias);
        for i in 0..ORDER {
            weight[i] *= nodes.inverse_norm * kernel::exp(ln_raw::<true>(&low, &high, u[i] - bias));
        }
    }
}
