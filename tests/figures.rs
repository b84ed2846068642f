//! Figures: well-formed, complete, inside their canvas. Set PEAKFOLD_FIGURES to a directory to look at them.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use peakfold::draw::{LabelledClosure, closure_figure, template_figure, template_figures};
use peakfold::model::{Closure, ClosurePoint, Deviation};
use peakfold::template::{LabelledTemplate, Template};

/// A Gaussian with a relative width, on an axis relative to the mass.
fn template(category: &str, mass_gev: f64, width: f64, axis: (f64, f64), bins: usize) -> LabelledTemplate {
    let edges: Vec<f64> =
        (0..=bins).map(|k| mass_gev * (axis.0 + (axis.1 - axis.0) * k as f64 / bins as f64)).collect();
    let cdf = |x: f64| 0.5 * libm::erfc(-(x / mass_gev - 1.0) / width / std::f64::consts::SQRT_2);
    LabelledTemplate {
        channel: "two-photon".to_owned(),
        category: category.to_owned(),
        mass_gev,
        shift: "nominal".to_owned(),
        template: Template {
            probability: edges.windows(2).map(|e| cdf(e[1]) - cdf(e[0])).collect(),
            below_axis: cdf(edges[0]),
            above_axis: 1.0 - cdf(edges[bins]),
            edges_gev: edges,
            error: vec![0.0; bins],
            list_error: vec![0.0; bins],
            acceptance: 0.4321,
            acceptance_error: 0.0,
            acceptance_list_error: 0.0,
            efficiency: 1.0,
            efficiency_error: 0.0,
            efficiency_list_error: 0.0,
            lost: 0.0,
            replicates: Vec::new(),
        },
    }
}

fn scene(categories: &[&str], masses: &[f64], width: f64, axis: (f64, f64), bins: usize) -> Vec<LabelledTemplate> {
    let each = |(k, category): (usize, &&str)| {
        let category = (*category).to_owned();
        masses
            .iter()
            .map(move |m| template(&category, *m, width * (1.0 + 0.3 * k as f64), axis, bins))
            .collect::<Vec<_>>()
    };
    categories.iter().enumerate().flat_map(each).collect()
}

fn figure(name: &str, channel: &str, templates: &[LabelledTemplate]) -> String {
    let svg = template_figure(channel, &templates.iter().collect::<Vec<_>>()).unwrap();
    if let Some(directory) = std::env::var_os("PEAKFOLD_FIGURES") {
        std::fs::write(std::path::Path::new(&directory).join(format!("{name}.svg")), &svg).unwrap();
    }
    check(name, &svg);
    svg
}

/// Value of an attribute in a tag.
fn attribute<'a>(tag: &'a str, name: &str) -> Option<&'a str> {
    let start = tag.find(&format!(" {name}=\""))? + name.len() + 3;
    tag[start..].split('"').next()
}

fn number(tag: &str, name: &str) -> f64 {
    attribute(tag, name).and_then(|v| v.parse().ok()).unwrap_or_else(|| panic!("{name} of <{tag}>"))
}

/// Elements are closed, numbers are numbers, and everything lies inside the canvas.
fn check(name: &str, svg: &str) {
    assert!(!svg.contains("NaN") && !svg.contains("inf\"") && !svg.contains("-2147483648"), "{name}");
    let mut open = Vec::new();
    let mut canvas = (0.0, 0.0);
    let mut texts: Vec<(f64, f64, f64, f64)> = Vec::new();
    for piece in svg.split('<').skip(1) {
        let (tag, text) = piece.split_once('>').unwrap_or_else(|| panic!("{name}: unclosed <{piece}"));
        assert!(
            !text.contains('&') || text.contains("&amp;") || text.contains("&lt;") || text.contains("&gt;"),
            "{name}: {text}"
        );
        if let Some(closed) = tag.strip_prefix('/') {
            assert_eq!(open.pop().as_deref(), Some(closed.trim()), "{name}");
            continue;
        }
        let element = tag.split([' ', '\n', '/']).next().unwrap();
        if !tag.ends_with('/') {
            open.push(element.to_owned());
        }
        let inside = |x: f64, y: f64| {
            assert!(
                x >= 0.0 && x <= canvas.0 && y >= 0.0 && y <= canvas.1,
                "{name}: ({x}, {y}) of <{tag}> is off {canvas:?}"
            );
        };
        match element {
            "svg" => {
                let sizes: Vec<f64> =
                    attribute(tag, "viewBox").unwrap().split(' ').map(|v| v.parse().unwrap()).collect();
                canvas = (sizes[2], sizes[3]);
                assert!((canvas.0 / number(tag, "width") - canvas.1 / number(tag, "height")).abs() < 1e-9);
            }
            "polyline" | "polygon" => {
                for point in attribute(tag, "points").unwrap().split_whitespace() {
                    let (x, y) = point.split_once(',').unwrap();
                    inside(x.parse().unwrap(), y.parse().unwrap());
                }
            }
            "line" => {
                inside(number(tag, "x1"), number(tag, "y1"));
                inside(number(tag, "x2"), number(tag, "y2"));
            }
            "rect" => {
                inside(number(tag, "x"), number(tag, "y"));
                inside(number(tag, "x") + number(tag, "width"), number(tag, "y") + number(tag, "height"));
            }
            "text" => {
                assert_eq!(attribute(tag, "font-family"), Some("sans-serif"), "{name}");
                let plain = text.trim().replace("&lt;", "<").replace("&gt;", ">").replace("&amp;", "&");
                // 0.5 em a character: what usual sans-serif fonts need on average.
                let (x, y, size) = (number(tag, "x"), number(tag, "y"), number(tag, "font-size"));
                let length = 0.5 * size * plain.chars().count() as f64;
                let (left, right) = match attribute(tag, "text-anchor") {
                    Some("middle") => (x - length / 2.0, x + length / 2.0),
                    Some("end") => (x - length, x),
                    _ => (x, x + length),
                };
                if attribute(tag, "transform").is_some() {
                    inside(x, y - length / 2.0);
                    inside(x, y + length / 2.0);
                } else {
                    inside(left, y);
                    inside(right, y);
                    texts.push((left, right, y, size));
                }
            }
            _ => {}
        }
    }
    assert!(open.is_empty(), "{name}: {open:?} are open");
    for (k, a) in texts.iter().enumerate() {
        for b in &texts[..k] {
            let apart = a.1 <= b.0 || b.1 <= a.0 || (a.2 - b.2).abs() >= 0.4 * (a.3 + b.3);
            // The index of sigma_eff hangs on its sigma on purpose.
            let index = f64::min(a.3, b.3) < 80.0;
            assert!(apart || index, "{name}: texts at {a:?} and {b:?} overlap");
        }
    }
}

const CATEGORIES: [&str; 4] = ["central", "one converted", "both converted", "rest"];
const SPREAD: [f64; 8] = [100.0, 130.0, 170.0, 220.0, 300.0, 400.0, 550.0, 800.0];
const CLOSE: [f64; 8] = [120.0, 122.0, 124.0, 125.0, 126.0, 128.0, 130.0, 135.0];

#[test]
fn every_number_of_categories_and_masses_is_drawn() {
    for categories in 1..=4 {
        for masses in 1..=8 {
            for (kind, list, width, axis) in [
                ("spread", SPREAD, 0.012, (0.8, 1.2)),
                ("close", CLOSE, 0.012, (0.8, 1.2)),
                ("wide", SPREAD, 0.1, (0.4, 1.6)),
                ("narrow", CLOSE, 0.012, (0.99, 1.012)),
            ] {
                let scene = scene(&CATEGORIES[..categories], &list[..masses], width, axis, 200);
                let svg = figure(&format!("{kind}-{categories}-{masses}"), "two-photon", &scene);
                for text in ["two-photon", "reconstructed mass [GeV]", "probability per GeV"] {
                    assert!(svg.contains(text), "{text}");
                }
                for category in &CATEGORIES[..categories] {
                    assert!(svg.contains(&format!("{category}: acceptance 43.2 %")), "{category}");
                }
                for mass in &list[..masses] {
                    assert_eq!(svg.matches(&format!("{mass} GeV\n")).count(), categories, "{mass}");
                }
                // An area for every curve.
                assert_eq!(svg.matches("<polygon").count(), categories * masses);
            }
        }
    }
}

#[test]
fn the_width_is_told() {
    // A Gaussian of 1.2 % at 150 GeV: sigma_eff 1.80 GeV.
    let svg = figure("width", "two-photon", &scene(&["all"], &[150.0], 0.012, (0.8, 1.2), 200));
    assert!(svg.contains("= 1.80 GeV"), "{svg}");
    // An axis that holds half of the events has no sigma_eff.
    let svg = figure("no-width", "two-photon", &scene(&["all"], &[150.0], 0.012, (0.992, 1.008), 20));
    assert!(svg.contains("width not on the axis"));
}

#[test]
fn odd_input_is_drawn_or_refused() {
    let mut scene = scene(&["a & b < c", &"long ".repeat(80)], &[150.0, 91.187612345678], 0.02, (0.8, 1.2), 100);
    scene[1].template.probability[50] = -0.05;
    scene[2].template.probability.fill(0.0);
    let svg = figure("odd", &"<channel & ".repeat(30), &scene);
    assert!(svg.contains("a &amp; b &lt; c"));
    figure("none", "empty", &[]);
    let one_bin = vec![template("all", 150.0, 0.02, (0.8, 1.2), 1)];
    figure("one-bin", "one bin", &one_bin);
    scene[0].template.probability[3] = f64::NAN;
    assert!(template_figures(&scene).is_err());
}

#[test]
fn files_are_named_after_channels() {
    let mut scene = scene(&["all"], &[150.0, 160.0, 170.0, 180.0], 0.02, (0.8, 1.2), 50);
    scene[1].channel = "a/b".to_owned();
    scene[2].channel = "a:b".to_owned();
    scene[3].shift = "photon-barrel.scale:plus".to_owned();
    let names: Vec<String> = template_figures(&scene).unwrap().into_iter().map(|f| f.0).collect();
    assert_eq!(names, ["figures/two-photon.svg", "figures/a_b.svg", "figures/a_b_.svg"]);
    assert!(!template_figures(&scene).unwrap()[0].1.contains("180 GeV"), "shifted templates are not drawn");
}

/// Invented deviations of a size, one per mass.
fn closure(masses: &[f64], size: f64) -> Closure {
    let point = |(k, &mass_gev): (usize, &f64)| {
        let wave = |phase: f64| size * libm::sin(2.1 * k as f64 + phase);
        let total = Deviation {
            peak_in_sigma_eff: Some(0.01 * wave(0.0)),
            sigma_eff_ratio: Some(1.0 + 0.006 * wave(1.0)),
            largest_cdf_difference: 0.002 * wave(2.0).abs(),
        };
        ClosurePoint { mass_gev, total, interpolation: total, acceptance_ratio: 1.0 + 0.004 * wave(3.0) }
    };
    Closure { points: masses.iter().enumerate().map(point).collect() }
}

#[test]
fn closure_of_every_number_of_categories_and_methods_is_drawn() {
    const METHODS: [&str; 4] = ["shape", "shape and residuals", "quantiles", "shape, simulated mass points"];
    for categories in 1..=4 {
        for methods in 1..=4 {
            for (kind, masses, size) in
                [("good", &SPREAD[..], 1.0), ("bad", &CLOSE[1..5], 30.0), ("one", &CLOSE[..1], 0.1)]
            {
                let all: Vec<Closure> = (0..methods).map(|k| closure(masses, size * (1.0 + 0.2 * k as f64))).collect();
                let labelled: Vec<LabelledClosure<'_>> = CATEGORIES[..categories]
                    .iter()
                    .flat_map(|category| {
                        METHODS.iter().zip(&all).map(|(method, closure)| LabelledClosure { category, method, closure })
                    })
                    .collect();
                let svg = closure_figure("two-photon", &labelled).unwrap();
                let name = format!("closure-{kind}-{categories}-{methods}");
                if let Some(directory) = std::env::var_os("PEAKFOLD_FIGURES") {
                    std::fs::write(std::path::Path::new(&directory).join(format!("{name}.svg")), &svg).unwrap();
                }
                check(&name, &svg);
                for text in CATEGORIES[..categories].iter().chain(&METHODS[..methods]) {
                    assert!(svg.contains(&format!("{text}\n")), "{name} {text}");
                }
                // A band per panel, a marker per point and method, and the legend.
                let panels = 4 * categories;
                let markers = panels * masses.len() * methods + methods + 1;
                assert_eq!(svg.matches("<polygon").count(), panels + markers, "{name}");
            }
        }
    }
    assert!(closure_figure("none", &[]).is_err());
    let mut odd = closure(&[120.0, 130.0], 1.0);
    odd.points[0].total.peak_in_sigma_eff = None;
    odd.points[1].total.sigma_eff_ratio = Some(f64::NAN);
    let labelled = LabelledClosure { category: "a < b", method: "shape & more", closure: &odd };
    let svg = closure_figure(&"long & ".repeat(40), &[labelled]).unwrap();
    check("closure-odd", &svg);
    assert!(svg.contains("a &lt; b") && svg.contains("shape &amp; more"));
}
