//! Equilibrium geometry, harmonic vibrations and force constants of a spec's molecule at each of its levels.

use super::JobError;
use crate::basis::Shell;
use crate::minimise::hessian::HessianSettings;
use crate::minimise::settle::{Character, InternalConstant, SettleSettings, Settled, settle};
use crate::minimise::{Call, MinimiseStop};
use crate::molecule::internal::Coordinate;
use crate::molecule::motion::Motion;
use crate::scan::ScanError;
use crate::spec::{Level, Spec};
use crate::surface::{HartreeFock, PointRecord, StabilityDemand, Stoppable, Surface};
use rayon::ThreadPool;
use serde::{Deserialize, Serialize};
use std::sync::atomic::{AtomicBool, Ordering};
use std::time::Instant;

/// How often a saddle point is left where that is asked for: each time one imaginary mode less, as a rule.
const PUSHES: usize = 5;

/// A molecule settled at one level, with everything that is reported of it.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct SettledLevel {
    /// Number of the level in the spec.
    pub level: usize,
    /// Positions, bohr.
    pub positions: Vec<[f64; 3]>,
    /// The numbers there, the gradient among them.
    pub record: PointRecord,
    /// Why the search ended.
    pub stop: MinimiseStop,
    /// What was left when it ended: largest component of the gradient (hartree/bohr), largest displacement (bohr) and
    /// fall of the energy (hartree) that the next step asked for.
    pub left: [f64; 3],
    /// Minimum, saddle point or flat.
    pub character: Character,
    /// Saddle points left on the way.
    pub pushes: usize,
    /// The vibrations in rising order of the wavenumber.
    pub modes: Vec<Mode>,
    /// Half the sum of the real wavenumbers, hartree.
    pub zero_point_hartree: f64,
    /// What translations and rotations had for a wavenumber before they were projected out, cm⁻¹.
    pub external_cm1: f64,
    /// Largest |Hᵢⱼ − Hⱼᵢ| of the Hessian before its symmetric part was taken, hartree/bohr².
    pub asymmetry: f64,
    /// Constants of the swept coordinates, where the spec has sweeps.
    pub swept: Vec<InternalRow>,
    /// Constants of all bonds, angles and dihedrals.
    pub internal: Vec<InternalRow>,
    /// Gradient calls of everything.
    pub gradient_calls: usize,
    /// Fock builds of everything.
    pub fock_builds: usize,
    /// Wall time, s.
    pub wall_seconds: f64,
    /// Threads.
    pub threads: usize,
}

/// One vibration.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Mode {
    /// Wavenumber, cm⁻¹; negative: imaginary.
    pub wavenumber_cm1: f64,
    /// Reduced mass, u.
    pub reduced_mass_u: f64,
    /// Infrared intensity, km/mol.
    pub intensity_km_per_mol: f64,
    /// Displacement of each atom, of unit length altogether.
    pub displacements: Vec<[f64; 3]>,
}

/// Equilibrium value and force constants of one coordinate, or of several tied ones.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct InternalRow {
    /// The coordinates.
    pub coordinates: Vec<Coordinate>,
    /// Value of the first, bohr or radian.
    pub equilibrium: f64,
    /// Second derivative while all other coordinates follow, hartree per bohr² or radian².
    pub relaxed: f64,
    /// Second derivative along the rigid motion of one side; none where no side can move by itself.
    pub rigid: Option<f64>,
}

impl From<InternalConstant> for InternalRow {
    fn from(constant: InternalConstant) -> Self {
        Self {
            coordinates: constant.coordinates,
            equilibrium: constant.equilibrium,
            relaxed: constant.relaxed,
            rigid: constant.rigid,
        }
    }
}

/// Settles the molecule at every level that `done` does not hold yet, telling `observer` of each.
///
/// `leave_saddles`: saddle points are left along their imaginary modes. `stop` ends the work before the next calculation.
///
/// # Errors
/// [`JobError`]; what was finished until then has been told.
pub fn run(
    spec: &Spec,
    leave_saddles: bool,
    done: Vec<SettledLevel>,
    pool: &ThreadPool,
    stop: &AtomicBool,
    observer: &mut dyn FnMut(&SettledLevel),
) -> Result<Vec<SettledLevel>, JobError> {
    let mut all = done;
    for (number, level) in spec.levels.iter().enumerate() {
        if all.iter().any(|s| s.level == number) {
            continue;
        }
        if stop.load(Ordering::Relaxed) {
            return Err(JobError::Scan {
                level: level.name.clone(),
                source: ScanError::Interrupted {
                    finished: all.len(),
                    planned: spec.levels.len(),
                },
            });
        }
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
        let surface = Stoppable {
            surface: &surface,
            stop,
        };
        let settled = settle_level(&surface, spec, number, level, leave_saddles, pool)?;
        observer(&settled);
        all.push(settled);
    }
    all.sort_by_key(|s| s.level);
    Ok(all)
}

/// Settles the molecule of one level on any surface.
///
/// # Errors
/// [`JobError::Settle`].
pub fn settle_level<S: Surface>(
    surface: &S,
    spec: &Spec,
    number: usize,
    level: &Level,
    leave_saddles: bool,
    pool: &ThreadPool,
) -> Result<SettledLevel, JobError> {
    let begin = Instant::now();
    let swept: Vec<Vec<Motion>> = spec
        .sweeps
        .iter()
        .map(|s| s.motions().cloned().collect())
        .collect();
    let settings = SettleSettings {
        pushes: if leave_saddles { PUSHES } else { 0 },
        stability: if spec.walk.stability {
            StabilityDemand::Leave
        } else {
            StabilityDemand::None
        },
        hessian: HessianSettings {
            memory_bytes: spec.scf.memory_mib << 20,
            ..HessianSettings::default()
        },
        ..SettleSettings::default()
    };
    let settled = pool
        .install(|| {
            settle(
                surface,
                &level.molecule(&spec.molecule),
                &spec.masses_u,
                &swept,
                &settings,
                &mut surface.workspace(),
            )
        })
        .map_err(|source| JobError::Settle {
            level: level.name.clone(),
            source,
        })?;
    let mut found = record_of(number, settled);
    found.wall_seconds = begin.elapsed().as_secs_f64();
    found.threads = pool.current_num_threads();
    Ok(found)
}

fn record_of<T>(level: usize, settled: Settled<T>) -> SettledLevel {
    let left = settled.minimum.last().copied();
    let left = |of: fn(&Call) -> f64| left.as_ref().map_or(f64::MAX, of);
    SettledLevel {
        level,
        left: [
            left(|c| c.gradient_max),
            left(|c| c.displacement),
            left(|c| c.promise),
        ],
        positions: settled
            .minimum
            .positions
            .iter()
            .map(|p| [p.x, p.y, p.z])
            .collect(),
        stop: settled.minimum.stop,
        fock_builds: settled.minimum.all_builds + settled.hessian.fock_builds,
        record: settled.minimum.record,
        character: settled.character,
        pushes: settled.pushes,
        modes: settled
            .analysis
            .modes
            .iter()
            .map(|m| Mode {
                wavenumber_cm1: m.wavenumber_cm1,
                reduced_mass_u: m.reduced_mass_u,
                intensity_km_per_mol: m.intensity_km_per_mol.unwrap_or(0.0),
                displacements: m
                    .displacements
                    .as_slice()
                    .chunks_exact(3)
                    .map(|d| [d[0], d[1], d[2]])
                    .collect(),
            })
            .collect(),
        zero_point_hartree: settled.analysis.zero_point_hartree,
        external_cm1: settled.analysis.external_cm1,
        asymmetry: settled.hessian.asymmetry,
        swept: settled.swept.into_iter().map(InternalRow::from).collect(),
        internal: settled
            .internal
            .into_iter()
            .map(InternalRow::from)
            .collect(),
        gradient_calls: settled.gradient_calls,
        wall_seconds: 0.0,
        threads: 0,
    }
}

/// Number of basis functions of a level.
#[must_use]
pub fn basis_functions(level: &Level) -> usize {
    level
        .shells_of_atom
        .iter()
        .flatten()
        .map(Shell::functions)
        .sum()
}
