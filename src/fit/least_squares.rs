//! Linear least squares with exact leave-one-out residuals, shared by the models.

use nalgebra::{DMatrix, DVector};

/// Why a least-squares problem has no usable solution.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum LeastSquaresError {
    /// Fewer rows than columns, or lengths that differ.
    #[error("{rows} rows and {values} values cannot determine {columns} parameters")]
    TooFewRows {
        /// rows of the design matrix
        rows: usize,
        /// parameters
        columns: usize,
        /// values given
        values: usize,
    },
    /// The columns of the design matrix are linearly dependent on these points.
    #[error("the terms are linearly dependent on these points (pivot ratio {ratio:.1e})")]
    Dependent {
        /// smallest over largest diagonal element of R
        ratio: f64,
    },
}

/// Smallest accepted ratio of the diagonal elements of R: below it about four digits of a
/// double are left in the coefficients.
const DEPENDENCE: f64 = 1e-12;

/// A solved linear least-squares problem min ‖A c − y‖ with the factors kept, so that
/// leave-one-out errors and sensitivities come at no cost.
///
/// Solved by Householder QR, A = QR: the normal equations would square the condition number.
#[derive(Debug, Clone)]
pub struct LinearFit {
    q: DMatrix<f64>,
    r: DMatrix<f64>,
    /// The coefficients c, one per column of the design matrix.
    pub coefficients: DVector<f64>,
    /// y − A c, one per row.
    pub residuals: DVector<f64>,
    /// Diagonal of the hat matrix A(AᵀA)⁻¹Aᵀ = QQᵀ, one per row, each in 0..=1.
    pub leverage: DVector<f64>,
}

impl LinearFit {
    /// Solves min ‖A c − y‖; `design` is A (one row per point, one column per term).
    ///
    /// # Errors
    /// When there are fewer rows than columns or the columns are linearly dependent.
    pub fn new(design: DMatrix<f64>, values: &DVector<f64>) -> Result<Self, LeastSquaresError> {
        let (rows, columns) = design.shape();
        if rows < columns || columns == 0 || values.len() != rows {
            return Err(LeastSquaresError::TooFewRows {
                rows,
                columns,
                values: values.len(),
            });
        }
        let (q, r) = design.clone().qr().unpack();
        let pivots = r.diagonal().abs();
        let ratio = pivots.min() / pivots.max();
        // A NaN ratio (a zero or non-finite matrix) must be refused as well.
        if ratio.is_nan() || ratio < DEPENDENCE {
            return Err(LeastSquaresError::Dependent { ratio });
        }
        let coefficients = r
            .solve_upper_triangular(&(q.transpose() * values))
            .ok_or(LeastSquaresError::Dependent { ratio })?;
        let residuals = values - design * &coefficients;
        let leverage = DVector::from_iterator(rows, q.row_iter().map(|row| row.norm_squared()));
        Ok(Self {
            q,
            r,
            coefficients,
            residuals,
            leverage,
        })
    }

    /// Residual of each point from the fit that leaves this point out, e_i/(1 − h_i): exact for linear
    /// models (D. M. Allen, Technometrics 16, 125 (1974), the PRESS residuals). Infinite for a point
    /// that alone determines a parameter.
    #[must_use]
    pub fn leave_one_out(&self) -> DVector<f64> {
        self.residuals.zip_map(&self.leverage, |e, h| {
            let rest = 1.0 - h;
            if rest > 1e-10 {
                e / rest
            } else {
                f64::INFINITY
            }
        })
    }

    /// Root mean square of the leave-one-out residuals.
    #[must_use]
    pub fn leave_one_out_rms(&self) -> f64 {
        rms(&self.leave_one_out())
    }

    /// Root mean square of the residuals.
    #[must_use]
    pub fn rms(&self) -> f64 {
        rms(&self.residuals)
    }

    /// Derivative of a function of the coefficients with respect to each value y_i, given its
    /// gradient g with respect to the coefficients: Q R⁻ᵀ g.
    #[must_use]
    pub fn sensitivity(&self, gradient: &DVector<f64>) -> DVector<f64> {
        // The pivots were checked when the fit was made, so the triangular solve succeeds.
        match self.r.tr_solve_upper_triangular(gradient) {
            Some(z) => &self.q * z,
            None => DVector::from_element(self.q.nrows(), f64::INFINITY),
        }
    }

    /// Leave-one-out (jackknife) standard error of a function of the coefficients with gradient
    /// `gradient`: √Σ (∂f/∂y_i)² (d_i² + noise²), where d_i is the leave-one-out residual.
    ///
    /// Leaving out point i changes the function by exactly −(∂f/∂y_i) d_i; `noise` keeps a fit with few
    /// spare points from looking perfect by chance. (B. Efron, The Jackknife, the Bootstrap and Other
    /// Resampling Plans, SIAM 1982, chapter 3; MacKinnon and White, J. Econometrics 29, 305 (1985), HC3.)
    #[must_use]
    pub fn jackknife_error(&self, gradient: &DVector<f64>, noise: f64) -> f64 {
        let sensitivity = self.sensitivity(gradient);
        sensitivity
            .iter()
            .zip(self.leave_one_out().iter())
            .map(|(c, d)| c * c * (d * d + noise * noise))
            .sum::<f64>()
            .sqrt()
    }

    /// Model error of a function of the coefficients with gradient `gradient`: Σ |∂f/∂y_i| |d_i| plus
    /// the effect of independent `noise`.
    ///
    /// What a model lacks pulls neighbouring points the same way, so its effects add up instead of averaging
    /// out, and many points on too wide a window must not look better than they are.
    #[must_use]
    pub fn model_error(&self, gradient: &DVector<f64>, noise: f64) -> f64 {
        let sensitivity = self.sensitivity(gradient);
        let shifts = sensitivity.component_mul(&self.leave_one_out());
        shifts.lp_norm(1) + noise * sensitivity.norm()
    }
}

fn rms(v: &DVector<f64>) -> f64 {
    (v.norm_squared() / v.len() as f64).sqrt()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn problem(n: usize) -> (DMatrix<f64>, DVector<f64>) {
        let design = DMatrix::from_fn(n, 3, |i, j| (0.3 * i as f64 - 0.7).powi(j as i32));
        let values = DVector::from_fn(n, |i, _| (0.3 * i as f64).sin());
        (design, values)
    }

    #[test]
    fn leave_one_out_is_what_leaving_one_out_gives() {
        let (design, values) = problem(9);
        let fit = LinearFit::new(design.clone(), &values).unwrap();
        let loo = fit.leave_one_out();
        for i in 0..9 {
            let less = LinearFit::new(design.clone().remove_row(i), &values.clone().remove_row(i))
                .unwrap();
            let predicted = (design.row(i) * &less.coefficients)[0];
            assert!((values[i] - predicted - loo[i]).abs() < 1e-13);
        }
    }

    #[test]
    fn sensitivity_is_the_change_with_a_value() {
        let (design, values) = problem(7);
        let fit = LinearFit::new(design.clone(), &values).unwrap();
        let gradient = DVector::from_vec(vec![0.2, -1.0, 3.0]);
        let s = fit.sensitivity(&gradient);
        for i in 0..7 {
            let mut moved = values.clone();
            moved[i] += 1.0;
            let other = LinearFit::new(design.clone(), &moved).unwrap();
            let change = gradient.dot(&(other.coefficients - &fit.coefficients));
            assert!((change - s[i]).abs() < 1e-12);
        }
    }

    #[test]
    fn dependent_columns_are_refused() {
        let design = DMatrix::from_fn(5, 2, |i, j| (i as f64 + 1.0) * (j as f64 + 1.0));
        let values = DVector::from_element(5, 1.0);
        assert!(matches!(
            LinearFit::new(design, &values),
            Err(LeastSquaresError::Dependent { .. })
        ));
        assert!(matches!(
            LinearFit::new(DMatrix::zeros(2, 3), &DVector::zeros(2)),
            Err(LeastSquaresError::TooFewRows { .. })
        ));
    }
}
