//! Which parameters are free, where they start and how far they may go.

use super::model::Model;
use crate::lineshape::Domain;

/// Why settings cannot be followed.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum SettingError {
    /// A parameter that the model does not have.
    #[error("the model has no parameter {name:?}; it has {known}")]
    Unknown {
        /// What was named.
        name: String,
        /// What there is.
        known: String,
    },
    /// A value outside the domain of the parameter.
    #[error("{name} is {value}; it must be {domain}")]
    Value {
        /// Parameter.
        name: String,
        /// Value.
        value: f64,
        /// Domain.
        domain: Domain,
    },
    /// Bounds that hold nothing, or leave the domain.
    #[error("{name} is bounded from {low} to {high}; the bounds must rise and stay within: {domain}")]
    Bounds {
        /// Parameter.
        name: String,
        /// Lower bound.
        low: f64,
        /// Upper bound.
        high: f64,
        /// Domain.
        domain: Domain,
    },
    /// A start outside its bounds.
    #[error("{name} starts at {value}, outside its bounds from {low} to {high}")]
    Start {
        /// Parameter.
        name: String,
        /// Start.
        value: f64,
        /// Lower bound.
        low: f64,
        /// Upper bound.
        high: f64,
    },
    /// A parameter that is both fixed and something else.
    #[error("{0} is fixed and also freed, bounded or started; choose one")]
    Contradiction(String),
    /// Mass and bias both free.
    #[error("mass and bias move the peak alike; fix one of them")]
    Degenerate,
    /// Nothing left to fit.
    #[error("no parameter is free; free at least one")]
    NothingFree,
}

/// What the user says about single parameters.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Settings {
    /// Held at a value.
    pub fixed: Vec<(String, f64)>,
    /// Kept between two values.
    pub bounds: Vec<(String, f64, f64)>,
    /// Started at a value.
    pub starts: Vec<(String, f64)>,
    /// Free although they are fixed by default (`width`, `falloff_power`, `bias`).
    pub freed: Vec<String>,
}

/// One parameter, settled.
#[derive(Clone, Debug)]
pub(super) struct Settled {
    pub name: String,
    pub start: f64,
    pub free: bool,
    pub low: f64,
    pub high: f64,
    /// Positive quantities move in the logarithm of their distance from here.
    pub log_from: Option<f64>,
}

impl Settings {
    /// Settles all parameters of a model; `range` is that of the data and `yields` are starts for the parameters beside
    /// the line shape.
    pub(super) fn settle(
        &self,
        model: &Model,
        range: (f64, f64),
        others: &[f64],
    ) -> Result<Vec<Settled>, SettingError> {
        let parameters = model.parameters();
        let named = self.fixed.iter().chain(&self.starts).map(|(n, _)| n);
        let named = named.chain(self.bounds.iter().map(|(n, _, _)| n)).chain(&self.freed);
        for name in named {
            if !parameters.iter().any(|p| &p.name == name) {
                let known = parameters.iter().map(|p| p.name.as_str()).collect::<Vec<_>>().join(", ");
                return Err(SettingError::Unknown { name: name.clone(), known });
            }
        }
        let mut list = vec![];
        for (k, parameter) in parameters.iter().enumerate() {
            let name = &parameter.name;
            let domain = parameter.domain;
            let of = |list: &[(String, f64)]| list.iter().rev().find(|(n, _)| n == name).map(|(_, v)| *v);
            let (fixed, start) = (of(&self.fixed), of(&self.starts));
            let bounds = self.bounds.iter().rev().find(|(n, _, _)| n == name).map(|&(_, low, high)| (low, high));
            let freed = self.freed.contains(name);
            if fixed.is_some() && (start.is_some() || bounds.is_some() || freed) {
                return Err(SettingError::Contradiction(name.clone()));
            }
            let by_default = !["width", "falloff_power", "bias"].contains(&name.as_str());
            let free = fixed.is_none() && (by_default || freed);
            let own = others.get(k.wrapping_sub(model.line_count())).copied().unwrap_or(parameter.value);
            let given = fixed.or(start);
            let mut value = given.unwrap_or(own);
            if !domain.contains(value) {
                return Err(SettingError::Value { name: name.clone(), value, domain });
            }
            let (mut low, mut high) = usual_limits(name, range, domain);
            if let Some((from, to)) = bounds {
                let within = |v: f64| domain.contains(v) || v == domain.low || v == domain.high;
                if !(from < to && within(from) && within(to)) {
                    return Err(SettingError::Bounds { name: name.clone(), low: from, high: to, domain });
                }
                // An open end of the domain stays as far away as it usually does.
                low = if domain.contains(from) { from } else { low };
                high = if domain.contains(to) { to } else { high };
                if let Some(value) = start
                    && !(from..=to).contains(&value)
                {
                    return Err(SettingError::Start { name: name.clone(), value, low: from, high: to });
                }
                value = value.clamp(low, high);
            } else if free && !(low..=high).contains(&value) {
                // A start of the user's own beyond the usual limits widens them.
                low = low.min(value);
                high = high.max(value);
            }
            let log_from = log_from(name);
            list.push(Settled { name: name.clone(), start: value, free, low, high, log_from });
        }
        let free = |name: &str| list.iter().any(|s| s.name == name && s.free);
        if free("mass") && free("bias") {
            return Err(SettingError::Degenerate);
        }
        if !list.iter().any(|s| s.free) {
            return Err(SettingError::NothingFree);
        }
        Ok(list)
    }
}

fn log_from(name: &str) -> Option<f64> {
    match name {
        "n_low" | "n_high" => Some(1.0),
        "width" | "sigma" | "sigma_low" | "sigma_high" | "alpha_low" | "alpha_high" | "k_low" | "k_high" => Some(0.0),
        _ => None,
    }
}

/// Limits beyond which a parameter means nothing for data of this range.
fn usual_limits(name: &str, range: (f64, f64), domain: Domain) -> (f64, f64) {
    let span = range.1 - range.0;
    match name {
        "mass" => {
            let low = range.0 - span;
            // A positive mass stays off 0.
            let low = if domain.low == 0.0 { low.max(1e-3 * range.1.abs()) } else { low };
            (low, range.1 + span)
        }
        "bias" => (-span, span),
        "width" | "sigma" | "sigma_low" | "sigma_high" => (1e-5 * span, 10.0 * span),
        // Tails that begin beyond 10 sigma hold nothing, and one with a power of 500 is exponential.
        "alpha_low" | "alpha_high" | "k_low" | "k_high" => (0.02, 10.0),
        "n_low" | "n_high" => (1.001, 500.0),
        "background_slope" => (-700.0 / span, 700.0 / span),
        _ => (domain.low, domain.high),
    }
}
