//! The figure of a fit: what was found and expected, and the pulls below.

use super::paper::{Anchor, DrawError, FRAME, INK, PALE, Paper, Type, draw};
use super::scale::Ticks;
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

/// Where masses and values stand on the sheet.
struct Axes {
    low: f64,
    high: f64,
    top: f64,
    height: f64,
    least: f64,
    most: f64,
}

impl Axes {
    fn x(&self, mass: f64) -> f64 {
        LEFT + WIDTH * (mass - self.low) / (self.high - self.low)
    }

    fn y(&self, value: f64) -> f64 {
        self.top + self.height * (self.most - value) / (self.most - self.least)
    }

    fn frame(&self, paper: &Paper<'_>, ticks: &Ticks) -> Result<(), DrawError> {
        let (left, right, bottom) = (LEFT, LEFT + WIDTH, self.top + self.height);
        for tick in &ticks.values {
            let y = self.y(*tick);
            paper.line(&[(left, y), (right, y)], PALE, 0.75)?;
            paper.text(&ticks.label(*tick), (left - 7.0, y), Anchor::Right, Type::SMALL)?;
        }
        let corners = [(left, self.top), (left, bottom), (right, bottom), (right, self.top), (left, self.top)];
        paper.line(&corners, FRAME, 1.0)
    }
}

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
    let upper = Axes { low, high, top: TOP, height: HEIGHT, least, most };
    let reach = bins.iter().map(|b| b.pull().abs()).filter(|p| p.is_finite()).fold(3.0, f64::max).min(12.0) * 1.1;
    let lower = Axes { top: TOP + HEIGHT + GAP, height: PULLS, least: -reach, most: reach, ..upper };
    let size = (LEFT + WIDTH + RIGHT, TOP + HEIGHT + GAP + PULLS + BOTTOM);
    draw(size, title, |paper| {
        paper.text(&Type::TITLE.fit(title, WIDTH), (LEFT, 24.0), Anchor::Left, Type::TITLE)?;
        upper.frame(paper, &Ticks::new(least, most, 6))?;
        lower.frame(paper, &Ticks::new(-reach, reach, 4))?;
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
        axis_labels(paper, &lower, unit)
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
        let y = axes.y(bin.pull().clamp(axes.least, axes.most));
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

fn axis_labels(paper: &Paper<'_>, axes: &Axes, unit: f64) -> Result<(), DrawError> {
    let bottom = axes.top + axes.height;
    let ticks = Ticks::new(axes.low, axes.high, 8);
    for tick in &ticks.values {
        let x = axes.x(*tick);
        paper.line(&[(x, bottom), (x, bottom + 4.0)], FRAME, 1.0)?;
        paper.text(&ticks.label(*tick), (x, bottom + 13.0), Anchor::Centre, Type::SMALL)?;
    }
    paper.text("mass [GeV]", (LEFT + 0.5 * WIDTH, bottom + 34.0), Anchor::Centre, Type::LABEL)?;
    let per = format!("events per {} GeV", super::scale::three_digits(unit));
    paper.text(&per, (20.0, TOP + 0.5 * HEIGHT), Anchor::Upwards, Type::LABEL)?;
    paper.text("pull", (20.0, axes.top + 0.5 * axes.height), Anchor::Upwards, Type::LABEL)
}
