//! Evaluations that become necessary after the walk, one after another.

use super::evaluate::{Evaluator, Known, Left};
use super::event::{Entry, Event};
use super::runner::ScanError;
use super::walk::Pass;
use crate::surface::Surface;
use std::collections::BTreeMap;
use std::sync::atomic::{AtomicBool, Ordering};

/// What a walk has found so far, and how more is added to it.
pub(super) struct Added<'e, 's, S: Surface> {
    pub(super) evaluator: &'e Evaluator<'s, S>,
    /// All evaluations, each at the place of its order.
    pub(super) entries: &'e mut Vec<Entry>,
    /// What they left, by their order.
    pub(super) left: &'e mut BTreeMap<usize, Left<S::Seed>>,
    pub(super) stop: &'e AtomicBool,
    pub(super) observer: &'e mut dyn FnMut(&Event),
}

impl<S: Surface> Added<'_, '_, S> {
    /// Evaluates a point from the solutions in `known` (as [`Evaluator::evaluate`]); gives energy and order of a converged
    /// solution.
    pub(super) fn evaluate(
        &mut self,
        point: usize,
        pass: Pass,
        known: &[Known<'_, S::Seed>],
        before: Option<f64>,
    ) -> Result<Option<(f64, usize)>, ScanError> {
        let order = self.entries.len();
        if self.stop.load(Ordering::Relaxed) {
            return Err(ScanError::Interrupted {
                finished: order,
                planned: order + 1,
            });
        }
        (self.observer)(&Event::Extended { added: 1 });
        let row = self.evaluator.scan.grid.index(point)[0];
        let (mut entry, found) = self
            .evaluator
            .evaluate(point, pass, row, known, before, order)
            .map_err(|source| ScanError::at(point, source))?;
        if pass == Pass::Probe {
            // Free atoms are no point of the grid.
            entry.seeded_from.clear();
            entry.likeness = None;
        }
        (self.observer)(&Event::Evaluated(Box::new(entry.clone())));
        self.entries.push(entry);
        Ok(found.map(|found| {
            let energy = found.energy;
            self.left.insert(order, found);
            (energy, order)
        }))
    }
}
