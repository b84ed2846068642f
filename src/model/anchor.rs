//! Mass points from a full simulation: samples of reconstructed mass as templates of the mass model.
//!
//! A sample is binned on the channel's axis. Its statistical error stands in [`Template::list_error`] per bin, the root of
//! the sum of squared weights. There are no replicates: what a fit makes of the statistics of a sample follows from these
//! errors exactly ([`super::fit_response`]), while resampling would only estimate it. So [`Template::widths`] of such a
//! template has no errors; [`super::compare_anchor`] has.

use super::mass_model::ModelPoint;
use super::response::{Response, ResponseError, fit_response};
use super::shape::rising;
use crate::fit::Masses;
use crate::process::{ShapeChoice, SimulatedUse};
use crate::template::Template;

/// Least effective number of entries on the axis. With 1000 the peak of a Gaussian is known to 3 % of its width, the width
/// to 2 %, and about 100 entries beyond 1.6 sigma are left to say something of the four parameters of the tails; with
/// fewer a fit of a tailed shape follows the fluctuations.
pub const LEAST_ENTRIES: f64 = 1000.0;

/// Why a simulated sample cannot be used.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum AnchorError {
    /// Weights that do not add to a positive number on the axis.
    #[error("the weights on the mass axis add to {0}; their sum must be positive")]
    WeightSum(f64),
    /// Too few entries.
    #[error(
        "{entries} entries on the mass axis, effectively {effective:.0} (square of the sum of weights over the sum of \
         their squares), must be at least {LEAST_ENTRIES}: with fewer the tails of a shape cannot be fitted; simulate \
         more events, or leave this mass out"
    )]
    TooFew {
        /// Entries on the axis.
        entries: usize,
        /// Their effective number.
        effective: f64,
    },
    /// More accepted than generated.
    #[error("the accepted weights add to {accepted}, more than the {generated} generated")]
    Generated {
        /// Sum of the weights of the sample.
        accepted: f64,
        /// Sum of the generated weights.
        generated: f64,
    },
    /// Edges that do not rise.
    #[error("bin edges must be finite and rise")]
    Edges,
    /// No acceptance for a mass that lies outside of the folded ones.
    #[error(
        "the acceptance at {0} GeV is not known: give the generated weight of the sample, or fold at masses on either side"
    )]
    Acceptance(f64),
    /// The fit of the shape.
    #[error(transparent)]
    Response(#[from] ResponseError),
}

/// A sample on a mass axis.
#[derive(Clone, Debug, PartialEq)]
pub struct BinnedSample {
    /// Bin edges in GeV.
    pub edges_gev: Vec<f64>,
    /// Sum of weights per bin.
    pub weight: Vec<f64>,
    /// Sum of squared weights per bin.
    pub squared_weight: Vec<f64>,
    /// Sum of weights below the axis.
    pub below: f64,
    /// Sum of weights above the axis.
    pub above: f64,
    /// Sum of squared weights, on the axis or off it.
    pub squared_all: f64,
    /// Entries on the axis.
    pub entries: usize,
}

impl BinnedSample {
    /// Bins a sample; the last edge belongs to the axis.
    ///
    /// # Errors
    /// Edges that do not rise, weights without a positive sum on the axis, or too few entries there ([`LEAST_ENTRIES`]).
    pub fn new(masses: &Masses, edges_gev: &[f64]) -> Result<Self, AnchorError> {
        if !rising(edges_gev) {
            return Err(AnchorError::Edges);
        }
        let bins = edges_gev.len() - 1;
        let mut binned = BinnedSample {
            edges_gev: edges_gev.to_vec(),
            weight: vec![0.0; bins],
            squared_weight: vec![0.0; bins],
            below: 0.0,
            above: 0.0,
            squared_all: 0.0,
            entries: 0,
        };
        for (i, &mass) in masses.gev().iter().enumerate() {
            let w = masses.weights().map_or(1.0, |weights| weights[i]);
            binned.squared_all += w * w;
            if mass < edges_gev[0] {
                binned.below += w;
            } else if mass > edges_gev[bins] {
                binned.above += w;
            } else {
                let bin = edges_gev.partition_point(|edge| *edge <= mass).clamp(1, bins) - 1;
                binned.weight[bin] += w;
                binned.squared_weight[bin] += w * w;
                binned.entries += 1;
            }
        }
        let sum = binned.on_axis();
        if !(sum > 0.0 && sum.is_finite()) {
            return Err(AnchorError::WeightSum(sum));
        }
        let effective = binned.effective_entries();
        if !(effective >= LEAST_ENTRIES) {
            return Err(AnchorError::TooFew { entries: binned.entries, effective });
        }
        Ok(binned)
    }

    /// Sum of weights on the axis.
    pub fn on_axis(&self) -> f64 {
        self.weight.iter().sum()
    }

    /// Sum of all weights.
    pub fn accepted(&self) -> f64 {
        self.on_axis() + self.below + self.above
    }

    /// Effective number of entries on the axis: squared sum of weights over sum of squared weights.
    pub fn effective_entries(&self) -> f64 {
        let squares: f64 = self.squared_weight.iter().sum();
        self.on_axis() * self.on_axis() / squares
    }

    /// Acceptance and its statistical error for this sum of generated weights, binomial for weights of 1.
    ///
    /// # Errors
    /// More accepted than generated, or a sum that is not positive.
    pub fn acceptance(&self, generated: f64) -> Result<(f64, f64), AnchorError> {
        let accepted = self.accepted();
        if !(accepted > 0.0 && accepted <= generated && generated.is_finite()) {
            return Err(AnchorError::Generated { accepted, generated });
        }
        let acceptance = accepted / generated;
        Ok((acceptance, (self.squared_all * (1.0 - acceptance)).sqrt() / generated))
    }
}

/// A simulated mass point: a template with the shape fitted to it.
#[derive(Clone, Debug)]
pub struct Anchor {
    /// Mass of the simulated resonance in GeV.
    pub mass_gev: f64,
    /// The sample on the channel's axis.
    pub sample: BinnedSample,
    /// The same per accepted event. Acceptance: of the sample where the generated weight is known, else of the folded
    /// templates. Efficiency: of the folded templates. `lost` is 0, for a sample does not tell.
    pub template: Template,
    /// Whether the acceptance is that of the sample.
    pub own_acceptance: bool,
    /// The shape fitted to the template; its covariance is the statistical one of the sample.
    pub response: Response,
}

impl Anchor {
    /// From a sample of the events of one category that pass the cuts.
    ///
    /// `folded` are the folded templates of the category at rising masses in GeV. What a sample does not tell is taken from
    /// them: at its mass, else by interpolating the logarithm between its neighbours.
    ///
    /// # Errors
    /// See [`AnchorError`].
    pub fn new(
        masses: &Masses,
        generated: Option<f64>,
        mass_gev: f64,
        edges_gev: &[f64],
        shape: ShapeChoice,
        folded: &[(f64, &Template)],
    ) -> Result<Self, AnchorError> {
        let sample = BinnedSample::new(masses, edges_gev)?;
        let accepted = sample.accepted();
        let (acceptance, acceptance_error, acceptance_list_error) = match generated {
            Some(generated) => {
                let (value, error) = sample.acceptance(generated)?;
                (value, 0.0, error)
            }
            None => between(folded, mass_gev, |t| (t.acceptance, t.acceptance_error, t.acceptance_list_error))
                .ok_or(AnchorError::Acceptance(mass_gev))?,
        };
        // Beyond the folded masses the nearest one tells the efficiency.
        let ends = folded.first().zip(folded.last());
        let inside = ends.map_or(mass_gev, |(first, last)| mass_gev.clamp(first.0, last.0));
        let (efficiency, efficiency_error, efficiency_list_error) =
            between(folded, inside, |t| (t.efficiency, t.efficiency_error, t.efficiency_list_error))
                .unwrap_or((1.0, 0.0, 0.0));
        let template = Template {
            edges_gev: edges_gev.to_vec(),
            probability: sample.weight.iter().map(|w| w / accepted).collect(),
            error: vec![0.0; sample.weight.len()],
            list_error: sample.squared_weight.iter().map(|w| w.sqrt() / accepted).collect(),
            below_axis: sample.below / accepted,
            above_axis: sample.above / accepted,
            acceptance,
            acceptance_error,
            acceptance_list_error,
            efficiency,
            efficiency_error,
            efficiency_list_error,
            lost: 0.0,
            replicates: Vec::new(),
        };
        let response = fit_response(&template, mass_gev, shape)?;
        Ok(Anchor { mass_gev, sample, template, own_acceptance: generated.is_some(), response })
    }

    /// As a mass point of the model.
    pub fn point(&self) -> ModelPoint<'_> {
        ModelPoint { template: &self.template, response: &self.response }
    }
}

/// A positive value with its errors at a mass among rising ones; `None` outside of them or where it is not positive.
fn between(
    folded: &[(f64, &Template)],
    mass_gev: f64,
    value: impl Fn(&Template) -> (f64, f64, f64),
) -> Option<(f64, f64, f64)> {
    let above = folded.partition_point(|(mass, _)| *mass < mass_gev);
    let (high_mass, high) = folded.get(above)?;
    let two = value(high);
    if *high_mass == mass_gev {
        return Some(two);
    }
    let (low_mass, low) = folded.get(above.checked_sub(1)?)?;
    let one = value(low);
    if !(one.0 > 0.0 && two.0 > 0.0) {
        return None;
    }
    let b = (mass_gev - low_mass) / (high_mass - low_mass);
    let a = 1.0 - b;
    let middle = libm::exp(a * libm::log(one.0) + b * libm::log(two.0));
    let error = |one_error: f64, two_error: f64| middle * libm::hypot(a * one_error / one.0, b * two_error / two.0);
    Some((middle, error(one.1, two.1), error(one.2, two.2)))
}

/// The mass points of a model: the folded ones, and with [`SimulatedUse::Instead`] the anchors, which replace a folded
/// point at the same mass and join at others; rising.
///
/// All points count alike in [`super::MassModel::fit`]. Where fold and simulation disagree, a model of some folded and some
/// simulated points follows the steps between them: see [`super::Agreement`] first.
pub fn merge_points<'a>(folded: &[ModelPoint<'a>], anchors: &'a [Anchor], usage: SimulatedUse) -> Vec<ModelPoint<'a>> {
    if usage == SimulatedUse::Beside {
        return folded.to_vec();
    }
    let replaced = |point: &&ModelPoint<'a>| !anchors.iter().any(|a| a.mass_gev == point.response.mass_gev);
    let mut points: Vec<ModelPoint<'a>> =
        folded.iter().filter(replaced).copied().chain(anchors.iter().map(Anchor::point)).collect();
    points.sort_by(|a, b| a.response.mass_gev.total_cmp(&b.response.mass_gev));
    points
}
