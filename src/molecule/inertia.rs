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
