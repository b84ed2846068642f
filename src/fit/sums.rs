//! The likelihood of masses for a resolution shape alone, through sums over regions.
//!
//! The masses are sorted once. A Gaussian core then asks only for sums of w, w d and w d², kept per block of masses; only
//! the masses of a power tail are visited, and they too give but four sums (see `tail_sums`). Value, gradient and exact
//! second derivatives come out of one such pass.

use nalgebra::{DMatrix, DVector};

use super::data::Masses;
use super::model::{Model, window};
use super::objective::{Evaluation, Objective};
use super::tail_sums::{Moments, Part, PowerSums, power_sums, weighted_power_sums};
use super::unbinned::Unbinned;
use crate::lineshape::{LineShape, Natural, Shape};

/// Masses per block of sums.
const BLOCK: usize = 256;

/// What follows the core of a side, and where its parameters stand in the line shape.
#[derive(Clone, Copy, Debug, PartialEq)]
enum Kind {
    None,
    Power(usize, usize),
    Exponential(usize),
}

/// See the module.
pub(super) struct Sums<'a> {
    plain: Unbinned<'a>,
    centre: f64,
    blocks: Vec<Moments>,
    total: f64,
    /// Place of sigma, and the tail: below and above the peak.
    sides: [(usize, Kind); 2],
    /// Place of the bias.
    bias: usize,
}

impl<'a> Sums<'a> {
    /// Sums over sorted masses; `None` for a model that needs the general path.
    pub fn new(model: &'a Model, masses: &'a Masses) -> Option<Self> {
        if model.counted || !matches!(model.line.natural(), Natural::Line(_)) {
            return None;
        }
        let [_] = model.line.resolution()?.components() else { return None };
        let names: Vec<String> = model.line.parameters().into_iter().map(|p| p.name).collect();
        let place = |name: &str| names.iter().position(|n| n == name);
        let side = |end: &str| {
            let sigma = place("sigma").or_else(|| place(&format!("sigma_{end}")))?;
            let kind = match (place(&format!("alpha_{end}")), place(&format!("n_{end}")), place(&format!("k_{end}"))) {
                (Some(alpha), Some(n), _) => Kind::Power(alpha, n),
                (_, _, Some(k)) => Kind::Exponential(k),
                _ => Kind::None,
            };
            Some((sigma, kind))
        };
        let sides = [side("low")?, side("high")?];
        let gev = masses.gev();
        let centre = gev[gev.len() / 2];
        let blocks = gev
            .chunks(BLOCK)
            .enumerate()
            .map(|(i, m)| moments(m, masses.weights().map(|w| &w[i * BLOCK..]), centre))
            .collect();
        let total = masses.total();
        Some(Sums { plain: Unbinned { model, masses }, centre, blocks, total, sides, bias: place("bias")? })
    }

    fn model(&self) -> &Model {
        self.plain.model
    }

    /// Moments of the masses with places `from..to` about a point.
    fn moments(&self, from: usize, to: usize, about: f64) -> Moments {
        if from >= to {
            return Moments::default();
        }
        let masses = self.plain.masses;
        let (first, last) = (from.div_ceil(BLOCK), to / BLOCK);
        let mut sum = Moments::default();
        let mut add = |m: &Moments| {
            sum.weight += m.weight;
            sum.first += m.first;
            sum.second += m.second;
        };
        let part = |a: usize, b: usize| moments(&masses.gev()[a..b], masses.weights().map(|w| &w[a..b]), self.centre);
        if first >= last {
            add(&part(from, to));
        } else {
            add(&part(from, first * BLOCK));
            self.blocks[first..last].iter().for_each(&mut add);
            add(&part(last * BLOCK, to));
        }
        sum.moved(about - self.centre)
    }

    fn tail(&self, from: usize, to: usize, offset: f64, scale: f64) -> PowerSums {
        let m = &self.plain.masses.gev()[from..to];
        match self.plain.masses.weights() {
            None => power_sums(m, offset, scale),
            Some(w) => weighted_power_sums(m, &w[from..to], offset, scale),
        }
    }

    /// One side: core and tail.
    fn side(&self, values: &[f64], high: bool, peak: f64) -> Part {
        let gev = self.plain.masses.gev();
        let (place, kind) = self.sides[usize::from(high)];
        let sigma = values[place];
        let sign = if high { 1.0 } else { -1.0 };
        let middle = gev.partition_point(|&m| m < peak);
        let join = match kind {
            Kind::None => f64::INFINITY,
            Kind::Power(alpha, _) => values[alpha],
            Kind::Exponential(k) => values[k],
        };
        let (core, tail) = if high {
            let end = gev.partition_point(|&m| m <= peak + join * sigma).max(middle);
            ((middle, end), (end, gev.len()))
        } else {
            let start = gev.partition_point(|&m| m < peak - join * sigma).min(middle);
            ((start, middle), (0, start))
        };
        let mut part = self.moments(core.0, core.1, peak).core(sigma);
        match kind {
            Kind::None => {}
            Kind::Power(alpha, n) => {
                let (alpha, n) = (values[alpha], values[n]);
                let ratio = alpha / n;
                let scale = sign * ratio / sigma;
                let offset = 1.0 - ratio * alpha - scale * peak;
                part.add(&self.tail(tail.0, tail.1, offset, scale).part(sign, sigma, alpha, n));
            }
            Kind::Exponential(k) => {
                part.add(&self.moments(tail.0, tail.1, peak).exponential(sign, sigma, values[k]));
            }
        }
        part
    }

    /// Gradient of the logarithm of the integral of the raw shape over the window, and that logarithm.
    fn ln_area(&self, values: &[f64]) -> Option<(f64, Vec<f64>)> {
        let line: LineShape = self.model().line.with_parameters(values).ok()?;
        let (probability, by_window) = window(&line, self.model().window);
        if !(probability > 1e-290) {
            return None;
        }
        // At the peak the raw shape is 1 whatever the parameters: there ln pdf is minus the logarithm of the norm.
        let mut gradient = vec![0.0; values.len()];
        let at_peak = line.ln_pdf_gradient(values[0] + values[self.bias], &mut gradient);
        for (g, w) in gradient.iter_mut().zip(&by_window) {
            *g = w / probability - *g;
        }
        Some((libm::log(probability) - at_peak, gradient))
    }

    /// Value, gradient and second derivatives (by differences of the closed gradient) of [`Sums::ln_area`].
    fn area(&self, values: &[f64]) -> Option<Evaluation> {
        let count = values.len();
        let (value, gradient) = self.ln_area(values)?;
        let sigma = values[self.sides[0].0].min(values[self.sides[1].0]);
        let mut hessian = DMatrix::zeros(count, count);
        for k in 0..count {
            let scale = if k == 0 || k == self.bias { sigma } else { values[k] - self.lowest(k) };
            let step = 1e-5 * scale;
            let mut moved = values.to_vec();
            moved[k] = values[k] + step;
            let (above, (_, up)) = (moved[k], self.ln_area(&moved)?);
            moved[k] = values[k] - step;
            let (below, (_, down)) = (moved[k], self.ln_area(&moved)?);
            for l in 0..count {
                let half = 0.5 * (up[l] - down[l]) / (above - below);
                hessian[(k, l)] += half;
                hessian[(l, k)] += half;
            }
        }
        Some(Evaluation { value, gradient: DVector::from_vec(gradient), hessian })
    }

    /// Lower end of the domain of a parameter.
    fn lowest(&self, k: usize) -> f64 {
        let is_power = self.sides.iter().any(|(_, kind)| matches!(kind, Kind::Power(_, n) if *n == k));
        if is_power { 1.0 } else { 0.0 }
    }
}

impl Objective for Sums<'_> {
    fn evaluate(&self, values: &[f64]) -> Option<Evaluation> {
        let mut sum = self.area(values)?;
        sum.value *= self.total;
        sum.gradient *= self.total;
        sum.hessian *= self.total;
        let peak = values[0] + values[self.bias];
        for high in [false, true] {
            let part = self.side(values, high, peak);
            sum.value += part.value;
            let (sigma, kind) = self.sides[usize::from(high)];
            // Mass and bias move the peak alike.
            let mut places = vec![(0, 0), (0, self.bias), (1, sigma)];
            match kind {
                Kind::None => {}
                Kind::Power(alpha, n) => places.extend([(2, alpha), (3, n)]),
                Kind::Exponential(k) => places.push((2, k)),
            }
            for &(i, k) in &places {
                sum.gradient[k] += part.gradient[i];
                for &(j, l) in &places {
                    sum.hessian[(k, l)] += part.hessian[i][j];
                }
            }
        }
        Some(sum).filter(Evaluation::is_finite)
    }

    fn exact(&self) -> bool {
        true
    }

    fn weighted_scores(&self, values: &[f64]) -> Option<DMatrix<f64>> {
        self.plain.weighted_scores(values)
    }
}

/// Moments of masses about a point.
fn moments(m: &[f64], weights: Option<&[f64]>, about: f64) -> Moments {
    let mut sum = Moments::default();
    for (i, &m) in m.iter().enumerate() {
        let w = weights.and_then(|w| w.get(i)).copied().unwrap_or(1.0);
        let d = m - about;
        sum.weight += w;
        sum.first += w * d;
        sum.second += w * d * d;
    }
    sum
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;
    use crate::fit::objective::second_derivatives;
    use crate::lineshape::{Mixture, Resolution};
    use rand::SeedableRng;

    fn shapes() -> Vec<Resolution> {
        vec![
            Resolution::gaussian(0.1, 1.5).unwrap(),
            Resolution::crystal_ball(0.0, 1.5, 1.1, 3.0).unwrap(),
            Resolution::double_crystal_ball(0.2, 1.5, (1.1, 3.0), (1.6, 6.0)).unwrap(),
            Resolution::double_crystal_ball_two_sigmas(0.0, (1.5, 1.2), (1.1, 3.0), (1.6, 6.0)).unwrap(),
            Resolution::gauss_exp(0.0, 1.5, 1.2).unwrap(),
            Resolution::double_gauss_exp(0.0, 1.5, 1.2, 0.9).unwrap(),
        ]
    }

    /// The general path shares neither the sums nor their derivatives, and differences of the gradient judge the second
    /// derivatives, away from the values that the sample was drawn with.
    #[test]
    fn agree_with_the_general_path() {
        let mut random = rand::rngs::StdRng::seed_from_u64(5);
        for shape in shapes() {
            let line = LineShape::new(Natural::line(90.0).unwrap(), Some(Mixture::from(shape))).unwrap();
            let mut gev = vec![0.0; 5000];
            line.sample(&mut random, &mut gev);
            let weights: Vec<f64> = (0..gev.len()).map(|i| 0.5 + (i % 7) as f64 / 7.0).collect();
            for window in [(f64::NEG_INFINITY, f64::INFINITY), (86.0, 95.0)] {
                for weights in [None, Some(weights.clone())] {
                    let masses = Masses::new(gev.clone(), weights).unwrap().inside(window).unwrap();
                    let model = Model::new(line.clone(), None, window).unwrap();
                    let sums = Sums::new(&model, &masses).unwrap();
                    let plain = Unbinned { model: &model, masses: &masses };
                    let values: Vec<f64> = line
                        .parameters()
                        .iter()
                        .enumerate()
                        .map(|(k, p)| if k == 0 { p.value + 0.05 } else { p.value * (1.0 + 0.02 * (k % 3) as f64) })
                        .collect();
                    let (fast, slow) = (sums.evaluate(&values).unwrap(), plain.evaluate(&values).unwrap());
                    let size = slow.value.abs();
                    // Rounding of sums of thousands of terms.
                    assert!((fast.value - slow.value).abs() < 1e-11 * size, "{shape:?}");
                    assert!((&fast.gradient - &slow.gradient).amax() < 1e-10 * size, "{shape:?}");
                    let free: Vec<usize> = (0..values.len()).collect();
                    let steps = vec![1e-6; values.len()];
                    let hessian = second_derivatives(&sums, &values, &free, &steps).unwrap();
                    let scale = hessian.amax();
                    // Between the steps a mass can cross a join, where the second derivative jumps.
                    assert!((&fast.hessian - &hessian).amax() < 1e-3 * scale, "{shape:?} {} {hessian}", fast.hessian);
                }
            }
        }
    }
}
