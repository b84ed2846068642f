//! What the statistics of an event list add to the errors of a template.
//!
//! The units are groups: correlated events, such as an event and its counter-events, are added up before anything is squared. An
//! event by itself is a group of one. Several groups may be taken as one unit: the variance of a sum of independent groups can
//! be had from sums over any of them, with fewer degrees of freedom.

use super::event_list::Listed;
use super::last_leg::Sums;

/// Sums over a group of consecutive events, or over several groups.
#[derive(Clone, Debug)]
struct Group {
    /// Numbers of the first and the last group in it.
    first: u64,
    last: u64,
    weight: f64,
    /// By category: accepted weight, with and without efficiencies, and the weighted probability of each bin.
    accepted: Vec<f64>,
    unfiltered: Vec<f64>,
    bins: Vec<Vec<f64>>,
}

impl Group {
    fn new((first, last): (u64, u64), categories: usize, bins: usize) -> Self {
        let zeros = vec![0.0; categories];
        let bins = vec![vec![0.0; bins]; categories];
        Group { first, last, weight: 0.0, accepted: zeros.clone(), unfiltered: zeros, bins }
    }

    fn restart(&mut self, (first, last): (u64, u64)) {
        self.first = first;
        self.last = last;
        self.weight = 0.0;
        self.accepted.fill(0.0);
        self.unfiltered.fill(0.0);
        self.bins.iter_mut().for_each(|bins| bins.fill(0.0));
    }

    fn add(&mut self, other: &Group) {
        self.weight += other.weight;
        add(&mut self.accepted, &other.accepted);
        add(&mut self.unfiltered, &other.unfiltered);
        self.bins.iter_mut().zip(&other.bins).for_each(|(a, b)| add(a, b));
    }
}

fn add(a: &mut [f64], b: &[f64]) {
    a.iter_mut().zip(b).for_each(|(a, b)| *a += b);
}

/// Sums over the groups of a list, or of a part of it. The first and the last group of a part may go on in the parts
/// before and after, so that they are kept apart until [`finish`](Self::finish).
#[derive(Clone, Debug)]
pub(super) struct ListSums {
    /// By category and bin: sum over groups of (weighted probability)², and of it times the group's accepted weight.
    pub squares: Vec<Vec<f64>>,
    pub products: Vec<Vec<f64>>,
    /// By category: sum of (accepted weight)², and of it times the group's weight.
    pub accepted_squares: Vec<f64>,
    pub accepted_products: Vec<f64>,
    /// By category, with u the accepted weight at an efficiency of 1: the sums of u, u², and u times the accepted weight.
    pub unfiltered: Vec<f64>,
    pub unfiltered_squares: Vec<f64>,
    pub unfiltered_products: Vec<f64>,
    /// Sum over groups of weight².
    pub weight_squares: f64,
    /// Sum of weights.
    pub weights: f64,
    first: Option<Group>,
    last: Option<Group>,
}

impl ListSums {
    pub fn new(categories: usize, bins: usize) -> Self {
        ListSums {
            squares: vec![vec![0.0; bins]; categories],
            products: vec![vec![0.0; bins]; categories],
            accepted_squares: vec![0.0; categories],
            accepted_products: vec![0.0; categories],
            unfiltered: vec![0.0; categories],
            unfiltered_squares: vec![0.0; categories],
            unfiltered_products: vec![0.0; categories],
            weight_squares: 0.0,
            weights: 0.0,
            first: None,
            last: None,
        }
    }

    /// Adds consecutive events that are taken as one unit; `sums` holds what their points gave in each category and `unit` is
    /// 1 over the points of an event. Events come in the order of the list.
    pub fn add_unit(&mut self, events: &[Listed], sums: &[Sums], unit: f64) {
        let [first, ..] = events else { return };
        let last = events.last().unwrap_or(first);
        let weight: f64 = events.iter().map(|listed| listed.event.weight).sum();
        self.weights += weight;
        let group = self.open((first.group, last.group));
        group.weight += weight;
        for (category, sums) in sums.iter().enumerate() {
            let accepted = sums.accepted * unit;
            group.unfiltered[category] += sums.unfiltered * unit;
            if accepted == 0.0 {
                continue;
            }
            group.accepted[category] += accepted;
            let cumulative = sums.cumulative();
            for (q, pair) in group.bins[category].iter_mut().zip(cumulative.windows(2)) {
                *q += (pair[1] - pair[0]) * unit;
            }
        }
    }

    /// The unit from one group number to another: the current one if that ends with the first of these, else a new one.
    fn open(&mut self, numbers: (u64, u64)) -> &mut Group {
        let current = self.last.as_mut().or(self.first.as_mut()).filter(|group| group.last == numbers.0);
        if let Some(group) = current {
            group.last = numbers.1;
        } else {
            let next = match self.last.take() {
                Some(mut closed) => {
                    self.close(&closed);
                    closed.restart(numbers);
                    closed
                }
                None => Group::new(numbers, self.squares.len(), self.squares.first().map_or(0, Vec::len)),
            };
            let place = if self.first.is_none() { &mut self.first } else { &mut self.last };
            *place = Some(next);
        }
        match (&mut self.first, &mut self.last) {
            (_, Some(group)) => group,
            (first, None) => first.get_or_insert_with(|| Group::new(numbers, 0, 0)),
        }
    }

    /// Adds the squares of a complete group.
    fn close(&mut self, group: &Group) {
        self.weight_squares += group.weight * group.weight;
        for (category, (accepted, bins)) in group.accepted.iter().zip(&group.bins).enumerate() {
            let unfiltered = group.unfiltered[category];
            self.unfiltered[category] += unfiltered;
            self.unfiltered_squares[category] += unfiltered * unfiltered;
            self.unfiltered_products[category] += unfiltered * accepted;
            self.accepted_squares[category] += accepted * accepted;
            self.accepted_products[category] += accepted * group.weight;
            let sums = self.squares[category].iter_mut().zip(&mut self.products[category]);
            for ((square, product), q) in sums.zip(bins) {
                *square += q * q;
                *product += q * accepted;
            }
        }
    }

    /// Adds the part of the list that follows.
    pub fn add(&mut self, next: &ListSums) {
        for category in 0..self.squares.len() {
            add(&mut self.squares[category], &next.squares[category]);
            add(&mut self.products[category], &next.products[category]);
        }
        add(&mut self.accepted_squares, &next.accepted_squares);
        add(&mut self.accepted_products, &next.accepted_products);
        add(&mut self.unfiltered, &next.unfiltered);
        add(&mut self.unfiltered_squares, &next.unfiltered_squares);
        add(&mut self.unfiltered_products, &next.unfiltered_products);
        self.weight_squares += next.weight_squares;
        self.weights += next.weights;
        for group in next.first.iter().chain(&next.last) {
            self.open((group.first, group.last)).add(group);
        }
    }

    /// The sums when nothing follows.
    pub fn finish(mut self) -> Self {
        for group in self.first.take().into_iter().chain(self.last.take()) {
            self.close(&group);
        }
        self
    }
}
