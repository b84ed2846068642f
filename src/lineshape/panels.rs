//! Panels over the argument u of the resolution, for [`super::shared`].
//!
//! A panel of 16 Gauss-Legendre nodes is exact to about `rho^-32`, where rho is the sum of the half axes of the largest
//! ellipse around it, in units of its half length, in which the integrand is analytic (P. J. Davis and P. Rabinowitz,
//! Methods of Numerical Integration, 2nd ed. 1984, section 4.6). The lengths below keep rho above 2.4: 1e-12.

use super::convolution::Convolution;
use super::half::Tail;
use super::{Resolution, Shape};
use crate::numerics::quadrature::ORDER;

/// Beyond this many nodes the adaptive path is no slower.
const MAX_NODES: usize = 6000;
/// What may be left out, beside the smallest density in the window.
const LEFT_OUT: f64 = 1e-14;
/// A proportional resolution has no scale near x = 0; nodes begin at this part of the nominal mass.
const LEAST_PROPORTIONAL: f64 = 1e-3;

/// The points to serve, and where the poles of the natural shape fall in u for them.
#[derive(Clone, Copy, Debug)]
pub(super) struct Window {
    pub(super) low: f64,
    pub(super) high: f64,
    /// Range in u of the real part of the near pole.
    from: f64,
    to: f64,
    /// Its imaginary part, or its ratio to M + u for a proportional resolution.
    half: f64,
    /// An estimate from below of the smallest density.
    least: f64,
}

impl Window {
    /// The window of the points from `low` to `high`.
    pub(super) fn new(convolution: &Convolution<'_>, low: f64, high: f64) -> Option<Self> {
        let (truth, resolution) = (convolution.truth, convolution.resolution);
        let mass = truth.natural.mass();
        let low = if convolution.proportional { low.max(LEAST_PROPORTIONAL * mass) } else { low };
        if !(high > low) {
            return None;
        }
        let (from, to, half) = if convolution.proportional {
            // q(x M/(M + u)) has its pole a = A + iB at M + u = x M/a.
            let scale = mass * truth.centre / (truth.centre * truth.centre + truth.half * truth.half);
            (low * scale - mass, high * scale - mass, truth.half / truth.centre)
        } else {
            (low - truth.centre, high - truth.centre, truth.half)
        };
        // Either factor alone bounds the density from below, but for numbers of order 1.
        let least = |x: f64| truth.pdf_at(x - resolution.bias()).max(resolution.pdf(x - mass));
        Some(Window { low, high, from, to, half, least: 0.1 * least(low).min(least(high)) })
    }
}

/// Rising limits of the panels; `None` where there would be too many.
pub(super) fn limits(convolution: &Convolution<'_>, window: &Window) -> Option<Vec<f64>> {
    let resolution = convolution.resolution;
    let mut list = vec![resolution.bias()];
    if convolution.proportional && !(resolution.bias() > -convolution.truth.natural.mass()) {
        return None;
    }
    for up in [false, true] {
        let side = Side::new(convolution, window, up);
        let mut t = 0.0;
        loop {
            let next = side.next(t);
            if !(next > t) {
                return None;
            }
            t = next;
            list.push(side.u(t));
            if list.len() * ORDER > MAX_NODES {
                return None;
            }
            if side.ends(t) {
                break;
            }
        }
    }
    list.sort_by(f64::total_cmp);
    list.dedup();
    (list.len() > 1).then_some(list)
}

/// One side of the resolution; t is the distance from its peak in its sigma.
struct Side<'a> {
    convolution: &'a Convolution<'a>,
    resolution: &'a Resolution,
    window: &'a Window,
    up: bool,
    sigma: f64,
    tail: Tail,
    mass: f64,
}

impl<'a> Side<'a> {
    fn new(convolution: &'a Convolution<'a>, window: &'a Window, up: bool) -> Self {
        let resolution = convolution.resolution;
        let (low, high) = resolution.sigmas();
        let (sigma, tail) = if up { (high, resolution.high) } else { (low, resolution.low) };
        Side { convolution, resolution, window, up, sigma, tail, mass: convolution.truth.natural.mass() }
    }

    fn u(&self, t: f64) -> f64 {
        self.resolution.bias() + if self.up { self.sigma * t } else { -self.sigma * t }
    }

    /// The end of a panel that begins at t.
    fn next(&self, t: f64) -> f64 {
        let join = self.tail.join();
        let next = t + self.smooth(t).min(self.room(self.u(t)) / self.sigma);
        if t < join && next > join { join } else { next }
    }

    /// How far the resolution is smooth from t on.
    fn smooth(&self, t: f64) -> f64 {
        let join = self.tail.join();
        if t < join {
            return 1.5_f64.min(join - t);
        }
        match self.tail {
            Tail::None => 1.5,
            Tail::Power { alpha, n } => {
                // A power of the distance from its own pole.
                let distance = n / alpha + (t - join);
                distance.min(8.0 * distance / n)
            }
            Tail::Exponential { k } => 8.0 / k,
        }
    }

    /// How long a panel may be for the natural shape that begins at u.
    fn room(&self, u: f64) -> f64 {
        let w = self.window;
        let truth = self.convolution.truth;
        let nearest = u.clamp(w.from, w.to);
        let outside = (u - nearest).abs();
        // A panel that heads for the poles must stop before them; one that leaves them may grow with the distance.
        let heading = if self.up { u < w.from } else { u > w.to };
        let distance = if heading { 0.5 * outside } else { outside };
        let power = truth.power.unwrap_or(0.0);
        if self.convolution.proportional {
            let scale = self.mass + u;
            // The imaginary part shrinks with M + u; downwards the far end of the panel decides.
            let half = w.half * (self.mass + nearest);
            let inside = if self.up { 2.0 * half } else { 2.0 * half / (1.0 + 2.0 * w.half) };
            // M + u = 0 is singular.
            let own = if self.up { scale } else { 0.5 * scale };
            distance.max(inside).min(own).min(8.0 * scale / power.max(8.0))
        } else {
            let room = distance.max(2.0 * w.half);
            // t stays above 0 or the cut; beyond lie the mirrored pole and the origin of the falloff.
            let room = if self.up && truth.natural.poles().is_some() { room.min(2.0 * truth.centre) } else { room };
            if power > 0.0 { room.min(truth.lowest()).min(8.0 * truth.lowest() / power) } else { room }
        }
    }

    /// Whether what lies beyond t can be left out.
    fn ends(&self, t: f64) -> bool {
        let (u, w, truth) = (self.u(t), self.window, self.convolution.truth);
        let beyond = if self.up { self.resolution.sf(u) } else { self.resolution.cdf(u) };
        if beyond == 0.0 {
            return true;
        }
        // The densest that the natural shape becomes beyond.
        let (nearest, factor) = if self.convolution.proportional {
            let shrink = self.mass / (self.mass + u);
            (if self.up { w.high } else { w.low } * shrink, shrink)
        } else {
            ((if self.up { w.high } else { w.low }) - u, 1.0)
        };
        if self.up && nearest <= truth.lowest() || !self.up && nearest >= truth.highest() {
            return true;
        }
        if !self.up && self.convolution.proportional {
            // From here to u = -M, t rises without end: ∫ R q (M/t) dt, and q falls at least as 1/t².
            return nearest > truth.centre + truth.half
                && self.resolution.pdf(u) * self.mass * truth.pdf_at(nearest) < LEFT_OUT * w.least;
        }
        let past = if self.up { nearest < truth.centre - truth.half } else { nearest > truth.centre + truth.half };
        past && beyond * factor * truth.pdf_at(nearest) < LEFT_OUT * w.least
    }
}
