//! `anchors.csv`: simulated samples against the folded templates.

use super::number::{shortest, shortest_or_empty};
use crate::model::Simulation;
use crate::template::Measured;
use std::io::{self, Write};

pub(super) const ANCHORS_FILE: &str = "anchors.csv";

const COLUMNS: [&str; 22] = [
    "channel",
    "category",
    "mass_gev",
    "effective_entries",
    "sigma_eff_ratio",
    "sigma_eff_ratio_error",
    "peak_shift_mev",
    "peak_shift_mev_error",
    "peak_shift_in_sigma_eff",
    "peak_shift_in_sigma_eff_error",
    "cdf_difference",
    "expected_cdf_difference",
    "acceptance_ratio",
    "acceptance_ratio_error",
    "category_scale",
    "category_scale_error",
    "category_smearing",
    "category_squared_smearing",
    "category_squared_smearing_error",
    "category_chi_square",
    "category_degrees_of_freedom",
    "category_chi_square_as_folded",
];

/// Writes one row per sample; scale and smearing are those of its category.
pub(super) fn write(out: impl Write, simulations: &[Simulation]) -> io::Result<()> {
    let mut csv = csv::Writer::from_writer(out);
    csv.write_record(COLUMNS)?;
    let pair = |measured: Measured| [shortest_or_empty(measured.value), shortest_or_empty(measured.error)];
    for own in simulations {
        for c in &own.comparisons {
            let mut row =
                vec![own.channel.clone(), own.category.clone(), shortest(c.mass_gev), shortest(c.effective_entries)];
            row.extend(pair(c.sigma_eff_ratio));
            row.extend(pair(c.peak_shift_mev));
            row.extend(pair(c.peak_shift_in_sigma_eff));
            row.extend([c.largest_cdf_difference, c.expected_cdf_difference].map(shortest));
            row.extend(pair(c.acceptance_ratio.unwrap_or_default()));
            match &own.agreement {
                Some(a) => {
                    let numbers = [a.scale, a.scale_error, a.smearing, a.squared_smearing, a.squared_smearing_error];
                    row.extend(numbers.map(shortest));
                    row.push(shortest(a.chi_square));
                    row.push(a.degrees_of_freedom.to_string());
                    row.push(shortest(a.chi_square_as_folded));
                }
                None => row.extend(vec![String::new(); 8]),
            }
            csv.write_record(&row)?;
        }
    }
    csv.flush()
}
