//! The figure of closure: what is predicted for mass points that were left out.
//!
//! A column per category, and four panels in each against the mass: peak, width, distribution and acceptance. A grey band
//! shows what is aimed at; methods have a colour and a marker each.

use super::axes::Axes;
use super::paper::{Anchor, DrawError, INK, Paper, Type, draw};
use super::scale::Ticks;
use crate::model::{Closure, ClosurePoint};
use plotters::style::RGBColor;

/// Closure of one category by one method.
#[derive(Clone, Copy, Debug)]
pub struct LabelledClosure<'a> {
    /// Category.
    pub category: &'a str,
    /// Method, as the legend names it.
    pub method: &'a str,
    /// What was found.
    pub closure: &'a Closure,
}

/// What closure aims at.
const PEAK: f64 = 0.02;
const WIDTH: f64 = 0.01;
const CDF: f64 = 0.005;
const ACCEPTANCE: f64 = 0.01;

/// Colours of the templates' figures that colour-blind readers can tell apart; the markers do so in grey print.
const METHODS: [(RGBColor, Marker); 5] = [
    (RGBColor(0x00, 0x72, 0xb2), Marker::Disc),
    (RGBColor(0xd5, 0x5e, 0x00), Marker::Square),
    (RGBColor(0x00, 0x9e, 0x73), Marker::Triangle),
    (RGBColor(0xcc, 0x79, 0xa7), Marker::Diamond),
    (RGBColor(0x33, 0x33, 0x33), Marker::Cross),
];
const BAND: RGBColor = RGBColor(0xe8, 0xe8, 0xe8);
/// What the band is.
const AIM: &str = "aimed at";

const LEFT: f64 = 92.0;
const RIGHT: f64 = 20.0;
const TITLE: f64 = 42.0;
const LEGEND: f64 = 20.0;
const HEADING: f64 = 24.0;
const PANEL: f64 = 104.0;
const BETWEEN: f64 = 12.0;
const BETWEEN_COLUMNS: f64 = 52.0;
const BOTTOM: f64 = 50.0;
const RADIUS: f64 = 4.0;

#[derive(Clone, Copy)]
enum Marker {
    Disc,
    Square,
    Triangle,
    Diamond,
    Cross,
}

impl Marker {
    fn draw(self, paper: &Paper<'_>, (x, y): (f64, f64), colour: RGBColor) -> Result<(), DrawError> {
        let polygon = |corners: u32, turn: f64, radius: f64| {
            let points: Vec<(f64, f64)> = (0..corners)
                .map(|i| libm::sincos(std::f64::consts::TAU * (f64::from(i) / f64::from(corners) + turn)))
                .map(|(s, c)| (x + radius * s, y - radius * c))
                .collect();
            paper.area(&points, colour, 1.0)
        };
        match self {
            Marker::Disc => polygon(16, 0.0, RADIUS),
            Marker::Square => polygon(4, 0.125, 1.3 * RADIUS),
            Marker::Triangle => polygon(3, 0.0, 1.35 * RADIUS),
            Marker::Diamond => polygon(4, 0.0, 1.35 * RADIUS),
            Marker::Cross => {
                let r = 0.9 * RADIUS;
                paper.line(&[(x - r, y - r), (x + r, y + r)], colour, 2.0)?;
                paper.line(&[(x - r, y + r), (x + r, y - r)], colour, 2.0)
            }
        }
    }
}

/// A value of a closure point, in percent where the panel says so.
type Value = fn(&ClosurePoint) -> Option<f64>;

/// One of the four panels.
struct Quantity {
    label: [&'static str; 2],
    value: Value,
    aim: f64,
    /// Whether it has a sign.
    signed: bool,
}

const QUANTITIES: [Quantity; 4] = [
    Quantity { label: ["peak shift", "[sigma_eff]"], value: |p| p.total.peak_in_sigma_eff, aim: PEAK, signed: true },
    Quantity {
        label: ["sigma_eff", "off by [%]"],
        value: |p| p.total.sigma_eff_ratio.map(|r| 100.0 * (r - 1.0)),
        aim: 100.0 * WIDTH,
        signed: true,
    },
    Quantity {
        label: ["largest", "|ΔCDF|"], value: |p| Some(p.total.largest_cdf_difference), aim: CDF, signed: false
    },
    Quantity {
        label: ["acceptance", "off by [%]"],
        value: |p| Some(100.0 * (p.acceptance_ratio - 1.0)),
        aim: 100.0 * ACCEPTANCE,
        signed: true,
    },
];

/// The figure of one channel as SVG: deviations of the predicted templates ([`ClosurePoint::total`]).
///
/// Bands: peak 0.02 sigma_eff, sigma_eff and acceptance 1 %, |ΔCDF| 0.005. Panels of one quantity share their axis over the
/// categories.
///
/// # Errors
/// When there is no closure point, or drawing fails.
pub fn closure_figure(channel: &str, closures: &[LabelledClosure<'_>]) -> Result<String, DrawError> {
    let (mut categories, mut methods): (Vec<&str>, Vec<&str>) = (Vec::new(), Vec::new());
    for one in closures {
        if !categories.contains(&one.category) {
            categories.push(one.category);
        }
        if !methods.contains(&one.method) {
            methods.push(one.method);
        }
    }
    let points = || closures.iter().flat_map(|c| &c.closure.points);
    let masses = points().fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), p| (l.min(p.mass_gev), h.max(p.mass_gev)));
    if !(masses.0 <= masses.1 && masses.0.is_finite() && masses.1.is_finite()) {
        return Err(DrawError::nothing("no mass point was left out"));
    }
    let mut all: Vec<f64> = points().map(|p| p.mass_gev).collect();
    all.sort_by(f64::total_cmp);
    let gap = all.windows(2).map(|pair| pair[1] - pair[0]).filter(|gap| *gap > 0.0).fold(f64::INFINITY, f64::min);
    let more = 0.08 * (masses.1 - masses.0).max(0.02 * masses.1.abs()).max(1e-9);
    let masses = (masses.0 - more, masses.1 + more);
    let columns = categories.len() as f64;
    let width = (760.0 / columns).clamp(200.0, 420.0);
    let step = (width / (masses.1 - masses.0) * gap / (methods.len() as f64 + 1.0)).min(6.0);
    let legend: Vec<&str> = methods.iter().copied().chain([AIM]).collect();
    let entries = legend_places(&legend, columns * width + (columns - 1.0) * BETWEEN_COLUMNS);
    let legend_rows = entries.last().map_or(0.0, |e| e.1 + 1.0);
    let top = TITLE + LEGEND * legend_rows;
    let size = (
        LEFT + columns * width + (columns - 1.0) * BETWEEN_COLUMNS + RIGHT,
        top + HEADING + 4.0 * PANEL + 3.0 * BETWEEN + BOTTOM,
    );
    draw(size, &format!("{channel}: closure"), |paper| {
        let title = Type::TITLE.fit(&format!("{channel}: closure"), size.0 - LEFT - RIGHT);
        paper.text(&title, (LEFT, 22.0), Anchor::Left, Type::TITLE)?;
        for (k, (x, row)) in entries.iter().enumerate() {
            let y = TITLE + LEGEND * row + 2.0;
            let (x, centre) = (LEFT + x, LEFT + x + 5.0);
            if k < methods.len() {
                let (colour, marker) = METHODS[k % METHODS.len()];
                marker.draw(paper, (centre, y), colour)?;
            } else {
                let corners = [(x, y - 5.0), (x + 11.0, y - 5.0), (x + 11.0, y + 5.0), (x, y + 5.0)];
                paper.area(&corners, BAND, 1.0)?;
            }
            paper.text(legend[k], (x + 16.0, y), Anchor::Left, Type::LABEL)?;
        }
        for (column, category) in categories.iter().enumerate() {
            let x = LEFT + column as f64 * (width + BETWEEN_COLUMNS);
            let heading = Type::HEADING.fit(category, width);
            paper.text(&heading, (x, top + 10.0), Anchor::Left, Type::HEADING)?;
            for (row, quantity) in QUANTITIES.iter().enumerate() {
                let y = top + HEADING + row as f64 * (PANEL + BETWEEN);
                let values = range(quantity, points());
                let axes = Axes { left: x, width, top: y, height: PANEL, masses, values };
                draw_panel(paper, &axes, quantity)?;
                if row + 1 == QUANTITIES.len() {
                    axes.mass_labels(paper, 6.0)?;
                }
                for (k, method) in methods.iter().enumerate() {
                    let own = closures.iter().filter(|c| c.category == *category && c.method == *method);
                    let (colour, marker) = METHODS[k % METHODS.len()];
                    // Side by side, so that methods of equal value do not hide each other.
                    let aside = step * (k as f64 - 0.5 * (methods.len() as f64 - 1.0));
                    for point in own.flat_map(|c| &c.closure.points) {
                        let value = (quantity.value)(point).filter(|v| v.is_finite());
                        let Some(value) = value else { continue };
                        let place = (axes.x(point.mass_gev) + aside, axes.y(value));
                        marker.draw(paper, place, colour)?;
                    }
                }
                if column == 0 {
                    let middle = y + 0.5 * PANEL;
                    paper.text(quantity.label[0], (17.0, middle), Anchor::Upwards, Type::LABEL)?;
                    paper.text(quantity.label[1], (33.0, middle), Anchor::Upwards, Type::LABEL)?;
                }
            }
        }
        let middle = 0.5 * (LEFT + size.0 - RIGHT);
        paper.text("mass point left out [GeV]", (middle, size.1 - 14.0), Anchor::Centre, Type::LABEL)
    })
}

/// Place and row of each legend entry.
fn legend_places(methods: &[&str], width: f64) -> Vec<(f64, f64)> {
    let (mut x, mut row) = (0.0, 0.0);
    let mut places = Vec::new();
    for method in methods {
        let length = 16.0 + Type::LABEL.length(method.chars().count()) + 18.0;
        if x > 0.0 && x + length > width {
            (x, row) = (0.0, row + 1.0);
        }
        places.push((x, row));
        x += length;
    }
    places
}

/// The values of a panel: all points and the band.
fn range<'a>(quantity: &Quantity, points: impl Iterator<Item = &'a ClosurePoint>) -> (f64, f64) {
    let found = points.filter_map(quantity.value).filter(|v| v.is_finite()).map(f64::abs).fold(0.0, f64::max);
    let reach = 1.18 * found.max(1.25 * quantity.aim);
    (if quantity.signed { -reach } else { 0.0 }, reach)
}

fn draw_panel(paper: &Paper<'_>, axes: &Axes, quantity: &Quantity) -> Result<(), DrawError> {
    let (left, right) = (axes.left, axes.left + axes.width);
    let low = if quantity.signed { -quantity.aim } else { 0.0 };
    let (from, to) = (axes.y(quantity.aim), axes.y(low));
    paper.area(&[(left, from), (right, from), (right, to), (left, to)], BAND, 1.0)?;
    // Three at least, so that the scale is told.
    let ticks = |most| Ticks::new(axes.values.0, axes.values.1, most);
    let ticks = (4..8).map(ticks).find(|t| t.values.len() > 2).unwrap_or_else(|| ticks(8));
    axes.grid(paper, &ticks)?;
    axes.value_labels(paper, &ticks)?;
    if quantity.signed {
        paper.line(&[(left, axes.y(0.0)), (right, axes.y(0.0))], INK, 0.75)?;
    }
    axes.frame(paper)
}
