//! How a bond ends: what the density says of the pieces at the far end of a sweep, in a sentence.

use super::assemble::{LevelResult, PointResult};
use super::dissociation::Limit;
use crate::scan::{Finding, FindingKind};
use crate::scf::Method;
use crate::units::{KJ_PER_MOL_PER_HARTREE, short};

/// A charge of a piece below this (e) is none worth the name.
const NEUTRAL: f64 = 0.05;
/// An energy above the parts (hartree) from which a curve is said not to reach them.
const OFF_LIMIT: f64 = 5e-3;
/// Distance (Å) from which a bond may be expected to be broken (common practice: three times a usual bond length).
const FAR_ANGSTROM: f64 = 2.5;

/// Charge and spin of a piece at one point.
#[derive(Debug, Clone, PartialEq)]
pub struct Piece {
    /// Labels of its atoms.
    pub labels: Vec<String>,
    /// Sum of their Löwdin charges, e.
    pub charge: f64,
    /// Sum of their Löwdin spin populations.
    pub spin: f64,
}

/// The pieces of a limit at a point.
#[must_use]
pub fn pieces(limit: &Limit, point: &PointResult, labels: &[String]) -> Vec<Piece> {
    let sum = |values: &[f64], atoms: &[usize]| atoms.iter().filter_map(|&a| values.get(a)).sum();
    limit
        .parts
        .iter()
        .map(|part| Piece {
            labels: part.atoms.iter().map(|&a| labels[a].clone()).collect(),
            charge: sum(&point.record.charges_loewdin, &part.atoms),
            spin: sum(&point.record.spins_loewdin, &part.atoms),
        })
        .collect()
}

/// The point farthest out that has an energy.
fn farthest(level: &LevelResult) -> Option<&PointResult> {
    level
        .points
        .iter()
        .filter(|p| p.record.energy.is_some())
        .max_by(|a, b| {
            a.values
                .first()
                .partial_cmp(&b.values.first())
                .unwrap_or(std::cmp::Ordering::Equal)
        })
}

/// A finding where one determinant of the molecule's spin cannot become the parts in their lowest states.
/// It belongs to the point farthest out.
#[must_use]
pub fn unreachable(level: &LevelResult, labels: &[String]) -> Option<Finding> {
    let limit = level.limit.as_ref()?;
    let below = limit.energy? - limit.unreachable?;
    let far = farthest(level)?;
    let parts: Vec<String> = limit
        .parts
        .iter()
        .map(|p| {
            let names: Vec<&str> = p.atoms.iter().map(|&a| labels[a].as_str()).collect();
            format!("{} with multiplicity {}", names.join("+"), p.multiplicity)
        })
        .collect();
    Some(Finding {
        kind: FindingKind::UnreachableParts,
        points: vec![far.point],
        text: format!(
            "the parts in their lowest states lie {:.0} kJ/mol below those that one determinant of this spin can reach \
             ({}): their spin projections do not add up to the molecule's. The curve cannot end there, and its \
             dissociation energy is that of the higher parts",
            below * KJ_PER_MOL_PER_HARTREE,
            parts.join("; ")
        ),
    })
}

/// What the end of a stretched bond looks like at a level, and what its dissociation energy is worth. None if the sweep
/// does not reach far enough to tell.
#[must_use]
pub fn sentence(level: &LevelResult, labels: &[String]) -> Option<String> {
    let limit = level.limit.as_ref()?;
    let energy_of_parts = limit.energy?;
    let far = farthest(level)?;
    let distance = *far.values.first()?;
    if distance < FAR_ANGSTROM {
        return None;
    }
    let above = far.record.energy? - energy_of_parts;
    let pieces = pieces(limit, far, labels);
    let described: Vec<String> = pieces
        .iter()
        .map(|p| {
            format!(
                "{} {:+.2} e, spin {:+.2}",
                p.labels.join("+"),
                p.charge,
                p.spin
            )
        })
        .collect();
    let open = limit.parts.iter().any(|p| p.multiplicity > 1);
    let expected: Vec<i32> = limit.parts.iter().map(|p| p.charge).collect();
    let spurious = pieces
        .iter()
        .zip(&expected)
        .any(|(p, &charge)| (p.charge - f64::from(charge)).abs() > NEUTRAL);
    let mut text = format!(
        "at {} Å the pieces are {} (Löwdin populations). ",
        short(distance),
        described.join("; ")
    );
    let excess = format!(
        "{:.0} kJ/mol {} the separated parts",
        above.abs() * KJ_PER_MOL_PER_HARTREE,
        if above < 0.0 { "below" } else { "above" }
    );
    if level.method == Method::Rhf.name().to_lowercase() && open {
        text += &format!(
            "Restricted orbitals cannot separate this bond: the energy there lies {excess}{}. ",
            if spurious {
                " and the charges are spurious"
            } else {
                ""
            }
        );
    } else if above.abs() > OFF_LIMIT {
        text += &format!("The energy there still lies {excess}");
        text += if above < 0.0 {
            ": either the pieces still attract each other, or the parts have lower states than those computed. "
        } else {
            ". "
        };
    }
    if limit.unreachable.is_some() {
        text += "The parts' lowest states cannot be reached by one determinant of this spin projection; the limit \
                 is that of the lowest states that can. ";
    }
    text += "A single-determinant dissociation energy can be wrong by half, or of the wrong sign; it does not replace \
             measured data.";
    Some(text)
}
