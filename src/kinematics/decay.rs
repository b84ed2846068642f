//! Two-body decays.

/// The phase-space function `lambda = (1 - x1 - x2)² - 4 x1 x2`, with `x_i = m_i²/M²`, in its factored form.
///
/// `lambda = (1 - (m1 + m2)²/M²)(1 - (m1 - m2)²/M²)`; negative where the decay is forbidden.
pub fn phase_space_lambda(parent: f64, m1: f64, m2: f64) -> f64 {
    let sum = (m1 + m2) / parent;
    let difference = (m1 - m2) / parent;
    (1.0 - sum) * (1.0 + sum) * (1.0 - difference) * (1.0 + difference)
}

/// Momentum of either product in the rest system of the parent, in the unit of the masses; `None` where the decay is
/// forbidden.
///
/// `p* = M sqrt(lambda)/2` (Review of Particle Physics, Kinematics, two-body decays).
pub fn two_body_momentum(parent: f64, m1: f64, m2: f64) -> Option<f64> {
    let lambda = phase_space_lambda(parent, m1, m2);
    (parent > 0.0 && m1 + m2 <= parent && lambda >= 0.0).then(|| 0.5 * parent * lambda.sqrt())
}
