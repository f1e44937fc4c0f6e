//! Further starts beside a walk. From free atoms at its ends, where the molecule has fallen apart: the state that belongs
//! there may be reached neither along the walk nor from atomic densities, because every state on the way is stable. And
//! from atomic densities at its beginning, where the walk itself set out from another first density.

use super::evaluate::{Evaluator, Known, Left};
use super::event::{Entry, Event};
use super::runner::ScanError;
use super::walk::{Pass, ends};
use crate::surface::Surface;
use std::collections::BTreeMap;
use std::sync::atomic::{AtomicBool, Ordering};

/// One further start: where, and from which free atoms, or from atomic densities.
struct Further<T> {
    point: usize,
    row: usize,
    atoms: Option<Left<T>>,
}

/// Adds these evaluations to `entries`, and what they left to `left`.
pub(super) fn probe<S: Surface>(
    evaluator: &Evaluator<'_, S>,
    entries: &mut Vec<Entry>,
    left: &mut BTreeMap<usize, Left<S::Seed>>,
    stop: &AtomicBool,
    observer: &mut dyn FnMut(&Event),
) -> Result<(), ScanError> {
    let grid = &evaluator.scan.grid;
    let mut further: Vec<Further<S::Seed>> = Vec::new();
    if evaluator.has_plain_start() && !grid.shape().is_empty() {
        let start = evaluator.scan.start;
        further.push(Further {
            point: start,
            row: grid.index(start)[0],
            atoms: None,
        });
    }
    for (point, row) in ends(grid) {
        for seed in evaluator.apart(point) {
            further.push(Further {
                point,
                row,
                atoms: Some(Left::untested(seed)),
            });
        }
    }
    for Further { point, row, atoms } in further {
        if stop.load(Ordering::Relaxed) {
            let finished = entries.len();
            return Err(ScanError::Interrupted {
                finished,
                planned: finished + 1,
            });
        }
        observer(&Event::Extended { added: 1 });
        let order = entries.len();
        let known: Vec<Known<'_, S::Seed>> =
            atoms.iter().map(|left| Known { point, left }).collect();
        let (mut entry, found) = evaluator
            .evaluate(point, Pass::Probe, row, &known, None, order)
            .map_err(|source| ScanError::at(point, source))?;
        // Free atoms are no point of the grid.
        entry.seeded_from.clear();
        entry.likeness = None;
        observer(&Event::Evaluated(Box::new(entry.clone())));
        entries.push(entry);
        if let Some(found) = found {
            left.insert(order, found);
        }
    }
    Ok(())
}
