//! A model Hessian to begin an optimisation with: diagonal in the primitive coordinates.

use super::coordinates::InternalSet;
use super::primitive::Primitive;
use crate::elements::Element;
use crate::molecule::Molecule;
use crate::molecule::internal::Coordinate;
use nalgebra::{DMatrix, Vector3};

/// Exponents α in 1/bohr² by rows of the periodic table (H–He, Li–Ne, Na and beyond).
///
/// R. Lindh, A. Bernhardsson, G. Karlström, P.-Å. Malmqvist, Chem. Phys. Lett. 241, 423 (1995), table 1 (from memory);
/// the fourth row is treated as the third.
const EXPONENT: [[f64; 3]; 3] = [
    [1.0, 0.3949, 0.3949],
    [0.3949, 0.28, 0.28],
    [0.3949, 0.28, 0.28],
];
/// Reference distances in bohr by rows, from the same table (from memory).
const REFERENCE_BOHR: [[f64; 3]; 3] = [[1.35, 2.10, 2.53], [2.10, 2.87, 3.40], [2.53, 3.40, 3.40]];
/// Force constants of a stretch, bend and torsion where all weights are 1, hartree/bohr² or hartree/radian² (eq. 1 and
/// text of the same paper, from memory).
const STRETCH: f64 = 0.45;
const BEND: f64 = 0.15;
const TORSION: f64 = 0.005;
/// Out-of-plane constant of a planar centre, hartree/radian²: H. B. Schlegel, Theor. Chim. Acta 66, 333 (1984), table I
/// (from memory); the three impropers of a centre share it.
const OUT_OF_PLANE: f64 = 0.045;
/// Nothing is taken to be softer than this share of the constants above: fragments far apart still need a finite step.
const SOFTEST: f64 = 0.02;
/// A Cartesian position that had to be added, hartree/bohr²: stiff enough not to run away, soft enough to follow.
const POSITION: f64 = 0.05;

fn row(element: Element) -> usize {
    match element.atomic_number() {
        0..=2 => 0,
        3..=10 => 1,
        _ => 2,
    }
}

/// The weight ρ = exp(α (r₀² − r²)) of a pair of atoms: 1 at the reference distance, decaying beyond it.
fn weight(molecule: &Molecule, positions: &[Vector3<f64>], i: usize, j: usize) -> f64 {
    let rows = (
        row(molecule.atoms[i].element),
        row(molecule.atoms[j].element),
    );
    let reference = REFERENCE_BOHR[rows.0][rows.1];
    let squared = (positions[i] - positions[j]).norm_squared();
    (EXPONENT[rows.0][rows.1] * (reference * reference - squared)).exp()
}

/// Model force constant of one coordinate, hartree per bohr² or radian².
fn force_constant(molecule: &Molecule, positions: &[Vector3<f64>], primitive: &Primitive) -> f64 {
    let pair = |i, j| weight(molecule, positions, i, j);
    let chain = |atoms: &[usize]| atoms.windows(2).map(|p| pair(p[0], p[1])).product::<f64>();
    // The formula stiffens without bound for atoms pressed together, where it was never meant to hold.
    let bounded = |constant: f64, weight: f64| constant * weight.clamp(SOFTEST, 4.0);
    match primitive {
        Primitive::Internal(Coordinate::Bond(atoms)) => bounded(STRETCH, chain(atoms)),
        Primitive::Internal(Coordinate::Angle(atoms)) => bounded(BEND, chain(atoms)),
        Primitive::LinearBend { atoms, .. } => bounded(BEND, chain(atoms)),
        Primitive::Internal(Coordinate::Dihedral(atoms)) => bounded(TORSION, chain(atoms)),
        Primitive::Improper([i, centre, j, k]) => bounded(
            OUT_OF_PLANE / 3.0,
            pair(*i, *centre) * pair(*centre, *j) * pair(*centre, *k),
        ),
        Primitive::Position { .. } => POSITION,
    }
}

/// Diagonal model Hessian in the coordinates of `set`, m × m.
#[must_use]
pub fn model_hessian(
    molecule: &Molecule,
    positions: &[Vector3<f64>],
    set: &InternalSet,
) -> DMatrix<f64> {
    let count = set.primitives.len();
    let mut hessian = DMatrix::zeros(count, count);
    for (i, primitive) in set.primitives.iter().enumerate() {
        hessian[(i, i)] = force_constant(molecule, positions, primitive);
    }
    hessian
}
