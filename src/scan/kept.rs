//! Which of the solutions found at a point is kept.

use super::event::Entry;
use super::settings::StateChoice;
use super::walk::Pass;

/// Two energies at one point that differ by more than this (hartree) belong to different solutions.
pub const SAME_SOLUTION: f64 = 1e-6;

/// The kept solution of a point, and the lowest of the others.
#[derive(Debug, Clone, Copy)]
pub struct Kept<'a> {
    /// The evaluation that stands for the point: of the lowest solution, or of the followed one. If nothing
    /// converged here, one that did not.
    pub entry: &'a Entry,
    /// Energy of another solution that was found here, hartree.
    pub second_energy: Option<f64>,
}

/// The kept solutions of `points` points; none where nothing was evaluated yet.
///
/// Evaluations that agree within [`SAME_SOLUTION`] are one solution, for which the earliest in the plan stands, so
/// that a second pass that finds nothing new changes nothing.
#[must_use]
pub fn keep<'a>(
    entries: impl IntoIterator<Item = &'a Entry>,
    points: usize,
    state: StateChoice,
) -> Vec<Option<Kept<'a>>> {
    let mut here: Vec<Vec<&Entry>> = vec![Vec::new(); points];
    for entry in entries {
        if let Some(list) = here.get_mut(entry.point) {
            list.push(entry);
        }
    }
    here.into_iter()
        .map(|mut list| {
            list.sort_by_key(|e| e.order);
            match state {
                StateChoice::Lowest => lowest(&list),
                StateChoice::Follow => followed(&list),
            }
        })
        .collect()
}

fn lowest<'a>(list: &[&'a Entry]) -> Option<Kept<'a>> {
    let least = list
        .iter()
        .filter_map(|e| e.record.energy)
        .min_by(f64::total_cmp);
    let Some(least) = least else {
        return list.first().map(|&entry| Kept {
            entry,
            second_energy: None,
        });
    };
    let entry = list.iter().find(|e| {
        e.record
            .energy
            .is_some_and(|energy| energy <= least + SAME_SOLUTION)
    })?;
    Some(Kept {
        entry,
        second_energy: other(list, least),
    })
}

/// The followed state is the one of the way out, whatever lower one was met.
fn followed<'a>(list: &[&'a Entry]) -> Option<Kept<'a>> {
    let entry = list.iter().find(|e| e.pass == Pass::Out)?;
    let second_energy = entry.record.energy.and_then(|energy| other(list, energy));
    Some(Kept {
        entry,
        second_energy,
    })
}

/// Lowest energy among solutions other than that of energy `kept`.
fn other(list: &[&Entry], kept: f64) -> Option<f64> {
    list.iter()
        // That a fresh start ends higher than the walk says nothing about the walk.
        .filter(|e| e.pass != Pass::Probe)
        .filter_map(|e| e.record.energy)
        .filter(|e| (e - kept).abs() > SAME_SOLUTION)
        .min_by(f64::total_cmp)
}
