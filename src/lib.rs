//! peakfold folds the measured resolution of a detector into the line shape of a reconstructed mass.
//!
//! # Conventions, stated once
//!
//! * Energies, momenta and masses are in GeV with c = 1; lengths and angles carry their unit in the name.
//! * The beam axis is z. Pseudorapidity `eta` and polar angle `theta` are related by `cot(theta) = sinh(eta)`.
//! * A *response* is the distribution of measured over true value of one decay product (a *leg*).
//! * A *template* is probability per bin of reconstructed mass and accepted event: its bins and the parts below
//!   and above the axis add to 1. *Acceptance* is counted apart.
//! * A line shape is a density per GeV that integrates to 1.
//! * Random numbers come only from seeds; results do not depend on the number of threads.
//! * Errors are values. No function panics on bad input.
//!
//! # Rooms
//!
//! A module imports only from modules that stand before it in this list: [`problem`], [`numerics`], [`kinematics`], [`lineshape`],
//! [`fit`], [`detector`], [`process`], [`events`], [`template`], [`fold`], [`shift`], [`model`], [`results`], [`files`],
//! [`draw`], [`cli`].

pub mod problem;

pub mod numerics;

pub mod kinematics;

pub mod lineshape;

pub mod fit;

pub mod detector;

pub mod process;

pub mod events;

pub mod template;

pub mod fold;

pub mod model;

pub mod results;
pub mod shift;

pub mod files;

pub mod draw;

pub mod cli;
