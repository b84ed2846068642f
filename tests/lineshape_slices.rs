//! Slices of line shapes against the point by point path over the whole range of masses, at the extremes of their
//! parameters, and with narrow vectors. The point by point path is judged in `lineshape_properties.rs` and
//! `lineshape_reference.rs`; of the slices' nodes and grids it uses nothing.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use std::fmt::Write;
use std::process::Command;

use peakfold::lineshape::{
    BreitWigner, LineShape, Mixture, Natural, Relativistic, Resolution, RunningWidth, Scaling, Shape,
};
use rand::rngs::StdRng;
use rand::{RngExt, SeedableRng};

fn log_uniform(random: &mut StdRng, low: f64, high: f64) -> f64 {
    random.random_range(low.ln()..high.ln()).exp()
}

fn naturals(mass: f64, width: f64) -> [Natural; 3] {
    [
        Natural::BreitWigner(BreitWigner::new(mass, width).unwrap()),
        Natural::Relativistic(Relativistic::new(mass, width).unwrap()),
        Natural::RunningWidth(RunningWidth::new(mass, width).unwrap()),
    ]
}

fn resolutions(random: &mut StdRng, sigma: f64) -> Vec<Mixture> {
    let mut tail = || (random.random_range(0.3..3.5), log_uniform(random, 1.3, 60.0));
    let (low, high) = (tail(), tail());
    let bias = random.random_range(-1.0..1.0) * sigma;
    let gaussian = Resolution::gaussian(bias, sigma).unwrap();
    let double = Resolution::double_crystal_ball(bias, sigma, low, high).unwrap();
    vec![
        gaussian.into(),
        double.into(),
        Resolution::crystal_ball(bias, sigma, low.0, low.1).unwrap().into(),
        Resolution::double_crystal_ball_two_sigmas(bias, (sigma, 1.7 * sigma), high, low).unwrap().into(),
        Resolution::double_gauss_exp(bias, sigma, 0.3 * low.0, high.0).unwrap().into(),
        Mixture::new(vec![double, gaussian], &[0.4]).unwrap(),
    ]
}

/// Dense in the core, and far out on both sides on a logarithmic scale; in no order.
fn points(centre: f64, scale: f64, reach: f64, lowest: f64) -> Vec<f64> {
    let mut list: Vec<f64> = (0..150).map(|i| centre + scale * 0.1 * f64::from(i * 7 % 150 - 75)).collect();
    for i in 0..60 {
        let distance = scale * (reach / 1.0_f64).powf(f64::from(i) / 59.0);
        list.extend([centre - distance, centre + distance]);
    }
    list.retain(|&x| x > lowest);
    list
}

/// The largest relative error of a slice, and where, among the points where more than the floor is wrong.
fn worst(m: &[f64], found: &[f64], exact: &[f64], floor: f64) -> (f64, f64) {
    let error = |i: usize| if (found[i] - exact[i]).abs() <= floor { 0.0 } else { (found[i] / exact[i] - 1.0).abs() };
    let place = (0..m.len()).max_by(|&i, &j| error(i).total_cmp(&error(j))).unwrap();
    (error(place), m[place])
}

fn check_slices(shape: &LineShape, m: &[f64]) {
    let slice = |f: &dyn Fn(&[f64], &mut [f64])| {
        let mut out = vec![0.0; m.len()];
        f(m, &mut out);
        out
    };
    let each = |f: &dyn Fn(f64) -> f64| m.iter().map(|&x| f(x)).collect::<Vec<f64>>();
    let exact = each(&|x| shape.pdf(x));
    let peak = exact.iter().copied().fold(0.0, f64::max);
    let (error, x) = worst(m, &slice(&|m, out| shape.pdf_slice(m, out)), &exact, 1e-15 * peak);
    assert!(error < LineShape::GRID_ERROR, "pdf at {x}: {error:e}, {:e} of the peak: {shape:?}", shape.pdf(x) / peak);
    for (above, what) in [(false, "cdf"), (true, "sf")] {
        let some = &m[..m.len().min(400)];
        let mut found = vec![0.0; some.len()];
        if above {
            shape.sf_slice(some, &mut found)
        } else {
            shape.cdf_slice(some, &mut found)
        }
        // Every 9th is judged: the exact ones are slow.
        for (&x, &found) in some.iter().zip(&found).step_by(9) {
            let exact = if above { shape.sf(x) } else { shape.cdf(x) };
            let bound = LineShape::GRID_ERROR * exact + 1e-15;
            assert!((found - exact).abs() < bound, "{shape:?}: {what} at {x}: {found:e} not {exact:e}");
        }
    }
}

/// Checks one set of shapes on points up to `reach` widths out.
fn check_set(random: &mut StdRng, reach: f64, falloff: Option<f64>) {
    let mass = random.random_range(60.0..200.0);
    let width = mass * log_uniform(random, 3e-3, 1.2);
    let sigma = log_uniform(random, 0.3, 8.0);
    for resolution in resolutions(random, sigma) {
        for natural in naturals(mass, width) {
            let shape = LineShape::with_options(natural, Some(resolution.clone()), Scaling::Constant, falloff);
            check_slices(&shape.unwrap(), &points(mass, width + sigma, reach, f64::NEG_INFINITY));
            let shape = LineShape::with_options(natural, Some(resolution.clone()), Scaling::Proportional, falloff);
            check_slices(&shape.unwrap(), &points(mass, width + sigma, reach.min(100.0), 0.02 * mass));
        }
    }
}

/// The bound of [`LineShape::GRID_ERROR`] from the core to 1000 widths out. Such a window holds too many nodes to share.
#[test]
fn whole_range() {
    let mut random = StdRng::seed_from_u64(404);
    for falloff in [None, None, None, Some(9.6)] {
        check_set(&mut random, 1000.0, falloff);
    }
}

/// The same in windows as fits have them, on shared nodes; many reach across the end of the true mass.
#[test]
fn shared_nodes() {
    let mut random = StdRng::seed_from_u64(406);
    for set in 0..9 {
        let falloff = (set % 3 == 2).then(|| random.random_range(0.0..12.0));
        check_set(&mut random, 9.0, falloff);
    }
}

/// Gradients of the grid from the core to 100 widths out: 1e-6 of the largest that the component is.
#[test]
fn gradients() {
    let mut random = StdRng::seed_from_u64(405);
    for set in 0..4 {
        let mass = random.random_range(60.0..200.0);
        let width = mass * log_uniform(&mut random, 3e-3, 0.5);
        let sigma = log_uniform(&mut random, 0.3, 8.0);
        for resolution in resolutions(&mut random, sigma) {
            for natural in naturals(mass, width) {
                let scaling = if set % 2 == 0 { Scaling::Constant } else { Scaling::Proportional };
                let falloff = (set > 1).then_some(3.0);
                let shape = LineShape::with_options(natural, Some(resolution.clone()), scaling, falloff).unwrap();
                let m = points(mass, width + sigma, 30.0, 0.02 * mass);
                let count = shape.parameter_count();
                let (mut ln_pdf, mut gradient) = (vec![0.0; m.len()], vec![0.0; count * m.len()]);
                shape.ln_pdf_gradient_slice(&m, &mut ln_pdf, &mut gradient);
                let mut one = vec![0.0; count];
                for (i, &x) in m.iter().enumerate().step_by(5) {
                    let exact = shape.ln_pdf_gradient(x, &mut one);
                    if exact < shape.ln_pdf(mass) - 25.0 {
                        // Below 1e-11 of the peak the grid is right beside the peak only.
                        continue;
                    }
                    assert!((ln_pdf[i] - exact).abs() < 1e-8, "{shape:?} at {x}: {} not {exact}", ln_pdf[i]);
                    for (k, exact) in one.iter().enumerate() {
                        let row = &gradient[k * m.len()..(k + 1) * m.len()];
                        let size = row.iter().map(|g| g.abs()).fold(exact.abs(), f64::max).max(0.05);
                        let error = (row[i] - exact).abs() / size;
                        assert!(error < 1e-6, "{shape:?} at {x}: component {k}: {} not {exact}", row[i]);
                    }
                }
            }
        }
    }
}

/// Widths from 1e-8 to 1e6 sigma, tails from everywhere to nowhere, 60 sigma out: finite logarithms, monotone
/// probabilities, slices as the points.
#[test]
fn extremes() {
    let (mass, sigma) = (1000.0, 1.0);
    let m: Vec<f64> = (-30..=30).map(|i| mass + 2.0 * f64::from(i) * sigma).collect();
    for width in [1e-8, 1e-3, 1.0, 1e3, 1e6] {
        for alpha in [0.05, 1.0, 40.0] {
            for n in [1.0001, 4.0, 500.0] {
                let tails = Resolution::double_crystal_ball(0.0, sigma, (alpha, n), (41.0 - alpha, 501.5 - n)).unwrap();
                for natural in naturals(mass, width) {
                    let shape = LineShape::new(natural, Some(tails.into())).unwrap();
                    let mut rows = vec![vec![0.0; m.len()]; 4];
                    shape.pdf_slice(&m, &mut rows[0]);
                    shape.ln_pdf_slice(&m, &mut rows[1]);
                    shape.cdf_slice(&m, &mut rows[2]);
                    shape.sf_slice(&m, &mut rows[3]);
                    let exact: Vec<f64> = m.iter().map(|&x| shape.pdf(x)).collect();
                    let peak = exact.iter().copied().fold(0.0, f64::max);
                    let (error, x) = worst(&m, &rows[0], &exact, 1e-15 * peak);
                    assert!(error < LineShape::GRID_ERROR, "pdf at {x}: {error:e}: {shape:?}");
                    assert!(rows[1].iter().all(|l| l.is_finite()), "{shape:?}: {:?}", rows[1]);
                    assert!(rows[2].windows(2).all(|p| p[0] <= p[1]), "{shape:?}: cdf {:?}", rows[2]);
                    assert!(rows[3].windows(2).all(|p| p[0] >= p[1]), "{shape:?}: sf {:?}", rows[3]);
                    for (i, &x) in m.iter().enumerate().step_by(10) {
                        assert!(shape.ln_pdf(x).is_finite(), "{shape:?} at {x}: {}", shape.ln_pdf(x));
                        let (cdf, sf) = (shape.cdf(x), shape.sf(x));
                        for (found, exact) in [(rows[2][i], cdf), (rows[3][i], sf)] {
                            let bound = LineShape::GRID_ERROR * exact + 1e-15;
                            assert!((found - exact).abs() < bound, "{shape:?} at {x}: {found:e} not {exact:e}");
                        }
                        assert!((cdf + sf - 1.0).abs() < 1e-9, "{shape:?} at {x}: {}", cdf + sf);
                    }
                }
            }
        }
    }
}

/// One line for each shape and each of its slices: a digest of the bytes (FNV-1a).
fn digests() -> String {
    let mut random = StdRng::seed_from_u64(7);
    let mut shapes: Vec<Box<dyn Shape>> = vec![];
    for resolution in resolutions(&mut random, 1.6) {
        shapes.push(Box::new(resolution.clone()));
        for natural in naturals(91.0, 2.5) {
            for (scaling, falloff) in
                [(Scaling::Constant, None), (Scaling::Proportional, None), (Scaling::Constant, Some(2.5))]
            {
                let shape = LineShape::with_options(natural, Some(resolution.clone()), scaling, falloff);
                shapes.push(Box::new(shape.unwrap()));
            }
        }
    }
    for resolution in resolutions(&mut random, 1.6) {
        shapes.extend(resolution.components().iter().map(|&one| Box::new(one) as Box<dyn Shape>));
        let line = LineShape::new(Natural::line(91.0).unwrap(), Some(resolution));
        shapes.push(Box::new(line.unwrap()));
    }
    for natural in naturals(91.0, 2.5) {
        shapes.push(Box::new(LineShape::new(natural, None).unwrap()));
    }
    let mut lines = String::new();
    for (number, shape) in shapes.iter().enumerate() {
        let (centre, count) = (shape.peak_guess(), shape.parameters().len());
        let m: Vec<f64> = (0..333).map(|i| centre + 0.13 * f64::from(i * 5 % 333 - 166)).collect();
        let mut rows = vec![vec![0.0; m.len()]; 6];
        let mut gradient = vec![0.0; m.len() * count];
        shape.pdf_slice(&m, &mut rows[0]);
        shape.ln_pdf_slice(&m, &mut rows[1]);
        shape.cdf_slice(&m, &mut rows[2]);
        shape.sf_slice(&m, &mut rows[3]);
        shape.ln_pdf_gradient_slice(&m, &mut rows[4], &mut gradient);
        rows[5] = m.iter().step_by(20).flat_map(|&x| [shape.pdf(x), shape.cdf(x)]).collect();
        rows.push(gradient);
        for (row, what) in rows.iter().zip(["pdf", "ln pdf", "cdf", "sf", "ln pdf of gradient", "points", "gradient"]) {
            let bytes = row.iter().flat_map(|v| v.to_bits().to_le_bytes());
            let digest = bytes.fold(0xcbf2_9ce4_8422_2325_u64, |h, b| (h ^ u64::from(b)).wrapping_mul(0x100_0000_01b3));
            writeln!(lines, "digest {number} {what} {digest:016x}").unwrap();
        }
    }
    lines
}

/// The vectors of the processor change no byte. The choice is made once a process, so this test starts itself again.
#[test]
fn narrow_and_wide_vectors_agree() {
    const INNER: &str = "PEAKFOLD_TEST_DIGESTS";
    if std::env::var_os(INNER).is_some() {
        print!("{}", digests());
        println!("wide: {}", peakfold::numerics::has_avx2());
        return;
    }
    let run = |vectors: &str| {
        let output = Command::new(std::env::current_exe().unwrap())
            .args(["--exact", "narrow_and_wide_vectors_agree", "--nocapture", "--test-threads=1"])
            .env(INNER, "1")
            .env("PEAKFOLD_VECTORS", vectors)
            .output()
            .unwrap();
        assert!(output.status.success());
        let text = String::from_utf8(output.stdout).unwrap();
        // The test's own name may stand before the first line.
        let lines: Vec<String> = text.lines().filter_map(|l| l.find("digest ").map(|at| l[at..].to_owned())).collect();
        (lines, text.contains("wide: true"))
    };
    let (narrow, wide) = (run("narrow"), run("wide"));
    assert!(!narrow.1, "PEAKFOLD_VECTORS=narrow had no effect");
    if !wide.1 {
        println!("this processor has no wide vectors; nothing to compare");
    }
    assert!(narrow.0.len() > 500, "only {} digests", narrow.0.len());
    assert_eq!(narrow.0, wide.0);
}
