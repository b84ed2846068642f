//! All parameters of a shape as smooth functions of the mass.

use nalgebra::{DMatrix, DVector};

use super::acceptance::{YieldFactor, acceptances, efficiencies};
use super::orders::{HIGHEST, Single, choose, nearest};
use super::response::{Response, ResponseError, curve_point, numerical_covariance};
use super::shape::{PredictedTemplate, of_shape, parameter_link, prior, prototype, rising};
use super::smooth::{Basis, MassScale, SmoothCurve};
use crate::fit::{Curve, CurvePoint, Curves, FitError, Stop};
use crate::lineshape::{Resolution, Shape, ShapeError};
use crate::process::ShapeChoice;
use crate::template::Template;

/// One mass point: the template of width 0, and the shape fitted to it.
#[derive(Clone, Copy, Debug)]
pub struct ModelPoint<'a> {
    /// The template.
    pub template: &'a Template,
    /// The shape fitted to it by [`super::fit_response`].
    pub response: &'a Response,
}

/// Why there is no mass model, or none at a mass.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum ModelError {
    /// One mass point, or none.
    #[error("a mass model needs at least two mass points; there are {0}")]
    TooFewMasses(usize),
    /// Masses that do not rise.
    #[error("mass points must rise; {0} GeV is followed by {1} GeV")]
    Order(f64, f64),
    /// Shapes of several kinds.
    #[error("the templates are fitted with shapes of different kinds; the mass model needs one")]
    Kinds,
    /// A fit of a single template that did not converge.
    #[error("the fit of the shape at {0} GeV did not converge; try another shape")]
    NotConverged(f64),
    /// An acceptance that has no logarithm.
    #[error("the acceptance at {0} GeV is {1}; it must be positive at every mass point")]
    Acceptance(f64, f64),
    /// Functions that the masses do not determine.
    #[error("the mass points do not determine the functions of the mass model")]
    Undetermined,
    /// A template.
    #[error(transparent)]
    Response(#[from] ResponseError),
    /// A shape that cannot be made.
    #[error(transparent)]
    Shape(#[from] ShapeError),
    /// The minimiser could not start.
    #[error(transparent)]
    Fit(#[from] FitError),
    /// A mass outside of the mass points.
    #[error(
        "{mass_gev} GeV lies outside the mass points of the model, {low_gev} to {high_gev} GeV; fold at further masses, or ask for extrapolation"
    )]
    Outside {
        /// The mass.
        mass_gev: f64,
        /// Lowest mass point.
        low_gev: f64,
        /// Highest mass point.
        high_gev: f64,
    },
    /// A mass that is no positive number.
    #[error("the mass is {0} GeV; it must be a positive number")]
    Mass(f64),
    /// Edges that do not rise.
    #[error("bin edges must be finite and rise")]
    Edges,
    /// A model that was put together wrongly.
    #[error("the mass model is not consistent: {0}")]
    Inconsistent(&'static str),
}

/// The mass model of one channel and category: plain data, so that it can be written and read.
#[derive(Clone, Debug, PartialEq)]
pub struct MassModel {
    /// Kind of shape.
    pub shape: ShapeChoice,
    /// The mass points in GeV, rising.
    pub masses_gev: Vec<f64>,
    /// The scale of the mass: first and last mass point, and the knot.
    pub scale: MassScale,
    /// One curve per parameter of the shape, in its order.
    pub curves: Vec<SmoothCurve>,
    /// Numerical covariance of all coefficients, curve after curve: what the numerical errors of the templates make of
    /// them.
    pub covariance: DMatrix<f64>,
    /// The acceptance, which includes the efficiency of the detector.
    pub acceptance: YieldFactor,
    /// The efficiency of the detector.
    pub efficiency: YieldFactor,
    /// How the simultaneous fit ended.
    pub stop: Stop,
}

/// The model at one mass.
#[derive(Clone, Debug, PartialEq)]
pub struct Predicted {
    /// The mass in GeV.
    pub mass_gev: f64,
    /// The shape of reconstructed mass less this mass.
    pub resolution: Resolution,
    /// Numerical covariance of its parameters.
    pub covariance: DMatrix<f64>,
    /// Acceptance.
    pub acceptance: f64,
    /// Its numerical error.
    pub acceptance_error: f64,
    /// Efficiency of the detector, which the acceptance includes.
    pub efficiency: f64,
    /// Its numerical error.
    pub efficiency_error: f64,
    /// Whether the mass lies outside the mass points.
    pub extrapolated: bool,
}

impl MassModel {
    /// Fits all mass points at once; functions of the mass are chosen by closure ([`super::closure`]).
    ///
    /// `knot_gev` is where slopes may change: twice the intermediate mass of a cascade. It serves when at least two mass
    /// points lie on either side. A fit that does not converge is an outcome: see [`MassModel::stop`].
    ///
    /// # Errors
    /// See [`ModelError`].
    pub fn fit(points: &[ModelPoint<'_>], knot_gev: Option<f64>) -> Result<Self, ModelError> {
        Self::fit_with(points, knot_gev, None)
    }

    /// The same with the functions of another model of the same mass scale.
    pub(super) fn fit_with(
        points: &[ModelPoint<'_>],
        knot_gev: Option<f64>,
        like: Option<&MassModel>,
    ) -> Result<Self, ModelError> {
        let [first, .., last] = points else { return Err(ModelError::TooFewMasses(points.len())) };
        let masses: Vec<f64> = points.iter().map(|p| p.response.mass_gev).collect();
        if let Some(pair) = masses.windows(2).find(|pair| !(pair[0] < pair[1])) {
            return Err(ModelError::Order(pair[0], pair[1]));
        }
        let shape = first.response.shape;
        if points.iter().any(|p| p.response.shape != shape) {
            return Err(ModelError::Kinds);
        }
        if let Some(bad) = points.iter().find(|p| !p.response.converged()) {
            return Err(ModelError::NotConverged(bad.response.mass_gev));
        }
        if let Some(bad) = points.iter().find(|p| !(p.template.acceptance > 0.0)) {
            return Err(ModelError::Acceptance(bad.response.mass_gev, bad.template.acceptance));
        }
        let (low_gev, high_gev) = (first.response.mass_gev, last.response.mass_gev);
        let scale = like.map_or(MassScale { low_gev, high_gev, knot_gev }, |model| model.scale);
        let singles: Vec<Single<'_>> = points
            .iter()
            .map(|p| Single {
                mass_gev: p.response.mass_gev,
                etas: &p.response.etas,
                information: &p.response.information,
            })
            .collect();
        let bases = match like {
            None => choose(&singles, &scale),
            Some(model) => model.curves.iter().map(|c| c.basis).collect(),
        };
        let all: Vec<&Single<'_>> = singles.iter().collect();
        let start = nearest(&all, &scale, &bases).ok_or(ModelError::Undetermined)?;
        let checked: Vec<CurvePoint> =
            points.iter().map(|p| curve_point(p.template, p.response.mass_gev)).collect::<Result<_, _>>()?;
        let kind = prototype(shape)?;
        let parameters = kind.parameters();
        let curves = parameters
            .iter()
            .zip(&bases)
            .map(|(p, &basis)| Curve {
                link: parameter_link(&p.name),
                prior: prior(&p.name),
                basis: masses.iter().map(|&m| scale.row(basis, m)).collect(),
            })
            .collect();
        let fit = Curves { kind, points: checked.iter().collect(), curves };
        let found = fit.fit(&start.concat())?;
        let templates: Vec<&Template> = points.iter().map(|p| p.template).collect();
        let covariance = numerical_covariance(&fit, &found, &templates).ok_or(ModelError::Undetermined)?;
        let pairs: Vec<(f64, &Template)> = masses.iter().copied().zip(templates).collect();
        let basis = like.map(|m| m.acceptance.curve.basis);
        let acceptance = YieldFactor::fit("acceptance", &acceptances(&pairs), &scale, basis);
        let basis = like.map(|m| m.efficiency.curve.basis);
        let efficiency = YieldFactor::fit("efficiency", &efficiencies(&pairs), &scale, basis);
        let (acceptance, efficiency) = acceptance.zip(efficiency).ok_or(ModelError::Undetermined)?;
        let mut rest = found.coefficients.as_slice();
        let curves = parameters
            .iter()
            .zip(bases)
            .map(|(p, basis)| {
                let (own, others) = rest.split_at(basis.count());
                rest = others;
                SmoothCurve { name: p.name.clone(), link: parameter_link(&p.name), basis, coefficients: own.to_vec() }
            })
            .collect();
        Ok(MassModel { shape, masses_gev: masses, scale, curves, covariance, acceptance, efficiency, stop: found.stop })
    }

    /// Checks a model that was read: numbers of curves and coefficients, finite values, rising masses, a symmetric
    /// covariance.
    ///
    /// # Errors
    /// See [`ModelError`].
    pub fn checked(self) -> Result<Self, ModelError> {
        let wrong = |what| Err(ModelError::Inconsistent(what));
        if self.masses_gev.len() < 2 {
            return Err(ModelError::TooFewMasses(self.masses_gev.len()));
        }
        if let Some(pair) = self.masses_gev.windows(2).find(|pair| !(pair[0] > 0.0 && pair[0] < pair[1])) {
            return Err(ModelError::Order(pair[0], pair[1]));
        }
        let names = prototype(self.shape)?.parameters();
        if self.curves.len() != names.len() || self.curves.iter().zip(&names).any(|(c, p)| c.name != p.name) {
            return wrong("its curves are not those of the parameters of its shape");
        }
        if names.iter().zip(&self.curves).any(|(p, c)| c.link != parameter_link(&p.name)) {
            return wrong("a curve has another link than its parameter");
        }
        let whole =
            |c: &SmoothCurve| c.coefficients.len() == c.basis.count() && c.coefficients.iter().all(|v| v.is_finite());
        if self.curves.iter().chain([&self.acceptance.curve, &self.efficiency.curve]).any(|c| c.basis.order > HIGHEST) {
            return wrong("a curve is of higher order than any that is fitted");
        }
        if !self.curves.iter().chain([&self.acceptance.curve, &self.efficiency.curve]).all(whole) {
            return wrong("a curve has too few coefficients, or one that is no finite number");
        }
        let count: usize = self.curves.iter().map(|c| c.basis.count()).sum();
        for (matrix, count) in [
            (&self.covariance, count),
            (&self.acceptance.covariance, self.acceptance.curve.basis.count()),
            (&self.efficiency.covariance, self.efficiency.curve.basis.count()),
        ] {
            if matrix.nrows() != count || matrix.ncols() != count {
                return wrong("a covariance has another size than its coefficients");
            }
            let size = matrix.diagonal().amax();
            let symmetric = (0..count).all(|i| {
                matrix[(i, i)] >= 0.0 && (0..i).all(|j| (matrix[(i, j)] - matrix[(j, i)]).abs() <= 1e-9 * size)
            });
            if !symmetric || !matrix.iter().all(|v| v.is_finite()) {
                return wrong("a covariance is not symmetric, has a negative variance or no finite number");
            }
        }
        let (low, high) = (self.masses_gev[0], self.masses_gev[self.masses_gev.len() - 1]);
        if (self.scale.low_gev, self.scale.high_gev) != (low, high) {
            return wrong("its scale is not that of its mass points");
        }
        Ok(self)
    }

    /// Whether the simultaneous fit reached its minimum.
    pub fn converged(&self) -> bool {
        self.stop == Stop::Converged
    }

    /// The functions of each parameter.
    pub fn bases(&self) -> Vec<Basis> {
        self.curves.iter().map(|c| c.basis).collect()
    }

    /// The shape at a mass, no check of the range.
    pub(super) fn resolution_at(&self, mass_gev: f64) -> Result<Resolution, ModelError> {
        self.resolution_for(mass_gev, mass_gev)
    }

    /// The shape for a true mass with the curves taken at another mass.
    pub(super) fn resolution_for(&self, curves_at_gev: f64, mass_gev: f64) -> Result<Resolution, ModelError> {
        let theta: Vec<f64> =
            self.curves.iter().map(|c| c.link.value(c.eta(&self.scale, curves_at_gev), mass_gev)).collect();
        Ok(prototype(self.shape)?.with_parameters(&theta)?)
    }

    /// Derivatives of the parameters in the mass.
    pub(super) fn slopes_at(&self, mass_gev: f64) -> Vec<f64> {
        self.curves
            .iter()
            .map(|c| {
                let eta = c.eta(&self.scale, mass_gev);
                c.link.slope(eta, mass_gev) * c.eta_slope(&self.scale, mass_gev) + c.link.unit_slope(eta)
            })
            .collect()
    }

    /// Checks a mass; the value tells whether it is extrapolated.
    pub(super) fn check_mass(&self, mass_gev: f64, extrapolate: bool) -> Result<bool, ModelError> {
        if !(mass_gev > 0.0 && mass_gev.is_finite()) {
            return Err(ModelError::Mass(mass_gev));
        }
        let outside = self.scale.outside(mass_gev);
        if outside && !extrapolate {
            let MassScale { low_gev, high_gev, .. } = self.scale;
            return Err(ModelError::Outside { mass_gev, low_gev, high_gev });
        }
        Ok(outside)
    }

    /// The model at a mass. Outside of the mass points the curves go on along their tangents, if `extrapolate` allows it.
    ///
    /// # Errors
    /// A mass outside the mass points without `extrapolate`, or no positive number.
    pub fn at(&self, mass_gev: f64, extrapolate: bool) -> Result<Predicted, ModelError> {
        let extrapolated = self.check_mass(mass_gev, extrapolate)?;
        let resolution = self.resolution_at(mass_gev)?;
        let count: usize = self.curves.iter().map(|c| c.basis.count()).sum();
        if self.covariance.shape() != (count, count) {
            return Err(ModelError::Inconsistent("its covariance has another size than its coefficients"));
        }
        let mut jacobian = DMatrix::zeros(self.curves.len(), count);
        let mut place = 0;
        for (k, curve) in self.curves.iter().enumerate() {
            let slope = curve.link.slope(curve.eta(&self.scale, mass_gev), mass_gev);
            for b in self.scale.row(curve.basis, mass_gev) {
                jacobian[(k, place)] = slope * b;
                place += 1;
            }
        }
        let (acceptance, acceptance_error) = self.acceptance.at(&self.scale, mass_gev);
        let (efficiency, efficiency_error) = self.efficiency.at(&self.scale, mass_gev);
        Ok(Predicted {
            mass_gev,
            resolution,
            covariance: &jacobian * &self.covariance * jacobian.transpose(),
            acceptance,
            acceptance_error,
            efficiency,
            efficiency_error,
            extrapolated,
        })
    }
}

impl Predicted {
    /// Numerical errors of the parameters.
    pub fn errors(&self) -> Vec<f64> {
        self.covariance.diagonal().iter().map(|v| v.max(0.0).sqrt()).collect()
    }

    /// The template of the shape alone on these edges (in GeV).
    ///
    /// # Errors
    /// Edges that do not rise.
    pub fn template(&self, edges_gev: &[f64]) -> Result<PredictedTemplate, ModelError> {
        if !rising(edges_gev) {
            return Err(ModelError::Edges);
        }
        let (probability, below_axis, above_axis) = of_shape(&self.resolution, self.mass_gev, edges_gev);
        let (bins, count) = (probability.len(), self.covariance.nrows());
        let edges: Vec<f64> = edges_gev.iter().map(|e| e - self.mass_gev).collect();
        let mut gradient = vec![0.0; bins * count];
        self.resolution.bin_probability_gradient(&edges, &mut gradient);
        let error = (0..bins)
            .map(|i| {
                let g = DVector::from_fn(count, |k, _| gradient[k * bins + i]);
                g.dot(&(&self.covariance * &g)).max(0.0).sqrt()
            })
            .collect();
        Ok(PredictedTemplate {
            edges_gev: edges_gev.to_vec(),
            probability,
            error,
            below_axis,
            above_axis,
            extrapolated: self.extrapolated,
        })
    }
}
