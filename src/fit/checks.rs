//! Fits of model curves whose second derivative is known.

use super::*;
use crate::units::{ANGSTROM_PER_BOHR, RADIAN_PER_DEGREE};
use std::f64::consts::PI;

/// A model curve with the place and second derivative of one minimum.
struct Case {
    name: String,
    coordinate: Coordinate,
    x: Vec<f64>,
    e: Vec<f64>,
    period: Option<f64>,
    minimum: f64,
    k: f64,
}

fn grid(from: f64, to: f64, step: f64) -> Vec<f64> {
    let n = ((to - from) / step + 1e-6).floor() as usize;
    (0..=n).map(|i| from + i as f64 * step).collect()
}

/// Second derivative of a smooth function by Richardson-extrapolated differences.
fn second(f: &dyn Fn(f64) -> f64, x: f64) -> f64 {
    let d = |h: f64| (f(x + h) - 2.0 * f(x) + f(x - h)) / (h * h);
    let h = 0.01;
    let (a, b, c) = (d(h), d(h / 2.0), d(h / 4.0));
    let (p, q) = ((4.0 * b - a) / 3.0, (4.0 * c - b) / 3.0);
    (16.0 * q - p) / 15.0
}

fn minimise(f: &dyn Fn(f64) -> f64, mut x: f64) -> f64 {
    for _ in 0..100 {
        let h = 1e-3;
        let slope = (8.0 * (f(x + h) - f(x - h)) - (f(x + 2.0 * h) - f(x - 2.0 * h))) / (12.0 * h);
        x -= slope / second(f, x);
    }
    x
}

fn cases() -> Vec<Case> {
    let mut out = Vec::new();
    let mut bond = |name: &str, f: &dyn Fn(f64) -> f64, start: f64, ranges: &[(f64, f64)]| {
        let minimum = minimise(f, start);
        let k = second(f, minimum);
        for &(from, to) in ranges {
            for shift in [0.0, 0.013, 0.025] {
                let x: Vec<f64> = grid(from + shift, to, 0.05)
                    .iter()
                    .map(|r| r / ANGSTROM_PER_BOHR)
                    .collect();
                out.push(Case {
                    name: format!("{name} {from}–{to} Å shifted {shift}"),
                    coordinate: Coordinate::Length,
                    e: x.iter().map(|&r| f(r)).collect(),
                    x,
                    period: None,
                    minimum,
                    k,
                });
            }
        }
    };
    let morse = |d: f64, a: f64, r0: f64| move |r: f64| d * (1.0 - (-a * (r - r0)).exp()).powi(2) - 76.0;
    bond("OH Morse", &morse(0.18, 1.21, 1.81), 1.81, &[(0.7, 3.0), (0.75, 1.3), (0.9, 2.0)]);
    bond("H2 Morse", &morse(0.17, 1.03, 1.40), 1.40, &[(0.4, 3.0), (0.6, 1.1)]);
    bond("N2 Morse", &morse(0.36, 1.42, 2.07), 2.07, &[(0.9, 2.5), (0.95, 1.4)]);
    bond("F2 Morse", &morse(0.06, 1.6, 2.66), 2.66, &[(1.1, 3.5), (1.3, 1.9)]);
    let lj = |eps: f64, r0: f64, n: f64| {
        move |r: f64| eps * ((r0 / r).powf(2.0 * n) - 2.0 * (r0 / r).powf(n)) - 1.0
    };
    bond("Lennard-Jones 12-6", &lj(0.05, 4.0, 6.0), 4.0, &[(1.7, 4.0), (2.0, 2.9)]);
    bond("Mie 8-4", &lj(0.15, 2.2, 4.0), 2.2, &[(0.9, 3.0)]);
    // Exponential repulsion and Coulomb attraction: ionic, far from Morse.
    bond("ionic", &|r| 40.0 * (-2.2 * r).exp() - 1.0 / r, 2.9, &[(1.0, 4.0), (1.2, 2.2)]);

    let mut angle = |name: &str, f: &dyn Fn(f64) -> f64, start: f64, ranges: &[(f64, f64)], all_round: bool| {
        let minimum = minimise(f, start);
        let k = second(f, minimum);
        for &(from, to) in ranges {
            for shift in [0.0, 1.3, 2.5] {
                let x: Vec<f64> = grid(from + shift, to + if all_round { shift } else { 0.0 }, 5.0)
                    .iter()
                    .map(|r| r * RADIAN_PER_DEGREE)
                    .collect();
                out.push(Case {
                    name: format!("{name} {from}–{to}° shifted {shift}"),
                    coordinate: Coordinate::Angle,
                    e: x.iter().map(|&r| f(r)).collect(),
                    x,
                    period: all_round.then_some(TAU),
                    minimum,
                    k,
                });
            }
        }
    };
    // A bend with a barrier to linearity and a repulsive wall at small angles.
    let bend = |t: f64| 0.09 * (t.cos() + 0.25).powi(2) + 0.02 * (-3.0 * (t - 1.0)).exp();
    angle("bend", &bend, 1.85, &[(60.0, 170.0), (80.0, 130.0), (95.0, 150.0)], false);
    let quartic = |t: f64| {
        let s = t - 1.82;
        0.17 * s * s / 2.0 - 0.05 * s.powi(3) + 0.03 * s.powi(4)
    };
    angle("quartic bend", &quartic, 1.82, &[(70.0, 145.0)], false);
    // H2O2-like: two minima at ±112°, low trans barrier, high cis barrier.
    let peroxide = |t: f64| {
        (994.0 * t.cos() + 617.0 * (2.0 * t).cos() + 47.0 * (3.0 * t).cos() + 5.0 * (4.0 * t).cos()
            + 0.6 * (5.0 * t).cos() + 0.1 * (6.0 * t).cos())
            / 219_474.63
    };
    angle("peroxide", &peroxide, 1.95, &[(0.0, 360.0), (-180.0, 175.0)], true);
    // The same torsion without symmetry, and a steep clash that no short series holds.
    let skew = |t: f64| peroxide(t) + 0.0008 * (t + 0.4).sin() + 0.0003 * (2.0 * t - 1.0).sin();
    angle("skew torsion", &skew, 1.95, &[(0.0, 360.0)], true);
    let clash = |t: f64| 0.0022 * (1.0 + (3.0 * t).cos()) + 0.004 * (2.5 * (t.cos() - 1.0)).exp();
    angle("clash torsion", &clash, PI, &[(0.0, 360.0)], true);
    out
}

fn settings(case: &Case) -> FitSettings {
    let mut s = FitSettings::default();
    s.extrema.period = case.period;
    s
}

fn check(case: &Case, form: Form, table: &mut String, failures: &mut Vec<String>) {
    use std::fmt::Write;
    let fits = fit_curve(&case.x, &case.e, form, case.coordinate, &settings(case)).unwrap();
    let fit = fits
        .fits
        .iter()
        .find(|f| (f.equilibrium - case.minimum).abs() < 0.05)
        .unwrap_or_else(|| panic!("{}: no fit at the minimum: {fits:?}", case.name));
    let error = (fit.force_constant - case.k) / case.k;
    let line = format!(
        "{form:?} {}: order {} on {} points, error of k {:+.5} %, spread {:.4} % ({} of {} trials), x0 error {:.1e}",
        case.name,
        fit.order,
        fit.window.points,
        100.0 * error,
        100.0 * fit.spread,
        fit.trials_accepted,
        fit.trials,
        fit.equilibrium - case.minimum,
    );
    let _ = writeln!(table, "{line}");
    if error.abs() > 3e-3 || error.abs() > fit.spread || fit.spread > 0.01 {
        failures.push(line);
    }
}

fn run(form: Form, wanted: impl Fn(&Case) -> bool) {
    let (mut table, mut failures) = (String::new(), Vec::new());
    for case in cases().iter().filter(|c| wanted(c)) {
        check(case, form, &mut table, &mut failures);
    }
    assert!(failures.is_empty(), "failed:\n{}\nall:\n{table}", failures.join("\n"));
}

#[test]
fn polynomial_constants_lie_within_a_tight_spread() {
    run(Form::Polynomial, |_| true);
}

#[test]
fn morse_constants_lie_within_a_tight_spread() {
    run(Form::Morse, |c| c.coordinate == Coordinate::Length);
}

#[test]
fn fourier_constants_lie_within_a_tight_spread() {
    run(Form::Fourier, |c| c.period.is_some());
}
