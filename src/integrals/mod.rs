//! Molecular integrals over contracted Gaussian functions.
//!
//! Functions are numbered as [`crate::basis`] says. Matrices are full; one-electron operators:
//! - [`overlap()`] ⟨a|b⟩, [`kinetic()`] ⟨a|−½∇²|b⟩, [`dipole()`] ⟨a|r − origin|b⟩, and
//! - [`attraction()`] ⟨a|−Σ Z_C/|r − R_C||b⟩, negative for positive charges.
//!
//! Two-electron integrals (ab|cd) are in chemists' notation; packed lists hold pair ab at
//! a(a+1)/2 + b (b ≤ a) and integral (ab|cd) at ab(ab+1)/2 + cd (cd ≤ ab).

pub mod attraction;
pub mod boys;
mod core;
pub mod derivative;
pub mod dipole;
pub mod harmonics;
pub mod kinetic;
mod one_electron;
pub mod overlap;
pub mod recurrence;
pub mod reference;
pub mod repulsion;
pub mod screening;
mod separable;
pub mod values;

pub use attraction::attraction;
pub use core::OneElectronIntegrals;
pub use dipole::dipole;
pub use kinetic::kinetic;
pub use overlap::{overlap, overlap_between};
pub use repulsion::{
    CoulombExchange, CoulombExchangePair, DirectRepulsion, IntegralCounts, RepulsionList,
    RepulsionSettings,
};
pub use values::basis_values;

#[cfg(test)]
mod tests {
    use super::*;
    use crate::basis::{Basis, Contraction, FunctionKind, Shell};
    use nalgebra::{DMatrix, Rotation3, SymmetricEigen, Vector3};

    /// The minimal basis of Szabo and Ostlund: STO-3G for ζ = 1, exponents scaled by ζ².
    fn textbook_basis(zetas: [f64; 2], distance: f64) -> Basis {
        let shells = (0..2)
            .map(|atom| {
                let square = zetas[atom] * zetas[atom];
                let exponents: Vec<f64> = [0.109818, 0.405771, 2.22766]
                    .iter()
                    .map(|a| a * square)
                    .collect();
                let s = Contraction::normalised(0, &exponents, &[0.444635, 0.535328, 0.154329]);
                Shell {
                    atom,
                    exponents,
                    contractions: vec![s],
                    kind: FunctionKind::Cartesian,
                }
            })
            .collect();
        Basis::new(
            shells,
            vec![Vector3::zeros(), Vector3::new(0.0, 0.0, distance)],
        )
    }

    fn near(value: f64, quoted: f64) {
        // Four decimals are quoted.
        assert!((value - quoted).abs() < 6e-5, "{value} instead of {quoted}");
    }

    // A. Szabo, N. S. Ostlund, "Modern Quantum Chemistry" (Dover 1996), section 3.5.2.
    #[test]
    fn val_hydrogen_molecule_integrals() {
        let basis = textbook_basis([1.24, 1.24], 1.4);
        near(overlap(&basis)[(0, 1)], 0.6593);
        let t = kinetic(&basis);
        near(t[(0, 0)], 0.7600);
        near(t[(0, 1)], 0.2365);
        let v = attraction(&basis, &[(1.0, basis.centres()[0])]);
        near(v[(0, 0)], -1.2266);
        near(v[(0, 1)], -0.5974);
        near(v[(1, 1)], -0.6538);
        let list = reference::repulsion_list(&basis);
        // Order (11|11), (21|11), (21|21), (22|11), (22|21), (22|22).
        for (value, quoted) in list
            .iter()
            .zip([0.7746, 0.4441, 0.2970, 0.5697, 0.4441, 0.7746])
        {
            near(*value, quoted);
        }
    }

    // The same book, section 3.5.3 and appendix B: HeH⁺, function 1 on He.
    #[test]
    fn val_helium_hydride_integrals() {
        let basis = textbook_basis([2.0925, 1.24], 1.4632);
        near(overlap(&basis)[(0, 1)], 0.4508);
        let t = kinetic(&basis);
        near(t[(0, 0)], 2.1643);
        near(t[(0, 1)], 0.1670);
        near(t[(1, 1)], 0.7600);
        let he = attraction(&basis, &[(2.0, basis.centres()[0])]);
        near(he[(0, 0)], -4.1398);
        near(he[(0, 1)], -1.1029);
        near(he[(1, 1)], -1.2652);
        let h = attraction(&basis, &[(1.0, basis.centres()[1])]);
        near(h[(0, 0)], -0.6772);
        near(h[(0, 1)], -0.4113);
        near(h[(1, 1)], -1.2266);
        let list = reference::repulsion_list(&basis);
        for (value, quoted) in list
            .iter()
            .zip([1.3072, 0.4373, 0.1773, 0.6057, 0.3118, 0.7746])
        {
            // (11|11) and (21|11) differ from the print in the last digit quoted.
            assert!(
                (value - quoted).abs() < 1.2e-4,
                "{value} instead of {quoted}"
            );
        }
    }

    #[test]
    fn spectra_are_invariant_under_rotation_and_translation() {
        let basis = one_electron::samples::mixed_basis(FunctionKind::Spherical, 4);
        let rotation = Rotation3::from_euler_angles(1.0, 0.3, -0.7);
        let shift = Vector3::new(5.0, -3.0, 2.0);
        let turn = |r: &Vector3<f64>| rotation * r + shift;
        let moved = basis.at(&basis.centres().iter().map(turn).collect::<Vec<_>>());
        let charge = Vector3::new(0.2, 0.9, -0.4);
        let spectrum = |matrix: DMatrix<f64>| {
            let mut values = SymmetricEigen::new(matrix).eigenvalues.as_slice().to_vec();
            values.sort_by(f64::total_cmp);
            values
        };
        let here = [
            overlap(&basis),
            kinetic(&basis),
            attraction(&basis, &[(3.0, charge)]),
        ];
        let there = [
            overlap(&moved),
            kinetic(&moved),
            attraction(&moved, &[(3.0, turn(&charge))]),
        ];
        for (a, b) in here.into_iter().zip(there) {
            for (x, y) in spectrum(a).into_iter().zip(spectrum(b)) {
                assert!((x - y).abs() < 1e-11, "{x} {y}");
            }
        }
    }
}
