//! What the shapes leave of the templates, interpolated between mass points.

use super::mass_model::{MassModel, ModelError, Predicted};
use super::shape::{PredictedTemplate, rising};
use crate::lineshape::{Resolution, Shape};
use crate::template::{Cumulative, CumulativeError, Template};

/// Why a template cannot be corrected.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum ResidualError {
    /// The model.
    #[error(transparent)]
    Model(#[from] ModelError),
    /// A template.
    #[error(transparent)]
    Cumulative(#[from] CumulativeError),
    /// No template, or masses that do not rise.
    #[error("the templates must have rising masses, at least two")]
    Masses,
}

/// The differences of the running sums, template less shape of the mass model, at every mass point.
///
/// With `t = (m - M - bias)/sigma`, both from the model, the difference D(t) at a mass is the linear interpolation of
/// those at its two neighbours, and the template there is that of the shape plus D. At a mass point it is the folded
/// template again, parts off the axis included.
#[derive(Clone, Debug)]
pub struct Residuals {
    points: Vec<Point>,
}

#[derive(Clone, Debug)]
struct Point {
    mass_gev: f64,
    resolution: Resolution,
    cumulative: Cumulative,
    error: Vec<f64>,
    edges_gev: Vec<f64>,
}

impl Point {
    /// Template less shape of the running sum at t; beyond the axis what it is at the end.
    fn difference(&self, t: f64) -> f64 {
        let (low, high) = self.cumulative.range_gev();
        let mass = (self.mass_gev + self.resolution.bias() + t * self.resolution.sigmas().0).clamp(low, high);
        let own = self.cumulative.at(mass).unwrap_or(0.0);
        own - self.resolution.cdf(mass - self.mass_gev)
    }

    /// Error of the template in the bin at t, per unit of t.
    fn error(&self, t: f64) -> f64 {
        let sigma = self.resolution.sigmas().0;
        let mass = self.mass_gev + self.resolution.bias() + t * sigma;
        let bin = self.edges_gev.partition_point(|e| *e <= mass);
        match (bin.checked_sub(1).and_then(|b| self.error.get(b)), self.edges_gev.get(bin)) {
            (Some(error), Some(high)) => error * sigma / (high - self.edges_gev[bin - 1]),
            _ => 0.0,
        }
    }
}

impl Residuals {
    /// From the templates (mass points in GeV, rising) that the model was made of.
    ///
    /// # Errors
    /// Less than two templates, masses that do not rise, or a template without a running sum.
    pub fn new(model: &MassModel, templates: &[(f64, &Template)]) -> Result<Self, ResidualError> {
        if templates.len() < 2 || templates.windows(2).any(|pair| !(pair[0].0 < pair[1].0)) {
            return Err(ResidualError::Masses);
        }
        let points = templates
            .iter()
            .map(|&(mass_gev, template)| {
                Ok(Point {
                    mass_gev,
                    resolution: model.resolution_at(mass_gev)?,
                    cumulative: Cumulative::of(template)?,
                    error: template.bin_errors(),
                    edges_gev: template.edges_gev.clone(),
                })
            })
            .collect::<Result<Vec<Point>, ResidualError>>()?;
        Ok(Residuals { points })
    }

    /// The template of the model at a mass, corrected, on edges in GeV. Beyond the mass points the nearest one corrects.
    ///
    /// Errors of the bins are those of the neighbouring templates.
    ///
    /// # Errors
    /// Edges that do not rise.
    pub fn template(&self, predicted: &Predicted, edges_gev: &[f64]) -> Result<PredictedTemplate, ModelError> {
        if !rising(edges_gev) {
            return Err(ModelError::Edges);
        }
        let mass = predicted.mass_gev;
        let shape = &predicted.resolution;
        let weights = self.weights(mass);
        let (bias, sigma) = (shape.bias(), shape.sigmas().0);
        let t = |m: f64| (m - mass - bias) / sigma;
        let corrections: Vec<f64> = edges_gev
            .iter()
            .map(|&m| weights.iter().map(|&(j, w)| w * self.points[j].difference(t(m))).sum())
            .collect();
        let mut bare = predicted.template(edges_gev)?;
        for (i, p) in bare.probability.iter_mut().enumerate() {
            *p += corrections[i + 1] - corrections[i];
        }
        let bins = bare.probability.len();
        bare.below_axis += corrections[0];
        bare.above_axis -= corrections[bins];
        for i in 0..bins {
            let (from, to) = (t(edges_gev[i]), t(edges_gev[i + 1]));
            let squares: f64 = weights
                .iter()
                .map(|&(j, w)| {
                    let e = w * self.points[j].error(0.5 * (from + to)) * (to - from);
                    e * e
                })
                .sum();
            bare.error[i] = squares.sqrt();
        }
        Ok(bare)
    }

    /// The neighbours of a mass with their weights.
    fn weights(&self, mass_gev: f64) -> Vec<(usize, f64)> {
        neighbours(&self.points.iter().map(|p| p.mass_gev).collect::<Vec<_>>(), mass_gev)
    }
}

/// The two neighbours of a mass among rising ones, with the weights of a linear interpolation; the nearest outside.
fn neighbours(masses: &[f64], mass_gev: f64) -> Vec<(usize, f64)> {
    let above = masses.partition_point(|m| *m <= mass_gev);
    if above == 0 {
        return vec![(0, 1.0)];
    }
    if above == masses.len() || masses[above - 1] == mass_gev {
        return vec![(above - 1, 1.0)];
    }
    let w = (mass_gev - masses[above - 1]) / (masses[above] - masses[above - 1]);
    vec![(above - 1, 1.0 - w), (above, w)]
}
