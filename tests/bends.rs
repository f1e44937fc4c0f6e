//! Bends through 180°.

mod common;

use common::jobs::{at_level, fit_of, pool, spec};
use std::sync::atomic::AtomicBool;
use thalweg::fit::Form as FitForm;
use thalweg::job;
use thalweg::units::{ANGSTROM_PER_BOHR, ELECTRON_MASSES_PER_U, PER_CM_PER_HARTREE};

/// A straight molecule's bend ends at 180° in its minimum: the constant fitted there, with the G element of the bend
/// (E. B. Wilson, J. C. Decius, P. C. Cross, Molecular Vibrations, 1955, appendix VI: g = (1/m₁ + 1/m₃)/r² + (2/r)²/m₂ for
/// equal bonds), gives the bending vibration that the Hessian has.
#[test]
fn a_bend_that_ends_straight_has_its_minimum_there() {
    let text = |length: f64, sweep: &str| {
        format!(
            "[molecule]\nzmatrix = \"\"\"\nC\nO1 C {length:.6}\nO2 C {length:.6} O1 180\n\"\"\"\n\
             [[level]]\nmethod = \"rhf\"\nbasis = \"sto-3g\"\n{sweep}"
        )
    };
    let spec_at_rest = spec(&text(1.19, ""));
    let stop = AtomicBool::new(false);
    let settled = job::settle::run(
        &spec_at_rest,
        false,
        Vec::new(),
        &pool(),
        &stop,
        &mut |_| {},
    )
    .expect("settles");
    let places = &settled[0].positions;
    let length = (0..3)
        .map(|k| (places[1][k] - places[0][k]).powi(2))
        .sum::<f64>()
        .sqrt()
        * ANGSTROM_PER_BOHR;
    let bend = settled[0].modes[0].wavenumber_cm1;
    assert!((bend - settled[0].modes[1].wavenumber_cm1).abs() < 0.01);

    let sweep = "[[sweep]]\nangle = [\"O1\", \"C\", \"O2\"]\nfrom = 150\nto = 180\nstep = 3\n";
    let result = at_level(&text(length, sweep));
    let minimum = &result.levels[0].analysis.minima[0];
    assert!(minimum.interior && (minimum.values[0] - 180.0).abs() < 1e-6);
    let fit = &fit_of(&result, FitForm::Polynomial).fit;
    let check = fit.derivative_check.as_ref().expect("gradients");
    assert!(check.verdict.agrees, "{}", check.verdict.text);
    let (oxygen, carbon) = (15.994_914_619, 12.0);
    let bond = length / ANGSTROM_PER_BOHR;
    let inverse = (2.0 / oxygen + 4.0 / carbon) / (ELECTRON_MASSES_PER_U * bond * bond);
    let omega = (fit.force_constant * inverse).sqrt() * PER_CM_PER_HARTREE;
    assert!((omega - bend).abs() < 1e-3 * bend, "{omega} {bend}");
    assert!(result.levels[0].analysis.spectroscopy.is_none());
}

/// Water bent open to 180° has a barrier there, not an end.
#[test]
fn a_bend_through_a_straight_barrier_shows_it() {
    let text = "[molecule]\nzmatrix = \"\"\"\nO\nH1 O 0.96\nH2 O 0.96 H1 104\n\"\"\"\n[[level]]\nmethod = \"rhf\"\nbasis = \"sto-3g\"\n\
         [[sweep]]\nangle = [\"H1\", \"O\", \"H2\"]\nfrom = 90\nto = 180\nstep = 5\n";
    let result = at_level(text);
    let analysis = &result.levels[0].analysis;
    assert_eq!(analysis.minima.iter().filter(|m| m.interior).count(), 1);
    assert_eq!(analysis.barriers.len(), 1);
    let barrier = &analysis.barriers[0];
    assert!((barrier.values[0] - 180.0).abs() < 1e-6);
    let refined = barrier.refined.as_ref().expect("gradients");
    assert!(refined.slopes[0].abs() < 1e-7 && refined.curvature[0][0] < 0.0);
}
