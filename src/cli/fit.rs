//! `peakfold fit`: a line shape fitted to masses or to a histogram.

use std::io::Write;
use std::path::PathBuf;

use clap::{Args, ValueEnum};

use super::fit_text::{write_json, write_report};
use super::shape::{NaturalKind, ResolutionKind};
use super::{Failure, Outcome};
use crate::draw::{fit_figure, write_whole};
use crate::files::load_fit_data;
use crate::fit::{Background, FitOutcome, Model, Settings, Stop, fit, starting_shape};
use crate::lineshape::{BreitWigner, LineShape, Natural, Relativistic, Resolution, RunningWidth, Scaling, ShapeError};

/// Backgrounds.
#[derive(Clone, Copy, Debug, PartialEq, Eq, ValueEnum)]
pub enum BackgroundKind {
    /// Falls (or rises) exponentially; background_yield, background_slope in 1/GeV
    Exponential,
    /// Polynomial of the degree --degree, never negative; background_0 to background_DEGREE, events of each part
    Polynomial,
}

/// Fit a line shape, natural ⊗ resolution, to masses or to a histogram
///
/// FILE is CSV: masses in a column mass_gev, perhaps with a column weight (fitted without binning;
/// weights give the errors by the sandwich formula), or a histogram low_gev,high_gev,count, perhaps
/// with a column error (then by chi-square). Other columns are ignored. Lines that begin with # are
/// comments.
///
/// Free are the mass and the parameters of the resolution, with a background also the yields and its
/// own parameters. The natural width is fixed unless --free width, the power of a falling production
/// unless --free falloff_power. Parameters have the names that the output shows: mass, width,
/// falloff_power, bias, sigma, sigma_low, sigma_high, alpha_low, n_low, alpha_high,
/// n_high, k_low, k_high, signal_yield, background_yield, background_slope, background_0, ...
///
/// Exit status 3: the fit did not converge; what it reached is printed all the same.
#[derive(Args, Clone, Debug)]
#[command(verbatim_doc_comment)]
pub struct FitArgs {
    /// Masses or a histogram, CSV
    pub file: PathBuf,
    /// Distribution of the true mass
    #[arg(long, value_enum, default_value_t = NaturalKind::None)]
    pub natural: NaturalKind,
    /// Natural width (FWHM) in GeV; fixed unless --free width
    #[arg(long, allow_negative_numbers = true)]
    pub width: Option<f64>,
    /// Production falls as (m/M)^-POWER across the natural width, between M/2 and 2M; fixed unless --free falloff_power
    #[arg(long, value_name = "POWER", allow_negative_numbers = true)]
    pub falloff_power: Option<f64>,
    /// Distribution of measured minus true mass
    #[arg(long, value_enum, default_value_t = ResolutionKind::None)]
    pub resolution: ResolutionKind,
    /// Bias and sigma grow with the true mass; their values hold at the mass of the resonance
    #[arg(long)]
    pub proportional: bool,
    /// One sigma below the peak and one above it (double-crystal-ball)
    #[arg(long)]
    pub two_sigmas: bool,
    /// Exponential tails on both sides (gauss-exp)
    #[arg(long)]
    pub two_tails: bool,
    /// Lower end of the window in GeV
    #[arg(long, allow_negative_numbers = true)]
    pub from: Option<f64>,
    /// Upper end of the window in GeV
    #[arg(long, allow_negative_numbers = true)]
    pub to: Option<f64>,
    /// Background; needs --from and --to
    #[arg(long, value_enum)]
    pub background: Option<BackgroundKind>,
    /// Degree of the polynomial background
    #[arg(long, default_value_t = 1)]
    pub degree: usize,
    /// Free a parameter that is fixed otherwise: width, bias, falloff_power
    #[arg(long, value_name = "NAME", value_delimiter = ',')]
    pub free: Vec<String>,
    /// Hold a parameter at a value
    #[arg(long, value_name = "NAME=VALUE", value_delimiter = ',', value_parser = name_and_value)]
    pub fix: Vec<(String, f64)>,
    /// Keep a parameter between two values
    #[arg(long, value_name = "NAME=LOW:HIGH", value_delimiter = ',', value_parser = name_and_bounds)]
    pub bound: Vec<(String, f64, f64)>,
    /// Start a parameter at a value
    #[arg(long, value_name = "NAME=VALUE", value_delimiter = ',', value_parser = name_and_value)]
    pub start: Vec<(String, f64)>,
    /// Print JSON
    #[arg(long)]
    pub json: bool,
    /// Draw data, fit and pulls into an SVG file; an existing file is replaced
    #[arg(long, value_name = "FILE.svg")]
    pub plot: Option<PathBuf>,
}

fn number(text: &str) -> Result<f64, String> {
    match text.trim().parse::<f64>() {
        Ok(value) if value.is_finite() => Ok(value),
        _ => Err(format!("{text:?} is not a finite number")),
    }
}

fn name_and_value(text: &str) -> Result<(String, f64), String> {
    let (name, value) = text.split_once('=').ok_or("must be NAME=VALUE")?;
    Ok((name.trim().to_owned(), number(value)?))
}

fn name_and_bounds(text: &str) -> Result<(String, f64, f64), String> {
    let shape = "must be NAME=LOW:HIGH";
    let (name, bounds) = text.split_once('=').ok_or(shape)?;
    let (low, high) = bounds.split_once(':').ok_or(shape)?;
    Ok((name.trim().to_owned(), number(low)?, number(high)?))
}

/// Where tails start to be looked for; the fit finds its way from here for any common shape.
const TAIL: (f64, f64) = (1.5, 5.0);
/// The same for exponential tails.
const SLOPE: f64 = 1.2;

impl FitArgs {
    fn usage(&self) -> Result<(), Failure> {
        let has_width = self.natural != NaturalKind::None;
        let wrong = |text: &str| Err(Failure::Usage(text.to_owned()));
        match () {
            () if has_width && self.width.is_none() => wrong("a natural shape needs --width"),
            () if !has_width && self.width.is_some() => {
                wrong("--width has no meaning with --natural none; leave it out or choose a natural shape")
            }
            () if self.natural == NaturalKind::None && self.resolution == ResolutionKind::None => {
                wrong("--natural and --resolution are both none; choose at least one shape")
            }
            () if self.falloff_power.is_some() && !has_width => {
                wrong("--falloff-power has no meaning with --natural none; leave it out or choose a natural shape")
            }
            () if self.falloff_power.is_none() && self.free.iter().any(|name| name == "falloff_power") => {
                wrong("--free falloff_power needs --falloff-power, the power to start from")
            }
            () if self.proportional && self.resolution == ResolutionKind::None => {
                wrong("--proportional has no meaning with --resolution none; leave it out or choose a resolution")
            }
            () if self.two_sigmas && self.resolution != ResolutionKind::DoubleCrystalBall => {
                wrong("--two-sigmas needs --resolution double-crystal-ball")
            }
            () if self.two_tails && self.resolution != ResolutionKind::GaussExp => {
                wrong("--two-tails needs --resolution gauss-exp")
            }
            () if self.background.is_some() && (self.from.is_none() || self.to.is_none()) => {
                wrong("--background needs a window; give --from and --to")
            }
            () if self.from.zip(self.to).is_some_and(|(from, to)| !(from < to)) => wrong("--from must be below --to"),
            () if [self.from, self.to].iter().flatten().any(|edge| !edge.is_finite()) => {
                wrong("--from and --to must be finite numbers")
            }
            () => Ok(()),
        }
    }

    /// The line shape before the data are looked at.
    fn line_shape(&self) -> Result<LineShape, ShapeError> {
        let width = self.width.unwrap_or(f64::NAN);
        let natural = match self.natural {
            NaturalKind::None => Natural::line(1.0)?,
            NaturalKind::BreitWigner => Natural::BreitWigner(BreitWigner::new(1.0, width)?),
            NaturalKind::Relativistic => Natural::Relativistic(Relativistic::new(1.0, width)?),
            NaturalKind::RunningWidth => Natural::RunningWidth(RunningWidth::new(1.0, width)?),
        };
        let resolution = match self.resolution {
            ResolutionKind::None => None,
            ResolutionKind::Gaussian => Some(Resolution::gaussian(0.0, 1.0)?),
            ResolutionKind::CrystalBall => Some(Resolution::crystal_ball(0.0, 1.0, TAIL.0, TAIL.1)?),
            ResolutionKind::DoubleCrystalBall if self.two_sigmas => {
                Some(Resolution::double_crystal_ball_two_sigmas(0.0, (1.0, 1.0), TAIL, TAIL)?)
            }
            ResolutionKind::DoubleCrystalBall => Some(Resolution::double_crystal_ball(0.0, 1.0, TAIL, TAIL)?),
            ResolutionKind::GaussExp if self.two_tails => Some(Resolution::double_gauss_exp(0.0, 1.0, SLOPE, SLOPE)?),
            ResolutionKind::GaussExp => Some(Resolution::gauss_exp(0.0, 1.0, SLOPE)?),
        };
        let scaling = if self.proportional { Scaling::Proportional } else { Scaling::Constant };
        // 0 is no falloff at all, unless it is to be fitted.
        let freed = self.free.iter().any(|name| name == "falloff_power");
        let falloff = self.falloff_power.filter(|power| *power != 0.0 || freed);
        LineShape::with_options(natural, resolution.map(Into::into), scaling, falloff)
    }

    fn background(&self) -> Option<Background> {
        self.background.map(|kind| match kind {
            BackgroundKind::Exponential => Background::Exponential,
            BackgroundKind::Polynomial => Background::Polynomial(self.degree),
        })
    }

    fn fitted(&self) -> Result<FitOutcome, Failure> {
        self.usage()?;
        let line = self.line_shape()?;
        let data = load_fit_data(&self.file)?;
        let settings = Settings {
            fixed: self.fix.clone(),
            bounds: self.bound.clone(),
            starts: self.start.clone(),
            freed: self.free.clone(),
        };
        let window = (self.from.unwrap_or(f64::NEG_INFINITY), self.to.unwrap_or(f64::INFINITY));
        let input = |error: String| Failure::Input(format!("{}: {error}", self.file.display()));
        let line = starting_shape(&line, &data, window, &settings);
        let model = Model::new(line, self.background(), window).map_err(|error| Failure::Usage(error.to_string()))?;
        fit(&data, &model, &settings).map_err(|error| input(error.to_string()))
    }
}

/// Runs the command; results go to `out`.
///
/// # Errors
/// Input that cannot be fitted, options that do not go together, a fit that does not converge (after its best point was
/// printed), a file or stream that cannot be written.
pub fn run(args: &FitArgs, out: &mut impl Write) -> Outcome {
    let outcome = args.fitted()?;
    if let Some(file) = &args.plot {
        let title = args.file.file_name().map_or_else(String::new, |name| name.to_string_lossy().into_owned());
        let svg = fit_figure(&title, &outcome).map_err(|error| Failure::Input(error.to_string()))?;
        write_whole(file, &svg).map_err(|error| Failure::Input(format!("{}: {error}", file.display())))?;
    }
    let written = if args.json { write_json(out, &outcome) } else { write_report(out, &outcome) };
    written.map_err(Failure::Output)?;
    for warning in &outcome.warnings {
        super::outcome::say(&format!("warning: {warning}"));
    }
    let why = match outcome.stop {
        Stop::Converged => return Ok(()),
        Stop::TooManySteps => format!("it had not reached the minimum after {} steps", outcome.iterations),
        Stop::Stuck => "no step led lower although the minimum is not reached".to_owned(),
    };
    Err(Failure::Numerical(format!(
        "the fit did not converge: {why} (estimated distance in -ln L: {:.2e}, must be below 1e-6); the printed values \
         are the best point met, not the best fit, and have no errors; start nearer (--start NAME=VALUE) or \
         fix what the data do not tell (--fix NAME=VALUE)",
        outcome.distance
    )))
}
