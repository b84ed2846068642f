//! CPU time of a fold of the reference scenario of `tests/benches/compare_fold.py`: two photons at 180 GeV, one thread
//! unless `--threads N`. Prints one JSON line per measurement.
//!
//! `cargo bench --bench fold -- [--precision 1e-3] [--threads 1] [--tails] [--repeats 5] [--out template.csv]`
#![allow(clippy::unwrap_used, clippy::expect_used)]

use peakfold::detector::{Calorimeter, Detector, Direction, EtaRange, Object, Tail, Vertex};
use peakfold::fold::fold_channel;
use peakfold::process::{
    Category, Channel, Cuts, Decay, EventList, EventSource, Intermediate, LegChoice, MassAxis, Natural, Production,
    Resonance, ShapeChoice, Study, Width,
};
use std::time::Instant;

fn calorimeter(name: &str, eta: (f64, f64), terms: (f64, f64, f64), tails: bool) -> Calorimeter {
    Calorimeter {
        name: name.to_string(),
        object: Object::Photon,
        eta: EtaRange { low: eta.0, high: eta.1 },
        stochastic: terms.0,
        noise_gev: terms.1,
        constant: terms.2,
        bias: 0.0,
        scale: 0.0,
        tail: tails.then_some(Tail { alpha_low: 1.6, n_low: 4.0, alpha_high: 2.0, n_high: 8.0 }),
        fraction: 1.0,
        uncertainties: Vec::new(),
    }
}

fn study(precision: f64, tails: bool) -> Study {
    Study {
        name: "reference scenario".to_string(),
        detector: Detector {
            name: "reference".to_string(),
            calorimeters: vec![
                calorimeter("barrel", (0.0, 1.4), (0.095, 0.25, 0.007), tails),
                calorimeter("endcap", (1.4, 10.0), (0.12, 0.40, 0.011), tails),
            ],
            trackers: Vec::new(),
            directions: vec![Direction {
                object: Object::Photon,
                sigma_theta_mrad: 1.0,
                sigma_phi_mrad: 1.0,
                uncertainties: Vec::new(),
            }],
            vertex: Some(Vertex {
                calorimeter_radius_m: 1.5,
                calorimeter_half_length_m: f64::INFINITY,
                right_choice: 0.8,
                spread_right_mm: 0.1,
                spread_wrong_mm: 45.0,
                uncertainties: Vec::new(),
            }),
            efficiencies: Vec::new(),
            covariances: Vec::new(),
        },
        seed: 1,
        precision,
        max_points: 1 << 30,
        prune_shifts_below: 0.0,
        expected_events: 1e4,
        resonance: Resonance {
            masses_gev: vec![180.0],
            width: Width::Gev(0.0),
            natural: Natural::Relativistic,
            falloff_power: 0.0,
            source: EventSource::Generated(Production::Spectrum { pt_mean_gev: 40.0, rapidity_sigma: 1.2 }),
            intermediate: Intermediate { mass_gev: 91.188, width_gev: 2.4955 },
            radiation: None,
        },
        channels: vec![Channel {
            name: "two-photon".to_string(),
            decay: Decay::Direct(vec![Object::Photon, Object::Photon]),
            choice: LegChoice::default(),
            cuts: Cuts {
                max_abs_eta: Some(2.5),
                gap_abs_eta: None,
                min_pt_gev: Vec::new(),
                min_pt_over_mass: vec![0.35, 0.25],
            },
            min_efficient_legs: None,
            axis: MassAxis { low: 150.0, high: 210.0, bins: 200, relative: false },
            shape: ShapeChoice::DoubleCrystalBall,
            categories: vec![Category { name: "all".to_string(), max_abs_eta: None }],
            simulated: Default::default(),
        }],
    }
}

/// CPU time of all threads of this process in seconds, where the system tells (Linux); else the elapsed time.
fn cpu_seconds(since: Instant) -> f64 {
    let tasks = std::fs::read_dir("/proc/self/task").into_iter().flatten().flatten();
    let nanoseconds: f64 = tasks
        .filter_map(|task| std::fs::read_to_string(task.path().join("schedstat")).ok())
        .filter_map(|line| line.split_whitespace().next().and_then(|word| word.parse::<f64>().ok()))
        .sum();
    if nanoseconds > 0.0 { 1e-9 * nanoseconds } else { since.elapsed().as_secs_f64() }
}

fn main() {
    let begun = Instant::now();
    let arguments: Vec<String> = std::env::args().collect();
    let option = |name: &str| arguments.iter().position(|a| a == name).and_then(|i| arguments.get(i + 1)).cloned();
    let precision: f64 = option("--precision").map_or(1e-3, |v| v.parse().expect("a number"));
    let threads: usize = option("--threads").map_or(1, |v| v.parse().expect("a number"));
    let repeats: usize = option("--repeats").map_or(5, |v| v.parse().expect("a number"));
    let mut study = study(precision, arguments.iter().any(|a| a == "--tails"));
    if let Some(path) = option("--list") {
        study.resonance.source = EventSource::File(EventList { path: path.into(), weight: None });
    }
    let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().expect("threads");
    let (mut wall, mut cpu, mut own, mut folded) = (f64::INFINITY, f64::INFINITY, f64::INFINITY, None);
    for _ in 0..repeats {
        let start = Instant::now();
        let cpu_start = cpu_seconds(begun);
        let result = pool.install(|| fold_channel(&study, 0, 180.0, &|_| ())).expect("a template");
        wall = wall.min(start.elapsed().as_secs_f64());
        cpu = cpu.min(cpu_seconds(begun) - cpu_start);
        own = own.min(result.record.cpu_seconds);
        folded = Some(result);
    }
    let folded = folded.expect("at least one repeat");
    let template = &folded.templates[0].template;
    println!(
        "{{\"what\":\"fold\",\"threads\":{threads},\"wall_s\":{wall:e},\"cpu_s\":{cpu:e},\"fold_s\":{own:e},\"points\":{},\"ns_per_point\":{},\"precision\":{:e},\"reached\":{},\"acceptance\":{}}}",
        folded.record.points,
        1e9 * cpu / folded.record.points as f64,
        folded.record.precision_reached,
        folded.record.reached,
        template.acceptance,
    );
    if let Some(path) = option("--out") {
        let rows: Vec<String> = template.probability.iter().map(|p| format!("{}", p * template.acceptance)).collect();
        std::fs::write(path, rows.join("\n") + "\n").expect("a file");
    }
}
