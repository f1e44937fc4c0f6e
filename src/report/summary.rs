//! `summary.json`: everything a run has to say, for programs.

use super::csv::dipole_debye;
use super::fitted;
use crate::job::{Cost, JobResult, LevelResult, PointResult};
use crate::job::{LimitPart, pieces};
use crate::scan::{Finding, FindingKind};
use crate::units::ANGSTROM_PER_BOHR;
use serde::Serialize;

#[derive(Serialize)]
struct Summary<'a> {
    thalweg: &'static str,
    title: &'a str,
    sweeps: Vec<Sweep<'a>>,
    levels: Vec<Level<'a>>,
    cost: &'a Cost,
}

#[derive(Serialize)]
struct Sweep<'a> {
    kind: &'a str,
    atoms: &'a [String],
    unit: &'a str,
    values: &'a [f64],
}

#[derive(Serialize)]
struct Level<'a> {
    name: &'a str,
    method: &'a str,
    basis: &'a str,
    basis_functions: usize,
    electrons: usize,
    mean_fock_builds_per_further_point: Option<f64>,
    points: Vec<Point<'a>>,
    dissociation: Option<Dissociation<'a>>,
    onset_of_instability: Option<Onset<'a>>,
    minima: Vec<fitted::Minimum<'a>>,
    barriers: Vec<fitted::Minimum<'a>>,
    fits: Vec<fitted::FitEntry<'a>>,
    force_field: Option<fitted::ForceFieldEntry<'a>>,
    valleys: Vec<fitted::ValleyEntry>,
    spectroscopy: Option<fitted::SpectroscopyEntry<'a>>,
    notes: &'a [String],
    findings: &'a [Finding],
}

#[derive(Serialize)]
struct Dissociation<'a> {
    parts: Vec<Part<'a>>,
    proposed: bool,
    limit_hartree: Option<f64>,
    counterpoise_hartree: Option<f64>,
    unreachable_hartree: Option<f64>,
    de_hartree: Option<f64>,
    d0_hartree: Option<f64>,
    text: Option<String>,
}

#[derive(Serialize)]
struct Part<'a> {
    atoms: Vec<&'a str>,
    charge: i32,
    multiplicity: u32,
    method: &'static str,
    energy_hartree: Option<f64>,
    s_squared: f64,
}

#[derive(Serialize)]
struct Onset<'a> {
    value: f64,
    unit: &'a str,
}

#[derive(Serialize)]
struct Point<'a> {
    index: &'a [usize],
    values: &'a [f64],
    geometry_angstrom: Vec<(&'a str, f64, f64, f64)>,
    energy_hartree: Option<f64>,
    /// dE/dq of every sweep, hartree per ångström or degree.
    #[serde(skip_serializing_if = "Option::is_none")]
    slopes_hartree_per_unit: Option<&'a [f64]>,
    converged: bool,
    fock_builds: usize,
    s_squared: Option<f64>,
    homo_hartree: Option<f64>,
    lumo_hartree: Option<f64>,
    dipole_debye: Option<f64>,
    charges_mulliken: Option<&'a [f64]>,
    charges_loewdin: Option<&'a [f64]>,
    spins_loewdin: Option<&'a [f64]>,
    bond_orders: Option<Vec<(&'a str, &'a str, f64)>>,
    electrons: Option<f64>,
    findings: &'a [FindingKind],
}

/// The summary as indented JSON.
#[must_use]
pub fn render(result: &JobResult) -> String {
    let summary = Summary {
        thalweg: env!("CARGO_PKG_VERSION"),
        title: &result.title,
        sweeps: result
            .sweeps
            .iter()
            .map(|s| Sweep {
                kind: s.kind,
                atoms: &s.atoms,
                unit: s.unit,
                values: &s.values,
            })
            .collect(),
        levels: result.levels.iter().map(|l| level(result, l)).collect(),
        cost: &result.cost,
    };
    // Plain structs of numbers and strings: serialisation has no way to fail.
    serde_json::to_string_pretty(&summary).unwrap_or_default() + "\n"
}

fn level<'a>(result: &'a JobResult, level: &'a LevelResult) -> Level<'a> {
    Level {
        name: &level.name,
        method: &level.method,
        basis: &level.basis,
        basis_functions: level.basis_functions,
        electrons: level.electrons,
        mean_fock_builds_per_further_point: level.mean_fock_builds,
        points: level.points.iter().map(|p| point(result, p)).collect(),
        dissociation: level.limit.as_ref().map(|limit| Dissociation {
            parts: limit.parts.iter().map(|p| part(result, p)).collect(),
            proposed: limit.proposed,
            limit_hartree: limit.energy,
            counterpoise_hartree: limit.counterpoise,
            unreachable_hartree: limit.unreachable,
            de_hartree: level.dissociation_energy(),
            d0_hartree: level.dissociation_energy_from_zero_point(),
            text: pieces::sentence(level, &result.labels),
        }),
        onset_of_instability: level
            .onset
            .zip(result.sweeps.first())
            .map(|(onset, sweep)| Onset {
                value: onset.value,
                unit: sweep.unit,
            }),
        minima: fitted::minima(result, &level.analysis.minima),
        barriers: fitted::minima(result, &level.analysis.barriers),
        fits: fitted::fits(result, &level.analysis),
        force_field: level.analysis.force_field.as_ref().map(fitted::force_field),
        valleys: fitted::valleys(&level.analysis.valleys),
        spectroscopy: level
            .analysis
            .spectroscopy
            .as_ref()
            .map(fitted::spectroscopy),
        notes: &level.analysis.notes,
        findings: &level.findings,
    }
}

fn part<'a>(result: &'a JobResult, part: &LimitPart) -> Part<'a> {
    Part {
        atoms: part.atoms.iter().map(|&a| &*result.labels[a]).collect(),
        charge: part.charge,
        multiplicity: part.multiplicity,
        method: part.method.name(),
        energy_hartree: part.energy,
        s_squared: part.s_squared,
    }
}

fn point<'a>(result: &'a JobResult, point: &'a PointResult) -> Point<'a> {
    let record = &point.record;
    let converged = record.energy.is_some();
    Point {
        index: &point.index,
        values: &point.values,
        geometry_angstrom: result
            .symbols
            .iter()
            .zip(&point.positions)
            .map(|(&symbol, p)| {
                let [x, y, z] = [p.x, p.y, p.z].map(|v| v * ANGSTROM_PER_BOHR);
                (symbol, x, y, z)
            })
            .collect(),
        energy_hartree: record.energy,
        slopes_hartree_per_unit: point.slopes.as_deref().filter(|_| converged),
        converged,
        fock_builds: record.fock_builds,
        s_squared: converged.then_some(record.s_squared),
        homo_hartree: record.homo.filter(|_| converged),
        lumo_hartree: record.lumo.filter(|_| converged),
        dipole_debye: converged.then(|| dipole_debye(record.dipole)),
        charges_mulliken: converged.then_some(&record.charges_mulliken),
        charges_loewdin: converged.then_some(&record.charges_loewdin),
        spins_loewdin: converged.then_some(&record.spins_loewdin),
        bond_orders: converged.then(|| {
            record
                .bond_orders
                .iter()
                .map(|&(i, j, order)| (&*result.labels[i], &*result.labels[j], order))
                .collect()
        }),
        electrons: converged.then_some(record.electrons),
        findings: &point.findings,
    }
}
