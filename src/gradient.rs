//! Energy gradient of a self-consistent determinant.

use crate::basis::Basis;
use crate::integrals::derivative::{
    RepulsionGradientSettings, attraction_gradient, kinetic_gradient, overlap_gradient,
    repulsion_gradient,
};
use crate::molecule::{Molecule, nuclear};
use nalgebra::{DMatrix, Vector3};

/// Derivatives of the Hartree–Fock energy with respect to the positions, hartree/bohr, one vector per atom.
///
/// `alpha` and `beta` are the density matrices of the spins and `energy_weighted` is Σ over spins and occupied orbitals
/// of εᵢ CᵢCᵢᵀ, all in the basis and self-consistent: the response of the orbitals then drops out (P. Pulay, Mol.
/// Phys. 17, 197 (1969); J. A. Pople, R. Krishnan, H. B. Schlegel, J. S. Binkley, Int. J. Quantum Chem. Symp. 13, 225 (1979)).
#[must_use]
pub fn energy_gradient(
    molecule: &Molecule,
    basis: &Basis,
    alpha: &DMatrix<f64>,
    beta: &DMatrix<f64>,
    energy_weighted: &DMatrix<f64>,
) -> Vec<Vector3<f64>> {
    let total = alpha + beta;
    let charges: Vec<f64> = molecule
        .atoms
        .iter()
        .map(crate::molecule::Atom::charge)
        .collect();
    let mut gradient = nuclear::repulsion_gradient(molecule);
    let parts = [
        kinetic_gradient(basis, &total),
        attraction_gradient(basis, &total, &charges),
        repulsion_gradient(basis, alpha, beta, &RepulsionGradientSettings::default()),
        overlap_gradient(basis, &-energy_weighted),
    ];
    for part in parts {
        for (sum, term) in gradient.iter_mut().zip(part) {
            *sum += term;
        }
    }
    gradient
}
