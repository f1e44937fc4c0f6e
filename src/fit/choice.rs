//! Which order and window to trust, and how far.
//!
//! SCF energies carry no noise worth the name, so the error of a fitted force constant is model
//! error: too low an order for the window, or too few points to hold the order. Both show in how far
//! the constant moves when points are left out. Every order is therefore tried on every window grown
//! around the minimum, each trial's error of k is predicted by leaving out each point (exactly, by the hat matrix), the
//! best is kept, and the spread is the half range of k over all trials whose predicted error is
//! acceptable.

use super::Window;
use super::extrema::Extremum;
use super::least_squares::LinearFit;
use std::ops::Range;

/// A trial is acceptable when its predicted error of k is below this share of k …
const ACCEPTABLE_ERROR: f64 = 1e-3;
/// … or below this multiple of the smallest predicted error.
const ACCEPTABLE_MULTIPLE: f64 = 5.0;

/// One order on one window.
#[derive(Debug, Clone)]
pub(super) struct Trial<M> {
    pub(super) order: usize,
    /// Points used, as indices.
    pub(super) range: Range<usize>,
    pub(super) force_constant: f64,
    /// Model error of the force constant as leaving out points predicts it, in its unit.
    pub(super) error: f64,
    pub(super) model: M,
}

/// The trial to report and the spread of the acceptable ones.
#[derive(Debug, Clone)]
pub(super) struct Choice {
    pub(super) best: usize,
    /// Indices of all acceptable trials, the best among them.
    pub(super) acceptable: Vec<usize>,
    /// Half range of k over the acceptable trials, or the model error of the best where that is
    /// larger, divided by the best k.
    pub(super) spread: f64,
}

/// A fit whose residuals exceed this share of the energies it spans does not follow its points, however little its k
/// moves when one of them is left out.
const FOLLOWED: f64 = 0.05;

/// Whether a fit follows its points: the root mean square of the residuals is below a share of the range of `energies`, or
/// of the size of their noise (all in hartree).
pub(super) fn follows(linear: &LinearFit, energies: &[f64], noise: f64) -> bool {
    let high = energies.iter().copied().fold(f64::MIN, f64::max);
    let low = energies.iter().copied().fold(f64::MAX, f64::min);
    linear.rms() <= (FOLLOWED * (high - low)).max(10.0 * noise)
}

fn sound<M>(trial: &Trial<M>) -> bool {
    trial.force_constant > 0.0 && trial.error.is_finite()
}

/// Picks the trial with the smallest predicted error of its force constant; `None` when there is no
/// trial with a positive constant and a finite error.
pub(super) fn choose<M>(trials: &[Trial<M>]) -> Option<Choice> {
    let best = (0..trials.len())
        .filter(|&i| sound(&trials[i]))
        .min_by(|&a, &b| trials[a].error.total_cmp(&trials[b].error))?;
    assess(trials, best)
}

/// The spread around a trial picked on other grounds; `None` when it has no positive constant and
/// finite error.
pub(super) fn assess<M>(trials: &[Trial<M>], best: usize) -> Option<Choice> {
    if !sound(&trials[best]) {
        return None;
    }
    let k = trials[best].force_constant;
    let limit = (ACCEPTABLE_ERROR * k).max(ACCEPTABLE_MULTIPLE * trials[best].error);
    let acceptable: Vec<usize> = (0..trials.len())
        .filter(|&i| sound(&trials[i]) && trials[i].error <= limit)
        .collect();
    let (mut low, mut high) = (k, k);
    for &i in &acceptable {
        low = low.min(trials[i].force_constant);
        high = high.max(trials[i].force_constant);
    }
    let spread = (0.5 * (high - low)).max(trials[best].error) / k;
    Some(Choice {
        best,
        acceptable,
        spread,
    })
}

/// Windows around a minimum, each one point larger than the one before.
#[derive(Debug, Clone)]
pub(super) struct Growth {
    /// Window j holds j + 1 points.
    nested: Vec<Range<usize>>,
    /// Points inside the window asked for.
    pub(super) nominal: usize,
}

impl Growth {
    /// Grows windows from the point at `minimum.index`: by energy for [`Window::Below`], by distance for
    /// [`Window::Within`]. `basin` are the points between the neighbouring maxima; the window asked for
    /// never leaves it, and growth beyond (for the least number of points) does so last.
    pub(super) fn new(
        x: &[f64],
        energies: &[f64],
        minimum: &Extremum,
        basin: Range<usize>,
        window: Window,
    ) -> Self {
        let cost = |i: usize| match window {
            Window::Below { .. } => energies[i] - minimum.energy,
            Window::Within { .. } => (x[i] - minimum.x).abs(),
        };
        let limit = match window {
            Window::Below { hartree } => hartree,
            Window::Within { half_width } => half_width,
        };
        let mut range = minimum.index..minimum.index + 1;
        let mut nested = vec![range.clone()];
        let mut nominal = 1;
        let mut inside = true;
        while range.len() < x.len() {
            let left = range.start.checked_sub(1);
            let right = (range.end < x.len()).then_some(range.end);
            let rank = |i: usize| (!basin.contains(&i), cost(i));
            let next = match (left, right) {
                (Some(l), Some(r)) => {
                    let ((left_out, left_cost), (right_out, right_cost)) = (rank(l), rank(r));
                    let go_left = if left_out == right_out {
                        left_cost <= right_cost
                    } else {
                        right_out
                    };
                    if go_left { l } else { r }
                }
                (Some(i), None) | (None, Some(i)) => i,
                (None, None) => break,
            };
            range = range.start.min(next)..range.end.max(next + 1);
            // A little slack, so that a point meant to lie on the edge is inside.
            inside = inside && basin.contains(&next) && cost(next) <= limit * (1.0 + 1e-9);
            nested.push(range.clone());
            if inside {
                nominal = range.len();
            }
        }
        Self { nested, nominal }
    }

    /// The windows to try for a model that needs `least` points: from `least` to the window asked for,
    /// thinned to steps of about 8 % for dense curves; just the grown one when the window asked for
    /// holds fewer. Empty when the curve has too few points.
    pub(super) fn windows(&self, least: usize) -> Vec<Range<usize>> {
        let most = self.nominal.max(least);
        if most > self.nested.len() || least == 0 {
            return Vec::new();
        }
        let mut sizes = Vec::new();
        let mut size = least;
        while size < most {
            sizes.push(size);
            size += 1 + size / 13;
        }
        sizes.push(most);
        sizes
            .into_iter()
            .map(|n| self.nested[n - 1].clone())
            .collect()
    }
}
