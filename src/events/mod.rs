//! Where truth events come from: generated spectra and event files.

mod block;
mod cascade;
mod consistency;
pub mod csv;
mod file;
mod generate;
pub mod lhe;
mod natural;
mod numbers;
mod raw;
mod report;
mod select;
mod source;

pub use block::{LegLanes, TruthBlock};
pub use consistency::Inconsistency;
pub use file::{Chunk, EventFile, Options};
pub use generate::{Generator, TruthDimensions};
pub use raw::{EventBatch, FINAL, INCOMING, Particle, RESONANCE, RawEvent};
pub use report::{MOST_INCONSISTENT, Report, Tally};
pub use select::{Selection, Selector, Skip};
pub use source::Progress;
