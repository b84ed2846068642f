//! The figure of one line shape.

use std::path::Path;

use plotters::coord::Shift;
use plotters::prelude::*;

use crate::lineshape::Shape;
use crate::lineshape::widths::{ONE_SIGMA, full_width_at_half_maximum, narrowest_interval};

/// Why a figure cannot be drawn.
#[derive(Debug, thiserror::Error)]
pub enum DrawError {
    /// No finite range of masses, or no finite density in it.
    #[error("the shape has no finite range to draw")]
    Range,
    /// The file cannot be written.
    #[error(transparent)]
    Output(#[from] std::io::Error),
    /// The drawing library failed.
    #[error("the figure cannot be drawn: {0}")]
    Figure(String),
}

/// Dark blue for the curve and pale blue for areas: apart in print without colour, and for every kind of colour vision.
const CURVE: RGBColor = RGBColor(0, 68, 136);
const AREA: RGBColor = RGBColor(198, 219, 239);
const INK: RGBColor = RGBColor(38, 38, 38);
const GRID: RGBColor = RGBColor(225, 225, 225);
const SIZE: (u32, u32) = (900, 560);
const SAMPLES: usize = 1200;

/// Draws the density with its sigma_eff interval and its FWHM into an SVG file, whole or not at all.
///
/// Without a range the central 96 % are drawn.
///
/// # Errors
/// See [`DrawError`].
pub fn draw_shape(shape: &dyn Shape, range_gev: Option<(f64, f64)>, file: &Path) -> Result<(), DrawError> {
    let (low, high) = range_gev.unwrap_or_else(|| (shape.quantile(0.02), shape.upper_quantile(0.02)));
    if !(high > low && (high - low).is_finite()) {
        return Err(DrawError::Range);
    }
    let masses: Vec<f64> = (0..=SAMPLES).map(|i| low + (high - low) * i as f64 / SAMPLES as f64).collect();
    let mut densities = vec![0.0; masses.len()];
    shape.pdf_slice(&masses, &mut densities);
    let top = densities.iter().copied().fold(0.0, f64::max);
    if !(top > 0.0 && top.is_finite()) {
        return Err(DrawError::Range);
    }
    let mut svg = String::new();
    {
        let root = SVGBackend::with_string(&mut svg, SIZE).into_drawing_area();
        figure(&root, shape, &masses, &densities, 1.3 * top).map_err(|error| DrawError::Figure(error.to_string()))?;
        root.present().map_err(|error| DrawError::Figure(error.to_string()))?;
    }
    Ok(super::write_whole(file, &svg)?)
}

type Failure<'a> = DrawingAreaErrorKind<<SVGBackend<'a> as DrawingBackend>::ErrorType>;

fn figure<'a>(
    root: &DrawingArea<SVGBackend<'a>, Shift>,
    shape: &dyn Shape,
    masses: &[f64],
    densities: &[f64],
    top: f64,
) -> Result<(), Failure<'a>> {
    let (low, high) = (masses[0], masses[masses.len() - 1]);
    root.fill(&WHITE)?;
    let mut chart = ChartBuilder::on(root)
        .margin(18)
        .x_label_area_size(52)
        .y_label_area_size(86)
        .build_cartesian_2d(low..high, 0.0..top)?;
    chart
        .configure_mesh()
        .x_desc("mass (GeV)")
        .y_desc("density (1/GeV)")
        .axis_desc_style(("sans-serif", 18).into_font().color(&INK))
        .label_style(("sans-serif", 15).into_font().color(&INK))
        .axis_style(INK)
        .bold_line_style(GRID)
        .light_line_style(TRANSPARENT)
        .x_labels(8)
        .y_labels(6)
        .x_label_formatter(&|value| tick(*value, high - low))
        .y_label_formatter(&|value| tick(*value, top))
        .draw()?;
    let points = || masses.iter().copied().zip(densities.iter().copied());
    if let Some(interval) = narrowest_interval(shape, ONE_SIGMA) {
        let inside = points().filter(|(m, _)| *m >= interval.low_gev && *m <= interval.high_gev);
        chart
            .draw_series(AreaSeries::new(inside, 0.0, AREA))?
            .label(format!("narrowest 68.27 %: sigma_eff = {} GeV", short(interval.half_width())))
            .legend(|(x, y)| Rectangle::new([(x, y - 6), (x + 24, y + 6)], AREA.filled()));
    }
    chart.draw_series(LineSeries::new(points(), CURVE.stroke_width(3)))?;
    if let Some(interval) = full_width_at_half_maximum(shape) {
        let half = shape.pdf(interval.low_gev);
        let ends = [(interval.low_gev, half), (interval.high_gev, half)];
        chart
            .draw_series(DashedLineSeries::new(ends, 7, 5, INK.stroke_width(2)))?
            .label(format!("FWHM = {} GeV", short(interval.width())))
            .legend(|(x, y)| PathElement::new([(x, y), (x + 24, y)], INK.stroke_width(2)));
    }
    chart
        .configure_series_labels()
        .position(SeriesLabelPosition::UpperRight)
        .label_font(("sans-serif", 15).into_font().color(&INK))
        .background_style(WHITE.mix(0.85))
        .border_style(TRANSPARENT)
        .legend_area_size(34)
        .draw()?;
    Ok(())
}

/// A tick label with the decimals that its axis needs.
fn tick(value: f64, span: f64) -> String {
    // Ticks are about a tenth of the span apart: one digit more than that.
    let decimals = (1.0 - libm::floor(libm::log10(span))).clamp(0.0, 9.0) as usize;
    let text = format!("{value:.decimals$}");
    if text.contains('.') { text.trim_end_matches('0').trim_end_matches('.').to_owned() } else { text }
}

/// Four significant digits.
fn short(value: f64) -> String {
    let decimals = (3.0 - libm::floor(libm::log10(value.abs().max(1e-300)))).clamp(0.0, 12.0) as usize;
    format!("{value:.decimals$}")
}
