//! Basis sets placed on atoms: which functions there are, in which order, and how they are normalised.
//!
//! The order of functions, used by every matrix and integral list of the crate:
//! shells in order; within a shell, contraction after contraction; within a contraction
//! - s: 1; p: x, y, z;
//! - Cartesian l ≥ 2: the order of [`shell::cartesian_powers`] (xx, xy, xz, yy, yz, zz, …);
//! - spherical l ≥ 2: real solid harmonics with m = −l, …, 0, …, l (m < 0: sine type).
//!
//! Every function has unit norm, each Cartesian monomial separately.

pub mod describe;
pub mod error;
mod file;
pub mod library;
pub mod set;
pub mod shell;

use crate::molecule::Molecule;
pub use error::BasisError;
use nalgebra::Vector3;
pub use set::BasisSet;
pub use shell::{Contraction, FunctionKind, Shell};

/// Shells placed on the atoms of a molecule.
#[derive(Debug, Clone, PartialEq)]
pub struct Basis {
    shells: Vec<Shell>,
    centres: Vec<Vector3<f64>>,
    offsets: Vec<usize>,
}

impl Basis {
    /// Places shells on centres (bohr); shells name their centre by index.
    ///
    /// # Panics
    /// If a shell names a centre that does not exist.
    #[must_use]
    pub fn new(shells: Vec<Shell>, centres: Vec<Vector3<f64>>) -> Self {
        assert!(shells.iter().all(|s| s.atom < centres.len()));
        let mut offsets = vec![0];
        for shell in &shells {
            offsets.push(offsets[offsets.len() - 1] + shell.functions());
        }
        Self {
            shells,
            centres,
            offsets,
        }
    }

    /// The shells in order.
    #[must_use]
    pub fn shells(&self) -> &[Shell] {
        &self.shells
    }

    /// For every centre whether it differs in any bit from where it was in `before`, a basis with as many centres.
    #[must_use]
    pub fn moved_since(&self, before: &Self) -> Vec<bool> {
        let bits = |r: &Vector3<f64>| [r.x, r.y, r.z].map(f64::to_bits);
        let centres = before.centres().iter().zip(self.centres());
        centres.map(|(old, new)| bits(old) != bits(new)).collect()
    }

    /// Centres in bohr, one per atom of the molecule.
    #[must_use]
    pub fn centres(&self) -> &[Vector3<f64>] {
        &self.centres
    }

    /// Centre of shell `s` in bohr.
    #[must_use]
    pub fn centre(&self, s: usize) -> &Vector3<f64> {
        &self.centres[self.shells[s].atom]
    }

    /// Index of the first function of shell `s`.
    #[must_use]
    pub fn offset(&self, s: usize) -> usize {
        self.offsets[s]
    }

    /// Range of the functions of shell `s`.
    #[must_use]
    pub fn range(&self, s: usize) -> std::ops::Range<usize> {
        self.offsets[s]..self.offsets[s + 1]
    }

    /// Number of basis functions.
    #[must_use]
    pub fn len(&self) -> usize {
        self.offsets[self.shells.len()]
    }

    /// Whether there are no functions at all.
    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// The same shells on centres elsewhere (bohr, one per atom).
    #[must_use]
    pub fn at(&self, centres: &[Vector3<f64>]) -> Self {
        assert_eq!(centres.len(), self.centres.len());
        Self {
            centres: centres.to_vec(),
            ..self.clone()
        }
    }

    /// For each function the index of the atom that carries it.
    #[must_use]
    pub fn function_atoms(&self) -> Vec<usize> {
        self.shells
            .iter()
            .flat_map(|s| std::iter::repeat_n(s.atom, s.functions()))
            .collect()
    }

    /// Places the shells of `set` on the atoms of `molecule` (ghosts included).
    #[must_use]
    pub fn of_molecule(shells_of_atom: &[Vec<Shell>], molecule: &Molecule) -> Self {
        let shells = shells_of_atom
            .iter()
            .enumerate()
            .flat_map(|(atom, shells)| shells.iter().map(move |s| Shell { atom, ..s.clone() }))
            .collect();
        Self::new(shells, molecule.positions.clone())
    }
}
