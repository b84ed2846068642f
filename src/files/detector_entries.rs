//! The entries of a detector file, one by one.

use super::domain::{ABOVE_MINUS_ONE, ABOVE_ONE, ABS_ETA, NOT_NEGATIVE, PLATEAU, POSITIVE, SHARE};
use super::efficiency_file;
use super::reader::Section;
use super::resonance_table::{OtherFiles, file_name};
use super::uncertainties;
use crate::detector::{
    Calorimeter, Direction, Efficiency, EfficiencyCurve, EtaRange, Object, Tail, Tracker, TrackerGeometry,
    TrackerResolution, Vertex,
};

/// Most points of a tracker; more is a slip of the pen.
const MOST_TRACKER_POINTS: u64 = 1_000_000;

/// Reads a `[[calorimeter]]`; `None` when it is not known which legs it measures.
pub(super) fn calorimeter(mut entry: Section<'_>) -> Option<Calorimeter> {
    let name = entry.name("name", "a unique name for the entry");
    let object = object(&mut entry, Object::has_calorimeter);
    let eta = eta(&mut entry);
    entry.not_yet("calibration");
    let stochastic = entry.number("stochastic", &NOT_NEGATIVE);
    let noise_gev = entry.number_or("noise_gev", &NOT_NEGATIVE, 0.0);
    let constant = entry.number_or("constant", &NOT_NEGATIVE, 0.0);
    let bias = entry.number_or("bias", &ABOVE_MINUS_ONE, 0.0);
    let scale = entry.number_or("scale", &ABOVE_MINUS_ONE, 0.0);
    let tail = entry.table("tail").map(tail);
    let fraction = entry.number_or("fraction", &SHARE, 1.0);
    let mut keys = vec!["scale", "stochastic", "noise_gev", "constant", "bias", "fraction"];
    if tail.is_some() {
        keys.extend(["tail.alpha_low", "tail.n_low", "tail.alpha_high", "tail.n_high"]);
    }
    let uncertainties = uncertainties::read(&mut entry, &keys);
    entry.finish();
    Some(Calorimeter {
        name,
        object: object?,
        eta: eta?,
        stochastic,
        noise_gev,
        constant,
        bias,
        scale,
        tail,
        fraction,
        uncertainties,
    })
}

fn tail(mut section: Section<'_>) -> Tail {
    let tail = Tail {
        alpha_low: section.number("alpha_low", &POSITIVE),
        n_low: section.number("n_low", &ABOVE_ONE),
        alpha_high: section.number("alpha_high", &POSITIVE),
        n_high: section.number("n_high", &ABOVE_ONE),
    };
    section.finish();
    tail
}

/// Reads a `[[tracker]]`; `None` when it is not known which legs it measures.
pub(super) fn tracker(mut entry: Section<'_>) -> Option<Tracker> {
    let name = entry.name("name", "a unique name for the entry");
    let object = object(&mut entry, Object::has_track);
    let eta = eta(&mut entry);
    entry.not_yet("calibration");
    let scale = entry.number_or("scale", &ABOVE_MINUS_ONE, 0.0);
    let resolution = match entry.table("geometry") {
        Some(section) => {
            for term in ["curvature_per_gev", "scattering"] {
                if entry.optional(term).is_some() {
                    entry.problem(term, "the entry has a `geometry` too; give the terms or the geometry, not both");
                }
            }
            TrackerResolution::Geometry(geometry(section))
        }
        None if entry.optional("geometry").is_some() => {
            // Its problem stands already; the terms are not missed.
            TrackerResolution::Terms { curvature_per_gev: f64::NAN, scattering: f64::NAN }
        }
        None => TrackerResolution::Terms {
            curvature_per_gev: entry.number("curvature_per_gev", &NOT_NEGATIVE),
            scattering: entry.number("scattering", &NOT_NEGATIVE),
        },
    };
    let keys: &[&str] = match resolution {
        TrackerResolution::Terms { .. } => &["scale", "curvature_per_gev", "scattering"],
        TrackerResolution::Geometry(_) => &[
            "scale",
            "geometry.field_t",
            "geometry.inner_radius_m",
            "geometry.lever_arm_m",
            "geometry.point_resolution_um",
            "geometry.radiation_lengths",
        ],
    };
    let uncertainties = uncertainties::read(&mut entry, keys);
    entry.finish();
    Some(Tracker { name, object: object?, eta: eta?, resolution, scale, uncertainties })
}

fn geometry(mut section: Section<'_>) -> TrackerGeometry {
    let vertex_constraint = section.flag_or("vertex_constraint", false);
    let inner_radius_m = section.number("inner_radius_m", &NOT_NEGATIVE);
    // A curvature needs three points; the vertex is one unless the first point lies on it.
    let fewest = if vertex_constraint && inner_radius_m != 0.0 { 2 } else { 3 };
    let points = section.required("points", "the number of measured points");
    let points = points.and_then(|item| item.whole(fewest, MOST_TRACKER_POINTS)).unwrap_or(fewest);
    let geometry = TrackerGeometry {
        field_t: section.number("field_t", &POSITIVE),
        inner_radius_m,
        lever_arm_m: section.number("lever_arm_m", &POSITIVE),
        points: points as u32,
        point_resolution_um: section.number("point_resolution_um", &NOT_NEGATIVE),
        radiation_lengths: section.number("radiation_lengths", &NOT_NEGATIVE),
        vertex_constraint,
    };
    section.finish();
    geometry
}

/// Reads a `[[direction]]`.
pub(super) fn direction(mut entry: Section<'_>) -> Option<Direction> {
    let object = object(&mut entry, |_| true);
    let sigma_theta_mrad = entry.number("sigma_theta_mrad", &NOT_NEGATIVE);
    let sigma_phi_mrad = entry.number("sigma_phi_mrad", &NOT_NEGATIVE);
    let uncertainties = uncertainties::read(&mut entry, &["sigma_theta_mrad", "sigma_phi_mrad"]);
    entry.finish();
    Some(Direction { object: object?, sigma_theta_mrad, sigma_phi_mrad, uncertainties })
}

/// Reads the `[vertex]`.
pub(super) fn vertex(mut entry: Section<'_>) -> Vertex {
    let calorimeter_radius_m = entry.number("calorimeter_radius_m", &POSITIVE);
    let calorimeter_half_length_m = entry.number_or("calorimeter_half_length_m", &POSITIVE, f64::INFINITY);
    let right_choice = entry.number("right_choice", &SHARE);
    let spread_right_mm = entry.number("spread_right_mm", &NOT_NEGATIVE);
    let spread_wrong_mm = entry.number("spread_wrong_mm", &NOT_NEGATIVE);
    let mut keys = vec!["calorimeter_radius_m", "right_choice", "spread_right_mm", "spread_wrong_mm"];
    if calorimeter_half_length_m.is_finite() {
        keys.push("calorimeter_half_length_m");
    }
    let uncertainties = uncertainties::read(&mut entry, &keys);
    entry.finish();
    Vertex {
        calorimeter_radius_m,
        calorimeter_half_length_m,
        right_choice,
        spread_right_mm,
        spread_wrong_mm,
        uncertainties,
    }
}

/// Reads an `[[efficiency]]`; `None` when it is not known which legs it concerns, or how often it finds them.
pub(super) fn efficiency(mut entry: Section<'_>, files: &mut OtherFiles) -> Option<Efficiency> {
    const NUMBERS: [&str; 3] = ["threshold_gev", "width_gev", "plateau"];
    let object = object(&mut entry, |_| true);
    let name = match entry.optional("name") {
        Some(item) => item.name(),
        None => object.map_or_else(String::new, |object| format!("{object}-efficiency")),
    };
    let eta = match entry.optional("eta") {
        Some(_) => eta(&mut entry),
        None => Some(EtaRange { low: 0.0, high: f64::INFINITY }),
    };
    let (curve, uncertainties) = match entry.optional("table") {
        Some(item) => {
            for key in NUMBERS {
                if entry.optional(key).is_some() {
                    entry.problem(key, "the entry has a `table` too; give the table or the three numbers, not both");
                }
            }
            for key in ["uncertainty", "share"] {
                if entry.optional(key).is_some() {
                    entry.problem(key, "a table has no number that could move; remove this, or give the three numbers");
                }
            }
            let path = file_name(&item).map(|named| entry.sheet.resolve(named));
            let cells = path.and_then(|path| files.take(&item, efficiency_file::read(&path)));
            (cells.map(EfficiencyCurve::Table), Vec::new())
        }
        None => {
            let curve = EfficiencyCurve::TurnOn {
                threshold_gev: entry.number("threshold_gev", &NOT_NEGATIVE),
                width_gev: entry.number("width_gev", &NOT_NEGATIVE),
                plateau: entry.number("plateau", &PLATEAU),
            };
            (Some(curve), uncertainties::read(&mut entry, &NUMBERS))
        }
    };
    entry.finish();
    Some(Efficiency { name, object: object?, eta: eta?, curve: curve?, uncertainties })
}

fn object(entry: &mut Section<'_>, measurable: fn(Object) -> bool) -> Option<Object> {
    let words: Vec<(&str, Object)> =
        Object::ALL.into_iter().filter(|object| measurable(*object)).map(|object| (object.name(), object)).collect();
    entry.required("object", "what the entry measures")?.word(&words)
}

fn eta(entry: &mut Section<'_>) -> Option<EtaRange> {
    let (low, high) = entry.required("eta", "the range of |eta|, [low, high]")?.rising_pair(&ABS_ETA);
    (low < high).then_some(EtaRange { low, high })
}
