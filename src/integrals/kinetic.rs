//! Kinetic-energy integrals.

use super::one_electron::symmetric_matrices;
use super::recurrence::{Hermite1d, PrimitivePair};
use super::separable::Separable;
use crate::basis::Basis;
use nalgebra::DMatrix;

pub(crate) struct Kinetic;

/// −½ ⟨x^i| d²/dx² |x^j⟩ in units of √(π/p), from overlaps with j − 2, j and j + 2.
pub(crate) fn kinetic_1d(hermite: &Hermite1d, b: f64, i: usize, j: usize) -> f64 {
    let overlap = |j: usize| hermite.row(i, j)[0];
    let mut value = b * (2 * j + 1) as f64 * overlap(j) - 2.0 * b * b * overlap(j + 2);
    if j >= 2 {
        value -= 0.5 * (j * (j - 1)) as f64 * overlap(j - 2);
    }
    value
}

impl Separable for Kinetic {
    const COMPONENTS: usize = 1;
    const KET_RAISE: usize = 2;

    fn integral(&self, _: usize, pair: &PrimitivePair, a: [usize; 3], b: [usize; 3]) -> f64 {
        let s: [f64; 3] = std::array::from_fn(|i| pair.hermite[i].row(a[i], b[i])[0]);
        let t: [f64; 3] = std::array::from_fn(|i| kinetic_1d(&pair.hermite[i], pair.b, a[i], b[i]));
        t[0] * s[1] * s[2] + s[0] * (t[1] * s[2] + s[1] * t[2])
    }
}

/// Kinetic-energy matrix ⟨a|−½∇²|b⟩ in hartree; symmetric.
#[must_use]
pub fn kinetic(basis: &Basis) -> DMatrix<f64> {
    symmetric_matrices(&Kinetic, basis).swap_remove(0)
}

#[cfg(test)]
mod tests {
    use super::super::one_electron::{matrices_between, samples};
    use super::super::values::basis_values;
    use super::*;
    use crate::basis::FunctionKind;

    #[test]
    fn matches_integration_of_squared_gradients() {
        let basis = samples::mixed_basis(FunctionKind::Cartesian, 2);
        let mut sum = DMatrix::zeros(basis.len(), basis.len());
        // Eighth-order central differences: error about h⁸ per derivative.
        let (h, weights) = (0.05, [4.0 / 5.0, -1.0 / 5.0, 4.0 / 105.0, -1.0 / 280.0]);
        samples::integrate(|point, weight| {
            if (point - basis.centres()[0]).norm() > 7.0 {
                return;
            }
            for axis in 0..3 {
                let mut slope = nalgebra::DVector::zeros(basis.len());
                for (k, w) in weights.iter().enumerate() {
                    let step = nalgebra::Vector3::ith(axis, (k + 1) as f64 * h);
                    slope += (basis_values(&basis, &(point + step))
                        - basis_values(&basis, &(point - step)))
                        * (w / h);
                }
                sum.ger(0.5 * weight, &slope, &slope, 1.0);
            }
        });
        let error = (kinetic(&basis) - sum).abs().max();
        assert!(error < 1e-7, "{error}");
    }

    #[test]
    fn operator_is_symmetric_though_it_acts_to_the_right() {
        for kind in [FunctionKind::Cartesian, FunctionKind::Spherical] {
            let basis = samples::mixed_basis(kind, 4);
            let t = matrices_between(&Kinetic, &basis, &basis).swap_remove(0);
            assert!((&t - t.transpose()).abs().max() < 1e-12);
            assert!((t - kinetic(&basis)).abs().max() < 1e-12);
        }
    }
}
