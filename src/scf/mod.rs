//! Self-consistent field calculations: restricted and unrestricted Hartree–Fock.
//!
//! [`orthogonal`] makes the frame of a geometry, [`fock`] evaluates determinants in it, [`iteration`] finds the
//! self-consistent one with [`diis`] and [`second_order`], [`stability`] asks whether it is a minimum. [`guess`] and [`seed`] say
//! where to start, [`properties`] what the result means.

pub mod canonical;
pub mod diis;
pub mod fock;
pub mod grassmann;
pub mod guess;
pub mod iteration;
pub mod onset;
pub mod orthogonal;
pub mod properties;
pub mod quasi_newton;
pub mod second_order;
pub mod seed;
mod settings;
pub mod stability;

use serde::{Deserialize, Serialize};
pub use settings::{FirstDensity, Method, ScfSettings};

/// Why a self-consistent field calculation stopped.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum StopReason {
    /// both thresholds met
    Converged,
    /// the commutator threshold not met along a soft mode, but the energy right to 3e-7 hartree by a bound from the
    /// gradient and the lowest eigenvalues of the orbital Hessian
    SoftMode,
    /// as many Fock builds as allowed
    IterationLimit,
    /// energy or density stopped being finite numbers
    NotFinite,
}

impl StopReason {
    /// Whether the energy can be trusted.
    #[must_use]
    pub fn is_converged(self) -> bool {
        matches!(self, Self::Converged | Self::SoftMode)
    }
}

/// Why a calculation could not be carried out.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
pub enum ScfError {
    /// The eigenvalue iteration did not end.
    #[error("a matrix of order {order} could not be diagonalised")]
    Eigenproblem {
        /// its order
        order: usize,
    },
}
