//! Chains of points: seeds save Fock builds and never change an energy.

mod common;

use common::{Seeding, diatomic, surface_with, walk, water};
use thalweg::molecule::Molecule;
use thalweg::scf::seed::Seed;
use thalweg::scf::{Method, ScfSettings};
use thalweg::surface::{PointOutcome, StabilityDemand};

/// Two calculations with user thresholds agree to this, hartree: the error of the energy is the square of the commutator's.
const SAME: f64 = 1e-9;

fn chain(
    count: usize,
    from: f64,
    step: f64,
    at: impl Fn(f64) -> Molecule,
) -> Vec<(Vec<f64>, Molecule)> {
    (0..count)
        .map(|i| {
            let x = from + step * i as f64;
            (vec![x], at(x))
        })
        .collect()
}

fn energies(outcomes: &[PointOutcome<Seed>]) -> Vec<f64> {
    outcomes
        .iter()
        .map(|o| o.record.energy.expect("converges"))
        .collect()
}

/// Mean Fock builds of all points but the first, stability tests apart.
fn mean_builds(outcomes: &[PointOutcome<Seed>]) -> f64 {
    let builds: usize = outcomes[1..].iter().map(|o| o.record.fock_builds).sum();
    builds as f64 / (outcomes.len() - 1) as f64
}

fn closed_shell(points: &[(Vec<f64>, Molecule)], most: f64) {
    let surface = surface_with(
        &points[0].1,
        "6-31G*",
        Method::Rhf,
        ScfSettings::default(),
        None,
    );
    let seeded = walk(
        &surface,
        points,
        Seeding::Extrapolated,
        StabilityDemand::None,
    );
    let fresh = walk(&surface, points, Seeding::Fresh, StabilityDemand::None);
    let previous = walk(&surface, points, Seeding::Previous, StabilityDemand::None);
    for ((a, b), c) in energies(&seeded)
        .iter()
        .zip(energies(&fresh))
        .zip(energies(&previous))
    {
        assert!((a - b).abs() < SAME && (a - c).abs() < SAME, "{a} {b} {c}");
    }
    let (mean, cold) = (mean_builds(&seeded), mean_builds(&fresh));
    assert!(
        mean <= most && mean < 0.5 * cold,
        "{mean} builds a point against {cold}"
    );
    assert!(mean_builds(&previous) < cold);
}

#[test]
fn regress_closed_shell_chains_take_three_builds_at_fine_steps() {
    closed_shell(&chain(31, 0.75, 0.02, |x| diatomic("F", "H", x)), 2.6);
    closed_shell(&chain(31, 80.0, 2.0, |x| water(0.96, 0.96, x)), 2.8);
}

#[test]
fn regress_closed_shell_chains_take_four_builds_at_coarse_steps() {
    closed_shell(&chain(31, 0.7, 0.05, |x| water(x, 0.96, 104.5)), 3.3);
}

/// N₂ in UHF from the compressed molecule through the onset of spin polarisation (1.145 Å) towards atoms: energies
/// agree with calculations that each start afresh and are left downhill.
#[test]
fn regress_unrestricted_chain_through_its_onset() {
    let points = chain(31, 1.0, 0.05, |x| diatomic("N", "N", x));
    let surface = surface_with(
        &points[0].1,
        "6-31G*",
        Method::Uhf,
        ScfSettings::default(),
        None,
    );
    let seeded = walk(
        &surface,
        &points,
        Seeding::Extrapolated,
        StabilityDemand::Leave,
    );
    let mean = mean_builds(&seeded);
    assert!(mean <= 8.0, "{mean} builds a point");
    let found = energies(&seeded);
    for i in [0, 4, 10, 16, 24, 30] {
        let alone = walk(
            &surface,
            &points[i..=i],
            Seeding::Fresh,
            StabilityDemand::Leave,
        );
        let difference = found[i] - energies(&alone)[0];
        assert!(difference < SAME, "{:?}: {difference:e} above", points[i].0);
    }
    let spins: Vec<f64> = seeded.iter().map(|o| o.record.s_squared).collect();
    assert!(spins[0].abs() < 1e-6 && spins[30] > 2.9);
}
