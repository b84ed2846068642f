//! Which functions of the mass each parameter needs.
//!
//! Near the fits of the single templates the criterion is a quadratic form, so the simultaneous fit is a weighted linear
//! least squares, and leaving a mass point out costs next to nothing. Functions are added one at a time, the one that
//! lowers the loss at left-out mass points most, as long as the loss falls noticeably.

use nalgebra::{DMatrix, DVector};

use super::smooth::{Basis, MassScale, hinge_allowed, solve};
use crate::fit::CRITERION_EVENTS;

/// A function must lower the loss by this part.
const NOTICEABLE: f64 = 0.05;
/// Loss per mass point (information per event) below which nothing is left to gain: |ΔCDF| of about 1e-4.
const NEGLIGIBLE: f64 = 2e-8;
/// Highest order.
pub(super) const HIGHEST: usize = 4;

/// What a fit of one template told: every η, and the second derivatives of the criterion in them.
#[derive(Clone, Debug)]
pub(super) struct Single<'a> {
    pub mass_gev: f64,
    pub etas: &'a [f64],
    pub information: &'a DMatrix<f64>,
}

/// The coefficients that come nearest to the fits of the single templates, by curve.
pub(super) fn nearest(singles: &[&Single<'_>], scale: &MassScale, bases: &[Basis]) -> Option<Vec<Vec<f64>>> {
    let count: usize = bases.iter().map(|b| b.count()).sum();
    let mut matrix = DMatrix::zeros(count, count);
    let mut vector = DVector::zeros(count);
    for single in singles {
        // One row per parameter.
        let mut design = DMatrix::<f64>::zeros(bases.len(), count);
        let mut place = 0;
        for (k, basis) in bases.iter().enumerate() {
            for b in scale.row(*basis, single.mass_gev) {
                design[(k, place)] = b;
                place += 1;
            }
        }
        let weighted = design.transpose() * single.information;
        matrix += &weighted * &design;
        vector += &weighted * DVector::from_column_slice(single.etas);
    }
    let flat = solve(&matrix, &vector)?;
    let mut rest = flat.as_slice();
    Some(
        bases
            .iter()
            .map(|basis| {
                let (own, others) = rest.split_at(basis.count());
                rest = others;
                own.to_vec()
            })
            .collect(),
    )
}

/// Mean loss of information per event at interior mass points that are left out.
fn loss(singles: &[Single<'_>], scale: &MassScale, bases: &[Basis]) -> Option<f64> {
    let mut sum = 0.0;
    let inner = 1..singles.len() - 1;
    for out in inner.clone() {
        let others: Vec<&Single<'_>> = singles.iter().enumerate().filter(|(j, _)| *j != out).map(|(_, s)| s).collect();
        let coefficients = nearest(&others, scale, bases)?;
        let left = &singles[out];
        let off = DVector::from_fn(bases.len(), |k, _| {
            let row = scale.row(bases[k], left.mass_gev);
            row.iter().zip(&coefficients[k]).map(|(b, c)| b * c).sum::<f64>() - left.etas[k]
        });
        sum += 0.5 * off.dot(&(left.information * &off)) / CRITERION_EVENTS;
    }
    Some(sum / inner.len() as f64)
}

/// The functions of each parameter, chosen by what they predict for left-out mass points. With two mass points every
/// parameter is linear.
pub(super) fn choose(singles: &[Single<'_>], scale: &MassScale) -> Vec<Basis> {
    let parameters = singles.first().map_or(0, |s| s.etas.len());
    if singles.len() < 3 {
        return vec![Basis { order: singles.len().saturating_sub(1), hinge: false }; parameters];
    }
    let masses: Vec<f64> = singles.iter().map(|s| s.mass_gev).collect();
    let hinge = hinge_allowed(scale, &masses);
    let mut bases = vec![Basis { order: 0, hinge: false }; parameters];
    let mut best = loss(singles, scale, &bases).unwrap_or(f64::INFINITY);
    while best > NEGLIGIBLE {
        let mut found: Option<(f64, Vec<Basis>)> = None;
        let mut moves = Vec::new();
        for k in 0..parameters {
            let mut higher = bases.clone();
            higher[k].order += 1;
            // One mass point is left out, and the others determine the functions.
            if higher[k].order <= HIGHEST && higher[k].count() < masses.len() {
                moves.push(higher);
            }
            let mut bent = bases.clone();
            bent[k].hinge = true;
            bent[k].order = bent[k].order.max(1);
            if hinge && !bases[k].hinge && bent[k].count() < masses.len() {
                moves.push(bent);
            }
        }
        for bases in moves {
            if let Some(score) = loss(singles, scale, &bases)
                && found.as_ref().is_none_or(|(s, _)| score < *s)
            {
                found = Some((score, bases));
            }
        }
        match found {
            Some((score, next)) if score < (1.0 - NOTICEABLE) * best => (best, bases) = (score, next),
            _ => break,
        }
    }
    bases
}
