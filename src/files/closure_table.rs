//! `closure.csv`: what each method predicts for a mass point that it has not seen.

use super::number::{shortest, shortest_or_empty};
use crate::model::{CategoryModel, Deviation};
use std::io::{self, Write};

pub(super) const CLOSURE_FILE: &str = "closure.csv";

const COLUMNS: [&str; 11] = [
    "channel",
    "category",
    "method",
    "mass_gev",
    "peak_in_sigma_eff",
    "sigma_eff_ratio",
    "cdf_difference",
    "acceptance_ratio",
    "interpolation_peak_in_sigma_eff",
    "interpolation_sigma_eff_ratio",
    "interpolation_cdf_difference",
];

/// Writes one row per model, method and interior mass point.
pub(super) fn write(out: impl Write, models: &[CategoryModel]) -> io::Result<()> {
    let mut csv = csv::Writer::from_writer(out);
    csv.write_record(COLUMNS)?;
    for own in models {
        for (method, closure) in &own.closures {
            for point in &closure.points {
                let cells = |d: &Deviation| {
                    [
                        shortest_or_empty(d.peak_in_sigma_eff),
                        shortest_or_empty(d.sigma_eff_ratio),
                        shortest(d.largest_cdf_difference),
                    ]
                };
                let labels = [own.channel.clone(), own.category.clone(), method.name().to_owned()];
                let row = labels
                    .into_iter()
                    .chain([shortest(point.mass_gev)])
                    .chain(cells(&point.total))
                    .chain([shortest(point.acceptance_ratio)])
                    .chain(cells(&point.interpolation));
                csv.write_record(row)?;
            }
        }
    }
    csv.flush()
}
