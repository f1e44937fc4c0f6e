//! Vibrations: states on one-dimensional curves, diatomic constants, harmonic frequencies.
//!
//! Plain arrays in atomic units; names carry any other unit.

#[cfg(test)]
mod checks;
pub mod diatomic;
pub mod elements;
pub mod frequency;
pub mod harmonic;
pub mod potential;
pub mod states;

pub use frequency::wavenumber_per_cm;
pub use harmonic::{HarmonicAnalysis, NormalMode, harmonic_analysis};
pub use potential::{Domain, Potential};
pub use states::{State, States, StatesSettings, states};

/// Why there are no vibrational states or frequencies.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum VibrationError {
    /// The curve cannot be interpolated.
    #[error(transparent)]
    Curve(#[from] crate::fit::FitError),
    /// A mass or inverse mass that is not positive and finite.
    #[error("a mass of {value} cannot vibrate")]
    Mass {
        /// the value given
        value: f64,
    },
    /// Array sizes that do not belong together.
    #[error("{what}: {found} numbers where {expected} are needed")]
    Size {
        /// which array
        what: &'static str,
        /// numbers given
        found: usize,
        /// numbers needed
        expected: usize,
    },
    /// A range with nothing in it.
    #[error("the range from {lower} to {upper} holds no curve")]
    Range {
        /// lower end
        lower: f64,
        /// upper end
        upper: f64,
    },
    /// The eigenvalue iteration did not finish.
    #[error("the eigenvalues of a matrix of {size} rows did not converge")]
    Eigenvalues {
        /// rows
        size: usize,
    },
    /// A number that is not finite in an input array.
    #[error("{what} holds a number that is not finite")]
    NotFinite {
        /// which array
        what: &'static str,
    },
    /// A point that is no minimum.
    #[error("a second derivative of {second} is that of no minimum")]
    NoMinimum {
        /// second derivative, atomic units
        second: f64,
    },
}

/// Refuses masses (or inverse masses) that are zero, negative or not finite.
fn check_mass(value: f64) -> Result<(), VibrationError> {
    if value.is_finite() && value > 0.0 {
        Ok(())
    } else {
        Err(VibrationError::Mass { value })
    }
}
