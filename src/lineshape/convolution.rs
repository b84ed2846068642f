//! Natural ⊗ resolution by adaptive panels: the reference path.
//!
//! `f(x) = ∫ q(t) K(x, t) dt` with `K = R(x - t)` for a constant resolution, and `K = (M/t) R((x - t) M/t)` for one that
//! grows with the true mass (its parameters hold at t = M). The variable is s with `t = centre + half sinh(s)`, in which a
//! pole of any width is a smooth peak of width 1; panels are split at the joins and along the core of the resolution.

use super::half::{SideKernel, Tail, ln_raw};
use super::true_mass::{Kind, NaturalKernel, TrueMass};
use super::{Resolution, Shape};
use crate::numerics::kernel;
use crate::numerics::quadrature::{Integral, NODES, ROOM, integrate};

/// Relative accuracy asked of the quadrature of a density; its error estimate is pessimistic.
const TOLERANCE: f64 = 1e-11;
/// Components of a gradient: value, width, power, slope in x, then the resolution.
pub(super) const RESOLUTION_AT: usize = 4;
pub(super) const COMPONENTS: usize = RESOLUTION_AT + super::resolution::MAX_PARAMETERS;

/// A value with its derivatives: in the natural parameters (mass, width, power) and in those of the resolution.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Gradient {
    pub(super) value: f64,
    pub(super) mass: f64,
    pub(super) width: f64,
    pub(super) power: f64,
    pub(super) resolution: [f64; super::resolution::MAX_PARAMETERS],
}

/// One natural shape with one resolution shape.
#[derive(Clone, Copy, Debug)]
pub(super) struct Convolution<'a> {
    pub(super) truth: &'a TrueMass,
    pub(super) resolution: &'a Resolution,
    pub(super) proportional: bool,
}

impl Convolution<'_> {
    /// Limits of the panels in s for the point x.
    fn breaks(&self, x: f64) -> Vec<f64> {
        let truth = self.truth;
        let start = truth.start();
        let mut list = Vec::with_capacity(40);
        let r = self.resolution;
        let (sigma_low, sigma_high) = r.sigmas();
        let mass = truth.natural.mass();
        let mut add = |u: f64| {
            let d = x - truth.centre - u;
            let d = if self.proportional {
                let stretch = 1.0 + u / mass;
                if stretch <= 0.0 {
                    return;
                }
                (x - truth.centre - truth.centre * (u / mass)) / stretch
            } else {
                d
            };
            if d.is_finite() {
                list.push(truth.level(d));
            }
        };
        if sigma_low != sigma_high {
            add(r.bias());
        }
        for (tail, step) in [(r.low, -sigma_low), (r.high, sigma_high)] {
            let join = tail.join();
            for t in [2.5, 5.0, 8.0, 13.0, 21.0, 38.0] {
                if t < 0.7 * join {
                    add(r.bias() + step * t);
                }
            }
            if join < 39.0 {
                add(r.bias() + step * join);
            }
            match tail {
                Tail::None => {}
                Tail::Power { alpha, n } => {
                    for factor in [2.0, 20.0] {
                        add(r.bias() + step * (join + factor * n / alpha));
                    }
                }
                Tail::Exponential { k } => {
                    for factor in [2.0, 7.0, 18.0, 40.0] {
                        add(r.bias() + step * (join + factor / k));
                    }
                }
            }
        }
        list.push(0.0);
        if self.proportional {
            // Near x = 0 the scale of t is x itself.
            list.extend([0.1, 1.0, 10.0].map(|factor| truth.level(factor * x.abs() - truth.centre)));
        }
        if truth.natural.poles().is_some() {
            // The mirrored pole bends the density at this distance.
            list.push(truth.level(truth.centre));
        }
        let low = list.iter().copied().fold(f64::INFINITY, f64::min);
        let high = list.iter().copied().fold(f64::NEG_INFINITY, f64::max);
        // Beyond the outermost break both factors fall by powers, exponentially in s; 40 is a factor 1e-17 per power.
        for (reach, sign) in [(high, 1.0), (low, -1.0)] {
            list.extend([1.0, 3.0, 8.0, 18.0, 40.0].map(|beyond| reach + sign * beyond));
        }
        if start.is_finite() {
            list.retain(|&s| s > start);
            list.push(start);
            // All may lie below the support, when x does.
            list.push(start + 1.0);
            list.push(start + 4.0);
            list.push(start + 45.0);
        }
        truth.cut_off(&mut list);
        list.dedup();
        if start.is_finite() {
            list[0] = start;
        }
        list
    }

    /// The resolution's argument at true mass t, and the factor of the density there.
    fn argument(&self, x: f64, t: f64) -> (f64, f64) {
        if self.proportional {
            // Rounding can carry t to 0 at the lower end, where the weight is 0.
            let stretch = self.truth.natural.mass() / t.max(1e-200);
            ((x - t) * stretch, stretch)
        } else {
            (x - t, 1.0)
        }
    }

    /// Density with its estimated error.
    pub(super) fn pdf(&self, x: f64) -> Integral<1> {
        let setup = PanelSetup::new(self, x);
        let breaks = self.breaks(x);
        if setup.power_tail {
            integrate::<1>(&breaks, TOLERANCE, |s, rows| density_panel_power(s, &mut rows[0], &setup))
        } else {
            integrate::<1>(&breaks, TOLERANCE, |s, rows| density_panel_plain(s, &mut rows[0], &setup))
        }
    }

    /// ln of the density, also where the density underflows (below the support of the true mass).
    pub(super) fn ln_pdf(&self, x: f64) -> f64 {
        let pdf = self.pdf(x).value[0];
        if pdf > 1e-280 {
            return libm::log(pdf);
        }
        // The resolution is largest at the lower end of the true mass; take its logarithm out of the integral.
        let lowest = self.truth.lowest();
        let nearest = if self.proportional || !lowest.is_finite() { lowest.max(0.0) + 1e-9 } else { lowest };
        let (u, stretch) = self.argument(x, nearest);
        let offset = self.resolution.ln_pdf(u) + libm::log(stretch);
        let mut breaks = self.breaks(x);
        // What remains falls within the distance in which the Gaussian falls by a factor e.
        let sigma = self.resolution.sigmas().0;
        let reach = sigma * sigma / (x - nearest).abs().max(1e-300);
        if lowest.is_finite() {
            breaks.extend([1.0, 5.0, 40.0].map(|f| self.truth.level(lowest + f * reach - self.truth.centre)));
            breaks.sort_by(f64::total_cmp);
        }
        let integral = integrate::<1>(&breaks, TOLERANCE, |s, rows| {
            for (slot, &s) in rows[0].iter_mut().zip(s).take(NODES) {
                let (t, weight) = self.truth.at(s);
                let (u, stretch) = self.argument(x, t);
                let ln_kernel = self.resolution.ln_pdf(u) + libm::log(stretch);
                *slot = if weight > 0.0 { weight * libm::exp(ln_kernel - offset) } else { 0.0 };
            }
        });
        offset + libm::log(integral.value[0])
    }

    /// Cumulative probability, or survival probability when `above`.
    pub(super) fn cdf(&self, x: f64, above: bool) -> f64 {
        let breaks = self.breaks(x);
        let integral = integrate::<1>(&breaks, TOLERANCE, |s, rows| {
            for (slot, &s) in rows[0].iter_mut().zip(s).take(NODES) {
                let (t, weight) = self.truth.at(s);
                let (u, _) = self.argument(x, t);
                *slot = weight * if above { self.resolution.sf(u) } else { self.resolution.cdf(u) };
            }
        });
        integral.value[0].clamp(0.0, 1.0)
    }

    /// Density and its derivatives.
    pub(super) fn pdf_gradient(&self, x: f64) -> Gradient {
        let breaks = self.breaks(x);
        let count = self.resolution.parameter_count();
        let integral = integrate::<COMPONENTS>(&breaks, 1e-9, |s, rows| {
            let mut own = [0.0; super::resolution::MAX_PARAMETERS];
            for (i, &s) in s.iter().enumerate().take(NODES) {
                let (t, weight) = self.truth.at(s);
                let (u, stretch) = self.argument(x, t);
                let value = weight * stretch * libm::exp(self.resolution.ln_pdf_gradient(u, &mut own[..count]));
                let [by_width, by_power] = if weight > 0.0 { self.truth.ln_gradient(t) } else { [0.0; 2] };
                rows[0][i] = value;
                rows[1][i] = value * by_width;
                rows[2][i] = value * by_power;
                rows[3][i] = -value * own[0] * stretch;
                for (k, &g) in own.iter().enumerate().take(count) {
                    rows[RESOLUTION_AT + k][i] = value * g;
                }
            }
        });
        let value = self.pdf(x).value[0];
        self.complete(x, value, integral.value[3], -value, &integral.value)
    }

    /// Cumulative probability (negative survival probability when `above`) and its derivatives.
    pub(super) fn cdf_gradient(&self, x: f64, above: bool) -> Gradient {
        let breaks = self.breaks(x);
        let count = self.resolution.parameter_count();
        let integral = integrate::<COMPONENTS>(&breaks, 1e-9, |s, rows| {
            let mut own = [0.0; super::resolution::MAX_PARAMETERS];
            for (i, &s) in s.iter().enumerate().take(NODES) {
                let (t, weight) = self.truth.at(s);
                let (u, _) = self.argument(x, t);
                let value = weight * if above { -self.resolution.sf(u) } else { self.resolution.cdf(u) };
                self.resolution.cdf_gradient(u, &mut own[..count]);
                let [by_width, by_power] = if weight > 0.0 { self.truth.ln_gradient(t) } else { [0.0; 2] };
                rows[0][i] = value;
                rows[1][i] = value * by_width;
                rows[2][i] = value * by_power;
                for (k, &g) in own.iter().enumerate().take(count) {
                    rows[RESOLUTION_AT + k][i] = weight * g;
                }
            }
        });
        let density = self.pdf(x).value[0];
        self.complete(x, integral.value[0], density, 0.0, &integral.value)
    }

    /// The derivative in the mass. When x, mass, width, bias and sigma are all scaled alike, a density falls by that
    /// scale and a probability stays: `x f' + M ∂_M f + Γ ∂_Γ f + Σ ... = degree`.
    pub(super) fn complete(&self, x: f64, value: f64, slope: f64, degree: f64, parts: &[f64; COMPONENTS]) -> Gradient {
        let mut resolution = [0.0; super::resolution::MAX_PARAMETERS];
        resolution.copy_from_slice(&parts[RESOLUTION_AT..]);
        let mass = self.by_mass(x, slope, degree, parts[1], &resolution);
        Gradient { value, mass, width: parts[1], power: parts[2], resolution }
    }

    fn by_mass(
        &self,
        x: f64,
        slope: f64,
        degree: f64,
        by_width: f64,
        resolution: &[f64; super::resolution::MAX_PARAMETERS],
    ) -> f64 {
        let plain = !self.proportional && self.truth.cut.is_none() && self.truth.natural.poles().is_none();
        if plain {
            // A shift of the mass is a shift of the bias.
            return resolution[0];
        }
        let r = self.resolution;
        let (sigma_low, sigma_high) = r.sigmas();
        let mut scaled = x * slope + self.truth.natural.width() * by_width + r.bias() * resolution[0];
        scaled += sigma_low * resolution[1];
        if !r.one_sigma {
            scaled += sigma_high * resolution[2];
        }
        (degree - scaled) / self.truth.natural.mass()
    }
}

/// What a panel of the density needs, worked out once per point.
pub(super) struct PanelSetup {
    natural: NaturalKernel,
    low: SideKernel,
    high: SideKernel,
    bias: f64,
    inverse_norm: f64,
    /// x minus the centre of the natural shape.
    offset: f64,
    proportional: bool,
    power_tail: bool,
}

impl PanelSetup {
    fn new(convolution: &Convolution<'_>, x: f64) -> Self {
        let r = convolution.resolution;
        let natural = convolution.truth.kernel();
        PanelSetup {
            natural,
            low: SideKernel::new(r.sigmas().0, r.low),
            high: SideKernel::new(r.sigmas().1, r.high),
            bias: r.bias(),
            inverse_norm: 1.0 / r.norm(),
            offset: x - natural.centre,
            proportional: convolution.proportional,
            power_tail: [r.low, r.high].iter().any(|tail| matches!(tail, Tail::Power { .. })),
        }
    }
}

crate::wide! {
    fn density_panel_power(s: &[f64; ROOM], out: &mut [f64; ROOM], setup: &PanelSetup) {
        density_panel::<true>(s, out, setup);
    }
}

crate::wide! {
    fn density_panel_plain(s: &[f64; ROOM], out: &mut [f64; ROOM], setup: &PanelSetup) {
        density_panel::<false>(s, out, setup);
    }
}

#[inline(always)]
fn density_panel<const POWER: bool>(s: &[f64; ROOM], out: &mut [f64; ROOM], setup: &PanelSetup) {
    let n = setup.natural;
    let (poles, squared) = (n.kind != Kind::BreitWigner, n.kind == Kind::RunningWidth);
    let mut d = [0.0; ROOM];
    for i in 0..ROOM {
        let e = 0.5 * kernel::exp(s[i]);
        let (sinh, cosh) = (e - 0.25 / e, e + 0.25 / e);
        d[i] = n.half * sinh;
        // Breit-Wigner: (1/π) / cosh(s) per ds.
        out[i] = if poles { n.half * cosh } else { n.strength / cosh };
    }
    if poles {
        for i in 0..ROOM {
            let (t, b) = (n.centre + d[i], n.half);
            let mirrored = (t + n.centre) * (t + n.centre) + b * b;
            let numerator = if squared { n.strength * t * t } else { n.strength };
            let density = numerator / ((d[i] * d[i] + b * b) * mirrored);
            out[i] *= if t > 0.0 { density } else { 0.0 };
        }
    }
    if n.power != 0.0 {
        for i in 0..ROOM {
            let ratio = ((n.centre + d[i]) * n.inverse_mass).max(f64::MIN_POSITIVE);
            out[i] *= kernel::exp(-n.power * kernel::ln(ratio));
        }
    }
    if setup.proportional {
        for i in 0..ROOM {
            let stretch = 1.0 / ((n.centre + d[i]).max(f64::MIN_POSITIVE) * n.inverse_mass);
            let w = (setup.offset - d[i]) * stretch - setup.bias;
            let r = kernel::exp(ln_raw::<POWER>(&setup.low, &setup.high, w));
            out[i] *= r * setup.inverse_norm * stretch;
        }
    } else {
        for i in 0..ROOM {
            let w = (setup.offset - d[i]) - setup.bias;
            let r = kernel::exp(ln_raw::<POWER>(&setup.low, &setup.high, w));
            out[i] *= r * setup.inverse_norm;
        }
    }
}
