//! Chains of points: seeds save Fock builds and never change an energy.

#![expect(
    clippy::print_stdout,
    reason = "the table in DEVELOPERS.md is read off these lines"
)]

mod common;

use common::{Seeding, diatomic, molecule, surface_with, walk, water};
use std::path::Path;
use std::sync::atomic::AtomicBool;
use thalweg::job;
use thalweg::molecule::Molecule;
use thalweg::scf::seed::Seed;
use thalweg::scf::{Method, ScfSettings};
use thalweg::spec::parse;
use thalweg::surface::{PointOutcome, StabilityDemand};
use thalweg::units::ANGSTROM_PER_BOHR;

/// Geometries along a sweep with their swept value.
type Chain = Vec<(Vec<f64>, Molecule)>;

fn chain(count: usize, from: f64, step: f64, at: impl Fn(f64) -> Molecule) -> Chain {
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

/// Two calculations at the thresholds of a user agree to this where one is made stable, hartree.
const LOWEST: f64 = 1e-8;

/// Runs a chain with extrapolated seeds, and returns the mean builds of all points but the first. Energies must agree with
/// fresh calculations at every third point.
fn seeded_builds(
    points: &[(Vec<f64>, Molecule)],
    method: Method,
    stability: StabilityDemand,
) -> f64 {
    let settings = ScfSettings::default();
    let surface = surface_with(&points[0].1, "6-31G*", method, settings, None);
    let seeded = walk(&surface, points, Seeding::Extrapolated, stability);
    let found = energies(&seeded);
    for i in (0..points.len()).step_by(3) {
        let alone = walk(&surface, &points[i..=i], Seeding::Fresh, stability);
        let difference = found[i] - energies(&alone)[0];
        // Of two solutions that are minima a fresh start may find the higher one.
        assert!(
            difference < LOWEST,
            "{:?}: {difference:e} above",
            points[i].0
        );
        if method == Method::Rhf {
            assert!(difference > -LOWEST, "{:?}: {difference:e}", points[i].0);
        }
    }
    mean_builds(&seeded)
}

/// The chains by which seeds are measured; `step` in ångström, a hundred times as many degrees.
fn chains(step: f64, count: usize) -> [(&'static str, Chain); 4] {
    let degrees = 100.0 * step;
    [
        ("H–F", chain(count, 0.75, step, |x| diatomic("F", "H", x))),
        (
            "water stretch",
            chain(count, 0.75, step, |x| water(x, 0.96, 104.5)),
        ),
        (
            "water bend",
            chain(count, 70.0, degrees, |x| water(0.96, 0.96, x)),
        ),
        ("methanol C–O", chain(count, 1.2, step, methanol)),
    ]
}

/// Methanol with a C–O distance in ångström; the other lengths and angles are common practice.
fn methanol(length_angstrom: f64) -> Molecule {
    let place = |x: f64, y: f64, z: f64| [x, y, z].map(|v| v / ANGSTROM_PER_BOHR);
    // C–H 1.09 Å at 109.5° to C–O, staggered; O–H 0.945 Å at 108.5°.
    let (along, off) = (
        -1.09 * 70.5_f64.to_radians().cos(),
        1.09 * 70.5_f64.to_radians().sin(),
    );
    let hydrogen = |turn_degree: f64| {
        let turn = turn_degree.to_radians();
        place(off * turn.cos(), off * turn.sin(), along)
    };
    let bend = 108.5_f64.to_radians();
    let oxygen = length_angstrom;
    molecule(
        &["C", "O", "H", "H", "H", "H"],
        &[
            [0.0; 3],
            place(0.0, 0.0, oxygen),
            place(0.945 * bend.sin(), 0.0, oxygen - 0.945 * bend.cos()),
            hydrogen(180.0),
            hydrogen(60.0),
            hydrogen(-60.0),
        ],
    )
}

#[test]
fn regress_closed_shell_chains_take_three_builds_at_fine_steps() {
    for (name, points) in chains(0.02, 31) {
        let mean = seeded_builds(&points, Method::Rhf, StabilityDemand::None);
        println!("{name} 0.02 Å or 2°: {mean:.2}");
        assert!(mean <= 3.0, "{name}: {mean} builds a point");
    }
}

#[test]
fn regress_closed_shell_chains_take_four_and_a_half_builds_at_coarse_steps() {
    for (name, points) in chains(0.05, 31) {
        let mean = seeded_builds(&points, Method::Rhf, StabilityDemand::None);
        println!("{name} 0.05 Å or 5°: {mean:.2}");
        assert!(mean <= 4.5, "{name}: {mean} builds a point");
    }
}

#[test]
fn carried_densities_save_builds_and_extrapolated_ones_many_more() {
    for step in [0.02, 0.05] {
        for (name, points) in chains(step, 12) {
            let settings = ScfSettings::default();
            let surface = surface_with(&points[0].1, "6-31G*", Method::Rhf, settings, None);
            let [fresh, previous, seeded] =
                [Seeding::Fresh, Seeding::Previous, Seeding::Extrapolated].map(|seeding| {
                    mean_builds(&walk(&surface, &points, seeding, StabilityDemand::None))
                });
            println!("{name} {step}: fresh {fresh:.2}, previous {previous:.2}, {seeded:.2}");
            assert!(
                previous < fresh && seeded < 0.6 * fresh,
                "{name}: {previous} {seeded}"
            );
        }
    }
}

/// N₂ in UHF from the compressed molecule through the onset of spin polarisation (1.145 Å) towards atoms.
#[test]
fn regress_unrestricted_chains_through_an_onset() {
    for (count, step, most) in [(51, 0.02, 4.5), (31, 0.05, 8.0)] {
        let points = chain(count, 1.0, step, |x| diatomic("N", "N", x));
        let mean = seeded_builds(&points, Method::Uhf, StabilityDemand::Leave);
        println!("N₂ UHF {step} Å: {mean:.2}");
        assert!(mean <= most, "{mean} builds a point at {step} Å");
    }
}

/// Passes over the integrals of a walk without and with tests of stability; of the latter those for the tests alone, too.
fn passes(zmatrix: &str, level: &str, sweep: &str) -> [usize; 3] {
    let cost = |stability: bool| {
        let text = format!(
            "[molecule]\nzmatrix = \"\"\"\n{zmatrix}\n\"\"\"\n[[level]]\n{level}\n[[sweep]]\n{sweep}\n\
             [walk]\nstability = {stability}\n"
        );
        let spec = parse(&text, Path::new("test.toml")).unwrap_or_else(|e| panic!("{e}"));
        let pool = rayon::ThreadPoolBuilder::new()
            .num_threads(2)
            .build()
            .expect("two threads");
        let record = job::run(&spec, &pool, &AtomicBool::new(false), &mut |_| {}).expect("runs");
        let mut walked = (0, 0);
        for entry in &record.entries {
            let record = &entry.entry.record;
            let (products, passes) = record.stability.map_or((0, 0), |s| (s.products, s.passes));
            walked.0 += record.all_builds - products;
            walked.1 += passes;
        }
        walked
    };
    let (bare, tested) = (cost(false), cost(true));
    [bare.0, tested.0 + tested.1, tested.1]
}

/// Tests of stability, with all trial rotations in one pass, add at most as much again as the scan without them. Where the
/// walk without tests stays on a symmetric solution that is not the lowest, the tests themselves are compared: the
/// lower curve costs what it costs.
#[test]
fn regress_stability_tests_at_most_double_the_passes() {
    let water = "O\nH1 O 0.958\nH2 O 0.958 H1 104.5";
    let stretch = "bond = [\"O\", \"H1\"]\nfrom = 0.70\nto = 3.00\nstep = 0.05";
    let both = format!("{stretch}\nalso = [{{ bond = [\"O\", \"H2\"] }}]");
    let fluoride = "bond = [\"F\", \"H\"]\nfrom = 0.7\nto = 3.0\nstep = 0.05";
    let peroxide = "O1\nO2 O1 1.4\nH1 O1 0.95 O2 102\nH2 O2 0.95 O1 102 H1 115";
    let turn = "dihedral = [\"H1\", \"O1\", \"O2\", \"H2\"]\nfrom = 0\nto = 180\nstep = 10";
    let level = |method: &str| format!("method = \"{method}\"\nbasis = \"sto-3g\"");
    for (zmatrix, method, sweep, same_curve) in [
        (water, "rhf", stretch, true),
        (water, "uhf", stretch, false),
        (water, "rhf", &both, true),
        (water, "uhf", &both, false),
        ("F\nH F 0.91", "rhf", fluoride, true),
        ("F\nH F 0.91", "uhf", fluoride, false),
        (peroxide, "rhf", turn, true),
        (peroxide, "uhf", turn, true),
    ] {
        let [bare, tested, tests] = passes(zmatrix, &level(method), sweep);
        println!("{method} {zmatrix:?}: {bare}, {tested} of which {tests}");
        assert!(
            tests <= bare,
            "{method} {zmatrix:?}: {tests} against {bare}"
        );
        if same_curve {
            assert!(
                tested <= 2 * bare,
                "{method} {zmatrix:?}: {tested} against {bare}"
            );
        }
    }
}
