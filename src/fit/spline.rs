//! Interpolating splines through the points of a curve.

use super::FitError;
use super::extrema::{check_curve, unroll};

/// Highest degree used: quintic, so that the fourth derivative, which governs how fast a grid of
/// vibrational states converges, is still continuous.
const DEGREE: usize = 5;

/// An interpolating spline in B-spline form.
///
/// Degree 5 where there are six points or more, else the highest odd degree that the points allow.
/// The ends have the not-a-knot form (C. de Boor, A Practical Guide to Splines, Springer 1978,
/// chapters IV and XIII): no condition is invented there.
#[derive(Debug, Clone, PartialEq)]
pub struct Spline {
    degree: usize,
    knots: Vec<f64>,
    coefficients: Vec<f64>,
    /// Taken out before the coefficients were computed, to keep digits.
    base: f64,
    lower: f64,
    upper: f64,
    period: Option<f64>,
}

impl Spline {
    /// The spline through points of strictly increasing `x`; even spacing is not needed.
    ///
    /// # Errors
    /// Fewer than two points, arrays of different lengths, numbers that are not finite or not increasing.
    pub fn new(x: &[f64], values: &[f64]) -> Result<Self, FitError> {
        check_curve(x, values)?;
        let n = x.len();
        if n < 2 {
            return Err(FitError::TooFewPoints {
                points: n,
                needed: 2,
            });
        }
        let degree = if n > DEGREE {
            DEGREE
        } else {
            (n - 2) / 2 * 2 + 1
        };
        let half = degree.div_ceil(2);
        let mut knots = vec![x[0]; degree + 1];
        knots.extend_from_slice(&x[half..n - half]);
        knots.extend(std::iter::repeat_n(x[n - 1], degree + 1));
        let base = values.iter().copied().fold(f64::INFINITY, f64::min);

        // Collocation matrix, banded: row i holds the degree + 1 functions that live at x_i.
        let width = 2 * degree + 1;
        let mut rows = vec![vec![0.0; width]; n];
        for (i, &v) in x.iter().enumerate() {
            let span = find_span(&knots, degree, n, v);
            for (j, b) in basis(&knots, degree, span, v).into_iter().enumerate() {
                let column = span - degree + j;
                rows[i][column + degree - i] = b;
            }
        }
        let mut right: Vec<f64> = values.iter().map(|v| v - base).collect();
        // Elimination without pivoting: the matrix is totally positive, for which this is stable (de
        // Boor and Pinkus, Numer. Math. 27, 485 (1977)).
        for i in 0..n {
            for r in i + 1..(i + degree + 1).min(n) {
                let factor = rows[r][i + degree - r] / rows[i][degree];
                for c in i..(i + degree + 1).min(n) {
                    rows[r][c + degree - r] -= factor * rows[i][c + degree - i];
                }
                right[r] -= factor * right[i];
            }
        }
        for i in (0..n).rev() {
            for c in i + 1..(i + degree + 1).min(n) {
                right[i] -= rows[i][c + degree - i] * right[c];
            }
            right[i] /= rows[i][degree];
        }
        Ok(Self {
            degree,
            knots,
            coefficients: right,
            base,
            lower: x[0],
            upper: x[n - 1],
            period: None,
        })
    }

    /// The spline of a curve that goes round `period`; a last point that repeats the first may be there.
    ///
    /// # Errors
    /// As [`Spline::new`], or points that do not go round the period.
    pub fn periodic(x: &[f64], values: &[f64], period: f64) -> Result<Self, FitError> {
        // A whole period on either side: what the ends do wrong has died out there (a factor of
        // about 0.43 per point for quintic splines).
        let rolled = unroll(x, values, period)?;
        let mut spline = Self::new(&rolled.x, &rolled.energies)?;
        spline.lower = x[0];
        spline.upper = x[0] + period;
        spline.period = Some(period);
        Ok(spline)
    }

    /// Where the points begin.
    #[must_use]
    pub fn lower(&self) -> f64 {
        self.lower
    }

    /// Where the points end (one period after the beginning, for a periodic spline).
    #[must_use]
    pub fn upper(&self) -> f64 {
        self.upper
    }

    /// The period, if there is one.
    #[must_use]
    pub fn period(&self) -> Option<f64> {
        self.period
    }

    /// Value at x. Beyond the ends of a spline without period: the value at the end.
    #[must_use]
    pub fn value(&self, x: f64) -> f64 {
        self.derivative(x, 0)
    }

    /// m-th derivative at x (one-sided at knots where it jumps); beyond the ends, that at the end.
    #[must_use]
    pub fn derivative(&self, x: f64, m: usize) -> f64 {
        if m > self.degree {
            return 0.0;
        }
        let at = match self.period {
            Some(period) => self.lower + (x - self.lower).rem_euclid(period),
            None => x.clamp(self.lower, self.upper),
        };
        let p = self.degree;
        let span = find_span(&self.knots, p, self.coefficients.len(), at);
        let mut local: Vec<f64> = self.coefficients[span - p..=span].to_vec();
        // Differences of the coefficients are those of the derivative (de Boor, chapter X).
        for d in 1..=m {
            let degree = p + 1 - d;
            for j in 0..=p - d {
                let i = span - p + d + j;
                let width = self.knots[i + degree] - self.knots[i];
                local[j] = degree as f64 * (local[j + 1] - local[j]) / width;
            }
            local.pop();
        }
        let degree = p - m;
        let sum: f64 = basis(&self.knots, degree, span, at)
            .iter()
            .zip(&local)
            .map(|(b, c)| b * c)
            .sum();
        if m == 0 { sum + self.base } else { sum }
    }
}

/// The knot interval that holds x.
fn find_span(knots: &[f64], degree: usize, functions: usize, x: f64) -> usize {
    let inner = &knots[degree..=functions];
    let above = inner.partition_point(|&k| k <= x);
    (degree + above)
        .saturating_sub(1)
        .clamp(degree, functions - 1)
}

/// The degree + 1 B-splines that live on a knot interval, at x (de Boor, chapter X, recurrence).
fn basis(knots: &[f64], degree: usize, span: usize, x: f64) -> Vec<f64> {
    let mut out = vec![1.0];
    for d in 1..=degree {
        let mut next = vec![0.0; d + 1];
        for (j, b) in out.iter().enumerate() {
            let right = knots[span + 1 + j];
            let left = knots[span + 1 + j - d];
            let share = b / (right - left);
            next[j] += share * (right - x);
            next[j + 1] += share * (x - left);
        }
        out = next;
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::f64::consts::TAU;

    #[test]
    fn quintics_are_reproduced_on_any_spacing() {
        let f = |x: f64| 1.0 + x * (0.3 + x * (-0.2 + x * (0.1 + x * (0.05 - 0.02 * x))));
        let x = [0.0, 0.1, 0.35, 0.4, 0.9, 1.3, 1.35, 2.0, 2.6];
        let spline = Spline::new(&x, &x.map(f)).unwrap();
        for i in 0..=52 {
            let at = 0.05 * f64::from(i);
            assert!((spline.value(at) - f(at)).abs() < 1e-12);
        }
        let slope = |x: f64| 0.3 + x * (-0.4 + x * (0.3 + x * (0.2 - 0.1 * x)));
        let third = |x: f64| 0.6 + x * (1.2 - 1.2 * x);
        for at in [0.0, 0.2, 1.3, 2.59] {
            assert!((spline.derivative(at, 1) - slope(at)).abs() < 1e-11);
            assert!((spline.derivative(at, 3) - third(at)).abs() < 1e-9);
        }
    }

    #[test]
    fn few_points_lower_the_degree() {
        for n in 2..6 {
            let x: Vec<f64> = (0..n).map(f64::from).collect();
            let y: Vec<f64> = x.iter().map(|v| 2.0 - 3.0 * v).collect();
            let spline = Spline::new(&x, &y).unwrap();
            assert!((spline.value(0.5) - 0.5).abs() < 1e-13);
        }
        assert!(Spline::new(&[1.0], &[1.0]).is_err());
    }

    #[test]
    fn a_periodic_spline_is_smooth_at_the_seam() {
        let f = |a: f64| (3.0 * a).cos() + 0.3 * (a - 0.4).sin();
        let x: Vec<f64> = (0..72).map(|i| -1.0 + TAU * f64::from(i) / 72.0).collect();
        let y: Vec<f64> = x.iter().map(|&a| f(a)).collect();
        let spline = Spline::periodic(&x, &y, TAU).unwrap();
        for at in [-1.0, -1.01, 5.25, 5.28, 11.0, 0.777] {
            assert!((spline.value(at) - f(at)).abs() < 2e-6, "{at}");
        }
        let jump = spline.derivative(-1.0 - 1e-9, 2) - spline.derivative(-1.0 + 1e-9, 2);
        assert!(jump.abs() < 1e-5);
    }

    #[test]
    fn the_error_falls_with_the_sixth_power_of_the_step() {
        let error = |n: u32| {
            let x: Vec<f64> = (0..=n).map(|i| 2.0 * f64::from(i) / f64::from(n)).collect();
            let y: Vec<f64> = x.iter().map(|v| v.exp()).collect();
            let spline = Spline::new(&x, &y).unwrap();
            (0..100)
                .map(|i| 0.02 * f64::from(i) + 0.003)
                .map(|a| (spline.value(a) - a.exp()).abs())
                .fold(0.0, f64::max)
        };
        let ratio = error(10) / error(20);
        assert!(ratio > 30.0, "{ratio}");
    }
}
