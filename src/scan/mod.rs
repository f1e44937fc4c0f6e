//! Scans: grids of points, the order in which they are walked, and what is known of each.

pub mod event;
pub mod grid;
mod heal;
pub mod journal;
pub mod runner;
mod settings;
pub mod sweep;
pub mod walk;

pub use event::{Entry, Event};
pub use grid::Grid;
pub use heal::SAME_SOLUTION;
pub use runner::{Scan, ScanError};
pub use settings::{Others, Passes, SeedKind, StateChoice, WalkSettings, WalkStart};
pub use sweep::Sweep;
