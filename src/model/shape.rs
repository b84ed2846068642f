//! What the rest of the room asks of shapes and templates.

use crate::fit::Link;
use crate::lineshape::{Resolution, Shape, ShapeError};
use crate::process::ShapeChoice;
use crate::template::{Replicate, Template};

/// A shape of the kind that a channel asks for.
///
/// # Errors
/// None: the values are good. The signature is that of the constructors.
pub fn prototype(choice: ShapeChoice) -> Result<Resolution, ShapeError> {
    match choice {
        ShapeChoice::Gaussian => Resolution::gaussian(0.0, 1.0),
        ShapeChoice::CrystalBall => Resolution::crystal_ball(0.0, 1.0, 1.5, 5.0),
        ShapeChoice::DoubleCrystalBall => Resolution::double_crystal_ball(0.0, 1.0, (1.5, 5.0), (1.7, 8.0)),
        ShapeChoice::DoubleCrystalBallTwoSigmas => {
            Resolution::double_crystal_ball_two_sigmas(0.0, (1.0, 1.0), (1.5, 5.0), (1.7, 8.0))
        }
        ShapeChoice::GaussExp => Resolution::double_gauss_exp(0.0, 1.0, 1.5, 1.7),
    }
}

/// How a parameter of a resolution shape depends on the number that the model makes smooth, from its name: `bias` in units
/// of the mass, the logarithm of a `sigma` in units of the mass, the logarithms of `alpha` and `k`, and ln(n - 1).
pub fn parameter_link(name: &str) -> Link {
    if name.starts_with("bias") {
        Link::Scaled
    } else if name.starts_with("sigma") {
        Link::ScaledLog
    } else if name.starts_with("n_") {
        Link::Log { from: 1.0 }
    } else {
        Link::Log { from: 0.0 }
    }
}

/// The prior of a tail parameter (see [`crate::fit::Curves`]): n from 1.4 to 180 and alpha from 0.3 to 6.7, at one
/// standard deviation.
pub(super) fn prior(name: &str) -> Option<(f64, f64)> {
    if name.starts_with("n_") {
        Some((2.2, 3.0))
    } else if name.starts_with("alpha") || name.starts_with("k_") {
        Some((0.4, 1.5))
    } else {
        None
    }
}

/// A template that was predicted: probability per accepted event; bins and the parts off the axis add to 1.
#[derive(Clone, Debug, PartialEq)]
pub struct PredictedTemplate {
    /// Bin edges in GeV.
    pub edges_gev: Vec<f64>,
    /// Probability per bin.
    pub probability: Vec<f64>,
    /// Its error from the numerical errors of the templates that the prediction is made of; 0 where these are not known.
    /// How well the method interpolates is not in it: see [`super::InterpolationError`].
    pub error: Vec<f64>,
    /// Probability below the axis.
    pub below_axis: f64,
    /// Probability above the axis.
    pub above_axis: f64,
    /// Whether the mass lies outside the masses of the model.
    pub extrapolated: bool,
}

impl PredictedTemplate {
    /// The same as a [`Template`], with an acceptance and its error.
    pub fn into_template(self, acceptance: f64, acceptance_error: f64) -> Template {
        let bins = self.probability.len();
        Template {
            edges_gev: self.edges_gev,
            probability: self.probability,
            error: self.error,
            list_error: vec![0.0; bins],
            below_axis: self.below_axis,
            above_axis: self.above_axis,
            acceptance,
            acceptance_error,
            acceptance_list_error: 0.0,
            efficiency: 1.0,
            efficiency_error: 0.0,
            efficiency_list_error: 0.0,
            lost: 0.0,
            replicates: Vec::<Replicate>::new(),
        }
    }
}

/// Bin probabilities of a shape about a mass, with the parts below and above.
pub(super) fn of_shape(shape: &Resolution, mass_gev: f64, edges_gev: &[f64]) -> (Vec<f64>, f64, f64) {
    let edges: Vec<f64> = edges_gev.iter().map(|e| e - mass_gev).collect();
    let mut probability = vec![0.0; edges.len().saturating_sub(1)];
    shape.bin_probabilities(&edges, &mut probability);
    let (below, above) = match (edges.first(), edges.last()) {
        (Some(&first), Some(&last)) => (shape.cdf(first), shape.sf(last)),
        _ => (1.0, 0.0),
    };
    (probability, below, above)
}

/// Largest difference of two running sums at the bin edges, both normalised on the axis.
pub(super) fn largest_cdf_difference(p: &[f64], q: &[f64]) -> f64 {
    let (all_p, all_q): (f64, f64) = (p.iter().sum(), q.iter().sum());
    let (mut sum_p, mut sum_q, mut largest) = (0.0, 0.0, 0.0_f64);
    for (p, q) in p.iter().zip(q) {
        sum_p += p / all_p;
        sum_q += q / all_q;
        largest = largest.max((sum_p - sum_q).abs());
    }
    largest
}

/// Finite rising edges, at least one bin.
pub(super) fn rising(edges: &[f64]) -> bool {
    edges.len() > 1 && edges.iter().all(|e| e.is_finite()) && edges.windows(2).all(|pair| pair[0] < pair[1])
}
