//! The detector in words: regions with their resolution at typical energies.

use super::text::{plural, wrapped};
use crate::detector::{
    Calorimeter, Detector, Efficiency, EfficiencyCurve, EtaRange, Object, Tracker, TrackerResolution, Uncertainty,
};
use std::fmt::Write as _;

/// Energies in GeV at which the resolution of a calorimeter is given.
const ENERGIES_GEV: [f64; 4] = [10.0, 50.0, 100.0, 200.0];

/// Transverse momenta in GeV at which the efficiency is given.
const THRESHOLDS_GEV: [f64; 4] = [10.0, 20.0, 50.0, 100.0];

/// Transverse momenta in GeV at which the resolution of a tracker is given.
const MOMENTA_GEV: [f64; 4] = [10.0, 50.0, 100.0, 500.0];

/// Adds the description of a detector.
pub fn describe(report: &mut String, detector: &Detector) {
    report.push('\n');
    wrapped(report, "detector ", "  ", &format!("\"{}\"", detector.name));
    let names = detector.calorimeters.iter().map(|c| &c.name).chain(detector.trackers.iter().map(|t| &t.name));
    let names = names.chain(detector.efficiencies.iter().map(|e| &e.name));
    let table = Table { name_width: names.map(|name| name.chars().count()).max().unwrap_or(0).clamp(6, 38) };
    for object in Object::ALL {
        calorimeter_text(report, detector, object, &table);
        tracker_text(report, detector, object, &table);
        efficiency_text(report, detector, object, &table);
        for direction in detector.directions.iter().filter(|direction| direction.object == object) {
            let text =
                format!("theta to {} mrad, phi to {} mrad", direction.sigma_theta_mrad, direction.sigma_phi_mrad);
            let known = known_to(&direction.uncertainties);
            wrapped(report, &format!("  {object} direction: "), "      ", &join(&[text, known]));
        }
    }
    vertex_text(report, detector);
}

/// Lines of a region: its range, the entry, and the resolution at four energies.
struct Table {
    name_width: usize,
}

impl Table {
    fn header(&self, report: &mut String, what: &str, at: &str, values: [f64; 4]) {
        let _ = writeln!(report, "  {what}, in % at {at}");
        let _ = write!(report, "    {:<14}{:<width$}", "|eta|", "entry", width = self.name_width);
        for value in values {
            let _ = write!(report, "{:>10}", format!("{value} GeV"));
        }
        report.push('\n');
    }

    fn row(&self, report: &mut String, eta: EtaRange, name: &str, sigmas: [f64; 4]) {
        let range = format!("{} to {}", eta.low, eta.high);
        let _ = write!(report, "    {range:<14}{name:<width$}", width = self.name_width);
        for sigma in sigmas {
            let _ = write!(report, "{:>10.3}", 100.0 * sigma);
        }
        report.push('\n');
    }

    fn details(&self, report: &mut String, details: &[String], known_to: &str) {
        for text in [join(details).as_str(), known_to] {
            if !text.is_empty() {
                wrapped(report, &" ".repeat(18), &" ".repeat(20), text);
            }
        }
    }
}

fn calorimeter_text(report: &mut String, detector: &Detector, object: Object, table: &Table) {
    let regions = detector.calorimeter_regions(object);
    if regions.is_empty() {
        return;
    }
    table.header(report, &format!("{object} calorimeter: sigma_E/E"), "E", ENERGIES_GEV);
    for region in &regions {
        for entry in region.entries.iter().filter_map(|index| detector.calorimeters.get(*index)) {
            table.row(report, region.eta, &entry.name, ENERGIES_GEV.map(|energy| entry.relative_sigma(energy)));
            table.details(report, &calorimeter_details(entry), &known_to(&entry.uncertainties));
        }
    }
}

fn calorimeter_details(entry: &Calorimeter) -> [String; 3] {
    let part = match entry.fraction {
        1.0 => String::new(),
        fraction => format!("fraction {fraction} of the {}s", entry.object),
    };
    let tail = match &entry.tail {
        None => "Gaussian".to_owned(),
        Some(tail) => format!(
            "tails from {} sigma below (power {}) and {} sigma above (power {})",
            tail.alpha_low, tail.n_low, tail.alpha_high, tail.n_high
        ),
    };
    [part, off_centre(entry.bias, entry.scale), tail]
}

fn tracker_text(report: &mut String, detector: &Detector, object: Object, table: &Table) {
    let regions = detector.tracker_regions(object);
    if regions.is_empty() {
        return;
    }
    let what = format!("{object} tracker: sigma_pT/pT, in the middle of the region");
    table.header(report, &what, "pT", MOMENTA_GEV);
    for region in &regions {
        let Some(entry) = detector.trackers.get(region.entry) else { continue };
        let middle = 0.5 * (region.eta.low + region.eta.high);
        table.row(report, region.eta, &entry.name, MOMENTA_GEV.map(|pt| entry.relative_sigma(pt, middle)));
        table.details(report, &tracker_details(entry), &known_to(&entry.uncertainties));
    }
    if !detector.calorimeter_regions(object).is_empty() {
        report.push_str("    where both measure, the energy is their mean weighted by 1/sigma^2\n");
    }
}

fn tracker_details(entry: &Tracker) -> [String; 2] {
    let resolution = match &entry.resolution {
        TrackerResolution::Terms { .. } => String::new(),
        TrackerResolution::Geometry(geometry) => format!(
            "{} points of {} um from {} m over {} m in {} T, {} radiation lengths, {} vertex constraint",
            geometry.points,
            geometry.point_resolution_um,
            geometry.inner_radius_m,
            geometry.lever_arm_m,
            geometry.field_t,
            geometry.radiation_lengths,
            if geometry.vertex_constraint { "with" } else { "without" }
        ),
    };
    [resolution, off_centre(0.0, entry.scale)]
}

fn efficiency_text(report: &mut String, detector: &Detector, object: Object, table: &Table) {
    let (Some(first), Some(last)) =
        (detector.coverage(object).first().copied(), detector.coverage(object).last().copied())
    else {
        return;
    };
    let mut header = false;
    for region in detector.efficiency_regions(object) {
        // Only where the object is measured.
        let eta = EtaRange { low: region.eta.low.max(first.low), high: region.eta.high.min(last.high) };
        let (true, Some(entry)) = (eta.low < eta.high, detector.efficiencies.get(region.entry)) else { continue };
        if !header {
            table.header(report, &format!("{object} efficiency, in the middle of the region"), "pT", THRESHOLDS_GEV);
            header = true;
        }
        let middle = 0.5 * (eta.low + eta.high);
        table.row(report, eta, &entry.name, THRESHOLDS_GEV.map(|pt| entry.curve.at(pt, middle)));
        table.details(report, &[efficiency_details(entry)], &known_to(&entry.uncertainties));
    }
}

fn efficiency_details(entry: &Efficiency) -> String {
    match &entry.curve {
        EfficiencyCurve::TurnOn { threshold_gev, width_gev, plateau } => {
            format!("half of the plateau {plateau} at {threshold_gev} GeV, turn-on width {width_gev} GeV")
        }
        EfficiencyCurve::Table(cells) => {
            let low = cells.iter().map(|cell| cell.pt_gev.0).fold(f64::INFINITY, f64::min);
            let high = cells.iter().map(|cell| cell.pt_gev.1).fold(0.0, f64::max);
            format!("a table of {}, pT {low} to {high} GeV; 0 outside of its cells", plural(cells.len(), "cell"))
        }
    }
}

fn vertex_text(report: &mut String, detector: &Detector) {
    let Some(vertex) = &detector.vertex else {
        report.push_str("  vertex: exact\n");
        return;
    };
    let half_length = if vertex.calorimeter_half_length_m.is_finite() {
        format!("half length {} m", vertex.calorimeter_half_length_m)
    } else {
        "no endcap".to_owned()
    };
    let text = format!(
        "right in a fraction {} of events, to {} mm; else off by {} mm; calorimeter at radius {} m, {half_length}",
        vertex.right_choice, vertex.spread_right_mm, vertex.spread_wrong_mm, vertex.calorimeter_radius_m
    );
    wrapped(report, "  vertex: ", "      ", &join(&[text, known_to(&vertex.uncertainties)]));
}

fn off_centre(bias: f64, scale: f64) -> String {
    let mut parts = Vec::new();
    if bias != 0.0 {
        parts.push(format!("bias {bias}"));
    }
    if scale != 0.0 {
        parts.push(format!("scale {scale}"));
    }
    parts.join("; ")
}

fn known_to(uncertainties: &[Uncertainty]) -> String {
    if uncertainties.is_empty() {
        return String::new();
    }
    let parts: Vec<String> = uncertainties
        .iter()
        .map(|uncertainty| {
            let share = uncertainty.share.as_ref().map_or_else(String::new, |share| format!(" (with {share})"));
            format!("{} {}{share}", uncertainty.key, uncertainty.sigma)
        })
        .collect();
    format!("known to: {}", parts.join(", "))
}

fn join(parts: &[String]) -> String {
    parts.iter().filter(|part| !part.is_empty()).cloned().collect::<Vec<_>>().join("; ")
}
