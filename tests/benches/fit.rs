//! Time of an unbinned fit of the double-sided Crystal Ball function, with errors, on one thread; one JSON line.
//!
//! `cargo bench --bench fit [-- FILE]`: FILE holds the masses as 64-bit little-endian numbers; without it 10^6 masses are
//! drawn. `tests/benches/compare_fit.py` runs it in turn with a baseline on the same file.
#![allow(clippy::unwrap_used)]

use std::time::Instant;

use peakfold::fit::{Data, Masses, Model, Settings, fit};
use peakfold::lineshape::{LineShape, Natural, Resolution, Shape};
use rand::SeedableRng;

const REPEATS: usize = 7;

fn line(mass: f64, sigma: f64, low: (f64, f64), high: (f64, f64)) -> LineShape {
    let resolution = Resolution::double_crystal_ball(0.0, sigma, low, high).unwrap();
    LineShape::new(Natural::line(mass).unwrap(), Some(resolution.into())).unwrap()
}

fn main() {
    let file = std::env::args().skip(1).find(|argument| !argument.starts_with("--"));
    let masses: Vec<f64> = match file {
        Some(file) => {
            std::fs::read(file).unwrap().as_chunks::<8>().0.iter().map(|bytes| f64::from_le_bytes(*bytes)).collect()
        }
        None => {
            let mut masses = vec![0.0; 1_000_000];
            let truth = line(180.0, 1.6, (1.6, 4.0), (2.0, 8.0));
            truth.sample(&mut rand::rngs::StdRng::seed_from_u64(1), &mut masses);
            masses
        }
    };
    let n = masses.len();
    let data = Data::from(Masses::new(masses, None).unwrap());
    let start = line(179.0, 2.0, (1.3, 3.0), (1.6, 5.0));
    let model = Model::new(start, None, (f64::NEG_INFINITY, f64::INFINITY)).unwrap();
    let mut best = f64::INFINITY;
    let mut outcome = None;
    for _ in 0..REPEATS {
        let begin = Instant::now();
        let found = fit(&data, &model, &Settings::default()).unwrap();
        best = best.min(begin.elapsed().as_secs_f64());
        outcome = Some(found);
    }
    let outcome = outcome.unwrap();
    let free = || outcome.parameters.iter().filter(|p| p.free);
    let values: Vec<f64> = free().map(|p| p.value).collect();
    let errors: Vec<f64> = free().map(|p| p.error.unwrap()).collect();
    println!(
        "{{\"what\": \"fit\", \"n\": {n}, \"seconds\": {best:.6}, \"iterations\": {}, \"distance\": {:e}, \"converged\": {}, \
         \"values\": {values:?}, \"errors\": {errors:?}}}",
        outcome.iterations,
        outcome.distance,
        outcome.converged()
    );
}
