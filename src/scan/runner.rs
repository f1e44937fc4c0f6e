//! Carries out a walk: steps run as soon as those they start from are done, on the threads of a
//! pool, and what happens goes through one channel to one observer.

use super::Grid;
use super::event::{Entry, Event};
use super::heal;
use super::settings::{Passes, SeedKind, StateChoice, WalkSettings};
use super::walk::{self, Pass, Step};
use crate::surface::{PointRequest, SeedPoint, StabilityDemand, Start, Surface, SurfaceError};
use nalgebra::Vector3;
use rayon::ThreadPool;
use std::sync::atomic::{AtomicBool, AtomicUsize, Ordering};
use std::sync::mpsc::{Sender, channel};
use std::sync::{Mutex, OnceLock, PoisonError};

/// What is to be walked.
#[derive(Debug, Clone)]
pub struct Scan {
    /// The grid.
    pub grid: Grid,
    /// Values of the swept coordinates at every point, ångström or degree.
    pub coordinates: Vec<Vec<f64>>,
    /// Positions at every point, bohr.
    pub positions: Vec<Vec<Vector3<f64>>>,
    /// Number of the point that is computed first.
    pub start: usize,
    /// How it is walked.
    pub settings: WalkSettings,
    /// Whether gradients are wanted.
    pub gradients: bool,
    /// Memory that the workspaces of all chains may take together, bytes.
    pub memory_bytes: u64,
}

/// Why a scan ended early.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum ScanError {
    /// A geometry that cannot be treated.
    #[error("point {point}: {source}")]
    Point {
        /// number of the point
        point: usize,
        /// what is wrong with it
        source: SurfaceError,
    },
    /// The user, or the system, asked for an end.
    #[error("interrupted after {finished} of {planned} evaluations")]
    Interrupted {
        /// evaluations done
        finished: usize,
        /// evaluations planned
        planned: usize,
    },
}

/// Walks a surface. Every finished evaluation is told to `observer`, on the calling thread; `stop` ends the
/// walk before the next evaluation.
///
/// # Errors
/// [`ScanError`]; what was finished until then has been told.
pub fn run<S: Surface>(
    surface: &S,
    scan: &Scan,
    pool: &ThreadPool,
    stop: &AtomicBool,
    observer: &mut dyn FnMut(&Event),
) -> Result<Vec<Entry>, ScanError> {
    let both = scan.settings.passes == Passes::Both;
    let steps = walk::plan(&scan.grid, scan.start, scan.settings.seed, both);
    observer(&Event::Started {
        planned: steps.len(),
        points: scan.grid.len(),
    });
    let runner = Runner::new(surface, scan, &steps, pool, stop);
    let mut entries = Vec::with_capacity(steps.len());
    let (sender, receiver) = channel();
    std::thread::scope(|threads| {
        let runner = &runner;
        threads.spawn(move || pool.install(|| runner.run_all(sender)));
        for entry in receiver {
            observer(&Event::Evaluated(Box::new(entry.clone())));
            entries.push(entry);
        }
    });
    runner.outcome(entries.len())?;
    entries.sort_by_key(|e: &Entry| e.order);
    if both {
        heal::heal(&runner, &mut entries, observer)?;
    }
    observer(&Event::Finished);
    Ok(entries)
}

/// The state shared by the steps of one walk.
pub(super) struct Runner<'a, S: Surface> {
    surface: &'a S,
    pub(super) scan: &'a Scan,
    steps: &'a [Step],
    pool: &'a ThreadPool,
    /// Whether the memory allows every thread a workspace of its own.
    side_by_side: bool,
    stop: &'a AtomicBool,
    /// What each finished step left; the inner option is empty where it did not converge.
    solved: Vec<OnceLock<Option<S::Seed>>>,
    /// For each step how many of those it starts from are still to come.
    waiting: Vec<AtomicUsize>,
    followers: Vec<Vec<usize>>,
    workspaces: Mutex<Pool<S::Workspace>>,
    failure: OnceLock<ScanError>,
}

/// Workspaces not in use, each with the row it last served, and the first one as it was after its first
/// point: a further one begins as its copy, because most of what it holds can be taken over.
struct Pool<W> {
    free: Vec<(usize, W)>,
    first: Option<W>,
}

impl<'a, S: Surface> Runner<'a, S> {
    fn new(
        surface: &'a S,
        scan: &'a Scan,
        steps: &'a [Step],
        pool: &'a ThreadPool,
        stop: &'a AtomicBool,
    ) -> Self {
        // Every thread may hold a workspace of its own, and one copy is kept aside.
        let wanted = pool.current_num_threads() as u64 + 1;
        let side_by_side = surface.workspace_bytes().saturating_mul(wanted) <= scan.memory_bytes;
        let mut followers = vec![Vec::new(); steps.len()];
        for (k, step) in steps.iter().enumerate() {
            for &h in &step.history {
                followers[h].push(k);
            }
        }
        Self {
            surface,
            scan,
            steps,
            pool,
            side_by_side,
            stop,
            solved: steps.iter().map(|_| OnceLock::new()).collect(),
            waiting: steps
                .iter()
                .map(|s| AtomicUsize::new(s.history.len()))
                .collect(),
            followers,
            workspaces: Mutex::new(Pool {
                free: Vec::new(),
                first: None,
            }),
            failure: OnceLock::new(),
        }
    }

    fn run_all(&self, sender: Sender<Entry>) {
        if !self.side_by_side {
            // One chain after another; the threads share the work of each point instead.
            (0..self.steps.len()).for_each(|k| self.run_step(k, &sender));
            return;
        }
        rayon::scope(|scope| {
            for (k, step) in self.steps.iter().enumerate() {
                if step.history.is_empty() {
                    let sender = sender.clone();
                    scope.spawn(move |scope| self.run_from(k, sender, scope));
                }
            }
        });
    }

    /// Runs a step, then those that only waited for it.
    fn run_from<'s>(&'s self, k: usize, sender: Sender<Entry>, scope: &rayon::Scope<'s>) {
        self.run_step(k, &sender);
        for &next in &self.followers[k] {
            if self.waiting[next].fetch_sub(1, Ordering::AcqRel) == 1 {
                let sender = sender.clone();
                scope.spawn(move |scope| self.run_from(next, sender, scope));
            }
        }
    }

    fn run_step(&self, k: usize, sender: &Sender<Entry>) {
        if self.stop.load(Ordering::Relaxed) || self.failure.get().is_some() {
            return;
        }
        let step = &self.steps[k];
        let known: Vec<(usize, &S::Seed)> = step
            .history
            .iter()
            .filter_map(|&h| Some((self.steps[h].point, self.solved[h].get()?.as_ref()?)))
            .collect();
        match self.evaluate(step.point, step.pass, step.row, &known, k) {
            Ok((entry, seed)) => {
                let _ = self.solved[k].set(seed);
                // The observer outlives the walk; a closed channel means the program is ending anyway.
                let _ = sender.send(entry);
            }
            Err(source) => {
                let _ = self.failure.set(ScanError::Point {
                    point: step.point,
                    source,
                });
            }
        }
    }

    /// Evaluates one point from the solutions in `known` (point, seed), nearest last.
    pub(super) fn evaluate(
        &self,
        point: usize,
        pass: Pass,
        row: usize,
        known: &[(usize, &S::Seed)],
        order: usize,
    ) -> Result<(Entry, Option<S::Seed>), SurfaceError> {
        let settings = &self.scan.settings;
        let neighbours = || {
            known.iter().map(|&(p, seed)| SeedPoint {
                coordinates: &self.scan.coordinates[p],
                seed,
            })
        };
        let start = match (settings.seed, neighbours().next_back()) {
            (SeedKind::Fresh, _) | (_, None) => Start::Fresh,
            (SeedKind::Previous, Some(last)) => Start::Previous(last),
            (SeedKind::Extrapolated, Some(_)) => Start::Extrapolated(neighbours().collect()),
        };
        let nearest = known.last();
        let request = PointRequest {
            positions: &self.scan.positions[point],
            coordinates: &self.scan.coordinates[point],
            start,
            gradient: self.scan.gradients,
            stability: if settings.stability {
                StabilityDemand::Leave
            } else {
                StabilityDemand::None
            },
            follow: match settings.state {
                StateChoice::Follow => nearest.map(|&(_, seed)| seed),
                StateChoice::Lowest => None,
            },
        };
        let mut workspace = self.take_workspace(row);
        let outcome = self
            .pool
            .install(|| self.surface.evaluate(&request, &mut workspace));
        self.put_workspace(row, workspace);
        let outcome = outcome?;
        let likeness = match (&outcome.seed, nearest) {
            (Some(seed), Some(&(p, other))) => Some((p, self.surface.likeness(seed, other))),
            _ => None,
        };
        let entry = Entry {
            point,
            pass,
            order,
            seeded_from: known.iter().map(|&(p, _)| p).collect(),
            likeness,
            record: outcome.record,
        };
        Ok((entry, outcome.seed))
    }

    /// A workspace, if possible one that last served the same row: fewer atoms have moved since.
    fn take_workspace(&self, row: usize) -> S::Workspace {
        let mut pool = self
            .workspaces
            .lock()
            .unwrap_or_else(PoisonError::into_inner);
        let place = pool
            .free
            .iter()
            .position(|(r, _)| *r == row)
            .or(pool.free.len().checked_sub(1));
        match place {
            Some(place) => pool.free.swap_remove(place).1,
            None => pool
                .first
                .clone()
                .unwrap_or_else(|| self.surface.workspace()),
        }
    }

    fn put_workspace(&self, row: usize, workspace: S::Workspace) {
        let mut pool = self
            .workspaces
            .lock()
            .unwrap_or_else(PoisonError::into_inner);
        if pool.first.is_none() && self.side_by_side {
            pool.first = Some(workspace.clone());
        }
        pool.free.push((row, workspace));
    }

    fn outcome(&self, finished: usize) -> Result<(), ScanError> {
        match self.failure.get() {
            Some(failure) => Err(failure.clone()),
            None if finished < self.steps.len() => Err(ScanError::Interrupted {
                finished,
                planned: self.steps.len(),
            }),
            None => Ok(()),
        }
    }

    /// The seed that an evaluation of the plan left, by its number.
    pub(super) fn seed(&self, order: usize) -> Option<&S::Seed> {
        self.solved.get(order)?.get()?.as_ref()
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::molecule::internal::Coordinate;
    use crate::surface::model::{Form, ModelState, ModelSurface};

    const BOND: Coordinate = Coordinate::Bond([0, 1]);

    /// A diatomic along z at 1.0, 1.1, … bohr.
    fn scan(points: usize, start: usize, seed: SeedKind, passes: Passes) -> Scan {
        let values: Vec<f64> = (0..points).map(|i| 1.0 + 0.1 * i as f64).collect();
        Scan {
            grid: Grid::new(&[points]),
            coordinates: values.iter().map(|&v| vec![v]).collect(),
            positions: values
                .iter()
                .map(|&v| vec![Vector3::zeros(), Vector3::z() * v])
                .collect(),
            start,
            settings: WalkSettings {
                seed,
                passes,
                stability: false,
                ..WalkSettings::default()
            },
            gradients: false,
            memory_bytes: 1 << 20,
        }
    }

    fn harmonic(bottom: f64, equilibrium: f64) -> ModelState {
        let form = Form::Harmonic {
            force_constant: 1.0,
            equilibrium,
        };
        ModelState {
            bottom,
            terms: vec![(BOND, form)],
        }
    }

    fn pool(threads: usize) -> ThreadPool {
        rayon::ThreadPoolBuilder::new()
            .num_threads(threads)
            .build()
            .unwrap()
    }

    fn walk(surface: &ModelSurface, scan: &Scan) -> Vec<Entry> {
        run(
            surface,
            scan,
            &pool(2),
            &AtomicBool::new(false),
            &mut |_| {},
        )
        .unwrap()
    }

    /// Lowest energy at each point; nothing where nothing converged.
    fn lowest(entries: &[Entry], points: usize) -> Vec<Option<f64>> {
        (0..points)
            .map(|p| {
                let here = entries.iter().filter(|e| e.point == p);
                here.filter_map(|e| e.record.energy).min_by(f64::total_cmp)
            })
            .collect()
    }

    #[test]
    fn every_point_is_evaluated_once_and_told_once() {
        let surface = ModelSurface {
            states: vec![harmonic(-1.0, 1.5)],
            ..ModelSurface::simple(0.0, vec![])
        };
        let scan = scan(11, 5, SeedKind::Previous, Passes::One);
        let mut told = 0;
        let entries = run(
            &surface,
            &scan,
            &pool(2),
            &AtomicBool::new(false),
            &mut |event| {
                told += usize::from(matches!(event, Event::Evaluated(_)));
            },
        )
        .unwrap();
        assert_eq!((entries.len(), told), (11, 11));
        for entry in &entries {
            let q = scan.coordinates[entry.point][0];
            assert!(
                (entry.record.energy.unwrap() - (-1.0 + 0.5 * (q - 1.5).powi(2))).abs() < 1e-14
            );
        }
        assert_eq!(
            entries.iter().filter(|e| e.seeded_from.is_empty()).count(),
            1
        );
    }

    #[test]
    fn a_point_that_fails_is_an_outcome_and_its_neighbours_look_further_back() {
        let surface = ModelSurface {
            states: vec![harmonic(-1.0, 1.5)],
            fails: |x| (x[1].z - 1.5).abs() < 1e-9,
            vanishes: |_, _| false,
        };
        let entries = walk(&surface, &scan(11, 0, SeedKind::Previous, Passes::One));
        let at = |p: usize| entries.iter().find(|e| e.point == p).unwrap();
        assert_eq!(at(5).record.energy, None);
        assert_eq!(at(6).seeded_from.last(), Some(&4));
        assert!(at(6).record.energy.is_some());
    }

    #[test]
    fn the_way_back_and_healing_find_the_lower_state_everywhere() {
        // The second state is lower beyond q = 1.5; seeds of the first fall into it at the far end only.
        let surface = ModelSurface {
            states: vec![harmonic(-1.0, 1.2), harmonic(-1.0, 1.8)],
            fails: |_| false,
            vanishes: |state, x| state == 0 && x[1].z > 1.95,
        };
        let one = walk(&surface, &scan(11, 2, SeedKind::Previous, Passes::One));
        let both = walk(&surface, &scan(11, 2, SeedKind::Previous, Passes::Both));
        let best = |q: f64| (-1.0 + 0.5 * (q - 1.2).powi(2)).min(-1.0 + 0.5 * (q - 1.8).powi(2));
        let missed = |entries: &[Entry]| {
            let found = lowest(entries, 11);
            (0..11)
                .filter(|&p| found[p].unwrap() > best(1.0 + 0.1 * p as f64) + 1e-9)
                .count()
        };
        assert!(missed(&one) > 0);
        assert_eq!(missed(&both), 0);
    }

    #[test]
    fn the_number_of_threads_changes_nothing() {
        let surface = ModelSurface {
            states: vec![harmonic(-1.0, 1.3)],
            ..ModelSurface::simple(0.0, vec![])
        };
        let scan = scan(20, 7, SeedKind::Extrapolated, Passes::Both);
        let on = |threads: usize| {
            let pool = rayon::ThreadPoolBuilder::new()
                .num_threads(threads)
                .build()
                .unwrap();
            pool.install(|| walk(&surface, &scan))
        };
        assert_eq!(on(1), on(4));
    }

    #[test]
    fn a_raised_stop_ends_the_walk_with_a_count() {
        let surface = ModelSurface {
            states: vec![harmonic(-1.0, 1.3)],
            ..ModelSurface::simple(0.0, vec![])
        };
        let stop = AtomicBool::new(false);
        let mut told = 0;
        let error = run(
            &surface,
            &scan(50, 0, SeedKind::Previous, Passes::One),
            &pool(2),
            &stop,
            &mut |event| {
                if matches!(event, Event::Evaluated(_)) {
                    told += 1;
                }
                stop.store(true, Ordering::Relaxed);
            },
        );
        assert!(matches!(
            error,
            Err(ScanError::Interrupted { planned: 50, .. })
        ));
        assert!(told < 50);
    }
}
