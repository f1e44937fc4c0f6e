//! Repulsion of the nuclei: energy and gradient.

use super::Molecule;
use nalgebra::Vector3;

/// Pairs of charged nuclei: indices, product of the charges, vector from the second to the first.
fn pairs(molecule: &Molecule) -> impl Iterator<Item = (usize, usize, f64, Vector3<f64>)> + '_ {
    (0..molecule.atoms.len()).flat_map(move |i| {
        (0..i).filter_map(move |j| {
            let charges = molecule.atoms[i].charge() * molecule.atoms[j].charge();
            // Ghosts may stand anywhere, even on another atom.
            (charges > 0.0).then(|| {
                let apart = molecule.positions[i] - molecule.positions[j];
                (i, j, charges, apart)
            })
        })
    })
}

/// Energy of the nuclear charges in each other's field, Σ Z_i Z_j / r_ij, in hartree.
///
/// Infinite when two nuclei coincide.
#[must_use]
pub fn repulsion_energy(molecule: &Molecule) -> f64 {
    pairs(molecule).map(|(_, _, zz, r)| zz / r.norm()).sum()
}

/// Gradient of [`repulsion_energy`] in hartree/bohr, one vector per atom (zero for ghosts).
#[must_use]
pub fn repulsion_gradient(molecule: &Molecule) -> Vec<Vector3<f64>> {
    let mut gradient = vec![Vector3::zeros(); molecule.atoms.len()];
    for (i, j, zz, r) in pairs(molecule) {
        let slope = r * (-zz / r.norm().powi(3));
        gradient[i] += slope;
        gradient[j] -= slope;
    }
    gradient
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::elements::Element;
    use crate::molecule::Atom;

    fn molecule(symbols: &[&str], positions: &[[f64; 3]]) -> Molecule {
        let atoms = symbols
            .iter()
            .enumerate()
            .filter_map(|(i, s)| {
                Some(Atom {
                    label: format!("{s}{i}"),
                    element: Element::from_symbol(s)?,
                    ghost: false,
                })
            })
            .collect();
        Molecule {
            atoms,
            positions: positions.iter().map(|p| Vector3::from(*p)).collect(),
            charge: 0,
            multiplicity: 1,
        }
    }

    #[test]
    fn two_charges_and_a_ghost() {
        let mut m = molecule(
            &["He", "H", "C"],
            &[[0.0; 3], [0.0, 3.0, 4.0], [0.0, 3.0, 4.0]],
        );
        m.atoms[2].ghost = true;
        assert!((repulsion_energy(&m) - 2.0 / 5.0).abs() < 1e-15);
        let g = repulsion_gradient(&m);
        assert!((g[0] - Vector3::new(0.0, 6.0, 8.0) / 125.0).norm() < 1e-15);
        assert!((g[0] + g[1]).norm() < 1e-16 && g[2].norm() < 1e-300);
    }

    #[test]
    fn gradient_matches_differences() {
        let m = molecule(
            &["O", "H", "N"],
            &[[0.1, 0.2, -0.3], [1.5, 0.4, 0.9], [-1.0, 1.8, 0.2]],
        );
        let g = repulsion_gradient(&m);
        let h = 1e-3;
        for atom in 0..3 {
            for axis in 0..3 {
                let at = |steps: f64| {
                    let mut p = m.positions.clone();
                    p[atom][axis] += steps * h;
                    repulsion_energy(&m.at(&p))
                };
                let slope = (8.0 * (at(1.0) - at(-1.0)) - (at(2.0) - at(-2.0))) / (12.0 * h);
                assert!((slope - g[atom][axis]).abs() < 1e-10);
            }
        }
    }
}
