//! A hundred molecules, easy and hard: every calculation converges, within a hundred Fock builds.

mod common;

use common::{charged, evaluate, molecule, surface_with};
use thalweg::molecule::Molecule;
use thalweg::scf::{Method, ScfSettings};
use thalweg::surface::StabilityDemand;
use thalweg::units::ANGSTROM_PER_BOHR;

struct Case {
    name: String,
    molecule: Molecule,
    method: Method,
    basis: String,
}

fn cases() -> Vec<Case> {
    let path = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/data/convergence.csv");
    let mut reader = csv::Reader::from_path(path).expect("the file is part of the tests");
    reader
        .records()
        .map(|record| {
            let record = record.expect("a row");
            let mut symbols = Vec::new();
            let mut positions = Vec::new();
            for atom in record[6].split(';') {
                let mut words = atom.split_whitespace();
                symbols.push(words.next().expect("a symbol"));
                let place: Vec<f64> = words
                    .map(|x| x.parse::<f64>().expect("a number") / ANGSTROM_PER_BOHR)
                    .collect();
                positions.push([place[0], place[1], place[2]]);
            }
            Case {
                name: format!("{} {}", &record[0], &record[1]),
                molecule: charged(
                    molecule(&symbols, &positions),
                    record[2].parse().expect("a charge"),
                    record[3].parse().expect("a multiplicity"),
                ),
                method: if &record[4] == "rhf" {
                    Method::Rhf
                } else {
                    Method::Uhf
                },
                basis: record[5].to_owned(),
            }
        })
        .collect()
}

#[test]
fn regress_a_hundred_molecules_converge_within_a_hundred_builds() {
    let cases = cases();
    assert_eq!(cases.len(), 100);
    let mut failures = Vec::new();
    let mut builds = 0;
    for case in &cases {
        let settings = ScfSettings::default();
        let surface = surface_with(&case.molecule, &case.basis, case.method, settings, None);
        let record = evaluate(&surface, &case.molecule.positions, StabilityDemand::None).record;
        builds += record.fock_builds;
        if record.energy.is_none() || record.fock_builds > 100 {
            failures.push(format!(
                "{}: {:?} after {} builds, commutator {:.1e}",
                case.name, record.stop, record.fock_builds, record.commutator
            ));
        }
    }
    assert!(failures.is_empty(), "{}", failures.join("\n"));
    // The mean says whether the first rungs have become worse.
    assert!(builds <= 100 * 16, "{builds} builds for 100 molecules");
}
