//! The relativistic Breit-Wigner with fixed width.

use super::pole_pair::Numerator;

super::pole_shape::pole_shape! {
    /// The relativistic Breit-Wigner with fixed width, a density per dm on m > 0: `k/((m² - M²)² + M² Γ²)`,
    /// `k = 2√2 M Γ γ/(π sqrt(M² + γ))`, `γ = sqrt(M² (M² + Γ²))`.
    ///
    /// It peaks at M. The mean is `(k/(MΓ)) [π/4 + arctan(M/Γ)/2]`, the mean of m² is γ; no third moment. Evaluated with
    /// `(m - M)(m + M)`, since `m² - M²` cancels. Cumulative: `-(k/(MΓ)) Im[atanh(m/a)/a]`, `a = sqrt(M² + iMΓ)`.
    Relativistic, Numerator::Constant
}
