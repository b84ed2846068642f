//! Natural ⊗ resolution.

mod components;
mod shape;
mod slices;

use super::error::{check_falloff_power, check_positive_mass};
use super::true_mass::{FALLOFF_RANGE, TrueMass};
use super::{Mixture, Natural, ShapeError};

/// How the resolution depends on the true mass.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Scaling {
    /// The same at every true mass.
    #[default]
    Constant,
    /// Bias and sigma grow with the true mass t; their values hold at the nominal mass M: `x = t (1 + u/M)` with u drawn
    /// from the resolution. The true mass is positive.
    Proportional,
}

/// `f(x) = ∫ natural(t) resolution(x - t) dt`, normalised.
///
/// Parameters in order: `mass`, `width` (not for a line), `falloff_power` (where set), then those of the resolution.
///
/// Voigt and relativistic Voigt densities are closed forms (1e-13 and 1e-12 relative); all others come from adaptive
/// panels, to 1e-10 relative. Slices longer than a few dozen points go through a grid of Chebyshev panels, with the error
/// of [`LineShape::GRID_ERROR`]; those of probabilities are integrals of that grid.
#[derive(Clone, Debug, PartialEq)]
pub struct LineShape {
    natural: Natural,
    resolution: Option<Mixture>,
    scaling: Scaling,
    falloff: Option<f64>,
    path: Path,
}

/// How it is evaluated, chosen once.
#[derive(Clone, Debug, PartialEq)]
enum Path {
    /// A line: the resolution, shifted.
    Shifted(Mixture),
    /// No resolution, no falloff.
    Natural,
    /// A width: convolved with each component (none without a resolution).
    Convolved(TrueMass),
}

impl LineShape {
    /// Bound on the error of slices that go through the grid, at any mass: of a density, relative to itself or 1e-15 of
    /// the peak of the slice, whichever is larger; of a probability, relative to itself plus 1e-15. Tested against the
    /// point by point path from the core to 1000 widths out (`tests/lineshape_slices.rs`). Gradients of ln density: 1e-6
    /// of the largest value of the component in the slice, where the density is above 1e-11 of its peak.
    pub const GRID_ERROR: f64 = 1e-9;

    /// A natural shape with a resolution (`None`: perfect) that does not depend on the true mass.
    ///
    /// # Errors
    /// None for checked parts; the signature is that of the other constructors.
    pub fn new(natural: Natural, resolution: Option<Mixture>) -> Result<Self, ShapeError> {
        LineShape::with_options(natural, resolution, Scaling::Constant, None)
    }

    /// The same with a choice of scaling, and with production falling as `(t/M)^-power` across the natural width.
    ///
    /// With a falloff the true mass lies between M/2 and 2M ([`FALLOFF_RANGE`]). A falloff does nothing to a line and is then no parameter.
    ///
    /// # Errors
    /// A power outside 0 to 100; a proportional resolution or a falloff with a mass that is not positive; a falloff that
    /// cannot be normalised.
    pub fn with_options(
        natural: Natural,
        resolution: Option<Mixture>,
        scaling: Scaling,
        falloff_power: Option<f64>,
    ) -> Result<Self, ShapeError> {
        let is_line = matches!(natural, Natural::Line(_));
        let falloff = falloff_power.map(check_falloff_power).transpose()?.filter(|_| !is_line);
        let scales = scaling == Scaling::Proportional && resolution.is_some();
        if scales || falloff.is_some() {
            check_positive_mass(natural.mass())?;
        }
        let path = if let Natural::Line(mass) = natural {
            let Some(mixture) = &resolution else { return Err(ShapeError::Perfect) };
            Path::Shifted(mixture.shifted(mass)?)
        } else if resolution.is_none() && falloff.is_none() {
            Path::Natural
        } else {
            let cut = match falloff {
                Some(_) => Some(FALLOFF_RANGE.0),
                // The Breit-Wigner reaches below 0, where a proportional resolution has no meaning.
                None => (scales && natural.poles().is_none()).then_some(0.0),
            };
            Path::Convolved(TrueMass::new(natural, cut, falloff)?)
        };
        Ok(LineShape { natural, resolution, scaling, falloff, path })
    }

    /// The natural shape.
    pub fn natural(&self) -> &Natural {
        &self.natural
    }

    /// The resolution.
    pub fn resolution(&self) -> Option<&Mixture> {
        self.resolution.as_ref()
    }

    /// How the resolution depends on the true mass.
    pub fn scaling(&self) -> Scaling {
        self.scaling
    }

    /// Power of the production falloff.
    pub fn falloff_power(&self) -> Option<f64> {
        self.falloff
    }

    /// Number of parameters.
    pub fn parameter_count(&self) -> usize {
        self.natural.parameter_count()
            + usize::from(self.falloff.is_some())
            + self.resolution.as_ref().map_or(0, Mixture::parameter_count)
    }

    /// The same line shape at other values of its parameters.
    ///
    /// # Errors
    /// As the constructors.
    pub fn with_parameters(&self, values: &[f64]) -> Result<Self, ShapeError> {
        super::error::check_count(self.parameter_count(), values)?;
        let (own, rest) = values.split_at(self.natural.parameter_count());
        let natural = self.natural.with_parameters(own)?;
        let (falloff, rest) = rest.split_at(usize::from(self.falloff.is_some()));
        let resolution = self.resolution.as_ref().map(|r| r.with_parameters(rest)).transpose()?;
        LineShape::with_options(natural, resolution, self.scaling, falloff.first().copied())
    }
}
