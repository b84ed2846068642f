//! Where truth events come from: generated spectra and event files.

mod block;
mod cascade;
mod generate;
mod natural;

pub use block::{LegLanes, TruthBlock};
pub use generate::{Generator, TruthDimensions};
