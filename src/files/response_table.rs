//! `responses.csv`: what every nuisance does to peak, width and acceptance of every template.

use super::number::{shortest, shortest_or_empty};
use crate::shift::{Coefficients, LabelledResponse};
use std::io::{self, Write};

pub(super) const RESPONSES_FILE: &str = "responses.csv";

const LABELS: [&str; 4] = ["channel", "category", "mass_gev", "nuisance"];
const QUANTITIES: [&str; 3] = ["peak", "sigma_eff", "acceptance"];
const REST: [&str; 6] = ["cdf_change", "acceptance_change", "cdf_misfit", "difference_error", "clipped", "pruned"];

/// Writes one row per template and nuisance.
pub(super) fn write(out: impl Write, responses: &[LabelledResponse]) -> io::Result<()> {
    let mut csv = csv::Writer::from_writer(out);
    let coefficients = QUANTITIES.iter().flat_map(|quantity| {
        ["linear", "linear_error", "quadratic", "quadratic_error"].map(|name| format!("{quantity}_{name}"))
    });
    let names = LABELS.map(str::to_owned).into_iter().chain(coefficients).chain(REST.map(str::to_owned));
    csv.write_record(names)?;
    for labelled in responses {
        let r = &labelled.response;
        let mut row =
            vec![labelled.channel.clone(), labelled.category.clone(), shortest(labelled.mass_gev), r.nuisance.clone()];
        for c in [r.peak, r.sigma_eff, r.acceptance] {
            let parts = |c: Coefficients| [c.linear, c.linear_error, c.quadratic, c.quadratic_error];
            row.extend(c.map_or([None; 4], |c| parts(c).map(Some)).map(shortest_or_empty));
        }
        row.extend([r.size.cdf, r.size.acceptance].map(shortest));
        row.push(shortest_or_empty(r.misfit));
        row.push(shortest(labelled.difference_error));
        row.push(labelled.clipped.join(" "));
        row.push(labelled.pruned.to_string());
        csv.write_record(&row)?;
    }
    csv.flush()
}
