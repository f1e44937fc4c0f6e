//! Further starts beside a walk. From free atoms at its ends, where the molecule has fallen apart: the state that belongs
//! there may be reached neither along the walk nor from atomic densities, because every state on the way is stable. And
//! from atomic densities at its beginning, where the walk itself set out from another first density.

use super::added::Added;
use super::evaluate::{Known, Left};
use super::runner::ScanError;
use super::walk::{Pass, ends};
use crate::surface::Surface;

/// One further start: where, and from which free atoms, or from atomic densities.
struct Further<T> {
    point: usize,
    atoms: Option<Left<T>>,
}

/// Adds these evaluations to what is known.
pub(super) fn probe<S: Surface>(added: &mut Added<'_, '_, S>) -> Result<(), ScanError> {
    let evaluator = added.evaluator;
    let grid = &evaluator.scan.grid;
    let mut further: Vec<Further<S::Seed>> = Vec::new();
    if evaluator.has_plain_start() && !grid.shape().is_empty() {
        further.push(Further {
            point: evaluator.scan.start,
            atoms: None,
        });
    }
    for (point, _) in ends(grid) {
        let starts = evaluator.apart(point).into_iter();
        further.extend(starts.map(|seed| Further {
            point,
            atoms: Some(Left::untested(seed)),
        }));
    }
    for Further { point, atoms } in further {
        let known: Vec<Known<'_, S::Seed>> =
            atoms.iter().map(|left| Known { point, left }).collect();
        added.evaluate(point, Pass::Probe, &known, None)?;
    }
    Ok(())
}
