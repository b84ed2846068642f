//! The command `shape`: its whole output and what it says to bad input.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use std::process::{Command, Output};

fn shape(arguments: &str) -> Output {
    Command::new(env!("CARGO_BIN_EXE_peakfold")).arg("shape").args(arguments.split_whitespace()).output().unwrap()
}

fn stdout(arguments: &str) -> String {
    let output = shape(arguments);
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    String::from_utf8(output.stdout).unwrap()
}

const BOTH_TAILS: &str =
    "--mass 125 --resolution double-crystal-ball --sigma 1.3 --alpha-low 1.4 --n-low 4 --alpha-high 1.7 --n-high 20";

/// Header, 17 digits, the order asked for, negative masses; the numbers are those of tests/reference/voigt.csv and of
/// `math.erf` (Python 3).
#[test]
fn prints_csv() {
    let text = stdout("--natural breit-wigner --mass 0 --width 2 --resolution gaussian --sigma 1 --at -2,0,5");
    let lines: Vec<&str> = text.lines().collect();
    assert_eq!(lines[0], "m_gev,pdf,cdf");
    assert_eq!(lines.len(), 4);
    for (line, (m, pdf)) in
        lines[1..].iter().zip([(-2.0, 0.09071519942627543), (0.0, 0.20870928052036772), (5.0, 0.013884921288571252)])
    {
        let fields: Vec<&str> = line.split(',').collect();
        assert_eq!(fields.len(), 3);
        for field in &fields {
            let digits = field.split('e').next().unwrap().chars().filter(char::is_ascii_digit).count();
            assert_eq!(digits, 17, "{field}");
        }
        assert_eq!(fields[0].parse::<f64>().unwrap(), m);
        let found: f64 = fields[1].parse().unwrap();
        assert!((found / pdf - 1.0).abs() < 1e-13, "{found} not {pdf}");
    }
    assert!((lines[2].split(',').nth(2).unwrap().parse::<f64>().unwrap() - 0.5).abs() < 1e-10);
}

#[test]
fn spreads_points() {
    let text = stdout("--mass 10 --resolution gaussian --sigma 1 --from 8 --to 12 --points 5");
    let masses: Vec<f64> = text.lines().skip(1).map(|l| l.split(',').next().unwrap().parse().unwrap()).collect();
    assert_eq!(masses, [8.0, 9.0, 10.0, 11.0, 12.0]);
    let text = stdout("--mass 10 --resolution gaussian --sigma 1 --from -1 --to 1");
    assert_eq!(text.lines().count(), 102);
}

/// sigma_eff and the central interval by mpmath; FWHM/2.35482 is sigma while the joins lie outside the half maximum.
#[test]
fn prints_widths() {
    let text = stdout(&format!("{BOTH_TAILS} --widths"));
    let expected = "\
width                                                GeV
peak                                         125.0000000
mean                                         124.7454319
standard deviation                             2.1081249
FWHM                                           3.0612661
FWHM / 2.35482                                 1.3000000
sigma_eff (half the narrowest 68.27 %)         1.4467424
  from                                       123.5532575
  to                                         126.4467423
half the central 68.27 %                       1.4559808
";
    assert_eq!(text, expected);
    let text = stdout("--natural breit-wigner --mass 91 --width 2 --widths");
    assert!(text.contains("mean                                           undefined\n"), "{text}");
}

#[test]
fn draws() {
    let directory = tempfile::tempdir().unwrap();
    let file = directory.path().join("shape.svg");
    let text = stdout(&format!("{BOTH_TAILS} --plot {}", file.display()));
    assert_eq!(text, "");
    let svg = std::fs::read_to_string(&file).unwrap();
    assert!(svg.starts_with("<svg") && svg.trim_end().ends_with("</svg>"));
    assert!(svg.contains("mass [GeV]") && svg.contains("σ_eff = 1.447 GeV"), "labels");
    assert_eq!(std::fs::read_dir(directory.path()).unwrap().count(), 1);
    let output = shape(&format!("{BOTH_TAILS} --plot {}/none/shape.svg", directory.path().display()));
    assert_eq!(output.status.code(), Some(1));
}

#[test]
fn names_what_is_wrong() {
    for (arguments, status, message) in [
        (
            "--mass 125 --resolution crystal-ball --sigma 1 --alpha-low 1 --n-low 0.7 --at 1",
            1,
            "peakfold: --n-low is 0.7; it must be a finite number above 1\n",
        ),
        (
            "--mass 125 --resolution gaussian --sigma -1 --at 1",
            1,
            "peakfold: --sigma is -1; it must be a finite number above 0\n",
        ),
        (
            "--natural relativistic --mass -5 --width 1 --at 1",
            1,
            "peakfold: --mass is -5; it must be a finite number above 0\n",
        ),
        (
            "--natural relativistic --mass 91 --width nan --at 1",
            1,
            "peakfold: --width is NaN; it must be a finite number above 0\n",
        ),
        (
            "--natural relativistic --mass 91 --width 2 --falloff-power -3 --at 1",
            1,
            "peakfold: --falloff-power is -3; it must be from 0 to 100\n",
        ),
        ("--natural relativistic --mass 91 --at 1", 2, "peakfold: relativistic needs --width\n"),
        (
            "--mass 91 --resolution gaussian --sigma 1 --k-low 1 --at 1",
            2,
            "peakfold: --k-low has no meaning with --resolution gaussian; leave it out\n",
        ),
        (
            "--mass 91 --at 1",
            2,
            "peakfold: a line with a perfect resolution has no density; give a width or a resolution: --natural and \
             --resolution are both none\n",
        ),
        (
            "--mass 91 --resolution gaussian --sigma 1 --from 5 --to 2",
            1,
            "peakfold: --from is 5 and --to is 2; --from must be below --to\n",
        ),
        (
            "--mass 91 --resolution gaussian --sigma 1 --from 1 --to 2 --points 1",
            1,
            "peakfold: --points is 1; it must be from 2 to 10000000\n",
        ),
        (
            "--mass 91 --resolution gaussian --sigma 1 --at inf",
            1,
            "peakfold: a mass is inf; masses must be finite numbers\n",
        ),
        (
            "--mass 91 --resolution gaussian --sigma 1",
            2,
            "peakfold: nothing is asked for; give --at MASSES, or --from and --to, or --widths, or --plot FILE.svg\n",
        ),
    ] {
        let output = shape(arguments);
        assert_eq!(String::from_utf8_lossy(&output.stderr), message, "{arguments}");
        assert_eq!(output.status.code(), Some(status), "{arguments}");
        assert!(output.stdout.is_empty(), "{arguments}");
    }
    // Usage that clap itself refuses.
    for arguments in ["", "--mass x --at 1", "--mass 1 --natural lorentz --at 1", "--mass 1 --at 1 --from 2 --to 3"] {
        assert_eq!(shape(arguments).status.code(), Some(2), "{arguments}");
    }
}
