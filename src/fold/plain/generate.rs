//! Generated truth events.

use rand::RngExt;
use rand::rngs::StdRng;
use statrs::distribution::Normal;
use std::f64::consts::TAU;

use super::PlainError;
use super::decay::{Momentum4, PairMasses, boost_from_rest, two_body};
use super::natural::NaturalMass;
use crate::kinematics::{MAX_LEGS, TruthEvent, TruthLeg};
use crate::process::{Channel, Decay, EventSource, Production, SpectrumCell, Study};

/// Draws decays of one resonance in one channel.
pub(super) struct Generator<'a> {
    natural: NaturalMass,
    production: &'a Production,
    leg_masses: Vec<f64>,
    /// The pair masses of a cascade; none for a direct decay.
    pairs: Option<PairMasses>,
}

impl<'a> Generator<'a> {
    pub(super) fn new(study: &'a Study, channel: &Channel, mass_gev: f64) -> Result<Self, PlainError> {
        let resonance = &study.resonance;
        let EventSource::Generated(production) = &resonance.source else { return Err(PlainError::NotGenerated) };
        if let Production::Table(cells) = production
            && !cells.iter().any(|cell| cell.weight > 0.0)
        {
            return Err(PlainError::EmptyTable);
        }
        let leg_masses: Vec<f64> = channel.decay.legs().iter().map(|object| object.mass_gev()).collect();
        let pairs = match &channel.decay {
            Decay::Direct(legs) if legs.len() == 2 => None,
            Decay::Direct(legs) => {
                return Err(PlainError::CannotDecay { channel: channel.name.clone(), legs: legs.len() });
            }
            Decay::Cascade(_) => Some(PairMasses {
                mass: resonance.intermediate.mass_gev,
                width: resonance.intermediate.width_gev,
                thresholds: [leg_masses[0] + leg_masses[1], leg_masses[2] + leg_masses[3]],
            }),
        };
        let natural = NaturalMass::new(
            resonance.natural,
            mass_gev,
            resonance.width.at_gev(mass_gev),
            resonance.falloff_power,
            leg_masses.iter().sum(),
        )?;
        Ok(Generator { natural, production, leg_masses, pairs })
    }

    pub(super) fn event(&self, rng: &mut StdRng) -> TruthEvent {
        let mass = self.natural.sample(rng);
        let to_laboratory = boost_from_rest(&self.resonance_momentum(mass, rng), mass);
        let mut legs = [TruthLeg::default(); MAX_LEGS];
        let mut put = |index: usize, at_rest: Momentum4| {
            let moved = to_laboratory * at_rest;
            legs[index] =
                TruthLeg { px_gev: moved[1], py_gev: moved[2], pz_gev: moved[3], mass_gev: self.leg_masses[index] };
        };
        match &self.pairs {
            None => {
                let products = two_body(mass, self.leg_masses[0], self.leg_masses[1], rng);
                products.into_iter().enumerate().for_each(|(i, product)| put(i, product));
            }
            Some(pairs) => {
                let pair_masses = pairs.sample(mass, rng);
                let vs = two_body(mass, pair_masses[0], pair_masses[1], rng);
                for (pair, (v, &v_mass)) in vs.iter().zip(&pair_masses).enumerate() {
                    let to_rest_of_x = boost_from_rest(v, v_mass);
                    let products = two_body(v_mass, self.leg_masses[2 * pair], self.leg_masses[2 * pair + 1], rng);
                    products.into_iter().enumerate().for_each(|(i, product)| put(2 * pair + i, to_rest_of_x * product));
                }
            }
        }
        TruthEvent { legs, leg_count: self.leg_masses.len(), weight: 1.0, mass_gev: mass }
    }

    fn resonance_momentum(&self, mass: f64, rng: &mut StdRng) -> Momentum4 {
        let (pt, rapidity) = match self.production {
            Production::Spectrum { pt_mean_gev, rapidity_sigma } => {
                // 1 - u is never 0.
                let pt = -pt_mean_gev * libm::log(1.0 - rng.random::<f64>());
                (pt, rapidity_sigma * rng.sample::<f64, _>(Normal::standard()))
            }
            Production::Table(cells) => {
                let cell = choose_cell(cells, rng);
                let between = |(low, high): (f64, f64), u: f64| low + (high - low) * u;
                (between(cell.pt_gev, rng.random()), between(cell.rapidity, rng.random()))
            }
        };
        let (sin_phi, cos_phi) = libm::sincos(TAU * rng.random::<f64>());
        let transverse_mass = (mass * mass + pt * pt).sqrt();
        Momentum4::new(
            transverse_mass * libm::cosh(rapidity),
            pt * cos_phi,
            pt * sin_phi,
            transverse_mass * libm::sinh(rapidity),
        )
    }
}

fn choose_cell<'c>(cells: &'c [SpectrumCell], rng: &mut StdRng) -> &'c SpectrumCell {
    let total: f64 = cells.iter().map(|cell| cell.weight).sum();
    let mut left = rng.random::<f64>() * total;
    let mut chosen = &cells[0];
    for cell in cells.iter().filter(|cell| cell.weight > 0.0) {
        chosen = cell;
        left -= cell.weight;
        if left < 0.0 {
            break;
        }
    }
    chosen
}
