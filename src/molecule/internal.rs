//! Internal coordinates: values and first derivatives of bonds, angles and dihedrals.
//!
//! The derivative of an internal coordinate by the Cartesian positions is a row of Wilson's B matrix:
//! E. B. Wilson, J. C. Decius, P. C. Cross, *Molecular Vibrations*, McGraw-Hill, 1955, chapter 4.

use super::Atom;
use super::frame::{COLLINEAR_SINE, bending_direction, sine_between};
use crate::units::{ANGSTROM_PER_BOHR, RADIAN_PER_DEGREE};
use nalgebra::Vector3;
use std::f64::consts::PI;

/// One internal coordinate, as indices of atoms.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, serde::Serialize, serde::Deserialize)]
pub enum Coordinate {
    /// Distance between two atoms, bonded or not.
    Bond([usize; 2]),
    /// Angle at the second atom.
    Angle([usize; 3]),
    /// Dihedral about the axis from the second to the third atom: positive when, looking along the axis,
    /// the fourth atom is clockwise from the first (W. Klyne, V. Prelog, Experientia 16, 521 (1960)).
    Dihedral([usize; 4]),
}

/// Why a coordinate means nothing; atoms are indices.
#[derive(Debug, Clone, Copy, PartialEq, thiserror::Error)]
pub enum CoordinateError {
    /// One atom stands twice.
    #[error("a {kind} needs different atoms, but atom number {} stands twice in it", atom + 1)]
    Repeated {
        /// `bond`, `angle` or `dihedral`
        kind: &'static str,
        /// index of the atom
        atom: usize,
    },
    /// There is no such atom.
    #[error("there is no atom number {} among {atoms} atoms", atom + 1)]
    NoSuchAtom {
        /// index asked for
        atom: usize,
        /// how many atoms there are
        atoms: usize,
    },
    /// Two atoms that should span a direction are on one spot.
    #[error("atoms number {} and {} are on one spot, so the {kind} is undefined", .atoms[0] + 1, .atoms[1] + 1)]
    Coincident {
        /// `bond`, `angle` or `dihedral`
        kind: &'static str,
        /// indices of the two atoms
        atoms: [usize; 2],
    },
    /// Three neighbouring atoms of a dihedral are on one line.
    #[error(
        "atoms number {}, {} and {} are on one line, so the dihedral through them is undefined",
        .atoms[0] + 1, .atoms[1] + 1, .atoms[2] + 1
    )]
    Collinear {
        /// indices of the three atoms
        atoms: [usize; 3],
    },
}

/// Two atoms nearer than this (bohr) span no direction.
const COINCIDENT_BOHR: f64 = 1e-8;

impl Coordinate {
    /// Indices of its atoms in order.
    #[must_use]
    pub fn atoms(&self) -> &[usize] {
        match self {
            Self::Bond(atoms) => atoms,
            Self::Angle(atoms) => atoms,
            Self::Dihedral(atoms) => atoms,
        }
    }

    /// `bond`, `angle` or `dihedral`.
    #[must_use]
    pub fn kind_word(&self) -> &'static str {
        match self {
            Self::Bond(_) => "bond",
            Self::Angle(_) => "angle",
            Self::Dihedral(_) => "dihedral",
        }
    }

    /// Unit of the reported value: `angstrom` or `degree`.
    #[must_use]
    pub fn unit_word(&self) -> &'static str {
        match self {
            Self::Bond(_) => "angstrom",
            Self::Angle(_) | Self::Dihedral(_) => "degree",
        }
    }

    /// Bohr to ångström, or radian to degree.
    #[must_use]
    pub fn to_reported(&self, value: f64) -> f64 {
        match self {
            Self::Bond(_) => value * ANGSTROM_PER_BOHR,
            Self::Angle(_) | Self::Dihedral(_) => value / RADIAN_PER_DEGREE,
        }
    }

    /// Ångström to bohr, or degree to radian.
    #[must_use]
    pub fn from_reported(&self, reported: f64) -> f64 {
        match self {
            Self::Bond(_) => reported / ANGSTROM_PER_BOHR,
            Self::Angle(_) | Self::Dihedral(_) => reported * RADIAN_PER_DEGREE,
        }
    }

    /// Kind and labels for a person, such as `angle H1–O–H2`.
    #[must_use]
    pub fn describe(&self, atoms: &[Atom]) -> String {
        let labels: Vec<&str> = self
            .atoms()
            .iter()
            .map(|&i| atoms.get(i).map_or("?", |a| a.label.as_str()))
            .collect();
        format!("{} {}", self.kind_word(), labels.join("–"))
    }

    /// Whether the indices make sense in a molecule of `atoms` atoms.
    ///
    /// # Errors
    /// An atom that stands twice or does not exist.
    pub fn validate(&self, atoms: usize) -> Result<(), CoordinateError> {
        let indices = self.atoms();
        for (place, &atom) in indices.iter().enumerate() {
            if atom >= atoms {
                return Err(CoordinateError::NoSuchAtom { atom, atoms });
            }
            if indices[..place].contains(&atom) {
                return Err(CoordinateError::Repeated {
                    kind: self.kind_word(),
                    atom,
                });
            }
        }
        Ok(())
    }

    /// Whether the coordinate is defined at these positions (bohr).
    ///
    /// # Errors
    /// Neighbouring atoms on one spot; for a dihedral, three neighbouring atoms on one line
    /// (sine below [`COLLINEAR_SINE`]).
    pub fn check(&self, positions: &[Vector3<f64>]) -> Result<(), CoordinateError> {
        for pair in self.atoms().windows(2) {
            if (positions[pair[1]] - positions[pair[0]]).norm() < COINCIDENT_BOHR {
                return Err(CoordinateError::Coincident {
                    kind: self.kind_word(),
                    atoms: [pair[0], pair[1]],
                });
            }
        }
        if let Self::Dihedral([a, b, c, d]) = *self {
            for [i, j, k] in [[a, b, c], [b, c, d]] {
                let arms = (positions[i] - positions[j], positions[k] - positions[j]);
                if sine_between(&arms.0, &arms.1) < COLLINEAR_SINE {
                    return Err(CoordinateError::Collinear { atoms: [i, j, k] });
                }
            }
        }
        Ok(())
    }

    /// Value in bohr or radian at positions in bohr: a bond is not negative, an angle in [0, π], a dihedral in
    /// (−π, π]. Never NaN for finite positions, but without meaning where [`check`](Self::check) objects.
    ///
    /// Angles come from the arc tangent of sine and cosine together, accurate near 0 and π as well
    /// (common practice; for the dihedral see A. Blondel, M. Karplus, J. Comput. Chem. 17, 1132 (1996), eq. 5, 6).
    #[must_use]
    pub fn value(&self, positions: &[Vector3<f64>]) -> f64 {
        match *self {
            Self::Bond([a, b]) => (positions[b] - positions[a]).norm(),
            Self::Angle([a, b, c]) => {
                let u = positions[a] - positions[b];
                let v = positions[c] - positions[b];
                u.cross(&v).norm().atan2(u.dot(&v))
            }
            Self::Dihedral(atoms) => {
                let (_, g, _, normal_first, normal_last) = blondel_karplus(positions, atoms);
                let sine =
                    normal_last.cross(&normal_first).dot(&g) / g.norm().max(f64::MIN_POSITIVE);
                let value = sine.atan2(normal_first.dot(&normal_last));
                if value > -PI { value } else { PI }
            }
        }
    }

    /// Value in ångström or degree at positions in bohr.
    #[must_use]
    pub fn reported_value(&self, positions: &[Vector3<f64>]) -> f64 {
        self.to_reported(self.value(positions))
    }

    /// How far `to` is from `from`, bohr or radian; for a dihedral the short way round, in (−π, π].
    #[must_use]
    pub fn difference(&self, to: f64, from: f64) -> f64 {
        let difference = to - from;
        match self {
            Self::Bond(_) | Self::Angle(_) => difference,
            Self::Dihedral(_) if difference > -PI && difference <= PI => difference,
            Self::Dihedral(_) => {
                let wrapped = difference - 2.0 * PI * (difference / (2.0 * PI)).round();
                if wrapped > -PI { wrapped } else { PI }
            }
        }
    }

    /// Derivatives of the value by the positions of its atoms, in the order of [`atoms`](Self::atoms):
    /// index of the atom and derivative, dimensionless for a bond, radian per bohr otherwise.
    ///
    /// A straight or folded angle (sine below [`COLLINEAR_SINE`]) has a cone-shaped value without a derivative;
    /// the row given is the limit reached from angles bent in one plane, the one that
    /// [`Motion`](super::motion::Motion) bends in: it contains the first other atom off the line, the last atom
    /// bending away from that one; if all atoms are on the line, a fixed plane. Near such an angle the row is exact.
    /// Where [`check`](Self::check) objects (atoms on one spot, undefined dihedral) the row is zero.
    ///
    /// Source: Wilson, Decius, Cross, §4-1; the dihedral in the form without 1/sin of A. Blondel, M. Karplus,
    /// J. Comput. Chem. 17, 1132 (1996), eq. 27.
    #[must_use]
    pub fn derivative(&self, positions: &[Vector3<f64>]) -> Vec<(usize, Vector3<f64>)> {
        if self.check(positions).is_err() {
            return self
                .atoms()
                .iter()
                .map(|&i| (i, Vector3::zeros()))
                .collect();
        }
        match *self {
            Self::Bond([a, b]) => {
                let along = (positions[b] - positions[a]).normalize();
                vec![(a, -along), (b, along)]
            }
            Self::Angle([a, b, c]) => {
                let u = positions[a] - positions[b];
                let v = positions[c] - positions[b];
                let axis = angle_axis(positions, [a, b, c]);
                let first = u.cross(&axis) / u.norm_squared();
                let last = axis.cross(&v) / v.norm_squared();
                vec![(a, first), (b, -first - last), (c, last)]
            }
            Self::Dihedral([a, b, c, d]) => {
                let (f, g, h, normal_first, normal_last) = blondel_karplus(positions, [a, b, c, d]);
                let length = g.norm();
                let first = -normal_first * (length / normal_first.norm_squared());
                let last = normal_last * (length / normal_last.norm_squared());
                // Both shares act in the planes of `first` and `last`; the sum of all four rows is zero.
                let shift =
                    first * (f.dot(&g) / length.powi(2)) + last * (h.dot(&g) / length.powi(2));
                vec![
                    (a, first),
                    (b, -first - shift),
                    (c, -last + shift),
                    (d, last),
                ]
            }
        }
    }
}

/// The letters of Blondel and Karplus for atoms i, j, k, l: F = r_i − r_j, G = r_j − r_k, H = r_l − r_k,
/// A = F × G, B = H × G.
fn blondel_karplus(
    positions: &[Vector3<f64>],
    [i, j, k, l]: [usize; 4],
) -> (
    Vector3<f64>,
    Vector3<f64>,
    Vector3<f64>,
    Vector3<f64>,
    Vector3<f64>,
) {
    let f = positions[i] - positions[j];
    let g = positions[j] - positions[k];
    let h = positions[l] - positions[k];
    (f, g, h, f.cross(&g), h.cross(&g))
}

/// Unit vector about which the angle at `b` opens: right-handed turns carry the arm to `a` towards the arm to `c`.
/// Where the angle is straight or folded, the axis of a bend in the plane of [`bending_direction`].
pub(super) fn angle_axis(positions: &[Vector3<f64>], [a, b, c]: [usize; 3]) -> Vector3<f64> {
    let u = positions[a] - positions[b];
    let v = positions[c] - positions[b];
    if sine_between(&u, &v) >= COLLINEAR_SINE {
        u.cross(&v).normalize()
    } else {
        u.cross(&bending_direction(&positions[b], &u, positions))
            .normalize()
    }
}
