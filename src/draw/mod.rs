//! Figures, as SVG with the reader's own sans-serif font.

pub mod curve;
mod paper;
mod scale;
mod template_figure;

pub use template_figure::{DrawError, template_figure, template_figures};
