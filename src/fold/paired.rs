//! The numerical error of an event list from pairs of scramblings.
//!
//! Sixteen scramblings of a long list would take sixteen points of every event, far more than the precision asks for. Two
//! scramblings A and B do: over a run of points, A - B has the variance of A + B. The runs are independent, and the
//! replicates of the total are made of it by balanced half-sample replication (P. J. McCarthy, Rev. Int. Stat. Inst. 37
//! (1969) 239; from memory): replicate r adds the difference of each run with the sign that row r of a Hadamard matrix has
//! in the run's column, so that the replicates average to the total, and their spread is its error.
//!
//! A run must be long, since the points of one run are even among themselves and this evenness is not seen between runs.
//! Where the list has few points, several pairs make up for few runs.

use super::engine::{REPLICATES, Total};
use super::last_leg::Sums;

/// Columns of the Hadamard matrix of order [`REPLICATES`] that add to 0.
const COLUMNS: usize = REPLICATES - 1;

/// Runs of all pairs together, about: as many degrees of freedom as there are columns.
const RUNS: u64 = REPLICATES as u64;

/// Points that a run has at least, unless there are too few.
const LONG_RUN: u64 = 4096;

/// Pairs of scramblings at most.
const MOST_PAIRS: usize = REPLICATES / 2;

/// How many pairs there are, and how long a run is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) struct Pairing {
    pairs: usize,
    run: u64,
}

/// Where the sums of one scrambling and point go.
#[derive(Clone, Copy, Debug)]
pub(super) struct Place {
    column: usize,
    second: bool,
}

impl Pairing {
    /// For so many points of each scrambling (`None`: many, but not known), where this many stay together.
    pub fn new(points: Option<u64>, together: u64) -> Self {
        let Some(points) = points else { return Pairing { pairs: 1, run: LONG_RUN.max(together) } };
        let mut pairs = 1;
        while pairs < MOST_PAIRS && points < LONG_RUN * RUNS / pairs as u64 {
            pairs *= 2;
        }
        let runs = RUNS / pairs as u64;
        Pairing { pairs, run: points.div_ceil(runs).next_multiple_of(together) }
    }

    /// Scramblings that are used.
    pub fn scramblings(self) -> usize {
        2 * self.pairs
    }

    /// Where a scrambling's sums go, at a point.
    pub fn place(self, scrambling: usize, point: u64) -> Place {
        let unit = point / self.run * self.pairs as u64 + (scrambling / 2) as u64;
        Place { column: (unit % COLUMNS as u64) as usize, second: scrambling % 2 == 1 }
    }
}

/// Sums over the pairs: of both scramblings, and by column their differences.
#[derive(Clone, Debug)]
pub(super) struct Paired {
    sum: Total,
    differences: Vec<Vec<Sums>>,
}

impl Paired {
    pub fn new(categories: usize, edges: usize) -> Self {
        Paired { sum: Total::new(categories, edges), differences: vec![Vec::new(); COLUMNS] }
    }

    /// Adds the weight of events, all of it and what lies outside of the efficiencies.
    pub fn add_events(&mut self, generated: f64, outside: f64) {
        self.sum.generated += generated;
        self.sum.outside += outside;
    }

    /// Adds the sums of a category.
    pub fn add_sums(&mut self, place: Place, category: usize, sums: &Sums) {
        let categories = self.sum.sums.len();
        if let Some(total) = self.sum.sums.get_mut(category) {
            total.add(sums);
        }
        let column = &mut self.differences[place.column];
        if column.is_empty() {
            column.resize(categories, Sums::new(sums.below.len()));
        }
        column[category].add_times(sums, if place.second { -1.0 } else { 1.0 });
    }

    /// Adds those of a further part of the list.
    pub fn add(&mut self, other: &Paired) {
        self.sum.add(&other.sum);
        for (column, more) in self.differences.iter_mut().zip(&other.differences) {
            if column.is_empty() {
                column.clone_from(more);
                continue;
            }
            for (a, b) in column.iter_mut().zip(more) {
                a.add(b);
            }
        }
    }

    /// The replicates: they add to the sum, and the standard error of their mean is that of the sum.
    pub fn replicates(&self) -> Vec<Total> {
        let count = REPLICATES as f64;
        // The variance over the replicates of c Σ s_c d_c is c² Σ d_c² count/(count - 1), and that of their mean, count times
        // less, must be Σ d_c²/count² where each replicate is 1/count of the sum.
        let factor = (count - 1.0).sqrt() / count;
        (0..REPLICATES)
            .map(|row| {
                let mut total = self.sum.scaled(1.0 / count);
                for (column, differences) in self.differences.iter().enumerate() {
                    let odd = (row & (column + 1)).count_ones() % 2 == 1;
                    for (sums, difference) in total.sums.iter_mut().zip(differences) {
                        sums.add_times(difference, if odd { -factor } else { factor });
                    }
                }
                total
            })
            .collect()
    }
}
