//! Redundant internal coordinates of a molecule, and the way back from them to positions.
//!
//! All bonds, all angles between bonds and all dihedrals along bonds are taken, more than there are degrees of freedom:
//! P. Pulay, G. Fogarasi, J. Chem. Phys. 96, 2856 (1992); C. Peng, P. Y. Ayala, H. B. Schlegel, M. J. Frisch,
//! J. Comput. Chem. 17, 49 (1996). Steps are made in the space that they span, whose orthonormal basis is that of
//! the non-redundant coordinates of J. Baker, A. Kessi, B. Delley, J. Chem. Phys. 105, 192 (1996).

use super::MinimiseError;
use super::primitive::Primitive;
use crate::molecule::Molecule;
use crate::molecule::connectivity::Connectivity;
use crate::molecule::frame::{fixed_perpendicular, sine_between};
use crate::molecule::inertia::{self, Inertia};
use crate::molecule::internal::Coordinate;
use nalgebra::{DMatrix, DVector, SymmetricEigen, Vector3};
use std::f64::consts::PI;

/// An angle wider than this is described by two linear bends: wide enough for every ordinary bent molecule to keep
/// its angle, narrow enough for a straight chain distorted by 15° to be taken for one.
const NEARLY_STRAIGHT: f64 = 160.0 * PI / 180.0;
/// An angle that has opened this far must be described anew.
const TOO_STRAIGHT: f64 = 172.0 * PI / 180.0;
/// Angles about a centre of three bonds that sum up to more than this: planar enough for an improper dihedral.
const NEARLY_PLANAR: f64 = 345.0 * PI / 180.0;
/// Eigenvalues of BᵀB (1/bohr² and pure numbers mixed) below this belong to no coordinate.
const SPANNED: f64 = 1e-6;
/// A motion with an eigenvalue below this is described too poorly to be optimised.
const WELL_SPANNED: f64 = 1e-3;

/// A redundant set of internal coordinates.
#[derive(Debug, Clone, PartialEq)]
pub struct InternalSet {
    /// The coordinates.
    pub primitives: Vec<Primitive>,
    /// Bonds, those that join fragments among them.
    pub connectivity: Connectivity,
}

/// Wilson's B matrix at one geometry and what follows from it: m coordinates, 3N positions, r independent ones.
#[derive(Debug, Clone)]
pub struct Frame {
    /// B, m × 3N: derivatives of the coordinates by the positions, without what turns and shifts of the whole
    /// molecule do to coordinates whose directions are fixed in space.
    pub b: DMatrix<f64>,
    /// Moore–Penrose inverse of B, 3N × m.
    pub inverse: DMatrix<f64>,
    /// Orthonormal basis of the changes that positions can make, m × r.
    pub basis: DMatrix<f64>,
}

impl InternalSet {
    /// Coordinates of a molecule at its positions. Fragments are joined by their shortest distances; `required`
    /// coordinates are always in the set. Where bonds, angles and dihedrals do not span all motions, improper dihedrals
    /// and in the end Cartesian positions are added.
    #[must_use]
    pub fn of(molecule: &Molecule, required: &[Coordinate]) -> Self {
        let connectivity = joined(molecule);
        let positions = &molecule.positions;
        let mut set = Self {
            primitives: Vec::new(),
            connectivity,
        };
        set.add_bonds();
        set.add_angles(positions);
        set.add_dihedrals(positions);
        set.add_impropers(positions, NEARLY_PLANAR);
        for coordinate in required {
            if !set.primitives.iter().any(|p| p.is(coordinate)) {
                set.primitives.push(Primitive::Internal(*coordinate));
            }
        }
        if set.lacks_motions(positions) {
            set.add_impropers(positions, 0.0);
        }
        if set.lacks_motions(positions) {
            for atom in 0..positions.len() {
                for axis in 0..3 {
                    set.primitives.push(Primitive::Position { atom, axis });
                }
            }
        }
        set
    }

    fn push(&mut self, coordinate: Coordinate) {
        self.primitives.push(Primitive::Internal(coordinate));
    }

    fn add_bonds(&mut self) {
        for pair in self.connectivity.bonds() {
            self.push(Coordinate::Bond(pair));
        }
    }

    fn add_angles(&mut self, positions: &[Vector3<f64>]) {
        for b in 0..positions.len() {
            let neighbours = self.connectivity.neighbours(b).to_vec();
            for (place, &c) in neighbours.iter().enumerate() {
                for &a in &neighbours[..place] {
                    let angle = Coordinate::Angle([a, b, c]);
                    if angle.value(positions) < NEARLY_STRAIGHT {
                        self.push(angle);
                    } else if neighbours.len() == 2 {
                        let atoms = [a, b, c];
                        let [first, second] = across(positions, atoms);
                        for direction in [first, second] {
                            self.primitives
                                .push(Primitive::LinearBend { atoms, direction });
                        }
                    }
                    // A straight angle with other bonds beside it is described by the angles with those.
                }
            }
        }
    }

    fn add_dihedrals(&mut self, positions: &[Vector3<f64>]) {
        for b in 0..positions.len() {
            for &next in self.connectivity.neighbours(b).to_vec().iter() {
                let Some((before, c)) = self.far_end(positions, b, next) else {
                    continue;
                };
                // Each axis is met from both ends.
                if b >= c {
                    continue;
                }
                for &a in self.connectivity.neighbours(b).to_vec().iter() {
                    for &d in self.connectivity.neighbours(c).to_vec().iter() {
                        if a == next || d == before || a == c || d == b || a == d {
                            continue;
                        }
                        let bent = |atoms: [usize; 3]| {
                            Coordinate::Angle(atoms).value(positions) < NEARLY_STRAIGHT
                        };
                        if bent([a, b, c]) && bent([b, c, d]) {
                            self.push(Coordinate::Dihedral([a, b, c, d]));
                        }
                    }
                }
            }
        }
    }

    /// Follows a straight chain from `b` over `next` to the first atom that is not in the middle of one; returns the
    /// atom before it and that atom. None if `b` is itself in the middle of a chain.
    fn far_end(&self, positions: &[Vector3<f64>], b: usize, next: usize) -> Option<(usize, usize)> {
        if self.is_middle(positions, b) {
            return None;
        }
        let (mut before, mut atom) = (b, next);
        while self.is_middle(positions, atom) {
            let onwards = self
                .connectivity
                .neighbours(atom)
                .iter()
                .copied()
                .find(|&n| n != before)?;
            (before, atom) = (atom, onwards);
            if atom == b {
                return None;
            }
        }
        Some((before, atom))
    }

    /// Whether an atom has two neighbours in a nearly straight line.
    fn is_middle(&self, positions: &[Vector3<f64>], atom: usize) -> bool {
        match *self.connectivity.neighbours(atom) {
            [a, c] => Coordinate::Angle([a, atom, c]).value(positions) >= NEARLY_STRAIGHT,
            _ => false,
        }
    }

    fn add_impropers(&mut self, positions: &[Vector3<f64>], from_sum: f64) {
        for b in 0..positions.len() {
            let [i, j, k] = *self.connectivity.neighbours(b) else {
                continue;
            };
            let sum: f64 = [[i, b, j], [j, b, k], [k, b, i]]
                .iter()
                .map(|&atoms| Coordinate::Angle(atoms).value(positions))
                .sum();
            for atoms in [[i, b, j, k], [j, b, k, i], [k, b, i, j]] {
                let defined = Coordinate::Dihedral(atoms).check(positions).is_ok()
                    && well_bent(positions, [atoms[0], atoms[1], atoms[2]])
                    && well_bent(positions, [atoms[1], atoms[2], atoms[3]]);
                let improper = Primitive::Improper(atoms);
                if sum >= from_sum && defined && !self.primitives.contains(&improper) {
                    self.primitives.push(improper);
                }
            }
        }
    }

    fn lacks_motions(&self, positions: &[Vector3<f64>]) -> bool {
        let atoms = positions.len();
        let rigid = Inertia::of(&vec![1.0; atoms], positions).map_or(6, |i| i.rigid_motions());
        let b = self.b_matrix(positions);
        let Some(eigen) = SymmetricEigen::try_new(b.transpose() * &b, f64::EPSILON, 1000) else {
            return true;
        };
        let spanned = eigen
            .eigenvalues
            .iter()
            .filter(|&&e| e > WELL_SPANNED)
            .count();
        spanned < 3 * atoms - rigid
    }

    /// Place of a bond, angle or dihedral in the set.
    #[must_use]
    pub fn place_of(&self, coordinate: &Coordinate) -> Option<usize> {
        self.primitives.iter().position(|p| p.is(coordinate))
    }

    /// Values of all coordinates, bohr and radian.
    #[must_use]
    pub fn values(&self, positions: &[Vector3<f64>]) -> DVector<f64> {
        DVector::from_iterator(
            self.primitives.len(),
            self.primitives.iter().map(|p| p.value(positions)),
        )
    }

    /// `to` − `from`, dihedrals the short way round.
    #[must_use]
    pub fn differences(&self, to: &DVector<f64>, from: &DVector<f64>) -> DVector<f64> {
        DVector::from_iterator(
            self.primitives.len(),
            self.primitives
                .iter()
                .enumerate()
                .map(|(i, p)| p.difference(to[i], from[i])),
        )
    }

    /// Wilson's B matrix, m × 3N.
    #[must_use]
    pub fn b_matrix(&self, positions: &[Vector3<f64>]) -> DMatrix<f64> {
        rows(&self.primitives, positions)
    }

    /// B, its inverse and the space it spans.
    ///
    /// # Errors
    /// When the eigenvalue iteration does not end, or positions are not finite.
    pub fn frame(&self, positions: &[Vector3<f64>]) -> Result<Frame, MinimiseError> {
        let b = self.b_matrix(positions);
        let order = b.ncols();
        let rigid = inertia::rigid_motions(&vec![1.0; positions.len()], positions)?;
        let b = &b - &b * &rigid * rigid.transpose();
        let eigen = SymmetricEigen::try_new(b.transpose() * &b, f64::EPSILON, 1000)
            .ok_or(MinimiseError::Eigenproblem { order })?;
        let kept: Vec<usize> = (0..order)
            .filter(|&i| eigen.eigenvalues[i] > SPANNED)
            .collect();
        let mut basis = DMatrix::zeros(b.nrows(), kept.len());
        let mut inverse = DMatrix::zeros(order, b.nrows());
        for (column, &i) in kept.iter().enumerate() {
            let vector = eigen.eigenvectors.column(i);
            let singular = eigen.eigenvalues[i].sqrt();
            let image = &b * vector / singular;
            inverse += vector * image.transpose() / singular;
            basis.set_column(column, &image);
        }
        Ok(Frame { b, inverse, basis })
    }

    /// Whether the coordinates still describe the geometry: no angle has become straight, no dihedral undefined.
    /// Coordinates at the places in `held` are left out.
    #[must_use]
    pub fn is_sound(&self, positions: &[Vector3<f64>], held: &[usize]) -> bool {
        let bent = |atoms| Coordinate::Angle(atoms).value(positions) < TOO_STRAIGHT;
        self.primitives.iter().enumerate().all(|(i, primitive)| {
            held.contains(&i)
                || match *primitive {
                    Primitive::Internal(Coordinate::Angle(atoms)) => bent(atoms),
                    Primitive::Internal(Coordinate::Dihedral([a, b, c, d]))
                    | Primitive::Improper([a, b, c, d]) => bent([a, b, c]) && bent([b, c, d]),
                    Primitive::LinearBend { atoms, .. } => {
                        Coordinate::Angle(atoms).value(positions) > 0.75 * PI
                    }
                    Primitive::Internal(Coordinate::Bond(_)) | Primitive::Position { .. } => true,
                }
        })
    }

    /// Positions at which the coordinates have changed by `change` (length m, bohr and radian), as near as a redundant
    /// set allows: iterated x ← x + B⁺(q_wanted − q(x)) until the positions stand still (Peng et al., eq. 11). Where that
    /// runs away, the positions of the first iteration (common practice).
    ///
    /// # Errors
    /// When the eigenvalue iteration does not end.
    pub fn displaced(
        &self,
        positions: &[Vector3<f64>],
        change: &DVector<f64>,
    ) -> Result<Vec<Vector3<f64>>, MinimiseError> {
        const MOST_ITERATIONS: usize = 40;
        const STANDS_STILL_BOHR: f64 = 1e-9;
        let wanted = self.values(positions) + change;
        let mut at = positions.to_vec();
        let mut first = None;
        let mut smallest = f64::INFINITY;
        for _ in 0..MOST_ITERATIONS {
            let rest = self.differences(&wanted, &self.values(&at));
            let step = self.frame(&at)?.inverse * rest;
            let size = step.amax();
            if !size.is_finite() || size > 4.0 * smallest.max(STANDS_STILL_BOHR) {
                return Ok(first.unwrap_or(at));
            }
            smallest = smallest.min(size);
            shift(&mut at, &step, 1.0);
            if first.is_none() {
                first = Some(at.clone());
            }
            if size < STANDS_STILL_BOHR {
                return Ok(at);
            }
        }
        Ok(at)
    }
}

/// B matrix of any coordinates, one row each.
pub(super) fn rows(primitives: &[Primitive], positions: &[Vector3<f64>]) -> DMatrix<f64> {
    let mut b = DMatrix::zeros(primitives.len(), 3 * positions.len());
    for (row, primitive) in primitives.iter().enumerate() {
        for (atom, derivative) in primitive.derivative(positions) {
            for axis in 0..3 {
                b[(row, 3 * atom + axis)] += derivative[axis];
            }
        }
    }
    b
}

/// Adds `scale` × a 3N vector to positions.
pub(super) fn shift(positions: &mut [Vector3<f64>], step: &DVector<f64>, scale: f64) {
    for (atom, position) in positions.iter_mut().enumerate() {
        for axis in 0..3 {
            position[axis] += scale * step[3 * atom + axis];
        }
    }
}

/// Two unit vectors across a nearly straight chain, perpendicular to each other.
fn across(positions: &[Vector3<f64>], [a, b, c]: [usize; 3]) -> [Vector3<f64>; 2] {
    let along = (positions[c] - positions[a]).normalize();
    // A bend that is there already is taken as the first direction, so that it stays in its plane.
    let bend =
        (positions[a] - positions[b]).normalize() + (positions[c] - positions[b]).normalize();
    let bend = bend - along * along.dot(&bend);
    let first = if bend.norm() > 1e-3 {
        bend.normalize()
    } else {
        fixed_perpendicular(&along)
    };
    [first, along.cross(&first)]
}

fn well_bent(positions: &[Vector3<f64>], [a, b, c]: [usize; 3]) -> bool {
    let arms = (positions[a] - positions[b], positions[c] - positions[b]);
    sine_between(&arms.0, &arms.1) > 0.2
}

/// Bonds from distances, with fragments joined by their shortest distances until all atoms hang together.
fn joined(molecule: &Molecule) -> Connectivity {
    let mut connectivity = Connectivity::of(molecule);
    let atoms = molecule.atoms.len();
    loop {
        let components = connectivity.components();
        if components.len() < 2 {
            return connectivity;
        }
        let mut nearest: Option<(f64, [usize; 2])> = None;
        for (place, one) in components.iter().enumerate() {
            for other in &components[place + 1..] {
                for &i in one {
                    for &j in other {
                        let distance = (molecule.positions[i] - molecule.positions[j]).norm();
                        if nearest.is_none_or(|(least, _)| distance < least - 1e-9) {
                            nearest = Some((distance, [i.min(j), i.max(j)]));
                        }
                    }
                }
            }
        }
        let Some((_, pair)) = nearest else {
            return connectivity;
        };
        let mut bonds = connectivity.bonds();
        bonds.push(pair);
        connectivity = Connectivity::from_bonds(atoms, &bonds);
    }
}
