//! The surface as an optimisation sees it.

use super::MinimiseError;
use crate::surface::{PointRecord, PointRequest, SeedPoint, StabilityDemand, Start, Surface};
use nalgebra::{DVector, Vector3};
use std::cell::RefCell;

/// A surface as the problem of an optimisation: carries seeds and the workspace, and sums up what calls cost.
pub(super) struct Evaluator<'a, S: Surface> {
    surface: &'a S,
    coordinates: &'a [f64],
    follow: Option<&'a S::Seed>,
    own: RefCell<Own<'a, S>>,
}

/// What changes from call to call.
struct Own<'a, S: Surface> {
    workspace: &'a mut S::Workspace,
    /// What the first call starts from.
    start: Option<Start<'a, S::Seed>>,
    /// What the last converged call left.
    seed: Option<S::Seed>,
    spent: Spent,
}

/// What all calls cost.
#[derive(Debug, Clone, Copy, Default)]
pub(super) struct Spent {
    /// Fock builds of the solutions kept
    pub(super) fock_builds: usize,
    /// all Fock builds
    pub(super) all_builds: usize,
    /// wall time, s
    pub(super) seconds: f64,
    /// wall time of integrals and SCF alone, s
    pub(super) scf_seconds: f64,
}

/// One geometry with what the surface says of it.
#[derive(Clone)]
pub(super) struct Point<T> {
    pub(super) positions: Vec<Vector3<f64>>,
    pub(super) record: PointRecord,
    pub(super) seed: Option<T>,
    pub(super) energy: f64,
    /// 3N
    pub(super) gradient: DVector<f64>,
}

impl<'a, S: Surface> Evaluator<'a, S> {
    pub(super) fn new(
        surface: &'a S,
        coordinates: &'a [f64],
        follow: Option<&'a S::Seed>,
        start: Start<'a, S::Seed>,
        workspace: &'a mut S::Workspace,
    ) -> Self {
        Self {
            surface,
            coordinates,
            follow,
            own: RefCell::new(Own {
                workspace,
                start: Some(start),
                seed: None,
                spent: Spent::default(),
            }),
        }
    }

    pub(super) fn spent(&self) -> Spent {
        self.own.borrow().spent
    }

    /// Energy and gradient; none where the calculation did not converge.
    pub(super) fn evaluate(
        &self,
        positions: &[Vector3<f64>],
        stability: StabilityDemand,
        gradient: bool,
    ) -> Result<(PointRecord, Option<S::Seed>), MinimiseError> {
        if !positions.iter().all(|p| p.iter().all(|x| x.is_finite())) {
            return Err(MinimiseError::NotFinite);
        }
        let mut own = self.own.borrow_mut();
        let own = &mut *own;
        let start = match (own.start.take(), &own.seed) {
            (Some(start), _) => start,
            // A list of one point: what an extrapolation carries along besides densities comes too.
            (None, Some(seed)) => Start::Extrapolated(vec![SeedPoint {
                coordinates: self.coordinates,
                seed,
            }]),
            (None, None) => Start::Fresh,
        };
        let request = PointRequest {
            positions,
            coordinates: self.coordinates,
            start,
            gradient,
            stability,
            follow: self.follow,
        };
        let outcome = self.surface.evaluate(&request, own.workspace)?;
        own.spent.fock_builds += outcome.record.fock_builds;
        own.spent.all_builds += outcome.record.all_builds;
        own.spent.seconds += outcome.record.seconds;
        own.spent.scf_seconds += outcome.record.scf_seconds;
        if outcome.seed.is_some() {
            own.seed.clone_from(&outcome.seed);
        }
        Ok((outcome.record, outcome.seed))
    }

    /// Energy and gradient at positions; the record alone where there is no energy.
    pub(super) fn point(
        &self,
        positions: Vec<Vector3<f64>>,
        stability: StabilityDemand,
    ) -> Result<Result<Point<S::Seed>, PointRecord>, MinimiseError> {
        let (record, seed) = self.evaluate(&positions, stability, true)?;
        let Some(energy) = record.energy else {
            return Ok(Err(record));
        };
        let rows = record.gradient.as_ref().ok_or(MinimiseError::NoGradient)?;
        if rows.len() != positions.len() {
            return Err(MinimiseError::Counts {
                expected: positions.len(),
                given: rows.len(),
            });
        }
        let gradient = DVector::from_iterator(3 * rows.len(), rows.iter().flatten().copied());
        if !(energy.is_finite() && gradient.iter().all(|g| g.is_finite())) {
            return Err(MinimiseError::NotFinite);
        }
        Ok(Ok(Point {
            positions,
            record,
            seed,
            energy,
            gradient,
        }))
    }
}
