//! Times of the line shapes, one JSON line each, best of several repeats on one thread:
//! `cargo bench --bench shapes`; `tests/benches/compare_shapes.py` runs it in turn with the baseline.
#![allow(clippy::unwrap_used)]

use std::hint::black_box;
use std::time::Instant;

use peakfold::lineshape::{BreitWigner, LineShape, Natural, Relativistic, Resolution, Shape};
use rand::{RngExt, SeedableRng};

const REPEATS: usize = 15;

fn best(mut work: impl FnMut()) -> f64 {
    work();
    let mut least = f64::INFINITY;
    for _ in 0..REPEATS {
        let start = Instant::now();
        work();
        least = least.min(start.elapsed().as_secs_f64());
    }
    least
}

fn report(what: &str, points: usize, seconds: f64, error: Option<f64>) {
    let error = error.map_or(String::new(), |e| format!(", \"max_err_over_peak\": {e:e}"));
    println!(
        "{{\"what\": \"{what}\", \"n\": {points}, \"ms\": {:.4}, \"ns_per_point\": {:.2}{error}}}",
        1e3 * seconds,
        1e9 * seconds / points as f64
    );
}

fn largest_difference(found: &[f64], exact: &[f64]) -> f64 {
    let peak = exact.iter().copied().fold(0.0, f64::max);
    found.iter().zip(exact).map(|(f, e)| (f - e).abs()).fold(0.0, f64::max) / peak
}

fn main() {
    let mut random = rand::rngs::StdRng::seed_from_u64(1);
    let x: Vec<f64> = (0..1_000_000).map(|_| random.random_range(150.0..210.0)).collect();
    let mut out = vec![0.0; x.len()];

    let dscb = Resolution::double_crystal_ball(180.0, 1.6, (1.6, 4.0), (2.0, 8.0)).unwrap();
    report("double-crystal-ball pdf", x.len(), best(|| dscb.pdf_slice(black_box(&x), &mut out)), None);
    report("double-crystal-ball ln pdf", x.len(), best(|| dscb.ln_pdf_slice(black_box(&x), &mut out)), None);
    let mut gradient = vec![0.0; 6 * 1024];
    let mut ln_pdf = vec![0.0; 1024];
    let seconds = best(|| {
        for chunk in x.chunks_exact(1024) {
            dscb.ln_pdf_gradient_slice(black_box(chunk), &mut ln_pdf, &mut gradient);
        }
    });
    report("double-crystal-ball ln pdf and gradient", x.len() / 1024 * 1024, seconds, None);
    report("double-crystal-ball cdf", x.len(), best(|| dscb.cdf_slice(black_box(&x), &mut out)), None);

    let natural = Natural::BreitWigner(BreitWigner::new(180.0, 4.0).unwrap());
    let gaussian = Resolution::gaussian(0.0, 1.6).unwrap();
    let voigt = LineShape::new(natural, Some(gaussian.into())).unwrap();
    report("voigt pdf", x.len(), best(|| voigt.pdf_slice(black_box(&x), &mut out)), None);

    let dscb = Resolution::double_crystal_ball(0.0, 1.6, (1.6, 4.0), (2.0, 8.0)).unwrap();
    let grid: Vec<f64> = (0..1000).map(|i| 150.0 + 60.0 * f64::from(i) / 999.0).collect();
    let mut out = vec![0.0; grid.len()];
    for (name, natural) in [
        ("breit-wigner", Natural::BreitWigner(BreitWigner::new(180.0, 5.0).unwrap())),
        ("relativistic", Natural::Relativistic(Relativistic::new(180.0, 5.0).unwrap())),
    ] {
        // Made anew each time, as a fit would.
        let make = || LineShape::new(natural, Some(black_box(dscb).into())).unwrap();
        let seconds = best(|| make().pdf_slice(black_box(&grid), &mut out));
        let exact: Vec<f64> = grid.iter().map(|&m| make().pdf(m)).collect();
        let error = largest_difference(&out, &exact);
        report(&format!("{name} with double-crystal-ball, slice"), grid.len(), seconds, Some(error));
        let seconds = best(|| {
            for (value, &m) in out.iter_mut().zip(&grid) {
                *value = make().pdf(m);
            }
        });
        report(&format!("{name} with double-crystal-ball, adaptive"), grid.len(), seconds, None);
    }

    let shape = LineShape::new(natural, Some(dscb.into())).unwrap();
    let count = shape.parameter_count();
    let mut ln_pdf = vec![0.0; x.len()];
    let mut gradient = vec![0.0; count * x.len()];
    let seconds = best(|| shape.ln_pdf_gradient_slice(black_box(&x), &mut ln_pdf, &mut gradient));
    report("breit-wigner with double-crystal-ball ln pdf and gradient", x.len(), seconds, None);
}
