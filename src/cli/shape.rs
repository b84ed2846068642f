//! `peakfold shape`: a calculator of line shapes.

use std::io::Write;
use std::path::PathBuf;

use clap::{Args, ValueEnum};

use super::{Failure, Outcome};
use crate::draw::{shape_figure, write_whole};
use crate::lineshape::widths::{
    FWHM_PER_SIGMA, ONE_SIGMA, central_interval, full_width_at_half_maximum, narrowest_interval, peak,
};
use crate::lineshape::{
    BreitWigner, LineShape, Mixture, Natural, Relativistic, Resolution, RunningWidth, Scaling, Shape, ShapeError,
};

/// Natural shapes.
#[derive(Clone, Copy, Debug, PartialEq, Eq, ValueEnum)]
pub enum NaturalKind {
    /// A line of no width
    None,
    /// Non-relativistic, any real mass
    BreitWigner,
    /// Relativistic with fixed width, mass above 0
    Relativistic,
    /// Relativistic with a width that runs with the mass squared
    RunningWidth,
}

/// Resolution shapes.
#[derive(Clone, Copy, Debug, PartialEq, Eq, ValueEnum)]
pub enum ResolutionKind {
    /// Perfect
    None,
    /// Gaussian
    Gaussian,
    /// Gaussian core, power tail on the low side
    CrystalBall,
    /// Gaussian core, power tails on both sides
    DoubleCrystalBall,
    /// Gaussian core, exponential tail on the low side, and on the high side with --k-high
    GaussExp,
}

/// A line shape, natural ⊗ resolution, as CSV `m_gev,pdf,cdf` with 17 digits
///
/// Masses and widths are in GeV, densities in 1/GeV.
#[derive(Args, Clone, Debug)]
pub struct ShapeArgs {
    /// Distribution of the true mass
    #[arg(long, value_enum, default_value_t = NaturalKind::None)]
    pub natural: NaturalKind,
    /// Mass of the resonance in GeV
    #[arg(long, allow_negative_numbers = true)]
    pub mass: f64,
    /// Natural width (FWHM) in GeV
    #[arg(long, allow_negative_numbers = true)]
    pub width: Option<f64>,
    /// Production falls as (m/M)^-POWER across the natural width, between M/2 and 2M
    #[arg(long, value_name = "POWER", default_value_t = 0.0, allow_negative_numbers = true)]
    pub falloff_power: f64,
    /// Distribution of measured minus true mass
    #[arg(long, value_enum, default_value_t = ResolutionKind::None)]
    pub resolution: ResolutionKind,
    /// Bias and sigma grow with the true mass; their values hold at the mass of the resonance
    #[arg(long)]
    pub proportional: bool,
    /// Position of the peak of the resolution in GeV
    #[arg(long, default_value_t = 0.0, allow_negative_numbers = true)]
    pub bias: f64,
    /// Standard deviation of the Gaussian core in GeV
    #[arg(long, conflicts_with_all = ["sigma_low", "sigma_high"], allow_negative_numbers = true)]
    pub sigma: Option<f64>,
    /// The same below the peak
    #[arg(long, requires = "sigma_high", allow_negative_numbers = true)]
    pub sigma_low: Option<f64>,
    /// The same above the peak
    #[arg(long, requires = "sigma_low", allow_negative_numbers = true)]
    pub sigma_high: Option<f64>,
    /// Where the low power tail begins, in sigma
    #[arg(long, allow_negative_numbers = true)]
    pub alpha_low: Option<f64>,
    /// Power of the low tail
    #[arg(long, allow_negative_numbers = true)]
    pub n_low: Option<f64>,
    /// Where the high power tail begins, in sigma
    #[arg(long, allow_negative_numbers = true)]
    pub alpha_high: Option<f64>,
    /// Power of the high tail
    #[arg(long, allow_negative_numbers = true)]
    pub n_high: Option<f64>,
    /// Where the low exponential tail begins, in sigma
    #[arg(long, allow_negative_numbers = true)]
    pub k_low: Option<f64>,
    /// Where the high exponential tail begins, in sigma
    #[arg(long, allow_negative_numbers = true)]
    pub k_high: Option<f64>,
    /// Masses in GeV, separated by commas
    #[arg(long, value_delimiter = ',', value_name = "MASSES", allow_hyphen_values = true, conflicts_with_all = ["from", "to", "points"])]
    pub at: Vec<f64>,
    /// First mass in GeV
    #[arg(long, requires = "to", allow_negative_numbers = true)]
    pub from: Option<f64>,
    /// Last mass in GeV
    #[arg(long, requires = "from", allow_negative_numbers = true)]
    pub to: Option<f64>,
    /// Number of masses from the first to the last
    #[arg(long, requires = "from", default_value_t = 101)]
    pub points: usize,
    /// Print a table of the widths
    #[arg(long)]
    pub widths: bool,
    /// Draw the shape into an SVG file; an existing file is replaced
    #[arg(long, value_name = "FILE.svg")]
    pub plot: Option<PathBuf>,
}

/// The most points of one call.
const MAX_POINTS: usize = 10_000_000;

impl ShapeArgs {
    /// The line shape that the options describe.
    ///
    /// # Errors
    /// Options that are missing or do not belong to the chosen shapes; values outside their domains.
    pub fn line_shape(&self) -> Result<LineShape, Failure> {
        self.check_options()?;
        let natural = self.natural_shape()?;
        let scaling = if self.proportional { Scaling::Proportional } else { Scaling::Constant };
        // 0, as in a study, is no falloff at all.
        let falloff = (self.falloff_power != 0.0).then_some(self.falloff_power);
        let resolution = self.resolution_shape()?.map(Mixture::from);
        LineShape::with_options(natural, resolution, scaling, falloff).map_err(|error| match error {
            ShapeError::Perfect => Failure::Usage(format!("{error}: --natural and --resolution are both none")),
            other => other.into(),
        })
    }

    fn natural_shape(&self) -> Result<Natural, Failure> {
        let width = || need(self.width, "--width", &name(self.natural));
        Ok(match self.natural {
            NaturalKind::None => Natural::line(self.mass)?,
            NaturalKind::BreitWigner => Natural::BreitWigner(BreitWigner::new(self.mass, width()?)?),
            NaturalKind::Relativistic => Natural::Relativistic(Relativistic::new(self.mass, width()?)?),
            NaturalKind::RunningWidth => Natural::RunningWidth(RunningWidth::new(self.mass, width()?)?),
        })
    }

    fn resolution_shape(&self) -> Result<Option<Resolution>, Failure> {
        let kind = name(self.resolution);
        let sigma = || need(self.sigma, "--sigma", &kind);
        let low =
            || Ok::<_, Failure>((need(self.alpha_low, "--alpha-low", &kind)?, need(self.n_low, "--n-low", &kind)?));
        let high =
            || Ok::<_, Failure>((need(self.alpha_high, "--alpha-high", &kind)?, need(self.n_high, "--n-high", &kind)?));
        let bias = self.bias;
        Ok(Some(match self.resolution {
            ResolutionKind::None => return Ok(None),
            ResolutionKind::Gaussian => Resolution::gaussian(bias, sigma()?)?,
            ResolutionKind::CrystalBall => {
                let (alpha, n) = low()?;
                Resolution::crystal_ball(bias, sigma()?, alpha, n)?
            }
            ResolutionKind::DoubleCrystalBall => match (self.sigma_low, self.sigma_high) {
                (Some(below), Some(above)) => {
                    Resolution::double_crystal_ball_two_sigmas(bias, (below, above), low()?, high()?)?
                }
                _ => Resolution::double_crystal_ball(bias, sigma()?, low()?, high()?)?,
            },
            ResolutionKind::GaussExp => {
                let k_low = need(self.k_low, "--k-low", &kind)?;
                match self.k_high {
                    Some(k_high) => Resolution::double_gauss_exp(bias, sigma()?, k_low, k_high)?,
                    None => Resolution::gauss_exp(bias, sigma()?, k_low)?,
                }
            }
        }))
    }

    /// Options that the chosen shapes do not have.
    fn check_options(&self) -> Result<(), Failure> {
        use ResolutionKind::{CrystalBall, DoubleCrystalBall, GaussExp};
        let is = |kinds: &[ResolutionKind]| kinds.contains(&self.resolution);
        let resolution = format!("--resolution {}", name(self.resolution));
        let natural = format!("--natural {}", name(self.natural));
        let has_width = self.natural != NaturalKind::None;
        let blurred = self.resolution != ResolutionKind::None;
        let power = [CrystalBall, DoubleCrystalBall];
        let checks = [
            (self.width.is_some(), has_width, "--width", &natural),
            (self.falloff_power != 0.0, has_width, "--falloff-power", &natural),
            (self.bias != 0.0, blurred, "--bias", &resolution),
            (self.proportional, blurred, "--proportional", &resolution),
            (self.sigma.is_some(), blurred, "--sigma", &resolution),
            (self.sigma_low.is_some(), is(&[DoubleCrystalBall]), "--sigma-low", &resolution),
            (self.alpha_low.is_some(), is(&power), "--alpha-low", &resolution),
            (self.n_low.is_some(), is(&power), "--n-low", &resolution),
            (self.alpha_high.is_some(), is(&[DoubleCrystalBall]), "--alpha-high", &resolution),
            (self.n_high.is_some(), is(&[DoubleCrystalBall]), "--n-high", &resolution),
            (self.k_low.is_some(), is(&[GaussExp]), "--k-low", &resolution),
            (self.k_high.is_some(), is(&[GaussExp]), "--k-high", &resolution),
        ];
        for (given, allowed, option, with) in checks {
            if given && !allowed {
                return Err(Failure::Usage(format!("{option} has no meaning with {with}; leave it out")));
            }
        }
        if self.at.is_empty() && self.from.is_none() && !self.widths && self.plot.is_none() {
            return Err(Failure::Usage(
                "nothing is asked for; give --at MASSES, or --from and --to, or --widths, or --plot FILE.svg"
                    .to_owned(),
            ));
        }
        Ok(())
    }

    /// The masses to evaluate, in the order asked for.
    fn masses(&self) -> Result<Vec<f64>, Failure> {
        if let Some(bad) = self.at.iter().chain(&self.from).chain(&self.to).find(|m| !m.is_finite()) {
            return Err(Failure::Input(format!("a mass is {bad}; masses must be finite numbers")));
        }
        let (Some(from), Some(to)) = (self.from, self.to) else { return Ok(self.at.clone()) };
        if from >= to {
            return Err(Failure::Input(format!("--from is {from} and --to is {to}; --from must be below --to")));
        }
        if !(2..=MAX_POINTS).contains(&self.points) {
            return Err(Failure::Input(format!("--points is {}; it must be from 2 to {MAX_POINTS}", self.points)));
        }
        let last = (self.points - 1) as f64;
        Ok((0..self.points).map(|i| from + (to - from) * (i as f64 / last)).collect())
    }
}

impl From<ShapeError> for Failure {
    fn from(error: ShapeError) -> Self {
        Failure::Input(as_option(&error))
    }
}

/// The message with the option in place of the parameter that it begins with.
fn as_option(error: &ShapeError) -> String {
    let message = error.to_string();
    match message.split_once(' ') {
        Some((parameter, rest)) => format!("--{} {rest}", parameter.replace('_', "-")),
        None => message,
    }
}

fn name(kind: impl ValueEnum) -> String {
    kind.to_possible_value().map_or_else(String::new, |value| value.get_name().to_owned())
}

fn need(value: Option<f64>, option: &str, kind: &str) -> Result<f64, Failure> {
    value.ok_or_else(|| Failure::Usage(format!("{kind} needs {option}")))
}

/// Runs the command; results go to `out`.
///
/// # Errors
/// See [`Failure`].
pub fn run(args: &ShapeArgs, out: &mut impl Write) -> Outcome {
    let shape = args.line_shape()?;
    let masses = args.masses()?;
    if let Some(file) = &args.plot {
        let svg = shape_figure(&shape, args.from.zip(args.to)).map_err(|error| Failure::Input(error.to_string()))?;
        write_whole(file, &svg).map_err(|error| Failure::Input(format!("{}: {error}", file.display())))?;
    }
    write_results(&shape, &masses, args.widths, out).map_err(Failure::Output)
}

fn write_results(shape: &LineShape, masses: &[f64], widths: bool, out: &mut impl Write) -> std::io::Result<()> {
    if !masses.is_empty() {
        writeln!(out, "m_gev,pdf,cdf")?;
        for &m in masses {
            writeln!(out, "{m:.16e},{:.16e},{:.16e}", shape.pdf(m), shape.cdf(m))?;
        }
    }
    if widths {
        if !masses.is_empty() {
            writeln!(out)?;
        }
        write!(out, "{}", width_table(shape))?;
    }
    out.flush()
}

/// The widths, one a line, in GeV.
fn width_table(shape: &LineShape) -> String {
    let fwhm = full_width_at_half_maximum(shape).map(|interval| interval.width());
    let narrowest = narrowest_interval(shape, ONE_SIGMA);
    let central = central_interval(shape, ONE_SIGMA).map(|interval| interval.half_width());
    let rows = [
        ("peak", peak(shape)),
        ("mean", shape.mean()),
        ("standard deviation", shape.variance().map(f64::sqrt)),
        ("FWHM", fwhm),
        ("FWHM / 2.35482", fwhm.map(|width| width / FWHM_PER_SIGMA)),
        ("sigma_eff (half the narrowest 68.27 %)", narrowest.map(|interval| interval.half_width())),
        ("  from", narrowest.map(|interval| interval.low_gev)),
        ("  to", narrowest.map(|interval| interval.high_gev)),
        ("half the central 68.27 %", central),
    ];
    let mut table = format!("{:<40}{:>16}\n", "width", "GeV");
    for (label, value) in rows {
        // Nine digits are what the search for the peak and the narrowest interval gives.
        let value = value.map_or_else(|| "undefined".to_owned(), |value| format!("{value:.7}"));
        table.push_str(&format!("{label:<40}{value:>16}\n"));
    }
    table
}
