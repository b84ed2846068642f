//! Adaptive Gauss-Kronrod quadrature of several functions at once.

/// Nodes of one panel.
pub const NODES: usize = 21;
/// Room for the nodes of one panel, a whole number of vectors.
pub const ROOM: usize = 24;

/// Half of the symmetric rule: node, weight of the 21-point Kronrod rule, weight of the 10-point Gauss rule. Computed in
/// 60-digit arithmetic (mpmath) from the Stieltjes polynomial; they agree with R. Piessens et al., QUADPACK (1983).
const RULE: [(f64, f64, f64); 11] = [
    (0.0, 0.1494455540029169, 0.0),
    (0.14887433898163122, 0.14773910490133849, 0.29552422471475287),
    (0.2943928627014602, 0.14277593857706009, 0.0),
    (0.4333953941292472, 0.13470921731147334, 0.26926671930999635),
    (0.5627571346686047, 0.12349197626206584, 0.0),
    (0.6794095682990244, 0.10938715880229764, 0.21908636251598204),
    (0.7808177265864169, 0.0931254545836976, 0.0),
    (0.8650633666889845, 0.07503967481091996, 0.1494513491505806),
    (0.9301574913557082, 0.054755896574351995, 0.0),
    (0.9739065285171717, 0.032558162307964725, 0.06667134430868814),
    (0.9956571630258081, 0.011694638867371874, 0.0),
];

/// Nodes and weights of the 8-point Gauss-Legendre rule on (-1, 1), positive half: exact up to degree 15 (M. Abramowitz and I. A. Stegun,
/// Handbook of Mathematical Functions (1964), table 25.4).
pub const GAUSS_8: [(f64, f64); 4] = [
    (0.183434642495649805, 0.362683783378361983),
    (0.525532409916328986, 0.313706645877887287),
    (0.796666477413626740, 0.222381034453374471),
    (0.960289856497536232, 0.101228536290376259),
];

/// The most panels before the integration gives up and reports the error that it has.
const MAX_PANELS: usize = 600;

/// Integrals with their estimated absolute errors.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Integral<const C: usize> {
    /// Values.
    pub value: [f64; C],
    /// Estimated absolute errors.
    pub error: [f64; C],
}

struct Panel<const C: usize> {
    low: f64,
    high: f64,
    value: [f64; C],
    error: [f64; C],
    absolute: [f64; C],
}

/// Integrates C functions over the panels between rising `breaks`, and halves the panel with the largest error until the
/// sum of the errors of each function is below `tolerance` times the integral of its absolute value.
///
/// `f` takes the nodes of a panel, of which the first [`NODES`] count, and fills one row per function.
pub fn integrate<const C: usize>(
    breaks: &[f64],
    tolerance: f64,
    mut f: impl FnMut(&[f64; ROOM], &mut [[f64; ROOM]; C]),
) -> Integral<C> {
    let mut panels: Vec<Panel<C>> =
        breaks.windows(2).filter(|pair| pair[1] > pair[0]).map(|pair| panel(pair[0], pair[1], &mut f)).collect();
    loop {
        let mut value = [0.0; C];
        let mut error = [0.0; C];
        let mut absolute = [0.0; C];
        for p in &panels {
            for c in 0..C {
                value[c] += p.value[c];
                error[c] += p.error[c];
                absolute[c] += p.absolute[c];
            }
        }
        let excess =
            |e: &[f64; C]| (0..C).map(|c| if absolute[c] > 0.0 { e[c] / absolute[c] } else { 0.0 }).fold(0.0, f64::max);
        let done = (0..C).all(|c| error[c] <= tolerance * absolute[c]);
        let worst = panels.iter().enumerate().max_by(|a, b| excess(&a.1.error).total_cmp(&excess(&b.1.error)));
        let Some((worst, _)) = worst.filter(|_| !done && panels.len() < MAX_PANELS) else {
            return Integral { value, error };
        };
        let (low, high) = (panels[worst].low, panels[worst].high);
        let middle = 0.5 * (low + high);
        if !(middle > low && middle < high) {
            return Integral { value, error };
        }
        panels[worst] = panel(low, middle, &mut f);
        panels.push(panel(middle, high, &mut f));
    }
}

fn panel<const C: usize>(low: f64, high: f64, f: &mut impl FnMut(&[f64; ROOM], &mut [[f64; ROOM]; C])) -> Panel<C> {
    let (centre, half) = (0.5 * (low + high), 0.5 * (high - low));
    let mut x = [centre; ROOM];
    for (i, &(node, _, _)) in RULE.iter().enumerate() {
        x[10 - i] = centre - half * node;
        x[10 + i] = centre + half * node;
    }
    let mut y = [[0.0; ROOM]; C];
    f(&x, &mut y);
    let mut result = Panel { low, high, value: [0.0; C], error: [0.0; C], absolute: [0.0; C] };
    for (c, y) in y.iter().enumerate() {
        let mut kronrod = RULE[0].1 * y[10];
        let mut gauss = 0.0;
        let mut absolute = RULE[0].1 * y[10].abs();
        for (i, &(_, k, g)) in RULE.iter().enumerate().skip(1) {
            let pair = y[10 - i] + y[10 + i];
            kronrod += k * pair;
            gauss += g * pair;
            absolute += k * (y[10 - i].abs() + y[10 + i].abs());
        }
        let mean = 0.5 * kronrod;
        let mut spread = RULE[0].1 * (y[10] - mean).abs();
        for (i, &(_, k, _)) in RULE.iter().enumerate().skip(1) {
            spread += k * ((y[10 - i] - mean).abs() + (y[10 + i] - mean).abs());
        }
        let difference = (kronrod - gauss).abs();
        // The empirical scaling of QUADPACK: the Kronrod value is far better than its difference from the Gauss value.
        let ratio = if spread > 0.0 { 200.0 * difference / spread } else { 0.0 };
        let error = if ratio < 1.0 { spread * ratio * ratio.sqrt() } else { difference };
        result.value[c] = half * kronrod;
        result.error[c] = half * error;
        result.absolute[c] = half * absolute;
    }
    result
}

/// Nodes of a panel of [`gauss_legendre`].
pub const ORDER: usize = 16;

/// Nodes and weights of the 16-point Gauss-Legendre rule on [-1, 1], by Newton's method on the Legendre polynomial.
pub fn gauss_legendre() -> &'static [(f64, f64); ORDER] {
    static POINTS: std::sync::OnceLock<[(f64, f64); ORDER]> = std::sync::OnceLock::new();
    POINTS.get_or_init(|| {
        let mut rule = [(0.0, 0.0); ORDER];
        for (i, slot) in rule.iter_mut().enumerate() {
            let mut x = libm::cos(std::f64::consts::PI * (i as f64 + 0.75) / (ORDER as f64 + 0.5));
            let mut slope = 1.0;
            for _ in 0..8 {
                let (mut p, mut before) = (x, 1.0);
                for k in 2..=ORDER {
                    let k = k as f64;
                    (p, before) = (((2.0 * k - 1.0) * x * p - (k - 1.0) * before) / k, p);
                }
                slope = ORDER as f64 * (x * p - before) / (x * x - 1.0);
                x -= p / slope;
            }
            *slot = (x, 2.0 / ((1.0 - x * x) * slope * slope));
        }
        rule
    })
}
