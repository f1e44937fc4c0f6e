//! Dipole integrals.

use super::one_electron::symmetric_matrices;
use super::recurrence::PrimitivePair;
use super::separable::Separable;
use crate::basis::Basis;
use nalgebra::{DMatrix, Vector3};

pub(crate) struct Dipole {
    origin: Vector3<f64>,
}

impl Separable for Dipole {
    const COMPONENTS: usize = 3;
    const KET_RAISE: usize = 0;

    fn integral(&self, axis: usize, pair: &PrimitivePair, a: [usize; 3], b: [usize; 3]) -> f64 {
        (0..3)
            .map(|i| {
                let row = pair.hermite[i].row(a[i], b[i]);
                if i == axis {
                    // ∫ x Λ_0 = P, ∫ x Λ_1 = 1, all higher vanish (in units of √(π/p)).
                    let first = row.get(1).copied().unwrap_or(0.0);
                    first + (pair.centre[i] - self.origin[i]) * row[0]
                } else {
                    row[0]
                }
            })
            .product()
    }
}

/// Matrices ⟨a|r − origin|b⟩ for x, y and z in bohr (`origin` in bohr): of position, so that an
/// electron's dipole is their negative.
#[must_use]
pub fn dipole(basis: &Basis, origin: &Vector3<f64>) -> [DMatrix<f64>; 3] {
    let operator = Dipole { origin: *origin };
    let mut matrices = symmetric_matrices(&operator, basis).into_iter();
    std::array::from_fn(|_| matrices.next().unwrap_or_default())
}

#[cfg(test)]
mod tests {
    use super::super::one_electron::samples;
    use super::super::overlap::overlap;
    use super::super::values::basis_values;
    use super::*;
    use crate::basis::FunctionKind;

    #[test]
    fn matches_integration_on_a_grid_and_shifts_with_the_origin() {
        let basis = samples::mixed_basis(FunctionKind::Spherical, 3);
        let origin = Vector3::new(0.4, -0.3, 0.2);
        let mut sum = [(); 3].map(|()| DMatrix::zeros(basis.len(), basis.len()));
        samples::integrate(|point, weight| {
            let values = basis_values(&basis, point);
            for axis in 0..3 {
                let factor = weight * (point[axis] - origin[axis]);
                sum[axis].ger(factor, &values, &values, 1.0);
            }
        });
        let matrices = dipole(&basis, &origin);
        let at_zero = dipole(&basis, &Vector3::zeros());
        let s = overlap(&basis);
        for axis in 0..3 {
            assert!((&matrices[axis] - &sum[axis]).abs().max() < 1e-8);
            let shifted = &at_zero[axis] - &s * origin[axis];
            assert!((&matrices[axis] - shifted).abs().max() < 1e-14);
        }
    }
}
