//! What the two shapes with one pair of poles have in common: all but their formulas, which [`super::pole_pair`] holds.

/// Defines a natural shape of the given numerator on m > 0.
macro_rules! pole_shape {
    ($(#[$meta:meta])* $name:ident, $numerator:expr) => {
        $(#[$meta])*
        #[derive(Clone, Copy, Debug, PartialEq)]
        pub struct $name {
            pub(super) poles: $crate::lineshape::pole_pair::PolePair,
        }

        impl $name {
            /// A resonance of mass and width in GeV.
            ///
            /// # Errors
            /// A mass or a width that is not finite and positive.
            pub fn new(mass: f64, width: f64) -> Result<Self, $crate::lineshape::ShapeError> {
                let (mass, width) = ($crate::lineshape::error::check_positive_mass(mass)?, $crate::lineshape::error::check_width(width)?);
                Ok($name { poles: $crate::lineshape::pole_pair::PolePair::new($numerator, mass, width) })
            }

            /// Mass in GeV.
            pub fn mass(&self) -> f64 {
                self.poles.mass
            }

            /// Width in GeV.
            pub fn width(&self) -> f64 {
                self.poles.width
            }
        }

        impl $crate::lineshape::Shape for $name {
            fn parameters(&self) -> Vec<$crate::lineshape::Parameter> {
                vec![
                    $crate::lineshape::Parameter::new("mass", self.poles.mass, $crate::lineshape::Domain::POSITIVE),
                    $crate::lineshape::Parameter::new("width", self.poles.width, $crate::lineshape::Domain::POSITIVE),
                ]
            }

            fn with_values(&self, values: &[f64]) -> Result<Box<dyn $crate::lineshape::Shape>, $crate::lineshape::ShapeError> {
                $crate::lineshape::error::check_count(2, values)?;
                Ok(Box::new($name::new(values[0], values[1])?))
            }

            fn pdf(&self, m: f64) -> f64 {
                self.poles.pdf(m)
            }

            fn ln_pdf(&self, m: f64) -> f64 {
                self.poles.ln_pdf(m)
            }

            fn cdf(&self, m: f64) -> f64 {
                self.poles.cdf(m)
            }

            fn sf(&self, m: f64) -> f64 {
                self.poles.sf(m)
            }

            fn quantile(&self, p: f64) -> f64 {
                match p {
                    0.0 => 0.0,
                    1.0 => f64::INFINITY,
                    _ if p > 0.0 && p < 1.0 => self.poles.quantile(p, false),
                    _ => f64::NAN,
                }
            }

            fn upper_quantile(&self, q: f64) -> f64 {
                match q {
                    0.0 => f64::INFINITY,
                    1.0 => 0.0,
                    _ if q > 0.0 && q < 1.0 => self.poles.quantile(q, true),
                    _ => f64::NAN,
                }
            }

            fn peak_guess(&self) -> f64 {
                self.poles.peak()
            }

            fn mean(&self) -> Option<f64> {
                self.poles.mean()
            }

            fn variance(&self) -> Option<f64> {
                self.poles.variance()
            }

            fn ln_pdf_gradient(&self, m: f64, gradient: &mut [f64]) -> f64 {
                let [_, mass, width] = if m > 0.0 { self.poles.ln_pdf_gradient(m) } else { [0.0; 3] };
                for (slot, value) in gradient.iter_mut().zip([mass, width]) {
                    *slot = value;
                }
                self.ln_pdf(m)
            }

            fn cdf_gradient(&self, m: f64, gradient: &mut [f64]) {
                let (mass, width) = self.poles.cdf_gradient(m);
                for (slot, value) in gradient.iter_mut().zip([mass, width]) {
                    *slot = value;
                }
            }

            fn pdf_slice(&self, m: &[f64], out: &mut [f64]) {
                self.poles.pdf_slice(m, out);
            }
        }
    };
}

pub(super) use pole_shape;
