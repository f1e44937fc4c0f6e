//! Stationary points of a surface of two coordinates, and the valley floor between its minima.

use super::MinimiseError;
use super::landscape::Landscape;
use nalgebra::{Matrix2, SymmetricEigen, Vector2};
use std::cmp::Ordering;
use std::collections::BinaryHeap;

/// Kind of a stationary point of a surface.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, serde::Serialize)]
#[serde(rename_all = "lowercase")]
pub enum PointKind {
    /// uphill in all directions
    Minimum,
    /// downhill in one direction
    Saddle,
    /// downhill in all directions
    Maximum,
}

/// A stationary point of the interpolated surface.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct StationaryPoint {
    /// Minimum, saddle point or maximum.
    pub kind: PointKind,
    /// Where it is, bohr or radian.
    pub at: Vector2<f64>,
    /// hartree
    pub energy: f64,
    /// hartree per bohr² or radian²
    pub curvature: Matrix2<f64>,
}

/// All stationary points inside the grid, minima first, each kind by energy. In each cell Newton's method is started
/// from the middle and the corners of the cells that it may lie in; points in cells with a corner without an energy
/// are left out.
#[must_use]
pub fn stationary_points(landscape: &Landscape) -> Vec<StationaryPoint> {
    let [rows, columns] = landscape.shape();
    let spacing = landscape.spacing();
    let mut found: Vec<StationaryPoint> = Vec::new();
    for i in 0..rows {
        for j in 0..columns {
            let corner = landscape.place([i, j]);
            for start in [corner, corner + spacing * 0.5] {
                let Some(point) = newton(landscape, start) else {
                    continue;
                };
                let near = |other: &StationaryPoint| {
                    let apart = apart(landscape, &other.at, &point.at);
                    apart.component_div(&spacing).norm() < 1e-3
                };
                if !found.iter().any(near) {
                    found.push(point);
                }
            }
        }
    }
    found.sort_by(|a, b| a.kind.cmp(&b.kind).then(a.energy.total_cmp(&b.energy)));
    found
}

/// Shortest difference of two places, round the periods where there are any.
fn apart(landscape: &Landscape, one: &Vector2<f64>, other: &Vector2<f64>) -> Vector2<f64> {
    let mut apart = other - one;
    for axis in 0..2 {
        if let Some(period) = landscape.periods()[axis] {
            apart[axis] -= period * (apart[axis] / period).round();
        }
    }
    apart
}

/// Newton's method on the interpolated surface from a place; none if it leaves the neighbourhood or the grid.
fn newton(landscape: &Landscape, start: Vector2<f64>) -> Option<StationaryPoint> {
    const MOST_ITERATIONS: usize = 30;
    /// In grid spacings: farther away another start finds it.
    const NEIGHBOURHOOD: f64 = 1.6;
    let spacing = landscape.spacing();
    let mut at = start;
    for _ in 0..MOST_ITERATIONS {
        let local = landscape.local(&at);
        let step = -local.curvature.try_inverse()? * local.slope;
        let size = step.component_div(&spacing).amax();
        if !size.is_finite() {
            return None;
        }
        at += step * (0.5 / size).min(1.0);
        if (at - start).component_div(&spacing).amax() > NEIGHBOURHOOD {
            return None;
        }
        if size < 1e-10 {
            if !landscape.contains(&at) || !landscape.is_known(&at) {
                return None;
            }
            return Some(stationary(landscape, at));
        }
    }
    None
}

fn stationary(landscape: &Landscape, mut at: Vector2<f64>) -> StationaryPoint {
    let first = landscape.place([0, 0]);
    for axis in 0..2 {
        if let Some(period) = landscape.periods()[axis] {
            at[axis] = first[axis] + (at[axis] - first[axis]).rem_euclid(period);
        }
    }
    let local = landscape.local(&at);
    let eigenvalues = SymmetricEigen::new(local.curvature).eigenvalues;
    let kind = match eigenvalues.iter().filter(|e| **e < 0.0).count() {
        0 => PointKind::Minimum,
        1 => PointKind::Saddle,
        _ => PointKind::Maximum,
    };
    StationaryPoint {
        kind,
        at,
        energy: local.energy,
        curvature: local.curvature,
    }
}

/// One place of a valley floor.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct FloorPoint {
    /// bohr or radian; goes on past the period where the path does
    pub at: Vector2<f64>,
    /// hartree
    pub energy: f64,
}

/// The path of least energy between two minima.
#[derive(Debug, Clone, PartialEq)]
pub struct ValleyFloor {
    /// The path, evenly spaced in units of the grid spacing, both minima among it.
    pub points: Vec<FloorPoint>,
    /// Its highest place: the saddle point, where there is one.
    pub top: FloorPoint,
    /// Whether `top` is a saddle point of the surface; otherwise merely the highest point of the path.
    pub is_saddle: bool,
    /// Energy of the top above the first minimum, hartree.
    pub barrier: f64,
    /// Energy of the top above the last minimum, hartree.
    pub barrier_back: f64,
    /// Largest movement of the path in its last iteration, grid spacings.
    pub movement: f64,
}

/// The valley floor from one minimum to another.
///
/// First the path over grid points whose highest point is as low as can be (the minimax variant of E. W. Dijkstra, Numer.
/// Math. 1, 269 (1959)), then that path relaxed on the interpolated surface by the string method (W. E, W. Ren,
/// E. Vanden-Eijnden, J. Chem. Phys. 126, 164103 (2007)), and its top made exact by Newton's method. Lengths are measured in
/// grid spacings: the steepest way down depends on the unit of lengths against angles, the saddle point and the
/// barrier do not.
///
/// None where points without energies bar every way.
///
/// # Errors
/// Places outside the grid.
pub fn valley_floor(
    landscape: &Landscape,
    from: &Vector2<f64>,
    to: &Vector2<f64>,
) -> Result<Option<ValleyFloor>, MinimiseError> {
    for end in [from, to] {
        if !landscape.contains(end) || !end.iter().all(|x| x.is_finite()) {
            return Err(MinimiseError::NotFinite);
        }
    }
    let Some(grid_path) = minimax_path(landscape, nearest(landscape, from), nearest(landscape, to))
    else {
        return Ok(None);
    };
    let spacing = landscape.spacing();
    // In grid spacings, with periods unrolled along the path.
    let mut path = vec![from.component_div(&spacing)];
    let mut last = *from;
    let inner = grid_path.iter().map(|&index| landscape.place(index));
    for place in inner.chain([*to]) {
        last += apart(landscape, &last, &place);
        path.push(last.component_div(&spacing));
    }
    let (path, movement) = relax_string(landscape, &path, &spacing);
    let mut points: Vec<FloorPoint> = path
        .iter()
        .map(|u| {
            let at = u.component_mul(&spacing);
            FloorPoint {
                at,
                energy: landscape.local(&at).energy,
            }
        })
        .collect();
    let Some(highest) = (0..points.len()).max_by(|&a, &b| {
        points[a]
            .energy
            .total_cmp(&points[b].energy)
            .then(b.cmp(&a))
    }) else {
        return Ok(None);
    };
    let mut top = points[highest];
    let mut is_saddle = false;
    if highest > 0 && highest + 1 < points.len() {
        let saddle = newton(landscape, top.at).filter(|p| p.kind == PointKind::Saddle);
        if let Some(saddle) = saddle {
            top = FloorPoint {
                at: top.at + apart(landscape, &top.at, &saddle.at),
                energy: saddle.energy,
            };
            is_saddle = true;
            points[highest] = top;
        }
    }
    let ends = (points[0].energy, points[points.len() - 1].energy);
    Ok(Some(ValleyFloor {
        points,
        top,
        is_saddle,
        barrier: top.energy - ends.0,
        barrier_back: top.energy - ends.1,
        movement,
    }))
}

/// The grid point nearest to a place, among those with energies.
fn nearest(landscape: &Landscape, at: &Vector2<f64>) -> [usize; 2] {
    let [rows, columns] = landscape.shape();
    let spacing = landscape.spacing();
    let mut best = ([0, 0], f64::INFINITY);
    for i in 0..rows {
        for j in 0..columns {
            let away = apart(landscape, at, &landscape.place([i, j]))
                .component_div(&spacing)
                .norm();
            if landscape.energy([i, j]).is_some() && away < best.1 {
                best = ([i, j], away);
            }
        }
    }
    best.0
}

/// A grid point on the front of the search: lowest highest energy first, then the fewest steps, then the order of the grid.
#[derive(PartialEq)]
struct Front {
    highest: f64,
    steps: usize,
    index: [usize; 2],
}

impl Eq for Front {}

impl PartialOrd for Front {
    fn partial_cmp(&self, other: &Self) -> Option<Ordering> {
        Some(self.cmp(other))
    }
}

impl Ord for Front {
    fn cmp(&self, other: &Self) -> Ordering {
        other
            .highest
            .total_cmp(&self.highest)
            .then(other.steps.cmp(&self.steps))
            .then(other.index.cmp(&self.index))
    }
}

/// The path over neighbouring grid points (diagonals among them) whose highest energy is least.
#[must_use]
pub fn minimax_path(
    landscape: &Landscape,
    from: [usize; 2],
    to: [usize; 2],
) -> Option<Vec<[usize; 2]>> {
    let [rows, columns] = landscape.shape();
    let number = |index: [usize; 2]| index[0] * columns + index[1];
    let mut reached_from: Vec<Option<[usize; 2]>> = vec![None; rows * columns];
    let mut best = vec![(f64::INFINITY, usize::MAX); rows * columns];
    let mut front = BinaryHeap::new();
    let start = landscape.energy(from)?;
    best[number(from)] = (start, 0);
    front.push(Front {
        highest: start,
        steps: 0,
        index: from,
    });
    while let Some(Front {
        highest,
        steps,
        index,
    }) = front.pop()
    {
        if index == to {
            let mut path = vec![to];
            let mut at = to;
            while let Some(before) = reached_from[number(at)] {
                path.push(before);
                at = before;
            }
            path.reverse();
            return Some(path);
        }
        for step in [
            [-1, 0],
            [0, -1],
            [0, 1],
            [1, 0],
            [-1, -1],
            [-1, 1],
            [1, -1],
            [1, 1],
        ] {
            let Some(next) = landscape.neighbour(index, step) else {
                continue;
            };
            let Some(energy) = landscape.energy(next) else {
                continue;
            };
            let candidate = (highest.max(energy), steps + 1);
            let known = best[number(next)];
            if candidate
                .0
                .total_cmp(&known.0)
                .then(candidate.1.cmp(&known.1))
                == Ordering::Less
            {
                best[number(next)] = candidate;
                reached_from[number(next)] = Some(index);
                front.push(Front {
                    highest: candidate.0,
                    steps: candidate.1,
                    index: next,
                });
            }
        }
    }
    None
}

/// Lets a path slide down until it lies along the valley: steepest descent of every point, then even spacing again.
/// Lengths in grid spacings; returns the path and its last movement.
fn relax_string(
    landscape: &Landscape,
    path: &[Vector2<f64>],
    spacing: &Vector2<f64>,
) -> (Vec<Vector2<f64>>, f64) {
    const MOST_ITERATIONS: usize = 20_000;
    const STANDS_STILL: f64 = 1e-7;
    let count = (2 * path.len()).clamp(31, 121);
    let mut string = even(path, count);
    let mut movement = f64::INFINITY;
    for _ in 0..MOST_ITERATIONS {
        // Explicit descent is stable below 2 over the largest curvature met.
        let mut stiffest = 1e-12_f64;
        let slopes: Vec<Vector2<f64>> = string
            .iter()
            .map(|u| {
                let local = landscape.local(&u.component_mul(spacing));
                let curvature =
                    Matrix2::from_fn(|r, c| local.curvature[(r, c)] * spacing[r] * spacing[c]);
                stiffest = stiffest.max(curvature.abs().row_sum().max());
                local.slope.component_mul(spacing)
            })
            .collect();
        let mut moved = string.clone();
        for i in 1..count - 1 {
            let step = slopes[i] * (0.5 / stiffest);
            // No point may jump over another.
            moved[i] -= step * (0.2 / step.amax().max(1e-300)).min(1.0);
        }
        let moved = even(&moved, count);
        movement = string
            .iter()
            .zip(&moved)
            .map(|(a, b)| (a - b).amax())
            .fold(0.0, f64::max);
        string = moved;
        if movement < STANDS_STILL {
            break;
        }
    }
    (string, movement)
}

/// `count` points evenly spaced along a broken line, its ends among them.
fn even(line: &[Vector2<f64>], count: usize) -> Vec<Vector2<f64>> {
    let mut lengths = vec![0.0];
    for pair in line.windows(2) {
        lengths.push(lengths[lengths.len() - 1] + (pair[1] - pair[0]).norm());
    }
    let total = lengths[lengths.len() - 1];
    let mut piece = 0;
    let mut points: Vec<Vector2<f64>> = (0..count)
        .map(|k| {
            let along = total * k as f64 / (count - 1) as f64;
            while piece + 2 < line.len() && lengths[piece + 1] < along {
                piece += 1;
            }
            let length = lengths[piece + 1] - lengths[piece];
            let share = if length > 0.0 {
                ((along - lengths[piece]) / length).clamp(0.0, 1.0)
            } else {
                0.0
            };
            line[piece] + (line[piece + 1] - line[piece]) * share
        })
        .collect();
    points[0] = line[0];
    points[count - 1] = line[line.len() - 1];
    points
}
