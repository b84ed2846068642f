//! The tables `uncertainty` and `share` of a detector entry.

use super::domain::NOT_NEGATIVE;
use super::reader::{Item, Section};
use crate::detector::Uncertainty;
use crate::problem::suggestion;

/// Reads both tables. `keys` are the numbers that the entry has, those of nested tables as `tail.alpha_low`.
pub(super) fn read(entry: &mut Section<'_>, keys: &[&str]) -> Vec<Uncertainty> {
    let mut uncertainties = Vec::new();
    for (key, item) in flat(entry.table("uncertainty")) {
        if keys.contains(&key.as_str()) {
            uncertainties.push(Uncertainty { key, sigma: item.number(&NOT_NEGATIVE), share: None });
        } else {
            item.problem(format!("the entry has no such number: {}", suggestion(&key, keys)));
        }
    }
    for (key, item) in flat(entry.table("share")) {
        match uncertainties.iter_mut().find(|uncertainty| uncertainty.key == key) {
            Some(uncertainty) => uncertainty.share = Some(item.name()),
            None => item.problem(format!(
                "nothing to share: `{key}` has no uncertainty; give it one under `uncertainty`, or remove this"
            )),
        }
    }
    uncertainties
}

/// The values of a table and of the tables in it, under dotted keys, in the order of the file.
fn flat<'a>(section: Option<Section<'a>>) -> Vec<(String, Item<'a>)> {
    let Some(section) = section else { return Vec::new() };
    let mut found = Vec::new();
    for item in section.items() {
        let key = item.key[section.path.len() + 1..].to_owned();
        match item.is_table().then(|| item.section()).flatten() {
            Some(nested) => {
                let inner = nested.items().into_iter();
                found.extend(inner.map(|value| (format!("{key}{}", &value.key[nested.path.len()..]), value)));
            }
            None => found.push((key, item)),
        }
    }
    found
}
