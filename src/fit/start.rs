//! Where a fit starts when nobody says so.

use super::Background;
use super::data::{Data, Histogram};
use super::settings::Settings;
use crate::lineshape::{LineShape, Shape};

/// FWHM of a Gaussian in standard deviations.
const FWHM: f64 = 2.354_820_045_030_949_4;

/// The line shape moved to the peak of the data and widened to it, except for what `settings` gives a value.
///
/// The peak is where the narrowest interval with a quarter of the data lies; its length tells the width.
pub fn starting_shape(line: &LineShape, data: &Data, window: (f64, f64), settings: &Settings) -> LineShape {
    let Some((peak, sigma)) = peak_and_sigma(data, window) else { return line.clone() };
    let natural = line.natural().width() / FWHM;
    // What the natural width leaves to the resolution, but not nothing.
    let resolution = (sigma * sigma - natural * natural).max(0.1 * sigma * sigma).sqrt();
    let parameters = line.parameters();
    let given = |name: &str| settings.fixed.iter().chain(&settings.starts).find(|(n, _)| n == name).map(|(_, v)| *v);
    let bias = given("bias").or(parameters.iter().find(|p| p.name == "bias").map(|p| p.value)).unwrap_or(0.0);
    let values: Vec<f64> = parameters
        .iter()
        .map(|p| {
            let guess = match p.name.as_str() {
                "mass" => peak - bias,
                "sigma" | "sigma_low" | "sigma_high" => resolution,
                _ => p.value,
            };
            given(&p.name).unwrap_or(guess)
        })
        .collect();
    line.with_parameters(&values).unwrap_or_else(|_| line.clone())
}

fn peak_and_sigma(data: &Data, window: (f64, f64)) -> Option<(f64, f64)> {
    let (m, w) = match data {
        Data::Masses(masses) => {
            let inside = masses.inside(window).ok()?;
            let step = inside.gev().len() / 20_000 + 1;
            let thin = inside.thinned(step);
            (thin.gev().to_vec(), thin.weights().map_or_else(|| vec![1.0; thin.gev().len()], <[f64]>::to_vec))
        }
        Data::Histogram(histogram) => spread(&histogram.inside(window).ok()?),
    };
    let mut sums = vec![0.0];
    let mut sum = 0.0;
    for &w in &w {
        sum += w.max(0.0);
        sums.push(sum);
    }
    let share = 0.25;
    let mut best: Option<(f64, f64)> = None;
    let mut end = 0;
    for start in 0..m.len() {
        while end < m.len() && sums[end] - sums[start] < share * sum {
            end += 1;
        }
        if sums[end.min(m.len())] - sums[start] < share * sum {
            break;
        }
        let last = m[end.saturating_sub(1).max(start)];
        let length = last - m[start];
        if best.is_none_or(|(l, _)| length < l) {
            best = Some((length, 0.5 * (m[start] + last)));
        }
    }
    let (length, peak) = best?;
    let range = m[m.len() - 1] - m[0];
    // A Gaussian has a quarter of its events within 0.3186 sigma of its peak.
    let sigma = (length / (2.0 * 0.3186)).clamp(1e-4 * range, 0.5 * range);
    (sigma > 0.0).then_some((peak, sigma))
}

/// Each bin as a few masses across it.
fn spread(histogram: &Histogram) -> (Vec<f64>, Vec<f64>) {
    let (mut m, mut w) = (vec![], vec![]);
    for (&(low, high), &count) in histogram.bins().iter().zip(histogram.counts()) {
        for i in 0..10 {
            m.push(low + (high - low) * (f64::from(i) + 0.5) / 10.0);
            w.push(count / 10.0);
        }
    }
    (m, w)
}

/// Starts of the yields and of the background: signal yield, then the background's own.
pub(super) fn yields(data: &Data, background: Option<Background>, window: (f64, f64)) -> Vec<f64> {
    let total = match data {
        Data::Masses(masses) => masses.total(),
        Data::Histogram(histogram) => histogram.total(),
    };
    let total = total.max(1.0);
    let Some(kind) = background else { return vec![total] };
    let (m, w) = match data {
        Data::Masses(masses) => {
            let w = masses.weights().map_or_else(|| vec![1.0; masses.gev().len()], <[f64]>::to_vec);
            (masses.gev().to_vec(), w)
        }
        Data::Histogram(histogram) => spread(histogram),
    };
    let width = window.1 - window.0;
    let between = |from: f64, to: f64| -> f64 {
        m.iter()
            .zip(&w)
            .filter(|(m, _)| **m >= window.0 + from * width && **m <= window.0 + to * width)
            .map(|p| p.1)
            .sum()
    };
    // The outer tenths are taken for background.
    let (low, high) = (between(0.0, 0.1).max(0.5), between(0.9, 1.0).max(0.5));
    let events = (5.0 * (low + high)).min(0.9 * total);
    let mut list = vec![total - events];
    match kind {
        Background::Exponential => list.extend([events, libm::log(low / high) / (0.9 * width)]),
        Background::Polynomial(degree) => {
            for k in 0..=degree {
                let u = if degree == 0 { 0.5 } else { k as f64 / degree as f64 };
                list.push(events / (degree + 1) as f64 * 2.0 * (low * (1.0 - u) + high * u) / (low + high));
            }
        }
    }
    list
}
