//! Measuring legs: directions, vertex, calorimeter, tracker.

use nalgebra::Vector4;
use rand::RngExt;
use rand::rngs::StdRng;
use statrs::distribution::Normal;
use std::f64::consts::{FRAC_1_SQRT_2, FRAC_PI_2, PI};

use super::tracker::PreparedTracker;
use crate::detector::{Calorimeter, Detector, EtaRange, Object, Tail, Vertex};
use crate::kinematics::{MAX_LEGS, TruthLeg};

/// A leg as it was measured.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct MeasuredLeg {
    energy: f64,
    momentum: f64,
    theta: f64,
    phi: f64,
}

impl MeasuredLeg {
    pub(super) fn pt(&self) -> f64 {
        self.momentum * libm::sin(self.theta)
    }

    pub(super) fn four_vector(&self) -> Vector4<f64> {
        let (sin_phi, cos_phi) = libm::sincos(self.phi);
        let pt = self.pt();
        Vector4::new(self.energy, pt * cos_phi, pt * sin_phi, self.momentum * libm::cos(self.theta))
    }
}

/// What became of a leg that the detector covers.
#[derive(Clone, Copy, Debug)]
pub(super) enum LegOutcome {
    Measured(MeasuredLeg),
    /// No positive energy, wrong-sign curvature, or an energy not above the leg's mass.
    Lost {
        theta: f64,
    },
}

impl LegOutcome {
    /// Measured |eta|.
    pub(super) fn abs_eta(&self) -> f64 {
        let theta = match self {
            LegOutcome::Measured(leg) => leg.theta,
            LegOutcome::Lost { theta } => *theta,
        };
        pseudorapidity(theta).abs()
    }
}

/// `-ln tan(theta/2)`.
fn pseudorapidity(theta: f64) -> f64 {
    -libm::log(libm::tan(0.5 * theta))
}

/// |eta| of a leg as it truly flew.
pub(super) fn true_abs_eta(leg: &TruthLeg) -> f64 {
    pseudorapidity(libm::atan2(libm::hypot(leg.px_gev, leg.py_gev), leg.pz_gev)).abs()
}

fn standard_normal(rng: &mut StdRng) -> f64 {
    rng.sample(Normal::standard())
}

/// A unit response with its peak at 0.
#[derive(Clone, Copy, Debug)]
enum UnitShape {
    Gaussian,
    /// A double-sided Crystal Ball shape with the probabilities of its low tail and of its high tail.
    Tailed {
        tail: Tail,
        low: f64,
        high: f64,
    },
}

impl UnitShape {
    fn new(tail: Option<Tail>) -> Self {
        let Some(tail) = tail else { return UnitShape::Gaussian };
        // Areas with peak 1: (n/alpha)/(n-1) exp(-alpha²/2) for a tail, sqrt(pi/2) erf(alpha/sqrt2) for a half core.
        let area = |alpha: f64, n: f64| n / alpha / (n - 1.0) * libm::exp(-0.5 * alpha * alpha);
        let core = |alpha: f64| FRAC_PI_2.sqrt() * libm::erf(alpha * FRAC_1_SQRT_2);
        let (low, high) = (area(tail.alpha_low, tail.n_low), area(tail.alpha_high, tail.n_high));
        let total = low + high + core(tail.alpha_low) + core(tail.alpha_high);
        UnitShape::Tailed { tail, low: low / total, high: high / total }
    }

    fn sample(&self, rng: &mut StdRng) -> f64 {
        let UnitShape::Tailed { tail, low, high } = *self else { return standard_normal(rng) };
        let part: f64 = rng.random();
        if part < low {
            -beyond(tail.alpha_low, tail.n_low, rng)
        } else if part < low + high {
            beyond(tail.alpha_high, tail.n_high, rng)
        } else {
            loop {
                let t = standard_normal(rng);
                if -tail.alpha_low < t && t < tail.alpha_high {
                    return t;
                }
            }
        }
    }
}

/// A distance in a power-law tail: its survival function beyond alpha is (1 + (alpha/n)(t - alpha))^-(n - 1).
fn beyond(alpha: f64, n: f64, rng: &mut StdRng) -> f64 {
    let survival = 1.0 - rng.random::<f64>();
    alpha + n / alpha * (libm::pow(survival, -1.0 / (n - 1.0)) - 1.0)
}

/// The entries that measure one kind of object.
struct ObjectMeasurement<'a> {
    calorimeters: Vec<(&'a Calorimeter, UnitShape)>,
    trackers: Vec<(EtaRange, f64, PreparedTracker)>,
    sigma_theta: f64,
    sigma_phi: f64,
    pointed: bool,
}

/// Everything that measures the legs of a channel.
pub(super) struct Measurement<'a> {
    legs: Vec<ObjectMeasurement<'a>>,
    vertex: Option<&'a Vertex>,
}

impl<'a> Measurement<'a> {
    pub(super) fn new(detector: &'a Detector, objects: &[Object]) -> Self {
        let of_object = |&object: &Object| {
            let direction = detector.directions.iter().find(|entry| entry.object == object);
            ObjectMeasurement {
                calorimeters: detector
                    .calorimeters
                    .iter()
                    .filter(|entry| entry.object == object)
                    .map(|entry| (entry, UnitShape::new(entry.tail)))
                    .collect(),
                trackers: detector
                    .trackers
                    .iter()
                    .filter(|entry| entry.object == object)
                    .map(|entry| (entry.eta, entry.scale, PreparedTracker::new(&entry.resolution)))
                    .collect(),
                sigma_theta: direction.map_or(0.0, |entry| entry.sigma_theta_mrad * 1e-3),
                sigma_phi: direction.map_or(0.0, |entry| entry.sigma_phi_mrad * 1e-3),
                pointed: matches!(object, Object::Photon | Object::Jet),
            }
        };
        Measurement { legs: objects.iter().map(of_object).collect(), vertex: detector.vertex.as_ref() }
    }

    /// The outcome of every leg; `None` when the detector does not cover one.
    pub(super) fn measure(&self, truth: &[TruthLeg], rng: &mut StdRng) -> Option<[LegOutcome; MAX_LEGS]> {
        let shift = self.vertex.map(|vertex| {
            let right = rng.random::<f64>() < vertex.right_choice;
            let spread_mm = if right { vertex.spread_right_mm } else { vertex.spread_wrong_mm };
            (vertex, 1e-3 * spread_mm * standard_normal(rng))
        });
        let mut outcomes = [LegOutcome::Lost { theta: FRAC_PI_2 }; MAX_LEGS];
        for ((outcome, leg), entries) in outcomes.iter_mut().zip(truth).zip(&self.legs) {
            *outcome = entries.measure(leg, shift, rng)?;
        }
        Some(outcomes)
    }
}

impl ObjectMeasurement<'_> {
    fn measure(&self, leg: &TruthLeg, shift: Option<(&Vertex, f64)>, rng: &mut StdRng) -> Option<LegOutcome> {
        let pt = libm::hypot(leg.px_gev, leg.py_gev);
        let true_theta = libm::atan2(pt, leg.pz_gev);
        let true_phi = libm::atan2(leg.py_gev, leg.px_gev);
        let abs_eta = pseudorapidity(true_theta).abs();
        let momentum = libm::hypot(pt, leg.pz_gev);
        let energy = libm::hypot(momentum, leg.mass_gev);

        let calorimeter = self.choose_calorimeter(abs_eta, rng);
        let tracker = self.trackers.iter().find(|(eta, _, _)| eta.contains(abs_eta));
        if calorimeter.is_none() && tracker.is_none() {
            return None;
        }

        let mut theta = true_theta + self.sigma_theta * standard_normal(rng);
        let mut phi = true_phi + self.sigma_phi * standard_normal(rng);
        if theta < 0.0 {
            (theta, phi) = (-theta, phi + PI);
        } else if theta > PI {
            (theta, phi) = (2.0 * PI - theta, phi + PI);
        }
        if let Some((vertex, dz)) = shift.filter(|_| self.pointed) {
            let path = vertex.calorimeter_radius_m.min(vertex.calorimeter_half_length_m * libm::tan(true_theta).abs());
            theta = libm::atan2(1.0, libm::tan(theta).recip() + dz / path);
        }
        let lost = Some(LegOutcome::Lost { theta });

        // Energy of the calorimeter with its relative width, momentum of the tracker with its own.
        let mut by_calorimeter = None;
        if let Some((entry, shape)) = calorimeter {
            let width =
                libm::hypot(libm::hypot(entry.stochastic / energy.sqrt(), entry.noise_gev / energy), entry.constant);
            let measured = energy * (1.0 + entry.scale) * (1.0 + entry.bias + width * shape.sample(rng));
            if measured <= 0.0 {
                return lost;
            }
            by_calorimeter = Some((measured, width));
        }
        let mut by_tracker = None;
        if let Some((_, scale, terms)) = tracker {
            let width = terms.relative_width(pt, libm::sin(true_theta));
            let curvature = (1.0 + width * standard_normal(rng)) / (1.0 + scale) / pt;
            if curvature <= 0.0 {
                return lost;
            }
            by_tracker = Some((1.0 / curvature / libm::sin(theta), width));
        }

        let from_energy = |measured: f64| {
            let squared = measured * measured - leg.mass_gev * leg.mass_gev;
            (measured > leg.mass_gev).then(|| (measured, squared.sqrt()))
        };
        let pair = match (by_calorimeter, by_tracker) {
            (Some((measured, _)), None) => from_energy(measured),
            (None, Some((measured, _))) => Some((libm::hypot(measured, leg.mass_gev), measured)),
            (Some((measured, width)), Some((tracked, tracked_width))) => {
                let (a, b) = (width * width, tracked_width * tracked_width);
                // Both exact: either serves.
                let share = if a + b > 0.0 { b / (a + b) } else { 0.5 };
                from_energy(share * measured + (1.0 - share) * tracked)
            }
            (None, None) => None,
        };
        match pair {
            Some((energy, momentum)) => Some(LegOutcome::Measured(MeasuredLeg { energy, momentum, theta, phi })),
            None => lost,
        }
    }

    /// The entry that measures a leg: the first that matches, or by chance one of those that share its range.
    fn choose_calorimeter(&self, abs_eta: f64, rng: &mut StdRng) -> Option<&(&Calorimeter, UnitShape)> {
        let (first, _) = self.calorimeters.iter().find(|(entry, _)| entry.eta.contains(abs_eta))?;
        let sharing = || self.calorimeters.iter().filter(|(entry, _)| entry.eta == first.eta);
        let mut left = rng.random::<f64>() * sharing().map(|(entry, _)| entry.fraction).sum::<f64>();
        sharing()
            .find(|(entry, _)| {
                left -= entry.fraction;
                left < 0.0
            })
            .or_else(|| sharing().next_back())
    }
}
