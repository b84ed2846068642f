//! Where truth events come from: generated spectra and event files.

mod block;
mod cascade;
mod consistency;
mod generate;
pub mod lhe;
mod natural;
mod raw;
mod select;

pub use block::{LegLanes, TruthBlock};
pub use consistency::Inconsistency;
pub use generate::{Generator, TruthDimensions};
pub use raw::{EventBatch, FINAL, INCOMING, Particle, RESONANCE, RawEvent};
pub use select::{Selection, Selector, Skip};
