//! What holds for every shape and every parameter: 1000 random sets per shape, judged by the crate `quadrature` and by
//! differences of high order. The seeds are fixed.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use peakfold::lineshape::{
    BreitWigner, LineShape, Mixture, Natural, Relativistic, Resolution, RunningWidth, Scaling, Shape,
};
use rand::rngs::StdRng;
use rand::{RngExt, SeedableRng};

type Make = fn(&mut StdRng) -> Box<dyn Shape>;

fn log_uniform(random: &mut StdRng, low: f64, high: f64) -> f64 {
    (random.random_range(low.ln()..high.ln())).exp()
}

fn tail(random: &mut StdRng) -> (f64, f64) {
    (random.random_range(0.3..3.5), log_uniform(random, 1.3, 60.0))
}

fn gaussian(random: &mut StdRng) -> Resolution {
    Resolution::gaussian(random.random_range(-5.0..5.0), log_uniform(random, 0.1, 10.0)).unwrap()
}

fn crystal_ball(random: &mut StdRng) -> Resolution {
    let (alpha, n) = tail(random);
    Resolution::crystal_ball(random.random_range(-5.0..5.0), log_uniform(random, 0.1, 10.0), alpha, n).unwrap()
}

fn double_crystal_ball(random: &mut StdRng) -> Resolution {
    let (low, high) = (tail(random), tail(random));
    Resolution::double_crystal_ball(random.random_range(-5.0..5.0), log_uniform(random, 0.1, 10.0), low, high).unwrap()
}

fn two_sigmas(random: &mut StdRng) -> Resolution {
    let (low, high) = (tail(random), tail(random));
    let sigmas = (log_uniform(random, 0.3, 4.0), log_uniform(random, 0.3, 4.0));
    Resolution::double_crystal_ball_two_sigmas(random.random_range(-5.0..5.0), sigmas, low, high).unwrap()
}

fn gauss_exp(random: &mut StdRng) -> Resolution {
    let k = random.random_range(0.2..3.0);
    Resolution::gauss_exp(random.random_range(-5.0..5.0), log_uniform(random, 0.1, 10.0), k).unwrap()
}

fn double_gauss_exp(random: &mut StdRng) -> Resolution {
    let (low, high) = (random.random_range(0.2..3.0), random.random_range(0.2..3.0));
    Resolution::double_gauss_exp(random.random_range(-5.0..5.0), log_uniform(random, 0.1, 10.0), low, high).unwrap()
}

fn mixture(random: &mut StdRng) -> Mixture {
    let parts = vec![double_crystal_ball(random), gaussian(random), gauss_exp(random)];
    let first = random.random_range(0.1..0.8);
    Mixture::new(parts, &[first, random.random_range(0.02..0.98 - first)]).unwrap()
}

fn breit_wigner(random: &mut StdRng) -> Natural {
    Natural::BreitWigner(BreitWigner::new(random.random_range(20.0..200.0), log_uniform(random, 0.05, 20.0)).unwrap())
}

fn relativistic(random: &mut StdRng) -> Natural {
    let mass = random.random_range(20.0..200.0);
    Natural::Relativistic(Relativistic::new(mass, mass * log_uniform(random, 1e-3, 1.5)).unwrap())
}

fn running_width(random: &mut StdRng) -> Natural {
    let mass = random.random_range(20.0..200.0);
    Natural::RunningWidth(RunningWidth::new(mass, mass * log_uniform(random, 1e-3, 1.5)).unwrap())
}

fn with_gaussian(random: &mut StdRng, natural: Natural) -> Box<dyn Shape> {
    let gaussian = Resolution::gaussian(random.random_range(-1.0..1.0), log_uniform(random, 0.1, 5.0)).unwrap();
    Box::new(LineShape::new(natural, Some(gaussian.into())).unwrap())
}

fn with_tails(random: &mut StdRng, natural: Natural, scaling: Scaling, falloff: Option<f64>) -> Box<dyn Shape> {
    let (mut low, mut high) = (tail(random), tail(random));
    if scaling == Scaling::Proportional {
        // Slow tails reach x = 0, where the density of a proportional resolution has a logarithmic singularity.
        (low.1, high.1) = (low.1 + 3.0, high.1 + 3.0);
    }
    let resolution =
        Resolution::double_crystal_ball(random.random_range(-1.0..1.0), log_uniform(random, 0.2, 5.0), low, high);
    Box::new(LineShape::with_options(natural, Some(resolution.unwrap().into()), scaling, falloff).unwrap())
}

fn natural_alone(natural: Natural) -> Box<dyn Shape> {
    Box::new(LineShape::new(natural, None).unwrap())
}

/// The probability between two points by the independent judge: double-exponential quadrature on pieces around the
/// points where the density bends, each cut into decades of its distance from the peak, because that rule misses narrow
/// peaks.
fn judged(shape: &dyn Shape, low: f64, high: f64, breaks: &[f64]) -> f64 {
    let mut ends: Vec<f64> = breaks.iter().copied().filter(|&b| b > low && b < high).collect();
    ends.extend([low, high]);
    ends.sort_by(f64::total_cmp);
    let total: f64 = ends
        .windows(2)
        .map(|pair| {
            // Scaled to a unit integral: the rule's target is absolute.
            let scale = shape.pdf(0.5 * (pair[0] + pair[1])) * (pair[1] - pair[0]);
            let integral = quadrature::integrate(
                |u| shape.pdf(pair[0] + (pair[1] - pair[0]) * u) * (pair[1] - pair[0]) / scale,
                0.0,
                1.0,
                1e-12,
            );
            integral.integral * scale
        })
        .sum();
    total
}

/// Points around the peak at which to split: joins in units of every width, and doublings outward.
fn breaks(shape: &dyn Shape) -> Vec<f64> {
    let peak = shape.peak_guess();
    let parameters = shape.parameters();
    let mut list = vec![peak];
    let widths: Vec<f64> =
        parameters.iter().filter(|p| p.name.starts_with("sigma") || p.name == "width").map(|p| p.value).collect();
    // A convolution is smooth on the scale of its widths and slow; it needs fewer pieces.
    let convolved = parameters[0].name == "mass" && parameters.len() > 2;
    let mut places = if convolved {
        vec![1.0, 3.0, 8.0, 20.0, 60.0]
    } else {
        vec![1.0, 2.0, 4.0, 8.0, 16.0, 32.0, 64.0, 128.0, 256.0]
    };
    places
        .extend(parameters.iter().filter(|p| p.name.starts_with("alpha") || p.name.starts_with("k_")).map(|p| p.value));
    let centres: Vec<f64> = std::iter::once(peak)
        .chain(parameters.iter().filter(|p| p.name.starts_with("bias_")).map(|p| p.value))
        .collect();
    for centre in centres {
        list.push(centre);
        for width in &widths {
            for place in &places {
                list.extend([centre - place * width, centre + place * width]);
            }
        }
    }
    // Where a relativistic shape or a falloff begins.
    list.push(0.0);
    if let Some(mass) = parameters.iter().find(|p| p.name == "mass") {
        list.extend([0.5 * mass.value, 2.0 * mass.value, mass.value]);
    }
    list
}

/// An eighth-order central difference with one step of refinement, and an estimate of its own error.
fn difference(f: impl Fn(f64) -> f64, x: f64, step: f64) -> (f64, f64) {
    let at = |h: f64| {
        let pair = |k: f64| f(x + k * h) - f(x - k * h);
        (4.0 / 5.0 * pair(1.0) - 1.0 / 5.0 * pair(2.0) + 4.0 / 105.0 * pair(3.0) - 1.0 / 280.0 * pair(4.0)) / h
    };
    let (coarse, fine) = (at(step), at(0.5 * step));
    (fine, (fine - coarse).abs())
}

struct Tolerances {
    probability: f64,
    gradient: f64,
}

fn check(name: &str, sets: usize, tolerances: &Tolerances, make: impl Fn(&mut StdRng) -> Box<dyn Shape>) {
    let mut random = StdRng::seed_from_u64(20_261);
    let mut compared = 0;
    for set in 0..sets {
        let shape = make(&mut random);
        let what = format!("{name} {set}: {shape:?}");
        let breaks = breaks(shape.as_ref());

        // Normalisation and cumulative probability, in two pieces around a random quantile.
        let (low, middle, high) =
            (shape.quantile(0.02), shape.quantile(random.random_range(0.1..0.9)), shape.upper_quantile(0.02));
        for (from, to) in [(low, middle), (middle, high)] {
            let direct = shape.window_probability(from, to);
            let exact = judged(shape.as_ref(), from, to, &breaks);
            assert!((direct - exact).abs() < tolerances.probability, "{what}: {direct} not {exact} in {from}..{to}");
        }
        let sum = shape.cdf(middle) + shape.sf(middle);
        assert!((sum - 1.0).abs() < tolerances.probability, "{what}: cdf + sf = {sum}");

        // The quantile inverts the cdf, from both ends.
        let p: f64 = random.random_range(0.001..0.999);
        let x = shape.quantile(p);
        assert!((shape.cdf(x) - p).abs() < tolerances.probability, "{what}: cdf(quantile({p})) = {}", shape.cdf(x));
        let q = log_uniform(&mut random, 1e-6, 0.5);
        let x = shape.upper_quantile(q);
        assert!((shape.sf(x) / q - 1.0).abs() < 1e3 * tolerances.probability, "{what}: sf at {q}");

        // Gradients of ln pdf and of the cdf.
        let x = shape.quantile(random.random_range(0.02..0.98));
        let parameters = shape.parameters();
        let values: Vec<f64> = parameters.iter().map(|p| p.value).collect();
        let mut ln_gradient = vec![0.0; values.len()];
        let mut cdf_gradient = vec![0.0; values.len()];
        shape.ln_pdf_gradient(x, &mut ln_gradient);
        shape.cdf_gradient(x, &mut cdf_gradient);
        let scale = parameters
            .iter()
            .filter(|p| p.name.starts_with("sigma") || p.name == "width")
            .map(|p| p.value)
            .fold(f64::INFINITY, f64::min);
        for (k, parameter) in parameters.iter().enumerate() {
            let size = match parameter.name.as_str() {
                "mass" => scale,
                name if name.starts_with("bias") => scale,
                name if name.starts_with("n_") => parameter.value - 1.0,
                name if name.starts_with("fraction") => parameter.value.min(0.02),
                _ => parameter.value.min(1.0),
            };
            let moved = |value: f64| {
                let mut values = values.clone();
                values[k] = value;
                shape.with_values(&values).unwrap()
            };
            for (found, f) in [
                (ln_gradient[k], &(|v: f64| moved(v).ln_pdf(x)) as &dyn Fn(f64) -> f64),
                (cdf_gradient[k], &|v: f64| moved(v).cdf(x)),
            ] {
                let (exact, error) = difference(f, values[k], 0.01 * size);
                // A difference across a join is not smooth: its own error says so, and nothing is learnt from it.
                let floor = tolerances.gradient * (1.0 / size + exact.abs());
                if error < 0.1 * floor {
                    compared += 1;
                    assert!((found - exact).abs() < floor, "{what}: d/d{} at {x}: {found} not {exact}", parameter.name);
                }
            }
        }
    }
    assert!(compared > 3 * sets, "{name}: only {compared} derivatives could be judged");
}

/// Closed forms: the judge's target is 1e-12 per piece of up to some 100.
const CLOSED: Tolerances = Tolerances { probability: 1e-11, gradient: 1e-8 };
/// Convolutions by panels: 1e-11 each, and differences of them for the gradient.
const PANELS: Tolerances = Tolerances { probability: 1e-9, gradient: 1e-6 };

#[test]
fn closed_forms() {
    let shapes: [(&str, Make); 10] = [
        ("gaussian", |r| Box::new(gaussian(r))),
        ("crystal ball", |r| Box::new(crystal_ball(r))),
        ("double crystal ball", |r| Box::new(double_crystal_ball(r))),
        ("two sigmas", |r| Box::new(two_sigmas(r))),
        ("gauss-exp", |r| Box::new(gauss_exp(r))),
        ("double gauss-exp", |r| Box::new(double_gauss_exp(r))),
        ("sum", |r| Box::new(mixture(r))),
        ("breit-wigner", |r| natural_alone(breit_wigner(r))),
        ("relativistic", |r| natural_alone(relativistic(r))),
        ("running width", |r| natural_alone(running_width(r))),
    ];
    for (name, make) in shapes {
        check(name, 1000, &CLOSED, make);
    }
}

#[test]
fn voigt() {
    check("voigt", 1000, &PANELS, |r| {
        let natural = breit_wigner(r);
        with_gaussian(r, natural)
    });
}

#[test]
fn relativistic_voigt() {
    check("relativistic voigt", 1000, &PANELS, |r| {
        let natural = relativistic(r);
        with_gaussian(r, natural)
    });
}

/// The numerical convolutions are slow to difference; the sets are shared out over the kinds of line shape.
#[test]
fn convolutions() {
    check("convolution", 1000, &PANELS, |r| {
        let natural = match r.random_range(0..3) {
            0 => breit_wigner(r),
            1 => relativistic(r),
            _ => running_width(r),
        };
        with_tails(r, natural, Scaling::Constant, None)
    });
}

#[test]
fn proportional_and_falling() {
    check("proportional", 300, &PANELS, |r| {
        let natural = match r.random_range(0..3) {
            0 => breit_wigner(r),
            1 => relativistic(r),
            _ => running_width(r),
        };
        let scaling = if r.random_range(0..2) == 0 { Scaling::Constant } else { Scaling::Proportional };
        let falloff = (scaling == Scaling::Constant || r.random_range(0..2) == 0).then(|| r.random_range(0.5..8.0));
        with_tails(r, natural, scaling, falloff)
    });
}

/// Slices against the scalar functions, which share no kernel with them.
#[test]
fn slices() {
    let mut random = StdRng::seed_from_u64(5);
    let mut shapes: Vec<(Box<dyn Shape>, f64)> = vec![];
    for _ in 0..60 {
        // 1e-12 for closed forms; the grid promises LineShape::GRID_ERROR.
        shapes.push((Box::new(gaussian(&mut random)), 1e-12));
        shapes.push((Box::new(crystal_ball(&mut random)), 1e-12));
        shapes.push((Box::new(double_crystal_ball(&mut random)), 1e-12));
        let integer = (random.random_range(0.5..3.0), f64::from(random.random_range(2..70)));
        let whole = Resolution::double_crystal_ball(0.0, 1.0, integer, (1.0, 3.0)).unwrap();
        shapes.push((Box::new(whole), 1e-12));
        shapes.push((Box::new(double_gauss_exp(&mut random)), 1e-12));
        shapes.push((Box::new(two_sigmas(&mut random)), 1e-12));
        shapes.push((Box::new(mixture(&mut random)), 1e-12));
        for natural in [breit_wigner(&mut random), relativistic(&mut random), running_width(&mut random)] {
            shapes.push((natural_alone(natural), 1e-12));
            shapes.push((with_gaussian(&mut random, natural), LineShape::GRID_ERROR));
            shapes.push((with_tails(&mut random, natural, Scaling::Constant, None), LineShape::GRID_ERROR));
        }
    }
    for (shape, tolerance) in &shapes {
        let (low, high) = (shape.quantile(0.01), shape.upper_quantile(0.01));
        let m: Vec<f64> = (0..400).map(|i| low + (high - low) * f64::from(i * 7 % 400) / 399.0).collect();
        let count = shape.parameters().len();
        let (mut pdf, mut ln_pdf, mut cdf, mut sf) = (vec![0.0; 400], vec![0.0; 400], vec![0.0; 400], vec![0.0; 400]);
        let (mut ln_with, mut gradient) = (vec![0.0; 400], vec![0.0; 400 * count]);
        shape.pdf_slice(&m, &mut pdf);
        shape.ln_pdf_slice(&m, &mut ln_pdf);
        shape.ln_pdf_gradient_slice(&m, &mut ln_with, &mut gradient);
        shape.cdf_slice(&m[..20], &mut cdf);
        shape.sf_slice(&m[..20], &mut sf);
        let mut one = vec![0.0; count];
        for (i, &x) in m.iter().enumerate() {
            let exact = shape.pdf(x);
            let what = format!("{shape:?} at {x}");
            assert!((pdf[i] / exact - 1.0).abs() < *tolerance, "{what}: {} not {exact}", pdf[i]);
            assert!((ln_pdf[i] - exact.ln()).abs() < 2.0 * tolerance + 1e-13, "{what}: ln {}", ln_pdf[i]);
            assert!((ln_with[i] - exact.ln()).abs() < 2.0 * tolerance + 1e-13, "{what}: ln {}", ln_with[i]);
            if i < 20 {
                assert!((cdf[i] / shape.cdf(x) - 1.0).abs() < 1e-12, "{what}: cdf {}", cdf[i]);
                assert!((sf[i] / shape.sf(x) - 1.0).abs() < 1e-12, "{what}: sf {}", sf[i]);
            }
            if i % 10 == 0 {
                shape.ln_pdf_gradient(x, &mut one);
                for (k, exact) in one.iter().enumerate() {
                    let found = gradient[k * 400 + i];
                    // Derivatives that pass through 0 are compared with the size that they have elsewhere, or with a
                    // slope that no fit would feel: all parameters here are of order 1 to 100.
                    let size = (0..400).map(|j| gradient[k * 400 + j].abs()).fold(exact.abs(), f64::max).max(0.05);
                    let bound = if *tolerance < 1e-10 { 1e-11 } else { 1e-6 };
                    assert!((found - exact).abs() < bound * size, "{what}: component {k}: {found} not {exact}");
                }
            }
        }
    }
}

/// Draws against the cdf: the largest distance of the two distribution functions (Kolmogorov's test; N. Smirnov, Ann.
/// Math. Stat. 19 (1948) 279: 1.95/sqrt(N) is passed by one seed of a thousand).
#[test]
fn samples() {
    let mut random = StdRng::seed_from_u64(77);
    let mut shapes: Vec<Box<dyn Shape>> = vec![
        Box::new(two_sigmas(&mut random)),
        Box::new(mixture(&mut random)),
        Box::new(double_gauss_exp(&mut random)),
    ];
    for natural in [breit_wigner(&mut random), relativistic(&mut random), running_width(&mut random)] {
        shapes.push(natural_alone(natural));
        shapes.push(with_tails(&mut random, natural, Scaling::Constant, None));
        shapes.push(with_tails(&mut random, natural, Scaling::Proportional, Some(4.0)));
    }
    for shape in &shapes {
        let mut drawn = vec![0.0; 2000];
        shape.sample(&mut random, &mut drawn);
        drawn.sort_by(f64::total_cmp);
        let n = drawn.len() as f64;
        let distance = drawn
            .iter()
            .enumerate()
            .map(|(i, &x)| (shape.cdf(x) - i as f64 / n).abs().max((shape.cdf(x) - (i as f64 + 1.0) / n).abs()))
            .fold(0.0, f64::max);
        assert!(distance < 1.95 / n.sqrt(), "{shape:?}: {distance}");
    }
}

/// Bins: they add up with what lies outside, and their gradient is that of the cdf.
#[test]
fn bins() {
    let mut random = StdRng::seed_from_u64(11);
    for _ in 0..50 {
        let natural = relativistic(&mut random);
        let shapes = [
            Box::new(two_sigmas(&mut random)) as Box<dyn Shape>,
            with_tails(&mut random, natural, Scaling::Constant, None),
        ];
        for shape in shapes {
            let (low, high) = (shape.quantile(0.03), shape.upper_quantile(0.03));
            let edges: Vec<f64> = (0..=20).map(|i| low + (high - low) * f64::from(i) / 20.0).collect();
            let mut bins = vec![0.0; 20];
            shape.bin_probabilities(&edges, &mut bins);
            let sum: f64 = bins.iter().sum::<f64>() + shape.cdf(low) + shape.sf(high);
            assert!((sum - 1.0).abs() < 1e-9, "{shape:?}: {sum}");
            let count = shape.parameters().len();
            let mut gradient = vec![0.0; 20 * count];
            shape.bin_probability_gradient(&edges, &mut gradient);
            let mut window = vec![0.0; count];
            let probability = shape.window_probability_gradient(low, high, &mut window);
            assert!((probability - bins.iter().sum::<f64>()).abs() < 1e-9);
            for k in 0..count {
                let sum: f64 = gradient[k * 20..(k + 1) * 20].iter().sum();
                assert!((sum - window[k]).abs() < 1e-9 * (1.0 + sum.abs()), "{shape:?}: {sum} {}", window[k]);
            }
        }
    }
}
