//! One evaluation of a walk: what it starts from, whether its solution is tested, and the workspaces that
//! evaluations share.

use super::event::Entry;
use super::kept::SAME_SOLUTION;
use super::runner::Scan;
use super::settings::{SeedKind, StateChoice};
use super::testing::{self, Test};
use super::walk::Pass;
use crate::surface::{
    PointOutcome, PointRequest, SeedPoint, StabilityDemand, Start, Surface, SurfaceError,
};
use rayon::ThreadPool;
use std::sync::{Mutex, PoisonError};

/// What a converged evaluation leaves for those that start from it.
#[derive(Debug, Clone)]
pub(super) struct Left<T> {
    pub(super) energy: f64,
    pub(super) seed: T,
    /// The last stability tests along the way here, the nearest last.
    tests: Vec<Test>,
}

impl<T> Left<T> {
    /// A start that is no solution of any point.
    pub(super) fn untested(seed: T) -> Self {
        Self {
            energy: f64::INFINITY,
            seed,
            tests: Vec::new(),
        }
    }
}

/// A solution known at another point.
#[derive(Debug)]
pub(super) struct Known<'a, T> {
    pub(super) point: usize,
    pub(super) left: &'a Left<T>,
}

/// Evaluates the points of one scan.
pub(super) struct Evaluator<'a, S: Surface> {
    surface: &'a S,
    pub(super) scan: &'a Scan,
    pool: &'a ThreadPool,
    side_by_side: bool,
    longest: Vec<f64>,
    workspaces: Mutex<Workspaces<S::Workspace>>,
}

/// Workspaces not in use, each with the row it last served, and the first one as it was after its first
/// point: a further one begins as its copy, because most of what it holds can be taken over.
struct Workspaces<W> {
    free: Vec<(usize, W)>,
    first: Option<W>,
}

/// An entry and what it leaves, if it converged.
pub(super) type Evaluated<T> = (Entry, Option<Left<T>>);

impl<'a, S: Surface> Evaluator<'a, S> {
    pub(super) fn new(surface: &'a S, scan: &'a Scan, pool: &'a ThreadPool) -> Self {
        // Every thread may hold a workspace of its own, and one copy is kept aside.
        let wanted = pool.current_num_threads() as u64 + 1;
        Self {
            surface,
            scan,
            pool,
            side_by_side: surface.workspace_bytes().saturating_mul(wanted) <= scan.memory_bytes,
            longest: testing::longest(&scan.is_length),
            workspaces: Mutex::new(Workspaces {
                free: Vec::new(),
                first: None,
            }),
        }
    }

    /// Whether the memory allows every thread a workspace of its own.
    pub(super) fn side_by_side(&self) -> bool {
        self.side_by_side
    }

    /// Whether a probe is another start than that of the walk.
    pub(super) fn has_plain_start(&self) -> bool {
        self.surface.has_plain_start()
    }

    /// Starts from free atoms at a point, where the molecule has fallen apart.
    pub(super) fn apart(&self, point: usize) -> Vec<S::Seed> {
        let positions = &self.scan.positions[point];
        self.pool.install(|| self.surface.apart(positions))
    }

    /// Evaluates a point from the solutions in `known`, nearest last. `before` is the energy of a solution already
    /// found here: the same once more needs no test.
    pub(super) fn evaluate(
        &self,
        point: usize,
        pass: Pass,
        row: usize,
        known: &[Known<'_, S::Seed>],
        before: Option<f64>,
        order: usize,
    ) -> Result<Evaluated<S::Seed>, SurfaceError> {
        let nearest = known.last();
        let here = &self.scan.coordinates[point];
        let tests = nearest.map_or(&[][..], |k| &k.left.tests);
        let demand = self.demand(here, nearest.is_none(), tests, before);
        let follow = match self.scan.settings.state {
            StateChoice::Follow => nearest.map(|k| &k.left.seed),
            StateChoice::Lowest => None,
        };
        let mut outcome = self.ask(point, row, self.start(pass, known), demand, follow)?;
        let is_due = testing::is_due(here, tests, &self.longest);
        if let Some(again) = self.again(&outcome, before, demand, is_due)
            && let Some(seed) = &outcome.seed
        {
            let start = Start::Previous(SeedPoint {
                coordinates: here,
                seed,
            });
            let mut tested = self.ask(point, row, start, again, None)?;
            tested.record.all_builds += outcome.record.all_builds;
            tested.record.fock_builds += outcome.record.fock_builds;
            tested.record.seconds += outcome.record.seconds;
            tested.record.scf_seconds += outcome.record.scf_seconds;
            tested.record.integrals += outcome.record.integrals;
            outcome = tested;
        }
        let PointOutcome { record, seed } = outcome;
        let likeness = match (&seed, nearest) {
            (Some(seed), Some(k)) => Some((k.point, self.surface.likeness(seed, &k.left.seed))),
            _ => None,
        };
        let left = seed.zip(record.energy).map(|(seed, energy)| {
            let mut tests = tests.to_vec();
            if let Some(stability) = &record.stability {
                if stability.left > 0 {
                    // Eigenvalues of the abandoned solution say nothing about this one.
                    tests.clear();
                }
                tests.push(Test::new(here, stability));
                tests = tests.split_off(tests.len().saturating_sub(2));
            }
            Left {
                energy,
                seed,
                tests,
            }
        });
        let entry = Entry {
            point,
            pass,
            order,
            seeded_from: known.iter().map(|k| k.point).collect(),
            likeness,
            record,
        };
        Ok((entry, left))
    }

    fn start<'k>(&'k self, pass: Pass, known: &[Known<'k, S::Seed>]) -> Start<'k, S::Seed> {
        let place = |k: &Known<'k, S::Seed>| SeedPoint {
            coordinates: &self.scan.coordinates[k.point],
            seed: &k.left.seed,
        };
        match (self.scan.settings.seed, known.last()) {
            // What a chosen first density missed must not be missed again.
            (_, None) if pass == Pass::Probe => Start::Plain,
            (SeedKind::Fresh, _) | (_, None) => Start::Fresh,
            (SeedKind::Previous, Some(last)) => Start::Previous(place(last)),
            (SeedKind::Extrapolated, Some(_)) => {
                Start::Extrapolated(known.iter().map(place).collect())
            }
        }
    }

    /// What is asked about stability on the first try.
    fn demand(
        &self,
        here: &[f64],
        is_fresh: bool,
        tests: &[Test],
        before: Option<f64>,
    ) -> StabilityDemand {
        let settings = &self.scan.settings;
        if !settings.stability || before.is_some() || !testing::is_due(here, tests, &self.longest) {
            StabilityDemand::None
        } else if settings.state == StateChoice::Follow && !is_fresh {
            // The start itself is left downhill: a saddle point is no state to follow.
            StabilityDemand::Report
        } else {
            StabilityDemand::Leave
        }
    }

    /// What is asked on a second try, where the solution is another than the one known here: a lower one has not been
    /// tested yet, and a higher one may be a saddle point beside one that is lower than both.
    fn again(
        &self,
        outcome: &PointOutcome<S::Seed>,
        before: Option<f64>,
        asked: StabilityDemand,
        is_due: bool,
    ) -> Option<StabilityDemand> {
        let settings = &self.scan.settings;
        let above = outcome.record.energy? - before?;
        let lower = above < -SAME_SOLUTION;
        let saddle = above > SAME_SOLUTION && is_due && settings.state == StateChoice::Lowest;
        (settings.stability && asked == StabilityDemand::None && (lower || saddle))
            .then_some(StabilityDemand::Leave)
    }

    fn ask(
        &self,
        point: usize,
        row: usize,
        start: Start<'_, S::Seed>,
        stability: StabilityDemand,
        follow: Option<&S::Seed>,
    ) -> Result<PointOutcome<S::Seed>, SurfaceError> {
        let request = PointRequest {
            positions: &self.scan.positions[point],
            coordinates: &self.scan.coordinates[point],
            start,
            gradient: self.scan.gradients,
            stability,
            follow,
        };
        let mut workspace = self.take_workspace(row);
        let outcome = self
            .pool
            .install(|| self.surface.evaluate(&request, &mut workspace));
        self.put_workspace(row, workspace);
        outcome
    }

    /// A workspace, if possible one that last served the same row: fewer atoms have moved since.
    fn take_workspace(&self, row: usize) -> S::Workspace {
        let mut all = self
            .workspaces
            .lock()
            .unwrap_or_else(PoisonError::into_inner);
        let place = all
            .free
            .iter()
            .position(|(r, _)| *r == row)
            .or(all.free.len().checked_sub(1));
        match place {
            Some(place) => all.free.swap_remove(place).1,
            None => all
                .first
                .clone()
                .unwrap_or_else(|| self.surface.workspace()),
        }
    }

    fn put_workspace(&self, row: usize, workspace: S::Workspace) {
        let mut all = self
            .workspaces
            .lock()
            .unwrap_or_else(PoisonError::into_inner);
        if all.first.is_none() && self.side_by_side {
            all.first = Some(workspace.clone());
        }
        all.free.push((row, workspace));
    }
}
