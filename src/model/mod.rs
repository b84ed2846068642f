//! The mass model: the resolution shape of a channel as a smooth function of the resonance mass.
//!
//! * [`Response`]: the shape fitted to one template, with its misfit.
//! * [`MassModel`]: all parameters of the shape, acceptance and efficiency, as smooth functions of the mass, from one fit to the
//!   templates of all mass points.
//! * [`Residuals`]: what the shapes leave of the templates, interpolated, for templates more exact than any shape.
//! * [`QuantileInterpolation`]: templates at new masses without a shape.
//! * [`closure`]: what each of these predicts for a mass point that it has not seen.
//! * [`Anchor`]: a simulated sample as a mass point, and [`Agreement`]: how the folded templates agree with such samples.
//! * [`MassBias`]: the misfit as a bias of a fitted mass.
//! * [`CategoryModel`]: all of it for one channel and category, made by [`model_category`].
//! * [`wide_template`]: templates of a resonance with a natural width.
//!
//! A resolution shape here is the distribution of the reconstructed mass less the mass point, for a resonance of no width;
//! its `bias` is where the peak lies. The mass model is made from templates of width 0.

mod acceptance;
mod agreement;
mod anchor;
mod bias;
mod category;
mod closure;
mod mass_model;
mod natural;
mod orders;
mod quantile;
mod residual;
mod response;
mod shape;
mod smooth;

pub use acceptance::YieldFactor;
pub use agreement::{Agreement, AgreementError, AnchorComparison, agreement, compare_anchor};
pub use anchor::{Anchor, AnchorError, BinnedSample, LEAST_ENTRIES, merge_points};
pub use bias::{BiasError, MassBias, mass_bias};
pub use category::{CategoryModel, Fitted, Method, Modelled, PredictError, Prediction, Simulation, model_category};
pub use closure::{
    Closure, ClosureError, ClosurePoint, Deviation, InterpolationError, closure, deviation, quantile_closure,
};
pub use mass_model::{MassModel, ModelError, ModelPoint, Predicted};
pub use natural::{NaturalMass, WideError, WideTemplate, wide_template};
pub use quantile::{QuantileError, QuantileInterpolation};
pub use residual::{ResidualError, Residuals};
pub use response::{Response, ResponseError, better_shape, fit_response};
pub use shape::{PredictedTemplate, parameter_link, prototype};
pub use smooth::{Basis, MassScale, SmoothCurve};
