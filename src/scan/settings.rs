//! What a user may set about how a grid is walked.

use serde::{Deserialize, Serialize};

/// The grid point that is computed first.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum WalkStart {
    /// the point nearest the input geometry, then outwards
    #[default]
    Geometry,
    /// the first value of every sweep
    First,
    /// the last value of every sweep
    Last,
}

/// What each point's calculation starts from.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum SeedKind {
    /// occupied space extrapolated from several points behind
    #[default]
    Extrapolated,
    /// density of the previous point, carried to the new overlap
    Previous,
    /// nothing: every point starts from scratch
    Fresh,
}

/// How often each chain is walked.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Passes {
    /// out only
    One,
    /// out and back, keeping the lower solution
    #[default]
    Both,
}

/// What the coordinates that are not swept do.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Others {
    /// they keep the values of the input geometry
    #[default]
    Fixed,
    /// they are optimised at every point: a relaxed scan
    Optimised,
}

/// Which electronic state is kept at every point.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum StateChoice {
    /// the lowest that can be reached
    #[default]
    Lowest,
    /// the one that continues the start, by overlap of the occupied space
    Follow,
}

/// How a grid is walked.
#[derive(Debug, Clone, PartialEq)]
pub struct WalkSettings {
    /// Where the walk begins.
    pub start: WalkStart,
    /// What each point starts from.
    pub seed: SeedKind,
    /// Out only, or out and back.
    pub passes: Passes,
    /// Rigid or relaxed scan.
    pub others: Others,
    /// Lowest state or followed state.
    pub state: StateChoice,
    /// Whether solutions are tested for stability, and unstable ones left downhill.
    pub stability: bool,
}

impl Default for WalkSettings {
    fn default() -> Self {
        Self {
            start: WalkStart::Geometry,
            seed: SeedKind::Extrapolated,
            passes: Passes::Both,
            others: Others::Fixed,
            state: StateChoice::Lowest,
            stability: true,
        }
    }
}
