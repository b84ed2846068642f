//! Choice of the vector width at run time.

/// Defines a function whose body is compiled for the baseline processor and, on x86-64, for AVX2 as well; each call
/// takes the widest version that the processor has. Both round alike: AVX2 here excludes fused multiply-add.
#[macro_export]
macro_rules! wide {
    ($(#[$meta:meta])* $vis:vis fn $name:ident($($arg:ident: $ty:ty),* $(,)?) $(-> $ret:ty)? $body:block) => {
        $(#[$meta])*
        $vis fn $name($($arg: $ty),*) $(-> $ret)? {
            #[inline(always)]
            #[allow(clippy::too_many_arguments)]
            fn body($($arg: $ty),*) $(-> $ret)? $body
            #[cfg(target_arch = "x86_64")]
            {
                #[target_feature(enable = "avx2")]
                #[allow(clippy::too_many_arguments)]
                fn avx2($($arg: $ty),*) $(-> $ret)? {
                    body($($arg),*)
                }
                if $crate::numerics::has_avx2() {
                    // SAFETY: the processor was asked and has AVX2.
                    return unsafe { avx2($($arg),*) };
                }
            }
            body($($arg),*)
        }
    };
}
