//! The slow reference: plain smearing, event by event.
//!
//! It draws every random quantity with a pseudo-random generator, measures every leg, forms the reconstructed mass
//! from four-vectors and keeps it. Its statistical error falls with the square root of the number of events; it has no
//! other. It judges the folding engine and therefore shares nothing with it but the typed study and detector: no
//! kernel, no sampling, no kinematics.
//!
//! # What is counted
//!
//! * An event with a leg that no entry of the detector covers, or in the gap, is not reconstructed: it counts as
//!   generated only.
//! * An event is *lost* when its directions pass cuts and category, but a calorimeter measured no positive energy, a
//!   tracker the wrong sign of curvature, or a leg's measured energy does not exceed its mass.
//! * An event of which too few legs are found (efficiency) is neither lost nor accepted.
//! * An event is *accepted* in the first category whose requirements it meets, when it passes all cuts.
//!
//! The same seed gives the same result for any number of threads.

mod decay;
mod detect;
mod efficiency;
mod generate;
mod natural;
mod select;
mod tracker;

pub use natural::NaturalMass;
pub use tracker::tracker_terms;

use rand::SeedableRng;
use rand::rngs::StdRng;
use rayon::prelude::*;

use crate::kinematics::TruthEvent;
use crate::process::{Channel, Study};
use detect::{LegOutcome, MeasuredLeg, Measurement};
use efficiency::Finding;
use generate::Generator;
use select::{category_of_directions, energies_pass, in_gap};

/// Events that share one stream of random numbers.
const CHUNK: u64 = 1 << 15;

/// Why a plain smearing cannot be done.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum PlainError {
    /// The study has no such channel.
    #[error("channel {index} does not exist; the study has {count}, counted from 0")]
    NoSuchChannel {
        /// The index asked for.
        index: usize,
        /// Number of channels.
        count: usize,
    },
    /// Events of this study come from a file.
    #[error("the events of this study come from a file; pass them as a list instead of generating them")]
    NotGenerated,
    /// Only decays to two legs and cascades can be generated.
    #[error("channel \"{channel}\" decays directly to {legs} legs; only two can be generated")]
    CannotDecay {
        /// Name of the channel.
        channel: String,
        /// Number of legs.
        legs: usize,
    },
    /// The resonance is too light for the channel.
    #[error("a resonance of {mass_gev} GeV cannot decay to legs of {legs_gev} GeV together")]
    BelowThreshold {
        /// Mass of the resonance in GeV.
        mass_gev: f64,
        /// Sum of the masses of the legs in GeV.
        legs_gev: f64,
    },
    /// A table of production cells without any weight.
    #[error("the production table has no cell of positive weight")]
    EmptyTable,
    /// An event of the list has another number of legs than the channel.
    #[error("event {index} of the list has {found} legs; channel \"{channel}\" has {expected}")]
    LegCount {
        /// Index in the list, from 0.
        index: usize,
        /// Legs of the event.
        found: usize,
        /// Name of the channel.
        channel: String,
        /// Legs of the channel.
        expected: usize,
    },
}

/// What fell into one category.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct PlainCategory {
    /// Reconstructed masses in GeV, on the axis or off it.
    pub masses_gev: Vec<f64>,
    /// Their weights.
    pub weights: Vec<f64>,
    /// Number of lost events whose directions fall into the category.
    pub lost: u64,
    /// Sum of their weights.
    pub lost_weight: f64,
    /// Sum of the weights of the events that would be accepted at an efficiency of 1.
    pub unfiltered_weight: f64,
}

impl PlainCategory {
    /// Sum of the accepted weights.
    pub fn accepted_weight(&self) -> f64 {
        self.weights.iter().sum()
    }
}

/// The result of a plain smearing.
#[derive(Clone, Debug, PartialEq)]
pub struct PlainSample {
    /// One entry per category, in the order of the channel.
    pub categories: Vec<PlainCategory>,
    /// Number of smeared events.
    pub generated: u64,
    /// Sum of their weights.
    pub generated_weight: f64,
    /// Sum of the squares of their weights.
    pub generated_weight_squared: f64,
}

impl PlainSample {
    fn empty(categories: usize) -> Self {
        PlainSample {
            categories: vec![PlainCategory::default(); categories],
            generated: 0,
            generated_weight: 0.0,
            generated_weight_squared: 0.0,
        }
    }

    fn append(&mut self, other: PlainSample) {
        self.generated += other.generated;
        self.generated_weight += other.generated_weight;
        self.generated_weight_squared += other.generated_weight_squared;
        for (mine, theirs) in self.categories.iter_mut().zip(other.categories) {
            mine.masses_gev.extend(theirs.masses_gev);
            mine.weights.extend(theirs.weights);
            mine.lost += theirs.lost;
            mine.lost_weight += theirs.lost_weight;
            mine.unfiltered_weight += theirs.unfiltered_weight;
        }
    }
}

/// Generates `events` decays of a resonance of `mass_gev` and smears each once.
///
/// # Errors
/// When the study has no such channel, takes its events from a file, or cannot be generated at this mass.
pub fn smear_generated(
    study: &Study,
    channel: usize,
    mass_gev: f64,
    events: u64,
    seed: u64,
) -> Result<PlainSample, PlainError> {
    let chosen = channel_of(study, channel)?;
    let generator = Generator::new(study, chosen, mass_gev)?;
    let smearing = Smearing::new(study, chosen);
    Ok(in_chunks(events, chosen, seed, |_, rng, sample| {
        let event = generator.event(rng);
        smearing.smear(&event, rng, sample);
    }))
}

/// Generates the truth alone: `events` decays of weight 1.
///
/// # Errors
/// As [`smear_generated`].
pub fn generate_truth(
    study: &Study,
    channel: usize,
    mass_gev: f64,
    events: usize,
    seed: u64,
) -> Result<Vec<TruthEvent>, PlainError> {
    let generator = Generator::new(study, channel_of(study, channel)?, mass_gev)?;
    let mut rng = random_stream(seed, 0);
    Ok((0..events).map(|_| generator.event(&mut rng)).collect())
}

/// Smears each event of a list `per_event` times. Generated weights count every smearing.
///
/// # Errors
/// When the study has no such channel or an event has another number of legs.
pub fn smear_events(
    study: &Study,
    channel: usize,
    events: &[TruthEvent],
    per_event: u64,
    seed: u64,
) -> Result<PlainSample, PlainError> {
    let chosen = channel_of(study, channel)?;
    let objects = chosen.decay.legs();
    if let Some((index, event)) = events.iter().enumerate().find(|(_, e)| e.leg_count != objects.len()) {
        return Err(PlainError::LegCount {
            index,
            found: event.leg_count,
            channel: chosen.name.clone(),
            expected: objects.len(),
        });
    }
    let smearing = Smearing::new(study, chosen);
    let total = events.len() as u64 * per_event;
    Ok(in_chunks(total, chosen, seed, |number, rng, sample| {
        smearing.smear(&events[(number / per_event) as usize], rng, sample);
    }))
}

fn channel_of(study: &Study, index: usize) -> Result<&Channel, PlainError> {
    study.channels.get(index).ok_or(PlainError::NoSuchChannel { index, count: study.channels.len() })
}

/// Random numbers of one chunk: the key of the generator is the pair of seed and chunk, so that streams never overlap.
fn random_stream(seed: u64, chunk: u64) -> StdRng {
    let mut key = [0u8; 32];
    key[..8].copy_from_slice(&seed.to_le_bytes());
    key[8..16].copy_from_slice(&chunk.to_le_bytes());
    StdRng::from_seed(key)
}

fn in_chunks<F>(events: u64, channel: &Channel, seed: u64, one: F) -> PlainSample
where
    F: Fn(u64, &mut StdRng, &mut PlainSample) + Sync,
{
    let categories = channel.categories.len();
    let parts: Vec<PlainSample> = (0..events.div_ceil(CHUNK))
        .into_par_iter()
        .map(|chunk| {
            let mut rng = random_stream(seed, chunk);
            let mut part = PlainSample::empty(categories);
            for number in chunk * CHUNK..events.min((chunk + 1) * CHUNK) {
                one(number, &mut rng, &mut part);
            }
            part
        })
        .collect();
    let mut whole = PlainSample::empty(categories);
    parts.into_iter().for_each(|part| whole.append(part));
    whole
}

/// What happens to one event of a channel.
struct Smearing<'a> {
    channel: &'a Channel,
    measurement: Measurement<'a>,
    finding: Finding<'a>,
}

impl<'a> Smearing<'a> {
    fn new(study: &'a Study, channel: &'a Channel) -> Self {
        Smearing {
            channel,
            measurement: Measurement::new(&study.detector, &channel.decay.legs()),
            finding: Finding::new(&study.detector, channel),
        }
    }

    fn smear(&self, event: &TruthEvent, rng: &mut StdRng, sample: &mut PlainSample) {
        sample.generated += 1;
        sample.generated_weight += event.weight;
        sample.generated_weight_squared += event.weight * event.weight;

        let truth = &event.legs[..event.leg_count];
        if in_gap(&self.channel.cuts, truth) {
            return;
        }
        let Some(outcomes) = self.measurement.measure(truth, rng) else { return };
        let outcomes = &outcomes[..truth.len()];
        let Some(index) = category_of_directions(self.channel, outcomes) else { return };

        let category = &mut sample.categories[index];
        let found = self.finding.found(truth, rng);
        let mut legs = [MeasuredLeg::default(); crate::kinematics::MAX_LEGS];
        for (leg, outcome) in legs.iter_mut().zip(outcomes) {
            match outcome {
                LegOutcome::Measured(measured) => *leg = *measured,
                LegOutcome::Lost { .. } => {
                    if found {
                        category.lost += 1;
                        category.lost_weight += event.weight;
                    }
                    return;
                }
            }
        }
        let legs = &legs[..truth.len()];
        let total: nalgebra::Vector4<f64> = legs.iter().map(MeasuredLeg::four_vector).sum();
        let mass = (total[0] * total[0] - total.fixed_rows::<3>(1).norm_squared()).max(0.0).sqrt();
        if energies_pass(&self.channel.cuts, legs, mass) {
            category.unfiltered_weight += event.weight;
            if found {
                category.masses_gev.push(mass);
                category.weights.push(event.weight);
            }
        }
    }
}
