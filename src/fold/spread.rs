//! The standard normal numbers of an event, turned so that one of them carries the mass.
//!
//! Measured values, directions and vertex move the mass by many independent normal numbers. A rotation leaves their joint
//! distribution as it is, so it may be a different one for every event: here the one that puts the whole first-order
//! change of the mass on the first number, which takes the most even dimension of the sequence. The others then matter
//! in second order only. (The idea is that of J. Imai and K. S. Tan, J. Comput. Finance 10 (2006) 129.)

use crate::events::LegLanes;
use crate::numerics::kernel;
use crate::numerics::sobol::{BLOCK, Lane};
use crate::wide;

wide! {
    /// Uniform to standard normal numbers, in place.
    pub(super) fn normal(values: &mut Lane) {
        for value in values {
            *value = kernel::normal_quantile(*value);
        }
    }
}

wide! {
    /// Reflects the normals so that the first one moves along `gradient`: by the Householder matrix that takes the first
    /// axis to the direction of the gradient (or its opposite, whichever is stable).
    pub(super) fn turn_to(gradient: &[Lane], normals: &mut [Lane]) {
        let mut square = [0.0; BLOCK];
        for g in gradient {
            for i in 0..BLOCK {
                square[i] += g[i] * g[i];
            }
        }
        let mut factor = [0.0; BLOCK];
        let (Some(first), Some(z)) = (gradient.first(), normals.first()) else { return };
        let mut axis = [0.0; BLOCK];
        for i in 0..BLOCK {
            let length = square[i].sqrt();
            // The unit gradient a has a sign with which a[0] <= 0; w = axis - a; z -> z - w (w z)/(1 - a[0]).
            let sign = if first[i] > 0.0 { -1.0 } else { 1.0 };
            let scale = if length > 0.0 { sign / length } else { 0.0 };
            factor[i] = scale;
            axis[i] = 1.0 - scale * first[i];
            square[i] = axis[i] * z[i];
        }
        for (g, z) in gradient.iter().zip(normals.iter()).skip(1) {
            for i in 0..BLOCK {
                square[i] -= factor[i] * g[i] * z[i];
            }
        }
        for i in 0..BLOCK {
            square[i] /= axis[i];
        }
        for (k, (g, z)) in gradient.iter().zip(normals.iter_mut()).enumerate() {
            for i in 0..BLOCK {
                let w = if k == 0 { axis[i] } else { -factor[i] * g[i] };
                z[i] -= w * square[i];
            }
        }
    }
}

wide! {
    /// Changes of half the squared mass with polar angle and azimuth of a leg, GeV²/rad.
    pub(super) fn angle_levers(truth: &LegLanes, pt: &Lane, total: &LegLanes, theta: &mut Lane, phi: &mut Lane) {
        for i in 0..BLOCK {
            let across = total.px[i] * truth.px[i] + total.py[i] * truth.py[i];
            theta[i] = total.pz[i] * pt[i] - across * truth.pz[i] / pt[i];
            phi[i] = total.px[i] * truth.py[i] - total.py[i] * truth.px[i];
        }
    }
}

wide! {
    /// Adds what the vertex does through the polar angle of a leg: theta changes by -sin²(theta) dz/min(R, Z |tan theta|).
    pub(super) fn add_vertex_lever(
        half_length: f64,
        abs_cot: &Lane,
        theta_lever: &Lane,
        spread: &Lane,
        vertex: &mut Lane,
    ) {
        for i in 0..BLOCK {
            let reach = half_length / abs_cot[i];
            let distance = if reach < 1.0 { reach } else { 1.0 };
            vertex[i] -= theta_lever[i] * spread[i] / (distance * (1.0 + abs_cot[i] * abs_cot[i]));
        }
    }
}
