//! Densities to start from when nothing is known: superposed densities of free atoms.
//!
//! Each atom's density is computed in the basis at hand: a self-consistent field with the ground
//! configuration's electrons spread evenly over the orbitals of a subshell, which keeps it spherical (J. H. Van
//! Lenthe, R. Zwaans, H. J. J. Van Dam, M. F. Guest, J. Comput. Chem. 27, 926 (2006)).

use super::ScfError;
use super::diis::Extrapolation;
use super::orthogonal::{Orbitals, Orthogonal};
use crate::basis::{Basis, Shell};
use crate::elements::Element;
use crate::integrals;
use crate::integrals::repulsion::{CoulombExchange, RepulsionList, RepulsionSettings};
use crate::molecule::Molecule;
use nalgebra::{DMatrix, Vector3};

/// Iterations of an atom; a density that is not quite converged still serves.
const ITERATIONS: usize = 60;
/// Commutator at which an atom is good enough, hartree.
const COMMUTATOR: f64 = 1e-6;
/// Orbital energies of a spherical atom this close (hartree) belong to one subshell.
const SUBSHELL_WIDTH: f64 = 1e-6;

/// Electrons with l = 0, 1, 2 in the ground configuration of an element.
///
/// C. E. Moore, Atomic Energy Levels, NBS Circular 467 (1949–1958), from memory: the filling order
/// 1s 2s 2p 3s 3p 4s 3d 4p, with one 4s electron moved to 3d in Cr and Cu.
fn configuration(element: Element) -> [usize; 3] {
    let mut left = usize::from(element.atomic_number());
    let mut electrons = [0; 3];
    for (l, room) in [
        (0, 2),
        (0, 2),
        (1, 6),
        (0, 2),
        (1, 6),
        (0, 2),
        (2, 10),
        (1, 6),
    ] {
        let placed = left.min(room);
        electrons[l] += placed;
        left -= placed;
    }
    if matches!(element.atomic_number(), 24 | 29) {
        electrons[0] -= 1;
        electrons[2] += 1;
    }
    electrons
}

/// Occupations (electrons per orbital) of the orbitals of a spherical atom: subshells are told by
/// their degeneracy 2l + 1, and filled from below within each l. Electrons that find no subshell of their l
/// (a basis without it) go to the lowest orbitals left.
fn occupations(energies: &[f64], configuration: [usize; 3]) -> Vec<f64> {
    let mut filled = vec![0.0; energies.len()];
    let mut left: [f64; 3] = configuration.map(|n| n as f64);
    let mut start = 0;
    while start < energies.len() {
        let mut end = start + 1;
        while end < energies.len() && energies[end] - energies[end - 1] < SUBSHELL_WIDTH {
            end += 1;
        }
        let size = end - start;
        if size % 2 == 1 && size / 2 < 3 {
            let placed = left[size / 2].min(2.0 * size as f64);
            filled[start..end].fill(placed / size as f64);
            left[size / 2] -= placed;
        }
        start = end;
    }
    let mut rest: f64 = left.iter().sum();
    for occupation in &mut filled {
        let placed = rest.min(2.0 - *occupation);
        *occupation += placed;
        rest -= placed;
    }
    filled
}

fn spread(orbitals: &Orbitals, occupations: &[f64]) -> DMatrix<f64> {
    let mut scaled = orbitals.vectors.clone();
    for (mut column, occupation) in scaled.column_iter_mut().zip(occupations) {
        column *= (0.5 * occupation).sqrt();
    }
    &scaled * scaled.transpose()
}

/// Spherical density matrix of a free neutral atom, one spin (half of all electrons), in the shells of
/// `basis`, which must all sit on one centre; `repulsion` holds the integrals of that basis.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn atomic_density(
    element: Element,
    basis: &Basis,
    repulsion: &dyn CoulombExchange,
    dependence: f64,
) -> Result<DMatrix<f64>, ScfError> {
    let nucleus = [(
        element.nuclear_charge(),
        *basis.centres().first().unwrap_or(&Vector3::zeros()),
    )];
    let core = integrals::kinetic(basis) + integrals::attraction(basis, &nucleus);
    let frame = Orthogonal::new(&integrals::overlap(basis), dependence, None)?;
    let configuration = configuration(element);
    let mut orbitals = frame.eigen(&frame.transform(&core))?;
    let mut history = Extrapolation::default();
    let mut density = DMatrix::zeros(basis.len(), basis.len());
    for _ in 0..ITERATIONS {
        let filled = occupations(orbitals.energies.as_slice(), configuration);
        let projector = spread(&orbitals, &filled);
        density = frame.transform(&projector);
        let Some(pair) = repulsion
            .coulomb_exchange(std::slice::from_ref(&density))
            .pop()
        else {
            break;
        };
        let fock = frame.transform(&(&core + pair.coulomb * 2.0 - pair.exchange));
        let product = &fock * &projector;
        let error = &product - product.transpose();
        if error.iter().all(|x| x.abs() < COMMUTATOR) {
            break;
        }
        history.record(std::slice::from_ref(&fock), &[error]);
        let Some(next) = history.suggest(&[fock]).pop() else {
            break;
        };
        orbitals = frame.eigen(&next)?;
    }
    Ok(density)
}

/// Superposition of atomic density matrices: blocks along the diagonal, atom after atom. `blocks` holds the one-spin
/// density of each atom in the order of the basis functions.
#[must_use]
pub fn superposed(blocks: &[DMatrix<f64>], functions: usize) -> DMatrix<f64> {
    let mut density = DMatrix::zeros(functions, functions);
    let mut offset = 0;
    for block in blocks {
        let n = block.nrows();
        density.view_mut((offset, offset), (n, n)).copy_from(block);
        offset += n;
    }
    density
}

/// One-spin densities of all atoms of a molecule in their own functions; those of ghosts are zero. Atoms alike in
/// element and shells are computed once.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn atomic_densities(
    molecule: &Molecule,
    shells_of_atom: &[Vec<Shell>],
    dependence: f64,
) -> Result<Vec<DMatrix<f64>>, ScfError> {
    let mut known: Vec<(usize, DMatrix<f64>)> = Vec::new();
    let mut all = Vec::with_capacity(molecule.atoms.len());
    for (i, (atom, shells)) in molecule.atoms.iter().zip(shells_of_atom).enumerate() {
        let twin = known.iter().find(|(j, _)| {
            molecule.atoms[*j].element == atom.element && same_shells(&shells_of_atom[*j], shells)
        });
        let placed: Vec<Shell> = shells
            .iter()
            .map(|s| Shell {
                atom: 0,
                ..s.clone()
            })
            .collect();
        let basis = Basis::new(placed, vec![Vector3::zeros()]);
        if atom.ghost || basis.is_empty() {
            all.push(DMatrix::zeros(basis.len(), basis.len()));
        } else if let Some((_, density)) = twin {
            all.push(density.clone());
        } else {
            let list = RepulsionList::compute(&basis, &RepulsionSettings::default());
            let density = atomic_density(atom.element, &basis, &list, dependence)?;
            known.push((i, density.clone()));
            all.push(density);
        }
    }
    Ok(all)
}

/// The same exponents and coefficients, wherever the shells sit.
pub(crate) fn same_shells(one: &[Shell], other: &[Shell]) -> bool {
    one.len() == other.len()
        && one.iter().zip(other).all(|(a, b)| {
            a.exponents == b.exponents && a.contractions == b.contractions && a.kind == b.kind
        })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn configurations_hold_all_electrons() {
        for z in 1..=Element::LAST_ATOMIC_NUMBER {
            let element = Element::from_atomic_number(z).expect("known");
            assert_eq!(configuration(element).iter().sum::<usize>(), usize::from(z));
        }
        let chromium = Element::from_atomic_number(24).expect("known");
        assert_eq!(configuration(chromium), [7, 12, 5]);
    }

    #[test]
    fn subshells_are_filled_evenly() {
        let energies = [-11.0, -0.7, -0.4, -0.4, -0.4, 0.3, 0.9, 0.9, 0.9];
        let carbon = occupations(&energies, [4, 2, 0]);
        assert!((carbon[2] - 2.0 / 3.0).abs() < 1e-15);
        assert!((carbon.iter().sum::<f64>() - 6.0).abs() < 1e-14);
        // Without p functions the electrons still find a place.
        let bare = occupations(&[-11.0, -0.7, 0.1], [4, 2, 0]);
        assert!((bare.iter().sum::<f64>() - 6.0).abs() < 1e-14);
    }
}
