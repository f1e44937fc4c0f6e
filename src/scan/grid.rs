//! Sweeps and the grid of points they span.

use crate::molecule::motion::{Motion, MotionError, set_all};
use nalgebra::Vector3;

/// One swept internal coordinate and its values.
#[derive(Debug, Clone, PartialEq)]
pub struct Sweep {
    /// The coordinate and the atoms that move.
    pub motion: Motion,
    /// Coordinates set to the same value.
    pub also: Vec<Motion>,
    /// Values in ångström or degree, in the order of the spec.
    pub values: Vec<f64>,
}

impl Sweep {
    /// Number of the value nearest the coordinate's value at `positions` (bohr).
    #[must_use]
    pub fn nearest(&self, positions: &[Vector3<f64>]) -> usize {
        let coordinate = &self.motion.coordinate;
        let here = coordinate.value(positions);
        let away = |value: f64| {
            coordinate
                .difference(coordinate.from_reported(value), here)
                .abs()
        };
        (0..self.values.len())
            .min_by(|&a, &b| away(self.values[a]).total_cmp(&away(self.values[b])))
            .unwrap_or(0)
    }

    /// Name of the sweep's column: kind, labels and unit, such as `bond_O_H1_angstrom`.
    #[must_use]
    pub fn column_name(&self, labels: &[String]) -> String {
        let coordinate = &self.motion.coordinate;
        let atoms: Vec<&str> = coordinate
            .atoms()
            .iter()
            .map(|&a| labels[a].as_str())
            .collect();
        format!(
            "{}_{}_{}",
            coordinate.kind_word(),
            atoms.join("_"),
            coordinate.unit_word()
        )
    }
}

/// The product of the values of zero, one or two sweeps; points are numbered with the last sweep fastest.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Grid {
    shape: Vec<usize>,
}

impl Grid {
    /// A grid of `shape[k]` values along sweep k; an empty shape is the one point of the input geometry.
    #[must_use]
    pub fn new(shape: &[usize]) -> Self {
        Self {
            shape: shape.to_vec(),
        }
    }

    /// The grid of some sweeps.
    #[must_use]
    pub fn of(sweeps: &[Sweep]) -> Self {
        Self::new(&sweeps.iter().map(|s| s.values.len()).collect::<Vec<_>>())
    }

    /// Number of values along each sweep.
    #[must_use]
    pub fn shape(&self) -> &[usize] {
        &self.shape
    }

    /// Number of points.
    #[must_use]
    pub fn len(&self) -> usize {
        self.shape.iter().product()
    }

    /// Whether a sweep has no values.
    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// Place of a point along each sweep.
    #[must_use]
    pub fn index(&self, point: usize) -> Vec<usize> {
        let mut rest = point;
        let mut index: Vec<usize> = self
            .shape
            .iter()
            .rev()
            .map(|&n| {
                let i = rest % n;
                rest /= n;
                i
            })
            .collect();
        index.reverse();
        index
    }

    /// Number of the point at a place.
    #[must_use]
    pub fn point(&self, index: &[usize]) -> usize {
        index
            .iter()
            .zip(&self.shape)
            .fold(0, |sum, (&i, &n)| sum * n + i)
    }

    /// The points one step away along one sweep, in order of their number.
    #[must_use]
    pub fn neighbours(&self, point: usize) -> Vec<usize> {
        let index = self.index(point);
        let mut found = Vec::new();
        for k in 0..self.shape.len() {
            for step in [-1_isize, 1] {
                let mut other = index.clone();
                if let Some(i) = other[k]
                    .checked_add_signed(step)
                    .filter(|&i| i < self.shape[k])
                {
                    other[k] = i;
                    found.push(self.point(&other));
                }
            }
        }
        found.sort_unstable();
        found
    }
}

/// Values of the sweeps at a point, ångström or degree.
#[must_use]
pub fn values_at(sweeps: &[Sweep], grid: &Grid, point: usize) -> Vec<f64> {
    grid.index(point)
        .iter()
        .zip(sweeps)
        .map(|(&i, s)| s.values[i])
        .collect()
}

/// Positions (bohr) at a point: the input geometry with every swept coordinate, and those tied to it,
/// set by rigid motions. Atoms that no sweep moves keep their positions bit for bit.
///
/// # Errors
/// [`MotionError`] if the coordinates cannot take these values together.
pub fn positions_at(
    sweeps: &[Sweep],
    grid: &Grid,
    input: &[Vector3<f64>],
    point: usize,
) -> Result<Vec<Vector3<f64>>, MotionError> {
    let mut settings = Vec::new();
    for (sweep, value) in sweeps.iter().zip(values_at(sweeps, grid, point)) {
        for motion in std::iter::once(&sweep.motion).chain(&sweep.also) {
            settings.push((motion.clone(), motion.coordinate.from_reported(value)));
        }
    }
    let mut positions = input.to_vec();
    set_all(&settings, &mut positions)?;
    Ok(positions)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn points_are_numbered_with_the_last_sweep_fastest() {
        let grid = Grid::new(&[3, 4]);
        assert_eq!(grid.len(), 12);
        assert_eq!(grid.index(5), [1, 1]);
        for point in 0..12 {
            assert_eq!(grid.point(&grid.index(point)), point);
        }
        assert_eq!(grid.neighbours(5), [1, 4, 6, 9]);
        assert_eq!(grid.neighbours(0), [1, 4]);
    }

    #[test]
    fn a_grid_without_sweeps_has_one_point() {
        let grid = Grid::new(&[]);
        assert_eq!(grid.len(), 1);
        assert!(grid.index(0).is_empty());
        assert!(grid.neighbours(0).is_empty());
    }
}
