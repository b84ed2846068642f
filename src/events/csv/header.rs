//! The header: which column holds what.

use std::path::{Path, PathBuf};

use ::csv::ByteRecord;

use super::columns::{Column, Quantity, all_names, name};
use crate::events::numbers::shown;
use crate::problem::{Problem, suggestion};

/// Where the momentum of a particle stands.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Momentum {
    /// Transverse momentum, pseudorapidity, azimuth.
    Polar([usize; 3]),
    /// Components along x, y and z.
    Cartesian([usize; 3]),
}

/// The columns of a particle.
#[derive(Clone, Copy, Debug)]
pub(super) struct ParticleColumns {
    pub code: usize,
    pub momentum: Momentum,
    pub mass: Option<usize>,
}

impl ParticleColumns {
    /// All of them.
    pub(super) fn all(&self) -> impl Iterator<Item = usize> {
        let (Momentum::Polar(three) | Momentum::Cartesian(three)) = self.momentum;
        [self.code].into_iter().chain(three).chain(self.mass)
    }
}

/// What the header says.
#[derive(Clone, Debug)]
pub(super) struct Header {
    pub file: PathBuf,
    pub names: Vec<String>,
    /// The number of the event, in the layout of one row per particle.
    pub event: Option<usize>,
    pub particles: Vec<ParticleColumns>,
    pub weight: Option<usize>,
    pub true_mass: Option<usize>,
}

impl Header {
    /// Reads the header, which stands on a line.
    pub(super) fn new(file: &Path, line: usize, record: &ByteRecord) -> Result<Self, Problem> {
        let refused = |message: String| Problem::at_line(file, line, message);
        let names: Vec<String> = record.iter().map(|field| String::from_utf8_lossy(field).into_owned()).collect();
        let known: Vec<Option<Column>> = names.iter().map(|name| Column::of_name(name)).collect();
        if known.iter().all(Option::is_none) {
            return Err(refused(no_events(record)));
        }
        let find =
            |quantity: Quantity, particle: usize| known.iter().position(|c| *c == Some(Column { quantity, particle }));
        let event = find(Quantity::Event, 0);
        let most = known.iter().flatten().map(|column| column.particle).max().unwrap_or(0);
        for (index, (column_name, column)) in names.iter().zip(&known).enumerate() {
            if column.is_none() {
                let allowed = all_names(event.is_none().then_some(most.max(2)));
                let allowed: Vec<&str> = allowed.iter().map(String::as_str).collect();
                let message = format!("unknown column: {}", suggestion(column_name, &allowed));
                return Err(refused(message).with_key(shown(column_name.as_bytes()).trim_matches('`')));
            }
            if names.iter().skip(index + 1).any(|other| other == column_name) {
                return Err(refused("the column stands twice in the header".to_owned()).with_key(column_name));
            }
            if column.is_some_and(|column| column.is_of_particle() && (column.particle == 0) != event.is_some()) {
                let message = if event.is_some() {
                    "with the column `event` a row is one particle, whose columns have no number"
                } else {
                    "without the column `event` a row is one event, and the columns of its particles are numbered, such as \
                     `code1`; with rows of one particle each, add `event`"
                };
                return Err(refused(message.to_owned()).with_key(column_name));
            }
        }
        let numbers = if event.is_some() { 0..=0 } else { 1..=most.max(1) };
        let mut missing = Vec::new();
        let mut particles = Vec::new();
        for number in numbers {
            let polar = [Quantity::Pt, Quantity::Eta, Quantity::Phi];
            let cartesian = [Quantity::Px, Quantity::Py, Quantity::Pz];
            let (has_polar, has_cartesian) =
                (polar.map(|quantity| find(quantity, number)), cartesian.map(|quantity| find(quantity, number)));
            if has_polar.iter().any(Option::is_some) && has_cartesian.iter().any(Option::is_some) {
                let message = format!(
                    "the momentum is there in both forms; give {} or {}",
                    list(polar.map(|quantity| name(quantity, number))),
                    list(cartesian.map(|quantity| name(quantity, number)))
                );
                return Err(refused(message).with_key(name(Quantity::Pt, number)));
            }
            let code = find(Quantity::Code, number);
            if code.is_none() {
                missing.push(name(Quantity::Code, number));
            }
            let (wanted, found) =
                if has_cartesian.iter().any(Option::is_some) { (cartesian, has_cartesian) } else { (polar, has_polar) };
            missing
                .extend(wanted.iter().zip(found).filter(|(_, place)| place.is_none()).map(|(q, _)| name(*q, number)));
            if let (Some(code), [Some(a), Some(b), Some(c)]) = (code, found) {
                let momentum =
                    if wanted == polar { Momentum::Polar([a, b, c]) } else { Momentum::Cartesian([a, b, c]) };
                particles.push(ParticleColumns { code, momentum, mass: find(Quantity::Mass, number) });
            }
        }
        if let Some(first) = missing.first() {
            let what = if missing.len() == 1 { "the column is missing" } else { "these columns are missing" };
            let message = if missing.len() == 1 {
                format!("{what}; add it to the header and the rows")
            } else {
                format!("{what}: {}; add them to the header and the rows", missing.join(", "))
            };
            return Err(refused(message).with_key(first));
        }
        let (weight, true_mass) = (find(Quantity::Weight, 0), find(Quantity::TrueMass, 0));
        Ok(Header { file: file.to_path_buf(), names, event, particles, weight, true_mass })
    }
}

fn list(names: [String; 3]) -> String {
    names.map(|name| format!("`{name}`")).join(", ")
}

/// What to say of a first line without a single known column.
fn no_events(record: &ByteRecord) -> String {
    let first = record.get(0).unwrap_or_default();
    let separator = [(b';', "semicolons"), (b'\t', "tabs")].into_iter().find(|(byte, _)| first.contains(byte));
    let hint = match separator {
        Some((_, name)) if record.len() == 1 => format!("; separate the fields by commas, not by {name}"),
        _ => String::new(),
    };
    format!(
        "{} begins no header of events, so that this is not an event file: LHE begins with <LesHouchesEvents, CSV with a header such as \
         code1,pt1_gev,eta1,phi1_rad,code2,... (one row per event) or event,code,pt_gev,eta,phi_rad (one row per \
         particle){hint}",
        shown(first)
    )
}
