//! The order in which a grid is walked: which points each point is seeded from.
//!
//! A walk is a list of steps; each names the steps whose solutions it may start from, so that any step can
//! run as soon as those are done. The plan depends on the grid and the settings alone, never on
//! energies or threads, so that a run gives the same bits however it is scheduled.
//!
//! A curve is walked from its start outwards, in two arms. A surface has a spine along the first sweep
//! through the start, and from every point of the spine a row along the second sweep.

use super::grid::Grid;
use super::settings::SeedKind;
use serde::{Deserialize, Serialize};

/// Why a point is computed.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Pass {
    /// on the way out from the start
    Out,
    /// on the way back from the far end of an arm
    Back,
    /// at the far end of an arm without a seed: walks only find states that continue one another
    Probe,
    /// again, from a neighbour's lower solution
    Heal,
}

/// One evaluation of a walk.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Step {
    /// Point of the grid.
    pub point: usize,
    /// Why it is computed.
    pub pass: Pass,
    /// Steps it may start from, the nearest last; empty: a fresh start.
    pub history: Vec<usize>,
    /// Points with one value here differ in one swept coordinate only, so that they share most integrals.
    pub row: usize,
}

/// Points behind that an extrapolation may use.
const REACH: usize = 6;
/// Points behind that a carried density may fall back on, should the nearest not have converged.
const FALLBACK: usize = 3;

/// What a plan holds beside the way out.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Extras {
    /// The way back.
    pub back: bool,
    /// Fresh starts at the far ends of the arms.
    pub probes: bool,
}

/// Plans a walk over a grid from the point `start`. Where every point starts fresh there is nothing to add to the
/// way out.
#[must_use]
pub fn plan(grid: &Grid, start: usize, seed: SeedKind, extras: Extras) -> Vec<Step> {
    let index = grid.index(start);
    let mut planner = Planner {
        grid,
        seed,
        steps: Vec::new(),
        out: vec![None; grid.len()],
    };
    match *grid.shape() {
        [] => planner.push(0, Pass::Out, Vec::new(), 0),
        [n] => planner.line(n, index[0], |i| i, 0, &|_, _| Vec::new()),
        [rows, columns] => planner.surface(rows, columns, index[0], index[1]),
        _ => unreachable!("the spec allows two sweeps at most"),
    }
    if seed != SeedKind::Fresh {
        if extras.back {
            planner.back(&index);
        }
        if extras.probes {
            planner.probes(start);
        }
    }
    planner.steps
}

/// Both ends of a curve, or the corners of a surface: points and their rows.
pub(super) fn ends(grid: &Grid) -> Vec<(usize, usize)> {
    let ends = |n: usize| if n > 1 { vec![0, n - 1] } else { vec![0] };
    match *grid.shape() {
        [n] => ends(n).into_iter().map(|i| (i, 0)).collect(),
        [rows, columns] => ends(rows)
            .into_iter()
            .flat_map(|i| ends(columns).into_iter().map(move |j| (i * columns + j, i)))
            .collect(),
        _ => Vec::new(),
    }
}

struct Planner<'a> {
    grid: &'a Grid,
    seed: SeedKind,
    steps: Vec<Step>,
    /// For each point the step of the way out.
    out: Vec<Option<usize>>,
}

/// Names steps off a line that its point `i` may start from, given the steps planned so far.
type Beside<'a> = &'a dyn Fn(&[Option<usize>], usize) -> Vec<usize>;

impl Planner<'_> {
    fn push(&mut self, point: usize, pass: Pass, history: Vec<usize>, row: usize) {
        let history = if self.seed == SeedKind::Fresh {
            Vec::new()
        } else {
            history
        };
        if pass == Pass::Out {
            self.out[point] = Some(self.steps.len());
        }
        self.steps.push(Step {
            point,
            pass,
            history,
            row,
        });
    }

    fn reach(&self) -> usize {
        if self.seed == SeedKind::Extrapolated {
            REACH
        } else {
            FALLBACK
        }
    }

    /// A line of `n` points through `start`, both arms; `place` numbers its points, and `beside` names
    /// steps off the line that a point may use too. A start already planned is not planned again.
    fn line(
        &mut self,
        n: usize,
        start: usize,
        place: impl Fn(usize) -> usize,
        row: usize,
        beside: Beside<'_>,
    ) {
        let reach = self.reach();
        if self.out[place(start)].is_none() {
            self.push(place(start), Pass::Out, beside(&self.out, start), row);
        }
        for i in start + 1..n {
            let mut history = beside(&self.out, i);
            let first = start.max(i.saturating_sub(reach));
            history.extend((first..i).filter_map(|k| self.out[place(k)]));
            self.push(place(i), Pass::Out, history, row);
        }
        // The inner arm starts with what the outer arm has learnt near the start, where that helps.
        let head = if self.seed == SeedKind::Extrapolated {
            start + REACH - 1
        } else {
            start
        };
        for i in (0..start).rev() {
            let mut history = beside(&self.out, i);
            let last = (i + reach).min(head).min(n - 1);
            history.extend((i + 1..=last).rev().filter_map(|k| self.out[place(k)]));
            self.push(place(i), Pass::Out, history, row);
        }
    }

    fn surface(&mut self, rows: usize, columns: usize, row0: usize, column0: usize) {
        let at = |i: usize, j: usize| i * columns + j;
        self.line(rows, row0, |i| at(i, column0), rows, &|_, _| Vec::new());
        let outwards = (row0..rows).chain((0..row0).rev());
        for i in outwards {
            let inner: Vec<usize> = match i.cmp(&row0) {
                std::cmp::Ordering::Equal => Vec::new(),
                std::cmp::Ordering::Greater => (i.saturating_sub(2).max(row0)..i).collect(),
                std::cmp::Ordering::Less => (i + 1..=(i + 2).min(row0)).rev().collect(),
            };
            let extrapolate = self.seed == SeedKind::Extrapolated;
            let beside = move |out: &[Option<usize>], j: usize| -> Vec<usize> {
                if !extrapolate {
                    return Vec::new();
                }
                let columns_near = j.saturating_sub(2)..=(j + 2).min(columns - 1);
                inner
                    .iter()
                    .flat_map(|&k| columns_near.clone().map(move |l| at(k, l)))
                    .filter_map(|p| out[p])
                    .collect()
            };
            self.line(columns, column0, |j| at(i, j), i, &beside);
        }
    }

    /// Every arm again from its far end inwards, seeded by its own solutions; the first seed is the far end's.
    fn back(&mut self, start: &[usize]) {
        let shape = self.grid.shape().to_vec();
        let Some((&n, outer)) = shape.split_last() else {
            return;
        };
        let lines: usize = outer.iter().product();
        let middle = start[start.len() - 1];
        for line in 0..lines {
            let row = if outer.is_empty() { 0 } else { line };
            let up: Vec<usize> = (middle..n).rev().map(|j| line * n + j).collect();
            let down: Vec<usize> = (0..=middle).map(|j| line * n + j).collect();
            self.arm_back(&up, row);
            self.arm_back(&down, row);
        }
        if let [rows, columns] = *shape {
            let up: Vec<usize> = (start[0]..rows)
                .rev()
                .map(|i| i * columns + middle)
                .collect();
            let down: Vec<usize> = (0..=start[0]).map(|i| i * columns + middle).collect();
            self.arm_back(&up, rows);
            self.arm_back(&down, rows);
        }
    }

    /// A fresh start at both ends of a curve, or at the corners of a surface.
    fn probes(&mut self, start: usize) {
        for (point, row) in ends(self.grid) {
            if point != start {
                self.push(point, Pass::Probe, Vec::new(), row);
            }
        }
    }

    fn arm_back(&mut self, arm: &[usize], row: usize) {
        let Some(far) = arm.first().and_then(|&p| self.out[p]) else {
            return;
        };
        let mut trail = vec![far];
        for &point in &arm[1..] {
            let first = trail.len().saturating_sub(self.reach());
            self.push(point, Pass::Back, trail[first..].to_vec(), row);
            trail.push(self.steps.len() - 1);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::collections::BTreeSet;

    const ALL: Extras = Extras {
        back: true,
        probes: true,
    };

    fn points(steps: &[Step]) -> Vec<usize> {
        steps.iter().map(|s| s.point).collect()
    }

    #[test]
    fn a_curve_is_walked_outwards_from_its_start() {
        let steps = plan(&Grid::new(&[6]), 2, SeedKind::Previous, Extras::default());
        assert_eq!(points(&steps), [2, 3, 4, 5, 1, 0]);
        let nearest = |s: &Step| s.history.last().map(|&h| steps[h].point);
        assert_eq!(
            steps.iter().map(nearest).collect::<Vec<_>>(),
            [None, Some(2), Some(3), Some(4), Some(2), Some(1)]
        );
    }

    #[test]
    fn the_inner_arm_extrapolates_through_the_start() {
        let steps = plan(
            &Grid::new(&[9]),
            4,
            SeedKind::Extrapolated,
            Extras::default(),
        );
        let down = steps.iter().find(|s| s.point == 3).unwrap();
        let history: Vec<usize> = down.history.iter().map(|&h| steps[h].point).collect();
        assert_eq!(history, [8, 7, 6, 5, 4]);
    }

    #[test]
    fn fresh_points_depend_on_nothing() {
        let steps = plan(&Grid::new(&[4, 3]), 5, SeedKind::Fresh, ALL);
        assert_eq!(steps.len(), 12);
        assert!(steps.iter().all(|s| s.history.is_empty()));
    }

    #[test]
    fn every_plan_covers_the_grid_and_looks_only_back() {
        for shape in [
            vec![],
            vec![1],
            vec![7],
            vec![1, 1],
            vec![1, 5],
            vec![5, 1],
            vec![4, 6],
        ] {
            let grid = Grid::new(&shape);
            for seed in [SeedKind::Previous, SeedKind::Extrapolated, SeedKind::Fresh] {
                for start in 0..grid.len() {
                    let steps = plan(&grid, start, seed, ALL);
                    let out: Vec<usize> = steps
                        .iter()
                        .filter(|s| s.pass == Pass::Out)
                        .map(|s| s.point)
                        .collect();
                    assert_eq!(out.len(), grid.len());
                    assert_eq!(out.iter().collect::<BTreeSet<_>>().len(), grid.len());
                    assert_eq!(out[0], start);
                    for (k, step) in steps.iter().enumerate() {
                        assert!(step.history.iter().all(|&h| h < k));
                        let fresh = k == 0 || seed == SeedKind::Fresh || step.pass == Pass::Probe;
                        assert_eq!(fresh, step.history.is_empty());
                    }
                }
            }
        }
    }

    #[test]
    fn the_way_back_starts_at_the_far_ends() {
        let steps = plan(&Grid::new(&[5]), 2, SeedKind::Previous, ALL);
        let back: Vec<usize> = steps
            .iter()
            .filter(|s| s.pass == Pass::Back)
            .map(|s| s.point)
            .collect();
        assert_eq!(back, [3, 2, 1, 2]);
    }

    #[test]
    fn ends_and_corners_are_probed_once() {
        let probed = |shape: &[usize], start: usize| -> Vec<usize> {
            plan(&Grid::new(shape), start, SeedKind::Extrapolated, ALL)
                .iter()
                .filter(|s| s.pass == Pass::Probe)
                .map(|s| s.point)
                .collect()
        };
        assert_eq!(probed(&[7], 3), [0, 6]);
        assert_eq!(probed(&[7], 0), [6]);
        assert!(probed(&[1], 0).is_empty());
        assert_eq!(probed(&[3, 4], 5), [0, 3, 8, 11]);
    }
}
