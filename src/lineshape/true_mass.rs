//! The distribution of the true mass inside a convolution: a natural shape, cut and weighted where asked.

use super::pole_pair::Numerator;
use super::{Natural, ShapeError};
use crate::numerics::quadrature;

/// With a production falloff the true mass lies in this range, in units of the nominal mass: a power law says nothing
/// about production further away, and would not be integrable at 0.
pub const FALLOFF_RANGE: (f64, f64) = (0.5, 2.0);

/// `q(t) (t/M)^-power / Z` on `t > cut M` (or where the natural shape q lives).
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct TrueMass {
    pub(super) natural: Natural,
    /// Lower end in units of M; `None` for the natural shape's own support.
    pub(super) cut: Option<f64>,
    pub(super) power: Option<f64>,
    /// The normalisation integral Z.
    norm: f64,
    ln_norm_by_width: f64,
    ln_norm_by_power: f64,
    /// The map `t = centre + half sinh(s)` that levels the peak.
    pub(super) centre: f64,
    pub(super) half: f64,
}

impl TrueMass {
    /// Normalises; `natural` must not be a line.
    pub(super) fn new(natural: Natural, cut: Option<f64>, power: Option<f64>) -> Result<Self, ShapeError> {
        let (centre, half) = match natural.poles() {
            Some(poles) => {
                let pole = poles.pole();
                (pole.re, pole.im)
            }
            None => (natural.mass(), 0.5 * natural.width()),
        };
        let mut truth =
            TrueMass { natural, cut, power, norm: 1.0, ln_norm_by_width: 0.0, ln_norm_by_power: 0.0, centre, half };
        if cut.is_some() || power.is_some() {
            let start = truth.start();
            let mut breaks = vec![start];
            breaks.extend([-3.0, 0.0, 3.0].iter().copied().filter(|&s| s > start));
            let end = breaks[breaks.len() - 1].max(truth.level(2.0 * centre.abs())) + 45.0;
            breaks.extend([end - 42.0, end - 30.0, end]);
            truth.cut_off(&mut breaks);
            let integral = quadrature::integrate::<3>(&breaks, 1e-12, |s, rows| {
                for (i, &s) in s.iter().enumerate().take(quadrature::NODES) {
                    let (t, weight) = truth.at(s);
                    let [by_width, by_power] = truth.ln_gradient(t);
                    rows[0][i] = weight;
                    rows[1][i] = weight * by_width;
                    rows[2][i] = weight * by_power;
                }
            });
            let norm = integral.value[0];
            if !(norm > 0.0 && norm.is_finite()) {
                return Err(ShapeError::Normalisation(norm));
            }
            truth.norm = norm;
            truth.ln_norm_by_width = integral.value[1] / norm;
            truth.ln_norm_by_power = integral.value[2] / norm;
        }
        Ok(truth)
    }

    /// Lower end of the true mass in GeV.
    pub(super) fn lowest(&self) -> f64 {
        match (self.cut, self.natural.poles().is_some()) {
            (Some(cut), _) => cut * self.natural.mass(),
            (None, true) => 0.0,
            (None, false) => f64::NEG_INFINITY,
        }
    }

    /// The s of a distance from the centre.
    pub(super) fn level(&self, d: f64) -> f64 {
        libm::asinh(d / self.half)
    }

    /// The s of the lower end.
    pub(super) fn start(&self) -> f64 {
        let lowest = self.lowest();
        if lowest.is_finite() { self.level(lowest - self.centre) } else { f64::NEG_INFINITY }
    }

    /// Upper end of the true mass in GeV.
    pub(super) fn highest(&self) -> f64 {
        if self.power.is_some() { FALLOFF_RANGE.1 * self.natural.mass() } else { f64::INFINITY }
    }

    /// Sorts limits of panels and ends them at the upper end.
    pub(super) fn cut_off(&self, limits: &mut Vec<f64>) {
        let highest = self.highest();
        if highest.is_finite() {
            let end = self.level(highest - self.centre);
            limits.retain(|&s| s < end);
            limits.push(end);
        }
        limits.sort_by(f64::total_cmp);
    }

    /// Mass t and density per ds.
    pub(super) fn at(&self, s: f64) -> (f64, f64) {
        let t = self.centre + self.half * libm::sinh(s);
        (t, self.pdf(t, self.half * libm::sinh(s)) * self.half * libm::cosh(s))
    }

    /// Density per dt, from t and its distance d from the centre.
    fn pdf(&self, t: f64, d: f64) -> f64 {
        let q = match self.natural.poles() {
            // With a = A + iB: |t² - a²|² = ((t - A)² + B²) ((t + A)² + B²).
            Some(poles) => {
                let (a, b) = (self.centre, self.half);
                let numerator = match poles.numerator {
                    Numerator::Constant => 1.0,
                    Numerator::MassSquared => t * t,
                };
                if t <= 0.0 {
                    0.0
                } else {
                    poles.constants().0 * numerator / ((d * d + b * b) * ((t + a) * (t + a) + b * b))
                }
            }
            None => self.half / (std::f64::consts::PI * (d * d + self.half * self.half)),
        };
        let falloff = match self.power {
            Some(power) => libm::pow(t / self.natural.mass(), -power),
            None => 1.0,
        };
        q * falloff / self.norm
    }

    /// Derivatives of ln density in width and power.
    pub(super) fn ln_gradient(&self, t: f64) -> [f64; 2] {
        let by_width = match self.natural.poles() {
            Some(poles) => poles.ln_pdf_gradient(t)[2],
            None => {
                let d = t - self.centre;
                let square = self.half * self.half;
                0.5 / self.half * (d * d - square) / (d * d + square)
            }
        };
        let by_power = match self.power {
            Some(_) => -libm::log(t / self.natural.mass()),
            None => 0.0,
        };
        [by_width - self.ln_norm_by_width, by_power - self.ln_norm_by_power]
    }

    /// Density at t.
    pub(super) fn pdf_at(&self, t: f64) -> f64 {
        if t.is_nan() {
            t
        } else if t <= self.lowest() || t > self.highest() {
            0.0
        } else {
            self.pdf(t, t - self.centre)
        }
    }

    /// Derivative of ln density in t.
    pub(super) fn ln_slope(&self, t: f64) -> f64 {
        let natural = match self.natural.poles() {
            Some(poles) => poles.ln_pdf_gradient(t)[0],
            None => {
                let d = t - self.centre;
                -2.0 * d / (d * d + self.half * self.half)
            }
        };
        natural - self.power.unwrap_or(0.0) / t
    }

    /// Limits in s of the part below or above t.
    fn limits(&self, t: f64, above: bool) -> Vec<f64> {
        let (start, at) = (self.start(), self.level(t - self.centre));
        let mut list: Vec<f64> = [-20.0, -8.0, -3.0, 0.0, 3.0, 8.0, 20.0].to_vec();
        list.push(self.level(self.centre));
        let (low, high) =
            if above { (at.max(start), at.max(start).max(self.level(self.centre)) + 45.0) } else { (start, at) };
        list.retain(|&s| s > low && s < high);
        list.extend([low, high]);
        if above {
            list.extend([high - 42.0, high - 30.0].iter().filter(|&&s| s > low));
            self.cut_off(&mut list);
        }
        list.sort_by(f64::total_cmp);
        list
    }

    /// Probability below t, or above; for shapes with a lower end.
    pub(super) fn integral(&self, t: f64, above: bool) -> f64 {
        if t <= self.lowest() || t >= self.highest() {
            return f64::from(u8::from(above == (t <= self.lowest())));
        }
        let integral = quadrature::integrate::<1>(&self.limits(t, above), 1e-12, |s, rows| {
            for (slot, &s) in rows[0].iter_mut().zip(s).take(quadrature::NODES) {
                *slot = self.at(s).1;
            }
        });
        integral.value[0].clamp(0.0, 1.0)
    }

    /// Derivatives of the probability below t in width and power.
    pub(super) fn integral_gradient(&self, t: f64) -> [f64; 2] {
        if t <= self.lowest() || t >= self.highest() {
            return [0.0; 2];
        }
        let above = t > self.centre;
        let integral = quadrature::integrate::<2>(&self.limits(t, above), 1e-10, |s, rows| {
            for (i, &s) in s.iter().enumerate().take(quadrature::NODES) {
                let (t, weight) = self.at(s);
                let [width, power] = self.ln_gradient(t);
                rows[0][i] = weight * width;
                rows[1][i] = weight * power;
            }
        });
        integral.value.map(|v| if above { -v } else { v })
    }

    /// Mean of the true mass; `None` where it does not exist, or (with a falloff) has no closed form of ours.
    pub(super) fn mean(&self) -> Option<f64> {
        if self.power.is_some() || self.cut.is_some() {
            return self.moment(1);
        }
        self.natural.shape()?.mean()
    }

    /// Variance of the true mass; as [`TrueMass::mean`].
    pub(super) fn variance(&self) -> Option<f64> {
        if self.power.is_some() || self.cut.is_some() {
            let mean = self.moment(1)?;
            return self.moment(2).map(|second| second - mean * mean);
        }
        self.natural.shape()?.variance()
    }

    /// The integral of t or t² where the density falls fast enough, as t^-2 (Breit-Wigner and running width) or t^-4, or
    /// ends.
    fn moment(&self, order: i32) -> Option<f64> {
        let fixed = self.natural.poles().is_some_and(|poles| poles.numerator == Numerator::Constant);
        let fall = if self.power.is_some() {
            f64::INFINITY
        } else if fixed {
            4.0
        } else {
            2.0
        };
        if fall <= f64::from(order) + 1.0 {
            return None;
        }
        // The integrand falls as exp(-(fall - order - 1) s): reach far enough for a slow fall.
        let mut limits = self.limits(self.lowest(), true);
        let end = limits[limits.len() - 1];
        if self.power.is_none() {
            limits.push(end + (40.0 / (fall - f64::from(order) - 1.0)).min(500.0));
        }
        let integral = quadrature::integrate::<1>(&limits, 1e-12, |s, rows| {
            for (slot, &s) in rows[0].iter_mut().zip(s).take(quadrature::NODES) {
                let (t, weight) = self.at(s);
                *slot = weight * if order == 1 { t } else { t * t };
            }
        });
        Some(integral.value[0])
    }

    /// Constants of the vector kernels.
    pub(super) fn kernel(&self) -> NaturalKernel {
        let (kind, strength, fixed_mass, spread) = match self.natural.poles() {
            Some(poles) => {
                let (strength, fixed_mass, spread) = poles.constants();
                let squared = poles.numerator == Numerator::MassSquared;
                (if squared { Kind::RunningWidth } else { Kind::Relativistic }, strength, fixed_mass, spread)
            }
            None => (Kind::BreitWigner, std::f64::consts::FRAC_1_PI, self.centre, self.half * self.half),
        };
        let strength = strength / self.norm;
        NaturalKernel {
            kind,
            centre: self.centre,
            half: self.half,
            strength,
            amplitude: if kind == Kind::BreitWigner { strength * self.half } else { strength },
            fixed_mass,
            spread,
            power: self.power.unwrap_or(0.0),
            inverse_mass: 1.0 / self.natural.mass(),
        }
    }

    /// One draw.
    pub(super) fn sample(&self, random: &mut dyn rand::Rng) -> f64 {
        let Some(shape) = self.natural.shape() else { return self.natural.mass() };
        let lowest = self.lowest();
        loop {
            let t = super::draw(shape, random);
            if t <= lowest || t > self.highest() {
                continue;
            }
            let Some(power) = self.power else { return t };
            // The falloff is largest at the lower end.
            if super::open_uniform(random) < libm::pow(t / lowest, -power) {
                return t;
            }
        }
    }
}

/// The form of a natural density.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Kind {
    /// `amplitude/((t - M)² + spread)`, spread = Γ²/4.
    BreitWigner,
    /// `amplitude/((t² - M_f²)² + spread)`, spread = M_f² Γ_f².
    Relativistic,
    /// The same times t².
    RunningWidth,
}

/// See [`TrueMass::kernel`].
#[derive(Clone, Copy, Debug)]
pub(super) struct NaturalKernel {
    pub(super) kind: Kind,
    /// The map `t = centre + half sinh(s)`.
    pub(super) centre: f64,
    pub(super) half: f64,
    /// Factor of the density per ds (Breit-Wigner) or per dt.
    pub(super) strength: f64,
    /// Factor of the density per dt.
    pub(super) amplitude: f64,
    /// M, or M_f of the poles.
    pub(super) fixed_mass: f64,
    pub(super) spread: f64,
    pub(super) power: f64,
    pub(super) inverse_mass: f64,
}
