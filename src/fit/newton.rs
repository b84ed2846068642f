//! The minimiser: Newton's method, damped, with bounds.
//!
//! Each step solves `(H + λ diag H) s = -g` by Cholesky's factorisation (K. Levenberg, Q. Appl. Math. 2 (1944) 164;
//! D. W. Marquardt, J. SIAM 11 (1963) 431), for the parameters that are not at a bound towards which they want to go
//! (D. P. Bertsekas, SIAM J. Control Optim. 20 (1982) 221). It ends when `gᵀ H⁻¹ g/2`, the estimated vertical distance
//! to the minimum, is small.

use argmin::core::{Error, IterState, KV, Problem, Solver, TerminationReason, TerminationStatus};
use nalgebra::{Cholesky, DMatrix, DVector, Dyn};

use super::coordinates::Coordinates;
use super::objective::Evaluation;

/// What argmin keeps between iterations.
pub(super) type State = IterState<DVector<f64>, DVector<f64>, (), DMatrix<f64>, (), f64>;

/// Distance to the minimum at which to stop: 4e-5 of an error.
const CLOSE: f64 = 1e-9;
/// Distance that is good enough where rounding forbids better: 1.4e-3 of an error.
pub(super) const CLOSE_ENOUGH: f64 = 1e-6;
/// Distance from which exact second derivatives are worth their price.
const NEAR: f64 = 1e-2;
/// Relative rounding of a likelihood.
const ROUNDING: f64 = 1e-10;
const TRIES: usize = 40;
/// Steps without the distance halving after which a fit counts as hard.
const HARD: usize = 4;

/// See the module.
#[derive(Clone, Debug, Default)]
pub(super) struct Newton {
    damping: f64,
    /// The best point and its derivatives.
    pub current: Option<(DVector<f64>, Evaluation)>,
    /// Exact second derivatives, kept once they were computed.
    curvature: Option<DMatrix<f64>>,
    pub distance: f64,
    stalled: usize,
    /// Approximate second derivatives lead nowhere: exact ones at every step.
    hard: bool,
    stuck: bool,
}

impl Newton {
    pub fn new() -> Self {
        Newton { damping: 1e-3, distance: f64::INFINITY, ..Newton::default() }
    }

    /// Whether it stopped because no step leads lower.
    pub fn is_stuck(&self) -> bool {
        self.stuck
    }

    /// Parameters that may move.
    fn movable(problem: &Coordinates<'_>, z: &DVector<f64>, gradient: &DVector<f64>) -> Vec<usize> {
        (0..z.len())
            .filter(|&i| {
                let at_low = z[i] <= problem.low[i] && gradient[i] > 0.0;
                let at_high = z[i] >= problem.high[i] && gradient[i] < 0.0;
                !(at_low || at_high)
            })
            .collect()
    }

    /// The distance to the minimum; second derivatives that are not positive are damped until they are.
    fn measure(problem: &Coordinates<'_>, z: &DVector<f64>, e: &Evaluation) -> f64 {
        let places = Self::movable(problem, z, &e.gradient);
        if places.is_empty() {
            return 0.0;
        }
        let g = DVector::from_fn(places.len(), |i, _| e.gradient[places[i]]);
        let mut damping = 0.0;
        for _ in 0..TRIES {
            if let Some(factors) = factorise(&e.hessian, &places, damping) {
                return 0.5 * g.dot(&factors.solve(&g));
            }
            damping = if damping == 0.0 { 1e-8 } else { 4.0 * damping };
        }
        f64::INFINITY
    }

    /// Takes exact second derivatives once the minimum is near.
    fn sharpen(&mut self, problem: &Coordinates<'_>, z: &DVector<f64>, e: &mut Evaluation) {
        if problem.objective.exact() {
            return;
        }
        self.hard |= self.stalled >= HARD;
        if self.hard || self.distance > 10.0 * NEAR {
            self.curvature = None;
        }
        if self.curvature.is_none() && (self.hard || self.distance < NEAR) {
            self.curvature = problem.inner_hessian(z);
            if let Some(curvature) = &self.curvature {
                e.hessian.clone_from(curvature);
                self.distance = Self::measure(problem, z, e);
            }
        }
    }
}

/// The factors of the damped second derivatives of some parameters, scaled to a unit diagonal.
struct Factors {
    cholesky: Cholesky<f64, Dyn>,
    scale: DVector<f64>,
}

impl Factors {
    fn solve(&self, g: &DVector<f64>) -> DVector<f64> {
        self.cholesky.solve(&g.component_div(&self.scale)).component_div(&self.scale)
    }
}

fn factorise(hessian: &DMatrix<f64>, places: &[usize], damping: f64) -> Option<Factors> {
    let largest = places.iter().map(|&i| hessian[(i, i)].abs()).fold(0.0, f64::max);
    let scale =
        DVector::from_fn(places.len(), |i, _| hessian[(places[i], places[i])].abs().max(1e-14 * largest).sqrt());
    if !scale.iter().all(|s| *s > 0.0 && s.is_finite()) {
        return None;
    }
    let matrix = DMatrix::from_fn(places.len(), places.len(), |i, j| {
        let h = hessian[(places[i], places[j])] / (scale[i] * scale[j]);
        if i == j { h + damping } else { h }
    });
    Some(Factors { cholesky: Cholesky::new(matrix)?, scale })
}

impl<'a> Solver<Coordinates<'a>, State> for Newton {
    fn name(&self) -> &str {
        "damped Newton"
    }

    fn init(&mut self, problem: &mut Problem<Coordinates<'a>>, state: State) -> Result<(State, Option<KV>), Error> {
        let mut state = state;
        let z = state.take_param().ok_or_else(|| Error::msg("no start"))?;
        let start = problem.problem("evaluations", |p| Ok(p.evaluate(&z)))?;
        let mut start = start.ok_or_else(|| Error::msg("the likelihood is not defined at the start"))?;
        if let Some(p) = problem.problem.as_ref() {
            self.distance = Self::measure(p, &z, &start);
            self.sharpen(p, &z, &mut start);
        }
        let state = state.param(z.clone()).cost(start.value);
        self.current = Some((z, start));
        Ok((state, None))
    }

    fn next_iter(
        &mut self,
        problem: &mut Problem<Coordinates<'a>>,
        state: State,
    ) -> Result<(State, Option<KV>), Error> {
        let Some((z, here)) = self.current.take() else { return Err(Error::msg("no current point")) };
        let places = problem.problem.as_ref().map(|p| Self::movable(p, &z, &here.gradient)).unwrap_or_default();
        let noise = ROUNDING * (1.0 + here.value.abs());
        let mut damping = self.damping;
        for _ in 0..TRIES {
            if self.distance < CLOSE {
                break;
            }
            let Some(factors) = factorise(&here.hessian, &places, damping) else {
                damping = (4.0 * damping).max(1e-4);
                continue;
            };
            let g = DVector::from_fn(places.len(), |i, _| here.gradient[places[i]]);
            let direction = -factors.solve(&g);
            let mut there = z.clone();
            let predicted = problem.problem("steps", |p| {
                for (&i, &step) in places.iter().zip(direction.iter()) {
                    there[i] = (z[i] + step).clamp(p.low[i], p.high[i]);
                }
                let step = &there - &z;
                Ok(-here.gradient.dot(&step) - 0.5 * step.dot(&(&here.hessian * &step)))
            })?;
            let next = problem.problem("evaluations", |p| Ok(p.evaluate(&there)))?;
            let Some(mut next) = next else {
                damping = (8.0 * damping).max(1e-2);
                continue;
            };
            let gained = here.value - next.value;
            // Below the rounding of the likelihood its gradient alone leads on.
            let lost_in_noise = predicted.abs() < noise && gained > -noise;
            if gained > 1e-4 * predicted.max(0.0) && gained >= 0.0 || lost_in_noise {
                let good = lost_in_noise || gained > 0.75 * predicted;
                self.damping = if good {
                    0.1 * damping
                } else if gained < 0.25 * predicted {
                    4.0 * damping
                } else {
                    damping
                };
                if self.damping < 1e-8 {
                    self.damping = 0.0;
                }
                if let Some(curvature) = &self.curvature {
                    next.hessian.clone_from(curvature);
                }
                let before = self.distance;
                if let Some(p) = problem.problem.as_ref() {
                    self.distance = Self::measure(p, &there, &next);
                    self.stalled = if self.distance < 0.5 * before { 0 } else { self.stalled + 1 };
                    self.sharpen(p, &there, &mut next);
                }
                let state = state.param(there.clone()).cost(next.value);
                self.current = Some((there, next));
                return Ok((state, None));
            }
            damping = (4.0 * damping).max(1e-3);
        }
        self.stuck = true;
        let state = state.param(z.clone()).cost(here.value);
        self.current = Some((z, here));
        Ok((state, None))
    }

    fn terminate(&mut self, _state: &State) -> TerminationStatus {
        // Approximate second derivatives are replaced long before, so the distance is by exact ones.
        if self.distance < CLOSE || (self.stalled >= 4 && self.distance < CLOSE_ENOUGH) {
            return TerminationStatus::Terminated(TerminationReason::SolverConverged);
        }
        if self.stuck {
            return TerminationStatus::Terminated(TerminationReason::SolverExit("no step leads lower".to_owned()));
        }
        TerminationStatus::NotTerminated
    }
}
