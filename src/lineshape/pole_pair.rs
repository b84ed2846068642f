//! What the two relativistic shapes share: one pair of complex poles in the mass.
//!
//! Both are `c Im[r/(m² - a²)]` on m > 0 with `a = A + iB` in the first quadrant: the fixed width has `r = 1`, the running
//! width `r = a²`. Integrals follow from `∫ dm/(m² - a²) = -atanh(m/a)/a` and, from above, `atanh(a/m)/a`.

use std::f64::consts::{FRAC_PI_2, PI};

use num_complex::Complex64;

/// Which of the two shapes.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(crate) enum Numerator {
    /// `1/((m² - M²)² + M² Γ²)`.
    Constant,
    /// `m²/((m² - M²)² + m⁴ Γ²/M²)`.
    MassSquared,
}

/// The shape with its pole worked out.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct PolePair {
    pub(crate) numerator: Numerator,
    pub(crate) mass: f64,
    pub(crate) width: f64,
    /// Mass and width of the fixed-width shape with the same poles.
    fixed: (f64, f64),
    /// M - M_f, M_f - Re a and |a|² - M_f², each without cancellation: near a narrow peak `m - M` is far more precise
    /// than `m - M_f`.
    offset: f64,
    lag: f64,
    excess: f64,
    /// Re a, Im a.
    re: f64,
    im: f64,
    /// |a|².
    size: f64,
}

impl PolePair {
    /// From checked parameters.
    pub(crate) fn new(numerator: Numerator, mass: f64, width: f64) -> Self {
        // The exact map from running to fixed width, M_f = M/sqrt(1 + Γ²/M²) and likewise Γ_f.
        let ratio = width / mass;
        let (shrink, offset) = match numerator {
            Numerator::Constant => (1.0, 0.0),
            Numerator::MassSquared => {
                let stretch = libm::hypot(1.0, ratio);
                (1.0 / stretch, mass * ratio / stretch * (ratio / (1.0 + stretch)))
            }
        };
        let (m, g) = (mass * shrink, width * shrink);
        let size = m * libm::hypot(m, g);
        let re = (0.5 * (size + m * m)).sqrt();
        let excess = m * g * (g / (libm::hypot(m, g) + m));
        let lag = -0.5 * excess / (re + m);
        PolePair { numerator, mass, width, fixed: (m, g), offset, lag, excess, re, im: 0.5 * m * g / re, size }
    }

    /// The pole a.
    pub(crate) fn pole(&self) -> Complex64 {
        Complex64::new(self.re, self.im)
    }

    /// The factor c of the normalised shape.
    pub(crate) fn scale(&self) -> f64 {
        match self.numerator {
            Numerator::Constant => 2.0 * self.size / (PI * self.re),
            Numerator::MassSquared => 2.0 / (PI * self.re),
        }
    }

    /// `(1/2) r/a`: the density is `c Im[h (1/(m - a) - 1/(m + a))]` with this h.
    pub(crate) fn half_residue(&self) -> Complex64 {
        let a = self.pole();
        match self.numerator {
            Numerator::Constant => 0.5 * a.conj() / self.size,
            Numerator::MassSquared => 0.5 * a,
        }
    }

    /// `c × Im(a²)`, the numerator of the density (times m² for the running width).
    fn strength(&self) -> f64 {
        self.scale() * self.fixed.0 * self.fixed.1
    }

    /// Density at m.
    pub(crate) fn pdf(&self, m: f64) -> f64 {
        if m <= 0.0 {
            return 0.0;
        }
        let (strength, centre, spread) = self.constants();
        let d = self.beyond_fixed(m) * (m + centre);
        match self.numerator {
            Numerator::Constant => strength / (d * d + spread),
            Numerator::MassSquared => {
                // Divided by m², so that nothing overflows early.
                let d = d / m;
                strength / (d * d + spread / (m * m))
            }
        }
    }

    /// Densities of a slice.
    pub(crate) fn pdf_slice(&self, m: &[f64], out: &mut [f64]) {
        let (strength, centre, spread) = self.constants();
        match self.numerator {
            Numerator::Constant => constant_slice(m, out, strength, centre, spread),
            Numerator::MassSquared => squared_slice(m, out, strength, centre, spread),
        }
    }

    /// Where the density is highest: M, or `M (1 + Γ²/M²)^(-1/4)`.
    pub(crate) fn peak(&self) -> f64 {
        match self.numerator {
            Numerator::Constant => self.mass,
            Numerator::MassSquared => self.size.sqrt(),
        }
    }

    /// m - M_f.
    fn beyond_fixed(&self, m: f64) -> f64 {
        (m - self.mass) + self.offset
    }

    /// Strength, M_f and M_f² Γ_f² of `strength [m²]/((m² - M_f²)² + M_f² Γ_f²)`.
    pub(crate) fn constants(&self) -> (f64, f64, f64) {
        let (m, g) = self.fixed;
        (self.strength(), m, (m * g) * (m * g))
    }

    pub(crate) fn ln_pdf(&self, m: f64) -> f64 {
        if m <= 0.0 {
            return if m.is_nan() { f64::NAN } else { f64::NEG_INFINITY };
        }
        let (mass, g) = self.fixed;
        // ln((m² - M²)² + M²Γ²) as 2 ln hypot, each factor divided by m for the running width.
        let (d, s) = match self.numerator {
            Numerator::Constant => (self.beyond_fixed(m) * (m + mass), mass * g),
            Numerator::MassSquared => (self.beyond_fixed(m) * ((m + mass) / m), mass * g / m),
        };
        libm::log(self.strength()) - 2.0 * libm::log(libm::hypot(d, s))
    }

    /// `atanh(m/a)` for m below |a|, `atanh(a/m)` above: the two differ by iπ/2.
    fn atanh(&self, m: f64, inverse: bool) -> Complex64 {
        let (a, b) = (self.re, self.im);
        let from_fixed = self.beyond_fixed(m);
        let from_pole = from_fixed + self.lag;
        let re = 0.25 * libm::log1p(4.0 * a * m / (from_pole * from_pole + b * b));
        // |a|² - m²
        let difference = self.excess - from_fixed * (m + self.fixed.0);
        let im = if inverse {
            0.5 * libm::atan2(2.0 * b * m, -difference)
        } else {
            0.5 * libm::atan2(-2.0 * b * m, difference)
        };
        Complex64::new(re, im)
    }

    pub(crate) fn cdf(&self, m: f64) -> f64 {
        if m.is_nan() {
            return f64::NAN;
        }
        if m <= 0.0 {
            return 0.0;
        }
        let root = self.size.sqrt();
        let integral = match self.numerator {
            // (Re X Im a - Im X Re a)/|a|², both terms positive.
            Numerator::Constant => {
                let x = self.atanh(m, false);
                (x.re * self.im - x.im * self.re) / self.size
            }
            Numerator::MassSquared if m < 0.3 * root => {
                // -Im(a atanh(m/a)) is of third order: its series.
                -series(m, self.pole().inv() * m).im
            }
            Numerator::MassSquared => {
                let x = self.atanh(m, false);
                -(self.re * x.im + self.im * x.re)
            }
        };
        (self.scale() * integral).clamp(0.0, 1.0)
    }

    pub(crate) fn sf(&self, m: f64) -> f64 {
        if m.is_nan() {
            return f64::NAN;
        }
        if m <= 0.0 {
            return 1.0;
        }
        let root = self.size.sqrt();
        let integral = match self.numerator {
            Numerator::Constant if 0.3 * m > root => {
                // Im(atanh(a/m)/a) is of third order in 1/m: its series.
                series(1.0 / m, self.pole() / m).im
            }
            Numerator::Constant => {
                let x = self.atanh(m, true);
                (x.im * self.re - x.re * self.im) / self.size
            }
            Numerator::MassSquared => {
                let x = self.atanh(m, true);
                self.re * x.im + self.im * x.re
            }
        };
        (self.scale() * integral).clamp(0.0, 1.0)
    }

    /// Derivatives of ln pdf in m, mass and width.
    pub(crate) fn ln_pdf_gradient(&self, m: f64) -> [f64; 3] {
        let (mass, width) = (self.mass, self.width);
        // pdf = N(M, Γ) q(m; M, Γ) with q the unnormalised definition; N by the chain rule below.
        let (ln_n_mass, ln_n_width) = self.ln_norm_gradient();
        match self.numerator {
            Numerator::Constant => {
                let d = (m - mass) * (m + mass);
                let den = d * d + mass * mass * width * width;
                [
                    -4.0 * m * d / den,
                    ln_n_mass - (-4.0 * mass * d + 2.0 * mass * width * width) / den,
                    ln_n_width - 2.0 * mass * mass * width / den,
                ]
            }
            Numerator::MassSquared => {
                let d = (m - mass) * (m + mass);
                let r = m * m * width / mass;
                let den = d * d + r * r;
                [
                    2.0 / m - (4.0 * m * d + 4.0 * r * r / m) / den,
                    ln_n_mass - (-4.0 * mass * d - 2.0 * r * r / mass) / den,
                    ln_n_width - 2.0 * r * r / (width * den),
                ]
            }
        }
    }

    /// Derivatives in mass and width of the logarithm of the constant before the unnormalised definition.
    fn ln_norm_gradient(&self) -> (f64, f64) {
        let (mass, width) = (self.mass, self.width);
        match self.numerator {
            Numerator::Constant => {
                // N = c M Γ, c = 2 g/(π A), g = M sqrt(M² + Γ²), A² = (g + M²)/2.
                let g = self.size;
                let g_mass = (2.0 * mass * mass * mass + mass * width * width) / g;
                let g_width = mass * mass * width / g;
                let a2 = self.re * self.re;
                let a2_mass = 0.5 * g_mass + mass;
                let a2_width = 0.5 * g_width;
                (1.0 / mass + g_mass / g - 0.5 * a2_mass / a2, 1.0 / width + g_width / g - 0.5 * a2_width / a2)
            }
            Numerator::MassSquared => {
                // The definition is (1/s) m²/|m² - a²|² with s = 1 + Γ²/M²; N = s c M_f Γ_f = c M Γ, c = 2/(π A),
                // A² = (g + M²/s)/2 and g = |a|² = M²/sqrt(s).
                let s = 1.0 + (width / mass) * (width / mass);
                let s_mass = -2.0 * width * width / (mass * mass * mass);
                let s_width = 2.0 * width / (mass * mass);
                let a2 = self.re * self.re;
                let root = s.sqrt();
                let part = 0.5 * mass * mass * (-0.5 / (s * root) - 1.0 / (s * s));
                let a2_mass = mass * (1.0 / root + 1.0 / s) + part * s_mass;
                let a2_width = part * s_width;
                (1.0 / mass - 0.5 * a2_mass / a2, 1.0 / width - 0.5 * a2_width / a2)
            }
        }
    }

    /// Derivatives of the cdf in mass and width.
    pub(crate) fn cdf_gradient(&self, m: f64) -> (f64, f64) {
        if m <= 0.0 {
            return (0.0, 0.0);
        }
        // Scaling all of m, M, Γ together leaves the cdf alone: M ∂_M + Γ ∂_Γ = -m pdf. ∂_Γ at fixed M goes through a:
        // cdf = c(A) Im F(m, a), differentiated as a function of s = a² = (M² + iMΓ) [over 1 + Γ²/M² when running].
        let (mass, width) = (self.mass, self.width);
        let a = self.pole();
        let (s_width, im_f, re_a_width);
        match self.numerator {
            Numerator::Constant => s_width = Complex64::new(0.0, mass),
            Numerator::MassSquared => {
                // a² = M²/(1 - iΓ/M).
                let denominator = Complex64::new(1.0, -width / mass);
                s_width = Complex64::new(0.0, mass) / (denominator * denominator);
            }
        }
        let a_width = s_width / (2.0 * a);
        re_a_width = a_width.re;
        // From the nearer end, so that both tails keep their precision.
        let above = m > self.size.sqrt();
        let x = self.atanh(m, above);
        // d atanh(m/a)/da = -m/(a² - m²); d atanh(a/m)/da is the opposite of -that: m/(m² - a²), the same function.
        // m² - a² = (m - M_f)(m + M_f) - i M_f Γ_f.
        let (fixed_mass, fixed_width) = self.fixed;
        let square = Complex64::new(self.beyond_fixed(m) * (m + fixed_mass), -fixed_mass * fixed_width);
        let x_a = Complex64::new(m, 0.0) / square;
        let (f, f_a) = match (self.numerator, above) {
            (Numerator::Constant, false) => (-x / a, -x_a / a + x / (a * a)),
            (Numerator::Constant, true) => (x / a, x_a / a - x / (a * a)),
            (Numerator::MassSquared, false) => (-a * x, -x - a * x_a),
            (Numerator::MassSquared, true) => (a * x, x + a * x_a),
        };
        im_f = f.im;
        let c = self.scale();
        let c_width = match self.numerator {
            Numerator::Constant => {
                let g_width = mass * mass * width / self.size;
                c * (g_width / self.size - re_a_width / self.re)
            }
            Numerator::MassSquared => -c * re_a_width / self.re,
        };
        let mut by_width = c_width * im_f + c * (f_a * a_width).im;
        if above {
            by_width = -by_width;
        }
        let by_mass = -(m * self.pdf(m) + width * by_width) / mass;
        (by_mass, by_width)
    }

    /// The mass with `cdf = p` (or `sf = p` when `from_above`), for `0 < p < 1`.
    pub(crate) fn quantile(&self, p: f64, from_above: bool) -> f64 {
        let value = |m: f64| if from_above { p - self.sf(m) } else { self.cdf(m) - p };
        let start = self.mass;
        let (mut low, mut high) = (start, start);
        while value(low) > 0.0 && low > f64::MIN_POSITIVE {
            low *= 0.5;
        }
        while value(high) < 0.0 && high < 1e300 {
            high *= 2.0;
        }
        crate::numerics::root::find(low, high, value, |m| self.pdf(m))
    }

    pub(crate) fn mean(&self) -> Option<f64> {
        match self.numerator {
            Numerator::Constant => Some(self.scale() * (0.5 * FRAC_PI_2 + 0.5 * libm::atan2(self.mass, self.width))),
            Numerator::MassSquared => None,
        }
    }

    pub(crate) fn variance(&self) -> Option<f64> {
        // The mean of m² is |a|² = M sqrt(M² + Γ²).
        self.mean().map(|mean| self.size - mean * mean)
    }
}

crate::wide! {
    fn constant_slice(m: &[f64], out: &mut [f64], strength: f64, centre: f64, spread: f64) {
        for (value, &m) in out.iter_mut().zip(m) {
            let d = (m - centre) * (m + centre);
            let density = strength / (d * d + spread);
            *value = if m > 0.0 { density } else { 0.0 };
        }
    }
}

crate::wide! {
    fn squared_slice(m: &[f64], out: &mut [f64], strength: f64, centre: f64, spread: f64) {
        for (value, &m) in out.iter_mut().zip(m) {
            let d = (m - centre) * (m + centre) / m;
            let density = strength / (d * d + spread / (m * m));
            *value = if m > 0.0 { density } else { 0.0 };
        }
    }
}

/// `first Σ_{k≥1} w^(2k)/(2k + 1)`: `atanh` without its linear term; |w| ≤ 0.3.
fn series(first: f64, w: Complex64) -> Complex64 {
    let square = w * w;
    let mut power = Complex64::new(first, 0.0);
    let mut sum = Complex64::new(0.0, 0.0);
    for k in 1..=16 {
        power *= square;
        sum += power / f64::from(2 * k + 1);
    }
    sum
}
