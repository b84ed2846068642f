//! The table `[resonance]` of a study.

use super::FileDigest;
use super::domain::{ANY, Domain, MASS, NOT_NEGATIVE};
use super::reader::{Item, Section};
use super::source::{Sheet, Unreadable, digest};
use super::spectrum_file;
use crate::problem::Problem;
use crate::process::{EventList, EventSource, Intermediate, Natural, Production, Radiation, Resonance, Width};

/// The V of X -> V V(*) when none is given: mass and width in GeV.
const INTERMEDIATE: Intermediate = Intermediate { mass_gev: 91.188, width_gev: 2.4955 };

const DELTA_R: Domain = Domain { contains: |x| x > 0.0 && x <= 2.0, text: "a number larger than 0, up to 2" };

/// What other files of a study or a detector brought along.
#[derive(Debug, Default)]
pub(super) struct OtherFiles {
    pub inputs: Vec<FileDigest>,
    pub problems: Vec<Problem>,
}

impl OtherFiles {
    /// What a file gave, with its digest and problems kept here; `None` when it could not be read. `item` names the file.
    pub fn take<T>(&mut self, item: &Item<'_>, read: Result<(T, FileDigest, Vec<Problem>), Unreadable>) -> Option<T> {
        match read {
            Ok((value, input, problems)) => {
                self.inputs.push(input);
                self.problems.extend(problems);
                Some(value)
            }
            Err(Unreadable::Access(message)) => {
                item.problem(message);
                None
            }
            Err(Unreadable::Content(problem)) => {
                self.problems.push(problem);
                None
            }
        }
    }
}

/// Reads the table; `None` when it is not known where the events come from.
pub(super) fn read(mut section: Section<'_>, files: &mut OtherFiles) -> Option<Resonance> {
    let masses_gev = masses(&mut section);
    let width = section.table("width").map_or(Width::Gev(0.0), width);
    let natural =
        section.optional("natural").and_then(|item| item.word(&Natural::ALL.map(|natural| (natural.name(), natural))));
    let falloff_power = section.number_or("falloff_power", &ANY, 0.0);
    let source = source(&mut section, files);
    if matches!(source, Some(EventSource::File(_))) && masses_gev.len() > 1 {
        let message = format!(
            "found {} masses, must be one: with `events` it labels the result and scales a relative axis",
            masses_gev.len()
        );
        section.problem("masses_gev", message);
    }
    let intermediate = section.table("intermediate").map_or(INTERMEDIATE, |mut table| {
        let intermediate = Intermediate {
            mass_gev: table.number_or("mass_gev", &MASS, INTERMEDIATE.mass_gev),
            width_gev: table.number_or("width_gev", &MASS, INTERMEDIATE.width_gev),
        };
        table.finish();
        intermediate
    });
    let radiation = match source {
        Some(EventSource::File(_)) => section.table("radiation").map(|mut table| {
            let radiation = Radiation { recombination_delta_r: table.number("recombination_delta_r", &DELTA_R) };
            table.finish();
            radiation
        }),
        Some(EventSource::Generated(_)) => {
            section.not_yet("radiation");
            None
        }
        None => {
            section.optional("radiation");
            None
        }
    };
    section.finish();
    Some(Resonance {
        masses_gev,
        width,
        natural: natural.unwrap_or(Natural::Relativistic),
        falloff_power,
        source: source?,
        intermediate,
        radiation,
    })
}

fn masses(section: &mut Section<'_>) -> Vec<f64> {
    let Some(item) = section.required("masses_gev", "the masses in GeV, rising") else { return Vec::new() };
    let Some(items) = item.list() else { return Vec::new() };
    if items.is_empty() {
        item.problem("found no mass; give at least one, in GeV");
    }
    let masses: Vec<f64> = items.iter().map(|item| item.number(&MASS)).collect();
    for ((item, mass), before) in items.iter().zip(&masses).skip(1).zip(&masses) {
        if mass <= before {
            item.problem(format!("found {mass} after {before}; the masses must rise, each once"));
        }
    }
    masses
}

fn width(mut section: Section<'_>) -> Width {
    let gev = section.optional("gev").map(|item| item.number(&NOT_NEGATIVE));
    let relative = section.optional("relative").map(|item| item.number(&NOT_NEGATIVE));
    let width = match (gev, relative) {
        (Some(gev), None) => Width::Gev(gev),
        (None, Some(relative)) => Width::Relative(relative),
        (both, _) => {
            let found = if both.is_some() { "both `gev` and `relative`" } else { "neither `gev` nor `relative`" };
            section.sheet.problem(section.line, &section.path, format!("found {found}, must be one of them"));
            Width::Gev(f64::NAN)
        }
    };
    section.finish();
    width
}

fn source(section: &mut Section<'_>, files: &mut OtherFiles) -> Option<EventSource> {
    let weight = section.optional("weight");
    let events_item = section.optional("events");
    if let (Some(weight), None) = (&weight, &events_item) {
        weight
            .problem("there is no `events`; `weight` names a weight of an event file, remove it for generated events");
    }
    match (section.optional("production"), events_item) {
        (Some(item), None) => production(item.section()?, files).map(EventSource::Generated),
        (None, Some(item)) => events(&item, weight.as_ref(), section.sheet, files),
        (Some(_), Some(events)) => {
            events.problem("`production` is there too; give either generated events or a file, not both");
            None
        }
        (None, None) => {
            let message = "missing; say where the events come from: `production = { pt_mean_gev = …, rapidity_sigma = … }` \
                           or `events = \"file.lhe\"`";
            section.problem("production", message);
            None
        }
    }
}

fn production(mut section: Section<'_>, files: &mut OtherFiles) -> Option<Production> {
    let Some(item) = section.optional("table") else {
        let production = Production::Spectrum {
            pt_mean_gev: section.number("pt_mean_gev", &NOT_NEGATIVE),
            rapidity_sigma: section.number("rapidity_sigma", &NOT_NEGATIVE),
        };
        section.finish();
        return Some(production);
    };
    for key in ["pt_mean_gev", "rapidity_sigma"] {
        if section.optional(key).is_some() {
            section.problem(key, "`table` is there too; give the table or the two numbers, not both");
        }
    }
    let sheet = section.sheet;
    section.finish();
    let path = sheet.resolve(file_name(&item)?);
    files.take(&item, spectrum_file::read(&path)).map(Production::Table)
}

fn events(item: &Item<'_>, weight: Option<&Item<'_>>, sheet: &Sheet, files: &mut OtherFiles) -> Option<EventSource> {
    let weight = weight.and_then(weight_name);
    let path = sheet.resolve(file_name(item)?);
    match digest(&path) {
        Ok(input) => files.inputs.push(input),
        Err(message) => item.problem(message),
    }
    Some(EventSource::File(EventList { path, weight }))
}

/// The name of a weight; `None` after a problem.
fn weight_name(item: &Item<'_>) -> Option<String> {
    let name = item.text()?;
    if name.trim().is_empty() || name.chars().any(char::is_control) {
        item.reject("the name of a weight of the event file; leave it out for the event weight");
        return None;
    }
    Some(name.trim().to_owned())
}

/// The name of a file; `None` after a problem.
pub(super) fn file_name<'a>(item: &Item<'a>) -> Option<&'a str> {
    let named = item.text()?;
    if named.trim().is_empty() {
        item.problem("found an empty text, must be the path of a file, relative to this file");
        return None;
    }
    Some(named)
}
