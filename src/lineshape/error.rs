//! Parameters of a shape, their domains, and what can be wrong with them.

use std::fmt;

/// Where a parameter may lie: a finite number strictly between two bounds, of which a closed one may be reached.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Domain {
    /// Lower bound; minus infinity where there is none.
    pub low: f64,
    /// Upper bound; infinity where there is none.
    pub high: f64,
    /// Whether the bounds themselves belong to the domain.
    pub closed: bool,
}

impl Domain {
    /// Any finite number.
    pub const REAL: Domain = Domain { low: f64::NEG_INFINITY, high: f64::INFINITY, closed: false };
    /// Finite and above 0.
    pub const POSITIVE: Domain = Domain { low: 0.0, high: f64::INFINITY, closed: false };
    /// Finite and above 1.
    pub const ABOVE_ONE: Domain = Domain { low: 1.0, high: f64::INFINITY, closed: false };
    /// 0 to 1.
    pub const FRACTION: Domain = Domain { low: 0.0, high: 1.0, closed: true };

    /// Whether the value lies in the domain.
    pub fn contains(&self, value: f64) -> bool {
        value.is_finite()
            && (value > self.low || (self.closed && value == self.low))
            && (value < self.high || (self.closed && value == self.high))
    }
}

impl fmt::Display for Domain {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match (self.low.is_finite(), self.high.is_finite(), self.closed) {
            (false, false, _) => write!(f, "a finite number"),
            (true, false, false) => write!(f, "a finite number above {}", self.low),
            (true, false, true) => write!(f, "a finite number of at least {}", self.low),
            (false, true, _) => write!(f, "a finite number up to {}", self.high),
            (true, true, false) => write!(f, "between {} and {}, both excluded", self.low, self.high),
            (true, true, true) => write!(f, "from {} to {}", self.low, self.high),
        }
    }
}

/// One parameter of a shape.
#[derive(Clone, Debug, PartialEq)]
pub struct Parameter {
    /// Stable name, as the command line and every machine file use it.
    pub name: String,
    /// Value.
    pub value: f64,
    /// Where it may lie.
    pub domain: Domain,
}

impl Parameter {
    pub(crate) fn new(name: &str, value: f64, domain: Domain) -> Self {
        Parameter { name: name.to_owned(), value, domain }
    }
}

macro_rules! parameter_errors {
    ($($variant:ident, $check:ident, $name:literal, $domain:expr;)*) => {
        /// Why a shape cannot be made: one variant per parameter, holding the value that was given.
        #[derive(Clone, Debug, PartialEq, thiserror::Error)]
        pub enum ShapeError {
            $(
                #[doc = concat!("`", $name, "` lies outside its domain.")]
                #[error("{name} is {0}; it must be {domain}", name = $name, domain = $domain)]
                $variant(f64),
            )*
            /// A wrong number of parameter values.
            #[error("the shape has {expected} parameters, but {found} values were given")]
            Count {
                /// How many the shape has.
                expected: usize,
                /// How many were given.
                found: usize,
            },
            /// The fractions of a sum exceed 1.
            #[error("the fractions of the sum add to {0}; all but the last component together must not exceed 1")]
            FractionSum(f64),
            /// A sum without components, or with a wrong number of fractions.
            #[error("a sum of {components} shapes needs {} fractions, but {fractions} were given", components.saturating_sub(1))]
            Components {
                /// Number of shapes.
                components: usize,
                /// Number of fractions.
                fractions: usize,
            },
            /// A line without resolution.
            #[error("a line with a perfect resolution has no density; give a width or a resolution")]
            Perfect,
            /// The normalisation integral of a shape did not give a positive finite number.
            #[error("the shape cannot be normalised: its integral is {0}")]
            Normalisation(f64),
        }

        $(
            pub(crate) fn $check(value: f64) -> Result<f64, ShapeError> {
                if $domain.contains(value) { Ok(value) } else { Err(ShapeError::$variant(value)) }
            }
        )*
    };
}

parameter_errors! {
    Mass, check_mass, "mass", Domain::REAL;
    PositiveMass, check_positive_mass, "mass", Domain::POSITIVE;
    Width, check_width, "width", Domain::POSITIVE;
    FalloffPower, check_falloff_power, "falloff_power", FALLOFF;
    Bias, check_bias, "bias", Domain::REAL;
    Sigma, check_sigma, "sigma", Domain::POSITIVE;
    SigmaLow, check_sigma_low, "sigma_low", Domain::POSITIVE;
    SigmaHigh, check_sigma_high, "sigma_high", Domain::POSITIVE;
    AlphaLow, check_alpha_low, "alpha_low", Domain::POSITIVE;
    NLow, check_n_low, "n_low", Domain::ABOVE_ONE;
    AlphaHigh, check_alpha_high, "alpha_high", Domain::POSITIVE;
    NHigh, check_n_high, "n_high", Domain::ABOVE_ONE;
    KLow, check_k_low, "k_low", Domain::POSITIVE;
    KHigh, check_k_high, "k_high", Domain::POSITIVE;
    Fraction, check_fraction, "fraction", Domain::FRACTION;
}

/// Domain of the power of the production falloff.
pub(crate) const FALLOFF: Domain = Domain { low: 0.0, high: 100.0, closed: true };

/// Checks the number of values before they are taken apart.
pub(crate) fn check_count(expected: usize, values: &[f64]) -> Result<(), ShapeError> {
    if values.len() == expected { Ok(()) } else { Err(ShapeError::Count { expected, found: values.len() }) }
}
