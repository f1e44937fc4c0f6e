//! thalweg walks molecules along their potential-energy surfaces.
//!
//! Modules, each of which may use those before it:
//! [`units`], [`elements`] ← [`molecule`] ← [`basis`] ← [`scf`] ← [`surface`] ← [`scan`].

pub mod basis;
pub mod elements;
pub mod integrals;
pub mod minimise;
pub mod molecule;
pub mod scan;
pub mod scf;
pub mod surface;
pub mod units;
