//! Where along a sweep a restricted solution becomes unstable towards unrestricted orbitals.

use super::JobError;
use crate::scan::{Entry, Pass};
use crate::spec::{Level, Spec};
use crate::surface::{HartreeFock, PointRequest, StabilityDemand, Start, Surface, SurfaceError};
use argmin::core::{CostFunction, Error, Executor};
use argmin::solver::brent::BrentRoot;
use serde::{Deserialize, Serialize};
use std::sync::Mutex;

/// How closely the place is found, ångström or degree.
const TOLERANCE: f64 = 2e-5;
/// Most evaluations.
const MOST_EVALUATIONS: u64 = 30;

/// The onset of an instability.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Onset {
    /// Value of the sweep, ångström or degree, where the lowest eigenvalue of the triplet orbital Hessian is zero.
    pub value: f64,
}

/// The triplet eigenvalue as a function of the swept coordinate.
struct Eigenvalue<'a> {
    spec: &'a Spec,
    surface: &'a HartreeFock,
    workspace: Mutex<<HartreeFock as Surface>::Workspace>,
}

/// Why an eigenvalue is missing.
#[derive(Debug, thiserror::Error)]
enum EigenvalueError {
    #[error(transparent)]
    Geometry(#[from] crate::molecule::motion::MotionError),
    #[error(transparent)]
    Surface(#[from] SurfaceError),
    #[error("no converged, tested solution at {0}")]
    Missing(f64),
}

impl Eigenvalue<'_> {
    fn at(&self, q: f64) -> Result<f64, EigenvalueError> {
        let positions = self.spec.positions_at(&[q])?;
        let request = PointRequest {
            positions: &positions,
            coordinates: &[q],
            start: Start::Fresh,
            gradient: false,
            stability: StabilityDemand::Report,
            follow: None,
        };
        let mut workspace = self
            .workspace
            .lock()
            .unwrap_or_else(std::sync::PoisonError::into_inner);
        let record = self.surface.evaluate(&request, &mut workspace)?.record;
        record
            .stability
            .and_then(|s| s.triplet)
            .ok_or(EigenvalueError::Missing(q))
    }
}

impl CostFunction for &Eigenvalue<'_> {
    type Param = f64;
    type Output = f64;

    fn cost(&self, q: &f64) -> Result<f64, Error> {
        Ok(self.at(*q)?)
    }
}

/// Finds the onset nearest the start of the walk between two tested points of a one-dimensional scan, as the root of the
/// eigenvalue (R. P. Brent, Algorithms for Minimization without Derivatives, 1973, ch. 4). None if the
/// eigenvalue does not change sign, or cannot be followed.
///
/// # Errors
/// [`JobError::Level`] if the level cannot be set up.
pub fn find(
    spec: &Spec,
    level: &Level,
    entries: &[Entry],
    start: usize,
) -> Result<Option<Onset>, JobError> {
    let [sweep] = &spec.sweeps[..] else {
        return Ok(None);
    };
    let mut tested: Vec<(usize, f64)> = entries
        .iter()
        .filter(|e| e.pass == Pass::Out && e.record.energy.is_some())
        .filter_map(|e| Some((e.point, e.record.stability?.triplet?)))
        .collect();
    tested.sort_by_key(|&(point, _)| point);
    let bracket = tested
        .windows(2)
        .filter(|pair| (pair[0].1 < 0.0) != (pair[1].1 < 0.0))
        .min_by_key(|pair| pair[0].0.abs_diff(start).min(pair[1].0.abs_diff(start)));
    let Some(&[(one, _), (other, _)]) = bracket else {
        return Ok(None);
    };
    let surface = HartreeFock::new(
        &level.molecule(&spec.molecule),
        level.shells_of_atom.clone(),
        level.method,
        // The eigenvalue is only as good as the orbitals.
        crate::scf::ScfSettings {
            commutator: spec.scf.commutator.min(1e-8),
            ..spec.scf.clone()
        },
    )
    .map_err(|source| JobError::Level {
        level: level.name.clone(),
        source,
    })?;
    let workspace = Mutex::new(surface.workspace());
    let eigenvalue = Eigenvalue {
        spec,
        surface: &surface,
        workspace,
    };
    let solver = BrentRoot::new(sweep.values[one], sweep.values[other], TOLERANCE);
    let result = Executor::new(&eigenvalue, solver)
        .configure(|state| state.param(sweep.values[one]).max_iters(MOST_EVALUATIONS))
        .run();
    // A solution that is lost between two points leaves the onset unknown; it is not worth the run.
    Ok(result
        .ok()
        .and_then(|r| r.state.best_param)
        .map(|value| Onset { value }))
}
