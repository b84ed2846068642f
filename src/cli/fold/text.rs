//! What `fold` shows on the screen.

use super::super::table::{with_error, write_table};
use crate::files::NOMINAL;
use crate::fold::FoldRecord;
use crate::model::Fitted;
use crate::shift::LabelledResponse;
use crate::template::{LabelledTemplate, Measured};
use std::io::{self, Write};
use std::path::Path;

const HEADER: [&str; 8] =
    ["channel", "category", "mass [GeV]", "acceptance", EFFICIENCY, "peak [GeV]", "sigma_eff [GeV]", "FWHM [GeV]"];

/// A column that is shown only where some efficiency is not 1.
const EFFICIENCY: &str = "efficiency";

/// What is shown of the templates.
pub(super) struct Table {
    header: Vec<&'static str>,
    rows: Vec<Vec<String>>,
}

impl Table {
    pub fn new(templates: &[LabelledTemplate]) -> Self {
        let mut table = Table { header: HEADER.to_vec(), rows: rows(templates) };
        let place = HEADER.iter().position(|title| *title == EFFICIENCY);
        let shown = templates.iter().any(|labelled| labelled.template.efficiency != 1.0);
        if let Some(column) = place.filter(|_| !shown) {
            table.header.remove(column);
            for row in &mut table.rows {
                row.remove(column);
            }
        }
        table
    }
}

fn rows(templates: &[LabelledTemplate]) -> Vec<Vec<String>> {
    let mut rows = Vec::new();
    for labelled in templates.iter().filter(|labelled| labelled.shift == NOMINAL) {
        let t = &labelled.template;
        let widths = t.widths().unwrap_or_default();
        let cell = |measured: Measured| with_error(measured.value, measured.error);
        // Both errors of an acceptance count: that of the points and that of the event list.
        let error = libm::hypot(t.acceptance_error, t.acceptance_list_error);
        let efficiency_error = libm::hypot(t.efficiency_error, t.efficiency_list_error);
        rows.push(vec![
            labelled.channel.clone(),
            labelled.category.clone(),
            labelled.mass_gev.to_string(),
            with_error(Some(t.acceptance), Some(error)),
            with_error(Some(t.efficiency), Some(efficiency_error)),
            cell(widths.peak_gev),
            cell(widths.sigma_eff_gev),
            cell(widths.fwhm_gev),
        ]);
    }
    rows
}

/// All that is shown.
pub(super) struct Shown {
    pub table: Table,
    pub records: Vec<FoldRecord>,
    pub responses: Vec<LabelledResponse>,
    pub fitted: Vec<Fitted>,
    pub notes: Vec<String>,
}

impl Shown {
    /// Writes it.
    pub fn write(&self, out: &mut impl Write, path: &Path) -> io::Result<()> {
        write_table(out, &self.table.header, &self.table.rows, 2)?;
        let list = if self.records.iter().any(|record| record.events_used.is_some()) {
            "; that of an acceptance or efficiency\nincludes the statistics of the event list"
        } else {
            ""
        };
        writeln!(
            out,
            "\nDigits in parentheses: numerical standard error of the last digits{list}; -: not on the mass axis."
        )?;
        for record in &self.records {
            if let Some(used) = record.events_used {
                writeln!(out, "{} at {} GeV: {used} events used", record.channel, record.mass_gev)?;
                for (reason, events) in &record.events_skipped {
                    writeln!(out, "  {events} events skipped: {reason}")?;
                }
            }
            for note in &record.notes {
                writeln!(out, "{} at {} GeV: {note}", record.channel, record.mass_gev)?;
            }
        }
        shift_lines(out, &self.responses)?;
        self.model_lines(out)?;
        writeln!(out, "Written to {}", path.display())?;
        out.flush()
    }

    /// How well the shapes fit.
    fn model_lines(&self, out: &mut impl Write) -> io::Result<()> {
        let worst = self
            .fitted
            .iter()
            .max_by(|a, b| a.response.largest_cdf_difference.total_cmp(&b.response.largest_cdf_difference));
        if let Some(worst) = worst {
            writeln!(
                out,
                "{} shapes fitted to templates of width 0; the worst fit, |ΔCDF| {:.4}, is that of {}, {}, {} GeV",
                self.fitted.len(),
                worst.response.largest_cdf_difference,
                worst.channel,
                worst.category,
                worst.response.mass_gev
            )?;
        }
        match self.notes.as_slice() {
            [] => {}
            [only] => writeln!(out, "{only}")?,
            [first, rest @ ..] => writeln!(out, "{first}\n(and {} more such notes in run.json)", rest.len())?,
        }
        Ok(())
    }
}

/// How many shifts there are, the largest, and which were clipped or pruned.
fn shift_lines(out: &mut impl Write, responses: &[LabelledResponse]) -> io::Result<()> {
    let names = |keep: &dyn Fn(&&LabelledResponse) -> bool| -> Vec<String> {
        let mut names: Vec<String> = Vec::new();
        for labelled in responses.iter().filter(keep) {
            if !names.contains(&labelled.response.nuisance) {
                names.push(labelled.response.nuisance.clone());
            }
        }
        names
    };
    let all = names(&|_| true);
    if all.is_empty() {
        return Ok(());
    }
    writeln!(out, "{} calibration uncertainties folded up and down: shifts.csv, responses.csv", all.len())?;
    let kept = names(&|labelled| !labelled.pruned);
    let pruned: Vec<String> = all.iter().filter(|name| !kept.contains(name)).cloned().collect();
    if !pruned.is_empty() {
        writeln!(out, "  pruned in every template (below prune_shifts_below): {}", pruned.join(", "))?;
    }
    let clipped = names(&|labelled| !labelled.clipped.is_empty());
    if !clipped.is_empty() {
        writeln!(out, "  clipped at the end of what their numbers may be: {}", clipped.join(", "))?;
    }
    Ok(())
}
