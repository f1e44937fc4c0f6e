//! Starts from free atoms at the ends of a walk, where the molecule has fallen apart: the state that belongs there may be
//! reached neither along the walk nor from atomic densities, because every state on the way is stable.

use super::evaluate::{Evaluator, Known, Left};
use super::event::{Entry, Event};
use super::runner::ScanError;
use super::walk::{Pass, ends};
use crate::surface::Surface;
use std::collections::BTreeMap;
use std::sync::atomic::{AtomicBool, Ordering};

/// Adds these evaluations to `entries`, and what they left to `left`.
pub(super) fn probe<S: Surface>(
    evaluator: &Evaluator<'_, S>,
    entries: &mut Vec<Entry>,
    left: &mut BTreeMap<usize, Left<S::Seed>>,
    stop: &AtomicBool,
    observer: &mut dyn FnMut(&Event),
) -> Result<(), ScanError> {
    for (point, row) in ends(&evaluator.scan.grid) {
        let Some(seed) = evaluator.apart(point) else {
            continue;
        };
        if stop.load(Ordering::Relaxed) {
            let finished = entries.len();
            return Err(ScanError::Interrupted {
                finished,
                planned: finished + 1,
            });
        }
        observer(&Event::Extended { added: 1 });
        let order = entries.len();
        let atoms = Left::untested(seed);
        let known = [Known {
            point,
            left: &atoms,
        }];
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
