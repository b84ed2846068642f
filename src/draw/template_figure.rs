//! One figure per channel: a row per category, a curve per mass.
//!
//! The mass axis shows where the peaks are: from the 1 % to the 99 % quantile of each mass, and a quarter of that
//! distance more on either side. Masses whose ranges meet share a panel; between panels the axis is broken. All panels
//! of a row share the vertical axis, so that heights compare.

use super::axes::Axes;
pub use super::paper::DrawError;
use super::paper::{Anchor, Paper, Type, draw};
use super::scale::{Ticks, three_digits};
use crate::files::{NOMINAL, shortest};
use crate::template::{Cumulative, LabelledTemplate};
use plotters::style::RGBColor;

/// A palette that colour-blind readers can tell apart: M. Okabe and K. Ito, Color Universal Design (2008), from memory,
/// without its yellow; the last is ours.
const COLOURS: [RGBColor; 8] = [
    RGBColor(0x00, 0x72, 0xb2),
    RGBColor(0xd5, 0x5e, 0x00),
    RGBColor(0x00, 0x9e, 0x73),
    RGBColor(0xcc, 0x79, 0xa7),
    RGBColor(0x33, 0x33, 0x33),
    RGBColor(0x56, 0xb4, 0xe9),
    RGBColor(0xe6, 0x9f, 0x00),
    RGBColor(0x7a, 0x4b, 0x12),
];

/// Dashes that tell curves apart in grey print, used where curves share a panel.
const DASHES: [&[f64]; 8] = [
    &[],
    &[7.0, 3.0],
    &[2.0, 2.5],
    &[9.0, 3.0, 2.0, 3.0],
    &[14.0, 4.0],
    &[4.0, 2.0, 1.5, 2.0, 1.5, 2.0],
    &[4.0, 4.0],
    &[16.0, 3.0, 3.0, 3.0, 3.0, 3.0],
];

const LEFT: f64 = 84.0;
const RIGHT: f64 = 20.0;
const TOP: f64 = 44.0;
const BOTTOM: f64 = 24.0;
const BETWEEN_PANELS: f64 = 16.0;
const ROW_TITLE: f64 = 22.0;
const ENTRY_WIDTH: f64 = 128.0;
const ENTRY_HEIGHT: f64 = 34.0;
const TICK_LABELS: f64 = 22.0;
const BETWEEN_ROWS: f64 = 16.0;

/// Masses that share a panel, and the range that it shows.
struct Panel {
    masses: Vec<usize>,
    low: f64,
    high: f64,
    x: f64,
    width: f64,
}

impl Panel {
    fn place(&self, mass_gev: f64) -> f64 {
        self.x + self.width * (mass_gev - self.low) / (self.high - self.low)
    }
}

/// One template as it is drawn.
struct Curve {
    /// Lower edge, upper edge, density of each bin.
    bins: Vec<(f64, f64, f64)>,
    peak_gev: Option<f64>,
    sigma_eff_gev: Option<f64>,
    window: (f64, f64),
}

/// Figures of the nominal templates, one per channel: path in the run directory, and the SVG.
///
/// # Errors
/// When a template has no cumulative distribution, or drawing fails.
pub fn template_figures(templates: &[LabelledTemplate]) -> Result<Vec<(String, String)>, DrawError> {
    let mut channels: Vec<&str> = Vec::new();
    for template in templates {
        if !channels.contains(&template.channel.as_str()) {
            channels.push(&template.channel);
        }
    }
    let mut figures: Vec<(String, String)> = Vec::new();
    for channel in channels {
        let of_channel: Vec<&LabelledTemplate> =
            templates.iter().filter(|t| t.channel == channel && t.shift == NOMINAL).collect();
        let safe = |c: char| if c.is_alphanumeric() || "-_".contains(c) { c } else { '_' };
        let mut path = format!("figures/{}.svg", channel.chars().map(safe).collect::<String>());
        while figures.iter().any(|(taken, _)| taken.eq_ignore_ascii_case(&path)) {
            path = path.replace(".svg", "_.svg");
        }
        figures.push((path, template_figure(channel, &of_channel)?));
    }
    Ok(figures)
}

/// The figure of one channel as SVG.
///
/// # Errors
/// When a template has no cumulative distribution, or drawing fails.
pub fn template_figure(channel: &str, templates: &[&LabelledTemplate]) -> Result<String, DrawError> {
    let mut categories: Vec<&str> = Vec::new();
    let mut masses: Vec<f64> = Vec::new();
    for t in templates {
        if !categories.contains(&t.category.as_str()) {
            categories.push(&t.category);
        }
        if !masses.contains(&t.mass_gev) {
            masses.push(t.mass_gev);
        }
    }
    masses.sort_by(f64::total_cmp);
    let mut rows: Vec<Vec<Option<Curve>>> = Vec::new();
    for category in &categories {
        let mut row = Vec::new();
        for mass in &masses {
            let found = templates.iter().find(|t| t.category == *category && t.mass_gev == *mass);
            row.push(found.map(|t| curve(t)).transpose()?);
        }
        rows.push(row);
    }
    let panels = panels(&rows, masses.len());
    let plot_width = panels.last().map_or(480.0, |p| p.x + p.width - LEFT);
    let entry_rows = panels.iter().map(|p| p.masses.len().div_ceil(entries_across(p))).max().unwrap_or(0);
    let header = ROW_TITLE + ENTRY_HEIGHT * entry_rows as f64;
    let plot_height = match categories.len() {
        0 | 1 => 270.0,
        2 => 210.0,
        _ => 165.0,
    };
    let row_height = header + plot_height + TICK_LABELS + BETWEEN_ROWS;
    let size = (LEFT + plot_width + RIGHT, TOP + row_height * rows.len() as f64 + BOTTOM);
    draw(size, &format!("{channel}: templates of reconstructed mass"), |paper| {
        let title = Type::TITLE.fit(channel, plot_width);
        paper.text(&title, (LEFT, 24.0), Anchor::Left, Type::TITLE)?;
        for (k, (category, row)) in categories.iter().zip(&rows).enumerate() {
            let top = TOP + row_height * k as f64;
            let acceptance = templates.iter().filter(|t| t.category == *category).map(|t| t.template.acceptance);
            let heading = row_heading(category, acceptance, plot_width);
            paper.text(&heading, (LEFT, top + 10.0), Anchor::Left, Type::HEADING)?;
            draw_row(paper, row, &masses, &panels, top + ROW_TITLE, (top + header, plot_height))?;
        }
        let middle = LEFT + 0.5 * plot_width;
        paper.text("reconstructed mass [GeV]", (middle, size.1 - 22.0), Anchor::Centre, Type::LABEL)
    })
}

fn row_heading(category: &str, acceptance: impl Iterator<Item = f64>, width: f64) -> String {
    let percent: Vec<f64> = acceptance.map(|a| 100.0 * a).collect();
    let low = percent.iter().copied().fold(f64::INFINITY, f64::min);
    let high = percent.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    let (low, high) = (format!("{low:.1}"), format!("{high:.1}"));
    let range = if low == high { low } else { format!("{low} to {high}") };
    let acceptance = format!(": acceptance {range} %");
    let room = width - Type::HEADING.length(acceptance.chars().count());
    Type::HEADING.fit(category, room) + &acceptance
}

fn curve(labelled: &LabelledTemplate) -> Result<Curve, DrawError> {
    let template = &labelled.template;
    let cumulative = Cumulative::of(template)?;
    let widths = template.widths()?;
    let (low, high) = cumulative.range_gev();
    let left = cumulative.quantile(0.01).unwrap_or(low);
    let right = cumulative.quantile(0.99).unwrap_or(high);
    let (left, right) = if right > left { (left, right) } else { (low, high) };
    let more = 0.25 * (right - left);
    let bins = template.edges_gev.windows(2).zip(&template.probability);
    Ok(Curve {
        bins: bins.map(|(edge, p)| (edge[0], edge[1], p / (edge[1] - edge[0]))).collect(),
        peak_gev: widths.peak_gev.value,
        sigma_eff_gev: widths.sigma_eff_gev.value,
        window: (f64::max(low, left - more), f64::min(high, right + more)),
    })
}

fn panels(rows: &[Vec<Option<Curve>>], masses: usize) -> Vec<Panel> {
    let mut panels: Vec<Panel> = Vec::new();
    for mass in 0..masses {
        let windows = rows.iter().filter_map(|row| row[mass].as_ref().map(|curve| curve.window));
        let (low, high) = windows.fold((f64::INFINITY, f64::NEG_INFINITY), |a, w| (a.0.min(w.0), a.1.max(w.1)));
        if low >= high {
            continue;
        }
        match panels.last_mut().filter(|panel| low < panel.high + 0.1 * (high - low)) {
            Some(panel) => {
                panel.masses.push(mass);
                panel.low = panel.low.min(low);
                panel.high = panel.high.max(high);
            }
            None => panels.push(Panel { masses: vec![mass], low, high, x: 0.0, width: 0.0 }),
        }
    }
    // A panel is as wide as it has masses to name; one alone gets a usual shape.
    let each = (1040.0 / masses as f64).clamp(ENTRY_WIDTH + 4.0, 240.0);
    let drawn: usize = panels.iter().map(|panel| panel.masses.len()).sum();
    let stretch = f64::max(1.0, 520.0 / (each * drawn as f64));
    let mut x = LEFT;
    for panel in &mut panels {
        panel.x = x;
        panel.width = stretch * each * panel.masses.len() as f64;
        x += panel.width + BETWEEN_PANELS;
    }
    panels
}

fn entries_across(panel: &Panel) -> usize {
    ((panel.width / ENTRY_WIDTH) as usize).clamp(1, panel.masses.len().max(1))
}

fn draw_row(
    paper: &Paper<'_>,
    row: &[Option<Curve>],
    masses: &[f64],
    panels: &[Panel],
    entries_top: f64,
    (top, height): (f64, f64),
) -> Result<(), DrawError> {
    let densities = row.iter().flatten().flat_map(|curve| curve.bins.iter().map(|bin| bin.2));
    let (lowest, highest) = densities.fold((0.0, 0.0), |(low, high), d| (f64::min(low, d), f64::max(high, d)));
    let highest = if highest > lowest { highest } else { lowest + 1.0 };
    // Room for labels above the peaks.
    let highest = highest + 0.14 * (highest - lowest);
    let lowest = if lowest < 0.0 { lowest - 0.05 * (highest - lowest) } else { lowest };
    let axes = |panel: &Panel| Axes {
        left: panel.x,
        width: panel.width,
        top,
        height,
        masses: (panel.low, panel.high),
        values: (lowest, highest),
    };
    let ticks = Ticks::new(lowest, highest, if height > 200.0 { 6 } else { 4 });
    for panel in panels {
        let axes = axes(panel);
        axes.grid(paper, &ticks)?;
        draw_panel(paper, row, masses, panel, &|density| axes.y(density))?;
        axes.frame(paper)?;
        axes.mass_labels(paper)?;
        draw_entries(paper, row, masses, panel, entries_top)?;
    }
    if let Some(first) = panels.first() {
        axes(first).value_labels(paper, &ticks)?;
    }
    paper.text("probability per GeV", (20.0, top + 0.5 * height), Anchor::Upwards, Type::LABEL)
}

fn draw_panel(
    paper: &Paper<'_>,
    row: &[Option<Curve>],
    masses: &[f64],
    panel: &Panel,
    place_y: &dyn Fn(f64) -> f64,
) -> Result<(), DrawError> {
    let curves: Vec<(usize, &Curve)> =
        panel.masses.iter().filter_map(|mass| row[*mass].as_ref().map(|curve| (*mass, curve))).collect();
    let outlines: Vec<Vec<(f64, f64)>> = curves.iter().map(|(_, curve)| outline(curve, panel, place_y)).collect();
    for ((mass, _), outline) in curves.iter().zip(&outlines) {
        if let (Some(first), Some(last)) = (outline.first(), outline.last()) {
            let mut shape = outline.clone();
            shape.extend([(last.0, place_y(0.0)), (first.0, place_y(0.0))]);
            paper.area(&shape, COLOURS[mass % COLOURS.len()], if curves.len() > 1 { 0.12 } else { 0.2 })?;
        }
    }
    for ((mass, _), outline) in curves.iter().zip(&outlines) {
        if outline.len() > 1 {
            paper.dashed(outline, dashes(panel, *mass), COLOURS[mass % COLOURS.len()], 1.6)?;
        }
    }
    if curves.len() > 1 {
        draw_peak_labels(paper, &curves, &outlines, masses, panel)?;
    }
    Ok(())
}

fn dashes(panel: &Panel, mass: usize) -> &'static [f64] {
    if panel.masses.len() > 1 { DASHES[mass % DASHES.len()] } else { &[] }
}

/// The steps of a template inside a panel.
fn outline(curve: &Curve, panel: &Panel, place_y: &dyn Fn(f64) -> f64) -> Vec<(f64, f64)> {
    let mut points = Vec::new();
    for (low, high, density) in &curve.bins {
        let (low, high) = (low.max(panel.low), high.min(panel.high));
        if low < high {
            points.push((panel.place(low), place_y(*density)));
            points.push((panel.place(high), place_y(*density)));
        }
    }
    points
}

/// Names curves of a shared panel at their peaks, where no other curve or label is in the way.
fn draw_peak_labels(
    paper: &Paper<'_>,
    curves: &[(usize, &Curve)],
    outlines: &[Vec<(f64, f64)>],
    masses: &[f64],
    panel: &Panel,
) -> Result<(), DrawError> {
    let mut taken_to = f64::NEG_INFINITY;
    for (k, (mass, curve)) in curves.iter().enumerate() {
        let Some(peak) = curve.peak_gev.filter(|peak| *peak > panel.low && *peak < panel.high) else { continue };
        let label = mass_name(masses[*mass]);
        let half = 0.5 * Type::SMALL.length(label.len());
        let x = panel.place(peak);
        let summit = outlines[k].iter().map(|point| point.1).fold(f64::INFINITY, f64::min);
        let near = |point: &&(f64, f64)| (point.0 - x).abs() < half + 3.0;
        let others = outlines.iter().enumerate().filter(|(other, _)| *other != k);
        let clear = others.flat_map(|(_, points)| points.iter().filter(near)).all(|point| point.1 > summit - 1.0);
        if clear && x - half > taken_to && x - half > panel.x && x + half < panel.x + panel.width {
            paper.text(&label, (x, summit - 9.0), Anchor::Centre, Type::SMALL)?;
            taken_to = x + half + 3.0;
        }
    }
    Ok(())
}

/// A mass as a reader names it: to 0.1 MeV.
fn mass_name(mass_gev: f64) -> String {
    shortest(libm::round(mass_gev * 1e4) / 1e4)
}

fn draw_entries(
    paper: &Paper<'_>,
    row: &[Option<Curve>],
    masses: &[f64],
    panel: &Panel,
    top: f64,
) -> Result<(), DrawError> {
    let across = entries_across(panel);
    for (k, mass) in panel.masses.iter().enumerate() {
        let x = panel.x + (k % across) as f64 * panel.width / across as f64;
        let y = top + ENTRY_HEIGHT * (k / across) as f64 + 8.0;
        paper.dashed(&[(x, y), (x + 26.0, y)], dashes(panel, *mass), COLOURS[mass % COLOURS.len()], 2.2)?;
        let name = Type::STRONG.fit(&format!("{} GeV", mass_name(masses[*mass])), ENTRY_WIDTH - 36.0);
        paper.text(&name, (x + 32.0, y), Anchor::Left, Type::STRONG)?;
        let y = y + 15.0;
        match &row[*mass] {
            Some(Curve { sigma_eff_gev: Some(sigma_eff), .. }) => {
                paper.text("σ", (x, y), Anchor::Left, Type::SMALL)?;
                paper.text("eff", (x + 7.0, y + 3.0), Anchor::Left, Type::INDEX)?;
                let value = format!("= {} GeV", three_digits(*sigma_eff));
                paper.text(&value, (x + 21.0, y), Anchor::Left, Type::SMALL)?;
            }
            Some(_) => paper.text("width not on the axis", (x, y), Anchor::Left, Type::SMALL)?,
            None => paper.text("no template", (x, y), Anchor::Left, Type::SMALL)?,
        }
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn masses_whose_ranges_meet_share_a_panel() {
        let with = |window| Some(Curve { bins: Vec::new(), peak_gev: None, sigma_eff_gev: None, window });
        let rows = vec![vec![with((10.0, 20.0)), with((18.0, 30.0)), with((50.0, 60.0))]];
        let panels = panels(&rows, 3);
        let found: Vec<(usize, f64, f64)> = panels.iter().map(|p| (p.masses.len(), p.low, p.high)).collect();
        assert_eq!(found, [(2, 10.0, 30.0), (1, 50.0, 60.0)]);
        assert!(panels[0].x + panels[0].width < panels[1].x);
    }
}
