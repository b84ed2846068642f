//! One side of a resolution shape: a half-Gaussian core with its tail.
//!
//! Everything is in units of the side's sigma, as a function of the distance `t >= 0` from the peak, with peak value 1.

use std::f64::consts::{FRAC_1_SQRT_2, PI};

/// Square root of pi/2.
pub(crate) const ROOT_HALF_PI: f64 = 1.253_314_137_315_500_3;

/// What follows the Gaussian core.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) enum Tail {
    /// Nothing: a Gaussian throughout.
    None,
    /// `exp(-alpha²/2) u^-n` with `u = 1 + (alpha/n)(t - alpha)`, from `t = alpha` on.
    Power {
        /// Where the tail begins.
        alpha: f64,
        /// Its power.
        n: f64,
    },
    /// `exp(k²/2 - k t)` from `t = k` on.
    Exponential {
        /// Where the tail begins, and its slope.
        k: f64,
    },
}

impl Tail {
    /// Where the tail begins.
    pub(crate) fn join(self) -> f64 {
        match self {
            Tail::None => f64::INFINITY,
            Tail::Power { alpha, .. } => alpha,
            Tail::Exponential { k } => k,
        }
    }

    /// Number of parameters.
    pub(crate) fn count(self) -> usize {
        match self {
            Tail::None => 0,
            Tail::Power { .. } => 2,
            Tail::Exponential { .. } => 1,
        }
    }

    fn u(alpha: f64, n: f64, t: f64) -> f64 {
        1.0 + (alpha / n) * (t - alpha)
    }

    /// Logarithm of the raw density.
    pub(crate) fn ln_raw(self, t: f64) -> f64 {
        if t <= self.join() {
            return -0.5 * t * t;
        }
        match self {
            Tail::None => -0.5 * t * t,
            Tail::Power { alpha, n } => -0.5 * alpha * alpha - n * libm::log1p((alpha / n) * (t - alpha)),
            Tail::Exponential { k } => k * (0.5 * k - t),
        }
    }

    /// Derivative of [`Tail::ln_raw`] in `t`.
    pub(crate) fn ln_raw_slope(self, t: f64) -> f64 {
        if t <= self.join() {
            return -t;
        }
        match self {
            Tail::None => -t,
            Tail::Power { alpha, n } => -alpha / Self::u(alpha, n, t),
            Tail::Exponential { k } => -k,
        }
    }

    /// Derivatives of [`Tail::ln_raw`] in the tail's own parameters.
    pub(crate) fn ln_raw_gradient(self, t: f64) -> [f64; 2] {
        if t <= self.join() {
            return [0.0; 2];
        }
        match self {
            Tail::None => [0.0; 2],
            Tail::Power { alpha, n } => {
                let u = Self::u(alpha, n, t);
                let r = (alpha / n) * (t - alpha);
                [-(t - alpha) * (1.0 + alpha * alpha / n) / u, r / u - libm::log1p(r)]
            }
            Tail::Exponential { k } => [k - t, 0.0],
        }
    }

    /// Integral of the raw density over `t > 0`.
    pub(crate) fn area(self) -> f64 {
        match self {
            Tail::None => ROOT_HALF_PI,
            _ => ROOT_HALF_PI * libm::erf(self.join() * FRAC_1_SQRT_2) + self.tail_area(),
        }
    }

    /// Integral of the raw density beyond the join.
    fn tail_area(self) -> f64 {
        match self {
            Tail::None => 0.0,
            Tail::Power { alpha, n } => libm::exp(-0.5 * alpha * alpha) * (n / alpha) / (n - 1.0),
            Tail::Exponential { k } => libm::exp(-0.5 * k * k) / k,
        }
    }

    /// Derivatives of [`Tail::area`] in the tail's own parameters.
    pub(crate) fn area_gradient(self) -> [f64; 2] {
        match self {
            Tail::None => [0.0; 2],
            Tail::Power { alpha, n } => {
                let e = libm::exp(-0.5 * alpha * alpha);
                [-e * (1.0 / (n - 1.0)) * (1.0 + n / (alpha * alpha)), -e / (alpha * (n - 1.0) * (n - 1.0))]
            }
            Tail::Exponential { k } => [-libm::exp(-0.5 * k * k) / (k * k), 0.0],
        }
    }

    /// Integral of the raw density from `t >= 0` to infinity.
    pub(crate) fn beyond(self, t: f64) -> f64 {
        let join = self.join();
        if t <= join {
            let gaussian = libm::erfc(t * FRAC_1_SQRT_2);
            return match self {
                Tail::None => ROOT_HALF_PI * gaussian,
                _ => ROOT_HALF_PI * (gaussian - libm::erfc(join * FRAC_1_SQRT_2)) + self.tail_area(),
            };
        }
        match self {
            Tail::None => 0.0,
            Tail::Power { alpha, n } => {
                let ln_u = libm::log1p((alpha / n) * (t - alpha));
                (n / alpha) / (n - 1.0) * libm::exp(-0.5 * alpha * alpha - (n - 1.0) * ln_u)
            }
            Tail::Exponential { k } => libm::exp(k * (0.5 * k - t)) / k,
        }
    }

    /// Integral of the raw density from 0 to `t`.
    pub(crate) fn up_to(self, t: f64) -> f64 {
        let join = self.join();
        let core = ROOT_HALF_PI * libm::erf(t.min(join) * FRAC_1_SQRT_2);
        if t <= join {
            return core;
        }
        match self {
            Tail::None => core,
            Tail::Power { alpha, n } => {
                core - self.tail_area() * libm::expm1((1.0 - n) * libm::log1p((alpha / n) * (t - alpha)))
            }
            Tail::Exponential { k } => core - self.tail_area() * libm::expm1(-k * (t - k)),
        }
    }

    /// Derivatives of [`Tail::beyond`] in the tail's own parameters.
    pub(crate) fn beyond_gradient(self, t: f64) -> [f64; 2] {
        if t <= self.join() {
            return self.area_gradient();
        }
        let beyond = self.beyond(t);
        match self {
            Tail::None => [0.0; 2],
            Tail::Power { alpha, n } => {
                let u = Self::u(alpha, n, t);
                let r = (alpha / n) * (t - alpha);
                [
                    beyond * (-alpha - 1.0 / alpha + (1.0 - n) * (t - 2.0 * alpha) / (n * u)),
                    beyond * (-1.0 / (n * (n - 1.0)) - libm::log1p(r) + (n - 1.0) / n * r / u),
                ]
            }
            Tail::Exponential { k } => [beyond * (k - t - 1.0 / k), 0.0],
        }
    }

    /// The `t >= 0` with [`Tail::beyond`] equal to `area`, for `0 < area <= self.area()`.
    pub(crate) fn beyond_inverse(self, area: f64) -> f64 {
        let tail = self.tail_area();
        if !matches!(self, Tail::None) && area < tail {
            return match self {
                Tail::None => f64::NAN,
                Tail::Power { alpha, n } => {
                    // u^(1-n) = area / tail
                    alpha + (n / alpha) * libm::expm1(-(libm::log(area) - ln_power_tail_area(alpha, n)) / (n - 1.0))
                }
                Tail::Exponential { k } => 0.5 * k - libm::log(area * k) / k,
            };
        }
        let cut = match self {
            Tail::None => 0.0,
            _ => libm::erfc(self.join() * FRAC_1_SQRT_2),
        };
        let upper = 0.5 * ((area - tail) / ROOT_HALF_PI + cut);
        upper_normal_quantile(upper).clamp(0.0, self.join())
    }

    /// Integrals of `t raw` and `t² raw` over `t > 0`; `None` where they do not exist.
    pub(crate) fn moments(self) -> (Option<f64>, Option<f64>) {
        match self {
            Tail::None => (Some(1.0), Some(ROOT_HALF_PI)),
            Tail::Power { alpha, n } => {
                let e = libm::exp(-0.5 * alpha * alpha);
                let core = ROOT_HALF_PI * libm::erf(alpha * FRAC_1_SQRT_2);
                let c = n / alpha;
                let first = (n > 2.0).then(|| {
                    -libm::expm1(-0.5 * alpha * alpha) + e * c * (alpha / (n - 1.0) + c / ((n - 1.0) * (n - 2.0)))
                });
                let second = (n > 3.0).then(|| {
                    let tail = alpha * alpha / (n - 1.0)
                        + 2.0 * alpha * c / ((n - 1.0) * (n - 2.0))
                        + 2.0 * c * c / ((n - 1.0) * (n - 2.0) * (n - 3.0));
                    core - alpha * e + e * c * tail
                });
                (first, second)
            }
            Tail::Exponential { k } => {
                let e = libm::exp(-0.5 * k * k);
                let core = ROOT_HALF_PI * libm::erf(k * FRAC_1_SQRT_2);
                (
                    Some(-libm::expm1(-0.5 * k * k) + e * (1.0 + 1.0 / (k * k))),
                    Some(core - k * e + e * (k + 2.0 / k + 2.0 / (k * k * k))),
                )
            }
        }
    }
}

/// Logarithm of the area of a power tail, which itself may underflow.
fn ln_power_tail_area(alpha: f64, n: f64) -> f64 {
    -0.5 * alpha * alpha + libm::log((n / alpha) / (n - 1.0))
}

/// The z with upper normal probability `q`, `0 < q <= 1/2`: AS 241 and one step of Halley's method, which brings its far
/// tail to full precision.
pub(crate) fn upper_normal_quantile(q: f64) -> f64 {
    if q >= 0.5 {
        return 0.0;
    }
    let z = -crate::numerics::kernel::normal_quantile(q.max(f64::MIN_POSITIVE));
    let density = libm::exp(-0.5 * z * z) / (2.0 * PI).sqrt();
    if density <= 0.0 {
        return z;
    }
    let step = (0.5 * libm::erfc(z * FRAC_1_SQRT_2) - q) / density;
    z + step / (1.0 - 0.5 * z * step)
}

/// The constants of one side for the vector kernels; any tail fits the one formula of [`ln_raw`].
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct SideKernel {
    pub(super) inverse_sigma: f64,
    pub(super) join: f64,
    pub(super) constant: f64,
    pub(super) power: f64,
    pub(super) ratio: f64,
    pub(super) slope: f64,
}

impl SideKernel {
    pub(crate) fn new(sigma: f64, tail: Tail) -> Self {
        let flat = SideKernel {
            inverse_sigma: 1.0 / sigma,
            join: f64::INFINITY,
            constant: 0.0,
            power: 0.0,
            ratio: 0.0,
            slope: 0.0,
        };
        match tail {
            Tail::None => flat,
            Tail::Power { alpha, n } => {
                SideKernel { join: alpha, constant: -0.5 * alpha * alpha, power: n, ratio: alpha / n, ..flat }
            }
            Tail::Exponential { k } => SideKernel { join: k, constant: 0.5 * k * k, slope: k, ..flat },
        }
    }
}

/// Logarithm of the raw density at the distance `w` from the peak (GeV); `POWER` if either side has a power tail.
#[inline(always)]
pub(crate) fn ln_raw<const POWER: bool>(low: &SideKernel, high: &SideKernel, w: f64) -> f64 {
    let below = w < 0.0;
    let t = w.abs() * if below { low.inverse_sigma } else { high.inverse_sigma };
    let join = if below { low.join } else { high.join };
    let constant = if below { low.constant } else { high.constant };
    let slope = if below { low.slope } else { high.slope };
    let mut tail = constant - slope * t;
    if POWER {
        let ratio = if below { low.ratio } else { high.ratio };
        let power = if below { low.power } else { high.power };
        // Inside the core the excess would be negative; 1 keeps the logarithm defined there.
        let excess = t - join;
        let excess = if excess > 0.0 { excess } else { 0.0 };
        tail -= power * crate::numerics::kernel::ln(1.0 + ratio * excess);
    }
    if t <= join { -0.5 * t * t } else { tail }
}
