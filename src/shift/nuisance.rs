//! The nuisances of a detector, and the detectors that they move.

use crate::detector::{Detector, Part, Term, TermCovariance};
use crate::process::Decay;
use nalgebra::{DMatrix, SymmetricEigen};
use std::fmt;

/// How far a covariance may be from symmetric, and an eigenvalue of its correlations below 0, by rounding.
const ROUNDING: f64 = 1e-9;

/// Axes of a covariance with less than this part of the variance of the largest move nothing worth a fold.
const NEGLIGIBLE: f64 = 1e-12;

/// What one nuisance does to one number at +1.
#[derive(Clone, Debug, PartialEq)]
pub struct Move {
    /// The number.
    pub term: Term,
    /// By how much it moves, in its own unit.
    pub by: f64,
}

/// One independent calibration uncertainty.
#[derive(Clone, Debug, PartialEq)]
pub struct Nuisance {
    /// Its name: that of the number it moves (`photon-barrel.constant`), the shared name, or that of the covariance with the
    /// number of the axis (`barrel-terms.axis-1`, in falling variance).
    pub name: String,
    /// What it moves.
    pub moves: Vec<Move>,
}

/// The direction of a shift.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Sign {
    /// One standard deviation up.
    Plus,
    /// One standard deviation down.
    Minus,
}

impl Sign {
    /// +1 or -1.
    pub fn factor(self) -> f64 {
        match self {
            Sign::Plus => 1.0,
            Sign::Minus => -1.0,
        }
    }
}

impl fmt::Display for Sign {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Sign::Plus => "plus",
            Sign::Minus => "minus",
        })
    }
}

/// Why the nuisances of a detector cannot be listed.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum NuisanceError {
    /// Two nuisances of one name that do not share.
    #[error("{name:?} names two different uncertainties; rename the entry or the shared name")]
    SameName {
        /// The name.
        name: String,
    },
    /// A covariance of the wrong size.
    #[error("covariance {name:?}: {terms} numbers need {terms} rows and columns; found {rows} x {columns}")]
    Size {
        /// Its name.
        name: String,
        /// How many numbers.
        terms: usize,
        /// Rows found.
        rows: usize,
        /// Columns found.
        columns: usize,
    },
    /// A covariance that is not a covariance.
    #[error("covariance {name:?} is not {property}: {detail}")]
    NotACovariance {
        /// Its name.
        name: String,
        /// What it should be.
        property: &'static str,
        /// What was found.
        detail: String,
    },
    /// A number with an uncertainty of its own and one by a covariance.
    #[error("{term} has an uncertainty and stands in the covariance {name:?} too; keep one")]
    Twice {
        /// The number.
        term: String,
        /// The covariance.
        name: String,
    },
}

/// All nuisances of a detector, in the order of its entries; shared ones stand where their first member does. Uncertainties
/// of 0 move nothing and are left out.
///
/// # Errors
/// See [`NuisanceError`].
pub fn nuisances(detector: &Detector) -> Result<Vec<Nuisance>, NuisanceError> {
    // Whether the name is a shared one, which others may join.
    let mut list: Vec<(bool, Nuisance)> = Vec::new();
    for part in detector.parts() {
        for uncertainty in detector.uncertainties_of(part) {
            let Some(term) = detector.term(part, &uncertainty.key) else { continue };
            if uncertainty.sigma == 0.0 {
                continue;
            }
            let shared = uncertainty.share.is_some();
            let name = uncertainty.share.clone().unwrap_or_else(|| detector.term_name(&term));
            let moved = Move { term, by: uncertainty.sigma };
            match list.iter_mut().find(|(_, nuisance)| nuisance.name == name) {
                Some((true, nuisance)) if shared => nuisance.moves.push(moved),
                Some(_) => return Err(NuisanceError::SameName { name }),
                None => list.push((shared, Nuisance { name, moves: vec![moved] })),
            }
        }
    }
    for (number, covariance) in detector.covariances.iter().enumerate() {
        let earlier = &detector.covariances[..number];
        let twice = covariance.terms.iter().find(|term| {
            detector.uncertainties_of(term.part).iter().any(|u| u.key == term.key && u.sigma != 0.0)
                || earlier.iter().any(|other| other.terms.contains(term))
        });
        if let Some(term) = twice {
            return Err(NuisanceError::Twice { term: detector.term_name(term), name: covariance.name.clone() });
        }
        for nuisance in axes(covariance)? {
            if list.iter().any(|(_, other)| other.name == nuisance.name) {
                return Err(NuisanceError::SameName { name: nuisance.name });
            }
            list.push((false, nuisance));
        }
    }
    Ok(list.into_iter().map(|(_, nuisance)| nuisance).collect())
}

/// The axes of a covariance C: vectors v with `Σ v vᵀ = C`, from the eigenvectors of the correlation matrix, so that the
/// units of the numbers do not matter. The largest component of an axis is positive.
fn axes(covariance: &TermCovariance) -> Result<Vec<Nuisance>, NuisanceError> {
    let TermCovariance { name, terms, matrix } = covariance;
    let (rows, columns) = matrix.shape();
    if rows != terms.len() || columns != terms.len() {
        return Err(NuisanceError::Size { name: name.clone(), terms: terms.len(), rows, columns });
    }
    let wrong = |property, detail| NuisanceError::NotACovariance { name: name.clone(), property, detail };
    if let Some(entry) = matrix.iter().find(|entry| !entry.is_finite()) {
        return Err(wrong("finite", format!("it holds {entry}")));
    }
    if let Some(variance) = matrix.diagonal().iter().find(|variance| **variance < 0.0) {
        return Err(wrong("positive semi-definite", format!("a variance is {variance}")));
    }
    let sigma = matrix.diagonal().map(f64::sqrt);
    for i in 0..rows {
        for j in 0..i {
            let (above, below) = (matrix[(j, i)], matrix[(i, j)]);
            if (above - below).abs() > ROUNDING * sigma[i] * sigma[j] {
                return Err(wrong(
                    "symmetric",
                    format!("row {} column {} is {below}, the other way {above}", i + 1, j + 1),
                ));
            }
            if sigma[i] * sigma[j] == 0.0 && below != 0.0 {
                return Err(wrong("positive semi-definite", "a number without variance is correlated".to_owned()));
            }
        }
    }
    let correlation = DMatrix::from_fn(rows, rows, |i, j| {
        let scale = sigma[i] * sigma[j];
        if scale > 0.0 { 0.5 * (matrix[(i, j)] + matrix[(j, i)]) / scale } else { 0.0 }
    });
    let eigen = SymmetricEigen::new(correlation);
    let lowest = eigen.eigenvalues.iter().copied().fold(0.0, f64::min);
    if lowest < -ROUNDING {
        return Err(wrong("positive semi-definite", format!("its correlations have the eigenvalue {lowest}")));
    }
    let mut order: Vec<usize> = (0..rows).collect();
    order.sort_by(|a, b| eigen.eigenvalues[*b].total_cmp(&eigen.eigenvalues[*a]));
    let largest = order.first().map_or(0.0, |first| eigen.eigenvalues[*first]);
    let kept = order.into_iter().filter(|k| eigen.eigenvalues[*k] > NEGLIGIBLE * largest);
    Ok(kept
        .enumerate()
        .map(|(number, k)| {
            let vector = eigen.eigenvectors.column(k);
            let leading =
                vector.iter().fold(0.0, |a: f64, b| if b.abs() > (1.0 + ROUNDING) * a.abs() { *b } else { a });
            let length = eigen.eigenvalues[k].sqrt() * leading.signum();
            let moves = terms
                .iter()
                .enumerate()
                .map(|(i, term)| Move { term: term.clone(), by: length * sigma[i] * vector[i] });
            let moves = moves.filter(|moved| moved.by != 0.0).collect();
            Nuisance { name: format!("{name}.axis-{}", number + 1), moves }
        })
        .collect())
}

/// A detector that a shift has moved.
#[derive(Clone, Debug, PartialEq)]
pub struct Shifted {
    /// The detector.
    pub detector: Detector,
    /// Names of the numbers that were clipped at the end of their domain.
    pub clipped: Vec<String>,
}

impl Nuisance {
    /// Whether the nuisance concerns a leg of a decay.
    pub fn touches(&self, detector: &Detector, decay: &Decay) -> bool {
        let legs = decay.legs();
        self.moves.iter().any(|moved| detector.objects_of(moved.term.part).iter().any(|object| legs.contains(object)))
    }

    /// The detector with the nuisance at a number of standard deviations (±1 for a shift).
    pub fn apply(&self, detector: &Detector, deviations: f64) -> Shifted {
        let mut shifted = Shifted { detector: detector.clone(), clipped: Vec::new() };
        for Move { term, by } in &self.moves {
            let Some(nominal) = detector.value(term) else { continue };
            // The fraction of an entry that is alone in its region has nowhere to go.
            let alone = term.key == "fraction" && !shares_region(detector, term.part);
            let wanted = nominal + deviations * by;
            let value = if alone { nominal } else { term.allowed().nearest(wanted, nominal) };
            if value != wanted {
                shifted.clipped.push(detector.term_name(term));
            }
            shifted.detector.set_value(term, value);
        }
        shifted
    }
}

fn shares_region(detector: &Detector, part: Part) -> bool {
    let Part::Calorimeter(index) = part else { return false };
    let Some(entry) = detector.calorimeters.get(index) else { return false };
    let same = |other: &&crate::detector::Calorimeter| other.object == entry.object && other.eta == entry.eta;
    detector.calorimeters.iter().filter(same).count() > 1
}
