//! Overlap integrals.

use super::one_electron::{matrices_between, symmetric_matrices};
use super::recurrence::PrimitivePair;
use super::separable::Separable;
use crate::basis::Basis;
use nalgebra::DMatrix;

pub(crate) struct Overlap;

impl Separable for Overlap {
    const COMPONENTS: usize = 1;
    const KET_RAISE: usize = 0;

    fn integral(&self, _: usize, pair: &PrimitivePair, a: [usize; 3], b: [usize; 3]) -> f64 {
        (0..3).map(|i| pair.hermite[i].row(a[i], b[i])[0]).product()
    }
}

/// Overlap matrix ⟨a|b⟩ of a basis; symmetric, unit diagonal.
#[must_use]
pub fn overlap(basis: &Basis) -> DMatrix<f64> {
    symmetric_matrices(&Overlap, basis).swap_remove(0)
}

/// Overlap ⟨a|b⟩ of the functions of two bases; rows belong to `bra`, columns to `ket`.
#[must_use]
pub fn overlap_between(bra: &Basis, ket: &Basis) -> DMatrix<f64> {
    matrices_between(&Overlap, bra, ket).swap_remove(0)
}

#[cfg(test)]
mod tests {
    use super::super::one_electron::samples;
    use super::super::values::basis_values;
    use super::*;
    use crate::basis::FunctionKind;

    #[test]
    fn every_function_has_unit_norm() {
        for kind in [FunctionKind::Cartesian, FunctionKind::Spherical] {
            let s = overlap(&samples::mixed_basis(kind, 4));
            for i in 0..s.nrows() {
                assert!(
                    (s[(i, i)] - 1.0).abs() < 1e-14,
                    "{kind:?} {i} {}",
                    s[(i, i)]
                );
            }
        }
    }

    #[test]
    fn matches_integration_on_a_grid() {
        for kind in [FunctionKind::Cartesian, FunctionKind::Spherical] {
            let basis = samples::mixed_basis(kind, 3);
            let mut sum = DMatrix::zeros(basis.len(), basis.len());
            samples::integrate(|point, weight| {
                let values = basis_values(&basis, point);
                sum.ger(weight, &values, &values, 1.0);
            });
            let error = (overlap(&basis) - sum).abs().max();
            assert!(error < 1e-9, "{kind:?}: {error}");
        }
    }

    #[test]
    fn rectangular_matrix_agrees_with_square_one() {
        let basis = samples::mixed_basis(FunctionKind::Spherical, 4);
        let moved = basis.at(&basis.centres().iter().map(|c| c * 1.3).collect::<Vec<_>>());
        assert!(
            (overlap(&basis) - overlap_between(&basis, &basis))
                .abs()
                .max()
                < 1e-15
        );
        let there = overlap_between(&basis, &moved);
        let back = overlap_between(&moved, &basis);
        assert!((there - back.transpose()).abs().max() < 1e-14);
    }
}
