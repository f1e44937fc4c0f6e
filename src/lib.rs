//! thalweg walks molecules along their potential-energy surfaces.
//!
//! Modules, each of which may use those before it:
//! [`units`], [`elements`] ← [`molecule`] ← [`basis`].
//! [`fit`] ← [`vibration`] use units and plain arrays only.

pub mod basis;
pub mod elements;
pub mod fit;
pub mod molecule;
pub mod units;
pub mod vibration;
