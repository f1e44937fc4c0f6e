//! Spreads lower solutions: where an evaluation found a lower energy than another at the same point, the point's
//! neighbours are computed again from the lower solution, until nothing changes.

use super::added::Added;
use super::evaluate::Known;
use super::kept::SAME_SOLUTION;
use super::runner::ScanError;
use super::walk::Pass;
use crate::surface::Surface;
use std::collections::{BTreeMap, BTreeSet};

/// Adds evaluations until every point holds the lowest solution that its neighbours lead to.
pub(super) fn heal<S: Surface>(added: &mut Added<'_, '_, S>) -> Result<(), ScanError> {
    let grid = &added.evaluator.scan.grid;
    // For each point with a solution its lowest energy and the evaluation that found it.
    let mut best: BTreeMap<usize, (f64, usize)> = BTreeMap::new();
    let mut disputed = BTreeSet::new();
    for entry in added.entries.iter() {
        let Some(energy) = entry.record.energy else {
            continue;
        };
        let known = best.entry(entry.point).or_insert((energy, entry.order));
        let differs = (energy - known.0).abs() > SAME_SOLUTION;
        // A fresh start that ends higher leaves nothing to spread.
        if differs && (entry.pass != Pass::Probe || energy < known.0) {
            disputed.insert(entry.point);
        }
        if energy < known.0 - SAME_SOLUTION {
            *known = (energy, entry.order);
        }
    }
    // Points without any solution may converge from a neighbour that has one.
    for point in (0..grid.len()).filter(|p| !best.contains_key(p)) {
        disputed.extend(
            grid.neighbours(point)
                .into_iter()
                .filter(|n| best.contains_key(n)),
        );
    }
    while let Some(point) = disputed.pop_first() {
        let Some(source) = best
            .get(&point)
            .and_then(|&(_, order)| added.left.get(&order))
            .cloned()
        else {
            continue;
        };
        for neighbour in grid.neighbours(point) {
            // Where nothing converges the lower solution may still go on beyond.
            let mut target = Some((point, neighbour));
            while let Some((from, here)) = target.take() {
                let before = best.get(&here).map(|&(energy, _)| energy);
                let known = [Known {
                    point,
                    left: &source,
                }];
                let Some((energy, order)) = added.evaluate(here, Pass::Heal, &known, before)?
                else {
                    target = grid
                        .beyond(from, here)
                        .filter(|_| from == point)
                        .map(|next| (here, next));
                    continue;
                };
                if before.is_none_or(|before| energy < before - SAME_SOLUTION) {
                    best.insert(here, (energy, order));
                    disputed.insert(here);
                }
            }
        }
    }
    Ok(())
}
