//! Isolines and the areas between them on a rectangular grid.

use contour::ContourBuilder;

use super::PlotError;
use super::interpolate::Spline;

/// Values on an evenly fine grid: `values[row * columns + column]`, columns along x.
#[derive(Debug, Clone)]
pub(super) struct FineGrid {
    pub(super) columns: usize,
    pub(super) rows: usize,
    pub(super) values: Vec<f64>,
}

/// Fine points per direction; enough for smooth lines on a page.
const FINE: usize = 161;

impl FineGrid {
    /// Computed values refined by cubic splines along y, then along x.
    ///
    /// `values[i * y.len() + j]` belongs to `(x[i], y[j])`; both coordinates rise. `None` where a
    /// direction has fewer than two values.
    pub(super) fn refine(x: &[f64], y: &[f64], values: &[f64]) -> Option<Self> {
        let (nx, ny) = (x.len(), y.len());
        if nx < 2 || ny < 2 || values.len() != nx * ny {
            return None;
        }
        let station =
            |c: &[f64], k: usize| c[0] + (c[c.len() - 1] - c[0]) * k as f64 / (FINE - 1) as f64;
        // along y: one spline per x value
        let mut half = vec![0.0; nx * FINE];
        for i in 0..nx {
            let spline = Spline::new(y, &values[i * ny..(i + 1) * ny])?;
            for row in 0..FINE {
                half[row * nx + i] = spline.value(station(y, row));
            }
        }
        let mut fine = vec![0.0; FINE * FINE];
        for row in 0..FINE {
            let spline = Spline::new(x, &half[row * nx..(row + 1) * nx])?;
            for column in 0..FINE {
                fine[row * FINE + column] = spline.value(station(x, column));
            }
        }
        Some(Self {
            columns: FINE,
            rows: FINE,
            values: fine,
        })
    }
}

/// The region at or above one energy.
#[derive(Debug, Clone)]
pub(super) struct Region {
    /// Closed outlines in fractions (0–1) of the domain, holes joined to their outline by a seam
    /// walked both ways, which encloses no area.
    pub(super) outlines: Vec<Vec<(f64, f64)>>,
    /// The isolines themselves: outlines without the parts along the domain's edge.
    pub(super) lines: Vec<Vec<(f64, f64)>>,
}

/// The regions at or above each threshold, in the thresholds' order.
///
/// # Errors
/// [`PlotError::Isolines`] if the tracing fails.
pub(super) fn regions(grid: &FineGrid, thresholds: &[f64]) -> Result<Vec<Region>, PlotError> {
    let traced = ContourBuilder::new(grid.columns, grid.rows, true)
        .contours(&grid.values, thresholds)
        .map_err(|error| PlotError::Isolines {
            message: error.to_string(),
        })?;
    let (width, height) = ((grid.columns - 1) as f64, (grid.rows - 1) as f64);
    // Grid values sit at half-integer positions of the tracing; rings at the border run half a
    // step outside the domain and are taken back onto its edge.
    let ring = |coordinates: &mut dyn Iterator<Item = (f64, f64)>| -> Vec<(f64, f64)> {
        coordinates
            .map(|(x, y)| {
                (
                    ((x - 0.5) / width).clamp(0.0, 1.0),
                    ((y - 0.5) / height).clamp(0.0, 1.0),
                )
            })
            .collect()
    };
    let mut out = Vec::with_capacity(thresholds.len());
    for contour in &traced {
        let mut region = Region {
            outlines: Vec::new(),
            lines: Vec::new(),
        };
        for polygon in &contour.geometry().0 {
            let mut outline = ring(&mut polygon.exterior().coords().map(|c| (c.x, c.y)));
            region.lines.extend(off_edge(&outline));
            let Some(&seam) = outline.first() else {
                continue;
            };
            for hole in polygon.interiors() {
                let hole = ring(&mut hole.coords().map(|c| (c.x, c.y)));
                region.lines.extend(off_edge(&hole));
                outline.extend(hole);
                outline.push(seam);
            }
            region.outlines.push(outline);
        }
        out.push(region);
    }
    Ok(out)
}

/// The parts of a closed ring that do not run along the domain's edge.
fn off_edge(ring: &[(f64, f64)]) -> Vec<Vec<(f64, f64)>> {
    const NEAR: f64 = 1e-9;
    let on_edge = |p: (f64, f64), q: (f64, f64)| {
        let both = |a: f64, b: f64, edge: f64| (a - edge).abs() < NEAR && (b - edge).abs() < NEAR;
        both(p.0, q.0, 0.0) || both(p.0, q.0, 1.0) || both(p.1, q.1, 0.0) || both(p.1, q.1, 1.0)
    };
    let mut lines: Vec<Vec<(f64, f64)>> = Vec::new();
    let mut joined = false;
    for pair in ring.windows(2) {
        if on_edge(pair[0], pair[1]) {
            joined = false;
            continue;
        }
        match lines.last_mut() {
            Some(line) if joined => line.push(pair[1]),
            _ => lines.push(vec![pair[0], pair[1]]),
        }
        joined = true;
    }
    // A ring may start in the middle of a line: join its last part to its first.
    let through_start = ring.len() > 1 && joined && !on_edge(ring[0], ring[1]);
    if lines.len() > 1
        && through_start
        && let Some(mut last) = lines.pop()
    {
        last.extend(lines[0].iter().skip(1));
        lines[0] = last;
    }
    lines
}

#[cfg(test)]
mod tests {
    use super::*;

    fn bowl(n: usize) -> (Vec<f64>, Vec<f64>, Vec<f64>) {
        let x: Vec<f64> = (0..n)
            .map(|i| -1.0 + 2.0 * i as f64 / (n - 1) as f64)
            .collect();
        let values = x
            .iter()
            .flat_map(|&u| x.iter().map(move |&v| u * u + v * v))
            .collect();
        (x.clone(), x, values)
    }

    #[test]
    fn refining_a_paraboloid_is_exact() {
        let (x, y, values) = bowl(7);
        let fine = FineGrid::refine(&x, &y, &values).expect("a grid");
        for row in 0..fine.rows {
            for column in 0..fine.columns {
                let at = |k: usize| -1.0 + 2.0 * k as f64 / (FINE - 1) as f64;
                let exact = at(column).powi(2) + at(row).powi(2);
                assert!((fine.values[row * fine.columns + column] - exact).abs() < 1e-12);
            }
        }
    }

    #[test]
    fn isoline_of_a_bowl_is_a_circle_and_the_edge_is_dropped() {
        let (x, y, values) = bowl(9);
        let fine = FineGrid::refine(&x, &y, &values).expect("a grid");
        let regions = regions(&fine, &[0.5, 1.5]).expect("traced");
        // At 0.5 one closed circle of radius √0.5 (fractions are halved); the ring is a hole in
        // the whole square, whose outline lies on the edge.
        assert_eq!(regions[0].lines.len(), 1);
        assert_eq!(regions[0].outlines.len(), 1);
        for (u, v) in &regions[0].lines[0] {
            let r = (2.0 * u - 1.0).hypot(2.0 * v - 1.0);
            assert!((r - 0.5_f64.sqrt()).abs() < 1e-3, "{r}");
        }
        // At 1.5 four arcs across the corners.
        assert_eq!(regions[1].lines.len(), 4);
        for line in &regions[1].lines {
            for (u, v) in line {
                assert!(((2.0 * u - 1.0).hypot(2.0 * v - 1.0) - 1.5_f64.sqrt()).abs() < 1e-3);
            }
        }
    }

    #[test]
    fn flat_grids_have_no_lines_inside() {
        let fine = FineGrid::refine(&[0.0, 1.0], &[0.0, 1.0], &[0.0; 4]).expect("a grid");
        let regions = regions(&fine, &[1.0]).expect("traced");
        assert!(regions[0].lines.is_empty());
        assert!(FineGrid::refine(&[0.0], &[0.0, 1.0], &[0.0; 2]).is_none());
    }
}
