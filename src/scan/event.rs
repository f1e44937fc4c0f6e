//! What a walk tells: the runner says what happened, others decide how it looks and where it is kept.

use super::walk::Pass;
use crate::surface::PointRecord;
use serde::{Deserialize, Serialize};

/// One finished evaluation, whole: all results are made from these, without another calculation.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Entry {
    /// Number of the point in the grid.
    pub point: usize,
    /// Why it was computed.
    pub pass: Pass,
    /// Place in the plan of the walk, or after it.
    pub order: usize,
    /// Points it was seeded from, nearest last; empty for a fresh start.
    pub seeded_from: Vec<usize>,
    /// The nearest of those and the smallest cosine between the occupied spaces, α and β.
    pub likeness: Option<(usize, [f64; 2])>,
    /// The numbers.
    pub record: PointRecord,
}

/// How alike the kept solutions of two neighbouring points are.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Likeness {
    /// Numbers of the points.
    pub points: [usize; 2],
    /// Smallest cosine of the principal angles between their occupied spaces, α and β.
    pub cosines: [f64; 2],
}

/// Something that happened in a walk.
#[derive(Debug, Clone, PartialEq)]
pub enum Event {
    /// The walk begins.
    Started {
        /// evaluations planned
        planned: usize,
        /// points of the grid
        points: usize,
    },
    /// An evaluation ended, converged or not.
    Evaluated(Box<Entry>),
    /// More evaluations became necessary.
    Extended {
        /// evaluations added to the plan
        added: usize,
    },
    /// The walk is complete.
    Finished,
}
