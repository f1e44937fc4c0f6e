//! Canonical orbitals of a determinant: occupied and empty orbitals that diagonalise their own blocks of
//! the Fock matrix, whether or not the determinant is the lowest or converged.

use super::ScfError;
use super::fock::{Evaluation, Field};
use super::orthogonal::{symmetric_eigen, symmetrise};
use nalgebra::{DMatrix, DVector};

/// Orbitals of one spin block in the orthonormal frame, each set sorted by energy.
#[derive(Debug, Clone)]
pub struct Canonical {
    /// Energies of the occupied orbitals, hartree.
    pub occupied_energies: DVector<f64>,
    /// Occupied orbitals, basis functions × occupied.
    pub occupied: DMatrix<f64>,
    /// Energies of the empty orbitals, hartree.
    pub empty_energies: DVector<f64>,
    /// Empty orbitals, basis functions × empty.
    pub empty: DMatrix<f64>,
}

/// Orbital rotations: for each spin block a matrix empty × occupied.
pub type Kappa = Vec<DMatrix<f64>>;

impl Canonical {
    /// Canonical orbitals of every spin block of a determinant.
    ///
    /// # Errors
    /// [`ScfError::Eigenproblem`].
    pub fn of(field: &Field<'_>, evaluation: &Evaluation) -> Result<Vec<Self>, ScfError> {
        evaluation
            .occupied
            .iter()
            .zip(&evaluation.focks)
            .map(|(y, fock)| Self::of_block(field, y, fock))
            .collect()
    }

    fn of_block(
        field: &Field<'_>,
        y: &DMatrix<f64>,
        fock: &DMatrix<f64>,
    ) -> Result<Self, ScfError> {
        let mut inner = y.transpose() * (fock * y);
        symmetrise(&mut inner);
        let (occupied_energies, turn) = symmetric_eigen(&inner)?;
        // Lifting the occupied space above everything else makes the empty orbitals the lowest.
        let lift = 10.0 + 2.0 * fock.amax() * fock.nrows() as f64;
        let fy = fock * y;
        let outer = fock - &fy * y.transpose() - y * fy.transpose()
            + y * (y.transpose() * &fy) * y.transpose()
            + y * y.transpose() * lift;
        let orbitals = field.frame().eigen(&outer)?;
        let count = field.frame().kept() - y.ncols();
        Ok(Self {
            occupied_energies,
            occupied: y * turn,
            empty_energies: orbitals.energies.rows(0, count).into_owned(),
            empty: orbitals.lowest(count),
        })
    }

    /// Differences εa − εi, empty × occupied, hartree.
    #[must_use]
    pub fn gaps(&self) -> DMatrix<f64> {
        DMatrix::from_fn(self.empty.ncols(), self.occupied.ncols(), |a, i| {
            self.empty_energies[a] - self.occupied_energies[i]
        })
    }

    /// The empty–occupied block of a matrix of the frame.
    #[must_use]
    pub fn off_diagonal(&self, matrix: &DMatrix<f64>) -> DMatrix<f64> {
        self.empty.transpose() * (matrix * &self.occupied)
    }
}

/// Sum of products of two sets of rotations.
#[must_use]
pub fn inner(a: &[DMatrix<f64>], b: &[DMatrix<f64>]) -> f64 {
    a.iter()
        .zip(b)
        .map(|(x, y)| super::diis::dot(x.as_slice(), y.as_slice()))
        .sum()
}

/// a + factor · b.
#[must_use]
pub fn combined(a: &[DMatrix<f64>], factor: f64, b: &[DMatrix<f64>]) -> Kappa {
    a.iter().zip(b).map(|(x, y)| x + y * factor).collect()
}

/// factor · a.
#[must_use]
pub fn scaled(a: &[DMatrix<f64>], factor: f64) -> Kappa {
    a.iter().map(|x| x * factor).collect()
}

/// Products of the real orbital Hessians A + B of several kinds with sets of rotations, in one pass over the integrals:
/// one list per kind.
///
/// To second order E(κ) = E + w (2 g·κ + κ·(A+B)κ) with g the empty–occupied Fock block and w the electrons per orbital.
/// J. Čížek, J. Paldus, J. Chem. Phys. 47, 3976 (1967); R. Seeger, J. A. Pople, J. Chem. Phys. 66, 3045 (1977).
#[must_use]
pub fn hessian_products(
    field: &mut Field<'_>,
    orbitals: &[Canonical],
    rotations: &[Kappa],
    kinds: &[super::fock::Rotation],
) -> Vec<Vec<Kappa>> {
    if rotations.is_empty() {
        return vec![Vec::new(); kinds.len()];
    }
    let occupied: Vec<_> = orbitals.iter().map(|o| o.occupied.clone()).collect();
    let tangents: Vec<Vec<_>> = rotations
        .iter()
        .map(|kappa| tangents(orbitals, kappa))
        .collect();
    let gaps: Vec<_> = orbitals.iter().map(Canonical::gaps).collect();
    field
        .response(&occupied, &tangents, kinds)
        .iter()
        .map(|responses| {
            responses
                .iter()
                .zip(rotations)
                .map(|(response, kappa)| {
                    orbitals
                        .iter()
                        .zip(response)
                        .zip(kappa.iter().zip(&gaps))
                        .map(|((o, r), (k, gap))| o.empty.transpose() * r + gap.component_mul(k))
                        .collect()
                })
                .collect()
        })
        .collect()
}

/// Tangents Γ = C_empty κ of the frame.
#[must_use]
pub fn tangents(orbitals: &[Canonical], kappa: &[DMatrix<f64>]) -> Vec<DMatrix<f64>> {
    orbitals
        .iter()
        .zip(kappa)
        .map(|(o, k)| &o.empty * k)
        .collect()
}

/// The determinant reached by a rotation.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn rotated(
    orbitals: &[Canonical],
    kappa: &[DMatrix<f64>],
) -> Result<Vec<DMatrix<f64>>, ScfError> {
    orbitals
        .iter()
        .zip(tangents(orbitals, kappa))
        .map(|(o, gamma)| super::grassmann::exponential(&o.occupied, &gamma))
        .collect()
}
