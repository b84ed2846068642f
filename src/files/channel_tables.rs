//! The tables `[[channel]]` of a study.

use super::domain::{ABS_ETA, Domain, NOT_NEGATIVE};
use super::reader::{Item, Section};
use super::resonance_table::OtherFiles;
use super::simulated_tables::{self, PlacedSimulated};
use crate::detector::{EtaRange, Object};
use crate::kinematics::MAX_LEGS;
use crate::process::{Ancestry, Category, Channel, Cuts, Decay, LegChoice, MassAxis, Pairing, Pick, ShapeChoice};

const ANCESTRY: [(&str, Ancestry); 3] =
    [("prefer", Ancestry::Prefer), ("ignore", Ancestry::Ignore), ("require", Ancestry::Require)];
const PICKS: [(&str, Pick); 2] = [("hardest", Pick::Hardest), ("nearest", Pick::Nearest)];
const PAIRINGS: [(&str, Pairing); 2] = [("nearest-pair", Pairing::NearestPair), ("nearest-sum", Pairing::NearestSum)];

/// Most bins of an axis.
const MOST_BINS: u64 = 100_000;

/// Largest measured |eta| of a cut.
const LARGEST_ABS_ETA: Domain =
    Domain { contains: |x| x > 0.0 && (ABS_ETA.contains)(x), text: "an |eta| larger than 0, up to 20" };

/// A channel with the lines that later messages need.
#[derive(Debug)]
pub(super) struct PlacedChannel {
    pub channel: Channel,
    /// Where its decay, its axis and `min_efficient_legs` stand.
    pub decay_line: usize,
    pub axis_line: usize,
    pub efficient_legs_line: usize,
    /// Its name in keys, `channel.two-photon`, and the key of its decay.
    pub path: String,
    pub decay_key: &'static str,
    /// Where `simulated_use` and the samples of a simulation stand, each with its key.
    pub simulated_use_line: usize,
    pub simulated_places: Vec<(usize, String)>,
}

/// Reads the channels; those whose legs or axis could not be read are left out. `generated` says whether the events are
/// generated, if that is known.
pub(super) fn read(sections: Vec<Section<'_>>, generated: Option<bool>, files: &mut OtherFiles) -> Vec<PlacedChannel> {
    let mut seen: Vec<(String, usize)> = Vec::new();
    let mut channels = Vec::new();
    for mut section in sections {
        let name = section.name("name", "a unique name for the channel");
        match seen.iter().find(|(other, _)| !name.is_empty() && *other == name) {
            Some((_, line)) => section.problem(
                "name",
                format!("{name:?} names another channel (line {line}) too; every channel needs its own name"),
            ),
            None => seen.push((name.clone(), section.line)),
        }
        channels.extend(channel(section, name, generated, files));
    }
    channels
}

fn channel(
    mut section: Section<'_>,
    name: String,
    generated: Option<bool>,
    files: &mut OtherFiles,
) -> Option<PlacedChannel> {
    let decay = decay(&mut section, generated);
    let legs = decay.as_ref().map_or(MAX_LEGS, |decay| decay.legs().len());
    let cuts = Cuts {
        max_abs_eta: section.optional("max_abs_eta").map(|item| item.number(&LARGEST_ABS_ETA)),
        gap_abs_eta: section.optional("gap_abs_eta").map(|item| {
            let (low, high) = item.rising_pair(&ABS_ETA);
            EtaRange { low, high }
        }),
        min_pt_gev: per_leg(section.optional("min_pt_gev"), legs),
        min_pt_over_mass: per_leg(section.optional("min_pt_over_mass"), legs),
    };
    let min_efficient_legs =
        section.optional("min_efficient_legs").and_then(|item| item.whole(1, legs as u64)).map(|count| count as usize);
    let choice = choice(&mut section, decay.as_ref(), generated);
    let axis = axis(&mut section);
    let shapes = ShapeChoice::ALL.map(|shape| (shape.name(), shape));
    let shape = section.optional("shape").and_then(|item| item.word(&shapes));
    let categories = categories(section.tables("category"));
    let PlacedSimulated { simulated, use_line: simulated_use_line, places: simulated_places } =
        simulated_tables::read(&mut section, &categories, axis.as_ref(), files);
    let path = section.path.clone();
    let decay_key = if matches!(decay, Some(Decay::Cascade(_))) { "via" } else { "legs" };
    let decay_line = section.line_of(decay_key);
    let axis_line = section.line_of("mass_axis");
    let efficient_legs_line = section.line_of("min_efficient_legs");
    section.finish();
    let channel = Channel {
        name,
        decay: decay?,
        choice,
        cuts,
        min_efficient_legs,
        axis: axis?,
        shape: shape.unwrap_or(ShapeChoice::DoubleCrystalBall),
        categories,
        simulated,
    };
    Some(PlacedChannel {
        channel,
        decay_line,
        axis_line,
        efficient_legs_line,
        path,
        decay_key,
        simulated_use_line,
        simulated_places,
    })
}

fn decay(section: &mut Section<'_>, generated: Option<bool>) -> Option<Decay> {
    match (section.optional("legs"), section.optional("via")) {
        (Some(item), None) => {
            let legs = objects(&item)?;
            if generated == Some(true) && legs.len() != 2 {
                item.problem(format!(
                    "found {} legs, must be 2 with `production`; give `via` for four legs, or events from a file",
                    legs.len()
                ));
                return None;
            }
            if !(2..=MAX_LEGS).contains(&legs.len()) {
                item.problem(format!("found {} legs, must be 2 to {MAX_LEGS}", legs.len()));
                return None;
            }
            Some(Decay::Direct(legs))
        }
        (None, Some(item)) => cascade(&item),
        (Some(_), Some(via)) => {
            via.problem("`legs` is there too; give one of them");
            None
        }
        (None, None) => {
            section.problem("legs", "missing; give the legs, as [\"photon\", \"photon\"], or `via` for X -> V V");
            None
        }
    }
}

/// How legs are chosen from an event file; of generated events they are known.
fn choice(section: &mut Section<'_>, decay: Option<&Decay>, generated: Option<bool>) -> LegChoice {
    let from_file = |item: &Item<'_>| {
        if generated == Some(true) {
            item.problem("only with `events`: the legs of generated events are known; remove it");
        }
        generated != Some(true)
    };
    let ancestry = section.optional("ancestry").filter(from_file).and_then(|item| item.word(&ANCESTRY));
    let pick = section.optional("pick").filter(from_file).and_then(|item| {
        let pick = item.word(&PICKS);
        match decay {
            Some(Decay::Direct(legs)) if pick == Some(Pick::Nearest) && legs.len() != 2 => {
                let count = legs.len();
                item.problem(format!("found \"nearest\" for {count} legs, must be \"hardest\" unless there are two"));
            }
            _ => {}
        }
        pick
    });
    let pairing = section.optional("pairing").filter(from_file).and_then(|item| {
        if matches!(decay, Some(Decay::Direct(_))) {
            item.problem("only with `via`: these legs form no pairs; remove it");
        }
        item.word(&PAIRINGS)
    });
    LegChoice {
        ancestry: ancestry.unwrap_or_default(),
        pick: pick.unwrap_or_default(),
        pairing: pairing.unwrap_or_default(),
    }
}

fn objects(item: &Item<'_>) -> Option<Vec<Object>> {
    let words = Object::ALL.map(|object| (object.name(), object));
    let found: Vec<Option<Object>> = item.list()?.iter().map(|element| element.word(&words)).collect();
    found.into_iter().collect()
}

fn cascade(item: &Item<'_>) -> Option<Decay> {
    const ALLOWED: &str = "two pairs of legs, as [[\"electron\", \"electron\"], [\"muon\", \"muon\"]]";
    let items = item.list()?;
    let [first, second] = items.as_slice() else {
        item.reject(ALLOWED);
        return None;
    };
    let pair = |item: &Item<'_>| -> Option<[Object; 2]> {
        let objects = objects(item)?;
        let pair = objects.as_slice().try_into().ok();
        if pair.is_none() {
            item.problem(format!("found {} legs, must be {ALLOWED}", objects.len()));
        }
        pair
    };
    let (first, second) = (pair(first), pair(second));
    Some(Decay::Cascade([first?, second?]))
}

fn per_leg(item: Option<Item<'_>>, legs: usize) -> Vec<f64> {
    let Some(item) = item else { return Vec::new() };
    let values = item.numbers(&NOT_NEGATIVE);
    if values.len() > legs {
        item.problem(format!("found {} values, must be at most one a leg ({legs}), in falling pT", values.len()));
    }
    values
}

fn axis(section: &mut Section<'_>) -> Option<MassAxis> {
    let what = "the axis of reconstructed mass, { low_gev = …, high_gev = …, bins = … }";
    let mut table = section.required("mass_axis", what)?.section()?;
    let low = table.number("low_gev", &NOT_NEGATIVE);
    let high = table.number("high_gev", &NOT_NEGATIVE);
    let bins = table.required("bins", "the number of bins").and_then(|item| item.whole(1, MOST_BINS));
    let relative = table.flag_or("relative", false);
    if low >= high {
        let message = format!("found {low} to {high}, which is empty: `low_gev` must be below `high_gev`");
        table.problem("low_gev", message);
    }
    table.finish();
    Some(MassAxis { low, high, bins: bins? as usize, relative })
}

fn categories(sections: Vec<Section<'_>>) -> Vec<Category> {
    if sections.is_empty() {
        return vec![Category { name: "all".to_owned(), max_abs_eta: None }];
    }
    let mut categories: Vec<Category> = Vec::new();
    for mut section in sections {
        let name = section.name("name", "a name for the category");
        if !name.is_empty() && categories.iter().any(|other| other.name == name) {
            section
                .problem("name", format!("{name:?} names another category of the channel too; give each its own name"));
        }
        let max_abs_eta = section.optional("max_abs_eta").map(|item| item.number(&LARGEST_ABS_ETA));
        if let Some(before) = categories.iter().find(|other| other.max_abs_eta.is_none()) {
            let message = format!("stays empty: category {:?} before it takes every event", before.name);
            section.warn("name", message);
        }
        section.finish();
        categories.push(Category { name, max_abs_eta });
    }
    categories
}
