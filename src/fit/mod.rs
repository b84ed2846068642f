//! Maximum-likelihood fits of a line shape, with or without background, to masses or to a histogram.
//!
//! # Conventions
//!
//! * The line shape is normalised in the window; so is the background. With S and B the yields and p_s, p_b these
//!   densities, the intensity is `λ(m) = S p_s(m) + B p_b(m)`.
//! * Masses without background: `-ln L = -Σ w ln p_s(m)`. Masses with background (extended, R. Barlow, Nucl. Instrum.
//!   Meth. A 297 (1990) 496): `-ln L = S + B - Σ w ln λ(m)`.
//! * A histogram of counts: Poisson, `-ln L = Σ [μ - n + n ln(n/μ)]` with μ the integral of λ over the bin (S. Baker and
//!   R. D. Cousins, Nucl. Instrum. Meth. 221 (1984) 437); with errors: `Σ ((n - μ)/error)²/2`. Always with yields.
//! * Errors are standard errors from the inverse of the second derivatives of `-ln L` at the minimum, in the parameters
//!   themselves and without their limits. Weighted masses: `H⁻¹ (Σ w² g gᵀ) H⁻¹`, g the derivatives of `ln λ` (or of
//!   `ln p_s`) of one mass (P. J. Huber, Proc. Fifth Berkeley Symp. 1 (1967) 221).
//! * Parameters: those of the line shape, then `signal_yield`, then those of the [`Background`]. `width`,
//!   `falloff_power` and `bias` are fixed unless they are freed.

mod background;
mod binned;
mod coordinates;
mod counts;
mod curves;
mod data;
mod goodness;
mod model;
mod newton;
mod objective;
mod outcome;
mod poisson;
mod run;
mod settings;
mod start;
mod sums;
mod tail_sums;
mod unbinned;

pub use background::{Background, MAX_DEGREE};
pub use counts::{CountFit, Expected, fit_counts};
pub use curves::{CRITERION_EVENTS, Curve, CurveFit, CurvePoint, Curves, Link, positive_inverse};
pub use data::{Data, DataError, Histogram, Masses};
pub use goodness::{Goodness, GoodnessBin};
pub use model::{Model, ModelError};
pub use outcome::{FitOutcome, Fitted, Stop, Warning};
pub use run::{FitError, fit};
pub use settings::{SettingError, Settings};
pub use start::starting_shape;
