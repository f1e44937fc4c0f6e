//! thalweg walks molecules along their potential-energy surfaces.
//!
//! Modules, each of which may use those before it:
//! [`units`], [`elements`] ← [`molecule`] ← [`basis`]; [`plot`] uses plain arrays only.

pub mod basis;
pub mod elements;
pub mod molecule;
pub mod plot;
pub mod units;
