//! Analytic gradients against differences of energies, over every built-in basis set.

mod common;

use common::{charged, diatomic, molecule, surface_with, water};
use nalgebra::Vector3;
use thalweg::basis::library;
use thalweg::molecule::Molecule;
use thalweg::scf::seed::Seed;
use thalweg::scf::{Method, ScfSettings};
use thalweg::surface::{
    HartreeFock, PointOutcome, PointRequest, SeedPoint, StabilityDemand, Start, Surface, Workspace,
};

/// Largest error of a gradient component, hartree/bohr.
const COMPONENT: f64 = 1e-7;
/// Largest resulting force and torque on the whole molecule, hartree/bohr and hartree.
const RESULTANT: f64 = 1e-9;
/// Step of the differences, bohr: the five-point formula then errs by less than 1e-9 hartree/bohr.
const STEP: f64 = 0.005;

/// A molecule without any symmetry left that could hide an error: every atom is pushed a little off its place.
fn askew(mut molecule: Molecule) -> Molecule {
    let mut wave = 0.3f64;
    for position in &mut molecule.positions {
        for axis in 0..3 {
            wave = (wave * 1.9 + 0.7) % 2.0;
            position[axis] += 0.08 * (wave - 1.0);
        }
    }
    molecule
}

fn ammonia() -> Molecule {
    molecule(
        &["N", "H", "H", "H"],
        &[
            [0.0, 0.0, 0.0],
            [1.77, 0.0, 0.7],
            [-0.88, 1.53, 0.7],
            [-0.88, -1.53, 0.7],
        ],
    )
}

fn methyl() -> Molecule {
    let flat = molecule(
        &["C", "H", "H", "H"],
        &[
            [0.0; 3],
            [2.03, 0.0, 0.1],
            [-1.02, 1.76, 0.1],
            [-1.02, -1.76, 0.1],
        ],
    );
    charged(flat, 0, 2)
}

fn ethylene() -> Molecule {
    molecule(
        &["C", "C", "H", "H", "H", "H"],
        &[
            [0.0, 0.0, 1.26],
            [0.0, 0.0, -1.26],
            [1.74, 0.0, 2.33],
            [-1.74, 0.0, 2.33],
            [1.74, 0.2, -2.33],
            [-1.74, -0.2, -2.33],
        ],
    )
}

fn formaldehyde() -> Molecule {
    molecule(
        &["C", "O", "H", "H"],
        &[
            [0.0, 0.0, 0.0],
            [0.0, 0.0, 2.26],
            [1.77, 0.0, -1.1],
            [-1.77, 0.0, -1.1],
        ],
    )
}

fn cyanide() -> Molecule {
    molecule(
        &["H", "C", "N"],
        &[[0.0, 0.0, -2.01], [0.0; 3], [0.0, 0.0, 2.18]],
    )
}

fn peroxide() -> Molecule {
    molecule(
        &["O", "O", "H", "H"],
        &[
            [0.0, 0.0, 1.32],
            [0.0, 0.0, -1.32],
            [1.76, 0.0, 1.68],
            [-0.7, 1.6, -1.68],
        ],
    )
}

/// One case per built-in set, so that every family and every angular momentum up to g is met, closed and open shells
/// in turn, hydrogen to the transition metals.
fn cases() -> Vec<(&'static str, Method, Molecule)> {
    let (closed, open) = (Method::Rhf, Method::Uhf);
    vec![
        ("STO-3G", closed, ethylene()),
        ("3-21G", open, methyl()),
        ("6-31G", closed, formaldehyde()),
        ("6-31G*", open, charged(peroxide(), 1, 2)),
        ("6-31G**", closed, peroxide()),
        // Near 1.15 Å ⟨S²⟩ of NO changes so fast that the differences, not the gradient, lose digits.
        ("6-31+G*", open, charged(diatomic("N", "O", 1.05), 0, 2)),
        (
            "6-31++G**",
            closed,
            charged(diatomic("O", "H", 0.97), -1, 1),
        ),
        ("6-311G", open, charged(diatomic("Si", "H", 1.52), 0, 2)),
        ("6-311G**", closed, ammonia()),
        ("6-311++G**", open, charged(formaldehyde(), -1, 2)),
        ("cc-pVDZ", open, charged(water(1.0, 1.2, 104.0), 1, 2)),
        ("cc-pVTZ", closed, cyanide()),
        ("cc-pVQZ", closed, diatomic("H", "F", 0.95)),
        ("aug-cc-pVDZ", open, charged(diatomic("O", "O", 1.22), 0, 3)),
        ("aug-cc-pVTZ", open, charged(diatomic("C", "N", 1.18), 0, 2)),
        ("def2-SVP", open, charged(diatomic("Zn", "H", 1.6), 0, 2)),
        ("def2-TZVP", closed, diatomic("H", "Cl", 1.29)),
    ]
}

/// A surface with the solution that differences stay on: each calculation starts from the undisplaced one.
struct Walker {
    surface: HartreeFock,
    workspace: Workspace,
}

impl Walker {
    fn at(
        &mut self,
        positions: &[Vector3<f64>],
        start: Start<'_, Seed>,
        gradient: bool,
        stability: StabilityDemand,
    ) -> PointOutcome<Seed> {
        let request = PointRequest {
            positions,
            coordinates: &[],
            start,
            gradient,
            stability,
            follow: None,
        };
        self.surface
            .evaluate(&request, &mut self.workspace)
            .expect("a sound geometry")
    }
}

#[test]
fn every_basis_has_a_case() {
    let cases = cases();
    for name in library::names() {
        assert!(
            cases
                .iter()
                .any(|(basis, ..)| basis.eq_ignore_ascii_case(name)),
            "{name} has no case"
        );
    }
}

#[test]
fn rhf_gradients_match_five_point_differences() {
    compare(Method::Rhf);
}

#[test]
fn uhf_gradients_match_five_point_differences() {
    compare(Method::Uhf);
}

/// Compares the cases of one method and checks that no force or torque is left over.
fn compare(chosen: Method) {
    let settings = ScfSettings {
        energy: 1e-12,
        commutator: 1e-10,
        ..ScfSettings::default()
    };
    for (basis, method, molecule) in cases().into_iter().filter(|c| c.1 == chosen) {
        let molecule = askew(molecule);
        let surface = surface_with(&molecule, basis, method, settings.clone(), None);
        let workspace = surface.workspace();
        let mut walker = Walker { surface, workspace };
        // A saddle point would be left by the displaced calculations.
        let middle = walker.at(
            &molecule.positions,
            Start::Fresh,
            true,
            StabilityDemand::Leave,
        );
        let seed = middle.seed.expect("converges");
        let gradient: Vec<Vector3<f64>> = middle
            .record
            .gradient
            .expect("asked for")
            .iter()
            .map(|g| Vector3::from(*g))
            .collect();

        let force: Vector3<f64> = gradient.iter().sum();
        let torque: Vector3<f64> = molecule
            .positions
            .iter()
            .zip(&gradient)
            .map(|(r, g)| r.cross(g))
            .sum();
        assert!(force.norm() < RESULTANT, "{basis}: force {force}");
        assert!(torque.norm() < RESULTANT, "{basis}: torque {torque}");

        for (atom, axis) in [(0, 2), (1, 0), (1, 1), (molecule.positions.len() - 1, 2)] {
            let mut displaced = |steps: f64| {
                let mut positions = molecule.positions.clone();
                positions[atom][axis] += steps * STEP;
                let start = Start::Previous(SeedPoint {
                    seed: &seed,
                    coordinates: &[],
                });
                let record = walker
                    .at(&positions, start, false, StabilityDemand::None)
                    .record;
                record.energy.expect("converges")
            };
            let difference = (8.0 * (displaced(1.0) - displaced(-1.0))
                - (displaced(2.0) - displaced(-2.0)))
                / (12.0 * STEP);
            let error = (difference - gradient[atom][axis]).abs();
            assert!(
                error < COMPONENT,
                "{method:?}/{basis}, atom {atom}, axis {axis}: {} against {difference}, {error:.1e} apart",
                gradient[atom][axis]
            );
        }
    }
}
