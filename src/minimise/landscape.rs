//! A surface of two coordinates between its grid points: bicubic pieces of a tensor-product spline.

use super::MinimiseError;
use crate::fit::spline::Spline;
use nalgebra::{Matrix2, Matrix4, Vector2};

/// One axis of a grid.
#[derive(Debug, Clone, PartialEq)]
pub struct GridAxis {
    /// Values, increasing, bohr or radian.
    pub values: Vec<f64>,
    /// Period (2π for a dihedral), when the grid goes round it; a last value that repeats the first is left out.
    pub period: Option<f64>,
}

impl GridAxis {
    /// The distinct points: a closing point that repeats the first is dropped.
    fn points(&self) -> usize {
        let n = self.values.len();
        match (self.period, self.values.first(), self.values.last()) {
            (Some(period), Some(first), Some(last))
                if n > 2 && (last - first - period).abs() < 1e-6 * period =>
            {
                n - 1
            }
            _ => n,
        }
    }
}

/// Value, slopes and second derivatives at a place.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Local {
    /// hartree
    pub energy: f64,
    /// hartree per bohr or radian
    pub slope: Vector2<f64>,
    /// the same, twice
    pub curvature: Matrix2<f64>,
}

/// The interpolated surface.
///
/// The value and the derivatives f₁, f₂, f₁₂ at the grid points come from one-dimensional cubic splines along both
/// axes; between them the bicubic Hermite form reproduces the tensor-product spline exactly
/// (C. de Boor, J. Math. Phys. 41, 212 (1962)).
#[derive(Debug, Clone)]
pub struct Landscape {
    axes: [Vec<f64>; 2],
    periods: [Option<f64>; 2],
    /// f, f₁, f₂, f₁₂ at point (i, j), first axis slowest.
    nodes: Vec<[f64; 4]>,
    energies: Vec<Option<f64>>,
}

impl Landscape {
    /// From two axes and energies (hartree), last axis fastest. A point without an energy is bridged from its neighbours for
    /// the sake of the splines, and no path or stationary point is allowed to touch it.
    ///
    /// # Errors
    /// Fewer than two values on an axis, values that do not increase, numbers that are not finite, no energy at
    /// all, a count of energies that does not fit.
    pub fn new(axes: &[GridAxis; 2], energies: &[Option<f64>]) -> Result<Self, MinimiseError> {
        let given = [axes[0].values.len(), axes[1].values.len()];
        if energies.len() != given[0] * given[1] {
            return Err(MinimiseError::Counts {
                expected: given[0] * given[1],
                given: energies.len(),
            });
        }
        let counts = [axes[0].points(), axes[1].points()];
        let [rows, columns] = counts;
        let kept: Vec<Option<f64>> = (0..rows)
            .flat_map(|i| (0..columns).map(move |j| (i, j)))
            .map(|(i, j)| energies[i * given[1] + j])
            .collect();
        let x: [Vec<f64>; 2] = [
            axes[0].values[..rows].to_vec(),
            axes[1].values[..columns].to_vec(),
        ];
        let periods = [axes[0].period, axes[1].period];
        let along = |axis: usize, values: &[f64]| match periods[axis] {
            Some(period) => Spline::periodic(&x[axis], values, period),
            None => Spline::new(&x[axis], values),
        };
        let values = bridged(&x, periods, &kept)?;
        let mut nodes: Vec<[f64; 4]> = values.iter().map(|&v| [v, 0.0, 0.0, 0.0]).collect();
        for i in 0..rows {
            let spline = along(1, &values[i * columns..(i + 1) * columns])?;
            for j in 0..columns {
                nodes[i * columns + j][2] = spline.derivative(x[1][j], 1);
            }
        }
        for j in 0..columns {
            let line = |part: usize| -> Vec<f64> {
                (0..rows).map(|i| nodes[i * columns + j][part]).collect()
            };
            let (heights, slopes) = (along(0, &line(0))?, along(0, &line(2))?);
            for i in 0..rows {
                nodes[i * columns + j][1] = heights.derivative(x[0][i], 1);
                nodes[i * columns + j][3] = slopes.derivative(x[0][i], 1);
            }
        }
        Ok(Self {
            axes: x,
            periods,
            nodes,
            energies: kept,
        })
    }

    /// Number of distinct points along both axes.
    #[must_use]
    pub fn shape(&self) -> [usize; 2] {
        [self.axes[0].len(), self.axes[1].len()]
    }

    /// Place of a grid point.
    #[must_use]
    pub fn place(&self, index: [usize; 2]) -> Vector2<f64> {
        Vector2::new(self.axes[0][index[0]], self.axes[1][index[1]])
    }

    /// Energy of a grid point, where there is one.
    #[must_use]
    pub fn energy(&self, index: [usize; 2]) -> Option<f64> {
        self.energies[index[0] * self.axes[1].len() + index[1]]
    }

    /// Mean spacing along both axes: the natural unit of lengths on the grid.
    #[must_use]
    pub fn spacing(&self) -> Vector2<f64> {
        let one = |axis: usize| {
            let x = &self.axes[axis];
            match self.periods[axis] {
                Some(period) => period / x.len() as f64,
                None => (x[x.len() - 1] - x[0]) / (x.len() - 1) as f64,
            }
        };
        Vector2::new(one(0), one(1))
    }

    /// The periods of both axes.
    #[must_use]
    pub fn periods(&self) -> [Option<f64>; 2] {
        self.periods
    }

    /// The grid point `steps` away along an axis, round the period where there is one.
    #[must_use]
    pub fn neighbour(&self, index: [usize; 2], steps: [isize; 2]) -> Option<[usize; 2]> {
        let mut found = [0; 2];
        for axis in 0..2 {
            let n = self.axes[axis].len() as isize;
            let at = index[axis] as isize + steps[axis];
            found[axis] = match self.periods[axis] {
                Some(_) => at.rem_euclid(n),
                None if (0..n).contains(&at) => at,
                None => return None,
            } as usize;
        }
        (found != index || steps == [0, 0]).then_some(found)
    }

    /// Whether a place lies on the grid.
    #[must_use]
    pub fn contains(&self, at: &Vector2<f64>) -> bool {
        (0..2).all(|axis| {
            let x = &self.axes[axis];
            self.periods[axis].is_some() || (x[0]..=x[x.len() - 1]).contains(&at[axis])
        })
    }

    /// The cell around a coordinate: its corners' indices, where it begins and how wide it is.
    fn cell(&self, axis: usize, at: f64) -> ([usize; 2], f64, f64) {
        let x = &self.axes[axis];
        let n = x.len();
        let at = match self.periods[axis] {
            Some(period) => x[0] + (at - x[0]).rem_euclid(period),
            None => at,
        };
        let below = x.partition_point(|&v| v <= at).clamp(1, n) - 1;
        match self.periods[axis] {
            Some(period) if below + 1 == n => ([below, 0], at - x[below], x[0] + period - x[below]),
            _ => {
                let below = below.min(n - 2);
                ([below, below + 1], at - x[below], x[below + 1] - x[below])
            }
        }
    }

    /// Whether all corners of the cell around a place have energies.
    #[must_use]
    pub fn is_known(&self, at: &Vector2<f64>) -> bool {
        let (rows, ..) = self.cell(0, at[0]);
        let (columns, ..) = self.cell(1, at[1]);
        rows.iter()
            .all(|&i| columns.iter().all(|&j| self.energy([i, j]).is_some()))
    }

    /// Energy, slopes and curvature at a place (beyond the grid: of the outermost piece).
    #[must_use]
    pub fn local(&self, at: &Vector2<f64>) -> Local {
        let (rows, x, width) = self.cell(0, at[0]);
        let (columns, y, height) = self.cell(1, at[1]);
        let node = |i: usize, j: usize| self.nodes[rows[i] * self.axes[1].len() + columns[j]];
        // Heights at both ends, then slopes at both ends, along each axis.
        let corners = Matrix4::from_fn(|r, c| {
            let part = usize::from(r >= 2) + 2 * usize::from(c >= 2);
            node(r % 2, c % 2)[part]
        });
        let (u, v) = (hermite(x, width), hermite(y, height));
        let value = |a: usize, b: usize| (u[a].transpose() * corners * v[b])[0];
        Local {
            energy: value(0, 0),
            slope: Vector2::new(value(1, 0), value(0, 1)),
            curvature: Matrix2::new(value(2, 0), value(1, 1), value(1, 1), value(0, 2)),
        }
    }
}

/// Energies with gaps filled: by the mean of the splines through the rest of the row and of the column where the gap lies
/// between points of them, and from the edges inwards by the mean of neighbours elsewhere.
fn bridged(
    axes: &[Vec<f64>; 2],
    periods: [Option<f64>; 2],
    energies: &[Option<f64>],
) -> Result<Vec<f64>, MinimiseError> {
    let [rows, columns] = [axes[0].len(), axes[1].len()];
    let mut filled = energies.to_vec();
    for i in 0..rows {
        for j in 0..columns {
            if energies[i * columns + j].is_some() {
                continue;
            }
            let row: Vec<_> = (0..columns).map(|l| energies[i * columns + l]).collect();
            let column: Vec<_> = (0..rows).map(|k| energies[k * columns + j]).collect();
            let bridges = [
                bridge(&axes[0], periods[0], &column, i)?,
                bridge(&axes[1], periods[1], &row, j)?,
            ];
            let found: Vec<f64> = bridges.into_iter().flatten().collect();
            if !found.is_empty() {
                filled[i * columns + j] = Some(found.iter().sum::<f64>() / found.len() as f64);
            }
        }
    }
    while filled.iter().any(Option::is_none) && filled.iter().any(Option::is_some) {
        let before = filled.clone();
        for i in 0..rows {
            for j in 0..columns {
                if before[i * columns + j].is_some() {
                    continue;
                }
                let near: Vec<f64> = (i.saturating_sub(1)..(i + 2).min(rows))
                    .flat_map(|k| (j.saturating_sub(1)..(j + 2).min(columns)).map(move |l| (k, l)))
                    .filter_map(|(k, l)| before[k * columns + l])
                    .collect();
                if !near.is_empty() {
                    filled[i * columns + j] = Some(near.iter().sum::<f64>() / near.len() as f64);
                }
            }
        }
    }
    Ok(filled.into_iter().map(|e| e.unwrap_or(f64::NAN)).collect())
}

/// The value at one place of a line by the spline through the others; none unless it lies between two of them.
fn bridge(
    x: &[f64],
    period: Option<f64>,
    line: &[Option<f64>],
    at: usize,
) -> Result<Option<f64>, MinimiseError> {
    let turns: &[f64] = if period.is_some() {
        &[-1.0, 0.0, 1.0]
    } else {
        &[0.0]
    };
    let (places, heights): (Vec<f64>, Vec<f64>) = turns
        .iter()
        .flat_map(|turn| {
            let shift = turn * period.unwrap_or(0.0);
            x.iter()
                .zip(line)
                .filter_map(move |(x, height)| Some((x + shift, (*height)?)))
        })
        .unzip();
    match (places.first(), places.last()) {
        (Some(first), Some(last)) if *first < x[at] && x[at] < *last => {
            Ok(Some(Spline::new(&places, &heights)?.value(x[at])))
        }
        _ => Ok(None),
    }
}

/// Weights of the heights and slopes at both ends of a piece of this width, in its value, first and second derivative at
/// distance x from the beginning: the cubic Hermite basis.
fn hermite(x: f64, width: f64) -> [nalgebra::Vector4<f64>; 3] {
    let t = x / width;
    let (w, w2) = (width, width * width);
    [
        nalgebra::Vector4::new(
            (1.0 + 2.0 * t) * (1.0 - t) * (1.0 - t),
            t * t * (3.0 - 2.0 * t),
            w * t * (1.0 - t) * (1.0 - t),
            w * t * t * (t - 1.0),
        ),
        nalgebra::Vector4::new(
            6.0 * t * (t - 1.0) / w,
            6.0 * t * (1.0 - t) / w,
            (1.0 - t) * (1.0 - 3.0 * t),
            t * (3.0 * t - 2.0),
        ),
        nalgebra::Vector4::new(
            (12.0 * t - 6.0) / w2,
            (6.0 - 12.0 * t) / w2,
            (6.0 * t - 4.0) / w,
            (6.0 * t - 2.0) / w,
        ),
    ]
}
