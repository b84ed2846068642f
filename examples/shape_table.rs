//! Two line shapes as a table: what a detector with power-law tails, and one with a Gaussian response of the same core,
//! make of a Breit-Wigner line.
//!
//! `cargo run --release --example shape_table`

use peakfold::lineshape::widths::{ONE_SIGMA, full_width_at_half_maximum, narrowest_interval};
use peakfold::lineshape::{BreitWigner, LineShape, Mixture, Natural, Resolution, Shape, ShapeError};

fn main() -> Result<(), ShapeError> {
    // Mass, natural width (FWHM) and width of the resolution's core, all in GeV.
    let (mass, width, sigma) = (250.0, 2.0, 1.5);
    let natural = || BreitWigner::new(mass, width).map(Natural::BreitWigner);

    // A resolution is the distribution of measured minus true mass: here with its peak at 0, and tails that begin at
    // alpha sigma and fall with the power n.
    let gaussian = Resolution::gaussian(0.0, sigma)?;
    let tailed = Resolution::double_crystal_ball(0.0, sigma, (1.4, 4.0), (1.8, 8.0))?;

    // Breit-Wigner with Gaussian is a Voigt profile, which has a closed form; the other is a convolution. Both are
    // asked in the same way.
    let voigt = LineShape::new(natural()?, Some(Mixture::from(gaussian)))?;
    let tailed = LineShape::new(natural()?, Some(Mixture::from(tailed)))?;

    println!("mass [GeV]   Voigt [1/GeV]   with tails [1/GeV]");
    let masses: Vec<f64> = (0..=12).map(|i| 238.0 + 2.0 * f64::from(i)).collect();
    // Slices are the fast path: one call for many masses.
    let (mut left, mut right) = (vec![0.0; masses.len()], vec![0.0; masses.len()]);
    voigt.pdf_slice(&masses, &mut left);
    tailed.pdf_slice(&masses, &mut right);
    for ((m, a), b) in masses.iter().zip(&left).zip(&right) {
        println!("{m:10.1}   {a:13.6e}   {b:18.6e}");
    }

    for (name, shape) in [("Voigt", &voigt), ("with tails", &tailed)] {
        // A width is `None` where the shape has none.
        let (Some(fwhm), Some(narrowest)) = (full_width_at_half_maximum(shape), narrowest_interval(shape, ONE_SIGMA))
        else {
            println!("{name}: no width");
            continue;
        };
        println!("{name}: FWHM {:.4} GeV, sigma_eff {:.4} GeV", fwhm.width(), narrowest.half_width());
    }
    Ok(())
}
