//! Primitive coordinates of an optimisation: bonds, angles and dihedrals, and what stands in where those fail.

use crate::molecule::internal::Coordinate;
use nalgebra::Vector3;

/// One coordinate of a redundant set.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Primitive {
    /// A bond, an angle or a dihedral along bonds.
    Internal(Coordinate),
    /// A dihedral over three neighbours of one atom, [neighbour, centre, neighbour, neighbour]: how far the centre lies
    /// out of their plane, which bonds and angles do not tell near planarity.
    Improper([usize; 4]),
    /// Bend of a nearly straight chain a–b–c along a direction fixed in space: (û + v̂)·e with û, v̂ the unit vectors
    /// from b to a and c. Near a straight line it is the deviation from it in radian; two directions across the
    /// chain describe a bend that the angle, which has a cone there, cannot.
    LinearBend {
        /// a, b, c with b the vertex
        atoms: [usize; 3],
        /// e, of unit length
        direction: Vector3<f64>,
    },
    /// One Cartesian position (bohr), where no set of internal coordinates spans all motions.
    Position {
        /// index of the atom
        atom: usize,
        /// 0, 1, 2 for x, y, z
        axis: usize,
    },
}

impl Primitive {
    /// Value in bohr or radian.
    #[must_use]
    pub fn value(&self, positions: &[Vector3<f64>]) -> f64 {
        match *self {
            Self::Internal(coordinate) => coordinate.value(positions),
            Self::Improper(atoms) => Coordinate::Dihedral(atoms).value(positions),
            Self::LinearBend {
                atoms: [a, b, c],
                direction,
            } => {
                let u = (positions[a] - positions[b]).normalize();
                let v = (positions[c] - positions[b]).normalize();
                (u + v).dot(&direction)
            }
            Self::Position { atom, axis } => positions[atom][axis],
        }
    }

    /// `to` − `from` in bohr or radian; for a dihedral the short way round.
    #[must_use]
    pub fn difference(&self, to: f64, from: f64) -> f64 {
        match *self {
            Self::Internal(coordinate) => coordinate.difference(to, from),
            Self::Improper(atoms) => Coordinate::Dihedral(atoms).difference(to, from),
            Self::LinearBend { .. } | Self::Position { .. } => to - from,
        }
    }

    /// Derivatives of the value by positions: index of the atom and derivative.
    #[must_use]
    pub fn derivative(&self, positions: &[Vector3<f64>]) -> Vec<(usize, Vector3<f64>)> {
        match *self {
            Self::Internal(coordinate) => coordinate.derivative(positions),
            Self::Improper(atoms) => Coordinate::Dihedral(atoms).derivative(positions),
            Self::LinearBend {
                atoms: [a, b, c],
                direction,
            } => {
                let arm = |end: usize| {
                    let arm = positions[end] - positions[b];
                    let length = arm.norm();
                    let unit = arm / length;
                    (direction - unit * unit.dot(&direction)) / length
                };
                let (first, last) = (arm(a), arm(c));
                vec![(a, first), (b, -first - last), (c, last)]
            }
            Self::Position { atom, axis } => {
                let mut along = Vector3::zeros();
                along[axis] = 1.0;
                vec![(atom, along)]
            }
        }
    }

    /// Whether the atoms are those of `coordinate`, in this order or backwards.
    #[must_use]
    pub fn is(&self, coordinate: &Coordinate) -> bool {
        match self {
            Self::Internal(own) => {
                let (own, other) = (own.atoms(), coordinate.atoms());
                own == other || own.len() == other.len() && own.iter().eq(other.iter().rev())
            }
            Self::Improper(_) | Self::LinearBend { .. } | Self::Position { .. } => false,
        }
    }
}
