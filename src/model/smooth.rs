//! Smooth functions of the mass.

use nalgebra::{DMatrix, DVector};

use crate::fit::Link;

/// Which functions of the mass a curve is made of: Chebyshev polynomials `T_0 … T_order` of
/// `u = (2 M - low - high)/(high - low)`, and with `hinge` also `max(0, u - u_knot)`.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Basis {
    /// Order of the polynomial.
    pub order: usize,
    /// Whether the slope may change at the knot.
    pub hinge: bool,
}

impl Basis {
    /// Number of coefficients.
    pub fn count(self) -> usize {
        self.order + 1 + usize::from(self.hinge)
    }
}

/// The scale of the mass that the functions are made of.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct MassScale {
    /// Lowest mass point in GeV.
    pub low_gev: f64,
    /// Highest mass point in GeV.
    pub high_gev: f64,
    /// Where slopes may change, in GeV.
    pub knot_gev: Option<f64>,
}

impl MassScale {
    fn u(&self, mass_gev: f64) -> f64 {
        let span = self.high_gev - self.low_gev;
        if span > 0.0 { (2.0 * mass_gev - self.low_gev - self.high_gev) / span } else { 0.0 }
    }

    /// The mass, or the end of the range that is nearer to it.
    pub fn nearest(&self, mass_gev: f64) -> f64 {
        // Not `clamp`, which would end the program where a model that was read has its ends the wrong way round.
        mass_gev.max(self.low_gev).min(self.high_gev)
    }

    /// Whether a mass lies outside.
    pub fn outside(&self, mass_gev: f64) -> bool {
        !(self.low_gev..=self.high_gev).contains(&mass_gev)
    }

    /// The functions of a basis at a mass; outside of the range their tangents at its nearer end.
    pub fn row(&self, basis: Basis, mass_gev: f64) -> Vec<f64> {
        let nearest = self.nearest(mass_gev);
        let mut row = self.inner_row(basis, nearest);
        if nearest != mass_gev {
            let slopes = self.inner_slopes(basis, nearest);
            row.iter_mut().zip(&slopes).for_each(|(r, s)| *r += s * (mass_gev - nearest));
        }
        row
    }

    /// Their derivatives in the mass, per GeV.
    pub fn slopes(&self, basis: Basis, mass_gev: f64) -> Vec<f64> {
        self.inner_slopes(basis, self.nearest(mass_gev))
    }

    fn inner_row(&self, basis: Basis, mass_gev: f64) -> Vec<f64> {
        let u = self.u(mass_gev);
        let mut row = Vec::with_capacity(basis.count());
        let (mut last, mut this) = (u, 1.0);
        for _ in 0..=basis.order {
            row.push(this);
            (last, this) = (this, 2.0 * u * this - last);
        }
        if basis.hinge {
            row.push(self.knot_gev.map_or(0.0, |knot| (u - self.u(knot)).max(0.0)));
        }
        row
    }

    fn inner_slopes(&self, basis: Basis, mass_gev: f64) -> Vec<f64> {
        let u = self.u(mass_gev);
        let span = self.high_gev - self.low_gev;
        let unit = if span > 0.0 { 2.0 / span } else { 0.0 };
        // T_n' = n U_(n-1); U_n is the same recursion from 1 and 2u.
        let mut slopes = vec![0.0];
        let (mut last, mut this) = (0.0, 1.0);
        for n in 1..=basis.order {
            slopes.push(n as f64 * this * unit);
            (last, this) = (this, 2.0 * u * this - last);
        }
        if basis.hinge {
            slopes.push(self.knot_gev.map_or(0.0, |knot| if mass_gev > knot { unit } else { 0.0 }));
        }
        slopes
    }
}

/// One quantity as a smooth function of the mass: `link(Σ coefficient basis(M))`.
#[derive(Clone, Debug, PartialEq)]
pub struct SmoothCurve {
    /// Name of the quantity.
    pub name: String,
    /// How it follows from the sum.
    pub link: Link,
    /// The functions.
    pub basis: Basis,
    /// Their coefficients.
    pub coefficients: Vec<f64>,
}

impl SmoothCurve {
    /// The sum at a mass.
    pub fn eta(&self, scale: &MassScale, mass_gev: f64) -> f64 {
        scale.row(self.basis, mass_gev).iter().zip(&self.coefficients).map(|(b, c)| b * c).sum()
    }

    /// Its derivative in the mass.
    pub fn eta_slope(&self, scale: &MassScale, mass_gev: f64) -> f64 {
        scale.slopes(self.basis, mass_gev).iter().zip(&self.coefficients).map(|(b, c)| b * c).sum()
    }
}

/// Smallest pivot of a normal matrix of unit diagonal: below it the masses do not determine the functions.
const PIVOT: f64 = 1e-9;

/// The solution of `A c = b` for a symmetric positive A; `None` where it is not well determined.
pub(super) fn solve(matrix: &DMatrix<f64>, vector: &DVector<f64>) -> Option<DVector<f64>> {
    let n = matrix.nrows();
    if n == 0 || !matrix.diagonal().iter().all(|d| *d > 0.0) {
        return None;
    }
    let scale = matrix.diagonal().map(f64::sqrt);
    let scaled = DMatrix::from_fn(n, n, |i, j| matrix[(i, j)] / (scale[i] * scale[j]));
    let factors = nalgebra::Cholesky::new(scaled)?;
    if factors.l_dirty().diagonal().iter().any(|l| l * l < PIVOT) {
        return None;
    }
    Some(factors.solve(&vector.component_div(&scale)).component_div(&scale))
}

/// Whether hinges are of use: at least two masses on either side of the knot.
pub(super) fn hinge_allowed(scale: &MassScale, masses: &[f64]) -> bool {
    scale.knot_gev.is_some_and(|knot| {
        let below = masses.iter().filter(|m| **m < knot).count();
        below >= 2 && masses.len() - below >= 2
    })
}
