//! Spreads lower solutions: where an evaluation found a lower energy than another at the same point, the point's
//! neighbours are computed again from the lower solution, until nothing changes.

use super::evaluate::{Evaluator, Known, Left};
use super::event::{Entry, Event};
use super::kept::SAME_SOLUTION;
use super::runner::ScanError;
use super::walk::Pass;
use crate::surface::Surface;
use std::collections::{BTreeMap, BTreeSet};
use std::sync::atomic::{AtomicBool, Ordering};

/// Adds evaluations to `entries`, and what they left to `left`, until every point holds the lowest solution that its
/// neighbours lead to.
pub(super) fn heal<S: Surface>(
    evaluator: &Evaluator<'_, S>,
    entries: &mut Vec<Entry>,
    left: &mut BTreeMap<usize, Left<S::Seed>>,
    stop: &AtomicBool,
    observer: &mut dyn FnMut(&Event),
) -> Result<(), ScanError> {
    let grid = &evaluator.scan.grid;
    // For each point with a solution its lowest energy and the evaluation that found it.
    let mut best: BTreeMap<usize, (f64, usize)> = BTreeMap::new();
    let mut disputed = BTreeSet::new();
    for entry in entries.iter() {
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
            .and_then(|&(_, order)| left.get(&order))
            .cloned()
        else {
            continue;
        };
        for neighbour in grid.neighbours(point) {
            // Where nothing converges the lower solution may still go on beyond.
            let mut target = Some((point, neighbour));
            while let Some((from, here)) = target.take() {
                if stop.load(Ordering::Relaxed) {
                    let finished = entries.len();
                    return Err(ScanError::Interrupted {
                        finished,
                        planned: finished + 1,
                    });
                }
                observer(&Event::Extended { added: 1 });
                let order = entries.len();
                let before = best.get(&here).map(|&(energy, _)| energy);
                let known = [Known {
                    point,
                    left: &source,
                }];
                let row = grid.index(here)[0];
                let (entry, found) = evaluator
                    .evaluate(here, Pass::Heal, row, &known, before, order)
                    .map_err(|source| ScanError::at(here, source))?;
                observer(&Event::Evaluated(Box::new(entry.clone())));
                entries.push(entry);
                let Some(found) = found else {
                    target = grid
                        .beyond(from, here)
                        .filter(|_| from == point)
                        .map(|next| (here, next));
                    continue;
                };
                if before.is_none_or(|energy| found.energy < energy - SAME_SOLUTION) {
                    best.insert(here, (found.energy, order));
                    disputed.insert(here);
                }
                left.insert(order, found);
            }
        }
    }
    Ok(())
}
