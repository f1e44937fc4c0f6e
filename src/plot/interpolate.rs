//! Lines through computed points: runs of converged neighbours, and a cubic spline across a run.

/// Not-a-knot cubic spline: C. de Boor, "A Practical Guide to Splines" (Springer 1978), chapter IV;
/// a parabola through three points, a straight line through two.
#[derive(Debug, Clone)]
pub(super) struct Spline {
    x: Vec<f64>,
    y: Vec<f64>,
    /// Second derivatives at the knots.
    bend: Vec<f64>,
}

impl Spline {
    /// The spline through points of strictly rising `x`; `None` with fewer than two points, or
    /// where `x` does not rise.
    pub(super) fn new(x: &[f64], y: &[f64]) -> Option<Self> {
        let n = x.len();
        if n < 2 || y.len() != n || x.windows(2).any(|p| p[1] <= p[0]) {
            return None;
        }
        let h: Vec<f64> = x.windows(2).map(|p| p[1] - p[0]).collect();
        let slope: Vec<f64> = (0..n - 1).map(|i| (y[i + 1] - y[i]) / h[i]).collect();
        let mut bend = vec![0.0; n];
        if n == 3 {
            bend.fill(2.0 * (slope[1] - slope[0]) / (h[0] + h[1]));
        } else if n > 3 {
            // Rows of the inner knots; the outer second derivatives are eliminated by continuity
            // of the third derivative across the first and last inner knot.
            let m = n - 2;
            let mut lower = vec![0.0; m];
            let mut diagonal = vec![0.0; m];
            let mut upper = vec![0.0; m];
            let mut right = vec![0.0; m];
            for k in 0..m {
                lower[k] = h[k];
                diagonal[k] = 2.0 * (h[k] + h[k + 1]);
                upper[k] = h[k + 1];
                right[k] = 6.0 * (slope[k + 1] - slope[k]);
            }
            diagonal[0] += h[0] * (1.0 + h[0] / h[1]);
            upper[0] -= h[0] * h[0] / h[1];
            let (p, q) = (h[n - 3], h[n - 2]);
            diagonal[m - 1] += q * (1.0 + q / p);
            lower[m - 1] -= q * q / p;
            for k in 1..m {
                let factor = lower[k] / diagonal[k - 1];
                diagonal[k] -= factor * upper[k - 1];
                right[k] -= factor * right[k - 1];
            }
            bend[m] = right[m - 1] / diagonal[m - 1];
            for k in (0..m - 1).rev() {
                bend[k + 1] = (right[k] - upper[k] * bend[k + 2]) / diagonal[k];
            }
            bend[0] = (1.0 + h[0] / h[1]) * bend[1] - h[0] / h[1] * bend[2];
            bend[n - 1] = (1.0 + q / p) * bend[n - 2] - q / p * bend[n - 3];
        }
        bend.iter().all(|b| b.is_finite()).then(|| Self {
            x: x.to_vec(),
            y: y.to_vec(),
            bend,
        })
    }

    /// The value at fraction `t` (0–1) of the interval after knot `i`.
    ///
    /// Where the spline strays from the chord further than its neighbours' second differences
    /// can explain (next to a jump between two states), the chord is taken: rather a corner than
    /// a wiggle that no calculation gave.
    pub(super) fn within(&self, i: usize, t: f64) -> f64 {
        let h = self.x[i + 1] - self.x[i];
        let chord = self.y[i] * (1.0 - t) + self.y[i + 1] * t;
        let stray = |t: f64| {
            let s = 1.0 - t;
            h * h / 6.0 * ((s * s * s - s) * self.bend[i] + (t * t * t - t) * self.bend[i + 1])
        };
        let (left, right) = (self.second_difference(i), self.second_difference(i + 1));
        let allowed = 0.07 * left.max(right) + 0.2 * left.min(right);
        if self.x.len() > 3 && stray(0.5).abs() > allowed {
            chord
        } else {
            chord + stray(t)
        }
    }

    /// The value at `x`, which is taken into the range of the knots first.
    pub(super) fn value(&self, x: f64) -> f64 {
        let last = self.x.len() - 1;
        let i = self.x.partition_point(|&k| k <= x).clamp(1, last) - 1;
        let t = (x - self.x[i]) / (self.x[i + 1] - self.x[i]);
        self.within(i, t.clamp(0.0, 1.0))
    }

    /// How far the knot lies from the chord of its neighbours, in units of the second difference
    /// of an even grid. End knots take their neighbour's.
    fn second_difference(&self, i: usize) -> f64 {
        let i = i.clamp(1, self.x.len().saturating_sub(2).max(1));
        if i + 1 >= self.x.len() {
            return 0.0;
        }
        let (h, g) = (self.x[i] - self.x[i - 1], self.x[i + 1] - self.x[i]);
        let wide = h.max(g);
        let curvature =
            2.0 * ((self.y[i + 1] - self.y[i]) / g - (self.y[i] - self.y[i - 1]) / h) / (h + g);
        (curvature * wide * wide).abs()
    }
}

/// Runs of neighbouring points that have a value, in rising `x`. `breaks` lists points that must
/// not be joined to the one before them.
pub(super) fn runs(points: &[(f64, Option<f64>)], breaks: &[usize]) -> Vec<Vec<(f64, f64)>> {
    let mut out: Vec<Vec<(f64, f64)>> = Vec::new();
    let mut run: Vec<(f64, f64)> = Vec::new();
    for (i, &(x, value)) in points.iter().enumerate() {
        if breaks.contains(&i) && !run.is_empty() {
            out.push(std::mem::take(&mut run));
        }
        match value {
            Some(value) => run.push((x, value)),
            None if !run.is_empty() => out.push(std::mem::take(&mut run)),
            None => {}
        }
    }
    if !run.is_empty() {
        out.push(run);
    }
    for run in &mut out {
        run.sort_by(|p, q| p.0.total_cmp(&q.0));
    }
    out
}

/// A run refined to `per_interval` pieces between neighbours by the spline; the run itself where
/// the spline does not exist.
pub(super) fn smooth(run: &[(f64, f64)], per_interval: usize) -> Vec<(f64, f64)> {
    let (x, y): (Vec<f64>, Vec<f64>) = run.iter().copied().unzip();
    let Some(spline) = Spline::new(&x, &y) else {
        return run.to_vec();
    };
    let pieces = per_interval.max(1);
    let mut out = Vec::with_capacity((run.len() - 1) * pieces + 1);
    for i in 0..run.len() - 1 {
        for k in 0..pieces {
            let t = k as f64 / pieces as f64;
            out.push((x[i] + (x[i + 1] - x[i]) * t, spline.within(i, t)));
        }
    }
    out.push(run[run.len() - 1]);
    out
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn spline_reproduces_a_cubic_on_an_uneven_grid() {
        let f = |x: f64| 1.0 - 2.0 * x + 0.5 * x * x * x;
        for n in [4, 5, 9] {
            let x: Vec<f64> = (0..n)
                .map(|i| 0.3 * f64::from(i) + 0.05 * f64::from(i * i))
                .collect();
            let y: Vec<f64> = x.iter().map(|&x| f(x)).collect();
            let spline = Spline::new(&x, &y).expect("rising grid");
            for (i, pair) in x.windows(2).enumerate() {
                for t in [0.2, 0.5, 0.9] {
                    let at = pair[0] + (pair[1] - pair[0]) * t;
                    assert!((spline.within(i, t) - f(at)).abs() < 1e-12);
                    assert!((spline.value(at) - f(at)).abs() < 1e-12);
                }
            }
        }
    }

    #[test]
    fn spline_follows_a_well_and_refuses_to_ring_beside_a_jump() {
        let morse = |x: f64| (1.0 - (-2.0 * (x - 1.0)).exp()).powi(2);
        let x: Vec<f64> = (0..24).map(|i| 0.7 + 0.1 * f64::from(i)).collect();
        let y: Vec<f64> = x.iter().map(|&x| morse(x)).collect();
        let spline = Spline::new(&x, &y).expect("rising grid");
        for k in 0..230 {
            let at = 0.7 + 0.01 * f64::from(k);
            assert!((spline.value(at) - morse(at)).abs() < 2e-3, "{at}");
        }
        let step: Vec<f64> = x
            .iter()
            .map(|&x| if x < 1.95 { 0.0 } else { 1.0 })
            .collect();
        let spline = Spline::new(&x, &step).expect("rising grid");
        for k in 0..230 {
            let value = spline.value(0.7 + 0.01 * f64::from(k));
            assert!((-0.08..=1.08).contains(&value), "{value}");
        }
    }

    #[test]
    fn runs_end_at_gaps_and_breaks_and_rise() {
        let points = [
            (3.0, Some(1.0)),
            (2.0, Some(2.0)),
            (1.5, None),
            (1.0, Some(3.0)),
            (0.5, Some(4.0)),
        ];
        let runs = runs(&points, &[4]);
        assert_eq!(
            runs,
            vec![
                vec![(2.0, 2.0), (3.0, 1.0)],
                vec![(1.0, 3.0)],
                vec![(0.5, 4.0)]
            ]
        );
    }

    #[test]
    fn short_or_repeated_grids_have_no_spline() {
        assert!(Spline::new(&[1.0], &[1.0]).is_none());
        assert!(Spline::new(&[1.0, 1.0], &[1.0, 2.0]).is_none());
        assert_eq!(smooth(&[(1.0, 2.0)], 5), vec![(1.0, 2.0)]);
    }
}
