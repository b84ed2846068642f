//! Events as CSV (RFC 4180: comma-separated, quotes where needed), plain or gzip.
//!
//! The header names the columns. There are two layouts; both take the columns in any order.
//!
//! * **One row per event**: for each particle n = 1, 2, ... up to [`MOST_PARTICLES`] the columns `code{n}`, its momentum and
//!   perhaps `mass{n}_gev`. Where all fields of a particle are empty, the event does not have it.
//! * **One row per particle**: `event`, `code`, the momentum and perhaps `mass_gev`. The rows of an event follow each other;
//!   `event` is a whole number that rises through the file.
//!
//! | column | |
//! |---|---|
//! | `code` | particle code of the Review of Particle Physics: photon 22, electron 11, positron -11, muons 13 and -13, jets 1 to 5, -1 to -5 and 21 |
//! | `pt_gev`, `eta`, `phi_rad` | momentum by its transverse part, pseudorapidity and azimuth, or instead: |
//! | `px_gev`, `py_gev`, `pz_gev` | its components; the beam is along z |
//! | `mass_gev` | may be missing or empty: then the mass of the particle ([`Object::mass_gev`](crate::detector::Object::mass_gev)) |
//! | `weight` | of the event; may be negative, may be missing: 1 |
//! | `true_mass_gev` | true mass of the resonance; may be missing or empty: then the invariant mass of the legs |
//!
//! All particles are final ones; which of them become legs is told by the rules of [`Selector`](super::Selector). In rows per
//! particle, `weight` and `true_mass_gev` are the same in all rows of an event.
//!
//! Blank lines and lines that begin with `#` are skipped. A field ends on its line.
//!
//! # What is left out, what is refused
//!
//! Left out and counted, with the first line: events with a negative transverse momentum or mass, or with a momentum or direction
//! out of range (|eta| above [`MOST_ABS_ETA`], |phi| above 2 pi: degrees, most likely). A file with more than 1 % of them is
//! refused.
//!
//! Refused with the line: everything else, such as a column that is unknown, missing or there twice, a row with another number
//! of fields than the header, text or NaN where a finite number belongs, events out of order, rows of one event that differ in
//! weight or true mass, lines longer than 1 MiB, damaged or cut gzip data.

mod columns;
mod header;
mod parse;
mod scan;

use std::sync::Arc;

use header::Header;
pub(super) use scan::Scanner;

/// Most particles of a row that holds an event.
pub const MOST_PARTICLES: usize = 16;

/// Largest |eta| of a particle.
pub const MOST_ABS_ETA: f64 = 20.0;

/// Most rows of an event in the layout of one row per particle.
const MOST_ROWS: usize = 2_000;

/// Rows of complete events: text in which every line is one record.
#[derive(Clone, Debug, Default)]
pub(super) struct Chunk {
    text: Vec<u8>,
    /// Line of the file of each record.
    lines: Vec<usize>,
    header: Option<Arc<Header>>,
}

impl Chunk {
    pub(super) fn clear(&mut self) {
        self.text.clear();
        self.lines.clear();
    }

    pub(super) fn is_empty(&self) -> bool {
        self.lines.is_empty()
    }
}
