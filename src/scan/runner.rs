//! Carries out a walk: steps run as soon as those they start from are done, on the threads of a
//! pool, and what happens goes through one channel to one observer.

use super::Grid;
use super::added::Added;
use super::evaluate::{Evaluator, Known, Left};
use super::event::{Entry, Event, Likeness};
use super::further;
use super::heal;
use super::kept::keep;
use super::settings::{Passes, SeedKind, StateChoice, WalkSettings};
use super::walk::{self, Extras, Pass, Step};
use crate::surface::{Surface, SurfaceError};
use nalgebra::Vector3;
use rayon::ThreadPool;
use std::collections::BTreeMap;
use std::sync::OnceLock;
use std::sync::atomic::{AtomicBool, AtomicUsize, Ordering};
use std::sync::mpsc::{Sender, channel};

/// What is to be walked.
#[derive(Debug, Clone)]
pub struct Scan {
    /// The grid.
    pub grid: Grid,
    /// For each sweep whether it is a length (else an angle).
    pub is_length: Vec<bool>,
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

impl Scan {
    /// Whether arms are walked back: asked for, and not against the wish to follow one state.
    #[must_use]
    pub fn walks_back(&self) -> bool {
        self.settings.passes == Passes::Both && self.settings.state == StateChoice::Lowest
    }

    /// Whether the ends are also started from nothing and from free atoms. A fresh solution of unknown stability is no
    /// better than the walk's.
    fn probes(&self) -> bool {
        self.walks_back() && self.settings.stability
    }

    /// The steps of the walk; starts from free atoms and healing not counted.
    #[must_use]
    pub fn plan(&self) -> Vec<Step> {
        let extras = Extras {
            back: self.walks_back(),
            probes: self.probes(),
        };
        walk::plan(&self.grid, self.start, self.settings.seed, extras)
    }
}

/// What a walk gave.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Walked {
    /// All evaluations, in the order of the plan.
    pub entries: Vec<Entry>,
    /// How alike the kept solutions of neighbouring points are.
    pub likeness: Vec<Likeness>,
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
    /// The same, within an evaluation of several calculations or in the searches that follow the walk.
    #[error("interrupted; what was finished is in the journal")]
    Stopped,
}

impl ScanError {
    /// What a surface's refusal at a point means.
    pub(crate) fn at(point: usize, source: SurfaceError) -> Self {
        match source {
            SurfaceError::Stopped => Self::Stopped,
            source => Self::Point { point, source },
        }
    }
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
) -> Result<Walked, ScanError> {
    run_keeping(surface, scan, pool, stop, observer).map(|(walked, _)| walked)
}

/// For every point what its kept solution left to start from, where there is one.
pub type PointSeeds<S> = Vec<Option<<S as Surface>::Seed>>;

/// As [`run`], and what the kept solution of every point left for calculations that start from it.
///
/// # Errors
/// As [`run`].
pub fn run_keeping<S: Surface>(
    surface: &S,
    scan: &Scan,
    pool: &ThreadPool,
    stop: &AtomicBool,
    observer: &mut dyn FnMut(&Event),
) -> Result<(Walked, PointSeeds<S>), ScanError> {
    let steps = scan.plan();
    observer(&Event::Started {
        planned: steps.len(),
        points: scan.grid.len(),
    });
    let evaluator = Evaluator::new(surface, scan, pool);
    let runner = Runner::new(&evaluator, &steps, stop);
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
    let mut left = runner.left();
    let mut added = Added {
        evaluator: &evaluator,
        entries: &mut entries,
        left: &mut left,
        stop,
        observer: &mut *observer,
    };
    if scan.probes() && scan.settings.seed != SeedKind::Fresh {
        further::probe(&mut added)?;
    }
    if scan.walks_back() {
        heal::heal(&mut added)?;
    }
    let seeds: Vec<Option<S::Seed>> = keep(&entries, scan.grid.len(), scan.settings.state)
        .iter()
        .map(|kept| left.remove(&kept.as_ref()?.entry.order).map(|l| l.seed))
        .collect();
    let likeness = likeness(surface, scan, &seeds);
    observer(&Event::Finished);
    Ok((Walked { entries, likeness }, seeds))
}

/// How alike the kept solutions of neighbouring points are.
fn likeness<S: Surface>(surface: &S, scan: &Scan, seeds: &[Option<S::Seed>]) -> Vec<Likeness> {
    let mut all = Vec::new();
    for point in 0..scan.grid.len() {
        for neighbour in scan
            .grid
            .neighbours(point)
            .into_iter()
            .filter(|&n| n > point)
        {
            if let (Some(one), Some(other)) = (&seeds[point], &seeds[neighbour]) {
                let cosines = surface.likeness(one, other);
                all.push(Likeness {
                    points: [point, neighbour],
                    cosines,
                });
            }
        }
    }
    all
}

/// The state shared by the steps of one walk.
struct Runner<'a, S: Surface> {
    evaluator: &'a Evaluator<'a, S>,
    steps: &'a [Step],
    stop: &'a AtomicBool,
    /// What each finished step left; the inner option is empty where it did not converge.
    solved: Vec<OnceLock<Option<Left<S::Seed>>>>,
    /// For each step how many of those it starts from are still to come.
    waiting: Vec<AtomicUsize>,
    followers: Vec<Vec<usize>>,
    /// For each step beside the way out, the one of the way out at its point.
    out: Vec<Option<usize>>,
    failure: OnceLock<ScanError>,
}

impl<'a, S: Surface> Runner<'a, S> {
    fn new(evaluator: &'a Evaluator<'a, S>, steps: &'a [Step], stop: &'a AtomicBool) -> Self {
        let mut out_of_point = vec![None; evaluator.scan.grid.len()];
        for (k, step) in steps
            .iter()
            .enumerate()
            .filter(|(_, s)| s.pass == Pass::Out)
        {
            out_of_point[step.point] = Some(k);
        }
        let out: Vec<Option<usize>> = steps
            .iter()
            .map(|s| {
                if s.pass == Pass::Out {
                    None
                } else {
                    out_of_point[s.point]
                }
            })
            .collect();
        let mut followers = vec![Vec::new(); steps.len()];
        let mut waiting = Vec::with_capacity(steps.len());
        for (k, step) in steps.iter().enumerate() {
            // A step beside the way out is compared with it, and waits for it too.
            let awaited = step.history.iter().copied().chain(out[k]);
            let mut awaited: Vec<usize> = awaited.collect();
            awaited.sort_unstable();
            awaited.dedup();
            waiting.push(AtomicUsize::new(awaited.len()));
            for h in awaited {
                followers[h].push(k);
            }
        }
        Self {
            evaluator,
            steps,
            stop,
            solved: steps.iter().map(|_| OnceLock::new()).collect(),
            waiting,
            followers,
            out,
            failure: OnceLock::new(),
        }
    }

    fn run_all(&self, sender: Sender<Entry>) {
        if !self.evaluator.side_by_side() {
            // One chain after another; the threads share the work of each point instead.
            (0..self.steps.len()).for_each(|k| self.run_step(k, &sender));
            return;
        }
        rayon::scope(|scope| {
            for (k, waiting) in self.waiting.iter().enumerate() {
                if waiting.load(Ordering::Acquire) == 0 {
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
        let known: Vec<Known<'_, S::Seed>> = step
            .history
            .iter()
            .filter_map(|&h| {
                Some(Known {
                    point: self.steps[h].point,
                    left: self.solved[h].get()?.as_ref()?,
                })
            })
            .collect();
        // A fresh solution is often a saddle: only its stability test tells whether a lower one lies beside it.
        let before = self.out[k]
            .filter(|_| step.pass != Pass::Probe)
            .and_then(|h| Some(self.solved[h].get()?.as_ref()?.energy));
        match self
            .evaluator
            .evaluate(step.point, step.pass, step.row, &known, before, k)
        {
            Ok((entry, left)) => {
                let _ = self.solved[k].set(left);
                // The observer outlives the walk; a closed channel means the program is ending anyway.
                let _ = sender.send(entry);
            }
            Err(source) => {
                let _ = self.failure.set(ScanError::at(step.point, source));
            }
        }
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

    /// What the steps left, by their number.
    fn left(self) -> BTreeMap<usize, Left<S::Seed>> {
        self.solved
            .into_iter()
            .enumerate()
            .filter_map(|(k, cell)| Some((k, cell.into_inner()??)))
            .collect()
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
            is_length: vec![true],
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
        .entries
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
        let entries = entries.entries;
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
