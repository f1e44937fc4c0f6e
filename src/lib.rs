//! thalweg walks molecules along their potential-energy surfaces.
//!
//! Modules, each of which may use those before it:

pub mod basis;
pub mod cli;
pub mod elements;
pub mod fit;
pub mod gradient;
pub mod integrals;
pub mod job;
pub mod minimise;
pub mod molecule;
pub mod plot;
pub mod report;
pub mod scan;
pub mod scf;
pub mod spec;
pub mod surface;
pub mod units;
pub mod vibration;
