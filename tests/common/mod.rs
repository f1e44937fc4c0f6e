//! A small vocabulary for tests of the Hartree–Fock surface.

#![allow(dead_code, reason = "each test binary uses its own part")]

pub(crate) mod jobs;
pub(crate) mod starts;

use nalgebra::Vector3;
use thalweg::basis::{FunctionKind, library};
use thalweg::elements::Element;
use thalweg::molecule::{Atom, Molecule};
use thalweg::scf::seed::Seed;
use thalweg::scf::{Method, ScfSettings};
use thalweg::surface::{
    HartreeFock, PointOutcome, PointRequest, SeedPoint, StabilityDemand, Start, Surface, Workspace,
};
use thalweg::units::ANGSTROM_PER_BOHR;

/// A neutral singlet of these elements at positions in bohr.
pub(crate) fn molecule(symbols: &[&str], positions: &[[f64; 3]]) -> Molecule {
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
        positions: positions.iter().map(|p| Vector3::from(*p)).collect(),
        charge: 0,
        multiplicity: 1,
    }
}

/// The same atoms with another charge and multiplicity.
pub(crate) fn charged(molecule: Molecule, charge: i32, multiplicity: u32) -> Molecule {
    Molecule {
        charge,
        multiplicity,
        ..molecule
    }
}

/// Two atoms at a distance in ångström.
pub(crate) fn diatomic(one: &str, other: &str, length_angstrom: f64) -> Molecule {
    molecule(
        &[one, other],
        &[[0.0; 3], [0.0, 0.0, length_angstrom / ANGSTROM_PER_BOHR]],
    )
}

/// Water with bond lengths in ångström and an angle in degree.
pub(crate) fn water(one_angstrom: f64, other_angstrom: f64, angle_degree: f64) -> Molecule {
    let (a, b) = (
        one_angstrom / ANGSTROM_PER_BOHR,
        other_angstrom / ANGSTROM_PER_BOHR,
    );
    let angle = angle_degree.to_radians();
    molecule(
        &["O", "H", "H"],
        &[
            [0.0; 3],
            [0.0, b, 0.0],
            [0.0, a * angle.cos(), a * angle.sin()],
        ],
    )
}

/// The surface of a molecule in a built-in basis.
pub(crate) fn surface_with(
    molecule: &Molecule,
    basis: &str,
    method: Method,
    settings: ScfSettings,
    kind: Option<FunctionKind>,
) -> HartreeFock {
    let shells = library::find(basis)
        .expect("built in")
        .shells_of(molecule, kind)
        .expect("covered");
    HartreeFock::new(molecule, shells, method, settings).expect("fits")
}

/// The surface of a molecule in a built-in basis with tight thresholds.
pub(crate) fn surface(molecule: &Molecule, basis: &str, method: Method) -> HartreeFock {
    surface_with(molecule, basis, method, tight(), None)
}

/// Thresholds a decade below those of a user.
pub(crate) fn tight() -> ScfSettings {
    ScfSettings {
        energy: 1e-10,
        commutator: 1e-8,
        ..ScfSettings::default()
    }
}

/// One evaluation without sweep, seed or gradient.
pub(crate) fn evaluate(
    surface: &HartreeFock,
    positions: &[Vector3<f64>],
    stability: StabilityDemand,
) -> PointOutcome<Seed> {
    let request = PointRequest {
        positions,
        coordinates: &[],
        start: Start::Fresh,
        gradient: false,
        stability,
        follow: None,
    };
    surface
        .evaluate(&request, &mut surface.workspace())
        .expect("a sound geometry")
}

/// Energy of a molecule, left downhill where unstable.
pub(crate) fn energy(molecule: &Molecule, basis: &str, method: Method) -> f64 {
    let surface = surface(molecule, basis, method);
    evaluate(&surface, &molecule.positions, StabilityDemand::Leave)
        .record
        .energy
        .expect("converges")
}

/// How a chain of points is seeded.
#[derive(Clone, Copy, PartialEq, Eq)]
pub(crate) enum Seeding {
    Fresh,
    Previous,
    Extrapolated,
}

/// Points handed over for an extrapolation.
pub(crate) const HISTORY: usize = 8;

/// Evaluates a chain of geometries, each seeded by those before it.
pub(crate) fn walk(
    surface: &HartreeFock,
    points: &[(Vec<f64>, Molecule)],
    seeding: Seeding,
    stability: StabilityDemand,
) -> Vec<PointOutcome<Seed>> {
    let mut workspace: Workspace = surface.workspace();
    let mut outcomes: Vec<PointOutcome<Seed>> = Vec::new();
    for (i, (coordinates, molecule)) in points.iter().enumerate() {
        let mut behind: Vec<SeedPoint<'_, Seed>> = points[i.saturating_sub(HISTORY)..i]
            .iter()
            .zip(&outcomes[i.saturating_sub(HISTORY)..])
            .filter_map(|((at, _), outcome)| {
                outcome.seed.as_ref().map(|seed| SeedPoint {
                    coordinates: at,
                    seed,
                })
            })
            .collect();
        let start = match (seeding, behind.pop()) {
            (Seeding::Fresh, _) | (_, None) => Start::Fresh,
            (Seeding::Previous, Some(last)) => Start::Previous(last),
            (Seeding::Extrapolated, Some(last)) => {
                behind.push(last);
                Start::Extrapolated(behind)
            }
        };
        let request = PointRequest {
            positions: &molecule.positions,
            coordinates,
            start,
            gradient: false,
            stability,
            follow: None,
        };
        outcomes.push(
            surface
                .evaluate(&request, &mut workspace)
                .expect("a sound geometry"),
        );
    }
    outcomes
}
