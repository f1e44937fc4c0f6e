//! The grid of points that sweeps span.

use super::sweep::Sweep;

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

    /// The point as far beyond `over` as `over` is from `from`, if the grid goes on there.
    #[must_use]
    pub fn beyond(&self, from: usize, over: usize) -> Option<usize> {
        let (from, over) = (self.index(from), self.index(over));
        let index: Vec<usize> = from
            .iter()
            .zip(&over)
            .zip(&self.shape)
            .map(|((&f, &o), &n)| (2 * o).checked_sub(f).filter(|&i| i < n))
            .collect::<Option<_>>()?;
        Some(self.point(&index))
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
        assert_eq!(grid.beyond(4, 5), Some(6));
        assert_eq!(grid.beyond(5, 1), None);
        assert_eq!(grid.beyond(1, 5), Some(9));
        assert_eq!(grid.beyond(6, 7), None);
    }

    #[test]
    fn a_grid_without_sweeps_has_one_point() {
        let grid = Grid::new(&[]);
        assert_eq!(grid.len(), 1);
        assert!(grid.index(0).is_empty());
        assert!(grid.neighbours(0).is_empty());
    }
}
