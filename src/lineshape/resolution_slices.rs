//! Vector kernels of the resolution shapes.

use std::f64::consts::FRAC_1_SQRT_2;

use super::half::{ROOT_HALF_PI, SideKernel, Tail, ln_raw};
use crate::numerics::erfc::erfc;
use crate::numerics::kernel::{exp, ln};

/// Points that a gradient works on together.
pub(super) const BLOCK: usize = 256;

/// One of each for shapes with a power tail and without: the logarithm is needed only there.
macro_rules! both {
    ($(#[$meta:meta])* $power:ident, $plain:ident, $body:ident, ($($arg:ident: $ty:ty),*)) => {
        crate::wide! {
            $(#[$meta])*
            pub(super) fn $power($($arg: $ty),*) { $body::<true>($($arg),*); }
        }
        crate::wide! {
            $(#[$meta])*
            pub(super) fn $plain($($arg: $ty),*) { $body::<false>($($arg),*); }
        }
    };
}

crate::wide! {
    pub(super) fn pdf_plain(m: &[f64], out: &mut [f64], bias: f64, low: &SideKernel, high: &SideKernel, factor: f64) {
        let (low, high) = (*low, *high);
        for (value, &m) in out.iter_mut().zip(m) {
            *value = factor * exp(ln_raw::<false>(&low, &high, m - bias));
        }
    }
}

crate::wide! {
    /// Densities with a power tail. Each block is sorted into low tail, core and high tail, so that no point pays for
    /// what it does not need.
    pub(super) fn pdf_power(m: &[f64], out: &mut [f64], bias: f64, low: &SideKernel, high: &SideKernel, factor: f64) {
        let (low, high) = (*low, *high);
        for (m, out) in m.chunks(BLOCK).zip(out.chunks_mut(BLOCK)) {
            let count = m.len().min(out.len());
            let mut t = [0.0; BLOCK];
            for (t, &m) in t.iter_mut().zip(&m[..count]) {
                let w = m - bias;
                *t = w * if w < 0.0 { low.inverse_sigma } else { high.inverse_sigma };
            }
            // NaN counts as core and stays NaN there.
            let (mut in_low, mut in_high) = (0_usize, 0_usize);
            for &t in &t[..count] {
                in_low += usize::from(t < -low.join);
                in_high += usize::from(t > high.join);
            }
            let (core_start, high_start) = (in_low, count - in_high);
            let (mut a, mut b, mut c) = (0, core_start, high_start);
            let mut sorted = [0.0; BLOCK];
            let mut place = [0_u8; BLOCK];
            for (i, &t) in t.iter().enumerate().take(count) {
                let (is_low, is_high) = (t < -low.join, t > high.join);
                let slot = if is_low { a } else if is_high { c } else { b };
                a += usize::from(is_low);
                c += usize::from(is_high);
                b += usize::from(!(is_low | is_high));
                sorted[slot & (BLOCK - 1)] = t.abs();
                place[slot & (BLOCK - 1)] = i as u8;
            }
            tail_densities(&mut sorted[..core_start], &low);
            tail_densities(&mut sorted[high_start..count], &high);
            for t in &mut sorted[core_start..high_start] {
                *t = exp(-0.5 * *t * *t);
            }
            for (&place, &value) in place.iter().zip(&sorted).take(count) {
                out[usize::from(place) & (BLOCK - 1)] = factor * value;
            }
        }
    }
}

/// Replaces distances beyond the join by raw densities.
#[inline(always)]
fn tail_densities(t: &mut [f64], side: &SideKernel) {
    if t.is_empty() {
        return;
    }
    let (front, power) = (libm::exp(side.constant), side.power);
    if power > 0.0 && power <= 64.0 && power == power.trunc() && front > 1e-200 {
        // An integer power needs no logarithm: squares and products of 1/u.
        for t in t.iter_mut() {
            *t = 1.0 / (1.0 + side.ratio * (*t - side.join));
        }
        let mut bits = power as u32;
        let mut product = [0.0; BLOCK];
        let product = &mut product[..t.len()];
        product.fill(front);
        while bits > 0 {
            if bits & 1 == 1 {
                for (product, t) in product.iter_mut().zip(t.iter()) {
                    *product *= *t;
                }
            }
            bits >>= 1;
            if bits > 0 {
                for t in t.iter_mut() {
                    *t *= *t;
                }
            }
        }
        t.copy_from_slice(product);
        return;
    }
    for t in t.iter_mut() {
        let mut exponent = side.constant - side.slope * *t;
        if power > 0.0 {
            exponent -= power * ln(1.0 + side.ratio * (*t - side.join));
        }
        *t = exponent;
    }
    for t in t.iter_mut() {
        *t = exp(*t);
    }
}

both!(ln_pdf_power, ln_pdf_plain, ln_pdf, (m: &[f64], out: &mut [f64], bias: f64, low: &SideKernel, high: &SideKernel, ln_norm: f64));

#[inline(always)]
fn ln_pdf<const POWER: bool>(m: &[f64], out: &mut [f64], bias: f64, low: &SideKernel, high: &SideKernel, ln_norm: f64) {
    let (low, high) = (*low, *high);
    for (value, &m) in out.iter_mut().zip(m) {
        *value = ln_raw::<POWER>(&low, &high, m - bias) - ln_norm;
    }
}

/// Probabilities beyond a point of one side: `core (erfc(t/√2) - erfc(join/√2)) + tail` up to the join, and the tail
/// integral beyond, `exp(...)` times `outer`.
#[derive(Clone, Copy, Debug)]
pub(super) struct SideArea {
    core: f64,
    at_join: f64,
    tail: f64,
    outer: f64,
}

impl SideArea {
    /// `share` is sigma/norm of the side.
    pub(super) fn new(share: f64, tail: Tail) -> Self {
        let outer = match tail {
            Tail::None => 0.0,
            Tail::Power { alpha, n } => (n / alpha) / (n - 1.0),
            Tail::Exponential { k } => 1.0 / k,
        };
        let at_join = if tail == Tail::None { 0.0 } else { libm::erfc(tail.join() * FRAC_1_SQRT_2) };
        let core = ROOT_HALF_PI * share;
        let tail_area = if tail == Tail::None { 0.0 } else { tail.beyond(tail.join()) };
        SideArea { core, at_join, tail: share * tail_area, outer: share * outer }
    }
}

both!(probability_power, probability_plain, probability, (m: &[f64], out: &mut [f64], bias: f64, sides: (&SideKernel, &SideKernel), areas: (&SideArea, &SideArea), from_below: bool));

#[inline(always)]
fn probability<const POWER: bool>(
    m: &[f64],
    out: &mut [f64],
    bias: f64,
    sides: (&SideKernel, &SideKernel),
    areas: (&SideArea, &SideArea),
    from_below: bool,
) {
    let (low, high) = (*sides.0, *sides.1);
    let (low_area, high_area) = (*areas.0, *areas.1);
    for (value, &m) in out.iter_mut().zip(m) {
        let w = m - bias;
        let below = w < 0.0;
        let (side, area) = if below { (low, low_area) } else { (high, high_area) };
        let t = w.abs() * side.inverse_sigma;
        let core = area.core * (erfc(t * FRAC_1_SQRT_2) - area.at_join) + area.tail;
        let mut exponent = side.constant - side.slope * t;
        if POWER {
            let excess = t - side.join;
            let excess = if excess > 0.0 { excess } else { 0.0 };
            exponent -= (side.power - 1.0) * ln(1.0 + side.ratio * excess);
        }
        let beyond = if t <= side.join { core } else { area.outer * exp(exponent) };
        *value = if below == from_below { beyond } else { 1.0 - beyond };
    }
}

/// What the gradient of ln pdf needs besides the point.
pub(super) struct GradientConstants {
    pub(super) bias: f64,
    pub(super) ln_norm: f64,
    /// Derivatives of ln norm in bias (0), the sigmas and the tails.
    pub(super) by_norm: [f64; 7],
    pub(super) low: SideKernel,
    pub(super) high: SideKernel,
}

both!(gradient_power, gradient_plain, gradient, (m: &[f64], ln_pdf: &mut [f64], rows: &mut [[f64; BLOCK]; 7], constants: &GradientConstants));

#[inline(always)]
fn gradient<const POWER: bool>(
    m: &[f64],
    ln_pdf: &mut [f64],
    rows: &mut [[f64; BLOCK]; 7],
    constants: &GradientConstants,
) {
    let (low, high, bias, ln_norm, by_norm) =
        (constants.low, constants.high, constants.bias, constants.ln_norm, constants.by_norm);
    let [bias_row, sigma_low, sigma_high, low1, low2, high1, high2] = rows;
    let count = m.len().min(ln_pdf.len()).min(BLOCK);
    for i in 0..count {
        let w = m[i] - bias;
        let below = w < 0.0;
        let side = if below { low } else { high };
        let t = w.abs() * side.inverse_sigma;
        let in_core = t <= side.join;
        let excess = t - side.join;
        let excess = if excess > 0.0 { excess } else { 0.0 };
        let mut tail = side.constant - side.slope * t;
        // Exponential tail: slope -k, derivative in k is k - t.
        let mut slope = -side.slope;
        let (mut first, mut second) = (if side.slope > 0.0 { side.slope - t } else { 0.0 }, 0.0);
        if POWER {
            let r = side.ratio * excess;
            let u = 1.0 + r;
            let inverse = 1.0 / u;
            let ln_u = ln(u);
            tail -= side.power * ln_u;
            // With alpha = n ratio: slope -alpha/u; derivatives -(t - alpha)(1 + alpha ratio)/u and r/u - ln u.
            let alpha = side.power * side.ratio;
            slope -= alpha * inverse;
            first -= excess * (1.0 + alpha * side.ratio) * inverse * if side.power > 0.0 { 1.0 } else { 0.0 };
            second += r * inverse - ln_u;
        }
        let value = if in_core { -0.5 * t * t } else { tail };
        let slope = if in_core { -t } else { slope };
        let first = if in_core { 0.0 } else { first };
        let second = if in_core { 0.0 } else { second };
        let by_bias = slope * side.inverse_sigma;
        let by_sigma = -t * by_bias;
        ln_pdf[i] = value - ln_norm;
        bias_row[i] = if below { by_bias } else { -by_bias };
        sigma_low[i] = if below { by_sigma } else { 0.0 } - by_norm[1];
        sigma_high[i] = if below { 0.0 } else { by_sigma } - by_norm[2];
        low1[i] = if below { first } else { 0.0 } - by_norm[3];
        low2[i] = if below { second } else { 0.0 } - by_norm[4];
        high1[i] = if below { 0.0 } else { first } - by_norm[5];
        high2[i] = if below { 0.0 } else { second } - by_norm[6];
    }
}
