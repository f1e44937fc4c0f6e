//! Equilibrium geometries, Hessians and relaxed paths on any [`Surface`].
//!
//! [`minimise`] goes downhill in redundant internal coordinates, with any of them held; [`hessian`] differentiates
//! gradients; [`settle`](settle::settle) does both; [`Relaxed`](relaxed::Relaxed) turns a surface into the
//! surface of a relaxed scan; [`path`] and [`valley`] find stationary points of scans.

pub mod coordinates;
pub mod hessian;
pub mod landscape;
pub mod model_hessian;
pub mod path;
pub mod primitive;
pub mod relaxed;
pub mod settle;
pub mod step;
pub mod valley;

mod evaluator;
mod held;
mod solve;

use crate::molecule::Molecule;
use crate::molecule::internal::{Coordinate, CoordinateError};
use crate::surface::{PointRecord, StabilityDemand, Start, Surface, SurfaceError};
use coordinates::InternalSet;
use nalgebra::{DMatrix, Vector3};

/// When a geometry counts as a minimum, and how one is looked for.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct MinimiseSettings {
    /// Largest component of the gradient that may remain, hartree/bohr; held coordinates do not count.
    pub gradient: f64,
    /// Largest displacement that the quasi-Newton step still asks for, bohr.
    pub displacement: f64,
    /// Largest fall of the energy that this step still promises, hartree.
    pub energy: f64,
    /// Gradient calls before giving up.
    pub calls: usize,
    /// Largest change of any coordinate in the first step, bohr or radian.
    pub trust: f64,
}

impl Default for MinimiseSettings {
    /// Tight enough for bond lengths to 0.0005 Å and angles to 0.05°, even along soft torsions, because the step that
    /// remains is judged and not only the force.
    fn default() -> Self {
        Self {
            gradient: 1e-4,
            displacement: 1e-3,
            energy: 1e-6,
            calls: 100,
            trust: 0.4,
        }
    }
}

impl MinimiseSettings {
    /// For frequencies: what remains of the force changes them by less than 0.1 cm⁻¹.
    #[must_use]
    pub fn tight() -> Self {
        Self {
            gradient: 1e-5,
            displacement: 1e-4,
            energy: 1e-8,
            ..Self::default()
        }
    }
}

/// A coordinate held at a value.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Held {
    /// The coordinate.
    pub coordinate: Coordinate,
    /// Its value, bohr or radian.
    pub value: f64,
}

/// What an earlier optimisation learnt of the Hessian.
#[derive(Debug, Clone, PartialEq)]
pub struct Curvature {
    /// The coordinates it is written in.
    pub set: InternalSet,
    /// m × m, hartree per bohr and radian.
    pub hessian: DMatrix<f64>,
}

/// An optimisation to be done.
#[derive(Debug)]
pub struct Task<'a, S> {
    /// Atoms, and the positions (bohr) to begin at; held coordinates need not have their values yet.
    pub molecule: &'a Molecule,
    /// Coordinates held.
    pub held: &'a [Held],
    /// Values of swept coordinates that the surface is told, ångström or degree.
    pub coordinates: &'a [f64],
    /// What the first calculation starts from; each further one starts from the one before it.
    pub start: Start<'a, S>,
    /// A Hessian to begin with; without one, or if its coordinates do not fit the geometry, the model Hessian.
    pub curvature: Option<&'a Curvature>,
    /// What is asked about the stability of the first and of the last solution.
    pub stability: StabilityDemand,
    /// Keep to the electronic state that overlaps most with this one.
    pub follow: Option<&'a S>,
}

impl<'a, S> Task<'a, S> {
    /// An optimisation of everything, from nothing.
    #[must_use]
    pub fn of(molecule: &'a Molecule) -> Self {
        Self {
            molecule,
            held: &[],
            coordinates: &[],
            start: Start::Fresh,
            curvature: None,
            stability: StabilityDemand::None,
            follow: None,
        }
    }
}

/// Why an optimisation ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum MinimiseStop {
    /// all thresholds met
    Converged,
    /// as many gradient calls as allowed
    CallLimit,
    /// the surface gave no energy, at the start or however short the step
    NoEnergy,
    /// no shorter step went downhill: the thresholds are finer than the noise of the gradient
    NoDescent,
}

/// One gradient call of an optimisation.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Call {
    /// Energy, hartree.
    pub energy: f64,
    /// Largest free component of the gradient, hartree/bohr.
    pub gradient_max: f64,
    /// Largest displacement that the next step asks for, bohr.
    pub displacement: f64,
    /// Fall of the energy that the next step promises, hartree.
    pub promise: f64,
    /// Whether the step here was kept.
    pub kept: bool,
}

/// Where an optimisation ended.
#[derive(Debug, Clone)]
pub struct Minimum<S> {
    /// Positions, bohr.
    pub positions: Vec<Vector3<f64>>,
    /// What the surface says there, with the gradient.
    pub record: PointRecord,
    /// What a neighbour may start from.
    pub seed: Option<S>,
    /// Why it ended.
    pub stop: MinimiseStop,
    /// All gradient calls in order; the criteria of the last one kept say how well it converged.
    pub calls: Vec<Call>,
    /// Fock builds of all calls.
    pub all_builds: usize,
    /// The Hessian as learnt on the way.
    pub curvature: Curvature,
}

impl<S> Minimum<S> {
    /// Whether all thresholds were met.
    #[must_use]
    pub fn converged(&self) -> bool {
        self.stop == MinimiseStop::Converged
    }

    /// The last call whose step was kept: energy, remaining gradient, displacement and fall of the energy.
    #[must_use]
    pub fn last(&self) -> Option<&Call> {
        self.calls.iter().rev().find(|c| c.kept)
    }
}

/// Why there is no optimisation, Hessian or path.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum MinimiseError {
    /// The surface cannot treat a geometry.
    #[error(transparent)]
    Surface(#[from] SurfaceError),
    /// A held coordinate means nothing.
    #[error(transparent)]
    Coordinate(#[from] CoordinateError),
    /// Held coordinates that cannot have their values together.
    #[error("the held coordinates cannot be set together: a {kind} stays off by {off:.3e} {unit}")]
    Contradiction {
        /// `bond`, `angle` or `dihedral`
        kind: &'static str,
        /// ångström or degree
        off: f64,
        /// `angstrom` or `degree`
        unit: &'static str,
    },
    /// The surface gave an energy without a gradient.
    #[error("the surface gives no gradient")]
    NoGradient,
    /// The first calculation did not converge.
    #[error("the calculation at the starting geometry did not converge")]
    NoEnergy,
    /// A calculation that a derivative needs did not converge.
    #[error("the calculation with atom number {} displaced did not converge", atom + 1)]
    NotConverged {
        /// index of the displaced atom
        atom: usize,
    },
    /// A point on a path has no energy.
    #[error("the calculation on the path at {coordinates:?} did not converge")]
    NotConvergedOnPath {
        /// bohr or radian
        coordinates: Vec<f64>,
    },
    /// A path that cannot be followed there.
    #[error("no geometry belongs to the coordinates {coordinates:?}: {reason}")]
    Path {
        /// bohr or radian
        coordinates: Vec<f64>,
        /// why
        reason: Box<crate::molecule::motion::MotionError>,
    },
    /// Arrays that do not belong together.
    #[error("{given} values where {expected} are needed")]
    Counts {
        /// expected
        expected: usize,
        /// given
        given: usize,
    },
    /// Moments of inertia that cannot be.
    #[error(transparent)]
    Inertia(#[from] crate::molecule::inertia::InertiaError),
    /// A Hessian that gives no vibrations.
    #[error(transparent)]
    Vibration(#[from] crate::vibration::VibrationError),
    /// A grid that cannot be interpolated.
    #[error(transparent)]
    Grid(#[from] crate::fit::FitError),
    /// Numbers that are not finite.
    #[error("a number on the way to the minimum is not finite")]
    NotFinite,
    /// The eigenvalue iteration did not end.
    #[error("a matrix of order {order} could not be diagonalised")]
    Eigenproblem {
        /// its order
        order: usize,
    },
}

/// Goes downhill from the positions of the task's molecule to a stationary point, in redundant internal coordinates with
/// a model Hessian that is improved at every step; held coordinates keep their values exactly.
///
/// One gradient call a step, each calculation seeded by the one before it. Not reaching the thresholds is a
/// result, see [`Minimum::stop`].
///
/// # Errors
/// [`MinimiseError`] where a geometry cannot be treated, held coordinates contradict each other, or the surface gives no
/// gradient.
pub fn minimise<S: Surface>(
    surface: &S,
    task: Task<'_, S::Seed>,
    settings: &MinimiseSettings,
    workspace: &mut S::Workspace,
) -> Result<Minimum<S::Seed>, MinimiseError> {
    solve::run(surface, task, settings, workspace)
}

#[cfg(test)]
mod test_fields;
#[cfg(test)]
mod tests;
#[cfg(test)]
mod tests_settle;
#[cfg(test)]
mod tests_valley;
