//! Gradients of Hartree–Fock energies with respect to the positions of the nuclei.
//!
//! For a variational energy the change of the orbitals does not enter; what their orthonormality asks
//! for is the energy-weighted density W (P. Pulay, Mol. Phys. 17, 197 (1969)):
//!
//! dE/dx = Σ P_ab ∂h_ab + Σ Γ_abcd ∂(ab|cd) − Σ W_ab ∂S_ab + ∂V_nn,
//!
//! with integrals differentiated at fixed densities. The error is linear in that of the densities, so
//! a gradient to 1e-7 needs a commutator below about 1e-8.

use crate::basis::Basis;
use crate::integrals::derivative::{
    RepulsionGradientSettings, attraction_gradient, kinetic_gradient, overlap_gradient,
    repulsion_gradient,
};
use crate::molecule::Molecule;
use crate::molecule::nuclear;
use nalgebra::{DMatrix, Vector3};

/// Settings of [`hartree_fock_gradient`].
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct GradientSettings {
    /// What may be left out of the two-electron part.
    pub repulsion: RepulsionGradientSettings,
}

/// Gradient of an RHF or UHF energy in hartree/bohr, one vector per atom of the molecule.
///
/// `alpha` and `beta` are the one-particle densities of the two spins (n × n, each with the trace
/// tr(PS) of its electrons; give the same matrix twice for RHF, which is then computed in closed-shell
/// form), `energy_weighted` is the sum of [`energy_weighted_density`] over both spins. `basis` must
/// stand on the positions of `molecule`. Ghost atoms have the gradient of their functions.
#[must_use]
pub fn hartree_fock_gradient(
    molecule: &Molecule,
    basis: &Basis,
    alpha: &DMatrix<f64>,
    beta: &DMatrix<f64>,
    energy_weighted: &DMatrix<f64>,
    settings: &GradientSettings,
) -> Vec<Vector3<f64>> {
    debug_assert_eq!(basis.centres(), molecule.positions);
    let total = alpha + beta;
    let charges: Vec<f64> = molecule.atoms.iter().map(|a| a.charge()).collect();
    let mut gradient = nuclear::repulsion_gradient(molecule);
    for part in [
        kinetic_gradient(basis, &total),
        attraction_gradient(basis, &total, &charges),
        overlap_gradient(basis, &-energy_weighted),
        repulsion_gradient(basis, alpha, beta, &settings.repulsion),
    ] {
        for (sum, value) in gradient.iter_mut().zip(part) {
            *sum += value;
        }
    }
    gradient
}

/// Energy-weighted density P F P of one spin (n × n), from its density and Fock matrix in the basis.
///
/// For a converged state it is Σ ε_i c_i c_iᵀ over the occupied orbitals. RHF: twice that of one spin.
#[must_use]
pub fn energy_weighted_density(density: &DMatrix<f64>, fock: &DMatrix<f64>) -> DMatrix<f64> {
    density * fock * density
}

/// Slope dE/dq = Σ g · dx/dq along a displacement of all atoms: hartree per unit of q, for a gradient in
/// hartree/bohr and a displacement field dx/dq in bohr per unit of q.
#[must_use]
pub fn slope_along(gradient: &[Vector3<f64>], displacement: &[Vector3<f64>]) -> f64 {
    debug_assert_eq!(gradient.len(), displacement.len());
    gradient
        .iter()
        .zip(displacement)
        .map(|(g, d)| g.dot(d))
        .sum()
}

/// Largest magnitude of a Cartesian component of a gradient, in hartree/bohr.
#[must_use]
pub fn largest_component(gradient: &[Vector3<f64>]) -> f64 {
    gradient
        .iter()
        .fold(0.0, |largest, g| g.amax().max(largest))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::basis::library;
    use crate::elements::Element;
    use crate::integrals::{
        CoulombExchange, RepulsionList, RepulsionSettings, attraction, kinetic, overlap,
    };
    use crate::molecule::Atom;
    use crate::units::ANGSTROM_PER_BOHR;
    use nalgebra::{DVector, Rotation3, SymmetricEigen};

    fn molecule(atoms: &[(&str, [f64; 3])], charge: i32, multiplicity: u32) -> Molecule {
        Molecule {
            atoms: atoms
                .iter()
                .enumerate()
                .filter_map(|(i, (symbol, _))| {
                    Some(Atom {
                        label: format!("{symbol}{i}"),
                        element: Element::from_symbol(symbol)?,
                        ghost: false,
                    })
                })
                .collect(),
            positions: atoms
                .iter()
                .map(|(_, r)| Vector3::from(*r) / ANGSTROM_PER_BOHR)
                .collect(),
            charge,
            multiplicity,
        }
    }

    struct State {
        energy: f64,
        densities: [DMatrix<f64>; 2],
        energy_weighted: DMatrix<f64>,
    }

    /// Unrestricted self-consistent field with extrapolation by the commutator, from the core
    /// Hamiltonian with some screening or from given densities; as plain as can be.
    fn converge(molecule: &Molecule, basis: &Basis, start: Option<&State>) -> State {
        let n = basis.len();
        let charges: Vec<_> = molecule
            .atoms
            .iter()
            .map(|a| a.charge())
            .zip(molecule.positions.iter().copied())
            .collect();
        let potential = attraction(basis, &charges);
        let core = kinetic(basis) + &potential;
        let s = SymmetricEigen::new(overlap(basis));
        let x = &s.eigenvectors
            * DMatrix::from_diagonal(&s.eigenvalues.map(|v| 1.0 / v.sqrt()))
            * s.eigenvectors.transpose();
        let overlap = overlap(basis);
        let list = RepulsionList::compute(basis, &RepulsionSettings::default());
        let (alpha, beta) = molecule.electrons().unwrap();
        let fill = |fock: &DMatrix<f64>, count: usize| {
            let eigen = SymmetricEigen::new(&x * fock * &x);
            let mut order: Vec<usize> = (0..n).collect();
            order.sort_by(|&i, &j| eigen.eigenvalues[i].total_cmp(&eigen.eigenvalues[j]));
            let c = &x * &eigen.eigenvectors;
            let mut density = DMatrix::zeros(n, n);
            for &i in &order[..count] {
                density += c.column(i) * c.column(i).transpose();
            }
            density
        };
        let guess = kinetic(basis) + potential * 0.6;
        let mut densities = start.map_or_else(
            || [fill(&guess, alpha), fill(&guess, beta)],
            |state| state.densities.clone(),
        );
        type BothSpins = [DMatrix<f64>; 2];
        let mut history: Vec<(BothSpins, BothSpins)> = Vec::new();
        for _ in 0..150 {
            let built = list.coulomb_exchange(&densities);
            let coulomb = &built[0].coulomb + &built[1].coulomb;
            let focks: [DMatrix<f64>; 2] =
                std::array::from_fn(|i| &core + &coulomb - &built[i].exchange);
            let electronic: f64 = (0..2)
                .map(|i| 0.5 * densities[i].dot(&(&core + &focks[i])))
                .sum();
            let errors: [DMatrix<f64>; 2] = std::array::from_fn(|i| {
                let fps = &focks[i] * &densities[i] * &overlap;
                &x * (&fps - fps.transpose()) * &x
            });
            if errors.iter().all(|e| e.amax() < 1e-10) {
                let weighted = |i: usize| energy_weighted_density(&densities[i], &focks[i]);
                return State {
                    energy: electronic + nuclear::repulsion_energy(molecule),
                    energy_weighted: weighted(0) + weighted(1),
                    densities,
                };
            }
            history.push((focks, errors));
            if history.len() > 8 {
                history.remove(0);
            }
            let m = history.len();
            let mut matrix = DMatrix::from_element(m + 1, m + 1, -1.0);
            matrix[(m, m)] = 0.0;
            for i in 0..m {
                for j in 0..m {
                    let (a, b) = (&history[i].1, &history[j].1);
                    matrix[(i, j)] = a[0].dot(&b[0]) + a[1].dot(&b[1]);
                }
            }
            let scale = 1.0 / matrix[(m - 1, m - 1)];
            matrix.view_mut((0, 0), (m, m)).scale_mut(scale);
            let mut right = DVector::zeros(m + 1);
            right[m] = -1.0;
            let weights = matrix.full_piv_lu().solve(&right).unwrap();
            let mixed = |i: usize| {
                let terms = history.iter().zip(weights.iter());
                terms.fold(DMatrix::zeros(n, n), |sum, (h, w)| sum + &h.0[i] * *w)
            };
            densities = [fill(&mixed(0), alpha), fill(&mixed(1), beta)];
        }
        panic!("the field of the test did not converge");
    }

    fn basis_of(set: &str, molecule: &Molecule) -> Basis {
        let shells = library::find(set)
            .unwrap()
            .shells_of(molecule, None)
            .unwrap();
        Basis::of_molecule(&shells, molecule)
    }

    fn gradient_of(molecule: &Molecule, basis: &Basis, state: &State) -> Vec<Vector3<f64>> {
        let [alpha, beta] = &state.densities;
        let settings = GradientSettings::default();
        hartree_fock_gradient(
            molecule,
            basis,
            alpha,
            beta,
            &state.energy_weighted,
            &settings,
        )
    }

    /// Gradient against five-point differences of tight energies along a displacement of all atoms.
    fn check_slope(set: &str, molecule: &Molecule) {
        let basis = basis_of(set, molecule);
        let state = converge(molecule, &basis, None);
        let gradient = gradient_of(molecule, &basis, &state);
        let sum: Vector3<f64> = gradient.iter().sum();
        assert!(sum.norm() < 1e-9, "translation: {sum}");
        let torque: Vector3<f64> = gradient
            .iter()
            .zip(&molecule.positions)
            .map(|(g, r)| r.cross(g))
            .sum();
        assert!(torque.norm() < 1e-8, "rotation: {torque}");
        let displacement: Vec<_> = (0..gradient.len())
            .map(|i| {
                let i = i as f64;
                Vector3::new(
                    (2.0 * i + 0.3).sin(),
                    (3.0 * i + 1.0).cos(),
                    (i - 0.7).sin(),
                )
            })
            .collect();
        let h = 2e-3;
        let at = |steps: f64| {
            let moved = |(r, d): (&Vector3<f64>, &Vector3<f64>)| r + d * (steps * h);
            let positions: Vec<_> = molecule
                .positions
                .iter()
                .zip(&displacement)
                .map(moved)
                .collect();
            let moved = molecule.at(&positions);
            converge(&moved, &basis.at(&positions), Some(&state)).energy
        };
        let slope = (8.0 * (at(1.0) - at(-1.0)) - (at(2.0) - at(-2.0))) / (12.0 * h);
        let projected = slope_along(&gradient, &displacement);
        assert!(
            (slope - projected).abs() < 1e-8,
            "{set}: {slope} {projected}"
        );
    }

    fn bent_water() -> [(&'static str, [f64; 3]); 3] {
        [
            ("O", [0.02, 0.01, 0.11]),
            ("H", [0.05, 0.83, -0.44]),
            ("H", [-0.13, -0.72, -0.52]),
        ]
    }

    #[test]
    fn closed_shell_slopes_match_differences() {
        let water = molecule(&bent_water(), 0, 1);
        for set in ["STO-3G", "6-31G*", "cc-pVTZ"] {
            check_slope(set, &water);
        }
    }

    #[test]
    fn open_shell_slopes_match_differences() {
        let amino = molecule(
            &[
                ("N", [0.0, 0.1, 0.05]),
                ("H", [0.1, 0.85, -0.5]),
                ("H", [-0.1, -0.7, -0.6]),
            ],
            0,
            2,
        );
        for set in ["6-31G**", "cc-pVDZ"] {
            check_slope(set, &amino);
        }
    }

    #[test]
    fn turns_with_the_molecule() {
        let water = molecule(&bent_water(), 0, 1);
        let basis = basis_of("6-31G*", &water);
        let here = gradient_of(&water, &basis, &converge(&water, &basis, None));
        let rotation = Rotation3::from_euler_angles(0.3, 1.1, -0.8);
        let turned: Vec<_> = water
            .positions
            .iter()
            .map(|r| rotation * r + Vector3::new(1.0, -2.0, 0.5))
            .collect();
        let (water, basis) = (water.at(&turned), basis.at(&turned));
        let there = gradient_of(&water, &basis, &converge(&water, &basis, None));
        for (a, b) in here.iter().zip(&there) {
            assert!((rotation * a - b).norm() < 1e-9);
        }
    }

    #[test]
    fn ghosts_have_no_charge_but_functions() {
        let mut pair = molecule(&[("He", [0.0; 3]), ("He", [0.1, 0.2, 1.1])], 0, 1);
        pair.atoms[1].ghost = true;
        check_slope("6-31G**", &pair);
    }

    // W. J. Hehre, L. Radom, P. v. R. Schleyer, J. A. Pople, "Ab Initio Molecular Orbital Theory"
    // (Wiley, 1986): RHF bond lengths in ångström, three decimals (from memory of the tables).
    #[test]
    fn val_bond_lengths_have_no_slope() {
        for (other, set, length) in [
            ("H", "STO-3G", 0.956),
            ("H", "6-31G*", 0.911),
            ("F", "6-31G*", 1.345),
        ] {
            let slope = |shift: f64| {
                let m = molecule(
                    &[("F", [0.0; 3]), (other, [0.0, 0.0, length + shift])],
                    0,
                    1,
                );
                let basis = basis_of(set, &m);
                let gradient = gradient_of(&m, &basis, &converge(&m, &basis, None));
                slope_along(&gradient, &[Vector3::zeros(), Vector3::z()])
            };
            assert!(
                slope(-0.0011) < 0.0 && slope(0.0011) > 0.0,
                "F{other} in {set}"
            );
        }
    }
}
