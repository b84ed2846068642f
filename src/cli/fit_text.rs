//! The outcome of a fit as a table and as JSON.

use std::io::{self, Write};

use nalgebra::DMatrix;
use serde_json::{Map, Value, json};

use super::table::{with_error, write_table};
use crate::fit::{FitOutcome, Fitted, Stop};

fn state(p: &Fitted) -> &'static str {
    match (p.free, p.at_bound) {
        (false, _) => "fixed",
        (true, true) => "at its bound",
        (true, false) => "free",
    }
}

/// Writes the table of the parameters, the goodness and the correlations.
pub(super) fn write_report(out: &mut dyn Write, outcome: &FitOutcome) -> io::Result<()> {
    let plain = |value: Option<f64>| value.map_or_else(|| "-".to_owned(), |v| format!("{v:.6}"));
    let mut rows: Vec<Vec<String>> = outcome
        .parameters
        .iter()
        .map(|p| {
            let error = p.error.filter(|_| p.free);
            let short = if p.free && error.is_some() { with_error(Some(p.value), error) } else { String::new() };
            vec![p.name.clone(), state(p).to_owned(), short, plain(Some(p.value)), plain(error)]
        })
        .collect();
    if let Some((events, error)) = outcome.background_events
        && outcome.parameter("background_yield").is_none()
    {
        let short = with_error(Some(events), error);
        rows.push(vec!["background, sum".to_owned(), String::new(), short, plain(Some(events)), plain(error)]);
    }
    write_table(out, &["parameter", "", "result", "value", "error"], &rows, 2)?;
    writeln!(out, "\nDigits in parentheses: standard error of the last digits; masses and widths in GeV.")?;
    let (low, high) = outcome.window();
    writeln!(out, "{} rows (sum {}) from {low} to {high} GeV", outcome.rows, outcome.total)?;
    if let Some(g) = &outcome.goodness {
        let (chi, ndf) = (g.chi_square, g.degrees_of_freedom);
        writeln!(out, "chi2/ndf = {chi:.2}/{ndf}, p = {:.4}", g.p_value)?;
    } else {
        writeln!(out, "chi2: too few events for it")?;
    }
    let word = if outcome.converged() { "converged" } else { "NOT converged" };
    let (value, distance) = (outcome.negative_log_likelihood, outcome.distance);
    writeln!(out, "-ln L = {value:.6}; {word} after {} steps, {distance:.1e} above the minimum", outcome.iterations)?;
    if let Some(correlation) = outcome.correlation().filter(|c| c.nrows() > 1) {
        writeln!(out, "\ncorrelation")?;
        let header: Vec<&str> = std::iter::once("").chain(outcome.covariant.iter().map(String::as_str)).collect();
        let rows: Vec<Vec<String>> = (0..correlation.nrows())
            .map(|i| {
                let cells = (0..=i).map(|j| format!("{:.3}", correlation[(i, j)]));
                std::iter::once(outcome.covariant[i].clone()).chain(cells).collect()
            })
            .collect();
        write_table(out, &header, &rows, 1)?;
    }
    out.flush()
}

fn matrix(matrix: Option<&DMatrix<f64>>) -> Value {
    matrix.map_or(Value::Null, |m| {
        (0..m.nrows()).map(|i| (0..m.ncols()).map(|j| m[(i, j)]).collect::<Vec<f64>>()).collect::<Vec<_>>().into()
    })
}

/// Writes the same as one JSON object; what is not known is null.
pub(super) fn write_json(out: &mut dyn Write, outcome: &FitOutcome) -> io::Result<()> {
    let parameters: Map<String, Value> = outcome
        .parameters
        .iter()
        .map(|p| (p.name.clone(), json!({"value": p.value, "error": p.error, "free": p.free, "at_bound": p.at_bound})))
        .collect();
    let finite = |edge: f64| edge.is_finite().then_some(edge);
    let goodness = outcome
        .goodness
        .map(|g| json!({"chi_square": g.chi_square, "degrees_of_freedom": g.degrees_of_freedom, "p_value": g.p_value}));
    let (low, high) = outcome.window();
    let why = match outcome.stop {
        Stop::Converged => "converged",
        Stop::TooManySteps => "too many steps",
        Stop::Stuck => "no step leads lower",
    };
    let value = json!({
        "parameters": parameters,
        "covariance": {"parameters": outcome.covariant, "matrix": matrix(outcome.covariance.as_ref())},
        "correlation": {"parameters": outcome.covariant, "matrix": matrix(outcome.correlation().as_ref())},
        "background_events": outcome.background_events.map(|(value, error)| json!({"value": value, "error": error})),
        "goodness": goodness,
        "negative_log_likelihood": outcome.negative_log_likelihood,
        "rows": outcome.rows,
        "sum": outcome.total,
        "window_gev": [finite(low), finite(high)],
        "window_probability": outcome.window_probability,
        "converged": outcome.converged(),
        "stop": why,
        "iterations": outcome.iterations,
        "distance_to_minimum": outcome.distance,
        "warnings": outcome.warnings.iter().map(ToString::to_string).collect::<Vec<_>>(),
    });
    serde_json::to_writer_pretty(&mut *out, &value)?;
    writeln!(out)?;
    out.flush()
}
