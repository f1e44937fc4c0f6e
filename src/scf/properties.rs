//! What a determinant says beyond its energy: spin, dipole moment, charges, bond orders.

use super::diis::dot;
use super::orthogonal::Orthogonal;
use crate::molecule::Molecule;
use nalgebra::{DMatrix, Vector3};

/// ⟨S²⟩ of a determinant from the occupied α and β orbitals of the orthonormal frame (α not fewer than β):
/// S_z(S_z + 1) + N_β − Σ |⟨i_α|j_β⟩|² (A. Szabo, N. S. Ostlund, Modern Quantum Chemistry, eq. 2.271).
#[must_use]
pub fn s_squared(alpha: &DMatrix<f64>, beta: &DMatrix<f64>) -> f64 {
    let s_z = 0.5 * (alpha.ncols() as f64 - beta.ncols() as f64);
    let shared = (alpha.transpose() * beta).norm_squared();
    s_z * (s_z + 1.0) + beta.ncols() as f64 - shared
}

/// Centre of nuclear charge in bohr; the origin without any charge.
#[must_use]
pub fn charge_centre(molecule: &Molecule) -> Vector3<f64> {
    let mut sum = Vector3::zeros();
    let mut charge = 0.0;
    for (atom, position) in molecule.atoms.iter().zip(&molecule.positions) {
        sum += position * atom.charge();
        charge += atom.charge();
    }
    if charge > 0.0 {
        sum / charge
    } else {
        Vector3::zeros()
    }
}

/// Dipole moment in e·bohr about `origin` from a total density and the dipole integrals about the same origin.
#[must_use]
pub fn dipole(
    molecule: &Molecule,
    origin: &Vector3<f64>,
    density: &DMatrix<f64>,
    integrals: &[DMatrix<f64>; 3],
) -> Vector3<f64> {
    let mut moment = Vector3::zeros();
    for (atom, position) in molecule.atoms.iter().zip(&molecule.positions) {
        moment += (position - origin) * atom.charge();
    }
    for (axis, matrix) in integrals.iter().enumerate() {
        moment[axis] -= dot(density.as_slice(), matrix.as_slice());
    }
    moment
}

fn sum_by_atom(populations: impl Iterator<Item = f64>, atoms: &[usize], count: usize) -> Vec<f64> {
    let mut sums = vec![0.0; count];
    for (population, &atom) in populations.zip(atoms) {
        sums[atom] += population;
    }
    sums
}

/// Mulliken populations per atom: Σ (PS)_μμ (R. S. Mulliken, J. Chem. Phys. 23, 1833 (1955)).
/// `function_atoms` names the atom of each basis function, `atoms` is their number.
#[must_use]
pub fn mulliken_populations(
    density: &DMatrix<f64>,
    overlap: &DMatrix<f64>,
    function_atoms: &[usize],
    atoms: usize,
) -> Vec<f64> {
    let diagonal = (0..density.nrows())
        .map(|m| dot(density.column(m).as_slice(), overlap.column(m).as_slice()));
    sum_by_atom(diagonal, function_atoms, atoms)
}

/// Löwdin populations per atom: Σ (S^½ P S^½)_μμ (P.-O. Löwdin, J. Chem. Phys. 18, 365 (1950)).
#[must_use]
pub fn loewdin_populations(
    density: &DMatrix<f64>,
    frame: &Orthogonal,
    function_atoms: &[usize],
    atoms: usize,
) -> Vec<f64> {
    let turned = frame.half() * density * frame.half();
    sum_by_atom(turned.diagonal().iter().copied(), function_atoms, atoms)
}

/// Bond orders of all atom pairs (i < j): Σ_{μ∈A,ν∈B} [(PS)_μν(PS)_νμ + (P^sS)_μν(P^sS)_νμ] with total density P and
/// spin density P^s, here written with the spin densities (I. Mayer, Int. J. Quantum Chem. 29, 477 (1986)).
/// `densities` holds the density of each spin; one alone stands for two alike.
#[must_use]
pub fn bond_orders(
    densities: &[DMatrix<f64>],
    overlap: &DMatrix<f64>,
    function_atoms: &[usize],
    atoms: usize,
) -> Vec<(usize, usize, f64)> {
    let factor = if densities.len() == 1 { 4.0 } else { 2.0 };
    let mut orders = DMatrix::<f64>::zeros(atoms, atoms);
    for density in densities {
        let product = density * overlap;
        for (m, &a) in function_atoms.iter().enumerate() {
            for (n, &b) in function_atoms.iter().enumerate() {
                orders[(a, b)] += factor * product[(m, n)] * product[(n, m)];
            }
        }
    }
    let mut list = Vec::new();
    for i in 0..atoms {
        for j in i + 1..atoms {
            list.push((i, j, orders[(i, j)]));
        }
    }
    list
}
