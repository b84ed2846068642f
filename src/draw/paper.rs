//! A sheet to draw on: positions in points from the top left, text of the generic sans-serif family.

use crate::template::CumulativeError;
use plotters::backend::SVGBackend;
use plotters::coord::Shift;
use plotters::drawing::{DrawingArea, DrawingAreaErrorKind, IntoDrawingArea};
use plotters::element::{PathElement, Polygon, Text};
use plotters::style::text_anchor::{HPos, Pos, VPos};
use plotters::style::{Color, FontStyle, FontTransform, IntoFont, RGBAColor, RGBColor, ShapeStyle, TextStyle, WHITE};

/// Drawing positions per point: the backend draws at whole numbers, which alone would make curves rough.
const FINE: f64 = 8.0;

/// The backend writes font sizes divided by this.
const BACKEND_SHRINKS_BY: f64 = 1.24;

/// Width of a character in units of the font size, on the safe side for usual sans-serif fonts.
const CHARACTER: f64 = 0.62;

pub(super) const INK: RGBColor = RGBColor(0x22, 0x22, 0x22);
pub(super) const PALE: RGBColor = RGBColor(0xdd, 0xdd, 0xdd);
pub(super) const FRAME: RGBColor = RGBColor(0x88, 0x88, 0x88);

/// A figure could not be drawn.
#[derive(Debug, thiserror::Error)]
#[error("a figure could not be drawn: {0}")]
pub struct DrawError(String);

impl DrawError {
    /// There is nothing to draw.
    pub(super) fn nothing(why: &str) -> Self {
        DrawError(why.to_owned())
    }
}

impl<E: std::error::Error + Send + Sync> From<DrawingAreaErrorKind<E>> for DrawError {
    fn from(error: DrawingAreaErrorKind<E>) -> Self {
        DrawError(error.to_string())
    }
}

impl From<CumulativeError> for DrawError {
    fn from(error: CumulativeError) -> Self {
        DrawError(error.to_string())
    }
}

type Point = (f64, f64);

/// A position; y grows downwards.
fn at((x, y): Point) -> (i32, i32) {
    ((x * FINE).round() as i32, (y * FINE).round() as i32)
}

/// Where text stands relative to its position; all are vertically centred on it.
#[derive(Clone, Copy)]
pub(super) enum Anchor {
    Left,
    Centre,
    Right,
    /// Reading upwards.
    Upwards,
}

/// How text looks.
#[derive(Clone, Copy)]
pub(super) struct Type {
    pub size: f64,
    pub bold: bool,
}

impl Type {
    pub const TITLE: Type = Type { size: 17.0, bold: true };
    pub const HEADING: Type = Type { size: 13.0, bold: true };
    pub const LABEL: Type = Type { size: 12.0, bold: false };
    pub const SMALL: Type = Type { size: 11.0, bold: false };
    pub const STRONG: Type = Type { size: 12.0, bold: true };
    pub const INDEX: Type = Type { size: 8.5, bold: false };

    /// Upper bound of the length of a text.
    pub fn length(self, characters: usize) -> f64 {
        self.size * CHARACTER * if self.bold { 1.08 } else { 1.0 } * characters as f64
    }

    /// The text, shortened to a length.
    pub fn fit(self, text: &str, length: f64) -> String {
        let count = text.chars().count();
        if self.length(count) <= length {
            return text.to_owned();
        }
        let keep = (length / self.length(1)) as usize;
        let mut short: String = text.chars().take(keep.saturating_sub(1)).collect();
        short.push('…');
        short
    }
}

pub(super) struct Paper<'a> {
    area: DrawingArea<SVGBackend<'a>, Shift>,
}

impl Paper<'_> {
    pub fn line(&self, points: &[Point], colour: RGBColor, width: f64) -> Result<(), DrawError> {
        let style = ShapeStyle { color: colour.into(), filled: false, stroke_width: (width * FINE).round() as u32 };
        let path: Vec<(i32, i32)> = points.iter().map(|point| at(*point)).collect();
        Ok(self.area.draw(&PathElement::new(path, style))?)
    }

    /// A line in dashes: lengths drawn and left out in turn; none for a solid line.
    pub fn dashed(&self, points: &[Point], dashes: &[f64], colour: RGBColor, width: f64) -> Result<(), DrawError> {
        if dashes.is_empty() {
            return self.line(points, colour, width);
        }
        for dash in split(points, dashes) {
            self.line(&dash, colour, width)?;
        }
        Ok(())
    }

    pub fn area(&self, points: &[Point], colour: RGBColor, opacity: f64) -> Result<(), DrawError> {
        let fill: RGBAColor = colour.mix(opacity);
        let path: Vec<(i32, i32)> = points.iter().map(|point| at(*point)).collect();
        Ok(self.area.draw(&Polygon::new(path, fill.filled()))?)
    }

    pub fn text(&self, text: &str, position: Point, anchor: Anchor, look: Type) -> Result<(), DrawError> {
        let font = ("sans-serif", look.size * FINE * BACKEND_SHRINKS_BY).into_font();
        let font = if look.bold { font.style(FontStyle::Bold) } else { font };
        let (font, h) = match anchor {
            Anchor::Left => (font, HPos::Left),
            Anchor::Centre => (font, HPos::Center),
            Anchor::Right => (font, HPos::Right),
            Anchor::Upwards => (font.transform(FontTransform::Rotate270), HPos::Center),
        };
        let style = TextStyle::from(font).color(&INK).pos(Pos::new(h, VPos::Center));
        Ok(self.area.draw(&Text::new(text.to_owned(), at(position), style))?)
    }
}

/// Draws a sheet of the given size in points and returns it as SVG, named by `title` for those who hear it.
pub(super) fn draw(
    (width, height): Point,
    title: &str,
    what: impl FnOnce(&Paper<'_>) -> Result<(), DrawError>,
) -> Result<String, DrawError> {
    let mut svg = String::new();
    let size = (libm::ceil(width * FINE) as u32, libm::ceil(height * FINE) as u32);
    {
        let area = SVGBackend::with_string(&mut svg, size).into_drawing_area();
        area.fill(&WHITE)?;
        let paper = Paper { area };
        what(&paper)?;
        paper.area.present()?;
    }
    // The backend knows one size; the sheet is shown in points and drawn FINE times finer.
    let fine = format!("width=\"{}\" height=\"{}\"", size.0, size.1);
    let shown = format!("width=\"{}\" height=\"{}\"", f64::from(size.0) / FINE, f64::from(size.1) / FINE);
    let svg = svg.replacen(&fine, &shown, 1);
    let named = format!(">\n<title>{}</title>", escape(title));
    Ok(svg.replacen('>', &named, 1))
}

fn escape(text: &str) -> String {
    let text: String = text.chars().filter(|c| !c.is_control()).collect();
    text.replace('&', "&amp;").replace('<', "&lt;").replace('>', "&gt;")
}

/// Cuts a line into its dashes.
fn split(points: &[Point], dashes: &[f64]) -> Vec<Vec<Point>> {
    let mut pieces = Vec::new();
    let (mut index, mut left) = (0, dashes[0]);
    let mut piece: Vec<Point> = points.first().copied().into_iter().collect();
    for pair in points.windows(2) {
        let (mut from, to) = (pair[0], pair[1]);
        loop {
            let (dx, dy) = (to.0 - from.0, to.1 - from.1);
            let length = f64::sqrt(dx * dx + dy * dy);
            if length <= left {
                left -= length;
                if index % 2 == 0 {
                    piece.push(to);
                }
                break;
            }
            from = (from.0 + dx * left / length, from.1 + dy * left / length);
            if index % 2 == 0 {
                piece.push(from);
                pieces.push(std::mem::take(&mut piece));
            } else {
                piece = vec![from];
            }
            index = (index + 1) % dashes.len();
            left = dashes[index];
        }
    }
    if piece.len() > 1 {
        pieces.push(piece);
    }
    pieces
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn dashes_follow_the_line() {
        let pieces = split(&[(0.0, 0.0), (3.0, 0.0), (3.0, 4.0)], &[2.0, 1.0]);
        assert_eq!(pieces, [vec![(0.0, 0.0), (2.0, 0.0)], vec![(3.0, 0.0), (3.0, 2.0)], vec![(3.0, 3.0), (3.0, 4.0)]]);
    }

    #[test]
    fn long_text_is_shortened() {
        assert_eq!(Type::LABEL.fit("central", 200.0), "central");
        let short = Type::LABEL.fit(&"x".repeat(100), 80.0);
        assert!(short.ends_with('…') && Type::LABEL.length(short.chars().count()) <= 80.0);
    }
}
