//! Starts for a molecule that has fallen apart: determinants of its free atoms side by side.
//!
//! Where an ionic and a neutral curve have crossed, both are stable, and a superposition of atomic densities may lead to
//! the ionic one: the lowest empty orbital of one atom lies below the highest occupied of the other. Only a determinant
//! that already has the electrons where they belong ends on the neutral curve.

use super::HartreeFock;
use crate::basis::Shell;
use crate::molecule::Molecule;
use crate::scf::grassmann::orthonormalised;
use crate::scf::seed::{Seed, SeedState};
use crate::scf::{Method, ScfError, ScfSettings, guess};
use crate::surface::{PointRequest, StabilityDemand, Start, Surface};
use nalgebra::{DMatrix, Matrix3, Vector3};
use std::collections::BTreeMap;

/// Highest multiplicity of a free atom or singly charged ion that is tried (chromium's septet).
const HIGHEST_MULTIPLICITY: u32 = 7;
/// Energies of atoms that differ by less (hartree) count as equal: the choice must not hang on rounding.
const EQUAL: f64 = 1e-7;
/// Calcium: no lighter atom holds d electrons in its ground state.
const LAST_WITHOUT_D: u8 = 20;
/// Norm of the spin tensor of p functions above which it gives a direction.
const DIRECTED: f64 = 0.1;

/// One state of an atom: its energy and its occupied orbitals, α and β, in its own orthonormal frame.
#[derive(Clone)]
struct AtomState {
    energy: f64,
    kept: usize,
    occupied: [DMatrix<f64>; 2],
}

/// Where open p shells point.
#[derive(Clone, Copy)]
enum Towards {
    /// to the nearest other atom
    Along,
    /// at a right angle to it
    Across,
}

/// Choices made so far for the first atoms: sum of energies, and the states.
type Choice = (f64, Vec<AtomState>);

impl HartreeFock {
    /// Determinants of the free atoms side by side: of the ways to reach the numbers of α and β electrons with neutral atoms
    /// (in an ion also with singly charged ones) the one of lowest energy. Nothing if there is none.
    ///
    /// Open p shells are turned to the nearest other atom, and in a second start across: an atom by itself has no
    /// preferred direction, and from an arbitrary one the iteration would creep along a flat valley.
    pub(super) fn atoms_side_by_side(&self, positions: &[Vector3<f64>]) -> Vec<Seed> {
        let Some(chosen) = self.lowest_choice() else {
            return Vec::new();
        };
        [Towards::Along, Towards::Across]
            .into_iter()
            .filter_map(|towards| self.placed(chosen.clone(), positions, towards))
            .collect()
    }

    /// The states of the atoms of lowest energy that together have the molecule's numbers of electrons.
    fn lowest_choice(&self) -> Option<Vec<AtomState>> {
        let mut known: Vec<(usize, Vec<AtomState>)> = Vec::new();
        let mut choices: BTreeMap<(usize, usize), Choice> = BTreeMap::new();
        choices.insert((0, 0), (0.0, Vec::new()));
        let wanted = (self.occupation.alpha, self.occupation.beta);
        for atom in 0..self.molecule.atoms.len() {
            let twin = known.iter().find(|(other, _)| self.are_alike(*other, atom));
            let states = match twin {
                Some((_, states)) => states.clone(),
                None => self.atom_states(atom),
            };
            if twin.is_none() {
                known.push((atom, states.clone()));
            }
            let mut next: BTreeMap<(usize, usize), Choice> = BTreeMap::new();
            for ((alpha, beta), (energy, chosen)) in &choices {
                for state in &states {
                    let [up, down] = &state.occupied;
                    let key = (alpha + up.ncols(), beta + down.ncols());
                    let sum = energy + state.energy;
                    let better = next.get(&key).is_none_or(|c| sum < c.0 - EQUAL);
                    if better && key.0 <= wanted.0 && key.1 <= wanted.1 {
                        let chosen = chosen.iter().chain([state]).cloned().collect();
                        next.insert(key, (sum, chosen));
                    }
                }
            }
            choices = next;
        }
        choices.remove(&wanted).map(|(_, chosen)| chosen)
    }

    /// The determinant of atoms in these states, turned.
    fn placed(
        &self,
        mut chosen: Vec<AtomState>,
        positions: &[Vector3<f64>],
        towards: Towards,
    ) -> Option<Seed> {
        for (atom, state) in chosen.iter_mut().enumerate() {
            let nearest = positions
                .iter()
                .map(|other| other - positions[atom])
                .filter(|between| between.norm() > 0.0)
                .min_by(|a, b| a.norm().total_cmp(&b.norm()))?
                .normalize();
            let direction = match towards {
                Towards::Along => nearest,
                Towards::Across => nearest
                    .cross(&Vector3::ith(nearest.iamin(), 1.0))
                    .normalize(),
            };
            let light = self.molecule.atoms[atom].element.atomic_number() <= LAST_WITHOUT_D;
            turn(state, &self.shells_of_atom[atom], &direction, light).ok()?;
        }
        let functions = self.functions();
        let occupied = [0, 1].map(|spin| {
            let columns = chosen.iter().map(|s| s.occupied[spin].ncols()).sum();
            let mut block = DMatrix::zeros(functions, columns);
            let (mut row, mut column) = (0, 0);
            for state in &chosen {
                let orbitals = &state.occupied[spin];
                block
                    .view_mut((row, column), orbitals.shape())
                    .copy_from(orbitals);
                row += orbitals.nrows();
                column += orbitals.ncols();
            }
            block
        });
        Some(Seed::new(SeedState {
            occupied: occupied.into(),
            kept: chosen.iter().map(|s| s.kept).sum(),
            differences: Vec::new(),
            internal: None,
            triplet: None,
            lowest_eigenvalue: None,
        }))
    }

    fn are_alike(&self, one: usize, other: usize) -> bool {
        let (a, b) = (&self.molecule.atoms[one], &self.molecule.atoms[other]);
        a.element == b.element
            && a.ghost == b.ghost
            && guess::same_shells(&self.shells_of_atom[one], &self.shells_of_atom[other])
    }

    /// States of one atom, open shells with the unpaired electrons up and down.
    fn atom_states(&self, atom: usize) -> Vec<AtomState> {
        let shells = &self.shells_of_atom[atom];
        let functions = shells.iter().map(Shell::functions).sum();
        let bare = AtomState {
            energy: 0.0,
            kept: functions,
            occupied: [0, 1].map(|_| DMatrix::zeros(functions, 0)),
        };
        let place = &self.molecule.atoms[atom];
        if place.ghost {
            return vec![bare];
        }
        let charges = match self.molecule.charge.signum() {
            0 => vec![0],
            sign => vec![0, sign],
        };
        let mut states = Vec::new();
        for charge in charges {
            if i32::from(place.element.atomic_number()) == charge {
                states.push(bare.clone());
                continue;
            }
            for multiplicity in 1..=HIGHEST_MULTIPLICITY {
                let alone = Molecule {
                    atoms: vec![place.clone()],
                    positions: vec![Vector3::zeros()],
                    charge,
                    multiplicity,
                };
                let Some(state) = free_atom(&alone, shells, &self.settings) else {
                    continue;
                };
                if multiplicity > 1 {
                    let mut turned = state.clone();
                    turned.occupied.reverse();
                    states.extend([state, turned]);
                } else {
                    states.push(state);
                }
            }
        }
        states
    }
}

/// Axes of space in which a symmetric tensor is diagonal, the largest magnitude first.
fn principal_axes(tensor: Matrix3<f64>) -> Matrix3<f64> {
    let eigen = tensor.symmetric_eigen();
    let mut order = [0, 1, 2];
    order.sort_by(|&i, &j| {
        let size = |k: usize| eigen.eigenvalues[k].abs();
        size(j).total_cmp(&size(i))
    });
    Matrix3::from_columns(&order.map(|k| eigen.eigenvectors.column(k).into_owned()))
}

/// Turns the p functions of an atom so that the axis along which its spins differ most (its density, where they do not)
/// points in `direction`. In `light` atoms, which hold no d electrons, what polarisation adds to the functions of l ≥ 2 is
/// dropped; others keep it as it is.
fn turn(
    state: &mut AtomState,
    shells: &[Shell],
    direction: &Vector3<f64>,
    light: bool,
) -> Result<(), ScfError> {
    let (mut triples, mut higher) = (Vec::new(), Vec::new());
    let mut row = 0;
    for shell in shells {
        for contraction in &shell.contractions {
            let count = contraction.functions(shell.kind);
            match contraction.l {
                0 => {}
                1 => triples.push(row),
                _ => higher.extend(row..row + count),
            }
            row += count;
        }
    }
    let tensor = |block: &DMatrix<f64>| -> Matrix3<f64> {
        triples
            .iter()
            .map(|&first| {
                let own = block.rows(first, 3);
                let product = own * own.transpose();
                Matrix3::from_fn(|i, j| product[(i, j)])
            })
            .sum()
    };
    let [up, down] = &state.occupied;
    let (spin, density) = (tensor(up) - tensor(down), tensor(up) + tensor(down));
    let own = principal_axes(if spin.norm() > DIRECTED {
        spin
    } else {
        density
    });
    let aside = Vector3::ith(direction.iamin(), 1.0);
    let second = (aside - direction * direction.dot(&aside)).normalize();
    let wanted = Matrix3::from_columns(&[*direction, second, direction.cross(&second)]);
    let rotation = wanted * own.transpose();
    for block in &mut state.occupied {
        for &first in &triples {
            let turned = rotation * block.fixed_rows::<3>(first);
            block.fixed_rows_mut::<3>(first).copy_from(&turned);
        }
        if light && !higher.is_empty() && block.ncols() > 0 {
            higher.iter().for_each(|&r| block.row_mut(r).fill(0.0));
            *block = orthonormalised(block)?;
        }
    }
    Ok(())
}

/// The lowest solution of an atom by itself; nothing if charge and multiplicity do not fit or it does not converge.
fn free_atom(alone: &Molecule, shells: &[Shell], settings: &ScfSettings) -> Option<AtomState> {
    let surface =
        HartreeFock::new(alone, vec![shells.to_vec()], Method::Uhf, settings.clone()).ok()?;
    let request = PointRequest {
        positions: &alone.positions,
        coordinates: &[],
        start: Start::Fresh,
        gradient: false,
        stability: StabilityDemand::Leave,
        follow: None,
    };
    let outcome = surface.evaluate(&request, &mut surface.workspace()).ok()?;
    let seed = outcome.seed?;
    let [up, down] = seed.state().occupied.as_slice() else {
        return None;
    };
    Some(AtomState {
        energy: outcome.record.energy?,
        kept: seed.state().kept,
        occupied: [up.clone(), down.clone()],
    })
}
