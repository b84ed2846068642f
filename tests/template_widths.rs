//! Widths of templates: exact distributions are binned, and the widths compared with outside values.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use peakfold::template::{Cumulative, Replicate, SIGMA_EFF_FRACTION, Template};
use std::f64::consts::{FRAC_PI_2, LN_2, PI, SQRT_2};

/// 2 sqrt(2 ln 2).
const FWHM_OF_GAUSSIAN: f64 = 2.3548200450309494;

fn template(edges: Vec<f64>, cdf: &dyn Fn(f64) -> f64) -> Template {
    let bins = edges.len() - 1;
    Template {
        below_axis: cdf(edges[0]),
        above_axis: 1.0 - cdf(edges[bins]),
        probability: edges.windows(2).map(|e| cdf(e[1]) - cdf(e[0])).collect(),
        edges_gev: edges,
        error: vec![0.0; bins],
        list_error: vec![0.0; bins],
        acceptance: 1.0,
        acceptance_error: 0.0,
        acceptance_list_error: 0.0,
        efficiency: 1.0,
        efficiency_error: 0.0,
        efficiency_list_error: 0.0,
        lost: 0.0,
        replicates: Vec::new(),
    }
}

fn edges(low: f64, high: f64, bins: usize) -> Vec<f64> {
    (0..=bins).map(|i| low + (high - low) * i as f64 / bins as f64).collect()
}

fn gaussian_cdf(z: f64) -> f64 {
    0.5 * libm::erfc(-z / SQRT_2)
}

/// Double-sided Crystal Ball function (mu, sigma_l, sigma_r, alpha_l, n_l, alpha_r, n_r).
#[derive(Clone, Copy)]
struct DoubleCrystalBall(f64, f64, f64, f64, f64, f64, f64);

impl DoubleCrystalBall {
    /// The closed form: integrals of a Gaussian core with peak 1 and of its power tails, over the whole.
    fn cdf(&self, x: f64) -> f64 {
        let DoubleCrystalBall(mu, sl, sr, al, nl, ar, nr) = *self;
        // Integral from t on outwards, for one side of unit core width.
        let outer = |t: f64, alpha: f64, n: f64| {
            let tail = n / alpha / (n - 1.0) * (-0.5 * alpha * alpha).exp();
            let core = |t: f64| FRAC_PI_2.sqrt() * libm::erf(t / SQRT_2);
            if t > alpha { tail * (1.0 + alpha / n * (t - alpha)).powf(1.0 - n) } else { tail + core(alpha) - core(t) }
        };
        let whole = sl * outer(0.0, al, nl) + sr * outer(0.0, ar, nr);
        let below = if x < mu { sl * outer((mu - x) / sl, al, nl) } else { whole - sr * outer((x - mu) / sr, ar, nr) };
        below / whole
    }

    fn fwhm(&self) -> f64 {
        let DoubleCrystalBall(_, sl, sr, al, nl, ar, nr) = *self;
        // sqrt(2 ln 2) in the core, from the power law where that lies beyond alpha.
        let side = |alpha: f64, n: f64| {
            let core = (2.0 * LN_2).sqrt();
            let tail = alpha + n / alpha * ((2.0 * (-0.5 * alpha * alpha).exp()).powf(1.0 / n) - 1.0);
            if core <= alpha { core } else { tail }
        };
        sl * side(al, nl) + sr * side(ar, nr)
    }
}

struct Case {
    name: &'static str,
    peak: f64,
    /// Core width that the bins are measured in.
    sigma: f64,
    cdf: Box<dyn Fn(f64) -> f64>,
    fwhm: f64,
    sigma_eff: f64,
    central_68: f64,
    /// Whether the core widths differ, so that the density has a kink in its slope at the peak.
    kink: bool,
}

/// sigma_eff and central sigma_68 of the double-sided functions: physics sheet, section 6 ("computed", extended
/// precision, fraction 0.6826894921370859); those of the Gaussian are sigma by the choice of the fraction.
fn cases() -> Vec<Case> {
    let double = |name, d: DoubleCrystalBall, sigma_eff, central_68| Case {
        name,
        peak: d.0,
        sigma: d.1.min(d.2),
        cdf: Box::new(move |x| d.cdf(x)),
        fwhm: d.fwhm(),
        sigma_eff,
        central_68,
        kink: d.1 != d.2,
    };
    vec![
        Case {
            name: "Gaussian",
            peak: 150.0,
            sigma: 1.5,
            cdf: Box::new(|x| gaussian_cdf((x - 150.0) / 1.5)),
            fwhm: 1.5 * FWHM_OF_GAUSSIAN,
            sigma_eff: 1.5,
            central_68: 1.5,
            kink: false,
        },
        double("low tail", DoubleCrystalBall(125.0, 1.3, 1.3, 1.4, 4.0, 1.7, 20.0), 1.4467424087, 1.4559807691),
        double("two tails", DoubleCrystalBall(0.0, 1.0, 1.0, 1.5, 3.0, 2.0, 5.0), 1.1100136590, 1.1181493962),
        double("lopsided", DoubleCrystalBall(91.2, 2.0, 1.2, 1.0, 2.5, 1.5, 6.0), 2.6167338366, 3.3738075625),
    ]
}

/// Worst deviations over positions of the peak in its bin: peak in core widths; FWHM, sigma_eff, central relative.
fn worst(case: &Case, bin_in_sigma: f64, bins: u32) -> [f64; 4] {
    let mut worst = [0.0f64; 4];
    for k in 0..20 {
        let h = bin_in_sigma * case.sigma;
        let low = case.peak - h * (f64::from(bins) / 2.0 - f64::from(k) / 20.0);
        let w = template(edges(low, low + f64::from(bins) * h, bins as usize), &case.cdf).widths().unwrap();
        assert!(w.monotone);
        let found = [
            (w.peak_gev.value.unwrap() - case.peak) / case.sigma,
            w.fwhm_gev.value.unwrap() / case.fwhm - 1.0,
            w.sigma_eff_gev.value.unwrap() / case.sigma_eff - 1.0,
            w.central_68_gev.value.unwrap() / case.central_68 - 1.0,
        ];
        for (worst, found) in worst.iter_mut().zip(found) {
            *worst = worst.max(found.abs());
        }
    }
    println!("{} at {bin_in_sigma} sigma per bin: {worst:.6?}", case.name);
    worst
}

#[test]
fn widths_of_known_shapes_within_the_stated_bounds() {
    // The bounds that the module states; they come from the interpolation error, which falls with the bin width.
    for case in cases() {
        let fine = if case.kink { [0.04, 1e-3, 1e-4, 1e-4] } else { [5e-4, 2e-4, 2e-5, 2e-5] };
        let coarse = if case.kink { [0.08, 5e-3, 5e-4, 5e-4] } else { [3e-3, 2e-3, 2e-4, 3e-4] };
        for (bin_in_sigma, bounds) in [(0.2, fine), (0.4, coarse)] {
            let found = worst(&case, bin_in_sigma, 200);
            for k in 0..4 {
                assert!(found[k] < bounds[k], "{} at {bin_in_sigma}: {found:?}", case.name);
            }
        }
    }
}

#[test]
fn fine_bins_converge_to_the_published_values() {
    // 0.02 core widths per bin; the published values have ten decimals.
    for case in cases() {
        let found = worst(&case, 0.02, 2000);
        let bound = if case.kink { 1e-6 } else { 1e-8 };
        assert!(found[2] < bound && found[3] < bound, "{}: {found:?}", case.name);
    }
}

#[test]
fn widths_of_the_cauchy_shape_and_the_exponential() {
    // Physics sheet, section 6: sigma_eff 1.837337201471583 for a Cauchy of HWHM 1, 0.573937232224659 for an
    // exponential of mean 1. Bins of 0.1 half widths and of 0.05 means; bounds from the interpolation.
    let w = template(edges(-20.0, 20.0, 400), &|x| 0.5 + x.atan() / PI).widths().unwrap();
    assert!((w.sigma_eff_gev.value.unwrap() / 1.837337201471583 - 1.0).abs() < 1e-5);
    assert!((w.fwhm_gev.value.unwrap() / 2.0 - 1.0).abs() < 1e-4);
    assert!(w.peak_gev.value.unwrap().abs() < 1e-4);
    // The exponential's narrowest interval and peak touch the low end of the axis, below which there is nothing.
    let w = template(edges(0.0, 40.0, 800), &|x| -(-x).exp_m1()).widths().unwrap();
    assert!((w.sigma_eff_gev.value.unwrap() / 0.573937232224659 - 1.0).abs() < 1e-7);
    assert_eq!(w.peak_gev.value, Some(0.0));
    assert!((w.fwhm_gev.value.unwrap() / LN_2 - 1.0).abs() < 1e-5);
    // Mean and standard deviation are 1; nothing of weight lies above 40.
    assert!((w.mean_gev.value.unwrap() - 1.0).abs() < 1e-7);
    assert!((w.standard_deviation_gev.value.unwrap() - 1.0).abs() < 1e-7);
}

#[test]
fn linear_interpolation_would_not_do() {
    // The reason for the cubic, and a proof that the bound can fail: with 0.2 sigma per bin the narrowest interval of
    // the linearly interpolated cumulative of a Gaussian is wrong by more than 0.1 % (its ends in mid-bin).
    let t = template(edges(-20.1, 19.9, 200), &gaussian_cdf);
    let sums: Vec<f64> = t.edges_gev.iter().map(|e| gaussian_cdf(*e)).collect();
    let linear = |target: f64| {
        let k = sums.partition_point(|s| *s < target).max(1);
        t.edges_gev[k - 1] + 0.2 * (target - sums[k - 1]) / (sums[k] - sums[k - 1])
    };
    let width = (1..3000)
        .map(|k| f64::from(k) * 1e-4)
        .map(|p| 0.5 * (linear(p + SIGMA_EFF_FRACTION) - linear(p)))
        .fold(f64::INFINITY, f64::min);
    assert!((width - 1.0).abs() > 1e-3, "{width}");
    assert!((t.widths().unwrap().sigma_eff_gev.value.unwrap() - 1.0).abs() < 2e-5);
}

#[test]
fn mean_and_standard_deviation_are_of_the_part_on_the_axis() {
    // Normal truncated to [-1, 2] (N. L. Johnson, S. Kotz, N. Balakrishnan, Continuous Univariate Distributions 1,
    // 2nd ed. 1994, section 10.1; from memory): mean (phi(a) - phi(b))/Z, variance 1 + (a phi(a) - b phi(b))/Z - mean².
    let phi = |x: f64| (-0.5 * x * x).exp() / (2.0 * PI).sqrt();
    let z = gaussian_cdf(2.0) - gaussian_cdf(-1.0);
    let mean = (phi(-1.0) - phi(2.0)) / z;
    let variance = 1.0 + (-phi(-1.0) - 2.0 * phi(2.0)) / z - mean * mean;
    for (bins, bound) in [(10, 5e-4), (100, 1e-7)] {
        let w = template(edges(-1.0, 2.0, bins), &gaussian_cdf).widths().unwrap();
        // Bin centres alone would be wrong by several 1e-3 with 10 bins and several 1e-5 with 100.
        assert!((w.mean_gev.value.unwrap() - mean).abs() < bound, "{bins}: {:?} {mean}", w.mean_gev);
        assert!((w.standard_deviation_gev.value.unwrap() - variance.sqrt()).abs() < bound, "{bins}");
    }
}

#[test]
fn what_lies_off_the_axis_is_undefined() {
    // The quantiles 0.159 and 0.841 of the unit Gaussian are -1 and 1, the half-maximum points -1.18 and 1.18.
    for (low, high) in [(-0.9, 5.0), (-5.0, 0.9)] {
        let w = template(edges(low, high, 100), &gaussian_cdf).widths().unwrap();
        assert_eq!(w.central_68_gev.value, None);
        assert_eq!(w.sigma_eff_gev.value, None, "the narrowest interval on the axis touches its end");
        assert_eq!(w.fwhm_gev.value, None);
        assert!(w.peak_gev.value.unwrap().abs() < 1e-3);
    }
    let flank = template(edges(0.5, 3.0, 50), &gaussian_cdf).widths().unwrap();
    assert_eq!(flank.peak_gev.value, None, "the peak is below the axis");
    assert_eq!(flank.sigma_eff_gev.value, None, "the axis holds too little");
    assert!(flank.mean_gev.value.is_some());
    let enough = template(edges(-1.3, 1.3, 100), &gaussian_cdf).widths().unwrap();
    assert!((enough.sigma_eff_gev.value.unwrap() - 1.0).abs() < 1e-6);
    assert!((enough.fwhm_gev.value.unwrap() / FWHM_OF_GAUSSIAN - 1.0).abs() < 1e-5);
}

#[test]
fn empty_and_tiny_templates_do_no_harm() {
    let empty = Template { above_axis: 0.0, ..template(edges(0.0, 1.0, 10), &|_| 0.0) }.widths().unwrap();
    let all = [empty.mean_gev, empty.standard_deviation_gev, empty.peak_gev, empty.fwhm_gev, empty.sigma_eff_gev];
    for m in all.into_iter().chain([empty.central_68_gev]) {
        assert_eq!((m.value, m.error), (None, None));
    }
    for bins in [1, 2, 3] {
        let w = template(edges(-4.0, 4.0, bins), &gaussian_cdf).widths().unwrap();
        assert!(w.mean_gev.value.unwrap().abs() < 1e-9);
        assert!(w.central_68_gev.value.unwrap() > 0.5 && w.central_68_gev.value.unwrap() < 4.0);
    }
}

#[test]
fn negative_weights_are_flagged() {
    let mut t = template(edges(-5.0, 5.0, 100), &gaussian_cdf);
    t.probability[10] -= 0.001;
    t.probability[90] += 0.001;
    let w = t.widths().unwrap();
    assert!(!w.monotone);
    // The disturbed bins are far out: a quantile at ±1 moves by 0.001/density(1) = 0.004 at most.
    assert!((w.central_68_gev.value.unwrap() - 1.0).abs() < 0.005);
    assert!((w.sigma_eff_gev.value.unwrap() - 1.0).abs() < 0.005);
}

/// Reproducible standard normal numbers (G. Box and M. Muller, Ann. Math. Stat. 29 (1958) 610, on a linear congruence).
struct Normal(u64);

impl Normal {
    fn uniform(&mut self) -> f64 {
        self.0 = self.0.wrapping_mul(6364136223846793005).wrapping_add(1442695040888963407);
        ((self.0 >> 11) as f64 + 0.5) / (1u64 << 53) as f64
    }

    fn next(&mut self) -> f64 {
        (-2.0 * self.uniform().ln()).sqrt() * (2.0 * PI * self.uniform()).cos()
    }
}

#[test]
fn errors_describe_the_scatter() {
    // 200 templates of 16 replicates with scattering bins: the rms of (width - exact)/error must be that of Student's t
    // with 15 degrees of freedom, sqrt(15/13) = 1.07. Its own statistical error is 1/sqrt(2*200) = 0.05; four of them.
    let exact = template(edges(-10.0, 10.0, 100), &gaussian_cdf);
    let exact_widths = exact.widths().unwrap();
    let mut normal = Normal(7);
    let mut squares = [0.0; 5];
    for _ in 0..200 {
        let replicates: Vec<Replicate> = (0..16)
            .map(|_| Replicate {
                probability: exact.probability.iter().map(|p| (p + 3e-4 * normal.next() * p.sqrt()).max(0.0)).collect(),
                below_axis: exact.below_axis,
                above_axis: exact.above_axis,
                acceptance: 1.0,
            })
            .collect();
        let mean = |bin: usize| replicates.iter().map(|r| r.probability[bin]).sum::<f64>() / 16.0;
        let t = Template { probability: (0..100).map(mean).collect(), replicates, ..exact.clone() };
        let (w, e) = (t.widths().unwrap(), &exact_widths);
        let pairs = [
            (w.mean_gev, e.mean_gev),
            (w.standard_deviation_gev, e.standard_deviation_gev),
            (w.peak_gev, e.peak_gev),
            (w.fwhm_gev, e.fwhm_gev),
            (w.central_68_gev, e.central_68_gev),
        ];
        for (square, (found, exact)) in squares.iter_mut().zip(pairs) {
            let pull = (found.value.unwrap() - exact.value.unwrap()) / found.error.unwrap();
            *square += pull * pull / 200.0;
        }
    }
    for square in squares {
        assert!((f64::sqrt(square) - 1.07).abs() < 0.21, "squares of pulls: {squares:?}");
    }
}

#[test]
fn cumulative_and_quantile_read_per_accepted_event() {
    let c = Cumulative::of(&template(edges(-2.0, 3.0, 50), &gaussian_cdf)).unwrap();
    for x in [-1.97, -1.0, -0.123, 0.05, 2.2, 2.99] {
        // Bins of 0.1 sigma.
        assert!((c.at(x).unwrap() - gaussian_cdf(x)).abs() < 1e-6);
        assert!((c.quantile(gaussian_cdf(x)).unwrap() - x).abs() < 1e-4);
    }
    assert_eq!(c.at(-2.1), None);
    assert_eq!(c.quantile(0.01), None);
}
