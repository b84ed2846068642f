//! Figures.

pub mod curve;
