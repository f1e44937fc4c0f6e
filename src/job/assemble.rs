//! Evaluations → results: the kept solution of every point, findings and cost.

use super::analysis::{LevelAnalysis, Material, PathKind, analyse};
use super::{JobRecord, Limit, Onset, pieces, scan_of};
use crate::basis::Shell;
use crate::scan::audit::{Audited, audit};
use crate::scan::kept::keep;
use crate::scan::sweep::slopes;
use crate::scan::{Entry, Finding, FindingKind, Grid, Likeness, Scan, Sweep};
use crate::scf::Method;
use crate::spec::{Level, Spec};
use crate::surface::PointRecord;
use nalgebra::Vector3;
use serde::Serialize;

/// Everything a job has to report.
#[derive(Debug, Clone)]
pub struct JobResult {
    /// Title of the spec.
    pub title: String,
    /// Labels of the atoms.
    pub labels: Vec<String>,
    /// Symbols of the elements, one per atom.
    pub symbols: Vec<&'static str>,
    /// The sweeps.
    pub sweeps: Vec<SweepResult>,
    /// Number of values along each sweep.
    pub grid: Grid,
    /// The levels in the order of the spec.
    pub levels: Vec<LevelResult>,
    /// What it took.
    pub cost: Cost,
}

/// One sweep as it is reported.
#[derive(Debug, Clone, PartialEq)]
pub struct SweepResult {
    /// `bond`, `angle` or `dihedral`.
    pub kind: &'static str,
    /// Labels of its atoms.
    pub atoms: Vec<String>,
    /// `angstrom` or `degree`.
    pub unit: &'static str,
    /// Its values.
    pub values: Vec<f64>,
    /// Name of its column, such as `bond_O_H1_angstrom`.
    pub column: String,
    /// Labels of the atoms of its coordinate and of those tied to it: the force constant of the sweep sums theirs and
    /// their couplings.
    pub coordinates: Vec<Vec<String>>,
    /// Labels of the atoms that move.
    pub moves: Vec<String>,
    /// What the other coordinates do meanwhile.
    pub path: PathKind,
}

/// One level's results.
#[derive(Debug, Clone)]
pub struct LevelResult {
    /// Name in legends.
    pub name: String,
    /// `rhf` or `uhf`.
    pub method: String,
    /// Name of the basis set.
    pub basis: String,
    /// Number of basis functions.
    pub basis_functions: usize,
    /// Number of electrons.
    pub electrons: usize,
    /// One result per point of the grid, in its order; points not yet computed are missing.
    pub points: Vec<PointResult>,
    /// What a person should see.
    pub findings: Vec<Finding>,
    /// Energies of the separated parts.
    pub limit: Option<Limit>,
    /// Where the solution becomes unstable towards unrestricted orbitals.
    pub onset: Option<Onset>,
    /// How alike the kept solutions of neighbouring points are.
    pub likeness: Vec<Likeness>,
    /// Mean Fock builds of the kept solutions, all points but the first; none for a single point.
    pub mean_fock_builds: Option<f64>,
    /// Minima, fits and vibrational states.
    pub analysis: LevelAnalysis,
}

/// The kept solution of a point.
#[derive(Debug, Clone)]
pub struct PointResult {
    /// Number of the point in the grid.
    pub point: usize,
    /// Place along each sweep.
    pub index: Vec<usize>,
    /// Values of the sweeps, ångström or degree.
    pub values: Vec<f64>,
    /// Positions, bohr.
    pub positions: Vec<Vector3<f64>>,
    /// dE/dq of every sweep in hartree per ångström or degree, where gradients were asked for.
    pub slopes: Option<Vec<f64>>,
    /// The numbers.
    pub record: PointRecord,
    /// Energy of another solution that was found here and is not kept, hartree.
    pub second_energy: Option<f64>,
    /// Findings that concern this point.
    pub findings: Vec<FindingKind>,
}

/// What a job took.
#[derive(Debug, Clone, Default, PartialEq, Serialize)]
pub struct Cost {
    /// Wall time of all walks, s.
    pub wall_s: f64,
    /// Wall time of integrals and SCF, summed over the evaluations, s.
    pub scf_wall_s: f64,
    /// Fock builds of all evaluations, each one pass over the integrals; stability tests apart.
    pub fock_builds: usize,
    /// Hessian products of the stability tests, each at most the work of one Fock build.
    pub stability_products: usize,
    /// Passes over the integrals that the stability tests took: one serves several products.
    pub stability_passes: usize,
    /// Unique repulsion integrals computed.
    pub integrals_computed: u64,
    /// Unique repulsion integrals taken over from the point before.
    pub integrals_reused: u64,
    /// Threads.
    pub threads: usize,
    /// Largest resident memory of the process, MiB; none where the system does not say.
    pub peak_memory_mib: Option<f64>,
}

impl JobResult {
    /// The energy (hartree) that a level's relative energies count from: the lowest of all levels in the same basis,
    /// so that two methods or spin states are seen at their true distance. Energies in different
    /// basis sets have no common zero.
    #[must_use]
    pub fn zero_of(&self, level: &LevelResult) -> Option<f64> {
        self.levels
            .iter()
            .filter(|l| l.basis == level.basis && l.basis_functions == level.basis_functions)
            .filter_map(|l| l.lowest()?.record.energy)
            .min_by(f64::total_cmp)
    }

    /// What [`zero_of`](Self::zero_of) means for this result, to follow "relative to".
    #[must_use]
    pub fn zero_words(&self) -> String {
        let lowest = self
            .levels
            .iter()
            .filter_map(|l| Some((l, l.lowest()?.record.energy?)))
            .min_by(|a, b| a.1.total_cmp(&b.1));
        let shared = |a: &LevelResult, b: &LevelResult| {
            a.basis == b.basis && a.basis_functions == b.basis_functions
        };
        match (&self.levels[..], lowest) {
            ([_], _) | (_, None) => "the lowest point".to_owned(),
            (all, Some((level, _))) if all.iter().all(|l| shared(l, level)) => {
                "the lowest point of all levels".to_owned()
            }
            _ => "the lowest point in each basis".to_owned(),
        }
    }
}

impl LevelResult {
    /// Energy of the lowest minimum, hartree: refined between the points where the sweep holds one, else of the lowest
    /// point.
    #[must_use]
    pub fn bottom(&self) -> Option<f64> {
        let minima = self.analysis.minima.iter().filter(|m| m.interior);
        minima
            .map(|m| m.energy)
            .chain(self.lowest().and_then(|p| p.record.energy))
            .min_by(f64::total_cmp)
    }

    /// Energy from the lowest minimum to the separated parts, hartree; where it was asked for, less what the basis
    /// functions of the others lend each part.
    #[must_use]
    pub fn dissociation_energy(&self) -> Option<f64> {
        let limit = self.limit.as_ref()?;
        Some(limit.energy? - self.bottom()? - limit.counterpoise.unwrap_or(0.0))
    }

    /// The same from the lowest vibrational state, for a molecule of two atoms: atoms keep no zero-point energy.
    #[must_use]
    pub fn dissociation_energy_from_zero_point(&self) -> Option<f64> {
        let found = self.analysis.spectroscopy.as_ref()?;
        let zero_point = found.zero_point.filter(|_| found.mass.exact)?;
        Some(self.dissociation_energy()? - zero_point)
    }

    /// The point of lowest energy.
    #[must_use]
    pub fn lowest(&self) -> Option<&PointResult> {
        self.points
            .iter()
            .filter(|p| p.record.energy.is_some())
            .min_by(|a, b| a.energy_or_infinity().total_cmp(&b.energy_or_infinity()))
    }
}

impl PointResult {
    fn energy_or_infinity(&self) -> f64 {
        self.record.energy.unwrap_or(f64::INFINITY)
    }
}

/// Makes the results from the evaluations of a job.
///
/// # Errors
/// If a point of the grid has no geometry.
pub fn assemble(spec: &Spec, record: &JobRecord) -> Result<JobResult, super::JobError> {
    let scan = scan_of(spec)?;
    let labels: Vec<String> = spec
        .molecule
        .atoms
        .iter()
        .map(|a| a.label.clone())
        .collect();
    let levels = spec
        .levels
        .iter()
        .enumerate()
        .map(|(number, level)| {
            let entries: Vec<&Entry> = record
                .entries
                .iter()
                .filter(|e| e.level == number)
                .map(|e| &e.entry)
                .collect();
            let end = record.ends.iter().find(|e| e.level == number);
            let likeness = end.map_or(&[][..], |e| &e.likeness);
            let mut result = level_result(spec, level, &scan, &entries, likeness);
            let limit = record.limits.iter().find(|l| l.level == number);
            result.limit = limit.map(|l| l.limit.clone());
            if let Some(finding) = pieces::unreachable(&result, &labels) {
                for &point in &finding.points {
                    let here = result.points.iter_mut().find(|p| p.point == point);
                    here.into_iter().for_each(|p| p.findings.push(finding.kind));
                }
                result.findings.push(finding);
            }
            let onset = record.onsets.iter().find(|o| o.level == number);
            result.onset = onset.map(|o| o.onset);
            result.analysis = analyse(&Material {
                spec,
                grid: &scan.grid,
                points: &result.points,
                findings: &result.findings,
                pure_s_squared: pure_s_squared(spec, level),
                stationary: record
                    .stationary
                    .iter()
                    .filter(|s| s.level == number)
                    .map(|s| &s.stationary)
                    .collect(),
            });
            result
        })
        .collect();
    Ok(JobResult {
        title: spec.title.clone(),
        symbols: spec
            .molecule
            .atoms
            .iter()
            .map(|a| a.element.symbol())
            .collect(),
        sweeps: spec
            .sweeps
            .iter()
            .map(|sweep| sweep_result(spec, sweep, &labels))
            .collect(),
        labels,
        grid: scan.grid,
        levels,
        cost: cost(record),
    })
}

fn sweep_result(spec: &Spec, sweep: &Sweep, labels: &[String]) -> SweepResult {
    let named =
        |atoms: &[usize]| -> Vec<String> { atoms.iter().map(|&a| labels[a].clone()).collect() };
    let coordinate = &sweep.motion.coordinate;
    let mut moving: Vec<usize> = sweep.motions().flat_map(|m| m.moves.clone()).collect();
    moving.sort_unstable();
    moving.dedup();
    SweepResult {
        kind: coordinate.kind_word(),
        atoms: named(coordinate.atoms()),
        unit: coordinate.unit_word(),
        values: sweep.values.clone(),
        column: sweep.column_name(&spec.molecule),
        coordinates: sweep
            .motions()
            .map(|m| named(m.coordinate.atoms()))
            .collect(),
        moves: named(&moving),
        path: PathKind::of(spec.walk.others),
    }
}

fn cost(record: &JobRecord) -> Cost {
    let mut cost = Cost {
        wall_s: record.ends.iter().map(|e| e.wall_seconds).sum(),
        threads: record.ends.iter().map(|e| e.threads).max().unwrap_or(1),
        peak_memory_mib: record
            .ends
            .iter()
            .filter_map(|e| e.peak_memory_mib)
            .max_by(f64::total_cmp),
        ..Cost::default()
    };
    for entry in &record.entries {
        let record = &entry.entry.record;
        cost.scf_wall_s += record.scf_seconds;
        let (products, passes) = record.stability.map_or((0, 0), |s| (s.products, s.passes));
        cost.fock_builds += record.all_builds.saturating_sub(products);
        cost.stability_products += products;
        cost.stability_passes += passes;
        cost.integrals_computed += record.integrals.computed;
        cost.integrals_reused += record.integrals.reused;
    }
    for found in &record.stationary {
        cost.fock_builds += found.stationary.fock_builds;
    }
    cost
}

/// ⟨S²⟩ of the pure spin state of a level.
fn pure_s_squared(spec: &Spec, level: &Level) -> f64 {
    let (alpha, beta) = level
        .molecule(&spec.molecule)
        .electrons()
        .unwrap_or_default();
    let spin = 0.5 * (alpha as f64 - beta as f64);
    spin * (spin + 1.0)
}

fn level_result(
    spec: &Spec,
    level: &Level,
    scan: &Scan,
    entries: &[&Entry],
    likeness: &[Likeness],
) -> LevelResult {
    let molecule = level.molecule(&spec.molecule);
    let (alpha, beta) = molecule.electrons().unwrap_or_default();
    let functions = level
        .shells_of_atom
        .iter()
        .flatten()
        .map(Shell::functions)
        .sum();
    let kept = keep(
        entries.iter().copied(),
        scan.grid.len(),
        scan.settings.state,
    );
    let findings = audit(&Audited {
        grid: &scan.grid,
        coordinates: &scan.coordinates,
        kept: &kept,
        likeness,
        pure_s_squared: pure_s_squared(spec, level),
        functions,
        restricted: level.method == Method::Rhf,
    });
    let points: Vec<PointResult> = kept
        .iter()
        .enumerate()
        .filter_map(|(point, kept)| {
            let kept = kept.as_ref()?;
            let positions = match &kept.entry.record.positions {
                Some(relaxed) => relaxed.iter().map(|&p| Vector3::from(p)).collect(),
                None => scan.positions[point].clone(),
            };
            let gradient = kept.entry.record.gradient.as_ref();
            Some(PointResult {
                point,
                index: scan.grid.index(point),
                values: scan.coordinates[point].clone(),
                slopes: gradient.map(|g| reported_slopes(&spec.sweeps, &positions, g)),
                positions,
                record: kept.entry.record.clone(),
                second_energy: kept.second_energy,
                findings: kinds_at(point, &findings),
            })
        })
        .collect();
    let further: Vec<f64> = points
        .iter()
        .filter(|p| p.point != scan.start && p.record.energy.is_some())
        .map(|p| p.record.fock_builds as f64)
        .collect();
    LevelResult {
        name: level.name.clone(),
        method: level.method.name().to_lowercase(),
        basis: level.basis_name.clone(),
        basis_functions: functions,
        electrons: alpha + beta,
        points,
        findings,
        likeness: likeness.to_vec(),
        limit: None,
        onset: None,
        analysis: LevelAnalysis::default(),
        mean_fock_builds: (!further.is_empty())
            .then(|| further.iter().sum::<f64>() / further.len() as f64),
    }
}

/// dE/dq of every sweep in hartree per ångström or degree.
fn reported_slopes(
    sweeps: &[Sweep],
    positions: &[Vector3<f64>],
    gradient: &[[f64; 3]],
) -> Vec<f64> {
    slopes(sweeps, positions, gradient)
        .iter()
        .zip(sweeps)
        .map(|(slope, sweep)| slope / sweep.motion.coordinate.to_reported(1.0))
        .collect()
}

/// Kinds of the findings that concern a point, each once.
fn kinds_at(point: usize, findings: &[Finding]) -> Vec<FindingKind> {
    let mut kinds: Vec<FindingKind> = findings
        .iter()
        .filter(|f| f.points.contains(&point))
        .map(|f| f.kind)
        .collect();
    kinds.sort_unstable();
    kinds.dedup();
    kinds
}
