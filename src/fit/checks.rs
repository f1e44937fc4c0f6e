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
    let morse =
        |d: f64, a: f64, r0: f64| move |r: f64| d * (1.0 - (-a * (r - r0)).exp()).powi(2) - 76.0;
    bond(
        "OH Morse",
        &morse(0.18, 1.21, 1.81),
        1.81,
        &[(0.7, 3.0), (0.75, 1.3), (0.9, 2.0)],
    );
    bond(
        "H2 Morse",
        &morse(0.17, 1.03, 1.40),
        1.40,
        &[(0.4, 3.0), (0.6, 1.1)],
    );
    bond(
        "N2 Morse",
        &morse(0.36, 1.42, 2.07),
        2.07,
        &[(0.9, 2.5), (0.95, 1.4)],
    );
    bond(
        "F2 Morse",
        &morse(0.06, 1.6, 2.66),
        2.66,
        &[(1.1, 3.5), (1.3, 1.9)],
    );
    let lj = |eps: f64, r0: f64, n: f64| {
        move |r: f64| eps * ((r0 / r).powf(2.0 * n) - 2.0 * (r0 / r).powf(n)) - 1.0
    };
    bond(
        "Lennard-Jones 12-6",
        &lj(0.05, 4.0, 6.0),
        4.0,
        &[(1.7, 4.0), (2.0, 2.9)],
    );
    bond("Mie 8-4", &lj(0.15, 2.2, 4.0), 2.2, &[(0.9, 3.0)]);
    // Exponential repulsion and Coulomb attraction: ionic, far from Morse.
    bond(
        "ionic",
        &|r| 40.0 * (-2.2 * r).exp() - 1.0 / r,
        2.9,
        &[(1.0, 4.0), (1.2, 2.2)],
    );

    let mut angle =
        |name: &str, f: &dyn Fn(f64) -> f64, start: f64, ranges: &[(f64, f64)], all_round: bool| {
            let minimum = minimise(f, start);
            let k = second(f, minimum);
            for &(from, to) in ranges {
                for shift in [0.0, 1.3, 2.5] {
                    let x: Vec<f64> =
                        grid(from + shift, to + if all_round { shift } else { 0.0 }, 5.0)
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
    angle(
        "bend",
        &bend,
        1.85,
        &[(60.0, 170.0), (80.0, 130.0), (95.0, 150.0)],
        false,
    );
    let quartic = |t: f64| {
        let s = t - 1.82;
        0.17 * s * s / 2.0 - 0.05 * s.powi(3) + 0.03 * s.powi(4)
    };
    angle("quartic bend", &quartic, 1.82, &[(70.0, 145.0)], false);
    // H2O2-like: two minima at ±112°, low trans barrier, high cis barrier.
    let peroxide = |t: f64| {
        (994.0 * t.cos()
            + 617.0 * (2.0 * t).cos()
            + 47.0 * (3.0 * t).cos()
            + 5.0 * (4.0 * t).cos()
            + 0.6 * (5.0 * t).cos()
            + 0.1 * (6.0 * t).cos())
            / 219_474.63
    };
    angle(
        "peroxide",
        &peroxide,
        1.95,
        &[(0.0, 360.0), (-180.0, 175.0)],
        true,
    );
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
    assert!(
        failures.is_empty(),
        "failed:\n{}\nall:\n{table}",
        failures.join("\n")
    );
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

#[test]
fn coarse_noisy_and_few_points_keep_an_honest_spread() {
    let v = |r: f64| 0.18 * (1.0 - (-1.21 * (r - 1.81)).exp()).powi(2);
    let k = 2.0 * 0.18 * 1.21 * 1.21;
    // Deterministic noise of the size of a loosely converged energy.
    let noise = |i: usize| ((i * 7919 % 101) as f64 / 50.0 - 1.0) * 1e-8;
    for step in [0.02, 0.05, 0.1] {
        for from in [0.72, 0.745] {
            let x: Vec<f64> = grid(from, 2.0, step)
                .iter()
                .map(|r| r / ANGSTROM_PER_BOHR)
                .collect();
            let e: Vec<f64> = x
                .iter()
                .enumerate()
                .map(|(i, &r)| v(r) + noise(i))
                .collect();
            for form in [Form::Polynomial, Form::Morse] {
                let fits = fit_curve(&x, &e, form, Coordinate::Length, &FitSettings::default());
                let fit = &fits.unwrap().fits[0];
                let error = (fit.force_constant / k - 1.0).abs();
                assert!(
                    error <= fit.spread && fit.spread < 0.01,
                    "{step} {form:?} {error} {fit:?}"
                );
            }
        }
    }
    // Five points hold a parabola and nothing else: the spread must say how bad that is.
    let x: Vec<f64> = (0..5).map(|i| 1.6 + 0.1 * f64::from(i)).collect();
    let e: Vec<f64> = x.iter().map(|&r| v(r)).collect();
    let fits = fit_curve(
        &x,
        &e,
        Form::Polynomial,
        Coordinate::Length,
        &FitSettings::default(),
    );
    let fit = &fits.unwrap().fits[0];
    assert_eq!((fit.order, fit.window.points), (2, 5));
    assert!(
        (fit.force_constant / k - 1.0).abs() <= fit.spread,
        "{fit:?}"
    );
}

#[test]
fn both_wells_of_a_double_well_are_fitted() {
    let v = |q: f64| 0.0497 * q * q + 0.0754 * (-1.2 * q * q).exp() + 0.001 * q;
    let x: Vec<f64> = (0..49).map(|i| -1.5 + 0.0617 * f64::from(i)).collect();
    let e: Vec<f64> = x.iter().map(|&q| v(q)).collect();
    let fits = fit_curve(
        &x,
        &e,
        Form::Polynomial,
        Coordinate::Length,
        &FitSettings::default(),
    );
    let fits = fits.unwrap().fits;
    assert_eq!(fits.len(), 2);
    for (fit, start) in fits.iter().zip([-0.7, 0.7]) {
        let k = second(&v, minimise(&v, start));
        let error = (fit.force_constant / k - 1.0).abs();
        assert!(
            error < 3e-3 && error <= fit.spread && fit.spread < 0.01,
            "{error} {fit:?}"
        );
    }
}

#[test]
fn windows_are_kept_and_grown() {
    let v = |r: f64| 0.18 * (1.0 - (-1.21 * (r - 1.81)).exp()).powi(2);
    let x: Vec<f64> = (0..40).map(|i| 1.2 + 0.05 * f64::from(i)).collect();
    let e: Vec<f64> = x.iter().map(|&r| v(r)).collect();
    let fit_with = |orders, window| {
        let s = FitSettings {
            orders,
            window,
            ..FitSettings::default()
        };
        fit_curve(&x, &e, Form::Polynomial, Coordinate::Length, &s)
            .unwrap()
            .fits[0]
            .clone()
    };
    let kept = fit_with((2, 4), Window::Within { half_width: 0.3 });
    assert!(kept.window.from >= 1.5 && kept.window.to <= 2.12);
    // A window that holds next to nothing is grown to order + 3 points.
    for order in 2..=6 {
        let grown = fit_with((order, order), Window::Within { half_width: 0.01 });
        assert_eq!((grown.order, grown.window.points), (order, order + 3));
        let grown = fit_with((order, order), Window::Below { hartree: 1e-6 });
        assert_eq!((grown.order, grown.window.points), (order, order + 3));
    }
    let below = fit_with((2, 8), Window::Below { hartree: 0.02 });
    assert!(v(below.window.from) <= 0.0201 && v(below.window.to) <= 0.0201);
}

#[test]
fn parameters_draw_the_curve_again() {
    let v = |r: f64| 0.18 * (1.0 - (-1.21 * (r - 1.81)).exp()).powi(2) - 76.0;
    let x: Vec<f64> = (0..40).map(|i| 1.2 + 0.05 * f64::from(i)).collect();
    let e: Vec<f64> = x.iter().map(|&r| v(r)).collect();
    let run = |form| fit_curve(&x, &e, form, Coordinate::Length, &FitSettings::default()).unwrap();
    let morse = run(Form::Morse).fits.remove(0);
    assert_eq!(morse.order, 0);
    for (name, value) in [
        ("depth_hartree", 0.18),
        ("exponent_per_bohr", 1.21),
        ("equilibrium_bohr", 1.81),
        ("energy_hartree", -76.0),
    ] {
        assert!((morse.parameters[name] - value).abs() < 1e-8, "{name}");
    }
    let polynomial = run(Form::Polynomial).fits.remove(0);
    let q = polynomial.equilibrium + 0.07;
    assert!((polynomial.model.energy(q) - v(q)).abs() < 1e-7);
    assert!(
        (2.0 * polynomial.parameters["c2_hartree_per_bohr2"] - polynomial.force_constant).abs()
            < 1e-12
    );
    let third = -3.0 * 1.21 * 2.0 * 0.18 * 1.21_f64.powi(2);
    assert!((polynomial.third_derivative.unwrap() / third - 1.0).abs() < 1e-3);
    let mut checked = polynomial;
    checked.check_against(2.0 * 0.18 * 1.21 * 1.21);
    assert!(checked.derivative_check.unwrap().verdict.agrees);
}

#[test]
fn a_known_depth_is_held() {
    let v = |r: f64| 0.05 * ((4.0 / r).powi(12) - 2.0 * (4.0 / r).powi(6));
    let x: Vec<f64> = (0..40).map(|i| 3.3 + 0.08 * f64::from(i)).collect();
    let e: Vec<f64> = x.iter().map(|&r| v(r)).collect();
    let s = FitSettings {
        morse_depth: Some(0.05),
        ..FitSettings::default()
    };
    let fit = fit_curve(&x, &e, Form::Morse, Coordinate::Length, &s)
        .unwrap()
        .fits
        .remove(0);
    assert!((fit.parameters["depth_hartree"] - 0.05).abs() < 1e-15);
    let k = 72.0 * 0.05 / 16.0;
    let error = (fit.force_constant / k - 1.0).abs();
    assert!(error < 3e-3 && error <= fit.spread, "{error} {fit:?}");
}

#[test]
fn half_a_torsion_is_taken_as_even() {
    let v = |a: f64| 0.0045 * a.cos() + 0.0028 * (2.0 * a).cos() + 0.0002 * (3.0 * a).cos();
    let x: Vec<f64> = (0..=36).map(|i| PI * f64::from(i) / 36.0).collect();
    let e: Vec<f64> = x.iter().map(|&a| v(a)).collect();
    let settings = FitSettings::default();
    let fits = fit_curve(&x, &e, Form::Fourier, Coordinate::Angle, &settings).unwrap();
    assert_eq!(fits.fits.len(), 1);
    let fit = &fits.fits[0];
    assert_eq!(fit.order, 3);
    assert_eq!(fit.notes.len(), 1);
    assert!((fit.parameters["even_height_1_hartree"] - 0.009).abs() < 1e-12);
    assert!((fit.parameters["even_height_2_hartree"] + 0.0056).abs() < 1e-12);
    let up = v(PI) - fit.energy;
    assert!((fit.parameters["barrier_up_hartree"] - up).abs() < 1e-12);
    assert!((fit.parameters["barrier_down_hartree"] - (v(0.0) - fit.energy)).abs() < 1e-12);
    assert!(
        fit_curve(
            &x[..20],
            &e[..20],
            Form::Fourier,
            Coordinate::Angle,
            &settings
        )
        .is_err()
    );
    assert!(fit_curve(&x, &e, Form::Fourier, Coordinate::Length, &settings).is_err());
    assert!(fit_curve(&x, &e, Form::Morse, Coordinate::Angle, &settings).is_err());
}

#[test]
fn curves_without_a_minimum_say_so() {
    let x: Vec<f64> = (0..20).map(|i| 1.0 + 0.1 * f64::from(i)).collect();
    let e: Vec<f64> = x.iter().map(|r| 1.0 / r).collect();
    for form in [Form::Polynomial, Form::Morse] {
        let none = fit_curve(&x, &e, form, Coordinate::Length, &FitSettings::default());
        assert_eq!(none.unwrap_err(), FitError::NoMinimum { points: 20 });
    }
    let s = FitSettings {
        orders: (5, 3),
        ..FitSettings::default()
    };
    assert!(fit_curve(&x, &e, Form::Polynomial, Coordinate::Length, &s).is_err());
    // Three points have a minimum, but hold no fit.
    let few = fit_curve(
        &[1.0, 2.0, 3.0],
        &[1.0, 0.0, 1.0],
        Form::Polynomial,
        Coordinate::Length,
        &FitSettings::default(),
    )
    .unwrap();
    assert!(few.fits.is_empty() && few.failures.len() == 1);
}

#[test]
fn the_spread_stays_honest_whatever_the_orders() {
    // Orders too low for the curve: the constants are bad, and the spread must say so. A tenth of
    // slack covers the rare case in which all windows err alike.
    for orders in [
        (2, 2),
        (3, 3),
        (4, 4),
        (5, 5),
        (6, 6),
        (8, 8),
        (2, 4),
        (2, 6),
    ] {
        let mut found = 0;
        for case in &cases() {
            let mut s = settings(case);
            s.orders = orders;
            let fits = fit_curve(&case.x, &case.e, Form::Polynomial, case.coordinate, &s).unwrap();
            let near = |f: &&Fit| (f.equilibrium - case.minimum).abs() < 0.1;
            let Some(fit) = fits.fits.iter().find(near) else {
                continue;
            };
            found += 1;
            let error = (fit.force_constant / case.k - 1.0).abs();
            assert!(
                error <= 1.1 * fit.spread,
                "{orders:?} {}: {error} {}",
                case.name,
                fit.spread
            );
            assert_eq!(fit.spread > 0.01, !fit.notes.is_empty());
        }
        assert!(found > 55, "{orders:?}: {found}");
    }
}
