//! The figures that show the electronic state along a curve: the audit, and what the density says.

use super::figures::axis;
use crate::job::{JobResult, LevelResult, PointResult};
use crate::plot::{AuditFigure, AuditLevel, Axis, DensityFigure, DensityTrace};
use crate::scan::FindingKind;
use crate::surface::PointRecord;

/// ⟨S²⟩, gap, overlap with the neighbour, stability and Fock builds over the sweep (along the walk of a surface).
pub(super) fn audit(result: &JobResult) -> AuditFigure {
    let curve = result.sweeps.len() == 1;
    AuditFigure {
        title: format!("{}: audit", result.title),
        notes: Vec::new(),
        sweep: if curve {
            axis(result, 0)
        } else {
            Axis::new("Number of the point", "")
        },
        energy_unit: "hartree".to_owned(),
        levels: result
            .levels
            .iter()
            .map(|level| audit_level(level, curve))
            .collect(),
    }
}

fn audit_level(level: &LevelResult, curve: bool) -> AuditLevel {
    let points = &level.points;
    let of = |value: &dyn Fn(&PointRecord) -> Option<f64>| -> Vec<Option<f64>> {
        points
            .iter()
            .map(|p| p.record.energy.and_then(|_| value(&p.record)))
            .collect()
    };
    let where_is = |test: &dyn Fn(&PointResult) -> bool| -> Vec<usize> {
        (0..points.len()).filter(|&k| test(&points[k])).collect()
    };
    AuditLevel {
        name: level.name.clone(),
        x: points
            .iter()
            .map(|p| if curve { p.values[0] } else { p.point as f64 })
            .collect(),
        s_squared: of(&|r| Some(r.s_squared)),
        s_squared_pure: None,
        gap: of(&|r| Some(r.lumo? - r.homo?)),
        overlap: points
            .iter()
            .map(|p| overlap_with_previous(level, p.point))
            .collect(),
        stability: of(&|r| {
            let stability = r.stability?;
            Some(
                stability
                    .triplet
                    .map_or(stability.internal, |t| t.min(stability.internal)),
            )
        }),
        fock_builds: of(&|r| Some(r.fock_builds as f64)),
        failed: where_is(&|p| p.record.energy.is_none()),
        breaks: breaks(level),
        findings: where_is(&|p| {
            p.record.energy.is_some() && p.findings.iter().any(|f| f.is_ringed())
        }),
    }
}

/// The smaller cosine, over the spins, between the occupied spaces of a point and the one before it.
fn overlap_with_previous(level: &LevelResult, point: usize) -> Option<f64> {
    let before = point.checked_sub(1)?;
    let pair = level
        .likeness
        .iter()
        .find(|l| l.points == [before, point])?;
    Some(pair.cosines[0].min(pair.cosines[1]))
}

/// Places in the list of points that no line joins to the point before: the state changes between.
pub(super) fn breaks(level: &LevelResult) -> Vec<usize> {
    let jumps = level
        .findings
        .iter()
        .filter(|f| f.kind == FindingKind::StateJump);
    let later: Vec<usize> = jumps
        .filter_map(|f| f.points.iter().max().copied())
        .collect();
    (0..level.points.len())
        .filter(|&k| later.contains(&level.points[k].point))
        .collect()
}

/// Charges, spin populations and bond orders of one level over the sweep.
pub(super) fn density(result: &JobResult, level: &LevelResult) -> DensityFigure {
    let of_atoms = |values: &dyn Fn(&PointRecord) -> &[f64]| -> Vec<DensityTrace> {
        (0..result.labels.len())
            .map(|atom| DensityTrace {
                name: result.labels[atom].clone(),
                points: trace(level, &|r| values(r).get(atom).copied()),
            })
            .collect()
    };
    let polarised = level
        .points
        .iter()
        .any(|p| p.record.spins_loewdin.iter().any(|s| s.abs() > 1e-6));
    DensityFigure {
        title: format!("{}: density", result.title),
        notes: vec![level.name.clone()],
        sweep: axis(result, 0),
        charge_axis: Axis::new("Löwdin charge", "e"),
        charges: of_atoms(&|r| &r.charges_loewdin),
        spin_axis: Axis::new("Löwdin spin population", ""),
        spin_populations: if polarised {
            of_atoms(&|r| &r.spins_loewdin)
        } else {
            Vec::new()
        },
        bond_order_axis: Axis::new("Mayer bond order", ""),
        bond_orders: bond_orders(result, level),
        failed: level
            .points
            .iter()
            .filter(|p| p.record.energy.is_none())
            .map(|p| p.values[0])
            .collect(),
    }
}

/// A bond order below this everywhere is not drawn.
const NO_BOND: f64 = 0.1;

fn bond_orders(result: &JobResult, level: &LevelResult) -> Vec<DensityTrace> {
    let atoms = result.labels.len();
    let mut traces = Vec::new();
    for i in 0..atoms {
        for j in i + 1..atoms {
            let order = |r: &PointRecord| {
                r.bond_orders
                    .iter()
                    .find(|&&(a, b, _)| (a, b) == (i, j))
                    .map(|&(_, _, order)| order)
            };
            let points = trace(level, &order);
            if points
                .iter()
                .any(|(_, value)| value.is_some_and(|v| v > NO_BOND))
            {
                let name = format!("{}–{}", result.labels[i], result.labels[j]);
                traces.push(DensityTrace { name, points });
            }
        }
    }
    traces
}

fn trace(
    level: &LevelResult,
    value: &dyn Fn(&PointRecord) -> Option<f64>,
) -> Vec<(f64, Option<f64>)> {
    let point = |p: &PointResult| (p.values[0], p.record.energy.and_then(|_| value(&p.record)));
    level.points.iter().map(point).collect()
}
