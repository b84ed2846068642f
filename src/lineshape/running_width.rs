//! The relativistic Breit-Wigner with a width that runs with the mass squared.

use super::pole_pair::Numerator;

super::pole_shape::pole_shape! {
    /// The running-width Breit-Wigner, a density per dm on m > 0: proportional to `m²/((m² - M²)² + m⁴ Γ²/M²)`.
    ///
    /// It has the poles of the fixed-width shape with `M/sqrt(1 + Γ²/M²)` and `Γ/sqrt(1 + Γ²/M²)` (A. Bohm and N. Harshman,
    /// Nucl. Phys. B 581 (2000) 91), and peaks at `M (1 + Γ²/M²)^(-1/4)`. No mean exists. Cumulative:
    /// `-(2/(π Re a)) Im[a atanh(m/a)]`, `a² = M²/(1 - iΓ/M)`.
    RunningWidth, Numerator::MassSquared
}
