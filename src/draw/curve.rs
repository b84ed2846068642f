//! The figure of one line shape.

use super::axes::Axes;
use super::paper::{Anchor, DrawError, INK, Paper, Type, draw};
use super::scale::Ticks;
use crate::lineshape::Shape;
use crate::lineshape::widths::{ONE_SIGMA, full_width_at_half_maximum, narrowest_interval};
use plotters::style::RGBColor;

/// The blue of the other figures; the interval is the same, paler.
const CURVE: RGBColor = RGBColor(0x00, 0x72, 0xb2);
const PALER: f64 = 0.22;
const DASHES: &[f64] = &[7.0, 5.0];

const LEFT: f64 = 84.0;
const WIDTH: f64 = 600.0;
const TOP: f64 = 20.0;
const HEIGHT: f64 = 330.0;
const BOTTOM: f64 = 52.0;
const RIGHT: f64 = 20.0;
const LEGEND_WIDTH: f64 = 300.0;
const SAMPLES: usize = 1200;

/// The density of a shape with its sigma_eff interval and its FWHM, as SVG.
///
/// Without a range the central 96 % are drawn.
///
/// # Errors
/// When the shape has no finite range or no finite density in it, or drawing fails.
pub fn shape_figure(shape: &dyn Shape, range_gev: Option<(f64, f64)>) -> Result<String, DrawError> {
    let nothing = || DrawError::nothing("the shape has no finite density in the range; give --from and --to");
    let (low, high) = range_gev.unwrap_or_else(|| (shape.quantile(0.02), shape.upper_quantile(0.02)));
    if !(high > low && (high - low).is_finite()) {
        return Err(nothing());
    }
    let masses: Vec<f64> = (0..=SAMPLES).map(|i| low + (high - low) * i as f64 / SAMPLES as f64).collect();
    let mut densities = vec![0.0; masses.len()];
    shape.pdf_slice(&masses, &mut densities);
    let peak = densities.iter().copied().fold(0.0, f64::max);
    if !(peak > 0.0 && peak.is_finite()) {
        return Err(nothing());
    }
    // Room for the legend above the peak.
    let values = (0.0, 1.2 * peak);
    let axes = Axes { left: LEFT, width: WIDTH, top: TOP, height: HEIGHT, masses: (low, high), values };
    let size = (LEFT + WIDTH + RIGHT, TOP + HEIGHT + BOTTOM);
    draw(size, "density of a line shape", |paper| {
        axes.grid(paper, &Ticks::new(values.0, values.1, 6))?;
        let points = || masses.iter().copied().zip(densities.iter().copied());
        let place = |(m, density): (f64, f64)| (axes.x(m), axes.y(density));
        let mut entries = Legend { y: TOP + 16.0 };
        if let Some(interval) = narrowest_interval(shape, ONE_SIGMA) {
            let ends = [interval.low_gev, interval.high_gev].map(|m| m.clamp(low, high));
            if ends[0] < ends[1] {
                let mut outline: Vec<(f64, f64)> = vec![place((ends[0], 0.0)), place((ends[0], shape.pdf(ends[0])))];
                outline.extend(points().filter(|(m, _)| *m > ends[0] && *m < ends[1]).map(place));
                outline.extend([place((ends[1], shape.pdf(ends[1]))), place((ends[1], 0.0))]);
                paper.area(&outline, CURVE, PALER)?;
            }
            let text = format!("narrowest 68.27 %: σ_eff = {} GeV", short(interval.half_width()));
            entries.add(paper, &text, |x, y| {
                paper.area(&[(x, y - 5.0), (x + 26.0, y - 5.0), (x + 26.0, y + 5.0), (x, y + 5.0)], CURVE, PALER)
            })?;
        }
        paper.line(&points().map(place).collect::<Vec<_>>(), CURVE, 2.0)?;
        if let Some(interval) = full_width_at_half_maximum(shape) {
            let half = shape.pdf(interval.low_gev);
            let ends = [interval.low_gev, interval.high_gev].map(|m| place((m.clamp(low, high), half)));
            paper.dashed(&ends, DASHES, INK, 1.4)?;
            entries.add(paper, &format!("FWHM = {} GeV", short(interval.width())), |x, y| {
                paper.dashed(&[(x, y), (x + 26.0, y)], DASHES, INK, 1.4)
            })?;
        }
        axes.value_labels(paper, &Ticks::new(values.0, values.1, 6))?;
        axes.frame(paper)?;
        axes.mass_labels(paper)?;
        axes.mass_title(paper, "mass [GeV]")?;
        axes.value_title(paper, "density per GeV")
    })
}

/// Entries below each other in the upper right corner.
struct Legend {
    y: f64,
}

impl Legend {
    fn add(
        &mut self,
        paper: &Paper<'_>,
        text: &str,
        sign: impl FnOnce(f64, f64) -> Result<(), DrawError>,
    ) -> Result<(), DrawError> {
        let x = LEFT + WIDTH - LEGEND_WIDTH;
        sign(x, self.y)?;
        paper.text(text, (x + 34.0, self.y), Anchor::Left, Type::LABEL)?;
        self.y += 19.0;
        Ok(())
    }
}

/// Four significant digits.
fn short(value: f64) -> String {
    let decimals = (3.0 - libm::floor(libm::log10(value.abs().max(1e-300)))).clamp(0.0, 12.0) as usize;
    format!("{value:.decimals$}")
}
