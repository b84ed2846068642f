//! Everything that the model says of one channel and category.

use super::agreement::{Agreement, AnchorComparison, agreement, compare_anchor};
use super::anchor::{Anchor, merge_points};
use super::bias::{MassBias, mass_bias};
use super::closure::{Closure, InterpolationError, closure, quantile_closure};
use super::mass_model::{MassModel, ModelPoint, Predicted};
use super::quantile::QuantileInterpolation;
use super::residual::Residuals;
use super::response::{Response, ResponseError, better_shape, fit_response};
use super::shape::PredictedTemplate;
use crate::process::{Channel, Decay, MassAxis, Study};
use crate::template::{LabelledTemplate, Template};

/// How a template between the mass points is predicted.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Method {
    /// The shape of the mass model with what it leaves of the templates: [`Residuals`].
    Corrected,
    /// The shape of the mass model alone.
    Shape,
    /// Interpolated quantiles: [`QuantileInterpolation`].
    Quantiles,
}

impl Method {
    /// All methods, the usual one first.
    pub const ALL: [Method; 3] = [Method::Corrected, Method::Shape, Method::Quantiles];

    /// Its word in files and on the command line.
    pub fn name(self) -> &'static str {
        match self {
            Method::Corrected => "corrected",
            Method::Shape => "shape",
            Method::Quantiles => "quantiles",
        }
    }

    /// The method of that word.
    pub fn from_name(name: &str) -> Option<Self> {
        Method::ALL.into_iter().find(|method| method.name() == name)
    }
}

/// The shape fitted to one template, and what its misfit does.
#[derive(Clone, Debug, PartialEq)]
pub struct Fitted {
    /// Name of the channel.
    pub channel: String,
    /// Name of the category.
    pub category: String,
    /// The fit.
    pub response: Response,
    /// The misfit as a bias of a fitted mass; `None` where it cannot be told.
    pub bias: Option<MassBias>,
}

/// The model of one channel and category: plain data, so that it can be written and read.
#[derive(Clone, Debug, PartialEq)]
pub struct CategoryModel {
    /// Name of the channel.
    pub channel: String,
    /// Name of the category.
    pub category: String,
    /// The mass axis of the channel.
    pub axis: MassAxis,
    /// True masses lie above this, in GeV: the sum of the masses of the legs.
    pub threshold_gev: f64,
    /// The mass model.
    pub model: MassModel,
    /// The templates of width 0 that it was made of, at the mass points of the model.
    pub templates: Vec<Template>,
    /// Closure of each method; empty with less than three mass points, and without those methods that cannot leave one out.
    pub closures: Vec<(Method, Closure)>,
}

/// The simulated samples of one channel and category against the folded templates.
#[derive(Clone, Debug, PartialEq)]
pub struct Simulation {
    /// Name of the channel.
    pub channel: String,
    /// Name of the category.
    pub category: String,
    /// One comparison per sample at a folded mass.
    pub comparisons: Vec<AnchorComparison>,
    /// Scale and smearing that bring the folded templates into agreement; `None` where these could not be fitted.
    pub agreement: Option<Agreement>,
}

/// What could be said of a category.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Modelled {
    /// The fits of the single templates.
    pub fitted: Vec<Fitted>,
    /// The model; `None` with one mass point, or where a note says why there is none.
    pub model: Option<CategoryModel>,
    /// Simulated samples; `None` without any.
    pub simulation: Option<Simulation>,
    /// What did not work, one sentence each.
    pub failures: Vec<String>,
    /// What the user should know, one sentence each.
    pub notes: Vec<String>,
}

/// Fits the templates of width 0 of one category, rising in mass, and makes the model of them.
pub fn model_category(study: &Study, channel: &Channel, templates: &[&LabelledTemplate]) -> Modelled {
    let mut modelled = Modelled::default();
    let [first, ..] = templates else { return modelled };
    let label = format!("{}, {}", first.channel, first.category);
    let mut responses: Vec<(usize, Response)> = Vec::new();
    for (index, labelled) in templates.iter().enumerate() {
        match fit_response(&labelled.template, labelled.mass_gev, channel.shape) {
            Ok(response) => {
                if !response.converged() {
                    let text = format!("{label}, {} GeV: the fit of the shape did not converge", labelled.mass_gev);
                    modelled.failures.push(text);
                }
                responses.push((index, response));
            }
            // A category that takes no event is no failure.
            Err(error @ ResponseError::Empty(_)) => {
                modelled.notes.push(format!("{label}, {} GeV: no shape: {error}", labelled.mass_gev));
            }
            Err(error) => modelled.failures.push(format!("{label}, {} GeV: no shape fits: {error}", labelled.mass_gev)),
        }
    }
    let folded: Vec<ModelPoint<'_>> = responses
        .iter()
        .map(|(index, response)| ModelPoint { template: &templates[*index].template, response })
        .collect();
    let anchors = anchors(channel, first, &folded, &label, &mut modelled.failures);
    modelled.simulation = simulation(first, &folded, &anchors, &label, &mut modelled.failures);
    let points = merge_points(&folded, &anchors, channel.simulated.usage);
    let knot = matches!(channel.decay, Decay::Cascade(_)).then_some(2.0 * study.resonance.intermediate.mass_gev);
    let model = match points.len() {
        0 | 1 => None,
        _ => match MassModel::fit(&points, knot) {
            Ok(model) => Some(model),
            Err(error) => {
                modelled.failures.push(format!("{label}: no mass model: {error}"));
                None
            }
        },
    };
    if model.as_ref().is_some_and(|model| !model.converged()) {
        modelled.failures.push(format!("{label}: the simultaneous fit of the mass model did not converge"));
    }
    let bias = |mass_gev: f64| {
        let index = points.iter().position(|point| point.response.mass_gev == mass_gev)?;
        model.as_ref().and_then(|model| mass_bias(&points, model, index).ok())
    };
    for (place, response) in &responses {
        let fitted = Fitted {
            channel: first.channel.clone(),
            category: first.category.clone(),
            response: response.clone(),
            bias: bias(response.mass_gev),
        };
        note_misfit(study, &label, &templates[*place].template, &fitted, &mut modelled.notes);
        modelled.fitted.push(fitted);
    }
    modelled.model = model.map(|model| {
        let pairs: Vec<(f64, &Template)> = points.iter().map(|p| (p.response.mass_gev, p.template)).collect();
        let closures = Method::ALL
            .into_iter()
            .filter_map(|method| {
                let closed = match method {
                    Method::Corrected => closure(&points, &model, true),
                    Method::Shape => closure(&points, &model, false),
                    Method::Quantiles => quantile_closure(&pairs, knot),
                };
                closed.ok().map(|closed| (method, closed))
            })
            .collect();
        CategoryModel {
            channel: first.channel.clone(),
            category: first.category.clone(),
            axis: channel.axis,
            threshold_gev: channel.decay.legs().iter().map(|leg| leg.mass_gev()).sum(),
            templates: points.iter().map(|p| p.template.clone()).collect(),
            model,
            closures,
        }
    });
    modelled
}

/// The simulated samples of a category.
fn anchors(
    channel: &Channel,
    first: &LabelledTemplate,
    folded: &[ModelPoint<'_>],
    label: &str,
    failures: &mut Vec<String>,
) -> Vec<Anchor> {
    let pairs: Vec<(f64, &Template)> = folded.iter().map(|p| (p.response.mass_gev, p.template)).collect();
    let own = channel.simulated.samples.iter().filter(|sample| {
        channel.categories.get(sample.category).is_some_and(|category| category.name == first.category)
    });
    let mut anchors = Vec::new();
    for sample in own {
        let edges = channel.axis.edges_gev(sample.mass_gev);
        match Anchor::new(&sample.masses, sample.generated, sample.mass_gev, &edges, channel.shape, &pairs) {
            Ok(anchor) => anchors.push(anchor),
            Err(error) => failures.push(format!("{label}, simulated at {} GeV: {error}", sample.mass_gev)),
        }
    }
    anchors.sort_by(|a, b| a.mass_gev.total_cmp(&b.mass_gev));
    anchors
}

/// Compares the samples with the folded templates at the same masses.
fn simulation(
    first: &LabelledTemplate,
    folded: &[ModelPoint<'_>],
    anchors: &[Anchor],
    label: &str,
    failures: &mut Vec<String>,
) -> Option<Simulation> {
    let pairs: Vec<(&Anchor, &ModelPoint<'_>)> = anchors
        .iter()
        .filter_map(|anchor| {
            let point = folded.iter().find(|point| point.response.mass_gev == anchor.mass_gev)?;
            Some((anchor, point))
        })
        .collect();
    if pairs.is_empty() {
        return None;
    }
    let mut comparisons = Vec::new();
    for (anchor, point) in &pairs {
        match compare_anchor(anchor, point) {
            Ok(comparison) => comparisons.push(comparison),
            Err(error) => failures.push(format!("{label}: {error}")),
        }
    }
    let together: Vec<(&Anchor, &Template)> = pairs.iter().map(|(anchor, point)| (*anchor, point.template)).collect();
    let agreement = match agreement(&together) {
        Ok(agreement) => Some(agreement),
        Err(error) => {
            failures.push(format!("{label}: {error}"));
            None
        }
    };
    Some(Simulation { channel: first.channel.clone(), category: first.category.clone(), comparisons, agreement })
}

/// A note where the misfit matters for as many events as the study expects.
fn note_misfit(study: &Study, label: &str, template: &Template, fitted: &Fitted, notes: &mut Vec<String>) {
    let Some(bias) = &fitted.bias else { return };
    let events = bias.events_at_half_error();
    if events >= study.expected_events {
        return;
    }
    let better = match better_shape(template, &fitted.response) {
        Some(better) => format!(
            "`{}` fits better (largest |ΔCDF| {:.4} instead of {:.4})",
            better.shape.name(),
            better.largest_cdf_difference,
            fitted.response.largest_cdf_difference
        ),
        None => "no other shape fits better".to_owned(),
    };
    notes.push(format!(
        "{label}, {} GeV: the shape biases a fitted mass by {:.1} MeV, half its statistical error at {events:.0} signal events; \
         {better}",
        fitted.response.mass_gev, bias.bias_mev
    ));
}

/// Why a template cannot be predicted.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum PredictError {
    /// The model.
    #[error(transparent)]
    Model(#[from] super::mass_model::ModelError),
    /// The residuals.
    #[error(transparent)]
    Residual(#[from] super::residual::ResidualError),
    /// The quantiles.
    #[error(transparent)]
    Quantile(#[from] super::quantile::QuantileError),
}

/// A prediction of a resonance without width.
#[derive(Clone, Debug, PartialEq)]
pub struct Prediction {
    /// Shape, acceptance and efficiency.
    pub predicted: Predicted,
    /// The template on the axis of the channel.
    pub template: PredictedTemplate,
}

impl CategoryModel {
    /// The interpolation error of a method: the RMS over the mass points left out; `None` without closure.
    pub fn interpolation_error(&self, method: Method) -> Option<InterpolationError> {
        self.closures.iter().find(|(own, _)| *own == method).map(|(_, closure)| closure.rms())
    }

    /// The prediction at a mass.
    ///
    /// # Errors
    /// See [`PredictError`].
    pub fn predict(&self, mass_gev: f64, method: Method, extrapolate: bool) -> Result<Prediction, PredictError> {
        let predicted = self.model.at(mass_gev, extrapolate)?;
        let edges = self.axis.edges_gev(mass_gev);
        let pairs: Vec<(f64, &Template)> = self.model.masses_gev.iter().copied().zip(&self.templates).collect();
        let template = match method {
            Method::Corrected => Residuals::new(&self.model, &pairs)?.template(&predicted, &edges)?,
            Method::Shape => predicted.template(&edges)?,
            Method::Quantiles => QuantileInterpolation::new(&pairs)?.template(mass_gev, &edges, extrapolate)?,
        };
        Ok(Prediction { predicted, template })
    }
}
