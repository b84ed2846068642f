//! Line shapes against tables made in extended precision (each table's header says how).
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use peakfold::lineshape::{BreitWigner, LineShape, Natural, Relativistic, Resolution, Shape};

fn rows(name: &str) -> Vec<Vec<f64>> {
    let path = format!("{}/tests/reference/{name}", env!("CARGO_MANIFEST_DIR"));
    let mut reader = csv::ReaderBuilder::new().comment(Some(b'#')).from_path(path).unwrap();
    reader.records().map(|r| r.unwrap().iter().map(|v| v.parse().unwrap()).collect()).collect()
}

fn assert_relative(found: f64, exact: f64, tolerance: f64, what: &str) {
    assert!((found - exact).abs() <= tolerance * exact.abs(), "{what}: {found:e} instead of {exact:e}");
}

/// 1e-12: the closed forms lose a few bits in powers up to 200.
#[test]
fn double_crystal_ball() {
    let table = rows("crystal_ball_double.csv");
    assert_eq!(table.len(), 72);
    for row in &table {
        let [x, mu, sl, sr, al, nl, ar, nr, pdf, cdf, sf, norm] = row[..] else { panic!("{row:?}") };
        let shape = Resolution::double_crystal_ball_two_sigmas(mu, (sl, sr), (al, nl), (ar, nr)).unwrap();
        let what = format!("{row:?}");
        assert_relative(shape.pdf(x), pdf, 1e-12, &what);
        assert_relative(shape.ln_pdf(x), pdf.ln(), 1e-12, &what);
        assert_relative(shape.cdf(x), cdf, 1e-12, &what);
        assert_relative(shape.sf(x), sf, 1e-12, &what);
        assert_relative(shape.norm(), norm, 1e-12, &what);
        let mut out = [0.0; 5];
        shape.pdf_slice(&[x; 5], &mut out);
        out.iter().for_each(|&value| assert_relative(value, pdf, 1e-12, &what));
        shape.cdf_slice(&[x; 5], &mut out);
        out.iter().for_each(|&value| assert_relative(value, cdf, 1e-12, &what));
        shape.sf_slice(&[x; 5], &mut out);
        out.iter().for_each(|&value| assert_relative(value, sf, 1e-12, &what));
    }
}

/// The rows with alpha_high = 40 are single-sided to all digits: the Crystal Ball function proper.
#[test]
fn crystal_ball() {
    let mut count = 0;
    for row in rows("crystal_ball_double.csv") {
        let [x, mu, sl, sr, al, nl, ar, _, pdf, cdf, sf, _] = row[..] else { panic!("{row:?}") };
        if ar == 40.0 && sl == sr {
            let shape = Resolution::crystal_ball(mu, sl, al, nl).unwrap();
            let what = format!("{row:?}");
            assert_relative(shape.pdf(x), pdf, 1e-12, &what);
            assert_relative(shape.cdf(x), cdf, 1e-12, &what);
            assert_relative(shape.sf(x), sf, 1e-12, &what);
            count += 1;
        }
    }
    assert!(count >= 12, "only {count} single-sided rows");
}

#[test]
fn relativistic_breit_wigner() {
    let table = rows("rel_breit_wigner.csv");
    assert_eq!(table.len(), 78);
    for row in &table {
        let [m, mass, width, pdf, cdf] = row[..] else { panic!("{row:?}") };
        let shape = Relativistic::new(mass, width).unwrap();
        let what = format!("{row:?}");
        assert_relative(shape.pdf(m), pdf, 1e-12, &what);
        assert_relative(shape.cdf(m), cdf, 1e-12, &what);
        let mut out = [0.0; 3];
        shape.pdf_slice(&[m; 3], &mut out);
        out.iter().for_each(|&value| assert_relative(value, pdf, 1e-12, &what));
    }
}

/// 1e-13, the promise of the complex error function.
#[test]
fn voigt() {
    let table = rows("voigt.csv");
    assert_eq!(table.len(), 60);
    for row in &table {
        let [x, sigma, gamma, pdf] = row[..] else { panic!("{row:?}") };
        let natural = Natural::BreitWigner(BreitWigner::new(0.0, 2.0 * gamma).unwrap());
        let shape = LineShape::new(natural, Some(Resolution::gaussian(0.0, sigma).unwrap().into())).unwrap();
        let what = format!("{row:?}");
        assert_relative(shape.pdf(x), pdf, 1e-13, &what);
        let mut out = [0.0; 70];
        shape.pdf_slice(&[x; 70], &mut out);
        out.iter().for_each(|&value| assert_relative(value, pdf, 1e-13, &what));
    }
}

/// 1e-10 relative or 1e-13 of the peak.
#[test]
fn breit_wigner_with_double_crystal_ball() {
    let table = rows("bw_conv_dscb.csv");
    assert_eq!(table.len(), 40);
    for row in &table {
        let [x, mass, width, mu, sl, sr, al, nl, ar, nr, pdf] = row[..] else { panic!("{row:?}") };
        let resolution = Resolution::double_crystal_ball_two_sigmas(mu, (sl, sr), (al, nl), (ar, nr)).unwrap();
        let natural = Natural::BreitWigner(BreitWigner::new(mass, width).unwrap());
        let shape = LineShape::new(natural, Some(resolution.into())).unwrap();
        assert_relative(shape.pdf(x), pdf, 1e-10, &format!("{row:?}"));
    }
}

#[test]
fn relativistic_with_gaussian() {
    let table = rows("relbw_conv_gauss.csv");
    assert_eq!(table.len(), 40);
    for row in &table {
        let [x, mass, width, sigma, pdf] = row[..] else { panic!("{row:?}") };
        let natural = Natural::Relativistic(Relativistic::new(mass, width).unwrap());
        let gaussian = Resolution::gaussian(0.0, sigma).unwrap();
        let shape = LineShape::new(natural, Some(gaussian.into())).unwrap();
        assert_relative(shape.pdf(x), pdf, 1e-10, &format!("{row:?}"));
        // The same by adaptive panels: a double-sided Crystal Ball whose tails begin 40 sigma out is this Gaussian.
        let tails = Resolution::double_crystal_ball(0.0, sigma, (40.0, 5.0), (40.0, 5.0)).unwrap();
        let shape = LineShape::new(natural, Some(tails.into())).unwrap();
        assert_relative(shape.pdf(x), pdf, 1e-10, &format!("{row:?} by panels"));
    }
}
