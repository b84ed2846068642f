//! Slices of a line shape: closed forms, else the grid, else point by point.

use super::super::grid::Grid;
use super::super::{Shape, voigt};
use super::{LineShape, Path};

impl LineShape {
    pub(super) fn densities(&self, m: &[f64], out: &mut [f64]) {
        match &self.path {
            Path::Shifted(mixture) => mixture.pdf_slice(m, out),
            Path::Natural => {
                if let Some(shape) = self.natural.shape() {
                    shape.pdf_slice(m, out);
                }
            }
            Path::Convolved(_) => {
                if let Some((centre, sigma)) = self.voigt() {
                    voigt::voigt_slice(m, out, centre, sigma, 0.5 * self.natural.width());
                } else if let Some(grid) = Grid::of(self, m, false) {
                    grid.value(m, out);
                } else {
                    out.iter_mut().zip(m).for_each(|(value, &m)| *value = self.pdf(m));
                }
            }
        }
    }

    pub(super) fn ln_densities(&self, m: &[f64], out: &mut [f64]) {
        match &self.path {
            Path::Shifted(mixture) => mixture.ln_pdf_slice(m, out),
            Path::Natural => {
                if let Some(shape) = self.natural.shape() {
                    shape.ln_pdf_slice(m, out);
                }
            }
            Path::Convolved(_) => {
                self.densities(m, out);
                crate::numerics::kernel::ln_in_place(out);
                for (value, &m) in out.iter_mut().zip(m) {
                    // Where the density is no normal number.
                    if !(*value > -700.0) {
                        *value = self.ln_pdf(m);
                    }
                }
            }
        }
    }

    pub(super) fn ln_densities_with_gradient(&self, m: &[f64], ln_pdf: &mut [f64], gradient: &mut [f64]) {
        match (&self.path, Grid::of(self, m, true)) {
            (Path::Shifted(mixture), _) => {
                let points = m.len();
                let Some((mass, rest)) = gradient.split_at_mut_checked(points) else { return };
                mixture.ln_pdf_gradient_slice(m, ln_pdf, rest);
                mass.fill(0.0);
                let mut offset = 0;
                for component in mixture.components() {
                    if let Some(bias) = rest.get(offset * points..(offset + 1) * points) {
                        mass.iter_mut().zip(bias).for_each(|(m, b)| *m += b);
                    }
                    offset += component.parameter_count();
                }
            }
            (Path::Convolved(_), Some(grid)) => grid.ln_value_and_gradient(m, ln_pdf, gradient),
            _ => {
                let mut one = vec![0.0; self.parameter_count()];
                for (i, (&m_i, slot)) in m.iter().zip(ln_pdf.iter_mut()).enumerate() {
                    *slot = self.ln_pdf_gradient(m_i, &mut one);
                    for (k, &g) in one.iter().enumerate() {
                        if let Some(place) = gradient.get_mut(k * m.len() + i) {
                            *place = g;
                        }
                    }
                }
            }
        }
    }

    /// Probabilities below many masses, or above them.
    pub(super) fn probabilities(&self, m: &[f64], out: &mut [f64], above: bool) {
        let all =
            |shape: &dyn Shape, out: &mut [f64]| if above { shape.sf_slice(m, out) } else { shape.cdf_slice(m, out) };
        let one = |m: f64| if above { self.sf(m) } else { self.cdf(m) };
        match (&self.path, self.natural.shape()) {
            (Path::Shifted(mixture), _) => all(mixture, out),
            (Path::Natural, Some(shape)) => all(shape, out),
            _ => match Grid::of(self, m, false) {
                Some(grid) => grid.probability(one(if above { grid.high() } else { grid.low() }), m, out, above),
                None => out.iter_mut().zip(m).for_each(|(value, &m)| *value = one(m)),
            },
        }
    }
}
