//! The figure of a fit: what was found and expected, and the pulls below.

use super::axes::Axes;
use super::paper::{Anchor, DrawError, INK, Paper, Type, draw};
use super::scale::{Ticks, three_digits};
use crate::fit::{FitOutcome, GoodnessBin};
use plotters::style::RGBColor;

/// Blue and vermilion of the palette of the templates' figures.
const FIT: RGBColor = RGBColor(0x00, 0x72, 0xb2);
const BACKGROUND: RGBColor = RGBColor(0xd5, 0x5e, 0x00);
const DASHES: &[f64] = &[7.0, 3.0];

const LEFT: f64 = 84.0;
const WIDTH: f64 = 600.0;
const TOP: f64 = 46.0;
const HEIGHT: f64 = 300.0;
const GAP: f64 = 12.0;
const PULLS: f64 = 100.0;
const BOTTOM: f64 = 52.0;
const RIGHT: f64 = 20.0;
/// Points of the curve.
const SAMPLES: usize = 1200;

/// The figure of a fit as SVG, entitled `title`.
///
/// # Errors
/// When there is nothing to draw, or drawing fails.
pub fn fit_figure(title: &str, outcome: &FitOutcome) -> Result<String, DrawError> {
    let bins: Vec<GoodnessBin> =
        outcome.bins.iter().copied().filter(|b| b.low_gev.is_finite() && b.high_gev.is_finite()).collect();
    let (Some(first), Some(last)) = (bins.first(), bins.last()) else {
        return Err(DrawError::nothing("the fit has no bins"));
    };
    let (low, high) = (first.low_gev, last.high_gev);
    let masses: Vec<f64> = (0..=SAMPLES).map(|i| low + (high - low) * i as f64 / SAMPLES as f64).collect();
    let curve = outcome.density(&masses).ok_or_else(|| DrawError::nothing("the fitted shape has no density"))?;
    // Events per typical bin, so that the points are near the counts.
    let unit = (high - low) / bins.len() as f64;
    let scaled = |b: &GoodnessBin, value: f64| value * unit / (b.high_gev - b.low_gev);
    let error = |b: &GoodnessBin| b.variance.max(0.0).sqrt();
    let tops = bins.iter().map(|b| scaled(b, b.found + error(b))).chain(curve.iter().map(|c| unit * c.0));
    let most = tops.filter(|v| v.is_finite()).fold(0.0, f64::max);
    let least = bins.iter().map(|b| scaled(b, b.found - error(b))).fold(0.0, f64::min);
    let most = if most > least { most + 0.08 * (most - least) } else { least + 1.0 };
    let upper = Axes { left: LEFT, width: WIDTH, top: TOP, height: HEIGHT, masses: (low, high), values: (least, most) };
    let reach = bins.iter().map(|b| b.pull().abs()).filter(|p| p.is_finite()).fold(3.0, f64::max).min(12.0) * 1.1;
    let lower = Axes { top: TOP + HEIGHT + GAP, height: PULLS, values: (-reach, reach), ..upper };
    let size = (LEFT + WIDTH + RIGHT, TOP + HEIGHT + GAP + PULLS + BOTTOM);
    draw(size, title, |paper| {
        paper.text(&Type::TITLE.fit(title, WIDTH), (LEFT, 24.0), Anchor::Left, Type::TITLE)?;
        for (axes, ticks) in [(&upper, Ticks::new(least, most, 6)), (&lower, Ticks::new(-reach, reach, 4))] {
            axes.grid(paper, &ticks)?;
            axes.value_labels(paper, &ticks)?;
            axes.frame(paper)?;
        }
        let line = |part: &dyn Fn(&(f64, f64)) -> f64| -> Vec<(f64, f64)> {
            masses.iter().zip(&curve).map(|(m, c)| (upper.x(*m), upper.y(unit * part(c)))).collect()
        };
        let has_background = outcome.background_events.is_some();
        if has_background {
            paper.dashed(&line(&|c| c.1), DASHES, BACKGROUND, 1.8)?;
        }
        paper.line(&line(&|c| c.0), FIT, 2.0)?;
        for bin in &bins {
            let x = upper.x(0.5 * (bin.low_gev + bin.high_gev));
            let ends = [bin.found - error(bin), bin.found + error(bin)].map(|v| (x, upper.y(scaled(bin, v))));
            paper.line(&ends, INK, 1.0)?;
            dot(paper, x, upper.y(scaled(bin, bin.found)), 2.0)?;
        }
        draw_pulls(paper, &lower, &bins)?;
        legend(paper, outcome, has_background)?;
        lower.mass_labels(paper)?;
        lower.mass_title(paper, "mass [GeV]")?;
        upper.value_title(paper, &format!("events per {} GeV", three_digits(unit)))?;
        lower.value_title(paper, "pull")
    })
}

fn dot(paper: &Paper<'_>, x: f64, y: f64, radius: f64) -> Result<(), DrawError> {
    let corners: Vec<(f64, f64)> = (0..12)
        .map(|i| libm::sincos(std::f64::consts::TAU * f64::from(i) / 12.0))
        .map(|(s, c)| (x + radius * c, y + radius * s))
        .collect();
    paper.area(&corners, INK, 1.0)
}

fn draw_pulls(paper: &Paper<'_>, axes: &Axes, bins: &[GoodnessBin]) -> Result<(), DrawError> {
    let zero = axes.y(0.0);
    for bin in bins.iter().filter(|bin| bin.pull().is_finite()) {
        let (left, right) = (axes.x(bin.low_gev), axes.x(bin.high_gev));
        let inset = 0.12 * (right - left);
        // A pull beyond the frame ends at it.
        let y = axes.y(bin.pull().clamp(axes.values.0, axes.values.1));
        paper.area(&[(left + inset, zero), (right - inset, zero), (right - inset, y), (left + inset, y)], FIT, 0.75)?;
    }
    paper.line(&[(LEFT, zero), (LEFT + WIDTH, zero)], INK, 0.75)
}

fn legend(paper: &Paper<'_>, outcome: &FitOutcome, has_background: bool) -> Result<(), DrawError> {
    let mut y = TOP + 18.0;
    let x = LEFT + WIDTH - 150.0;
    dot(paper, x + 13.0, y, 2.0)?;
    paper.line(&[(x + 13.0, y - 6.0), (x + 13.0, y + 6.0)], INK, 1.0)?;
    paper.text("data", (x + 34.0, y), Anchor::Left, Type::LABEL)?;
    y += 18.0;
    paper.line(&[(x, y), (x + 26.0, y)], FIT, 2.0)?;
    paper.text("fit", (x + 34.0, y), Anchor::Left, Type::LABEL)?;
    if has_background {
        y += 18.0;
        paper.dashed(&[(x, y), (x + 26.0, y)], DASHES, BACKGROUND, 1.8)?;
        paper.text("background", (x + 34.0, y), Anchor::Left, Type::LABEL)?;
    }
    if let Some(g) = &outcome.goodness {
        y += 20.0;
        let text = format!("χ²/ndf = {:.1}/{}", g.chi_square, g.degrees_of_freedom);
        paper.text(&text, (x, y), Anchor::Left, Type::SMALL)?;
        y += 15.0;
        paper.text(&format!("p = {:.2}", g.p_value), (x, y), Anchor::Left, Type::SMALL)?;
    }
    Ok(())
}
