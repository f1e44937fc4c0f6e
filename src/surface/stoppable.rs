//! A surface that answers no more once it is asked to stop.

use super::{PointOutcome, PointRequest, Surface, SurfaceError};
use nalgebra::Vector3;
use std::sync::atomic::{AtomicBool, Ordering};

/// Passes every question on to a surface until a flag is raised, then refuses with [`SurfaceError::Stopped`]. Optimisers,
/// Hessians and searches so end within one calculation without knowing of signals.
#[derive(Debug)]
pub struct Stoppable<'a, S> {
    /// The surface that answers.
    pub surface: &'a S,
    /// Raised when nothing more is to be computed.
    pub stop: &'a AtomicBool,
}

impl<S: Surface> Surface for Stoppable<'_, S> {
    type Seed = S::Seed;
    type Workspace = S::Workspace;

    fn workspace(&self) -> Self::Workspace {
        self.surface.workspace()
    }

    fn workspace_bytes(&self) -> u64 {
        self.surface.workspace_bytes()
    }

    fn evaluate(
        &self,
        request: &PointRequest<'_, Self::Seed>,
        workspace: &mut Self::Workspace,
    ) -> Result<PointOutcome<Self::Seed>, SurfaceError> {
        if self.stop.load(Ordering::Relaxed) {
            return Err(SurfaceError::Stopped);
        }
        self.surface.evaluate(request, workspace)
    }

    fn likeness(&self, one: &Self::Seed, other: &Self::Seed) -> [f64; 2] {
        self.surface.likeness(one, other)
    }

    fn apart(&self, positions: &[Vector3<f64>]) -> Vec<Self::Seed> {
        self.surface.apart(positions)
    }

    fn has_plain_start(&self) -> bool {
        self.surface.has_plain_start()
    }
}
