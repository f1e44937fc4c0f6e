//! One-electron integrals that are kept from one geometry to the next.

use super::attraction::{Attraction, charged, sum};
use super::kinetic::Kinetic;
use super::one_electron::{renew_symmetric, symmetric_matrices};
use super::overlap::Overlap;
use crate::basis::Basis;
use nalgebra::{DMatrix, Vector3};

/// Overlap, kinetic energy and the attraction by every nucleus apart: when atoms move, only what touches them changes.
#[derive(Debug, Clone)]
pub struct OneElectronIntegrals {
    basis: Basis,
    charges: Vec<(f64, Vector3<f64>)>,
    overlap: DMatrix<f64>,
    kinetic: DMatrix<f64>,
    /// One matrix per charge.
    potentials: Vec<DMatrix<f64>>,
}

impl OneElectronIntegrals {
    /// Evaluates all integrals of a basis in the field of charges (units of e; positions in bohr).
    #[must_use]
    pub fn compute(basis: &Basis, charges: &[(f64, Vector3<f64>)]) -> Self {
        let charges = charged(charges);
        let only = |mut matrices: Vec<DMatrix<f64>>| matrices.swap_remove(0);
        Self {
            basis: basis.clone(),
            overlap: only(symmetric_matrices(&Overlap, basis)),
            kinetic: only(symmetric_matrices(&Kinetic, basis)),
            potentials: symmetric_matrices(&Attraction { charges: &charges }, basis),
            charges,
        }
    }

    /// Moves to another geometry; the result has the bits of [`Self::compute`]. Other shells or charges are computed anew.
    pub fn update(&mut self, basis: &Basis, charges: &[(f64, Vector3<f64>)]) {
        let charges = charged(charges);
        let alike = self.basis.shells() == basis.shells()
            && self.charges.len() == charges.len()
            && self
                .charges
                .iter()
                .zip(&charges)
                .all(|(a, b)| a.0.to_bits() == b.0.to_bits());
        if !alike {
            *self = Self::compute(basis, &charges);
            return;
        }
        let moved = basis.moved_since(&self.basis);
        let bits = |r: &Vector3<f64>| [r.x, r.y, r.z].map(f64::to_bits);
        let touches =
            |s: usize, t: usize| moved[basis.shells()[s].atom] || moved[basis.shells()[t].atom];
        renew_symmetric(
            &Overlap,
            basis,
            touches,
            std::slice::from_mut(&mut self.overlap),
        );
        renew_symmetric(
            &Kinetic,
            basis,
            touches,
            std::slice::from_mut(&mut self.kinetic),
        );
        renew_symmetric(
            &Attraction { charges: &charges },
            basis,
            touches,
            &mut self.potentials,
        );
        // Functions that stayed see the nuclei that moved.
        let places: Vec<usize> = (0..charges.len())
            .filter(|&k| bits(&self.charges[k].1) != bits(&charges[k].1))
            .collect();
        let other: Vec<(f64, Vector3<f64>)> = places.iter().map(|&k| charges[k]).collect();
        let mut matrices: Vec<DMatrix<f64>> = places
            .iter()
            .map(|&k| std::mem::take(&mut self.potentials[k]))
            .collect();
        renew_symmetric(
            &Attraction { charges: &other },
            basis,
            |s, t| !other.is_empty() && !touches(s, t),
            &mut matrices,
        );
        for (k, matrix) in places.into_iter().zip(matrices) {
            self.potentials[k] = matrix;
        }
        self.basis = basis.clone();
        self.charges = charges;
    }

    /// Overlap matrix.
    #[must_use]
    pub fn overlap(&self) -> &DMatrix<f64> {
        &self.overlap
    }

    /// Kinetic-energy matrix, hartree.
    #[must_use]
    pub fn kinetic(&self) -> &DMatrix<f64> {
        &self.kinetic
    }

    /// Kinetic energy and attraction by all charges, hartree.
    #[must_use]
    pub fn core(&self) -> DMatrix<f64> {
        &self.kinetic + sum(&self.potentials, self.basis.len())
    }
}

#[cfg(test)]
mod tests {
    use super::super::one_electron::samples;
    use super::super::{attraction, kinetic, overlap};
    use super::*;
    use crate::basis::FunctionKind;

    #[test]
    fn an_update_has_the_bits_of_a_fresh_calculation() {
        for kind in [FunctionKind::Cartesian, FunctionKind::Spherical] {
            let basis = samples::mixed_basis(kind, 3);
            let charges = |basis: &Basis, third: f64| {
                let [a, b] = [0, 1].map(|k| basis.centres()[k]);
                vec![
                    (7.0, a),
                    (0.0, a),
                    (1.0, b),
                    (2.0, Vector3::new(0.0, third, -1.0)),
                ]
            };
            let mut kept = OneElectronIntegrals::compute(&basis, &charges(&basis, 3.0));
            let mut centres = basis.centres().to_vec();
            for (atom, third) in [(0, 3.0), (1, 3.0), (1, 3.5), (0, 3.5)] {
                centres[atom].x += 0.1;
                let there = basis.at(&centres);
                let field = charges(&there, third);
                kept.update(&there, &field);
                let fresh = OneElectronIntegrals::compute(&there, &field);
                assert_eq!(kept.core(), fresh.core());
                assert_eq!(kept.overlap(), &overlap(&there));
                assert_eq!(kept.kinetic(), &kinetic(&there));
                assert_eq!(kept.core(), kinetic(&there) + attraction(&there, &field));
            }
        }
    }
}
