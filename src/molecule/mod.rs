//! Molecules: labelled atoms in space, charge and spin multiplicity.

pub mod cartesian;
pub mod connectivity;
pub mod frame;
pub mod geometry_error;
pub mod inertia;
pub mod internal;
mod label;
pub mod motion;
mod motion_error;
pub mod nuclear;
mod rows;
mod side;
#[cfg(test)]
mod test_molecules;
pub mod zmatrix;

use crate::elements::Element;
use nalgebra::Vector3;

/// One atom (or ghost atom) of a molecule.
#[derive(Debug, Clone, PartialEq)]
pub struct Atom {
    /// Name unique in the molecule, such as `H1`.
    pub label: String,
    /// Chemical element.
    pub element: Element,
    /// A ghost carries basis functions but neither nuclear charge nor electrons
    /// (counterpoise correction).
    pub ghost: bool,
}

impl Atom {
    /// Nuclear charge in units of e; zero for a ghost.
    #[must_use]
    pub fn charge(&self) -> f64 {
        if self.ghost {
            0.0
        } else {
            self.element.nuclear_charge()
        }
    }
}

/// Atoms, where they are, and how many electrons with which spin.
#[derive(Debug, Clone, PartialEq)]
pub struct Molecule {
    /// The atoms in the order of the input.
    pub atoms: Vec<Atom>,
    /// Positions in bohr, one per atom.
    pub positions: Vec<Vector3<f64>>,
    /// Total charge in units of e.
    pub charge: i32,
    /// Spin multiplicity 2S + 1.
    pub multiplicity: u32,
}

/// Why a molecule cannot have the charge and multiplicity asked for.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum ElectronCountError {
    /// More positive charge than electrons.
    #[error("a charge of {charge} leaves fewer than no electrons (the nuclei carry {nuclear})")]
    TooFewElectrons {
        /// charge asked for
        charge: i32,
        /// sum of the atomic numbers
        nuclear: i64,
    },
    /// The multiplicity needs the other parity, or more electrons than there are.
    #[error("{electrons} electrons cannot have multiplicity {multiplicity}")]
    ImpossibleMultiplicity {
        /// number of electrons
        electrons: usize,
        /// multiplicity asked for
        multiplicity: u32,
    },
}

impl Molecule {
    /// Sum of the atomic numbers of all atoms that are not ghosts.
    #[must_use]
    pub fn nuclear_charge(&self) -> i64 {
        self.atoms
            .iter()
            .filter(|a| !a.ghost)
            .map(|a| i64::from(a.element.atomic_number()))
            .sum()
    }

    /// Numbers of α and β electrons.
    ///
    /// # Errors
    /// When the charge leaves fewer than zero electrons, or charge and multiplicity do not fit together.
    pub fn electrons(&self) -> Result<(usize, usize), ElectronCountError> {
        let nuclear = self.nuclear_charge();
        let electrons = usize::try_from(nuclear - i64::from(self.charge)).map_err(|_| {
            ElectronCountError::TooFewElectrons {
                charge: self.charge,
                nuclear,
            }
        })?;
        let impossible = ElectronCountError::ImpossibleMultiplicity {
            electrons,
            multiplicity: self.multiplicity,
        };
        let unpaired = match self.multiplicity {
            0 => return Err(impossible),
            m => m as usize - 1,
        };
        if unpaired > electrons || (electrons - unpaired) % 2 != 0 {
            return Err(impossible);
        }
        let beta = (electrons - unpaired) / 2;
        Ok((beta + unpaired, beta))
    }

    /// The same atoms elsewhere; `positions` in bohr, one per atom.
    #[must_use]
    pub fn at(&self, positions: &[Vector3<f64>]) -> Self {
        debug_assert_eq!(positions.len(), self.atoms.len());
        Self {
            positions: positions.to_vec(),
            ..self.clone()
        }
    }

    /// Index of the atom with this label.
    #[must_use]
    pub fn index_of(&self, label: &str) -> Option<usize> {
        self.atoms.iter().position(|a| a.label == label)
    }
}
