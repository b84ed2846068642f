//! Resolution terms of a tracker that follow from its geometry.

/// Transverse momentum in GeV of a unit charge, per tesla and metre of bending radius: c/10⁹, exact.
const GEV_PER_TESLA_METRE: f64 = 0.299_792_458;

/// Momentum scale of the multiple-scattering term, in GeV.
const SCATTERING_GEV: f64 = 0.016;

/// A tracker given by its geometry: equally spaced measurement planes in a uniform field.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TrackerGeometry {
    /// Magnetic field in tesla.
    pub field_t: f64,
    /// Radius of the first measured point, in m.
    pub inner_radius_m: f64,
    /// Distance between the first and the last point, in m.
    pub lever_arm_m: f64,
    /// Number of measured points, 3 or more.
    pub points: u32,
    /// Error of one point across the track, in um.
    pub point_resolution_um: f64,
    /// Thickness at normal incidence in radiation lengths.
    pub radiation_lengths: f64,
    /// Whether the vertex is one more exact point of the fit.
    pub vertex_constraint: bool,
}

impl TrackerGeometry {
    /// Error of the curvature 1/R from the points alone, in 1/m.
    ///
    /// The track is a parabola `y = a + b x + k x²/2` fitted by least squares to points of equal error. For n equally
    /// spaced points the factor of R. L. Gluckstern, Nucl. Instrum. Methods 24 (1963) 381, is exact here at every n:
    /// `sqrt(720 m³/((m-1)(m+1)(m+2)(m+3)))` with m = n - 1, in place of its approximation `sqrt(720/(n+4))`. With the
    /// vertex as one more exact point at x = 0, a = 0.
    pub fn curvature_error_per_m(&self) -> f64 {
        let factor = if self.vertex_constraint { self.constrained_factor() } else { self.free_factor() };
        factor * 1e-6 * self.point_resolution_um / (self.lever_arm_m * self.lever_arm_m)
    }

    /// Measurement term of sigma_pT/pT per GeV.
    pub fn curvature_per_gev(&self) -> f64 {
        self.curvature_error_per_m() / (GEV_PER_TESLA_METRE * self.field_t)
    }

    /// Scattering term of sigma_pT/pT at an absolute pseudorapidity, for beta = 1.
    ///
    /// The curvature error is `0.016 GeV/(L p cos²(lambda)) sqrt(x/X0)`, with L and x along the track; `p cos(lambda)/(0.3 B)`
    /// of it is the momentum error. With the transverse span `L cos(lambda)` one factor remains: the material grows as
    /// 1/sin(theta), and so does the square of the term.
    pub fn scattering(&self, abs_eta: f64) -> f64 {
        let material = self.radiation_lengths * libm::cosh(abs_eta);
        SCATTERING_GEV * material.sqrt() / (GEV_PER_TESLA_METRE * self.field_t * self.span_m())
    }

    /// Radial distance over which the track is fitted, in m.
    fn span_m(&self) -> f64 {
        if self.vertex_constraint { self.inner_radius_m + self.lever_arm_m } else { self.lever_arm_m }
    }

    fn free_factor(&self) -> f64 {
        let m = f64::from(self.points) - 1.0;
        (720.0 * m * m * m / ((m - 1.0) * (m + 1.0) * (m + 2.0) * (m + 3.0))).sqrt()
    }

    /// The same factor for `y = b x + k x²/2`, x in lever arms: the variance of k is `4 S2/(S2 S4 - S3²)` with Sj the sum
    /// of the powers x^j. The difference is taken as a spread about the mean, which does not cancel.
    fn constrained_factor(&self) -> f64 {
        let start = self.inner_radius_m / self.lever_arm_m;
        let step = 1.0 / (f64::from(self.points) - 1.0);
        let places = || (0..self.points).map(|i| start + f64::from(i) * step);
        let squares: f64 = places().map(|x| x * x).sum();
        let mean = places().map(|x| x * x * x).sum::<f64>() / squares;
        let spread: f64 = places().map(|x| x * x * (x - mean) * (x - mean)).sum();
        2.0 / spread.sqrt()
    }
}
