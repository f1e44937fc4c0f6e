//! Scans: grids of points, the order in which they are walked, and what is known of each.

mod settings;

pub use settings::{Others, Passes, SeedKind, StateChoice, WalkSettings, WalkStart};
