//! How far a shift moves the peak, the width and the acceptance: numbers that a fit takes as parametric response.

use super::folds::FoldedShift;
use crate::template::{Cumulative, CumulativeError, Template, standard_error};

/// `q(z)/q(0) - 1 = linear z + quadratic z²`, with numerical standard errors.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Coefficients {
    /// Per standard deviation of the nuisance.
    pub linear: f64,
    /// Standard error of `linear`.
    pub linear_error: f64,
    /// Per squared standard deviation.
    pub quadratic: f64,
    /// Standard error of `quadratic`.
    pub quadratic_error: f64,
}

/// How large a shift is, for pruning.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Size {
    /// Largest |ΔCDF| at the bin edges between shifted and nominal template, of the larger of up and down.
    pub cdf: f64,
    /// Relative change of the acceptance, of the larger of up and down.
    pub acceptance: f64,
}

/// The response of one template to one nuisance.
#[derive(Clone, Debug, PartialEq)]
pub struct Response {
    /// Name of the nuisance.
    pub nuisance: String,
    /// Response of the peak's position; `None` where it is not defined on the axis.
    pub peak: Option<Coefficients>,
    /// Response of sigma_eff; `None` where it is not defined on the axis.
    pub sigma_eff: Option<Coefficients>,
    /// Response of the acceptance; `None` where nothing is accepted.
    pub acceptance: Option<Coefficients>,
    /// How large the shift is.
    pub size: Size,
    /// Largest |ΔCDF| at the bin edges between a shifted template and the nominal one whose peak and width were moved by the
    /// coefficients: what a fit that takes these alone leaves out. `None` without coefficients of both.
    pub misfit: Option<f64>,
}

impl Response {
    /// The response of a category from the shifts up and down, which must be of one nuisance and made of the same points.
    ///
    /// # Errors
    /// When a template has no cumulative distribution.
    pub fn of(pair: &[FoldedShift; 2], category: usize) -> Result<Option<Self>, CumulativeError> {
        let [plus, minus] = pair;
        let (Some((base, up)), Some((_, down))) = (plus.counterparts.get(category), minus.counterparts.get(category))
        else {
            return Ok(None);
        };
        let values = [Values::of(base)?, Values::of(up)?, Values::of(down)?];
        let coefficients = |k: usize| coefficients(&values[0].0[k], &values[1].0[k], &values[2].0[k]);
        let (peak, sigma_eff) = (coefficients(0), coefficients(1));
        let misfit = match peak.zip(sigma_eff) {
            None => None,
            Some(moved) => {
                let base = Cumulative::of(base)?;
                let (up, down) = (misfit(&base, moved, up, 1.0), misfit(&base, moved, down, -1.0));
                up.zip(down).map(|(up, down)| up.max(down))
            }
        };
        Ok(Some(Response {
            nuisance: plus.nuisance.clone(),
            peak,
            sigma_eff,
            acceptance: coefficients(2),
            size: size(pair, category),
            misfit,
        }))
    }
}

/// Peak, sigma_eff and acceptance: of the template and of each replicate.
struct Values([Option<(f64, Vec<f64>)>; 3]);

impl Values {
    fn of(template: &Template) -> Result<Self, CumulativeError> {
        let pooled = Cumulative::of(template)?;
        let replicates = template
            .replicates
            .iter()
            .map(|r| Cumulative::new(&template.edges_gev, &r.probability, r.below_axis, r.above_axis))
            .collect::<Result<Vec<_>, _>>()?;
        let read = |value: fn(&Cumulative) -> Option<f64>| {
            let of_replicates: Option<Vec<f64>> = replicates.iter().map(value).collect();
            value(&pooled).zip(of_replicates)
        };
        let acceptances = template.replicates.iter().map(|r| r.acceptance).collect();
        Ok(Values([read(Cumulative::peak), read(Cumulative::sigma_eff), Some((template.acceptance, acceptances))]))
    }
}

/// The coefficients through three values; the errors from the replicates, whose points are the same in all three.
fn coefficients(
    nominal: &Option<(f64, Vec<f64>)>,
    up: &Option<(f64, Vec<f64>)>,
    down: &Option<(f64, Vec<f64>)>,
) -> Option<Coefficients> {
    let (nominal, up, down) = (nominal.as_ref()?, up.as_ref()?, down.as_ref()?);
    let both = |n: f64, u: f64, d: f64| (0.5 * (u - d) / n, 0.5 * (u + d - 2.0 * n) / n);
    if nominal.0 == 0.0 {
        return None;
    }
    let (linear, quadratic) = both(nominal.0, up.0, down.0);
    let each: Vec<(f64, f64)> = nominal.1.iter().zip(&up.1).zip(&down.1).map(|((n, u), d)| both(*n, *u, *d)).collect();
    Some(Coefficients {
        linear,
        linear_error: standard_error(each.iter().map(|pair| pair.0)).unwrap_or(0.0),
        quadratic,
        quadratic_error: standard_error(each.iter().map(|pair| pair.1)).unwrap_or(0.0),
    })
}

/// Largest |ΔCDF| of the nominal distribution, moved by the coefficients at z, from a shifted template. Edges that come from
/// beyond the axis are left out.
fn misfit(
    nominal: &Cumulative,
    (peak, width): (Coefficients, Coefficients),
    shifted: &Template,
    z: f64,
) -> Option<f64> {
    let at = |c: Coefficients| 1.0 + c.linear * z + c.quadratic * z * z;
    let from = nominal.peak()?;
    let mut sum = shifted.below_axis;
    let mut largest = 0.0_f64;
    for (edge, p) in shifted.edges_gev.iter().zip(shifted.probability.iter().chain([&0.0])) {
        if let Some(expected) = nominal.at(from + (edge - from * at(peak)) / at(width)) {
            largest = largest.max((sum - expected).abs());
        }
        sum += p;
    }
    Some(largest)
}

fn size(pair: &[FoldedShift; 2], category: usize) -> Size {
    let mut size = Size::default();
    for (nominal, shifted) in pair.iter().filter_map(|shift| shift.counterparts.get(category)) {
        let mut difference = shifted.below_axis - nominal.below_axis;
        size.cdf = size.cdf.max(difference.abs());
        for (a, b) in nominal.probability.iter().zip(&shifted.probability) {
            difference += b - a;
            size.cdf = size.cdf.max(difference.abs());
        }
        if nominal.acceptance != 0.0 {
            size.acceptance = size.acceptance.max((shifted.acceptance / nominal.acceptance - 1.0).abs());
        }
    }
    size
}
