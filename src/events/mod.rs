//! Where truth events come from: generated spectra and event files.

mod consistency;
pub mod lhe;
mod raw;
mod select;

pub use consistency::Inconsistency;
pub use raw::{EventBatch, FINAL, INCOMING, Particle, RESONANCE, RawEvent};
pub use select::{Selection, Selector, Skip};
