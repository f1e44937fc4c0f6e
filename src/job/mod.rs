//! One job end to end: every level of a spec walked over its grid, and all results made from the
//! finished evaluations alone, so that a journal can give them again.

pub mod analysis;
pub mod assemble;
pub mod dissociation;
pub mod journal;
pub mod memory;
pub mod onset;
pub mod pieces;
pub mod settle;
pub mod stationary;

pub use assemble::{Cost, JobResult, LevelResult, PointResult, SweepResult, assemble};
pub use dissociation::{Limit, LimitPart};
pub use onset::Onset;

use crate::minimise::hessian::HessianSettings;
use crate::minimise::relaxed::Relaxed;
use crate::minimise::settle::SettleSettings;
use crate::minimise::{MinimiseError, MinimiseSettings};
use crate::scan::kept::{Kept, keep};
use crate::scan::{Entry, Event, Grid, Others, Scan, ScanError, WalkStart, grid, runner};
use crate::scf::Method;
use crate::spec::{Level, Spec};
use crate::surface::{HartreeFock, StabilityDemand, Surface};
use crate::{molecule::motion::MotionError, surface::SurfaceError};
use journal::{LevelEnd, LevelEntry, LevelLimit, LevelOnset, LevelStationary};
use rayon::ThreadPool;
use stationary::{ScanPath, Search};
use std::sync::atomic::AtomicBool;
use std::time::Instant;

/// Why a job could not be finished.
#[derive(Debug, thiserror::Error)]
pub enum JobError {
    /// A walk ended early.
    #[error("level {level}: {source}")]
    Scan {
        /// name of the level
        level: String,
        /// what happened
        source: ScanError,
    },
    /// A level that cannot be set up.
    #[error("level {level}: {source}")]
    Level {
        /// name of the level
        level: String,
        /// what is wrong
        source: SurfaceError,
    },
    /// A geometry that cannot be settled.
    #[error("level {level}: {source}")]
    Settle {
        /// name of the level
        level: String,
        /// what is wrong
        source: MinimiseError,
    },
    /// A geometry of the grid that cannot be reached.
    #[error("point {values:?}: {source}")]
    Geometry {
        /// values of the sweeps, ångström or degree
        values: Vec<f64>,
        /// what is wrong
        source: Box<MotionError>,
    },
}

impl JobError {
    /// Whether the job ended because it was asked to.
    #[must_use]
    pub fn is_interruption(&self) -> bool {
        matches!(
            self,
            Self::Scan {
                source: ScanError::Interrupted { .. },
                ..
            }
        )
    }
}

/// Something that happened in a job.
#[derive(Debug)]
pub enum JobEvent<'a> {
    /// A level's walk tells something.
    Walk {
        /// number of the level
        level: usize,
        /// its name
        name: &'a str,
        /// what happened
        event: &'a Event,
    },
    /// The energies of a level's separated parts are known.
    Limit(&'a LevelLimit),
    /// The onset of an instability is located.
    Onset(&'a LevelOnset),
    /// A stationary point of a level's curve or surface is located.
    Stationary(&'a LevelStationary),
    /// A level is complete.
    LevelDone(&'a LevelEnd),
}

/// What a job leaves: all evaluations and how long each level took.
#[derive(Debug, Clone, Default)]
pub struct JobRecord {
    /// Evaluations of all levels.
    pub entries: Vec<LevelEntry>,
    /// Energies of separated parts.
    pub limits: Vec<LevelLimit>,
    /// Onsets of instabilities.
    pub onsets: Vec<LevelOnset>,
    /// Stationary points of all levels.
    pub stationary: Vec<LevelStationary>,
    /// Ends of the levels that are complete.
    pub ends: Vec<LevelEnd>,
}

/// The walk that a spec asks for.
///
/// # Errors
/// If a point of the grid has no geometry.
pub fn scan_of(spec: &Spec) -> Result<Scan, JobError> {
    let grid = Grid::of(&spec.sweeps);
    let input = &spec.molecule.positions;
    let mut coordinates = Vec::with_capacity(grid.len());
    let mut positions = Vec::with_capacity(grid.len());
    for point in 0..grid.len() {
        let values = grid::values_at(&spec.sweeps, &grid, point);
        match spec.positions_at(&values) {
            Ok(places) => positions.push(places),
            Err(source) => {
                return Err(JobError::Geometry {
                    values,
                    source: Box::new(source),
                });
            }
        }
        coordinates.push(values);
    }
    let start_index: Vec<usize> = spec
        .sweeps
        .iter()
        .map(|sweep| match spec.walk.start {
            WalkStart::First => 0,
            WalkStart::Last => sweep.values.len() - 1,
            WalkStart::Geometry => sweep.nearest(input),
        })
        .collect();
    Ok(Scan {
        start: grid.point(&start_index),
        is_length: spec.sweeps.iter().map(|s| s.unit() == "angstrom").collect(),
        grid,
        coordinates,
        positions,
        settings: spec.walk.clone(),
        gradients: spec.output.gradients,
        memory_bytes: spec.scf.memory_mib << 20,
    })
}

/// Runs every level of a spec, telling `observer` of each finished evaluation.
///
/// # Errors
/// [`JobError`]; what was finished until then has been told.
pub fn run(
    spec: &Spec,
    pool: &ThreadPool,
    stop: &AtomicBool,
    observer: &mut dyn FnMut(&JobEvent<'_>),
) -> Result<JobRecord, JobError> {
    let scan = scan_of(spec)?;
    let mut record = JobRecord::default();
    for (number, level) in spec.levels.iter().enumerate() {
        let surface = HartreeFock::new(
            &level.molecule(&spec.molecule),
            level.shells_of_atom.clone(),
            level.method,
            spec.scf.clone(),
        )
        .map_err(|source| JobError::Level {
            level: level.name.clone(),
            source,
        })?;
        let before = Instant::now();
        let mut end = match spec.walk.others {
            Others::Fixed => walk_level(
                &LevelSurfaces::rigid(&surface),
                spec,
                &scan,
                number,
                pool,
                stop,
                observer,
                &mut record,
            ),
            Others::Optimised => {
                let relaxed = |settings| {
                    let swept = spec.sweeps.iter().flat_map(|s| s.motions());
                    Relaxed::new(
                        &surface,
                        &level.molecule(&spec.molecule),
                        swept.map(|m| m.coordinate).collect(),
                        settings,
                    )
                };
                walk_level(
                    &LevelSurfaces {
                        walk: &relaxed(MinimiseSettings::default()),
                        polish: &relaxed(MinimiseSettings::tight()),
                        unrelaxed: &surface,
                    },
                    spec,
                    &scan,
                    number,
                    pool,
                    stop,
                    observer,
                    &mut record,
                )
            }
        }?;
        beside_the_walk(spec, number, &scan, pool, observer, &mut record)?;
        end.wall_seconds = before.elapsed().as_secs_f64();
        end.peak_memory_mib = memory::peak_mib();
        observer(&JobEvent::LevelDone(&end));
        record.ends.push(end);
    }
    Ok(record)
}

/// What a level needs besides its walk: the separated parts, and the onset of an instability.
fn beside_the_walk(
    spec: &Spec,
    number: usize,
    scan: &Scan,
    pool: &ThreadPool,
    observer: &mut dyn FnMut(&JobEvent<'_>),
    record: &mut JobRecord,
) -> Result<(), JobError> {
    let level = &spec.levels[number];
    let entries: Vec<Entry> = record
        .entries
        .iter()
        .filter(|e| e.level == number)
        .map(|e| e.entry.clone())
        .collect();
    if let Some(limit) = pool
        .install(|| limit_of(spec, level, scan, &entries))
        .map_err(|source| JobError::Level {
            level: level.name.clone(),
            source,
        })?
    {
        let limit = LevelLimit {
            level: number,
            limit,
        };
        observer(&JobEvent::Limit(&limit));
        record.limits.push(limit);
    }
    if level.method == Method::Rhf
        && let Some(onset) = pool.install(|| onset::find(spec, level, &entries, scan.start))?
    {
        let onset = LevelOnset {
            level: number,
            onset,
        };
        observer(&JobEvent::Onset(&onset));
        record.onsets.push(onset);
    }
    Ok(())
}

/// The separated parts of a level: those given, else those that the swept bond cuts.
fn limit_of(
    spec: &Spec,
    level: &Level,
    scan: &Scan,
    entries: &[Entry],
) -> Result<Option<Limit>, SurfaceError> {
    let (molecule, settings) = (&spec.molecule, &spec.scf);
    let asked = spec.dissociation.as_ref();
    let given = asked.map_or(&[][..], |d| &d.parts);
    let limit = if given.is_empty() {
        match dissociation::parts_cut(molecule, &spec.sweeps) {
            Some(parts) => dissociation::proposed(molecule, level, settings, &parts)?,
            None => None,
        }
    } else {
        Some(dissociation::given(molecule, level, settings, given)?)
    };
    let Some(mut limit) = limit else {
        return Ok(None);
    };
    let kept = keep(entries, scan.grid.len(), scan.settings.state);
    let lowest = kept
        .iter()
        .flatten()
        .filter(|k| k.entry.record.energy.is_some())
        .min_by(|a, b| {
            let energy = |k: &Kept<'_>| k.entry.record.energy.unwrap_or(f64::INFINITY);
            energy(a).total_cmp(&energy(b))
        });
    if let (true, Some(lowest)) = (asked.is_some_and(|d| d.counterpoise), lowest) {
        let positions = &scan.positions[lowest.entry.point];
        limit.counterpoise =
            dissociation::counterpoise(molecule, level, settings, &limit, positions)?;
    }
    Ok(Some(limit))
}

/// The surfaces that a level is computed on.
#[derive(Debug)]
pub struct LevelSurfaces<'a, S, U> {
    /// The one that is walked.
    pub walk: &'a S,
    /// The same, with thresholds fine enough for second derivatives, for stationary points.
    pub polish: &'a S,
    /// The surface without the relaxation that the others may do at every point.
    pub unrelaxed: &'a U,
}

impl<'a, S> LevelSurfaces<'a, S, S> {
    /// One surface for everything.
    #[must_use]
    pub fn rigid(surface: &'a S) -> Self {
        Self {
            walk: surface,
            polish: surface,
            unrelaxed: surface,
        }
    }
}

/// Walks one level over any surface, locates the stationary points of what it finds, adds all to `record` and tells
/// how it ended.
///
/// # Errors
/// [`JobError::Scan`].
pub fn walk_level<S: Surface, U: Surface>(
    surfaces: &LevelSurfaces<'_, S, U>,
    spec: &Spec,
    scan: &Scan,
    level: usize,
    pool: &ThreadPool,
    stop: &AtomicBool,
    observer: &mut dyn FnMut(&JobEvent<'_>),
    record: &mut JobRecord,
) -> Result<LevelEnd, JobError> {
    let begin = Instant::now();
    let name = spec.levels.get(level).map_or("", |l| l.name.as_str());
    let failed = |source| JobError::Scan {
        level: name.to_owned(),
        source,
    };
    let (walked, seeds) = runner::run_keeping(surfaces.walk, scan, pool, stop, &mut |event| {
        observer(&JobEvent::Walk { level, name, event });
    })
    .map_err(failed)?;
    let search = Search {
        surface: surfaces.polish,
        scan,
        path: ScanPath {
            sweeps: &spec.sweeps,
            input: &spec.molecule.positions,
        },
        pool,
        seeds: &seeds,
    };
    let molecule = spec.levels.get(level).map_or_else(
        || spec.molecule.clone(),
        |level| level.molecule(&spec.molecule),
    );
    let settings = SettleSettings {
        stability: if scan.settings.stability {
            StabilityDemand::Leave
        } else {
            StabilityDemand::None
        },
        hessian: HessianSettings {
            memory_bytes: scan.memory_bytes,
            ..HessianSettings::default()
        },
        ..SettleSettings::default()
    };
    for mut stationary in search
        .run(&walked.entries, spec.scf.energy)
        .map_err(failed)?
    {
        pool.install(|| {
            stationary::vibrate(
                surfaces.unrelaxed,
                &molecule,
                &spec.masses_u,
                &search.path,
                &settings,
                &mut stationary,
            )
        })
        .map_err(|source| failed(ScanError::Point { point: 0, source }))?;
        let found = LevelStationary { level, stationary };
        observer(&JobEvent::Stationary(&found));
        record.stationary.push(found);
    }
    record.entries.extend(
        walked
            .entries
            .into_iter()
            .map(|entry| LevelEntry { level, entry }),
    );
    Ok(LevelEnd {
        level,
        wall_seconds: begin.elapsed().as_secs_f64(),
        threads: pool.current_num_threads(),
        peak_memory_mib: None,
        likeness: walked.likeness,
    })
}
