//! The orthonormal frame of one geometry: square roots of the overlap matrix, with near-dependent
//! combinations of basis functions left out.
//!
//! All iterations run in the symmetrically orthonormalised (Löwdin) frame C̃ = S^½ C, because it moves as
//! little as possible when the atoms move: matrices of neighbouring geometries can be compared and
//! combined. P.-O. Löwdin, J. Chem. Phys. 18, 365 (1950).
//! Where eigenvalues of S are dropped (canonical orthogonalisation, P.-O. Löwdin, Adv. Quantum
//! Chem. 5, 185 (1970)), the roots are those on the space that is kept.

use super::ScfError;
use faer::{MatRef, Side};
use nalgebra::{DMatrix, DVector};

/// Orbital energies, ascending, and orbitals (columns) of one spin.
#[derive(Debug, Clone, PartialEq)]
pub struct Orbitals {
    /// Orbital energies in hartree, lowest first; one per kept function.
    pub energies: DVector<f64>,
    /// Orbitals in the orthonormal frame, basis functions × kept functions.
    pub vectors: DMatrix<f64>,
}

impl Orbitals {
    /// The first `count` orbitals (basis functions × `count`).
    #[must_use]
    pub fn lowest(&self, count: usize) -> DMatrix<f64> {
        self.vectors.columns(0, count).into_owned()
    }
}

/// Square roots of an overlap matrix and the space they act on.
#[derive(Debug, Clone, PartialEq)]
pub struct Orthogonal {
    half: DMatrix<f64>,
    inverse_half: DMatrix<f64>,
    /// Eigenvectors of S that are kept, where some are not.
    kept_space: Option<DMatrix<f64>>,
    kept: usize,
    smallest: f64,
}

/// Eigenvalues (ascending) and eigenvectors of a symmetric matrix, each vector with its largest
/// component positive so that the result does not depend on arbitrary signs.
///
/// # Errors
/// [`ScfError::Eigenproblem`] when the iteration does not end, for instance on numbers that are not finite.
pub fn symmetric_eigen(matrix: &DMatrix<f64>) -> Result<(DVector<f64>, DMatrix<f64>), ScfError> {
    let order = matrix.nrows();
    if order == 0 {
        return Ok((DVector::zeros(0), DMatrix::zeros(0, 0)));
    }
    if matrix.iter().any(|x| !x.is_finite()) {
        return Err(ScfError::Eigenproblem { order });
    }
    // The divide-and-conquer solver of faer takes a third to a seventh of the time of nalgebra's QR iteration
    // at 60 to 260 functions; without its threads its bits do not depend on theirs.
    let eigen = MatRef::from_column_major_slice(matrix.as_slice(), order, order)
        .self_adjoint_eigen(Side::Lower)
        .map_err(|_| ScfError::Eigenproblem { order })?;
    let values = DVector::from_iterator(order, eigen.S().column_vector().iter().copied());
    let mut vectors = DMatrix::from_fn(order, order, |i, j| eigen.U()[(i, j)]);
    for mut vector in vectors.column_iter_mut() {
        if vector[vector.icamax()] < 0.0 {
            vector.neg_mut();
        }
    }
    Ok((values, vectors))
}

/// Replaces `matrix` by the mean of itself and its transpose.
pub(crate) fn symmetrise(matrix: &mut DMatrix<f64>) {
    for j in 0..matrix.ncols() {
        for i in 0..j {
            let mean = 0.5 * (matrix[(i, j)] + matrix[(j, i)]);
            matrix[(i, j)] = mean;
            matrix[(j, i)] = mean;
        }
    }
}

impl Orthogonal {
    /// Roots of the overlap matrix `overlap` (basis functions squared).
    ///
    /// Eigenvalues below `dependence` are dropped; with `keep` given, that many are kept
    /// instead (so that a chain of geometries keeps one size), except those so small (a thousandth of
    /// `dependence`) that nothing sensible can be computed with them.
    ///
    /// # Errors
    /// [`ScfError::Eigenproblem`].
    pub fn new(
        overlap: &DMatrix<f64>,
        dependence: f64,
        keep: Option<usize>,
    ) -> Result<Self, ScfError> {
        let n = overlap.nrows();
        let (values, vectors) = symmetric_eigen(overlap)?;
        let above = |limit: f64| values.iter().filter(|&&s| s >= limit).count();
        let kept = match keep {
            Some(number) => number.min(above(1e-3 * dependence)),
            None => above(dependence),
        };
        let space = vectors.columns(n - kept, kept).into_owned();
        let root = |power: f64| {
            let mut scaled = space.clone();
            for (i, mut column) in scaled.column_iter_mut().enumerate() {
                column *= values[n - kept + i].powf(power);
            }
            let mut product = scaled * space.transpose();
            symmetrise(&mut product);
            product
        };
        Ok(Self {
            half: root(0.5),
            inverse_half: root(-0.5),
            smallest: values.iter().copied().next().unwrap_or(1.0),
            kept,
            kept_space: (kept < n).then_some(space),
        })
    }

    /// S^½, basis functions squared.
    #[must_use]
    pub fn half(&self) -> &DMatrix<f64> {
        &self.half
    }

    /// S^-½ on the kept space, basis functions squared.
    #[must_use]
    pub fn inverse_half(&self) -> &DMatrix<f64> {
        &self.inverse_half
    }

    /// Number of basis functions.
    #[must_use]
    pub fn functions(&self) -> usize {
        self.half.nrows()
    }

    /// Number of independent functions that are kept.
    #[must_use]
    pub fn kept(&self) -> usize {
        self.kept
    }

    /// Smallest eigenvalue of the overlap matrix (1 without functions).
    #[must_use]
    pub fn smallest(&self) -> f64 {
        self.smallest
    }

    /// An operator such as the Fock matrix, or a density the other way, carried by S^-½ · S^-½.
    #[must_use]
    pub fn transform(&self, operator: &DMatrix<f64>) -> DMatrix<f64> {
        let mut product = &self.inverse_half * operator * &self.inverse_half;
        symmetrise(&mut product);
        product
    }

    /// Density matrix in the basis from orthonormal occupied orbitals of the frame
    /// (basis functions × occupied): S^-½ Y Yᵀ S^-½.
    #[must_use]
    pub fn density(&self, occupied: &DMatrix<f64>) -> DMatrix<f64> {
        let orbitals = &self.inverse_half * occupied;
        let mut density = &orbitals * orbitals.transpose();
        symmetrise(&mut density);
        density
    }

    /// Eigenpairs of a symmetric matrix of the frame within the kept space.
    ///
    /// # Errors
    /// [`ScfError::Eigenproblem`].
    pub fn eigen(&self, matrix: &DMatrix<f64>) -> Result<Orbitals, ScfError> {
        let (energies, vectors) = match &self.kept_space {
            None => symmetric_eigen(matrix)?,
            Some(space) => {
                let mut small = space.transpose() * matrix * space;
                symmetrise(&mut small);
                let (energies, vectors) = symmetric_eigen(&small)?;
                (energies, space * vectors)
            }
        };
        Ok(Orbitals { energies, vectors })
    }

    /// Orthonormal orbitals nearest to `orbitals` within the kept space.
    ///
    /// # Errors
    /// [`ScfError::Eigenproblem`].
    pub fn nearest(&self, orbitals: &DMatrix<f64>) -> Result<DMatrix<f64>, ScfError> {
        let inside = match &self.kept_space {
            None => orbitals.clone(),
            Some(space) => space * (space.transpose() * orbitals),
        };
        super::grassmann::orthonormalised(&inside)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn overlap(dependent: f64) -> DMatrix<f64> {
        DMatrix::from_row_slice(
            3,
            3,
            &[
                1.0,
                0.4,
                0.1,
                0.4,
                1.0,
                1.0 - dependent,
                0.1,
                1.0 - dependent,
                1.0,
            ],
        )
    }

    #[test]
    fn roots_give_back_the_overlap_and_its_inverse() {
        let s = DMatrix::from_row_slice(3, 3, &[1.0, 0.4, 0.1, 0.4, 1.0, 0.3, 0.1, 0.3, 1.0]);
        let frame = Orthogonal::new(&s, 1e-7, None).expect("a small matrix");
        assert!((frame.half() * frame.half() - &s).amax() < 1e-14);
        assert!((frame.transform(&s) - DMatrix::identity(3, 3)).amax() < 1e-14);
        assert_eq!(frame.kept(), 3);
    }

    #[test]
    fn near_dependent_functions_are_dropped_unless_kept_by_number() {
        let mut s = overlap(0.0);
        s[(0, 2)] = 0.4 + 1e-6;
        s[(2, 0)] = 0.4 + 1e-6;
        s[(1, 2)] = 1.0 - 1e-9;
        s[(2, 1)] = 1.0 - 1e-9;
        let dropped = Orthogonal::new(&s, 1e-7, None).expect("a small matrix");
        assert_eq!(dropped.kept(), 2);
        let kept = Orthogonal::new(&s, 1e-7, Some(3)).expect("a small matrix");
        assert_eq!(kept.kept(), 3);
        let orbitals = dropped
            .eigen(&dropped.transform(&s))
            .expect("a small matrix");
        assert_eq!(orbitals.energies.len(), 2);
        assert!(orbitals.energies.iter().all(|e| (e - 1.0).abs() < 1e-8));
    }

    #[test]
    fn numbers_that_are_not_finite_are_an_error() {
        let matrix = DMatrix::from_element(2, 2, f64::NAN);
        assert_eq!(
            symmetric_eigen(&matrix).map(|_| ()),
            Err(ScfError::Eigenproblem { order: 2 })
        );
    }
}
