//! What a user may set about a self-consistent field calculation.

use serde::{Deserialize, Serialize};

/// Restricted or unrestricted Hartree–Fock.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Method {
    /// α and β electrons share their orbitals (closed shells only)
    Rhf,
    /// α and β electrons have their own orbitals
    Uhf,
}

impl Method {
    /// The name used in legends: `RHF`, `UHF`.
    #[must_use]
    pub fn name(self) -> &'static str {
        match self {
            Self::Rhf => "RHF",
            Self::Uhf => "UHF",
        }
    }
}

/// Where a calculation without a seed starts from.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum FirstDensity {
    /// Superposed densities of the free atoms, computed in the same basis.
    #[default]
    Atoms,
    /// Orbitals of the one-electron Hamiltonian.
    CoreHamiltonian,
}

/// Thresholds and limits of a self-consistent field calculation.
#[derive(Debug, Clone, PartialEq)]
pub struct ScfSettings {
    /// Largest energy change of the last iteration, hartree (> 0).
    pub energy: f64,
    /// Largest element of |FPS − SPF| in an orthonormal basis, hartree (> 0).
    pub commutator: f64,
    /// Most Fock builds of one calculation (≥ 1).
    pub iterations: usize,
    /// Overlap eigenvalues below this are dropped (> 0).
    pub dependence: f64,
    /// Memory for stored repulsion integrals, MiB; beyond it they are recomputed.
    pub memory_mib: u64,
    /// Where a calculation without a seed starts from.
    pub first_density: FirstDensity,
}

impl Default for ScfSettings {
    fn default() -> Self {
        Self {
            energy: 1e-9,
            commutator: 1e-7,
            iterations: 100,
            dependence: 1e-7,
            memory_mib: 4096,
            first_density: FirstDensity::Atoms,
        }
    }
}
