//! The likelihood of masses, for any line shape and background.

use nalgebra::{DMatrix, DVector};

use super::data::Masses;
use super::model::Model;
use super::objective::{Evaluation, Objective};
use crate::lineshape::Shape;

/// Points evaluated together: large, because a convolution makes its grid anew for each.
const CHUNK: usize = 1 << 16;
/// Points whose products are added together, so that they stay in the cache.
const BLOCK: usize = 512;
const LANES: usize = 8;

/// See the module. The second derivatives are `Σ w g gᵀ`, g the derivatives of `ln λ` of one mass: their expectation at
/// the true values (E. K. Berndt, B. H. Hall, R. E. Hall and J. A. Hausman, Ann. Econ. Soc. Meas. 3 (1974) 653).
pub(super) struct Unbinned<'a> {
    pub model: &'a Model,
    pub masses: &'a Masses,
}

impl Unbinned<'_> {
    /// Value, gradient, and `Σ w^power g gᵀ`.
    fn pass(&self, values: &[f64], power: i32) -> Option<Evaluation> {
        let model = self.model;
        let (lines, count) = (model.line_count(), model.count());
        let point = model.at(values)?;
        let (mut value, mut gradient, mut hessian) = (0.0, DVector::zeros(count), DMatrix::zeros(count, count));
        let masses = self.masses.gev();
        let size = CHUNK.min(masses.len());
        // The background's own rows come after those of the model.
        let mut rows = vec![0.0; (count + 1) * size];
        let mut ln_pdf = vec![0.0; size];
        let mut weights = vec![1.0; size];
        let mut heavy = vec![1.0; size];
        for (chunk, m) in masses.chunks(CHUNK).enumerate() {
            let n = m.len();
            if let Some(all) = self.masses.weights() {
                for ((w, h), &own) in weights.iter_mut().zip(&mut heavy).zip(&all[chunk * CHUNK..]) {
                    (*w, *h) = (own, if power == 2 { own * own } else { own });
                }
            }
            point.line.ln_pdf_gradient_slice(m, &mut ln_pdf[..n], &mut rows[..lines * n]);
            for k in 0..lines {
                let shift = point.ln_window_gradient[k];
                rows[k * n..(k + 1) * n].iter_mut().for_each(|g| *g -= shift);
            }
            let ln_window = libm::log(point.window_probability);
            ln_pdf[..n].iter_mut().for_each(|v| *v -= ln_window);
            if model.counted {
                add_background(model, values, m, &mut ln_pdf[..n], &mut rows[..(count + 1) * n]);
            }
            for (&w, &l) in weights.iter().zip(&ln_pdf[..n]) {
                value -= w * l;
            }
            for k in 0..count {
                gradient[k] -= dot(&rows[k * n..(k + 1) * n], &weights[..n]);
            }
            products(&rows[..count * n], &heavy[..n], count, &mut hessian);
        }
        if model.counted {
            add_yields(model, values, &mut value, &mut gradient);
        }
        Some(Evaluation { value, gradient, hessian }).filter(Evaluation::is_finite)
    }
}

/// Turns `ln p_s` into `ln λ`, and the rows of its derivatives into those of `ln λ`.
fn add_background(model: &Model, values: &[f64], m: &[f64], ln_pdf: &mut [f64], rows: &mut [f64]) {
    let n = m.len();
    let (lines, start) = (model.line_count(), model.background_start());
    let signal = model.signal(values);
    let (front, last) = rows.split_at_mut(model.count() * n);
    let background = &mut last[..n];
    background.fill(0.0);
    if let Some(kind) = model.background {
        kind.density(model.background_values(values), model.window, m, background, &mut front[start * n..]);
    }
    for i in 0..n {
        let density = crate::numerics::kernel::exp(ln_pdf[i]);
        let intensity = signal * density + background[i];
        let inverse = 1.0 / intensity;
        let share = signal * density * inverse;
        for k in 0..lines {
            front[k * n + i] *= share;
        }
        front[lines * n + i] = density * inverse;
        for k in start..model.count() {
            front[k * n + i] *= inverse;
        }
        // A negative intensity has no logarithm: NaN, which the caller refuses.
        ln_pdf[i] = libm::log(intensity);
    }
}

/// The expected number of events, which the extended likelihood adds.
fn add_yields(model: &Model, values: &[f64], value: &mut f64, gradient: &mut DVector<f64>) {
    *value += model.signal(values);
    gradient[model.line_count()] += 1.0;
    if let Some(kind) = model.background {
        *value += kind.events(model.background_values(values));
        let mut own = vec![0.0; kind.count()];
        kind.events_gradient(&mut own);
        for (k, g) in own.iter().enumerate() {
            gradient[model.background_start() + k] += g;
        }
    }
}

impl Objective for Unbinned<'_> {
    fn evaluate(&self, values: &[f64]) -> Option<Evaluation> {
        self.pass(values, 1)
    }

    fn exact(&self) -> bool {
        false
    }

    fn weighted_scores(&self, values: &[f64]) -> Option<DMatrix<f64>> {
        self.masses.weights()?;
        self.pass(values, 2).map(|evaluation| evaluation.hessian)
    }
}

/// Adds `Σ w r_k r_l` over the points to the matrix.
fn products(rows: &[f64], weights: &[f64], count: usize, matrix: &mut DMatrix<f64>) {
    let n = weights.len();
    let mut scaled = [0.0; BLOCK];
    for start in (0..n).step_by(BLOCK) {
        let end = (start + BLOCK).min(n);
        for k in 0..count {
            let row = &rows[k * n + start..k * n + end];
            for ((slot, &r), &w) in scaled.iter_mut().zip(row).zip(&weights[start..end]) {
                *slot = r * w;
            }
            for l in 0..=k {
                let sum = dot(&scaled[..end - start], &rows[l * n + start..l * n + end]);
                matrix[(k, l)] += sum;
                if l != k {
                    matrix[(l, k)] += sum;
                }
            }
        }
    }
}

crate::wide! {
    /// Sum of the products of two slices, in lanes of fixed number so that every processor adds in the same order.
    fn dot(a: &[f64], b: &[f64]) -> f64 {
        let mut sum = [0.0; LANES];
        let (a_rows, a_rest) = a.as_chunks::<LANES>();
        let (b_rows, b_rest) = b.as_chunks::<LANES>();
        for (a, b) in a_rows.iter().zip(b_rows) {
            for i in 0..LANES {
                sum[i] += a[i] * b[i];
            }
        }
        let rest: f64 = a_rest.iter().zip(b_rest).map(|(a, b)| a * b).sum();
        sum.iter().sum::<f64>() + rest
    }
}
