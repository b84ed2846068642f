//! Acceptance and efficiency as smooth functions of the mass.

use nalgebra::{DMatrix, DVector};

use super::orders::HIGHEST;
use super::smooth::{Basis, MassScale, SmoothCurve, hinge_allowed, solve};
use crate::fit::{Link, positive_inverse};
use crate::template::Template;

/// A further function must lower the squared deviation of left-out mass points by this part.
const NOTICEABLE: f64 = 0.1;
/// Relative deviation below which nothing is left to gain.
const NEGLIGIBLE: f64 = 1e-5;

/// A positive factor of the yield, by its logarithm: a smooth function of the mass by least squares with equal weights,
/// its functions chosen as those of the shape.
#[derive(Clone, Debug, PartialEq)]
pub struct YieldFactor {
    /// The curve of the factor.
    pub curve: SmoothCurve,
    /// Numerical covariance of its coefficients.
    pub covariance: DMatrix<f64>,
}

/// What one mass point tells.
#[derive(Clone, Debug)]
pub(super) struct FactorPoint {
    mass_gev: f64,
    value: f64,
    error: f64,
    replicates: Vec<f64>,
}

/// The acceptances of templates at their masses.
pub(super) fn acceptances(templates: &[(f64, &Template)]) -> Vec<FactorPoint> {
    let point = |&(mass_gev, template): &(f64, &Template)| FactorPoint {
        mass_gev,
        value: template.acceptance,
        error: libm::hypot(template.acceptance_error, template.acceptance_list_error),
        replicates: template.replicates.iter().map(|r| r.acceptance).collect(),
    };
    templates.iter().map(point).collect()
}

/// Their efficiencies.
pub(super) fn efficiencies(templates: &[(f64, &Template)]) -> Vec<FactorPoint> {
    let point = |&(mass_gev, template): &(f64, &Template)| FactorPoint {
        mass_gev,
        value: template.efficiency,
        error: libm::hypot(template.efficiency_error, template.efficiency_list_error),
        replicates: Vec::new(),
    };
    templates.iter().map(point).collect()
}

impl YieldFactor {
    /// From mass points; `None` where a value is not positive. `fixed` gives the functions.
    pub(super) fn fit(name: &str, points: &[FactorPoint], scale: &MassScale, fixed: Option<Basis>) -> Option<Self> {
        let masses: Vec<f64> = points.iter().map(|p| p.mass_gev).collect();
        if points.iter().any(|p| !(p.value > 0.0 && p.value.is_finite())) {
            return None;
        }
        let logs: Vec<f64> = points.iter().map(|p| libm::log(p.value)).collect();
        let basis = fixed.unwrap_or_else(|| choose(&masses, &logs, scale));
        let design = design(&masses, scale, basis);
        let normal = design.transpose() * &design;
        let coefficients = solve(&normal, &(design.transpose() * DVector::from_column_slice(&logs)))?;
        let gain = positive_inverse(&normal)? * design.transpose();
        let covariance = &gain * variance(points) * gain.transpose();
        let curve = SmoothCurve {
            name: name.to_owned(),
            link: Link::Log { from: 0.0 },
            basis,
            coefficients: coefficients.as_slice().to_vec(),
        };
        Some(YieldFactor { curve, covariance })
    }

    /// The factor at a mass, at most 1, and its numerical error.
    pub fn at(&self, scale: &MassScale, mass_gev: f64) -> (f64, f64) {
        let value = libm::exp(self.curve.eta(scale, mass_gev)).min(1.0);
        let row = DVector::from_vec(scale.row(self.curve.basis, mass_gev));
        let variance = if row.len() == self.covariance.nrows() { row.dot(&(&self.covariance * &row)) } else { 0.0 };
        (value, value * variance.max(0.0).sqrt())
    }
}

fn design(masses: &[f64], scale: &MassScale, basis: Basis) -> DMatrix<f64> {
    let rows: Vec<Vec<f64>> = masses.iter().map(|&m| scale.row(basis, m)).collect();
    DMatrix::from_fn(masses.len(), basis.count(), |j, l| rows[j][l])
}

/// Covariance of the logarithms: scramblings taken in step among mass points that have equally many, for they may be the
/// same; the error of the value where there are none.
fn variance(points: &[FactorPoint]) -> DMatrix<f64> {
    let number = |j: usize| points[j].replicates.len();
    let deviations: Vec<Vec<f64>> = points
        .iter()
        .map(|p| {
            let mean = p.replicates.iter().sum::<f64>() / p.replicates.len().max(1) as f64;
            p.replicates.iter().map(|r| (r - mean) / p.value).collect()
        })
        .collect();
    DMatrix::from_fn(points.len(), points.len(), |i, j| {
        if number(i) > 1 && number(i) == number(j) {
            let products = deviations[i].iter().zip(&deviations[j]).map(|(a, b)| a * b);
            products.sum::<f64>() / (number(i) * (number(i) - 1)) as f64
        } else if i == j {
            let relative = points[j].error / points[j].value;
            relative * relative
        } else {
            0.0
        }
    })
}

/// Sum of squared deviations at left-out interior mass points.
fn loss(masses: &[f64], logs: &[f64], scale: &MassScale, basis: Basis) -> Option<f64> {
    let mut sum = 0.0;
    for out in 1..masses.len() - 1 {
        let keep: Vec<usize> = (0..masses.len()).filter(|&j| j != out).collect();
        let own: Vec<f64> = keep.iter().map(|&j| masses[j]).collect();
        let design = design(&own, scale, basis);
        let vector = design.transpose() * DVector::from_fn(keep.len(), |i, _| logs[keep[i]]);
        let coefficients = solve(&(design.transpose() * &design), &vector)?;
        let told: f64 = scale.row(basis, masses[out]).iter().zip(coefficients.iter()).map(|(b, c)| b * c).sum();
        sum += (told - logs[out]) * (told - logs[out]);
    }
    Some(sum / (masses.len() - 2) as f64)
}

fn choose(masses: &[f64], logs: &[f64], scale: &MassScale) -> Basis {
    let mut best = Basis { order: masses.len().saturating_sub(1).min(1), hinge: false };
    if masses.len() < 3 {
        return best;
    }
    let mut least = loss(masses, logs, scale, best).unwrap_or(f64::INFINITY);
    for hinge in [false, hinge_allowed(scale, masses)] {
        for order in 1..=HIGHEST {
            let basis = Basis { order, hinge };
            if basis.count() >= masses.len() || least < NEGLIGIBLE * NEGLIGIBLE {
                continue;
            }
            if let Some(score) = loss(masses, logs, scale, basis)
                && score < (1.0 - NOTICEABLE) * least
            {
                (least, best) = (score, basis);
            }
        }
    }
    best
}
