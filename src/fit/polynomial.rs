//! Polynomials of a window, in a Chebyshev basis.

use super::choice::{Growth, Trial, choose, follows};
use super::constant::Coordinate;
use super::curve::Curve;
use super::extrema::Extremum;
use super::least_squares::{LeastSquaresError, LinearFit};
use super::{Fit, FitError, FitSettings, Form, Model, WindowUsed};
use nalgebra::{DMatrix, DVector};
use std::collections::BTreeMap;

/// A polynomial as a Chebyshev series Σ c_j T_j((x − centre)/half).
///
/// Powers of x would lose all digits at order 8; in this basis the condition number stays small.
#[derive(Debug, Clone, PartialEq)]
pub struct Series {
    centre: f64,
    half: f64,
    coefficients: Vec<f64>,
}

/// m-th derivatives of T_0 … T_order at t, `table[m][j]`, for m = 0 … `derivatives`, by
/// T_{j+1}^{(m)} = 2t T_j^{(m)} + 2m T_j^{(m−1)} − T_{j−1}^{(m)}
/// (the three-term recurrence differentiated m times).
pub(super) fn chebyshev(t: f64, order: usize, derivatives: usize) -> Vec<Vec<f64>> {
    let mut table = vec![vec![0.0; order + 1]; derivatives + 1];
    table[0][0] = 1.0;
    if order >= 1 {
        table[0][1] = t;
        if derivatives >= 1 {
            table[1][1] = 1.0;
        }
    }
    for j in 1..order {
        for m in 0..=derivatives {
            let below = if m == 0 { 0.0 } else { table[m - 1][j] };
            table[m][j + 1] = 2.0 * t * table[m][j] + 2.0 * m as f64 * below - table[m][j - 1];
        }
    }
    table
}

impl Series {
    fn frame(x: &[f64]) -> (f64, f64) {
        let (first, last) = (x[0], x[x.len() - 1]);
        (0.5 * (first + last), 0.5 * (last - first))
    }

    /// Least-squares polynomial of `order` through the points (increasing `x`, at least order + 1 of
    /// them), with the solved problem.
    ///
    /// # Errors
    /// Fewer than order + 1 points, or points that coincide.
    pub fn fit(
        x: &[f64],
        values: &[f64],
        order: usize,
    ) -> Result<(Self, LinearFit), LeastSquaresError> {
        if x.len() < 2 || x.len() <= order {
            return Err(LeastSquaresError::TooFewRows {
                rows: x.len(),
                columns: order + 1,
                values: values.len(),
            });
        }
        let (centre, half) = Self::frame(x);
        let mut design = DMatrix::zeros(x.len(), order + 1);
        for (i, &v) in x.iter().enumerate() {
            for (j, t) in chebyshev((v - centre) / half, order, 0)[0]
                .iter()
                .enumerate()
            {
                design[(i, j)] = *t;
            }
        }
        // The lowest energy is taken out first: total energies of −100 hartree cost four digits.
        let floor = values.iter().copied().fold(f64::INFINITY, f64::min);
        let shifted = DVector::from_iterator(values.len(), values.iter().map(|v| v - floor));
        let solved = LinearFit::new(design, &shifted)?;
        let mut coefficients: Vec<f64> = solved.coefficients.iter().copied().collect();
        coefficients[0] += floor;
        let series = Self {
            centre,
            half,
            coefficients,
        };
        Ok((series, solved))
    }

    /// The polynomial of lowest order through all the points.
    ///
    /// # Errors
    /// Fewer than two points, or points that coincide.
    pub fn through(x: &[f64], values: &[f64]) -> Result<Self, LeastSquaresError> {
        Self::fit(x, values, x.len().saturating_sub(1)).map(|(series, _)| series)
    }

    /// Degree of the polynomial.
    #[must_use]
    pub fn order(&self) -> usize {
        self.coefficients.len() - 1
    }

    /// Gradient of the m-th derivative at x with respect to the coefficients.
    fn gradient(&self, x: f64, derivative: usize) -> DVector<f64> {
        let table = chebyshev((x - self.centre) / self.half, self.order(), derivative);
        let scale = self.half.powi(derivative as i32);
        DVector::from_iterator(
            self.order() + 1,
            table[derivative].iter().map(|t| t / scale),
        )
    }

    /// Value and derivatives at x, `highest + 1` numbers.
    #[must_use]
    pub fn derivatives(&self, x: f64, highest: usize) -> Vec<f64> {
        let table = chebyshev((x - self.centre) / self.half, self.order(), highest);
        let mut scale = 1.0;
        let mut out = Vec::with_capacity(highest + 1);
        for row in &table {
            // Small terms first: the constant may be a total energy.
            let sum: f64 = row
                .iter()
                .zip(&self.coefficients)
                .rev()
                .map(|(t, c)| t * c)
                .sum();
            out.push(sum / scale);
            scale *= self.half;
        }
        out
    }

    /// The stationary point within `lower..=upper` that Newton's method reaches from `start`, if any.
    #[must_use]
    pub fn stationary(&self, start: f64, lower: f64, upper: f64) -> Option<f64> {
        let mut x = start;
        for _ in 0..50 {
            let d = self.derivatives(x, 2);
            let step = -d[1] / d[2];
            if !step.is_finite() {
                return None;
            }
            let next = x + step.clamp(lower - x, upper - x);
            let moved = (next - x).abs();
            x = next;
            if moved <= 1e-13 * (x.abs() + self.half) {
                // Clamped at an end: the stationary point lies outside.
                let reached = step.abs() <= 1e-9 * self.half;
                return reached.then_some(x);
            }
        }
        None
    }

    /// Coefficients of (x − x0)^j, j = 0 … order.
    #[must_use]
    pub fn taylor(&self, x0: f64) -> Vec<f64> {
        let mut factorial = 1.0;
        self.derivatives(x0, self.order())
            .into_iter()
            .enumerate()
            .map(|(j, d)| {
                factorial *= j.max(1) as f64;
                d / factorial
            })
            .collect()
    }
}

struct Solved {
    series: Series,
    linear: LinearFit,
    equilibrium: f64,
}

fn attempt(
    curve: &Curve,
    minimum: &Extremum,
    order: usize,
    range: std::ops::Range<usize>,
    noise: f64,
) -> Option<Trial<Solved>> {
    let x = &curve.x[range.clone()];
    let (series, linear) = Series::fit(x, &curve.energies[range.clone()], order).ok()?;
    // The points bracket their minimum: a fit that has it elsewhere is none.
    let lower = curve.x[minimum.index.saturating_sub(1)].max(x[0]);
    let upper = curve.x[(minimum.index + 1).min(curve.x.len() - 1)].min(x[x.len() - 1]);
    let equilibrium = series.stationary(minimum.x, lower, upper)?;
    let d = series.derivatives(equilibrium, 3);
    let (k, third) = (d[2], d[3]);
    // k is taken at the fit's own minimum, which moves with the data: δk = δf″ − (f‴/f″) δf′.
    let gradient = series.gradient(equilibrium, 2) - series.gradient(equilibrium, 1) * (third / k);
    let error = linear.model_error(&gradient, noise);
    let followed = follows(&linear, &curve.energies[range.clone()], noise);
    (k > 0.0 && error.is_finite() && followed).then_some(Trial {
        order,
        range,
        force_constant: k,
        error,
        model: Solved {
            series,
            linear,
            equilibrium,
        },
    })
}

/// Fits polynomials to the minimum of a curve over all orders and windows and reports the one whose
/// force constant has the smallest leave-one-out error.
pub(super) fn fit(
    curve: &Curve,
    minimum: &Extremum,
    coordinate: Coordinate,
    settings: &FitSettings,
) -> Result<Fit, FitError> {
    let growth = Growth::new(
        &curve.x,
        &curve.energies,
        minimum,
        curve.basin(minimum),
        settings.window,
    );
    let (from, to) = settings.orders;
    let mut trials = Vec::new();
    for order in from.max(2)..=to {
        for range in growth.windows(order + 3) {
            trials.extend(attempt(
                curve,
                minimum,
                order,
                range,
                settings.noise_hartree,
            ));
        }
    }
    let choice = choose(&trials).ok_or(FitError::NoFit {
        at: minimum.x,
        points: curve.x.len(),
        needed: from.max(2) + 3,
    })?;
    let trial = &trials[choice.best];
    let Solved {
        series,
        linear,
        equilibrium,
    } = &trial.model;
    let taylor = series.taylor(*equilibrium);
    let mut parameters = BTreeMap::new();
    let mut parameter_errors = BTreeMap::new();
    let mut factorial = 1.0;
    for (j, value) in taylor.iter().enumerate() {
        factorial *= j.max(1) as f64;
        let name = match j {
            0 => "c0_hartree".to_owned(),
            1 => continue,
            _ => format!("c{j}_hartree_per_{}{j}", coordinate.unit()),
        };
        let gradient = series.gradient(*equilibrium, j) / factorial;
        parameter_errors.insert(
            name.clone(),
            linear.jackknife_error(&gradient, settings.noise_hartree),
        );
        parameters.insert(name, *value);
    }
    let d = series.derivatives(*equilibrium, 4);
    Ok(Fit {
        form: Form::Polynomial,
        order: trial.order,
        coordinate,
        window: WindowUsed::of(curve, trial.range.clone()),
        equilibrium: *equilibrium,
        energy: d[0],
        force_constant: d[2],
        third_derivative: (trial.order >= 3).then_some(d[3]),
        fourth_derivative: (trial.order >= 4).then_some(d[4]),
        spread: choice.spread,
        trials_accepted: choice.acceptable.len(),
        trials: trials.len(),
        leave_one_out_hartree: linear.leave_one_out_rms(),
        rms_residual_hartree: linear.rms(),
        parameters,
        parameter_errors,
        parameter_spreads: BTreeMap::new(),
        derivative_check: None,
        notes: Vec::new(),
        model: Model::Taylor {
            origin: *equilibrium,
            coefficients: taylor,
        },
    })
}
