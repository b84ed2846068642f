//! The names of the columns.

use super::MOST_PARTICLES;

/// What a column holds.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Quantity {
    Event,
    Weight,
    TrueMass,
    Code,
    Pt,
    Eta,
    Phi,
    Px,
    Py,
    Pz,
    Mass,
}

/// Quantities of an event: one column each, in any layout.
const OF_EVENT: [(Quantity, &str); 3] =
    [(Quantity::Event, "event"), (Quantity::Weight, "weight"), (Quantity::TrueMass, "true_mass_gev")];

/// Quantities of a particle: the name and the unit, between which a number stands in the layout of one row per event.
const OF_PARTICLE: [(Quantity, &str, &str); 8] = [
    (Quantity::Code, "code", ""),
    (Quantity::Pt, "pt", "_gev"),
    (Quantity::Eta, "eta", ""),
    (Quantity::Phi, "phi", "_rad"),
    (Quantity::Px, "px", "_gev"),
    (Quantity::Py, "py", "_gev"),
    (Quantity::Pz, "pz", "_gev"),
    (Quantity::Mass, "mass", "_gev"),
];

/// A column: what it holds and, for a particle, its number; 0 without a number.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) struct Column {
    pub quantity: Quantity,
    pub particle: usize,
}

impl Column {
    /// The column of a name.
    pub(super) fn of_name(name: &str) -> Option<Self> {
        if let Some((quantity, _)) = OF_EVENT.iter().find(|(_, known)| *known == name) {
            return Some(Column { quantity: *quantity, particle: 0 });
        }
        OF_PARTICLE.iter().find_map(|(quantity, stem, unit)| {
            let number = name.strip_prefix(stem)?.strip_suffix(unit)?;
            let particle = match number {
                "" => 0,
                _ => (1..=MOST_PARTICLES).find(|particle| particle.to_string() == number)?,
            };
            Some(Column { quantity: *quantity, particle })
        })
    }

    /// Whether it belongs to a particle.
    pub(super) fn is_of_particle(self) -> bool {
        !OF_EVENT.iter().any(|(quantity, _)| *quantity == self.quantity)
    }
}

/// The name of a column of a particle; 0 is without a number.
pub(super) fn name(quantity: Quantity, particle: usize) -> String {
    if let Some((_, name)) = OF_EVENT.iter().find(|(known, _)| *known == quantity) {
        return (*name).to_owned();
    }
    let (_, stem, unit) = OF_PARTICLE.iter().find(|(known, ..)| *known == quantity).copied().unwrap_or(OF_PARTICLE[0]);
    if particle == 0 { format!("{stem}{unit}") } else { format!("{stem}{particle}{unit}") }
}

/// Every name of a layout; of numbered particles, those up to a number.
pub(super) fn all_names(particles: Option<usize>) -> Vec<String> {
    let numbers = particles.map_or(0..=0, |most| 1..=most.clamp(1, MOST_PARTICLES));
    let of_event = OF_EVENT.iter().filter(|(quantity, _)| particles.is_none() || *quantity != Quantity::Event);
    let of_event = of_event.map(|(_, name)| (*name).to_owned());
    let of_particles = numbers.flat_map(|number| OF_PARTICLE.map(|(quantity, ..)| name(quantity, number)));
    of_event.chain(of_particles).collect()
}
