//! One bin of a Poisson likelihood.

/// What one bin adds: `μ - n + n ln(n/μ)`, its derivative in μ, and the expectation of the second derivative.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Term {
    pub value: f64,
    pub slope: f64,
    pub curvature: f64,
}

/// The term of a bin with `found` events (negative ones, of weighted lists, count as they are) and `mu` expected;
/// `None` where events were found and none is expected.
pub(super) fn poisson(found: f64, mu: f64) -> Option<Term> {
    if !(mu > 0.0) {
        // Nothing expected: impossible if something was found, and no information if not.
        return if found > 0.0 { None } else { Some(Term { value: 0.0, slope: 1.0, curvature: 0.0 }) };
    }
    let mut value = mu - found;
    if found != 0.0 {
        value += found * libm::log(found.abs() / mu);
    }
    Some(Term { value, slope: 1.0 - found / mu, curvature: 1.0 / mu })
}
