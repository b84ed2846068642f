//! Line shapes against published definitions and constants, and at the extremes of their parameters.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use errorfunctions::ComplexErrorFunctions;
use num_complex::Complex64;
use peakfold::lineshape::widths::{ONE_SIGMA, central_interval, full_width_at_half_maximum, narrowest_interval, peak};
use peakfold::lineshape::{
    BreitWigner, Domain, LineShape, Mixture, Natural, Relativistic, Resolution, RunningWidth, Scaling, Shape,
    ShapeError,
};
use peakfold::numerics::faddeeva::{faddeeva, faddeeva_re_slice};

fn close(found: f64, exact: f64, tolerance: f64, what: &str) {
    assert!((found - exact).abs() <= tolerance * exact.abs(), "{what}: {found} instead of {exact}");
}

/// J. Gaiser, thesis 1982, R-255, appendix F; the numbers by scipy.stats.crystalball (all digits agree).
#[test]
fn crystal_ball_constants() {
    for (alpha, n, density) in
        [(1.5, 3.0, 0.37540075123457006), (0.5, 1.1, 0.04728541252677379), (2.0, 10.0, 0.3960727926482329)]
    {
        let shape = Resolution::crystal_ball(0.0, 1.0, alpha, n).unwrap();
        close(shape.pdf(0.0), density, 1e-14, "density at the peak");
    }
}

/// S. Das, arXiv:1603.08591; norms by 40-digit quadrature (mpmath).
#[test]
fn gauss_exp_constants() {
    for (k, norm) in [(0.5, 3.498233161444575), (1.0, 2.7154691889202818), (2.0, 2.5172697922564145)] {
        close(Resolution::gauss_exp(0.0, 1.0, k).unwrap().norm(), norm, 1e-14, "norm");
    }
    close(Resolution::double_gauss_exp(0.0, 1.0, 1.0, 1.0).unwrap().norm(), 2.924310103209564, 1e-14, "norm");
}

/// Constants of the fixed-width shape by mpmath (the integral of each is 1 to 2e-44).
#[test]
fn relativistic_constants() {
    let shape = Relativistic::new(91.188, 2.4955).unwrap();
    close(shape.pdf(91.188), 0.25517872900390387, 1e-13, "peak density");
    close(shape.pdf(91.188) * (91.188 * 2.4955_f64).powi(2), 13214.02120760175, 1e-13, "k");
    close(shape.mean().unwrap(), 90.41923607666462, 1e-13, "mean");
    close(full_width_at_half_maximum(&shape).unwrap().width(), 2.4957336951466402, 1e-9, "FWHM");
    close(Relativistic::new(1.0, 0.5).unwrap().mean().unwrap(), 0.9260945523049846, 1e-13, "mean");
    close(Relativistic::new(0.77526, 0.1474).unwrap().mean().unwrap(), 0.7386513823892257, 1e-13, "mean");
}

/// A. Bohm and N. Harshman, Nucl. Phys. B 581 (2000) 91: the running-width shape is m² times the fixed-width one at
/// M/sqrt(1 + Γ²/M²); for the Z the masses differ by 34.119 MeV (computed), and the peak lies 17.065 MeV below M.
#[test]
fn running_width_map() {
    let (mass, width) = (91.1876_f64, 2.4952_f64);
    let running = RunningWidth::new(mass, width).unwrap();
    let root = (1.0 + (width / mass).powi(2)).sqrt();
    let fixed = Relativistic::new(mass / root, width / root).unwrap();
    close(mass - mass / root, 34.119e-3, 2e-5, "shift");
    let constant = running.pdf(91.0) / (91.0_f64.powi(2) * fixed.pdf(91.0));
    for m in [1.0, 40.0, 90.0, 91.2, 95.0, 300.0, 1e5] {
        close(running.pdf(m), constant * m * m * fixed.pdf(m), 1e-11, "map");
    }
    let peak = peak(&RunningWidth::new(91.188, 2.4955).unwrap()).unwrap();
    assert!((peak - 91.188 + 17.065e-3).abs() < 1e-6, "{peak}");
    assert_eq!(running.mean(), None);
}

/// Values from 40 digits (mpmath); rounded to 6 decimals they are those of M. Abramowitz and I. Stegun, Table 7.9.
#[test]
fn complex_error_function_values() {
    for (x, y, re, im) in [
        (0.0, 0.1, 0.89645697996912664, 0.0),
        (0.1, 0.1, 0.88847856247564368, 0.094331651057285106),
        (0.5, 0.0, 0.77880078307140487, 0.47892517290104347),
        (0.0, 0.5, 0.61569034419292587, 0.0),
        (0.5, 0.5, 0.53315670791217491, 0.23048823138445841),
        (1.0, 0.0, 0.36787944117144232, 0.60715770584139373),
        (0.0, 1.0, 0.427583576155807, 0.0),
        (1.0, 0.5, 0.35490033286757788, 0.34287171913110072),
        (1.0, 1.0, 0.30474420525691259, 0.20821893820283163),
        (2.0, 0.0, 0.01831563888873418, 0.3400262170660662),
        (1.0, 2.0, 0.2184926152748907, 0.092997809392601866),
        (2.0, 1.0, 0.14023958136627794, 0.2222134401798991),
        (2.0, 2.0, 0.14795275951201582, 0.13117971708421785),
        (3.0, 0.0, 1.2340980408667955e-4, 0.20115731703760039),
        (3.0, 1.0, 0.065317777289046967, 0.17391831541634897),
        (3.0, 3.0, 0.096402505583044547, 0.091236326004218761),
        (3.9, 3.0, 0.072061059281411925, 0.089826465476104588),
    ] {
        let (r, i) = faddeeva(x, y);
        close(r, re, 2e-14, &format!("Re w({x} + {y}i)"));
        assert!((i - im).abs() <= 1e-14, "Im w({x} + {y}i): {i} instead of {im}");
    }
}

/// Against the crate `errorfunctions`, which states 7e-15 of |w|: random points, also near 1 + i, where Algorithm 680 is
/// weak, and near the real axis.
#[test]
fn complex_error_function_judged() {
    let mut state = 1_u64;
    let mut uniform = || {
        state = state.wrapping_mul(6364136223846793005).wrapping_add(1442695040888963407);
        (state >> 11) as f64 / 9007199254740992.0
    };
    for i in 0..200_000 {
        let (x, y) = match i % 4 {
            0 => (12.0 * uniform() - 6.0, 8.5 * uniform()),
            1 => (1.0 + 0.2 * (uniform() - 0.5), 1.0 + 0.2 * (uniform() - 0.5)),
            2 => (9.0 * uniform(), 10_f64.powf(-8.0 * uniform())),
            _ => (10_f64.powf(6.0 * uniform()), 10_f64.powf(12.0 * uniform() - 6.0)),
        };
        let judge = Complex64::new(x, y).w();
        let (re, im) = faddeeva(x, y);
        // The judge's 7e-15 are of |w|; of Re w it is off by 9e-14 at 6.0125 + 0.115 i (see the table below).
        assert!((re / judge.re - 1.0).abs() < 3e-13, "Re w({x} + {y}i) = {re}, judge {}", judge.re);
        // The judge is off by 2e-14 at 7.818 + 1.9e-8 i, where mpmath gives 0.07277082525601732.
        assert!((im - judge.im).abs() < 5e-14 * judge.norm(), "Im w({x} + {y}i) = {im}, judge {}", judge.im);
    }
    // The slice version, at all positions in a block, with both signs.
    let x: Vec<f64> = (0..5000).map(|_| 40.0 * uniform() - 20.0).collect();
    for y in [1e-8, 1e-3, 0.5, 1.0, 3.0, 6.4, 7.9, 8.1, 100.0] {
        let mut out = vec![0.0; x.len()];
        faddeeva_re_slice(&x, &mut out, 0.0, 1.0, y, 1.0);
        for (x, found) in x.iter().zip(&out) {
            close(*found, Complex64::new(*x, y).w().re, 3e-13, &format!("Re w({x} + {y}i)"));
        }
    }
}

/// The table of extended precision; both parts by the scalar function, Re w by the slice.
#[test]
fn complex_error_function_table() {
    let path = format!("{}/tests/reference/complex_error_function.csv", env!("CARGO_MANIFEST_DIR"));
    let mut reader = csv::ReaderBuilder::new().comment(Some(b'#')).from_path(path).unwrap();
    let mut rows = 0;
    for row in reader.deserialize() {
        let (x, y, re, im): (f64, f64, f64, f64) = row.unwrap();
        let found = faddeeva(x, y);
        close(found.0, re, 2e-14, &format!("Re w({x} + {y}i)"));
        close(found.1, im, 2e-14, &format!("Im w({x} + {y}i)"));
        let mut out = [0.0; 2];
        faddeeva_re_slice(&[x, -x], &mut out, 0.0, 1.0, y, 1.0);
        out.iter().for_each(|&found| close(found, re, 2e-14, &format!("Re w({x} + {y}i) of a slice")));
        rows += 1;
    }
    assert_eq!(rows, 400);
}

fn voigt(sigma: f64, gamma: f64) -> LineShape {
    let natural = Natural::BreitWigner(BreitWigner::new(0.0, 2.0 * gamma).unwrap());
    LineShape::new(natural, Some(Resolution::gaussian(0.0, sigma).unwrap().into())).unwrap()
}

/// Exact FWHM by mpmath; J. Olivero and R. Longbothum, JQSRT 17 (1977) 233, within the 0.024 % of its two-constant form.
#[test]
fn voigt_widths() {
    for (gamma, exact) in [
        (0.1, 2.463246366814446),
        (0.5, 2.9343444732271995),
        (1.0, 3.6011356772031573),
        (2.0, 5.1408269473311705),
        (10.0, 20.294963873595787),
    ] {
        let width = full_width_at_half_maximum(&voigt(1.0, gamma)).unwrap().width();
        close(width, exact, 1e-9, "FWHM");
        let gaussian = 2.354_820_045_030_949_4_f64;
        let formula = 0.5346 * 2.0 * gamma + (0.2166 * (2.0 * gamma).powi(2) + gaussian.powi(2)).sqrt();
        close(formula, width, 2.4e-4, "two-constant form");
    }
}

/// Narrowest and central intervals at the fraction 0.6826894921370859, by mpmath.
#[test]
fn effective_widths() {
    for (sigma, gamma, exact) in
        [(1.0, 0.5, 1.5523002974882714), (1.0, 1.0, 2.2453667838013858), (2.0, 1.25, 3.4269666472141482)]
    {
        close(narrowest_interval(&voigt(sigma, gamma), ONE_SIGMA).unwrap().half_width(), exact, 1e-9, "Voigt");
    }
    let cauchy = BreitWigner::new(0.0, 2.0).unwrap();
    close(narrowest_interval(&cauchy, ONE_SIGMA).unwrap().half_width(), 1.837337201471583, 1e-12, "Cauchy");
    let gaussian = Resolution::gaussian(0.0, 1.0).unwrap();
    close(narrowest_interval(&gaussian, ONE_SIGMA).unwrap().half_width(), 1.0, 1e-12, "Gaussian");
    close(narrowest_interval(&gaussian, 0.683).unwrap().half_width(), 1.00064, 1e-5, "Gaussian at 0.683");
    close(narrowest_interval(&gaussian, 0.68).unwrap().half_width(), 0.99446, 1e-5, "Gaussian at 0.68");
    for (mu, sigmas, low, high, narrow, central) in [
        (125.0, (1.3, 1.3), (1.4, 4.0), (1.7, 20.0), 1.4467424087, 1.4559807691),
        (0.0, (1.0, 1.0), (1.5, 3.0), (2.0, 5.0), 1.1100136590, 1.1181493962),
        (91.2, (2.0, 1.2), (1.0, 2.5), (1.5, 6.0), 2.6167338366, 3.3738075625),
    ] {
        let shape = Resolution::double_crystal_ball_two_sigmas(mu, sigmas, low, high).unwrap();
        let interval = narrowest_interval(&shape, ONE_SIGMA).unwrap();
        close(interval.half_width(), narrow, 1e-10, "narrowest");
        close(central_interval(&shape, ONE_SIGMA).unwrap().half_width(), central, 1e-10, "central");
        if mu == 91.2 {
            // Only the length is at its minimum; the place is known to its square root.
            close(interval.low_gev, 87.76970, 1e-6, "from");
            close(interval.high_gev, 93.00317, 1e-6, "to");
        }
    }
    assert_eq!(narrowest_interval(&gaussian, 1.0), None);
    assert_eq!(central_interval(&gaussian, 0.0), None);
}

/// Nothing overflows, ln pdf stays finite and probabilities monotone, 60 sigma out.
fn check_extreme(shape: &dyn Shape, centre: f64, scale: f64) {
    let (mut cdf, mut sf) = (0.0, 1.0);
    for i in -12..=12 {
        let x = centre + 5.0 * f64::from(i) * scale;
        let what = format!("{shape:?} at {x}");
        assert!(shape.ln_pdf(x).is_finite(), "{what}: ln pdf {}", shape.ln_pdf(x));
        assert!(shape.pdf(x).is_finite() && shape.pdf(x) >= 0.0, "{what}: pdf {}", shape.pdf(x));
        let (below, above) = (shape.cdf(x), shape.sf(x));
        assert!((cdf..=1.0).contains(&below), "{what}: cdf {below} after {cdf}");
        assert!(above <= sf && above >= 0.0, "{what}: sf {above} after {sf}");
        (cdf, sf) = (below, above);
    }
}

#[test]
fn extreme_tails() {
    for alpha in [0.05, 0.5, 3.0, 12.0, 40.0] {
        for n in [1.0001, 1.5, 4.0, 40.0, 500.0] {
            check_extreme(&Resolution::crystal_ball(0.0, 1.0, alpha, n).unwrap(), 0.0, 1.0);
            let double = Resolution::double_crystal_ball(0.0, 1.0, (alpha, n), (41.0 - alpha, 501.5 - n)).unwrap();
            check_extreme(&double, 0.0, 1.0);
        }
        check_extreme(&Resolution::double_gauss_exp(0.0, 1.0, alpha, 1.0).unwrap(), 0.0, 1.0);
    }
    check_extreme(&Resolution::gaussian(0.0, 1.0).unwrap(), 0.0, 1.0);
}

#[test]
fn extreme_widths() {
    let (mass, sigma) = (1000.0, 1.0);
    for exponent in -8..=6 {
        let width = sigma * 10_f64.powi(exponent);
        for natural in [
            Natural::BreitWigner(BreitWigner::new(mass, width).unwrap()),
            Natural::Relativistic(Relativistic::new(mass, width).unwrap()),
            Natural::RunningWidth(RunningWidth::new(mass, width).unwrap()),
        ] {
            for resolution in [
                Resolution::gaussian(0.0, sigma).unwrap(),
                Resolution::double_crystal_ball(0.0, sigma, (1.2, 3.0), (2.0, 20.0)).unwrap(),
            ] {
                check_extreme(&LineShape::new(natural, Some(resolution.into())).unwrap(), mass, sigma);
            }
        }
    }
    // 60 sigma below a light relativistic resonance, at negative mass, where only the Gaussian reaches.
    let natural = Natural::Relativistic(Relativistic::new(10.0, 0.5).unwrap());
    let shape = LineShape::new(natural, Some(Resolution::gaussian(0.0, 1.0).unwrap().into())).unwrap();
    let ln_pdf = shape.ln_pdf(-60.0);
    // The Gaussian from t = 0 on alone: 60²/2 = 1800, and factors of a few.
    assert!((-1830.0..-1800.0).contains(&ln_pdf), "{ln_pdf}");
}

/// Limits: a width far below sigma is the resolution; no resolution is the natural shape; a sum of one part is that part.
#[test]
fn limits() {
    let resolution = Resolution::double_crystal_ball(0.2, 1.0, (1.2, 3.0), (2.0, 20.0)).unwrap();
    let narrow =
        LineShape::new(Natural::BreitWigner(BreitWigner::new(100.0, 1e-9).unwrap()), Some(resolution.into())).unwrap();
    let line = LineShape::new(Natural::line(100.0).unwrap(), Some(resolution.into())).unwrap();
    for x in [97.0, 99.5, 100.3, 103.0] {
        close(narrow.pdf(x), line.pdf(x), 1e-8, "narrow");
        close(line.pdf(x), resolution.pdf(x - 100.0), 1e-13, "line");
        // A proportional resolution of a line is the same resolution.
        let scaled = LineShape::with_options(
            Natural::line(100.0).unwrap(),
            Some(resolution.into()),
            Scaling::Proportional,
            None,
        );
        assert_eq!(scaled.unwrap().pdf(x), line.pdf(x));
    }
    let two = Mixture::new(vec![resolution, resolution], &[0.3]).unwrap();
    close(two.pdf(0.7), resolution.pdf(0.7), 1e-14, "two equal parts");
    assert_eq!(two.parameters().last().unwrap().name, "fraction_1");
}

/// Every parameter outside its domain is named with its value.
#[test]
fn errors() {
    assert_eq!(Resolution::gaussian(f64::NAN, 1.0).map_err(|e| e.to_string()[..8].to_owned()), Err("bias is ".into()));
    assert_eq!(Resolution::gaussian(0.0, 0.0), Err(ShapeError::Sigma(0.0)));
    assert_eq!(Resolution::crystal_ball(0.0, 1.0, -1.0, 2.0), Err(ShapeError::AlphaLow(-1.0)));
    assert_eq!(Resolution::crystal_ball(0.0, 1.0, 1.0, 1.0), Err(ShapeError::NLow(1.0)));
    let double = |low, high| Resolution::double_crystal_ball(0.0, 1.0, low, high);
    assert_eq!(double((1.0, 2.0), (0.0, 2.0)), Err(ShapeError::AlphaHigh(0.0)));
    assert_eq!(double((1.0, 2.0), (1.0, 0.5)), Err(ShapeError::NHigh(0.5)));
    assert_eq!(Resolution::gauss_exp(0.0, 1.0, 0.0), Err(ShapeError::KLow(0.0)));
    assert_eq!(BreitWigner::new(1.0, -2.0), Err(ShapeError::Width(-2.0)));
    assert_eq!(Relativistic::new(0.0, 1.0), Err(ShapeError::PositiveMass(0.0)));
    assert_eq!(LineShape::new(Natural::line(1.0).unwrap(), None), Err(ShapeError::Perfect));
    assert!(matches!(Mixture::new(vec![], &[]), Err(ShapeError::Components { .. })));
    let one = Resolution::gaussian(0.0, 1.0).unwrap();
    assert_eq!(Mixture::new(vec![one; 3], &[0.7, 0.5]), Err(ShapeError::FractionSum(1.2)));
    assert_eq!(ShapeError::NLow(0.5).to_string(), "n_low is 0.5; it must be a finite number above 1");
    assert!(Domain::FRACTION.contains(1.0) && !Domain::POSITIVE.contains(f64::INFINITY));
    assert!(one.quantile(1.5).is_nan() && one.pdf(f64::NAN).is_nan());
}
