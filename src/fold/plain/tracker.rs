//! Resolution terms of a tracker, from its terms or from its geometry.

use nalgebra::{DMatrix, Matrix3};

use crate::detector::{TrackerGeometry, TrackerResolution};

/// p_T in GeV over field in tesla and radius in metres: the speed of light, exact by definition of the metre.
const GEV_PER_TESLA_METRE: f64 = 0.299_792_458;
/// The scattering constant in GeV of the curvature error of a track in matter, `0.016 sqrt(L/X0)/(L p beta cos²)`
/// (value from memory; Review of Particle Physics, section on tracking in a magnetic field).
const SCATTERING_GEV: f64 = 0.016;

/// Measurement term per GeV and scattering term of sigma_pT/pT at a polar angle with this sine.
///
/// For a geometry the error of the curvature is that of a parabola fitted by least squares to points of equal error;
/// with the vertex constraint the parabola passes through the vertex. The scattering term takes beta = 1; the
/// thickness and the length of the track grow as 1/sin(theta).
pub fn tracker_terms(resolution: &TrackerResolution, sin_theta: f64) -> (f64, f64) {
    let prepared = PreparedTracker::new(resolution);
    (prepared.curvature_per_gev, prepared.scattering(sin_theta))
}

/// A tracker's terms with the least squares done once.
#[derive(Clone, Copy, Debug)]
pub(super) struct PreparedTracker {
    curvature_per_gev: f64,
    scattering_at_normal_incidence: f64,
    from_geometry: bool,
}

impl PreparedTracker {
    pub(super) fn new(resolution: &TrackerResolution) -> Self {
        match resolution {
            TrackerResolution::Terms { curvature_per_gev, scattering } => PreparedTracker {
                curvature_per_gev: *curvature_per_gev,
                scattering_at_normal_incidence: *scattering,
                from_geometry: false,
            },
            TrackerResolution::Geometry(geometry) => {
                let bend = GEV_PER_TESLA_METRE * geometry.field_t;
                let length =
                    geometry.lever_arm_m + if geometry.vertex_constraint { geometry.inner_radius_m } else { 0.0 };
                PreparedTracker {
                    curvature_per_gev: curvature_error_per_metre(geometry) / bend,
                    scattering_at_normal_incidence: SCATTERING_GEV * geometry.radiation_lengths.sqrt()
                        / (length * bend),
                    from_geometry: true,
                }
            }
        }
    }

    fn scattering(&self, sin_theta: f64) -> f64 {
        // delta_k = 0.016 sqrt(X/sin)/((L/sin)(pT/sin) sin²): of all sines only that of the thickness stays.
        let growth = if self.from_geometry { sin_theta.sqrt().recip() } else { 1.0 };
        self.scattering_at_normal_incidence * growth
    }

    /// sigma_pT/pT.
    pub(super) fn relative_width(&self, pt: f64, sin_theta: f64) -> f64 {
        libm::hypot(self.curvature_per_gev * pt, self.scattering(sin_theta))
    }
}

/// Standard error of the curvature 1/R in 1/m from the points alone.
fn curvature_error_per_metre(geometry: &TrackerGeometry) -> f64 {
    let points = geometry.points.max(3) as usize;
    let radius = |i: usize| {
        // From the vertex with the constraint; else from the middle, which keeps the normal equations well conditioned.
        let along = geometry.lever_arm_m * (i as f64 / (points - 1) as f64);
        if geometry.vertex_constraint { geometry.inner_radius_m + along } else { along - 0.5 * geometry.lever_arm_m }
    };
    // y = slope x + curvature x²/2 (+ offset, which an exact point at the vertex fixes).
    let columns = if geometry.vertex_constraint { 2 } else { 3 };
    let design = DMatrix::from_fn(points, columns, |row, column| {
        let x = radius(row);
        [0.5 * x * x, x, 1.0][column]
    });
    let normal = design.transpose() * &design;
    // Padded with a unit row where the offset is fixed, so that one inversion serves both.
    let padded =
        Matrix3::from_fn(|i, j| if i < columns && j < columns { normal[(i, j)] } else { f64::from(u8::from(i == j)) });
    let variance = padded.try_inverse().map_or(f64::INFINITY, |covariance| covariance[(0, 0)]);
    geometry.point_resolution_um * 1e-6 * variance.sqrt()
}
