//! Events that contradict themselves: found to the digits that were printed, left out when few, refused when many.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod lhe_support;

use lhe_support::*;

/// One bad event in 200 is left out and counted; three are more than 1 %.
#[test]
fn few_inconsistent_events_are_left_out() {
    let text = extract();
    let spoilt = |count: usize| {
        let mut parts: Vec<String> = text.split("</event>").map(str::to_owned).collect();
        for part in parts.iter_mut().skip(20).step_by(50).take(count) {
            // The last row is a final particle: its energy, column 10, is moved.
            let row = part.trim_end().rfind('\n').unwrap() + 1;
            let energy = part[row..].split_whitespace().nth(9).unwrap().to_owned();
            *part = format!("{}{}", &part[..row], part[row..].replace(&energy, "0.77777777E+03"));
        }
        read_text(&parts.join("</event>"))
    };
    for count in [1, 2] {
        let reading = spoilt(count);
        let report = reading.report();
        assert_eq!((report.events, reading.events.len()), (200, 200 - count));
        assert_eq!(report.inconsistent_events().count, count as u64);
        assert!(report.warnings()[0].contains(&format!("{count} of 200 events were left out")));
    }
    spoilt(3).assert_refused(Some(read_text(&text).events[20].line), &["3 of 200 events"]);
}

/// The particle rows of a text with each momentum, energy and mass written anew; `change` gets row, column and value.
fn rewritten(text: &str, change: impl Fn(usize, usize, f64) -> String) -> String {
    let mut row = 0;
    let lines = text.lines().map(|line| {
        let words: Vec<&str> = line.split_whitespace().collect();
        if words.len() != 13 {
            return line.to_owned();
        }
        row += 1;
        let words = words.iter().enumerate().map(|(column, word)| match column {
            6..=10 => change(row, column, word.parse().unwrap()),
            _ => (*word).to_owned(),
        });
        words.collect::<Vec<_>>().join(" ")
    });
    lines.collect::<Vec<_>>().join("\n") + "\n"
}

/// Files of fewer digits are read: rounding to 4 to 10 significant digits, or to 2 to 8 decimals, is no contradiction. The
/// apparent mass of a light particle is then far from its mass column.
#[test]
fn rounding_is_no_contradiction() {
    let texts = [sample("x_gammagamma.lhe"), sample("x_zz4l.lhe"), extract()];
    for text in &texts {
        let count = read_text(text).report().events;
        for digits in 4..=10_usize {
            let exponent = rewritten(text, |_, _, value| format!("{value:.*e}", digits - 1));
            let fixed = rewritten(text, |_, _, value| format!("{value:.*}", digits - 2));
            // As many significant digits without exponent, trailing zeros left out.
            let general = rewritten(text, |_, _, value| {
                let rounded: f64 = format!("{value:.*e}", digits - 1).parse().unwrap();
                format!("{rounded}")
            });
            for rounded in [exponent, fixed, general] {
                let reading = read_text(&rounded);
                assert_eq!(
                    reading.report().inconsistent_events().count,
                    0,
                    "{digits}: {:?}",
                    reading.report().warnings()
                );
                assert_eq!(reading.events.len() as u64, count);
            }
        }
    }
}

/// Numbers that are written with as few digits as they need do not make the reader careless: the longest of the event counts.
#[test]
fn one_short_number_is_a_contradiction() {
    let text = sample("x_gammagamma.lhe");
    // Row 3 of the sample is the resonance of the first event: E = 130.66731427, m = 125.
    for (column, short) in [(9, "1.3e2"), (9, "131"), (9, "130.7"), (10, "1.3e2"), (10, "1e2"), (8, "38."), (8, "38.1")]
    {
        let changed =
            rewritten(
                &text,
                |row, c, value| {
                    if (row, c) == (3, column) { short.to_owned() } else { format!("{value:.10e}") }
                },
            );
        let reading = read_text(&changed);
        assert_eq!(reading.events.len(), 2, "{short} in column {column}");
        assert!(reading.outcome.is_err());
    }
}

/// Each kind of contradiction is told by its name. Changes are 1e-5 of the energies, a hundred times what is tolerated in a
/// file of 11 digits; a change of 1e-9 is rounding.
#[test]
fn every_kind_is_found() {
    let text = sample("x_gammagamma.lhe");
    // Rows 1 and 2 come in, row 3 is the resonance, rows 4 and 5 are the photons.
    let changed = |change: &dyn Fn(usize, usize, f64) -> f64| {
        read_text(&rewritten(&text, |row, column, value| format!("{:.10e}", change(row, column, value))))
    };
    let refused = |words: &str, change: &dyn Fn(usize, usize, f64) -> f64| {
        let reading = changed(change);
        assert_eq!(reading.events.len(), 2);
        reading.assert_refused(Some(9), &["1 of 3 events", words]);
    };
    for factor in [1.0 - 1e-5, 1.0 + 1e-5] {
        refused("far from its m²", &|row, column, v| if (row, column) == (4, 9) { v * factor } else { v });
        refused("far from its m²", &|row, column, v| if (row, column) == (1, 8) { v * factor } else { v });
        // Photons stay massless when all of the momentum is scaled.
        refused("incoming and final", &|row, column, v| if row == 4 && column >= 6 { v * factor } else { v });
        refused("a resonance and its daughters", &|row, column, v| {
            if row == 3 && column >= 6 { v * factor } else { v }
        });
    }
    refused("negative", &|row, column, v| if (row, column) == (4, 9) { -v } else { v });
    refused("negative", &|row, column, v| if (row, column) == (3, 10) { -v } else { v });
    // Too large to be squared.
    refused("far from its m²", &|row, column, v| if (row, column) == (4, 9) { 1e200 } else { v });
    let fine = changed(&|row, column, v| if (row, column) == (4, 9) { v * (1.0 + 1e-9) } else { v });
    assert_eq!(fine.events.len(), 3);
}

/// What cannot be checked is not held against an event: no incoming particles, mothers that are a range.
#[test]
fn what_cannot_be_checked_is_used() {
    let text = sample("x_gammagamma.lhe");
    let no_incoming = text.replace(" 21 -1 ", " 21 3 ");
    assert_eq!(read_text(&no_incoming).report().inconsistent_events().count, 0);
    let range = text.replace(" 22  1    3    3 ", " 22  1    1    2 ");
    assert_eq!(read_text(&range).report().inconsistent_events().count, 0);
}
