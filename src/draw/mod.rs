//! Figures, as SVG with the reader's own sans-serif font.

mod axes;
mod closure_figure;
mod curve;
mod fit_figure;
mod paper;
mod scale;
mod template_figure;

pub use closure_figure::{LabelledClosure, closure_figure};
pub use curve::shape_figure;
pub use fit_figure::fit_figure;
pub use template_figure::{DrawError, template_figure, template_figures};

/// Writes a figure through a sibling, so that a failure leaves an old file as it was.
///
/// # Errors
/// When the file cannot be written.
pub fn write_whole(file: &std::path::Path, svg: &str) -> std::io::Result<()> {
    let mut sibling = file.as_os_str().to_owned();
    sibling.push(".part");
    let sibling = std::path::PathBuf::from(sibling);
    let written = std::fs::write(&sibling, svg).and_then(|()| std::fs::rename(&sibling, file));
    if written.is_err() {
        // The first error is the one to report; the part may not even exist.
        let _ = std::fs::remove_file(&sibling);
    }
    written
}
