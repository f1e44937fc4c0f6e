//! Is an energy smooth from point to point? Local polynomials from both sides of every step answer.

use super::grid::Grid;
use std::collections::BTreeSet;

/// Points on each side that predict the energy beyond a step.
const SIDE: usize = 4;
/// How many times larger than its surroundings' the misfit at a step must be to count as a kink.
const OUTSTANDING: f64 = 20.0;
/// Misfits below this (hartree) are never kinks.
const NOISE: f64 = 2e-6;

/// Steps between neighbouring points across which the energy is not smooth.
///
/// Along every line of the grid, a cubic through the four points before a step predicts the energy after it, and the
/// four after it the energy before it. A kink spoils the prediction from both sides, and much more than those of
/// the steps around it; a wall that is merely steep spoils all of them alike.
pub(super) fn kinks(
    grid: &Grid,
    coordinates: &[Vec<f64>],
    energy: &dyn Fn(usize) -> Option<f64>,
) -> BTreeSet<[usize; 2]> {
    let mut found = BTreeSet::new();
    for axis in 0..grid.shape().len() {
        for line in lines(grid, axis) {
            let x: Vec<f64> = line.iter().map(|&p| coordinates[p][axis]).collect();
            let e: Vec<Option<f64>> = line.iter().map(|&p| energy(p)).collect();
            for step in kinks_of_line(&x, &e) {
                let (a, b) = (line[step], line[step + 1]);
                found.insert([a.min(b), a.max(b)]);
            }
        }
    }
    found
}

/// The points of every line of the grid along one sweep.
fn lines(grid: &Grid, axis: usize) -> Vec<Vec<usize>> {
    let mut lines: std::collections::BTreeMap<Vec<usize>, Vec<usize>> =
        std::collections::BTreeMap::new();
    for point in 0..grid.len() {
        let mut rest = grid.index(point);
        rest.remove(axis);
        lines.entry(rest).or_default().push(point);
    }
    lines.into_values().collect()
}

/// Indices i of the steps i → i + 1 at kinks.
fn kinks_of_line(x: &[f64], energy: &[Option<f64>]) -> Vec<usize> {
    let misfit: Vec<Option<f64>> = (0..x.len().saturating_sub(1))
        .map(|i| misfit(x, energy, i))
        .collect();
    (0..misfit.len())
        .filter(|&i| {
            let Some(here) = misfit[i] else { return false };
            // A kink spoils the predictions across up to SIDE − 1 neighbouring steps as well; what is beyond is clean.
            let clean: Vec<f64> = (0..misfit.len())
                .filter(|&k| k.abs_diff(i) >= SIDE && k.abs_diff(i) <= 2 * SIDE)
                .filter_map(|k| misfit[k])
                .collect();
            let largest = (0..misfit.len())
                .filter(|&k| k != i && k.abs_diff(i) < SIDE)
                .filter_map(|k| misfit[k])
                .fold(0.0, f64::max);
            let usual = clean.iter().copied().fold(0.0, f64::max);
            !clean.is_empty() && here > NOISE && here >= largest && here > OUTSTANDING * usual
        })
        .collect()
}

/// How far the energies at the two ends of a step are from what the other side predicts, hartree: the smaller of
/// the two, where both can be predicted.
fn misfit(x: &[f64], energy: &[Option<f64>], i: usize) -> Option<f64> {
    let side = |range: std::ops::Range<usize>| -> Option<Vec<(f64, f64)>> {
        range.map(|k| Some((x[k], energy[k]?))).collect()
    };
    let before = (i + 1)
        .checked_sub(SIDE)
        .and_then(|first| side(first..i + 1));
    let after = (i + 1 + SIDE <= x.len())
        .then(|| side(i + 1..i + 1 + SIDE))
        .flatten();
    let ahead =
        before.map(|points| interpolate(&points, x[i + 1]) - energy[i + 1].unwrap_or(f64::NAN));
    let back = after.map(|points| interpolate(&points, x[i]) - energy[i].unwrap_or(f64::NAN));
    match (ahead, back) {
        (Some(a), Some(b)) if a.is_finite() && b.is_finite() => Some(a.abs().min(b.abs())),
        _ => None,
    }
}

/// The polynomial through some points, at `x` (Lagrange's form).
fn interpolate(points: &[(f64, f64)], x: f64) -> f64 {
    (0..points.len())
        .map(|i| {
            let weight: f64 = (0..points.len())
                .filter(|&k| k != i)
                .map(|k| (x - points[k].0) / (points[i].0 - points[k].0))
                .product();
            weight * points[i].1
        })
        .sum()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn line(step: f64, energy: impl Fn(f64) -> f64) -> (Vec<f64>, Vec<Option<f64>>) {
        let x: Vec<f64> = (0..41).map(|i| 0.7 + step * f64::from(i)).collect();
        let e = x.iter().map(|&x| Some(energy(x))).collect();
        (x, e)
    }

    #[test]
    fn smooth_curves_have_no_kinks() {
        for step in [0.02, 0.05] {
            let (x, e) = line(step, |x| 0.2 * (1.0 - (-2.2 * (x - 0.95)).exp()).powi(2));
            assert_eq!(kinks_of_line(&x, &e), Vec::<usize>::new());
            let (x, e) = line(step, |x| -0.1 * (0.3 * x).cos() + 0.02 * (3.0 * x).cos());
            assert_eq!(kinks_of_line(&x, &e), Vec::<usize>::new());
        }
    }

    #[test]
    fn a_jump_and_a_crossing_are_found_where_they_are() {
        let morse = |x: f64| 0.2 * (1.0 - (-2.2 * (x - 0.95)).exp()).powi(2);
        let (x, e) = line(0.05, |x| morse(x) - if x > 1.712 { 1e-3 } else { 0.0 });
        assert_eq!(kinks_of_line(&x, &e), vec![20]);
        let (x, e) = line(0.05, |x| morse(x).min(0.15 + 0.01 * (x - 1.7)));
        let crossing = kinks_of_line(&x, &e);
        assert_eq!(crossing.len(), 1, "{crossing:?}");
    }

    #[test]
    fn gaps_and_short_lines_are_no_kinks() {
        let (x, mut e) = line(0.05, |x| x * x);
        e[20] = None;
        assert!(kinks_of_line(&x, &e).is_empty());
        assert!(kinks_of_line(&x[..5], &e[..5]).is_empty());
        assert!(kinks_of_line(&[], &[]).is_empty());
    }
}
