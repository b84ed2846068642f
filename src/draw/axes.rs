//! A frame with a mass axis below and a value axis at its left.

use super::paper::{Anchor, DrawError, FRAME, PALE, Paper, Type};
use super::scale::Ticks;

/// Where masses and values stand on the sheet: the frame in points, the ranges that it shows.
#[derive(Clone, Copy)]
pub(super) struct Axes {
    pub left: f64,
    pub width: f64,
    pub top: f64,
    pub height: f64,
    /// Masses in GeV at the left and at the right.
    pub masses: (f64, f64),
    /// Values at the bottom and at the top.
    pub values: (f64, f64),
}

impl Axes {
    pub fn x(&self, mass: f64) -> f64 {
        self.left + self.width * (mass - self.masses.0) / (self.masses.1 - self.masses.0)
    }

    pub fn y(&self, value: f64) -> f64 {
        self.top + self.height * (self.values.1 - value) / (self.values.1 - self.values.0)
    }

    fn right(&self) -> f64 {
        self.left + self.width
    }

    fn bottom(&self) -> f64 {
        self.top + self.height
    }

    /// Pale lines at round values.
    pub fn grid(&self, paper: &Paper<'_>, ticks: &Ticks) -> Result<(), DrawError> {
        let lines = ticks.values.iter().map(|tick| self.y(*tick));
        lines.into_iter().try_for_each(|y| paper.line(&[(self.left, y), (self.right(), y)], PALE, 0.75))
    }

    /// What the values at these lines are.
    pub fn value_labels(&self, paper: &Paper<'_>, ticks: &Ticks) -> Result<(), DrawError> {
        let mut labels = ticks.values.iter().map(|tick| (ticks.label(*tick), self.y(*tick)));
        labels.try_for_each(|(label, y)| paper.text(&label, (self.left - 7.0, y), Anchor::Right, Type::SMALL))
    }

    pub fn frame(&self, paper: &Paper<'_>) -> Result<(), DrawError> {
        let (left, right, top, bottom) = (self.left, self.right(), self.top, self.bottom());
        paper.line(&[(left, top), (left, bottom), (right, bottom), (right, top), (left, top)], FRAME, 1.0)
    }

    /// Ticks and their masses, as many as stay apart.
    pub fn mass_labels(&self, paper: &Paper<'_>) -> Result<(), DrawError> {
        let (left, right, bottom) = (self.left, self.right(), self.bottom());
        let (low, high) = self.masses;
        // Labels may reach over the frame, but not into the next panel's.
        let length = |label: &str| Type::SMALL.length(label.len());
        let labelled = |ticks: &Ticks| -> Vec<(f64, String)> {
            let all = ticks.values.iter().map(|tick| (self.x(*tick), ticks.label(*tick)));
            all.filter(|(x, label)| {
                let half = 0.5 * length(label);
                x - half > left - 6.0 && x + half < right + 6.0
            })
            .collect()
        };
        let apart = |labels: &[(f64, String)]| labels.windows(2).all(|w| w[1].0 - w[0].0 > length(&w[1].1) + 9.0);
        let ticks = (1..=10).rev().map(|most| Ticks::new(low, high, most)).find(|t| apart(&labelled(t)));
        let Some(ticks) = ticks else { return Ok(()) };
        for tick in &ticks.values {
            let x = self.x(*tick);
            paper.line(&[(x, bottom), (x, bottom + 4.0)], FRAME, 1.0)?;
        }
        for (x, label) in labelled(&ticks) {
            paper.text(&label, (x, bottom + 13.0), Anchor::Centre, Type::SMALL)?;
        }
        Ok(())
    }

    /// What the masses are, below.
    pub fn mass_title(&self, paper: &Paper<'_>, text: &str) -> Result<(), DrawError> {
        paper.text(text, (self.left + 0.5 * self.width, self.bottom() + 34.0), Anchor::Centre, Type::LABEL)
    }

    /// What the values are, at the left edge of the sheet.
    pub fn value_title(&self, paper: &Paper<'_>, text: &str) -> Result<(), DrawError> {
        paper.text(text, (20.0, self.top + 0.5 * self.height), Anchor::Upwards, Type::LABEL)
    }
}
