//! From rows to events.

use ::csv::ByteRecord;

use super::header::{Header, Momentum, ParticleColumns};
use super::scan::records;
use super::{Chunk, MOST_ABS_ETA, MOST_ROWS};
use crate::events::consistency::Inconsistency;
use crate::events::numbers::{NumberFault, float, integer, shown};
use crate::events::raw::{EventBatch, FINAL, Particle};
use crate::events::report::Report;
use crate::events::select::object_of;
use crate::problem::Problem;

/// 2 pi, and a little for what was rounded.
const MOST_ABS_PHI: f64 = std::f64::consts::TAU + 1e-6;

impl Chunk {
    /// Adds the events to a batch; gives what was noticed.
    pub(in crate::events) fn parse(&self, batch: &mut EventBatch) -> Result<Report, Problem> {
        let mut report = Report::default();
        let Some(header) = &self.header else { return Ok(report) };
        let mut rows = Rows { header, line: 0, record: ByteRecord::new(), d_exponents: 0 };
        let mut reader = records(&self.text);
        let mut open: Option<Open> = None;
        for line in &self.lines {
            rows.line = *line;
            let whole = reader.read_byte_record(&mut rows.record).unwrap_or(false);
            if !whole || rows.record.len() != header.names.len() {
                let (found, allowed) = (rows.record.len(), header.names.len());
                let message =
                    format!("the row has {found} fields, the header {allowed}; they must have the same number");
                return Err(Problem::at_line(&header.file, *line, message));
            }
            rows.d_exponents = 0;
            let row = rows.read()?;
            match &mut open {
                Some(event) if row.event.is_some() && event.row.event == row.event => event.extend(&row, &rows)?,
                _ => {
                    if let Some(event) = open.take() {
                        if let (Some(before), Some(now)) = (event.row.event, row.event)
                            && now < before
                        {
                            return Err(out_of_order(header, *line, before, now));
                        }
                        event.complete(batch, &mut report);
                    }
                    open = Some(Open { row, line: *line, rows: 1 });
                }
            }
            report.d_exponents.add(rows.d_exponents, *line);
            for columns in &header.particles {
                let Some(particle) = rows.particle(columns)? else { continue };
                match particle {
                    Ok(particle) => batch.push_particle(particle),
                    Err(fault) => {
                        if let Some(event) = &mut open {
                            event.row.fault = event.row.fault.or(Some(fault));
                        }
                    }
                }
            }
        }
        if let Some(event) = open {
            event.complete(batch, &mut report);
        }
        Ok(report)
    }
}

/// What a row says of its event.
#[derive(Clone, Copy, Debug)]
struct Row {
    event: Option<i64>,
    weight: f64,
    true_mass_gev: Option<f64>,
    fault: Option<Inconsistency>,
}

/// An event whose rows are being read.
struct Open {
    row: Row,
    line: usize,
    rows: usize,
}

impl Open {
    /// Adds a further row.
    fn extend(&mut self, row: &Row, rows: &Rows<'_>) -> Result<(), Problem> {
        self.rows += 1;
        if self.rows > MOST_ROWS {
            return Err(rows.problem(rows.header.event, format!("the event has more than {MOST_ROWS} rows")));
        }
        let line = self.line;
        if row.weight != self.row.weight {
            let message = format!("is {}, but {} on line {line}; an event has one weight", row.weight, self.row.weight);
            return Err(rows.problem(rows.header.weight, message));
        }
        if row.true_mass_gev != self.row.true_mass_gev {
            let text = |mass: Option<f64>| mass.map_or("empty".to_owned(), |mass| mass.to_string());
            let message = format!(
                "is {}, but {} on line {line}; an event has one true mass",
                text(row.true_mass_gev),
                text(self.row.true_mass_gev)
            );
            return Err(rows.problem(rows.header.true_mass, message));
        }
        Ok(())
    }

    fn complete(self, batch: &mut EventBatch, report: &mut Report) {
        report.events += 1;
        match self.row.fault {
            Some(fault) => {
                batch.drop_pending();
                report.count_inconsistent(fault, self.line);
            }
            // Lines rise, so that they number the events.
            None => batch.complete(self.row.weight, self.row.true_mass_gev, self.line, self.line as u64),
        }
    }
}

/// Reads the fields of one row after the other.
struct Rows<'a> {
    header: &'a Header,
    line: usize,
    record: ByteRecord,
    d_exponents: u64,
}

impl Rows<'_> {
    fn problem(&self, column: Option<usize>, message: String) -> Problem {
        let problem = Problem::at_line(&self.header.file, self.line, message);
        match column.and_then(|column| self.header.names.get(column)) {
            Some(name) => problem.with_key(name),
            None => problem,
        }
    }

    fn field(&self, column: usize) -> &[u8] {
        self.record.get(column).unwrap_or_default()
    }

    fn value<T>(
        &mut self,
        column: usize,
        read: impl FnOnce(&[u8], &mut u64) -> Result<T, NumberFault>,
    ) -> Result<T, Problem> {
        let mut d_exponents = 0;
        let field = self.field(column);
        let value = read(field, &mut d_exponents).map_err(|fault| {
            let found = if field.is_empty() { "empty".to_owned() } else { shown(field) };
            self.problem(Some(column), format!("is {found}, {fault}"))
        })?;
        self.d_exponents += d_exponents;
        Ok(value)
    }

    /// A number that may be left out.
    fn optional(&mut self, column: Option<usize>) -> Result<Option<f64>, Problem> {
        match column {
            Some(column) if !self.field(column).is_empty() => self.value(column, float).map(Some),
            _ => Ok(None),
        }
    }

    fn read(&mut self) -> Result<Row, Problem> {
        let event = self.header.event.map(|column| self.value(column, integer)).transpose()?;
        let weight = self.header.weight.map_or(Ok(1.0), |column| self.value(column, float))?;
        let true_mass_gev = self.optional(self.header.true_mass)?;
        let fault = true_mass_gev.is_some_and(|mass| mass < 0.0).then_some(Inconsistency::Sign);
        Ok(Row { event, weight, true_mass_gev, fault })
    }

    /// A particle of the row, or what is wrong with its numbers; `None` where all of its fields are empty.
    fn particle(&mut self, columns: &ParticleColumns) -> Result<Option<Result<Particle, Inconsistency>>, Problem> {
        if self.header.event.is_none() && columns.all().all(|column| self.field(column).is_empty()) {
            return Ok(None);
        }
        let code = self.value(columns.code, integer)?;
        let mass = self.optional(columns.mass)?;
        let mass = mass.unwrap_or_else(|| object_of(code).map_or(0.0, |(object, _)| object.mass_gev()));
        let mut negative = mass < 0.0;
        let mut beyond = false;
        let [px, py, pz] = match columns.momentum {
            Momentum::Cartesian([x, y, z]) => [self.value(x, float)?, self.value(y, float)?, self.value(z, float)?],
            Momentum::Polar([pt, eta, phi]) => {
                let (pt, eta, phi) = (self.value(pt, float)?, self.value(eta, float)?, self.value(phi, float)?);
                negative |= pt < 0.0;
                beyond = eta.abs() > MOST_ABS_ETA || phi.abs() > MOST_ABS_PHI;
                [pt * libm::cos(phi), pt * libm::sin(phi), pt * libm::sinh(eta.clamp(-MOST_ABS_ETA, MOST_ABS_ETA))]
            }
        };
        if negative {
            return Ok(Some(Err(Inconsistency::Sign)));
        }
        let squared = px * px + py * py + pz * pz + mass * mass;
        if beyond || !squared.is_finite() {
            return Ok(Some(Err(Inconsistency::OutOfRange)));
        }
        Ok(Some(Ok(Particle { code, status: FINAL, mothers: [0, 0], px, py, pz, e: squared.sqrt(), mass })))
    }
}

/// The refusal of an event that comes after one of a larger number.
pub(super) fn out_of_order(header: &Header, line: usize, before: i64, now: i64) -> Problem {
    let message = format!(
        "is {now} after {before}; events must be numbered in rising order, and the rows of one event must follow each other"
    );
    let problem = Problem::at_line(&header.file, line, message);
    match header.event.and_then(|column| header.names.get(column)) {
        Some(name) => problem.with_key(name),
        None => problem,
    }
}
