//! The grid behind an energy map: order, cells, and holes where nothing converged.

use super::axis::Span;
use super::frame::{Frame, Rect};
use super::range;

/// Sweep values in rising order, and energies in that order.
pub(super) struct Sorted {
    pub(super) x: Vec<f64>,
    pub(super) y: Vec<f64>,
    pub(super) energies: Vec<Option<f64>>,
}

impl Sorted {
    /// Sorts both sweeps; `energies[i * y_values.len() + j]` belongs to `(x_values[i], y_values[j])`.
    pub(super) fn new(x_values: &[f64], y_values: &[f64], energies: &[Option<f64>]) -> Self {
        let rising = |values: &[f64]| {
            let mut order: Vec<usize> = (0..values.len()).collect();
            order.sort_by(|&a, &b| values[a].total_cmp(&values[b]));
            order
        };
        let (columns, rows) = (rising(x_values), rising(y_values));
        let ny = y_values.len();
        Self {
            x: columns.iter().map(|&i| x_values[i]).collect(),
            y: rows.iter().map(|&j| y_values[j]).collect(),
            energies: columns
                .iter()
                .flat_map(|&i| rows.iter().map(move |&j| (i, j)))
                .map(|(i, j)| energies[i * ny + j])
                .collect(),
        }
    }
}

/// The range of a map's axis: the sweep itself; a single value gets some room.
pub(super) fn map_span(values: &[f64]) -> Span {
    let exact = Span::of(values.iter().copied()).unwrap_or(Span { lo: 0.0, hi: 1.0 });
    if exact.length() > 1e-9 * exact.lo.abs().max(1e-3) {
        exact
    } else {
        range::sweep_span(values.iter().copied())
    }
}

/// The cell of a grid point: half way to each neighbour.
pub(super) fn cell(frame: &Frame, sorted: &Sorted, i: usize, j: usize) -> Rect {
    let bounds = |values: &[f64], k: usize, span: Span| {
        let lo = if k > 0 {
            0.5 * (values[k - 1] + values[k])
        } else {
            span.lo
        };
        let hi = if k + 1 < values.len() {
            0.5 * (values[k] + values[k + 1])
        } else {
            span.hi
        };
        (lo, hi)
    };
    let (x_lo, x_hi) = bounds(&sorted.x, i, frame.x);
    let (y_lo, y_hi) = bounds(&sorted.y, j, frame.y);
    Rect {
        left: frame.x_px(x_lo),
        top: frame.y_px(y_hi),
        right: frame.x_px(x_hi),
        bottom: frame.y_px(y_lo),
    }
}

pub(super) fn failed_cells(frame: &Frame, sorted: &Sorted) -> Vec<Rect> {
    let ny = sorted.y.len();
    (0..sorted.energies.len())
        .filter(|&k| sorted.energies[k].is_none())
        .map(|k| cell(frame, sorted, k / ny, k % ny))
        .collect()
}

/// Energies with holes bridged from their surroundings, only so that isolines of the neighbours
/// can be drawn up to the hatched cells which hide the bridge. `None` without any energy.
pub(super) fn filled(sorted: &Sorted) -> Option<Vec<f64>> {
    let (nx, ny) = (sorted.x.len(), sorted.y.len());
    let mut values = sorted.energies.clone();
    let neighbours = |k: usize| {
        let (i, j) = (k / ny, k % ny);
        [
            (i > 0).then(|| k - ny),
            (i + 1 < nx).then(|| k + ny),
            (j > 0).then(|| k - 1),
            (j + 1 < ny).then(|| k + 1),
        ]
    };
    if values.iter().all(Option::is_none) {
        return None;
    }
    while values.iter().any(Option::is_none) {
        let before = values.clone();
        for k in 0..values.len() {
            if before[k].is_none() {
                let known: Vec<f64> = neighbours(k)
                    .into_iter()
                    .flatten()
                    .filter_map(|m| before[m])
                    .collect();
                if !known.is_empty() {
                    values[k] = Some(known.iter().sum::<f64>() / known.len() as f64);
                }
            }
        }
    }
    Some(values.into_iter().flatten().collect())
}
