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

/// What a curve or surface does at a stationary point along the swept coordinates.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum StationaryKind {
    /// It rises in every direction.
    Minimum,
    /// It falls in every direction.
    Maximum,
    /// It rises in one direction and falls in another.
    Saddle,
}

/// A stationary point along the swept coordinates, located with gradients after the walk.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Stationary {
    /// What the curve or surface does there.
    pub kind: StationaryKind,
    /// Values of the swept coordinates, ångström or degree.
    pub values: Vec<f64>,
    /// Positions, bohr.
    pub positions: Vec<[f64; 3]>,
    /// The numbers, the gradient among them.
    pub record: PointRecord,
    /// dE/dq of every sweep that remains, hartree per bohr or radian.
    pub slopes: Vec<f64>,
    /// d²E/dqᵢdqⱼ from differences of gradients, one row per sweep, hartree per bohr or radian of each.
    pub curvature: Vec<Vec<f64>>,
    /// Whether the steps of Newton's method came to an end.
    pub converged: bool,
    /// Gradient calls that it took.
    pub gradient_calls: usize,
    /// Fock builds of all of them.
    pub fock_builds: usize,
    /// Harmonic vibrations, where no force is left on any coordinate.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub harmonic: Option<Harmonic>,
}

/// Harmonic vibrations at a minimum of all coordinates.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Harmonic {
    /// Wavenumbers in cm⁻¹ in rising order; imaginary ones negative.
    pub wavenumbers_cm1: Vec<f64>,
    /// Infrared intensity of each in km/mol.
    pub intensities_km_per_mol: Vec<f64>,
    /// Half the sum of the real ones, hartree.
    pub zero_point_hartree: f64,
    /// Second derivative along each sweep while all other coordinates follow, hartree per bohr² or radian².
    pub relaxed: Vec<f64>,
    /// The same along the rigid motion; none where no side can move by itself.
    pub rigid: Vec<Option<f64>>,
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
