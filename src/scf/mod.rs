//! Self-consistent field calculations: restricted and unrestricted Hartree–Fock.

mod settings;

pub use settings::{FirstDensity, Method, ScfSettings};
