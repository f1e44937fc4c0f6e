//! Scans: grids of points, the order in which they are walked, and what is known of each.

mod added;
pub mod audit;
mod evaluate;
pub mod event;
pub mod finding;
mod further;
pub mod grid;
mod heal;
pub mod kept;
pub mod runner;
mod settings;
mod smooth;
pub mod sweep;
mod testing;
pub mod walk;

pub use event::{Entry, Event, Harmonic, Likeness, Stationary, StationaryKind};
pub use finding::{Finding, FindingKind};
pub use grid::Grid;
pub use kept::SAME_SOLUTION;
pub use runner::{Scan, ScanError, Walked};
pub use settings::{Others, Passes, SeedKind, StateChoice, WalkSettings, WalkStart};
pub use sweep::Sweep;
pub use walk::Pass;
