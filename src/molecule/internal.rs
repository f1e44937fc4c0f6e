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
                let [_, g, _, normal_first, normal_last] = blondel_karplus(positions, atoms);
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
                let [f, g, h, normal_first, normal_last] = blondel_karplus(positions, [a, b, c, d]);
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
fn blondel_karplus(positions: &[Vector3<f64>], [i, j, k, l]: [usize; 4]) -> [Vector3<f64>; 5] {
    let f = positions[i] - positions[j];
    let g = positions[j] - positions[k];
    let h = positions[l] - positions[k];
    [f, g, h, f.cross(&g), h.cross(&g)]
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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::molecule::frame::turn;
    use crate::molecule::test_molecules::{clouds, hydrogen_cyanide, indices, peroxide, water};
    use proptest::prelude::*;

    const ALL: [Coordinate; 3] = [
        Coordinate::Bond([2, 0]),
        Coordinate::Angle([1, 3, 0]),
        Coordinate::Dihedral([0, 1, 2, 3]),
    ];

    /// Central differences of fourth order, the short way round for dihedrals.
    fn by_differences(
        coordinate: Coordinate,
        positions: &[Vector3<f64>],
        step: f64,
    ) -> Vec<Vector3<f64>> {
        let centre = coordinate.value(positions);
        (0..positions.len())
            .map(|atom| {
                Vector3::from_fn(|axis, _| {
                    let at = |steps: f64| {
                        let mut moved = positions.to_vec();
                        moved[atom][axis] += steps * step;
                        coordinate.difference(coordinate.value(&moved), centre)
                    };
                    (8.0 * (at(1.0) - at(-1.0)) - (at(2.0) - at(-2.0))) / (12.0 * step)
                })
            })
            .collect()
    }

    fn assert_derivative(
        coordinate: Coordinate,
        positions: &[Vector3<f64>],
        step: f64,
        tolerance: f64,
    ) -> Result<(), TestCaseError> {
        let expected = by_differences(coordinate, positions, step);
        let row = coordinate.derivative(positions);
        let atoms: Vec<usize> = row.iter().map(|(atom, _)| *atom).collect();
        prop_assert_eq!(&atoms[..], coordinate.atoms());
        let largest = row.iter().map(|(_, d)| d.norm()).fold(1.0, f64::max);
        for (atom, derivative) in row {
            let off = (derivative - expected[atom]).norm();
            prop_assert!(
                off < tolerance * largest,
                "{coordinate:?} atom {atom}: {off:e}"
            );
        }
        Ok(())
    }

    /// Smallest sine of the angles inside a coordinate; 1 for a bond.
    fn smallest_sine(coordinate: Coordinate, positions: &[Vector3<f64>]) -> f64 {
        coordinate
            .atoms()
            .windows(3)
            .map(|t| {
                sine_between(
                    &(positions[t[0]] - positions[t[1]]),
                    &(positions[t[2]] - positions[t[1]]),
                )
            })
            .fold(1.0, f64::min)
    }

    proptest! {
        #[test]
        fn derivatives_are_those_of_the_values(positions in clouds(4)) {
            for coordinate in ALL {
                // The value varies over a length of the sine times a bond; the step stays far inside.
                let sine = smallest_sine(coordinate, &positions);
                prop_assume!(sine > 1e-3);
                assert_derivative(coordinate, &positions, 1e-3 * sine, 1e-8)?;
            }
        }

        #[test]
        fn derivatives_hold_near_straight_and_folded_angles(
            exponent in -4.0..-2.0_f64,
            folded in any::<bool>(),
            arm in 0.5..3.0_f64,
        ) {
            let bend = 10.0_f64.powf(exponent);
            let sign = if folded { -1.0 } else { 1.0 };
            let positions = [
                Vector3::new(0.3, -2.0, 0.1),
                Vector3::new(0.3, 0.0, 0.1),
                Vector3::new(0.3, sign * arm * bend.cos(), 0.1 + arm * bend.sin()),
            ];
            // An angle of sine s is known to 1e-16 but varies over lengths of s.
            assert_derivative(Coordinate::Angle([0, 1, 2]), &positions, 1e-3 * bend, 1e-7)?;
        }

        #[test]
        fn derivatives_hold_across_the_cut_of_the_dihedral(off in -1e-3..1e-3_f64) {
            let mut positions = peroxide().positions;
            let turned = turn(&Vector3::z(), PI + off, &Vector3::new(1.7, 0.0, 0.2));
            positions[0] = Vector3::zeros();
            positions[1] = Vector3::z() * 2.5;
            positions[2] = Vector3::new(1.7, 0.0, -0.2);
            positions[3] = positions[1] + turned;
            let dihedral = Coordinate::Dihedral([2, 0, 1, 3]);
            prop_assert!(dihedral.value(&positions).abs() > PI - 2e-3);
            assert_derivative(dihedral, &positions, 1e-3, 1e-8)?;
        }

        #[test]
        fn values_and_rows_do_not_see_translation_and_rotation(
            positions in clouds(4),
            axis in prop::array::uniform3(0.1..1.0_f64),
            angle in -3.0..3.0_f64,
            shift in prop::array::uniform3(-5.0..5.0_f64),
        ) {
            let axis = Vector3::from(axis).normalize();
            let moved: Vec<Vector3<f64>> = positions
                .iter()
                .map(|p| p + turn(&axis, angle, p) + Vector3::from(shift))
                .collect();
            for coordinate in ALL {
                prop_assume!(smallest_sine(coordinate, &positions) > 1e-3);
                let difference =
                    coordinate.difference(coordinate.value(&moved), coordinate.value(&positions));
                prop_assert!(difference.abs() < 1e-11);
                let row = coordinate.derivative(&positions);
                let force: Vector3<f64> = row.iter().map(|(_, d)| d).sum();
                let torque: Vector3<f64> = row.iter().map(|(i, d)| positions[*i].cross(d)).sum();
                let largest = row.iter().map(|(_, d)| d.norm()).fold(1.0, f64::max);
                prop_assert!(force.norm() < 1e-13 * largest);
                prop_assert!(torque.norm() < 1e-11 * largest);
            }
        }

        #[test]
        fn reversing_the_atoms_changes_nothing_and_a_mirror_only_the_sign_of_a_dihedral(positions in clouds(4)) {
            let mirrored: Vec<Vector3<f64>> =
                positions.iter().map(|p| Vector3::new(p.x, p.y, -p.z)).collect();
            for (coordinate, reversed) in ALL.into_iter().zip([
                Coordinate::Bond([0, 2]),
                Coordinate::Angle([0, 3, 1]),
                Coordinate::Dihedral([3, 2, 1, 0]),
            ]) {
                prop_assume!(smallest_sine(coordinate, &positions) > 1e-3);
                let value = coordinate.value(&positions);
                prop_assert!(coordinate.difference(reversed.value(&positions), value).abs() < 1e-12);
                let expected = if let Coordinate::Dihedral(_) = coordinate { -value } else { value };
                prop_assert!(coordinate.difference(coordinate.value(&mirrored), expected).abs() < 1e-12);
            }
        }
    }

    #[test]
    fn values_are_those_of_the_z_matrix() {
        let molecule = peroxide();
        let [o1, o2, h1, h2] = indices(&molecule, ["O1", "O2", "H1", "H2"]);
        for (coordinate, expected) in [
            (Coordinate::Bond([o1, o2]), 1.45),
            (Coordinate::Angle([h1, o1, o2]), 100.0),
            (Coordinate::Dihedral([h1, o1, o2, h2]), 115.0),
            (Coordinate::Dihedral([h2, o2, o1, h1]), 115.0),
        ] {
            let value = coordinate.reported_value(&molecule.positions);
            assert!((value - expected).abs() < 1e-12, "{coordinate:?}: {value}");
        }
    }

    #[test]
    fn a_dihedral_is_positive_clockwise_along_its_axis() {
        // Looking along +z with x to the right, +y is down (right-handed), so clockwise from +x is +y.
        let positions = [
            Vector3::x(),
            Vector3::zeros(),
            Vector3::z(),
            Vector3::new(0.0, 1.0, 1.0),
        ];
        let value = Coordinate::Dihedral([0, 1, 2, 3]).value(&positions);
        assert!((value - PI / 2.0).abs() < 1e-15);
    }

    #[test]
    fn half_a_turn_is_plus_180() {
        let flat = [
            Vector3::x(),
            Vector3::zeros(),
            Vector3::z(),
            Vector3::new(-1.0, 0.0, 1.0),
        ];
        for y in [0.0, -0.0, 1e-300, -1e-300] {
            let mut positions = flat;
            positions[3].y = y;
            let value = Coordinate::Dihedral([0, 1, 2, 3]).value(&positions);
            assert!(value > 3.0 && value <= PI, "{value} for {y}");
        }
        let half = Coordinate::Dihedral([0, 1, 2, 3]).difference(-PI / 2.0, PI / 2.0);
        assert!((half - PI).abs() < 1e-15);
    }

    #[test]
    fn a_straight_angle_has_the_row_of_bends_in_one_plane() {
        let molecule = hydrogen_cyanide();
        let angle = Coordinate::Angle([0, 1, 2]);
        assert!((angle.reported_value(&molecule.positions) - 180.0).abs() < 1e-12);
        let row = angle.derivative(&molecule.positions);
        // From exactly straight, a step down the row lowers the angle at the rate that the row says.
        let rate: f64 = row.iter().map(|(_, d)| d.norm_squared()).sum();
        assert!(rate > 0.1);
        let step = 1e-6;
        let mut bent = molecule.positions.clone();
        for (atom, derivative) in &row {
            bent[*atom] -= derivative * step;
        }
        let fall = PI - angle.value(&bent);
        assert!((fall / (rate * step) - 1.0).abs() < 1e-6);
        // And the bent molecule has the same row.
        for ((_, straight), (_, bent)) in row.iter().zip(angle.derivative(&bent)) {
            assert!((straight - bent).norm() < 1e-5);
        }
    }

    #[test]
    fn undefined_coordinates_are_errors_and_never_nan() {
        let line: Vec<Vector3<f64>> = (0..4).map(|i| Vector3::z() * f64::from(i)).collect();
        let dihedral = Coordinate::Dihedral([0, 1, 2, 3]);
        assert_eq!(
            dihedral.check(&line),
            Err(CoordinateError::Collinear { atoms: [0, 1, 2] })
        );
        let spot = [Vector3::x(); 4];
        for coordinate in ALL {
            assert!(matches!(
                coordinate.check(&spot),
                Err(CoordinateError::Coincident { .. })
            ));
            for positions in [&line[..], &spot[..]] {
                assert!(coordinate.value(positions).is_finite());
                let row = coordinate.derivative(positions);
                assert!(row.iter().all(|(_, d)| d.iter().all(|x| x.is_finite())));
            }
        }
    }

    #[test]
    fn atoms_must_exist_and_differ() {
        assert!(Coordinate::Angle([0, 1, 2]).validate(3).is_ok());
        assert_eq!(
            Coordinate::Angle([0, 1, 0]).validate(3),
            Err(CoordinateError::Repeated {
                kind: "angle",
                atom: 0
            })
        );
        assert_eq!(
            Coordinate::Bond([0, 3]).validate(3),
            Err(CoordinateError::NoSuchAtom { atom: 3, atoms: 3 })
        );
    }

    #[test]
    fn reported_values_come_back() {
        for coordinate in ALL {
            for value in [0.1, 1.7, 3.0] {
                let back = coordinate.from_reported(coordinate.to_reported(value));
                assert!((back - value).abs() < 1e-15);
            }
        }
        let molecule = water();
        let angle = Coordinate::Angle([1, 0, 2]);
        assert_eq!(angle.describe(&molecule.atoms), "angle H1–O–H2");
    }
}
