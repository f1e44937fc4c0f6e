//! Spreads lower solutions: where an evaluation found a lower energy than another at the same point, the point's
//! neighbours are computed again from the lower solution, until nothing changes.

use super::event::{Entry, Event};
use super::runner::{Runner, ScanError};
use super::walk::Pass;
use crate::surface::Surface;
use std::collections::{BTreeMap, BTreeSet};

/// Two energies at one point that differ by more than this (hartree) belong to different solutions.
pub const SAME_SOLUTION: f64 = 1e-6;

/// The lowest solution known at a point, and what it left as a seed.
struct Best<T> {
    energy: f64,
    seed: Option<T>,
}

/// Adds evaluations to `entries` until every point holds the lowest solution that its neighbours lead to.
pub(super) fn heal<S: Surface>(
    runner: &Runner<'_, S>,
    entries: &mut Vec<Entry>,
    observer: &mut dyn FnMut(&Event),
) -> Result<(), ScanError> {
    let mut best: BTreeMap<usize, Best<S::Seed>> = BTreeMap::new();
    let mut disputed = BTreeSet::new();
    for entry in entries.iter() {
        let Some(energy) = entry.record.energy else {
            continue;
        };
        let seed = || runner.seed(entry.order).cloned();
        match best.get_mut(&entry.point) {
            None => {
                best.insert(
                    entry.point,
                    Best {
                        energy,
                        seed: seed(),
                    },
                );
            }
            Some(known) => {
                if (energy - known.energy).abs() > SAME_SOLUTION {
                    disputed.insert(entry.point);
                }
                if energy < known.energy {
                    *known = Best {
                        energy,
                        seed: seed(),
                    };
                }
            }
        }
    }
    // Points without any solution may converge from a neighbour that has one.
    let grid = &runner.scan.grid;
    for point in 0..grid.len() {
        if !best.contains_key(&point) {
            disputed.extend(
                grid.neighbours(point)
                    .into_iter()
                    .filter(|n| best.contains_key(n)),
            );
        }
    }
    while let Some(point) = disputed.pop_first() {
        let Some(source) = best.get(&point).and_then(|b| b.seed.clone()) else {
            continue;
        };
        for neighbour in grid.neighbours(point) {
            observer(&Event::Extended { added: 1 });
            let order = entries.len();
            let row = grid.index(neighbour)[0];
            let (entry, seed) = runner
                .evaluate(neighbour, Pass::Heal, row, &[(point, &source)], order)
                .map_err(|source| ScanError::Point {
                    point: neighbour,
                    source,
                })?;
            observer(&Event::Evaluated(Box::new(entry.clone())));
            let energy = entry.record.energy;
            entries.push(entry);
            let Some(energy) = energy else { continue };
            let lower = best
                .get(&neighbour)
                .is_none_or(|b| energy < b.energy - SAME_SOLUTION);
            if lower {
                best.insert(neighbour, Best { energy, seed });
                disputed.insert(neighbour);
            }
        }
    }
    Ok(())
}
