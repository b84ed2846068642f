//! The likelihood of a histogram.

use nalgebra::{DMatrix, DVector};

use super::data::Histogram;
use super::model::Model;
use super::objective::{Evaluation, Objective};
use super::poisson::poisson;
use crate::lineshape::Shape;

/// See the module. The second derivatives are their expectation: `Σ ∇μ ∇μᵀ / variance`.
pub(super) struct Binned<'a> {
    pub model: &'a Model,
    pub histogram: &'a Histogram,
}

/// Expected events per bin, those of the background alone, and derivatives (bins × parameters, parameter-major).
pub(super) struct Expected {
    pub events: Vec<f64>,
    pub background: Vec<f64>,
    pub gradient: Vec<f64>,
}

/// Expected events in bins inside the window; `None` outside the domain of the model.
pub(super) fn expected(model: &Model, values: &[f64], bins: &[(f64, f64)], with_gradient: bool) -> Option<Expected> {
    let point = model.at(values)?;
    let (n, lines, start) = (bins.len(), model.line_count(), model.background_start());
    let signal = model.signal(values);
    let mut expected = Expected {
        events: vec![0.0; n],
        background: vec![0.0; n],
        gradient: vec![0.0; if with_gradient { n * model.count() } else { 0 }],
    };
    for (first, edges) in runs(bins) {
        let count = edges.len() - 1;
        let mut probability = vec![0.0; count];
        point.line.bin_probabilities(&edges, &mut probability);
        if edges[0] == f64::NEG_INFINITY {
            probability[0] = point.line.cdf(edges[1]);
        }
        if edges[count] == f64::INFINITY {
            probability[count - 1] = point.line.sf(edges[count - 1]);
        }
        for (slot, p) in expected.events[first..].iter_mut().zip(&probability) {
            *slot = p / point.window_probability;
        }
        if with_gradient {
            let mut own = vec![0.0; lines * count];
            point.line.bin_probability_gradient(&edges, &mut own);
            for k in 0..lines {
                for i in 0..count {
                    let relative = own[k * count + i] / point.window_probability
                        - expected.events[first + i] * point.ln_window_gradient[k];
                    expected.gradient[k * n + first + i] = signal * relative;
                }
            }
        }
    }
    let mut own = vec![0.0; model.background.map_or(0, super::Background::count)];
    for (i, &bin) in bins.iter().enumerate() {
        let probability = expected.events[i];
        expected.events[i] = signal * probability;
        if let Some(kind) = model.background {
            expected.background[i] = kind.bin(model.background_values(values), model.window, bin, &mut own);
            expected.events[i] += expected.background[i];
        }
        if with_gradient {
            if model.counted {
                expected.gradient[lines * n + i] = probability;
            }
            for (k, g) in own.iter().enumerate() {
                expected.gradient[(start + k) * n + i] = *g;
            }
        }
    }
    expected.events.iter().all(|v| v.is_finite()).then_some(expected)
}

/// Runs of bins without gaps: number of the first bin, and the edges.
fn runs(bins: &[(f64, f64)]) -> Vec<(usize, Vec<f64>)> {
    let mut list: Vec<(usize, Vec<f64>)> = vec![];
    for (i, &(low, high)) in bins.iter().enumerate() {
        match list.last_mut() {
            Some((_, edges)) if edges.last().is_some_and(|&end| (low - end).abs() <= 1e-9 * (high - low)) => {
                edges.push(high);
            }
            _ => list.push((i, vec![low, high])),
        }
    }
    list
}

impl Objective for Binned<'_> {
    fn evaluate(&self, values: &[f64]) -> Option<Evaluation> {
        let bins = self.histogram.bins();
        let n = bins.len();
        let count = self.model.count();
        let expected = expected(self.model, values, bins, true)?;
        let (mut value, mut slope, mut curvature) = (0.0, vec![0.0; n], vec![0.0; n]);
        for i in 0..n {
            let (found, mu) = (self.histogram.counts()[i], expected.events[i]);
            if let Some(errors) = self.histogram.errors() {
                let weight = 1.0 / (errors[i] * errors[i]);
                value += 0.5 * weight * (found - mu) * (found - mu);
                slope[i] = weight * (mu - found);
                curvature[i] = weight;
                continue;
            }
            let term = poisson(found, mu)?;
            value += term.value;
            (slope[i], curvature[i]) = (term.slope, term.curvature);
        }
        let row = |k: usize| &expected.gradient[k * n..(k + 1) * n];
        let gradient = DVector::from_fn(count, |k, _| row(k).iter().zip(&slope).map(|(g, s)| g * s).sum());
        let hessian = DMatrix::from_fn(count, count, |k, l| {
            row(k).iter().zip(row(l)).zip(&curvature).map(|((a, b), c)| a * b * c).sum()
        });
        Some(Evaluation { value, gradient, hessian }).filter(Evaluation::is_finite)
    }

    fn exact(&self) -> bool {
        false
    }
}
