//! What the tests of event files share.
#![allow(dead_code, clippy::unwrap_used, clippy::expect_used, clippy::panic)]

pub mod made;
pub mod mutate;

use std::io::Read;
use std::path::{Path, PathBuf};

use peakfold::events::{EventBatch, Particle, RawEvent};
use peakfold::events::{EventFile, Options, Report};
use peakfold::problem::Problem;

/// An event with rows of its own.
#[derive(Clone, Debug, PartialEq)]
pub struct Owned {
    pub particles: Vec<Particle>,
    pub weight: f64,
    pub true_mass_gev: Option<f64>,
    pub line: usize,
    pub group: u64,
}

impl Owned {
    pub fn event(&self) -> RawEvent<'_> {
        RawEvent {
            particles: &self.particles,
            weight: self.weight,
            true_mass_gev: self.true_mass_gev,
            line: self.line,
            group: self.group,
        }
    }
}

/// What reading to the end gave: the events that were handed out, and the report or the problem.
pub struct Reading {
    pub events: Vec<Owned>,
    pub outcome: Result<Report, Problem>,
}

impl Reading {
    pub fn report(&self) -> Report {
        self.outcome.clone().expect("the file is accepted")
    }

    pub fn problem(&self) -> Problem {
        self.outcome.clone().expect_err("the file is refused")
    }

    /// The problem as the user sees it has this line and these words.
    pub fn assert_refused(&self, line: Option<usize>, words: &[&str]) {
        let problem = self.problem();
        assert_eq!(problem.line, line, "{problem}");
        for word in words {
            assert!(problem.to_string().contains(word), "`{word}` is missing in: {problem}");
        }
    }
}

fn collect(batch: &EventBatch, events: &mut Vec<Owned>) {
    events.extend(batch.events().map(|e| Owned {
        particles: e.particles.to_vec(),
        weight: e.weight,
        true_mass_gev: e.true_mass_gev,
        line: e.line,
        group: e.group,
    }));
}

fn drain(file: Result<EventFile<'_>, Problem>) -> Reading {
    let mut events = Vec::new();
    let mut batch = EventBatch::default();
    let outcome = file.and_then(|mut file| {
        loop {
            let more = file.next_batch(&mut batch);
            collect(&batch, &mut events);
            if !more? {
                return Ok(*file.report());
            }
        }
    });
    Reading { events, outcome }
}

pub fn read_with(input: impl Read + Send, options: &Options) -> Reading {
    drain(EventFile::from_reader(Path::new("memory.lhe"), input, options))
}

pub fn read_text(text: &str) -> Reading {
    read_with(text.as_bytes(), &Options::default())
}

pub fn read_path(path: &Path) -> Reading {
    drain(EventFile::open(path, &Options::default()))
}

/// The same by the parallel way.
pub fn read_parallel(path: &Path) -> Reading {
    let mut events = Vec::new();
    let outcome = EventFile::open(path, &Options::default()).and_then(|mut file| {
        file.for_each_batch(|batch| {
            collect(batch, &mut events);
            Ok::<(), Problem>(())
        })?;
        Ok(*file.report())
    });
    Reading { events, outcome }
}

pub fn data(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data").join(name)
}

pub fn sample(name: &str) -> String {
    std::fs::read_to_string(data("lhe").join(name)).expect("a sample of the project")
}

/// The text of the extract of 200 events.
pub fn extract() -> String {
    let file = std::fs::File::open(data("dilepton_200.lhe.gz")).expect("the extract");
    let mut text = String::new();
    flate2::read::GzDecoder::new(file).read_to_string(&mut text).expect("gzip text");
    text
}

/// The file of 10 000 events, where it is at hand.
pub fn full_file() -> Option<PathBuf> {
    let root = std::env::var_os("PEAKFOLD_SHARED_DATA")
        .map_or_else(|| Path::new(env!("CARGO_MANIFEST_DIR")).join("../shared/data"), PathBuf::from);
    let path = root.join("dilepton_events.lhe.gz");
    if path.is_file() {
        return Some(path);
    }
    println!("skipped: {} is not there (set PEAKFOLD_SHARED_DATA)", path.display());
    None
}

/// Frame of a small file around the text of events.
pub fn framed(events: &str) -> String {
    format!(
        "<LesHouchesEvents version=\"1.0\">\n<init>\n2212 2212 6500 6500 0 0 247000 247000 -4 1\n1 0.1 1 1\n</init>\n{events}\
         </LesHouchesEvents>\n"
    )
}

/// The text between `<event>` and `</event>` of the first event of the two-photon sample.
pub fn photon_event() -> String {
    let text = sample("x_gammagamma.lhe");
    let start = text.find("<event>\n").unwrap() + 8;
    text[start..text.find("</event>").unwrap()].to_owned()
}
