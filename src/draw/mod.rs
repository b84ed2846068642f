//! Figures, as SVG with the reader's own sans-serif font.

mod paper;
mod scale;
mod template_figure;

pub use template_figure::{DrawError, template_figure, template_figures};
