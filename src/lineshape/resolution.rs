//! Resolution shapes: a Gaussian core, one width or two, with a tail on either side.
//!
//! With `t = |x - bias|/sigma` of the side on which x lies, the density is `raw(t)/norm` and
//! `norm = sigma_low area_low + sigma_high area_high`. Each shape of this family has its own file with its definition and
//! its source; this file holds what they share.

use super::half::{SideKernel, Tail};
use super::resolution_slices as slices;
use super::{Domain, Parameter, Shape, ShapeError};

/// A resolution shape; see the constructors [`Resolution::gaussian`], [`Resolution::crystal_ball`],
/// [`Resolution::double_crystal_ball`], [`Resolution::double_crystal_ball_two_sigmas`], [`Resolution::gauss_exp`] and
/// [`Resolution::double_gauss_exp`].
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Resolution {
    pub(super) bias: f64,
    pub(super) sigma_low: f64,
    pub(super) sigma_high: f64,
    /// Whether both sides have one sigma, which then is one parameter.
    pub(super) one_sigma: bool,
    pub(super) low: Tail,
    pub(super) high: Tail,
    norm: f64,
}

/// The most parameters that a resolution shape has.
pub(super) const MAX_PARAMETERS: usize = 7;

impl Resolution {
    /// Puts checked parts together.
    pub(super) fn from_parts(bias: f64, sigmas: (f64, f64), one_sigma: bool, low: Tail, high: Tail) -> Self {
        let (sigma_low, sigma_high) = sigmas;
        let norm = sigma_low * low.area() + sigma_high * high.area();
        Resolution { bias, sigma_low, sigma_high, one_sigma, low, high, norm }
    }

    /// Position of the peak, in GeV.
    pub fn bias(&self) -> f64 {
        self.bias
    }

    /// Standard deviations of the core below and above the peak, in GeV.
    pub fn sigmas(&self) -> (f64, f64) {
        (self.sigma_low, self.sigma_high)
    }

    /// Integral of the shape with peak value 1, in GeV.
    pub fn norm(&self) -> f64 {
        self.norm
    }

    /// Number of parameters.
    pub fn parameter_count(&self) -> usize {
        2 + usize::from(!self.one_sigma) + self.low.count() + self.high.count()
    }

    /// The same kind of shape from values in the order of its parameters.
    ///
    /// # Errors
    /// As the constructors.
    pub fn with_parameters(&self, values: &[f64]) -> Result<Self, ShapeError> {
        super::error::check_count(self.parameter_count(), values)?;
        let (bias, mut rest) = (values[0], &values[1..]);
        let mut next = || {
            let first = rest[0];
            rest = &rest[1..];
            first
        };
        let sigma = next();
        match (self.low, self.high) {
            (Tail::None, _) => Resolution::gaussian(bias, sigma),
            (Tail::Power { .. }, Tail::Power { .. }) if self.one_sigma => {
                Resolution::double_crystal_ball(bias, sigma, (next(), next()), (next(), next()))
            }
            (Tail::Power { .. }, Tail::Power { .. }) => {
                Resolution::double_crystal_ball_two_sigmas(bias, (sigma, next()), (next(), next()), (next(), next()))
            }
            (Tail::Power { .. }, _) => Resolution::crystal_ball(bias, sigma, next(), next()),
            (Tail::Exponential { .. }, Tail::None) => Resolution::gauss_exp(bias, sigma, next()),
            (Tail::Exponential { .. }, _) => Resolution::double_gauss_exp(bias, sigma, next(), next()),
        }
    }

    /// Side, distance from the peak in its sigma, and that sigma.
    fn locate(&self, x: f64) -> (bool, f64, f64) {
        let d = x - self.bias;
        if d < 0.0 {
            (true, -d / self.sigma_low, self.sigma_low)
        } else {
            (false, d / self.sigma_high, self.sigma_high)
        }
    }

    /// Writes a gradient given per side into the layout of the parameters.
    fn lay_out(&self, parts: &[f64; MAX_PARAMETERS], gradient: &mut [f64]) {
        let [bias, sigma_low, sigma_high, low1, low2, high1, high2] = *parts;
        let mut flat = [0.0; MAX_PARAMETERS];
        flat[0] = bias;
        let mut k = 1;
        if self.one_sigma {
            flat[k] = sigma_low + sigma_high;
            k += 1;
        } else {
            flat[k] = sigma_low;
            flat[k + 1] = sigma_high;
            k += 2;
        }
        for (tail, pair) in [(self.low, [low1, low2]), (self.high, [high1, high2])] {
            let count = tail.count();
            flat[k..k + count].copy_from_slice(&pair[..count]);
            k += count;
        }
        for (slot, value) in gradient.iter_mut().zip(&flat[..k]) {
            *slot = *value;
        }
    }

    /// Derivatives of the logarithm of the norm: sigma_low, sigma_high, then the tails.
    fn ln_norm_gradient(&self) -> [f64; MAX_PARAMETERS] {
        let low = self.low.area_gradient();
        let high = self.high.area_gradient();
        [
            0.0,
            self.low.area() / self.norm,
            self.high.area() / self.norm,
            self.sigma_low * low[0] / self.norm,
            self.sigma_low * low[1] / self.norm,
            self.sigma_high * high[0] / self.norm,
            self.sigma_high * high[1] / self.norm,
        ]
    }
}

impl Shape for Resolution {
    fn parameters(&self) -> Vec<Parameter> {
        let mut list = vec![Parameter::new("bias", self.bias, Domain::REAL)];
        if self.one_sigma {
            list.push(Parameter::new("sigma", self.sigma_low, Domain::POSITIVE));
        } else {
            list.push(Parameter::new("sigma_low", self.sigma_low, Domain::POSITIVE));
            list.push(Parameter::new("sigma_high", self.sigma_high, Domain::POSITIVE));
        }
        for (tail, names) in
            [(self.low, ["alpha_low", "n_low", "k_low"]), (self.high, ["alpha_high", "n_high", "k_high"])]
        {
            match tail {
                Tail::None => {}
                Tail::Power { alpha, n } => {
                    list.push(Parameter::new(names[0], alpha, Domain::POSITIVE));
                    list.push(Parameter::new(names[1], n, Domain::ABOVE_ONE));
                }
                Tail::Exponential { k } => list.push(Parameter::new(names[2], k, Domain::POSITIVE)),
            }
        }
        list
    }

    fn with_values(&self, values: &[f64]) -> Result<Box<dyn Shape>, ShapeError> {
        Ok(Box::new(self.with_parameters(values)?))
    }

    fn pdf(&self, m: f64) -> f64 {
        let (low, t, _) = self.locate(m);
        let tail = if low { self.low } else { self.high };
        libm::exp(tail.ln_raw(t)) / self.norm
    }

    fn ln_pdf(&self, m: f64) -> f64 {
        let (low, t, _) = self.locate(m);
        let tail = if low { self.low } else { self.high };
        tail.ln_raw(t) - libm::log(self.norm)
    }

    fn cdf(&self, m: f64) -> f64 {
        let (low, t, sigma) = self.locate(m);
        let area = if low {
            sigma * self.low.beyond(t)
        } else {
            self.sigma_low * self.low.area() + sigma * self.high.up_to(t)
        };
        area / self.norm
    }

    fn sf(&self, m: f64) -> f64 {
        let (low, t, sigma) = self.locate(m);
        let area = if low {
            self.sigma_high * self.high.area() + sigma * self.low.up_to(t)
        } else {
            sigma * self.high.beyond(t)
        };
        area / self.norm
    }

    fn quantile(&self, p: f64) -> f64 {
        if !(0.0..=1.0).contains(&p) {
            return f64::NAN;
        }
        if p == 0.0 {
            return f64::NEG_INFINITY;
        }
        let below = self.sigma_low * self.low.area();
        let area = p * self.norm;
        if area <= below {
            return self.bias - self.sigma_low * self.low.beyond_inverse(area / self.sigma_low);
        }
        let rest = self.high.area() - (area - below) / self.sigma_high;
        if rest <= 0.0 || p == 1.0 {
            return f64::INFINITY;
        }
        self.bias + self.sigma_high * self.high.beyond_inverse(rest)
    }

    fn upper_quantile(&self, q: f64) -> f64 {
        -self.mirrored().quantile(q)
    }

    fn peak_guess(&self) -> f64 {
        self.bias
    }

    fn pdf_slice(&self, m: &[f64], out: &mut [f64]) {
        let (low, high) = self.kernels();
        if self.has_power_tail() {
            slices::pdf_power(m, out, self.bias, &low, &high, 1.0 / self.norm);
        } else {
            slices::pdf_plain(m, out, self.bias, &low, &high, 1.0 / self.norm);
        }
    }

    fn ln_pdf_slice(&self, m: &[f64], out: &mut [f64]) {
        let (low, high) = self.kernels();
        let ln_norm = libm::log(self.norm);
        if self.has_power_tail() {
            slices::ln_pdf_power(m, out, self.bias, &low, &high, ln_norm);
        } else {
            slices::ln_pdf_plain(m, out, self.bias, &low, &high, ln_norm);
        }
    }

    fn cdf_slice(&self, m: &[f64], out: &mut [f64]) {
        self.probability_slice(m, out, true);
    }

    fn sf_slice(&self, m: &[f64], out: &mut [f64]) {
        self.probability_slice(m, out, false);
    }

    fn ln_pdf_gradient_slice(&self, m: &[f64], ln_pdf: &mut [f64], gradient: &mut [f64]) {
        let (low, high) = self.kernels();
        let constants = slices::GradientConstants {
            bias: self.bias,
            ln_norm: libm::log(self.norm),
            by_norm: self.ln_norm_gradient(),
            low,
            high,
        };
        let points = m.len();
        let mut rows = [[0.0; slices::BLOCK]; MAX_PARAMETERS];
        for (block, (m, ln_pdf)) in m.chunks(slices::BLOCK).zip(ln_pdf.chunks_mut(slices::BLOCK)).enumerate() {
            if self.has_power_tail() {
                slices::gradient_power(m, ln_pdf, &mut rows, &constants);
            } else {
                slices::gradient_plain(m, ln_pdf, &mut rows, &constants);
            }
            if self.one_sigma {
                let (first, second) = rows.split_at_mut(2);
                for (one, two) in first[1].iter_mut().zip(&second[0]) {
                    *one += two;
                }
            }
            let start = block * slices::BLOCK;
            for (k, row) in self.layout().enumerate() {
                let from = k * points + start;
                if let Some(target) = gradient.get_mut(from..from + m.len()) {
                    target.copy_from_slice(&rows[row][..m.len()]);
                }
            }
        }
    }

    fn mean(&self) -> Option<f64> {
        let shift = self.sigma_high * self.sigma_high * self.high.moments().0?
            - self.sigma_low * self.sigma_low * self.low.moments().0?;
        Some(self.bias + shift / self.norm)
    }

    fn variance(&self) -> Option<f64> {
        let cube = |sigma: f64| sigma * sigma * sigma;
        let second =
            (cube(self.sigma_low) * self.low.moments().1? + cube(self.sigma_high) * self.high.moments().1?) / self.norm;
        let shift = self.mean()? - self.bias;
        Some(second - shift * shift)
    }

    fn ln_pdf_gradient(&self, m: f64, gradient: &mut [f64]) -> f64 {
        let (low, t, sigma) = self.locate(m);
        let tail = if low { self.low } else { self.high };
        let slope = tail.ln_raw_slope(t);
        let own = tail.ln_raw_gradient(t);
        let mut parts = self.ln_norm_gradient().map(|d| -d);
        parts[0] = if low { slope / sigma } else { -slope / sigma };
        let (sigma_slot, tail_slot) = if low { (1, 3) } else { (2, 5) };
        parts[sigma_slot] -= t * slope / sigma;
        parts[tail_slot] += own[0];
        parts[tail_slot + 1] += own[1];
        self.lay_out(&parts, gradient);
        tail.ln_raw(t) - libm::log(self.norm)
    }

    fn cdf_gradient(&self, m: f64, gradient: &mut [f64]) {
        let (low, t, sigma) = self.locate(m);
        let tail = if low { self.low } else { self.high };
        // The probability beyond m on its own side; above the peak that is the sf, whose gradient is the opposite.
        let beyond = tail.beyond(t);
        let own = tail.beyond_gradient(t);
        let raw = libm::exp(tail.ln_raw(t));
        let probability = sigma * beyond / self.norm;
        let mut parts = self.ln_norm_gradient().map(|d| -d * probability);
        let (sigma_slot, tail_slot) = if low { (1, 3) } else { (2, 5) };
        parts[sigma_slot] += (beyond + t * raw) / self.norm;
        parts[tail_slot] += sigma * own[0] / self.norm;
        parts[tail_slot + 1] += sigma * own[1] / self.norm;
        if !low {
            parts = parts.map(|d| -d);
        }
        parts[0] = -raw / self.norm;
        self.lay_out(&parts, gradient);
    }
}

impl Resolution {
    fn kernels(&self) -> (SideKernel, SideKernel) {
        (SideKernel::new(self.sigma_low, self.low), SideKernel::new(self.sigma_high, self.high))
    }

    fn has_power_tail(&self) -> bool {
        [self.low, self.high].iter().any(|tail| matches!(tail, Tail::Power { .. }))
    }

    /// Which of the rows bias, sigma_low, sigma_high, low tail (2), high tail (2) are parameters.
    fn layout(&self) -> impl Iterator<Item = usize> + use<> {
        let (one, low, high) = (self.one_sigma, self.low.count(), self.high.count());
        (0..MAX_PARAMETERS).filter(move |&row| match row {
            0 | 1 => true,
            2 => !one,
            3 | 4 => row - 3 < low,
            _ => row - 5 < high,
        })
    }

    /// cdf or sf of a slice; the side away from the tail asked for is the complement of the other.
    fn probability_slice(&self, m: &[f64], out: &mut [f64], from_below: bool) {
        let share = self.sigma_low * self.low.area() / self.norm;
        // Where one side holds nearly nothing its complement would lose digits.
        if !(0.01..=0.99).contains(&share) {
            for (value, &m) in out.iter_mut().zip(m) {
                *value = if from_below { self.cdf(m) } else { self.sf(m) };
            }
            return;
        }
        let (low, high) = self.kernels();
        let areas = |sigma: f64, tail: Tail| slices::SideArea::new(sigma / self.norm, tail);
        let areas = (areas(self.sigma_low, self.low), areas(self.sigma_high, self.high));
        if self.has_power_tail() {
            slices::probability_power(m, out, self.bias, (&low, &high), (&areas.0, &areas.1), from_below);
        } else {
            slices::probability_plain(m, out, self.bias, (&low, &high), (&areas.0, &areas.1), from_below);
        }
    }

    /// The shape of -x.
    fn mirrored(&self) -> Self {
        Resolution {
            bias: -self.bias,
            sigma_low: self.sigma_high,
            sigma_high: self.sigma_low,
            low: self.high,
            high: self.low,
            ..*self
        }
    }
}
