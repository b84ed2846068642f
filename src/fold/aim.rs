//! Directions: the true one of each leg, and the measured one.

use super::plan::Plan;
use crate::events::LegLanes;
use crate::numerics::kernel;
use crate::numerics::sobol::{BLOCK, Lane};
use crate::wide;

/// The direction of a leg.
#[derive(Clone, Debug)]
pub(super) struct Aimed {
    /// True transverse momentum, GeV.
    pub pt: Lane,
    /// True |cot theta|.
    pub cot_true: Lane,
    /// Measured direction, a unit vector. Until it is finished: cosine and sine of the azimuth, cosine of the polar angle.
    pub nx: Lane,
    pub ny: Lane,
    pub nz: Lane,
    /// Measured |cot theta|.
    pub cot: Lane,
    /// Sine of the measured polar angle.
    pub sin: Lane,
}

impl Default for Aimed {
    fn default() -> Self {
        let zero = [0.0; BLOCK];
        Aimed { pt: zero, cot_true: zero, nx: zero, ny: zero, nz: zero, cot: zero, sin: zero }
    }
}

/// Measures the direction of a leg: polar angle, azimuth, then the vertex, shifted by `dz` in calorimeter radii.
pub(super) fn aim(plan: &Plan, leg: usize, normals: &[Lane], dz: &Lane, aimed: &mut Aimed) {
    if let Some(index) = plan.normals.theta[leg] {
        turn(plan.legs[leg].sigma_theta, &normals[index], &mut aimed.sin, &mut aimed.nz);
    }
    if let Some(index) = plan.normals.phi[leg] {
        turn(plan.legs[leg].sigma_phi, &normals[index], &mut aimed.ny, &mut aimed.nx);
    }
    if let (Some(vertex), true) = (&plan.vertex, plan.legs[leg].trackless) {
        repoint(vertex.half_length, dz, aimed);
    }
    finish(aimed);
}

wide! {
    /// The true direction.
    pub(super) fn point(truth: &LegLanes, aimed: &mut Aimed) {
        for i in 0..BLOCK {
            let pt_squared = truth.px[i] * truth.px[i] + truth.py[i] * truth.py[i];
            let inverse = 1.0 / (pt_squared + truth.pz[i] * truth.pz[i]).sqrt();
            let pt = pt_squared.sqrt();
            let inverse_pt = 1.0 / pt;
            aimed.pt[i] = pt;
            aimed.cot_true[i] = (truth.pz[i] * inverse_pt).abs();
            aimed.nx[i] = truth.px[i] * inverse_pt;
            aimed.ny[i] = truth.py[i] * inverse_pt;
            aimed.sin[i] = pt * inverse;
            aimed.nz[i] = truth.pz[i] * inverse;
        }
    }
}

/// Turns an angle, given by sine and cosine, by `sigma` times the normals.
fn turn(sigma: f64, normal: &Lane, sin: &mut Lane, cos: &mut Lane) {
    // 14 mrad at 7 standard deviations: short series serve.
    if sigma < 0.014 { turn_little(sigma, normal, sin, cos) } else { turn_any(sigma, normal, sin, cos) }
}

wide! {
    fn turn_little(sigma: f64, normal: &Lane, sin: &mut Lane, cos: &mut Lane) {
        for i in 0..BLOCK {
            let (c, s) = kernel::cos_sin_small(sigma * normal[i]);
            (sin[i], cos[i]) = (sin[i] * c + cos[i] * s, cos[i] * c - sin[i] * s);
        }
    }
}

wide! {
    fn turn_any(sigma: f64, normal: &Lane, sin: &mut Lane, cos: &mut Lane) {
        for i in 0..BLOCK {
            let (c, s) = kernel::cos_sin_turns(sigma * (1.0 / std::f64::consts::TAU) * normal[i]);
            (sin[i], cos[i]) = (sin[i] * c + cos[i] * s, cos[i] * c - sin[i] * s);
        }
    }
}

wide! {
    /// cot(theta') = cot(theta) + dz/min(R, Z |tan theta|), the front face met at the true angle; lengths in units of R.
    fn repoint(half_length: f64, dz: &Lane, aimed: &mut Aimed) {
        for i in 0..BLOCK {
            let reach = half_length / aimed.cot_true[i];
            let distance = if reach < 1.0 { reach } else { 1.0 };
            // A polar angle turned past the beam comes out on the other side.
            let side = if aimed.sin[i] < 0.0 { -1.0 } else { 1.0 };
            let cot = aimed.nz[i] / (side * aimed.sin[i]) + dz[i] / distance;
            let sin = 1.0 / (1.0 + cot * cot).sqrt();
            aimed.sin[i] = side * sin;
            aimed.nz[i] = cot * sin;
        }
    }
}

wide! {
    fn finish(aimed: &mut Aimed) {
        for i in 0..BLOCK {
            let sin = aimed.sin[i];
            aimed.nx[i] *= sin;
            aimed.ny[i] *= sin;
            let sin = sin.abs();
            aimed.sin[i] = sin;
            aimed.cot[i] = (aimed.nz[i] / sin).abs();
        }
    }
}
