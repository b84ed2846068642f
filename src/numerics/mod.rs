//! Numerical ground: vector kernels, special functions, low-discrepancy points.
//!
//! # How the vector kernels work
//!
//! A kernel is a branch-free `#[inline(always)]` function of one `f64`. Called in a plain loop inside a function made by
//! [`wide!`](crate::wide), it is compiled twice, for the baseline processor and for AVX2, and the version is chosen at
//! run time. No kernel uses a fused multiply-add, so both versions round alike and give the same bytes.

#[macro_use]
mod dispatch;

pub mod erfc;
pub mod faddeeva;
pub mod kernel;
pub mod normal;
pub mod quadrature;
pub mod root;
pub mod sobol;

use std::sync::OnceLock;

/// Whether the kernels run their AVX2 versions.
///
/// The environment variable `PEAKFOLD_VECTORS=narrow` forbids them; results are the same bytes either way.
pub fn has_avx2() -> bool {
    static WIDE: OnceLock<bool> = OnceLock::new();
    *WIDE.get_or_init(|| {
        let narrow = std::env::var_os("PEAKFOLD_VECTORS").is_some_and(|value| value == "narrow");
        !narrow && processor_has_avx2()
    })
}

#[cfg(target_arch = "x86_64")]
fn processor_has_avx2() -> bool {
    std::is_x86_feature_detected!("avx2")
}

#[cfg(not(target_arch = "x86_64"))]
fn processor_has_avx2() -> bool {
    false
}
