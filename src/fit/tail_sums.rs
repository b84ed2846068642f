//! Sums over the masses in one tail, and what they give for the likelihood.
//!
//! With `u = 1 + (alpha/n)(t - alpha)` and `v = 1/u`, everything that the likelihood of a power tail and its first and
//! second derivatives ask of the masses is in four sums: of w, w ln u, w v and w v². An exponential tail asks for w and
//! w t only.

use crate::numerics::kernel::ln;

const LANES: usize = 8;

/// Sums over the masses in a power tail.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct PowerSums {
    pub weight: f64,
    pub ln_u: f64,
    pub v: f64,
    pub v2: f64,
}

/// The contribution of one side to `-ln L`, without normalisation, with derivatives in peak, sigma and two of the tail.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Part {
    pub value: f64,
    pub gradient: [f64; 4],
    pub hessian: [[f64; 4]; 4],
}

impl Part {
    pub fn add(&mut self, other: &Part) {
        self.value += other.value;
        for i in 0..4 {
            self.gradient[i] += other.gradient[i];
            for j in 0..4 {
                self.hessian[i][j] += other.hessian[i][j];
            }
        }
    }

    fn set(&mut self, i: usize, j: usize, value: f64) {
        self.hessian[i][j] = value;
        self.hessian[j][i] = value;
    }
}

/// `a + b v`, of which products are summed.
#[derive(Clone, Copy)]
struct Linear(f64, f64);

impl PowerSums {
    fn one(&self, a: Linear) -> f64 {
        a.0 * self.weight + a.1 * self.v
    }

    fn two(&self, a: Linear, b: Linear) -> f64 {
        a.0 * b.0 * self.weight + (a.0 * b.1 + a.1 * b.0) * self.v + a.1 * b.1 * self.v2
    }

    /// A power tail; `sign` is -1 below the peak and 1 above it.
    pub fn part(&self, sign: f64, sigma: f64, alpha: f64, n: f64) -> Part {
        // φ = alpha²/2 + n ln u and its derivatives in t, alpha and n; vt and vs are v t and v (t - 2 alpha).
        let ratio = alpha / n;
        let v = Linear(0.0, 1.0);
        let rest = Linear(1.0, -1.0);
        let vt = Linear(1.0 / ratio, alpha - 1.0 / ratio);
        let vs = Linear(1.0 / ratio, -alpha - 1.0 / ratio);
        let inverse = 1.0 / sigma;
        let mut part = Part { value: 0.5 * alpha * alpha * self.weight + n * self.ln_u, ..Part::default() };
        let slope = alpha * self.v;
        let slope_t = alpha * self.one(vt);
        part.gradient = [
            -sign * slope * inverse,
            -slope_t * inverse,
            alpha * self.weight + self.one(vs),
            self.ln_u - self.weight + self.v,
        ];
        // φ_tt = -(alpha²/n) v²; t moves with the peak as -sign/sigma, with sigma as -t/sigma.
        let bend = -alpha * ratio;
        let square = inverse * inverse;
        part.set(0, 0, square * bend * self.v2);
        part.set(0, 1, sign * square * (bend * self.two(v, vt) + slope));
        part.set(1, 1, square * (bend * self.two(vt, vt) + 2.0 * slope_t));
        // φ_t alpha = v - (alpha/n) v² (t - 2 alpha), φ_tn = (alpha/n)(v - v²).
        part.set(0, 2, -sign * inverse * (self.v - ratio * self.two(v, vs)));
        part.set(1, 2, -inverse * (self.one(vt) - ratio * self.two(vt, vs)));
        part.set(0, 3, -sign * inverse * ratio * self.two(v, rest));
        part.set(1, 3, -inverse * ratio * self.two(vt, rest));
        part.set(2, 2, self.one(Linear(1.0, -2.0)) - self.two(vs, vs) / n);
        part.set(2, 3, self.two(vs, rest) / n);
        part.set(3, 3, -self.two(rest, rest) / n);
        part
    }
}

/// Sums of w, w d and w d² of the distances d from one point.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Moments {
    pub weight: f64,
    pub first: f64,
    pub second: f64,
}

impl Moments {
    /// The same about a point that lies `shift` further up.
    pub fn moved(&self, shift: f64) -> Moments {
        Moments {
            weight: self.weight,
            first: self.first - shift * self.weight,
            second: self.second - 2.0 * shift * self.first + shift * shift * self.weight,
        }
    }

    /// A Gaussian core around the peak about which the moments are.
    pub fn core(&self, sigma: f64) -> Part {
        let square = 1.0 / (sigma * sigma);
        let mut part = Part { value: 0.5 * square * self.second, ..Part::default() };
        part.gradient[0] = -square * self.first;
        part.gradient[1] = -square * self.second / sigma;
        part.set(0, 0, square * self.weight);
        part.set(0, 1, 2.0 * square * self.first / sigma);
        part.set(1, 1, 3.0 * square * square * self.second);
        part
    }

    /// An exponential tail `k t - k²/2` with `t = sign d/sigma`.
    pub fn exponential(&self, sign: f64, sigma: f64, k: f64) -> Part {
        let inverse = 1.0 / sigma;
        let t = sign * self.first * inverse;
        let mut part = Part { value: k * t - 0.5 * k * k * self.weight, ..Part::default() };
        part.gradient[0] = -sign * k * self.weight * inverse;
        part.gradient[1] = -k * t * inverse;
        part.gradient[2] = t - k * self.weight;
        part.set(0, 1, sign * k * self.weight * inverse * inverse);
        part.set(1, 1, 2.0 * k * t * inverse * inverse);
        part.set(0, 2, -sign * self.weight * inverse);
        part.set(1, 2, -t * inverse);
        part.set(2, 2, -self.weight);
        part
    }
}

crate::wide! {
    /// Sums over a power tail: `u = offset + scale m` of each mass.
    pub(super) fn power_sums(m: &[f64], offset: f64, scale: f64) -> PowerSums {
        let (mut l, mut a, mut b) = ([0.0; LANES], [0.0; LANES], [0.0; LANES]);
        let (rows, rest) = m.as_chunks::<LANES>();
        for m in rows {
            for i in 0..LANES {
                // At the join rounding can bring u below 1.
                let u = offset + scale * m[i];
                let u = if u > 1.0 { u } else { 1.0 };
                let v = 1.0 / u;
                l[i] += ln(u);
                a[i] += v;
                b[i] += v * v;
            }
        }
        let mut sums = PowerSums { weight: m.len() as f64, ln_u: l.iter().sum(), v: a.iter().sum(), v2: b.iter().sum() };
        for m in rest {
            let u = (offset + scale * m).max(1.0);
            sums.ln_u += ln(u);
            sums.v += 1.0 / u;
            sums.v2 += 1.0 / (u * u);
        }
        sums
    }
}

crate::wide! {
    /// The same with weights.
    pub(super) fn weighted_power_sums(m: &[f64], w: &[f64], offset: f64, scale: f64) -> PowerSums {
        let (mut s, mut l, mut a, mut b) = ([0.0; LANES], [0.0; LANES], [0.0; LANES], [0.0; LANES]);
        let (rows, rest) = m.as_chunks::<LANES>();
        let (w_rows, w_rest) = w.as_chunks::<LANES>();
        for (m, w) in rows.iter().zip(w_rows) {
            for i in 0..LANES {
                let u = offset + scale * m[i];
                let u = if u > 1.0 { u } else { 1.0 };
                let v = 1.0 / u;
                s[i] += w[i];
                l[i] += w[i] * ln(u);
                a[i] += w[i] * v;
                b[i] += w[i] * (v * v);
            }
        }
        let total = |lanes: [f64; LANES]| lanes.iter().sum::<f64>();
        let mut sums = PowerSums { weight: total(s), ln_u: total(l), v: total(a), v2: total(b) };
        for (m, w) in rest.iter().zip(w_rest) {
            let u = (offset + scale * m).max(1.0);
            sums.weight += w;
            sums.ln_u += w * ln(u);
            sums.v += w / u;
            sums.v2 += w / (u * u);
        }
        sums
    }
}
