//! The tables `[[channel.simulated]]` of a study and the samples that they name.

use super::domain::{MASS, POSITIVE};
use super::fit_data::load_fit_data;
use super::reader::{Item, Section};
use super::resonance_table::{OtherFiles, file_name};
use super::source::digest;
use crate::fit::{Data, Masses};
use crate::model::BinnedSample;
use crate::problem::{Problem, suggestion};
use crate::process::{Category, MassAxis, Simulated, SimulatedSample, SimulatedUse};

const USES: [(&str, SimulatedUse); 2] = [("beside", SimulatedUse::Beside), ("instead", SimulatedUse::Instead)];

/// The samples of a channel, with the line and the key of each.
#[derive(Debug, Default)]
pub(super) struct PlacedSimulated {
    pub simulated: Simulated,
    /// Where `simulated_use` stands.
    pub use_line: usize,
    pub places: Vec<(usize, String)>,
}

/// Reads `simulated_use` and the samples; those with a problem are left out.
pub(super) fn read(
    channel: &mut Section<'_>,
    categories: &[Category],
    axis: Option<&MassAxis>,
    files: &mut OtherFiles,
) -> PlacedSimulated {
    let usage = channel.optional("simulated_use").and_then(|item| item.word(&USES));
    let use_line = channel.line_of("simulated_use");
    let sections = channel.tables("simulated");
    if let (Some(item), true) = (channel.optional("simulated_use"), sections.is_empty()) {
        item.problem("there is no [[channel.simulated]]; name the samples, or remove it");
    }
    let mut placed = PlacedSimulated { use_line, ..PlacedSimulated::default() };
    placed.simulated.usage = usage.unwrap_or_default();
    for section in sections {
        let place = (section.line, section.path.clone());
        let Some(sample) = sample(section, categories, axis, files) else { continue };
        let same = |other: &SimulatedSample| (other.mass_gev, other.category) == (sample.mass_gev, sample.category);
        if let Some(other) = placed.simulated.samples.iter().position(same) {
            let message = format!(
                "category {:?} at {} GeV has a sample already (line {}); join the files",
                categories.get(sample.category).map_or("", |c| c.name.as_str()),
                sample.mass_gev,
                placed.places[other].0
            );
            channel.sheet.problem(place.0, &place.1, message);
            continue;
        }
        placed.simulated.samples.push(sample);
        placed.places.push(place);
    }
    placed
}

fn sample(
    mut section: Section<'_>,
    categories: &[Category],
    axis: Option<&MassAxis>,
    files: &mut OtherFiles,
) -> Option<SimulatedSample> {
    let mass_gev = section.number("mass_gev", &MASS);
    let category = match section.optional("category") {
        Some(item) => category(&item, categories),
        None if categories.len() == 1 => Some(0),
        None => {
            let names: Vec<String> = categories.iter().map(|c| format!("`{}`", c.name)).collect();
            section.problem("category", format!("missing; give the category of the sample: {}", names.join(", ")));
            None
        }
    };
    let generated = section.optional("generated").map(|item| item.number(&POSITIVE));
    let file = section.required("file", "the path of the sample, CSV with the column mass_gev and perhaps weight");
    let sheet = section.sheet;
    section.finish();
    let item = file?;
    let path = sheet.resolve(file_name(&item)?);
    match digest(&path) {
        Ok(input) => files.inputs.push(input),
        Err(message) => {
            item.problem(message);
            return None;
        }
    }
    let masses = match load_fit_data(&path) {
        Ok(Data::Masses(masses)) => masses,
        Ok(Data::Histogram(_)) => {
            let message = "found a histogram, must be masses: the column mass_gev, and perhaps weight";
            files.problems.push(Problem::of_file(&path, message));
            return None;
        }
        Err(problems) => {
            files.problems.extend(problems.0);
            return None;
        }
    };
    if let (Some(axis), false) = (axis, mass_gev.is_nan())
        && let Some(message) = fault(&masses, axis, mass_gev, generated)
    {
        files.problems.push(Problem::of_file(&path, message));
    }
    Some(SimulatedSample { mass_gev, category: category?, path, masses, generated })
}

/// Why the sample cannot be a mass point. An axis with a problem of its own is told there.
fn fault(masses: &Masses, axis: &MassAxis, mass_gev: f64, generated: Option<f64>) -> Option<String> {
    let edges = axis.edges_gev(mass_gev);
    if !edges.windows(2).all(|pair| pair[0] < pair[1]) {
        return None;
    }
    let (low, high) = (edges[0], edges[edges.len() - 1]);
    let on_axis = |error: &dyn std::fmt::Display| format!("on the mass axis from {low} to {high} GeV: {error}");
    match BinnedSample::new(masses, &edges) {
        Err(error) => Some(on_axis(&error)),
        Ok(sample) => generated
            .filter(|sum| sum.is_finite())
            .and_then(|sum| sample.acceptance(sum).err())
            .map(|error| format!("{error}; correct `generated`")),
    }
}

fn category(item: &Item<'_>, categories: &[Category]) -> Option<usize> {
    let name = item.text()?;
    let found = categories.iter().position(|category| category.name == name);
    if found.is_none() {
        let names: Vec<&str> = categories.iter().map(|category| category.name.as_str()).collect();
        item.problem(format!("found {name:?}, which is no category of the channel: {}", suggestion(name, &names)));
    }
    found
}
