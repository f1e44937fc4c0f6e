//! Energies and properties against values computed by others.

use nalgebra::Vector3;
use serde_json::Value;
use thalweg::basis::{FunctionKind, library};
use thalweg::elements::Element;
use thalweg::molecule::{Atom, Molecule};
use thalweg::scf::{Method, ScfSettings};
use thalweg::surface::{
    HartreeFock, PointOutcome, PointRecord, PointRequest, StabilityDemand, Start, Surface,
};
use thalweg::units::ANGSTROM_PER_BOHR;

/// Independent energies are converged to 1e-11 hartree; ours must agree to what the project promises.
const ENERGY: f64 = 1e-8;
/// ⟨S²⟩ is linear in the error of the orbitals, which the commutator limits to about 1e-7.
const S_SQUARED: f64 = 1e-6;
/// So is the dipole moment, e·bohr; the given values have nine decimals.
const DIPOLE: f64 = 1e-5;
/// Stability eigenvalues, hartree: the residual of the eigenvectors enters squared.
const EIGENVALUE: f64 = 2e-5;

fn given() -> Vec<Value> {
    let text = std::fs::read_to_string(concat!(
        env!("CARGO_MANIFEST_DIR"),
        "/tests/data/given.json"
    ))
    .expect("the file is part of the tests");
    let all: Value = serde_json::from_str(&text).expect("JSON");
    all["entries"].as_array().expect("a list").clone()
}

fn molecule(entry: &Value, coordinates: &Value) -> Molecule {
    let symbols: Vec<&str> = entry["atoms"]
        .as_array()
        .expect("atoms")
        .iter()
        .map(|s| s.as_str().expect("symbol"))
        .collect();
    let positions = coordinates
        .as_array()
        .expect("positions")
        .iter()
        .map(|p| Vector3::from_fn(|k, _| p[k].as_f64().expect("number") / ANGSTROM_PER_BOHR))
        .collect();
    Molecule {
        atoms: symbols
            .iter()
            .enumerate()
            .map(|(i, symbol)| Atom {
                label: format!("{symbol}{i}"),
                element: Element::from_symbol(symbol).expect("element"),
                ghost: false,
            })
            .collect(),
        positions,
        charge: entry["charge"].as_i64().expect("charge") as i32,
        multiplicity: entry["multiplicity"].as_u64().expect("multiplicity") as u32,
    }
}

fn solve(entry: &Value, molecule: &Molecule, method: Method) -> PointRecord {
    let kind = if entry["spherical"].as_bool().expect("flag") {
        FunctionKind::Spherical
    } else {
        FunctionKind::Cartesian
    };
    let basis = entry["basis"].as_str().expect("basis");
    let shells = library::find(basis)
        .expect("built in")
        .shells_of(molecule, Some(kind))
        .expect("covered");
    let settings = ScfSettings {
        energy: 1e-10,
        commutator: 1e-8,
        ..ScfSettings::default()
    };
    let surface = HartreeFock::new(molecule, shells, method, settings).expect("fits");
    outcome(&surface, &molecule.positions).record
}

fn outcome(
    surface: &HartreeFock,
    positions: &[Vector3<f64>],
) -> PointOutcome<<HartreeFock as Surface>::Seed> {
    let request = PointRequest {
        positions,
        coordinates: &[],
        start: Start::Fresh,
        gradient: false,
        stability: StabilityDemand::Leave,
        follow: None,
    };
    surface
        .evaluate(&request, &mut surface.workspace())
        .expect("a sound geometry")
}

fn near(
    name: &str,
    what: &str,
    found: f64,
    expected: f64,
    tolerance: f64,
    failures: &mut Vec<String>,
) {
    let miss = (found - expected).abs();
    if miss.is_nan() || miss > tolerance {
        failures.push(format!(
            "{name}: {what} {found:.10} instead of {expected:.10}"
        ));
    }
}

fn method_of(name: &str) -> Option<Method> {
    match name {
        "RHF" => Some(Method::Rhf),
        "UHF" => Some(Method::Uhf),
        _ => None,
    }
}

#[test]
fn val_single_points_agree_with_independent_energies() {
    let mut failures = Vec::new();
    let mut checked = 0;
    for entry in given() {
        let name = entry["id"].as_str().expect("id");
        let Some(method) = method_of(entry["method"].as_str().expect("method")) else {
            continue;
        };
        let molecule = molecule(&entry, &entry["coords_angstrom"]);
        let record = solve(&entry, &molecule, method);
        let energy = record.energy.unwrap_or(f64::NAN);
        let expected = |key: &str| entry[key].as_f64().expect("a number");
        near(
            name,
            "energy",
            energy,
            expected("energy"),
            ENERGY,
            &mut failures,
        );
        near(
            name,
            "s_squared",
            record.s_squared,
            expected("s2"),
            S_SQUARED,
            &mut failures,
        );
        assert_eq!(
            record.functions_kept,
            entry["nbf"].as_u64().expect("nbf") as usize
        );
        let electrons = molecule.electrons().expect("fits");
        near(
            name,
            "electrons",
            record.electrons,
            (electrons.0 + electrons.1) as f64,
            1e-10,
            &mut failures,
        );
        near(
            name,
            "overlap",
            record.overlap_smallest,
            expected("overlap_min_eigenvalue"),
            1e-9,
            &mut failures,
        );
        if molecule.charge == 0 {
            // Other orientations of a degenerate state point elsewhere; the length is the same.
            let length = Vector3::from(record.dipole).norm();
            near(
                name,
                "dipole",
                length,
                expected("dipole_norm_au"),
                DIPOLE,
                &mut failures,
            );
        }
        if let Some(stability) = record.stability {
            let keys = match method {
                Method::Rhf => [
                    "rhf_singlet_lowest_eigenvalue",
                    "rhf_to_uhf_lowest_eigenvalue",
                ],
                Method::Uhf => ["uhf_lowest_eigenvalue", ""],
            };
            if let Some(value) = entry["stability"][keys[0]].as_f64() {
                near(
                    name,
                    "internal",
                    stability.internal,
                    value,
                    EIGENVALUE,
                    &mut failures,
                );
            }
            if let (Some(value), Some(found)) =
                (entry["stability"][keys[1]].as_f64(), stability.triplet)
            {
                near(name, "triplet", found, value, EIGENVALUE, &mut failures);
            }
        }
        checked += 1;
    }
    assert!(failures.is_empty(), "{}", failures.join("\n"));
    assert!(checked >= 35, "only {checked} entries");
}

#[test]
fn val_curves_agree_with_independent_energies() {
    let mut failures = Vec::new();
    for entry in given() {
        let Some(points) = entry["points"].as_array() else {
            continue;
        };
        for point in points {
            let name = format!("{} at {}", entry["id"], point["x"]);
            let molecule = molecule(&entry, &point["coords_angstrom"]);
            let restricted = solve(&entry, &molecule, Method::Rhf);
            let unrestricted = solve(&entry, &molecule, Method::Uhf);
            let expected = |key: &str| point[key].as_f64().expect("a number");
            let stability = |record: &PointRecord| record.stability.expect("asked for");
            for (what, found, expected, tolerance) in [
                (
                    "RHF energy",
                    restricted.energy.unwrap_or(f64::NAN),
                    expected("rhf"),
                    ENERGY,
                ),
                (
                    "UHF energy",
                    unrestricted.energy.unwrap_or(f64::NAN),
                    expected("uhf"),
                    ENERGY,
                ),
                (
                    "UHF s_squared",
                    unrestricted.s_squared,
                    expected("uhf_s2"),
                    S_SQUARED,
                ),
                (
                    "RHF singlet",
                    stability(&restricted).internal,
                    expected("rhf_singlet_lowest_eigenvalue"),
                    EIGENVALUE,
                ),
                (
                    "RHF triplet",
                    stability(&restricted).triplet.unwrap_or(f64::NAN),
                    expected("rhf_to_uhf_lowest_eigenvalue"),
                    EIGENVALUE,
                ),
                (
                    "UHF",
                    stability(&unrestricted).internal,
                    expected("uhf_lowest_eigenvalue"),
                    EIGENVALUE,
                ),
            ] {
                near(&name, what, found, expected, tolerance, &mut failures);
            }
        }
    }
    assert!(failures.is_empty(), "{}", failures.join("\n"));
}
