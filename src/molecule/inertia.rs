//! Centre of mass, principal moments of inertia, rotational constants, and the rigid motions of a whole molecule.

use crate::units::{ELECTRON_MASSES_PER_U, PER_CM_PER_HARTREE};
use nalgebra::{DMatrix, Matrix3, SymmetricEigen, Vector3};

/// A molecule is linear when its smallest moment of inertia is below this fraction of the largest: atoms off the
/// axis by a thousandth of its length, well above what minimisation leaves and well below any bent molecule.
pub const LINEAR_MOMENT_RATIO: f64 = 1e-6;

/// Why there is no inertia.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum InertiaError {
    /// Not one mass per atom.
    #[error("{masses} masses for {atoms} atoms")]
    Counts {
        /// masses given
        masses: usize,
        /// positions given
        atoms: usize,
    },
    /// No atom.
    #[error("there is no atom")]
    Empty,
    /// A mass that is not positive and finite.
    #[error("the mass of atom number {} is {mass_u} u; it must be positive", atom + 1)]
    Mass {
        /// index of the atom
        atom: usize,
        /// u
        mass_u: f64,
    },
    /// A position that is not finite.
    #[error("the position of atom number {} is not a number", atom + 1)]
    Position {
        /// index of the atom
        atom: usize,
    },
}

/// What turns and what does not.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Rotor {
    /// one atom
    Atom,
    /// all atoms on one line
    Linear,
    /// anything else
    Bent,
}

/// Inertia of a rigid molecule.
#[derive(Debug, Clone, PartialEq)]
pub struct Inertia {
    /// Centre of mass in bohr.
    pub centre: Vector3<f64>,
    /// Total mass in u.
    pub mass_u: f64,
    /// Principal moments in u·bohr², ascending, none negative.
    pub moments_u_bohr2: [f64; 3],
    /// Principal axes as columns in the order of the moments, right-handed, orthonormal.
    pub axes: Matrix3<f64>,
    /// Atom, linear or bent.
    pub rotor: Rotor,
}

/// Centre of mass in bohr of positions in bohr; masses in any unit, one per position, their sum positive.
#[must_use]
pub fn centre_of_mass(masses: &[f64], positions: &[Vector3<f64>]) -> Vector3<f64> {
    let total: f64 = masses.iter().sum();
    masses
        .iter()
        .zip(positions)
        .fold(Vector3::zeros(), |sum, (&m, p)| sum + p * m)
        / total
}

impl Inertia {
    /// From masses in u and positions in bohr.
    ///
    /// # Errors
    /// No atom, unequal counts, a mass that is not positive, a position that is not finite.
    pub fn of(masses_u: &[f64], positions: &[Vector3<f64>]) -> Result<Self, InertiaError> {
        check(masses_u, positions)?;
        let centre = centre_of_mass(masses_u, positions);
        let mut tensor = Matrix3::zeros();
        for (&mass, position) in masses_u.iter().zip(positions) {
            let arm = position - centre;
            tensor += (Matrix3::identity() * arm.norm_squared() - arm * arm.transpose()) * mass;
        }
        let eigen = SymmetricEigen::new(tensor);
        let mut order = [0, 1, 2];
        order.sort_by(|&i, &j| eigen.eigenvalues[i].total_cmp(&eigen.eigenvalues[j]));
        let moments_u_bohr2 = order.map(|i| eigen.eigenvalues[i].max(0.0));
        let mut axes =
            Matrix3::from_columns(&order.map(|i| eigen.eigenvectors.column(i).into_owned()));
        if axes.determinant() < 0.0 {
            let flipped = -axes.column(2);
            axes.set_column(2, &flipped);
        }
        let rotor = if positions.len() == 1 {
            Rotor::Atom
        } else if moments_u_bohr2[0] < LINEAR_MOMENT_RATIO * moments_u_bohr2[2] {
            Rotor::Linear
        } else {
            Rotor::Bent
        };
        Ok(Self {
            centre,
            mass_u: masses_u.iter().sum(),
            moments_u_bohr2,
            axes,
            rotor,
        })
    }

    /// Rotational constants ħ²/2I (as wavenumbers, cm⁻¹), descending: A, B, C of a bent molecule, the one B of a
    /// linear molecule, none of an atom.
    ///
    /// Source: G. Herzberg, *Infrared and Raman Spectra*, Van Nostrand, 1945, chapter I (B = h/8π²cI).
    #[must_use]
    pub fn rotational_constants_per_cm(&self) -> Vec<f64> {
        let constant = |moment: f64| PER_CM_PER_HARTREE / (2.0 * moment * ELECTRON_MASSES_PER_U);
        match self.rotor {
            Rotor::Atom => Vec::new(),
            // The two equal moments differ by rounding and by atoms a trifle off the line.
            Rotor::Linear => {
                vec![constant(
                    0.5 * (self.moments_u_bohr2[1] + self.moments_u_bohr2[2]),
                )]
            }
            Rotor::Bent => self.moments_u_bohr2.map(constant).to_vec(),
        }
    }

    /// How many independent translations and rotations there are: 3, 5 or 6.
    #[must_use]
    pub fn rigid_motions(&self) -> usize {
        match self.rotor {
            Rotor::Atom => 3,
            Rotor::Linear => 5,
            Rotor::Bent => 6,
        }
    }
}

/// Translations and rotations of a whole molecule as orthonormal columns in mass-weighted coordinates √m·x: 3N rows
/// (x, y, z of the first atom, then of the next), 3, 5 or 6 columns, three translations first. Projecting them out of a
/// mass-weighted Hessian leaves the vibrations.
///
/// The rotations are turns about the principal axes through the centre of mass, which makes all columns orthogonal
/// (C. Eckart, Phys. Rev. 47, 552 (1935); E. B. Wilson, J. C. Decius, P. C. Cross, *Molecular Vibrations*, 1955, §11-1).
/// A linear molecule has no turn about its own axis.
///
/// # Errors
/// As [`Inertia::of`].
pub fn rigid_motions(
    masses_u: &[f64],
    positions: &[Vector3<f64>],
) -> Result<DMatrix<f64>, InertiaError> {
    let inertia = Inertia::of(masses_u, positions)?;
    let turns: &[usize] = match inertia.rotor {
        Rotor::Atom => &[],
        Rotor::Linear => &[1, 2],
        Rotor::Bent => &[0, 1, 2],
    };
    let mut motions = DMatrix::zeros(3 * positions.len(), 3 + turns.len());
    for (atom, (&mass, position)) in masses_u.iter().zip(positions).enumerate() {
        let weight = mass.sqrt();
        let arm = position - inertia.centre;
        for axis in 0..3 {
            motions[(3 * atom + axis, axis)] = weight;
        }
        for (column, &turn) in turns.iter().enumerate() {
            let step = inertia.axes.column(turn).cross(&arm) * weight;
            for axis in 0..3 {
                motions[(3 * atom + axis, 3 + column)] = step[axis];
            }
        }
    }
    for mut column in motions.column_iter_mut() {
        let norm = column.norm();
        column /= norm;
    }
    Ok(motions)
}

fn check(masses_u: &[f64], positions: &[Vector3<f64>]) -> Result<(), InertiaError> {
    if masses_u.len() != positions.len() {
        return Err(InertiaError::Counts {
            masses: masses_u.len(),
            atoms: positions.len(),
        });
    }
    if masses_u.is_empty() {
        return Err(InertiaError::Empty);
    }
    for (atom, (&mass_u, position)) in masses_u.iter().zip(positions).enumerate() {
        if !(mass_u.is_finite() && mass_u > 0.0) {
            return Err(InertiaError::Mass { atom, mass_u });
        }
        if !position.iter().all(|x| x.is_finite()) {
            return Err(InertiaError::Position { atom });
        }
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::molecule::frame::turn;
    use crate::molecule::internal::Coordinate;
    use crate::molecule::test_molecules::{clouds, ethane, hydrogen_cyanide, ring, water};
    use crate::molecule::{Molecule, test_molecules};
    use proptest::prelude::*;

    fn masses(molecule: &Molecule) -> Vec<f64> {
        molecule
            .atoms
            .iter()
            .map(|atom| atom.element.mass_u())
            .collect()
    }

    /// K. P. Huber, G. Herzberg, *Constants of Diatomic Molecules*, Van Nostrand Reinhold, 1979 (as in the NIST
    /// Chemistry WebBook, SRD 69): r_e and B_e of the ground states. B goes with the square of the length, so half a
    /// unit of the last digit of r_e is a whole relative unit of B.
    #[test]
    fn val_rotational_constants_of_diatomic_molecules() {
        for (atoms, length_angstrom, expected, last_digit) in [
            ("N1\nN2 N1", 1.097_685, 1.998_241, 1e-6),
            ("C\nO C", 1.128_323, 1.931_280_87, 1e-6),
            ("H\nCl H", 1.274_552, 10.593_416, 1e-6),
            ("Li\nH Li", 1.5957, 7.5131, 1e-4),
        ] {
            let molecule = test_molecules::from_zmatrix(&format!("{atoms} {length_angstrom}"));
            let inertia = Inertia::of(&masses(&molecule), &molecule.positions).unwrap();
            assert_eq!(inertia.rotor, Rotor::Linear);
            let constants = inertia.rotational_constants_per_cm();
            assert_eq!(constants.len(), 1);
            // The fundamental constants and masses of 1979, and r_e from a B_e of another fit, differ by parts in 1e5.
            let tolerance = expected * (last_digit / length_angstrom + 5e-5);
            assert!(
                (constants[0] - expected).abs() < tolerance,
                "{atoms}: {}",
                constants[0]
            );
        }
    }

    #[test]
    fn a_linear_molecule_agrees_with_the_closed_form() {
        // Sum over pairs m_i m_j r_ij² / M (Lagrange's identity for the moment about the centre of mass).
        let molecule = hydrogen_cyanide();
        let masses = masses(&molecule);
        let inertia = Inertia::of(&masses, &molecule.positions).unwrap();
        let mut moment = 0.0;
        for j in 0..3 {
            for i in 0..j {
                let length = Coordinate::Bond([i, j]).value(&molecule.positions);
                moment += masses[i] * masses[j] * length * length;
            }
        }
        moment /= masses.iter().sum::<f64>();
        assert_eq!(inertia.rotor, Rotor::Linear);
        assert!((inertia.moments_u_bohr2[2] / moment - 1.0).abs() < 1e-13);
        assert!(inertia.moments_u_bohr2[0] < 1e-12);
    }

    #[test]
    fn water_lies_in_a_plane_and_ethane_and_benzene_are_tops() {
        let water = water();
        let [a, b, c] = Inertia::of(&masses(&water), &water.positions)
            .unwrap()
            .moments_u_bohr2;
        assert!((a + b - c).abs() < 1e-12 * c);
        let ethane = ethane();
        let [a, b, c] = Inertia::of(&masses(&ethane), &ethane.positions)
            .unwrap()
            .moments_u_bohr2;
        assert!(a < 0.5 * b && (b - c).abs() < 1e-10 * c);
        let benzene = ring(6, 1.39, 1);
        let [a, b, c] = Inertia::of(&masses(&benzene), &benzene.positions)
            .unwrap()
            .moments_u_bohr2;
        assert!((a - b).abs() < 1e-10 * c && (a + b - c).abs() < 1e-10 * c);
    }

    #[test]
    fn one_atom_only_translates() {
        let inertia = Inertia::of(&[4.0], &[Vector3::new(1.0, 2.0, 3.0)]).unwrap();
        assert_eq!(inertia.rotor, Rotor::Atom);
        assert!(inertia.rotational_constants_per_cm().is_empty());
        assert_eq!(rigid_motions(&[4.0], &[Vector3::x()]).unwrap().ncols(), 3);
    }

    #[test]
    fn wrong_input_is_refused() {
        let spot = [Vector3::zeros()];
        assert_eq!(Inertia::of(&[], &[]), Err(InertiaError::Empty));
        assert_eq!(
            Inertia::of(&[1.0, 1.0], &spot),
            Err(InertiaError::Counts {
                masses: 2,
                atoms: 1
            })
        );
        for mass_u in [0.0, -1.0, f64::INFINITY] {
            assert_eq!(
                Inertia::of(&[mass_u], &spot),
                Err(InertiaError::Mass { atom: 0, mass_u })
            );
        }
        assert_eq!(
            Inertia::of(&[1.0], &[Vector3::new(f64::NAN, 0.0, 0.0)]),
            Err(InertiaError::Position { atom: 0 })
        );
    }

    proptest! {
        #[test]
        fn moments_do_not_see_translation_and_rotation(
            positions in clouds(5),
            masses in prop::array::uniform5(1.0..80.0_f64),
            axis in prop::array::uniform3(0.1..1.0_f64),
            angle in -3.0..3.0_f64,
        ) {
            let axis = Vector3::from(axis).normalize();
            let moved: Vec<Vector3<f64>> =
                positions.iter().map(|p| p + turn(&axis, angle, p) + axis * 7.0).collect();
            let one = Inertia::of(&masses, &positions).unwrap();
            let two = Inertia::of(&masses, &moved).unwrap();
            for (a, b) in one.moments_u_bohr2.iter().zip(&two.moments_u_bohr2) {
                prop_assert!((a - b).abs() < 1e-11 * one.moments_u_bohr2[2]);
            }
            prop_assert!((one.axes.determinant() - 1.0).abs() < 1e-12);
            let constants = one.rotational_constants_per_cm();
            prop_assert!(constants.windows(2).all(|pair| pair[0] >= pair[1]));
        }

        #[test]
        fn rigid_motions_are_orthonormal_and_change_no_distance(
            positions in clouds(5),
            masses in prop::array::uniform5(1.0..80.0_f64),
        ) {
            let motions = rigid_motions(&masses, &positions).unwrap();
            prop_assert_eq!(motions.ncols(), 6);
            let overlap = motions.transpose() * &motions;
            prop_assert!((overlap - DMatrix::identity(6, 6)).norm() < 1e-12);
            for column in motions.column_iter() {
                let step = |i: usize| {
                    Vector3::from_fn(|axis, _| column[3 * i + axis]) / masses[i].sqrt()
                };
                for j in 0..5 {
                    for i in 0..j {
                        let rate = (positions[j] - positions[i]).dot(&(step(j) - step(i)));
                        prop_assert!(rate.abs() < 1e-12);
                    }
                }
            }
        }
    }

    #[test]
    fn a_molecule_straight_to_minimisation_has_five_rigid_motions() {
        let mut molecule = hydrogen_cyanide();
        for off in [0.0, 1e-9, 1e-4] {
            molecule.positions[1].x = off;
            let motions = rigid_motions(&masses(&molecule), &molecule.positions).unwrap();
            assert_eq!(motions.ncols(), 5);
            // A norm shows what is not a number, unlike a largest element.
            let overlap = motions.transpose() * &motions;
            assert!((overlap - DMatrix::identity(5, 5)).norm() < 1e-12);
            // Each turn moves the atoms across the line.
            for column in motions.columns(3, 2).column_iter() {
                for atom in 0..3 {
                    assert!(column[3 * atom + 2].abs() < 2e-4);
                }
                assert!(column[0].hypot(column[1]) > 0.1);
            }
        }
        molecule.positions[1].x = 0.05;
        let bent = rigid_motions(&masses(&molecule), &molecule.positions).unwrap();
        assert_eq!(bent.ncols(), 6);
    }
}
