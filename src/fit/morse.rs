//! Morse functions of a bond, with terms that let the exponent vary.
//!
//! The plain function (P. M. Morse, Phys. Rev. 34, 57 (1929)) ties the third and fourth derivative
//! to depth and curvature, which no molecule obeys. The extended Morse oscillator (E. G. Lee, J. Y. Seto,
//! T. Hirao, P. F. Bernath, R. J. Le Roy, J. Mol. Spectrosc. 194, 197 (1999)),
//!
//! V(r) = E₀ + D [1 − exp(−β(y)(r − r₀))]²,  β(y) = β₀ + β₁y + β₂y² + …,  y = (r − r₀)/(r + r₀),
//!
//! frees them one at a time. It is the extension used here because it stays a single well that levels
//! off at E₀ + D, contains the plain function (no further terms), keeps k = 2Dβ₀² whatever the
//! further terms, and adds one parameter at a time, so leaving points out can say how many are warranted.

use super::choice::{Growth, Trial, choose, follows};
use super::constant::Coordinate;
use super::curve::Curve;
use super::extrema::Extremum;
use super::least_squares::LinearFit;
use super::{Fit, FitError, FitSettings, Form, Model, WindowUsed};
use levenberg_marquardt::{LeastSquaresProblem, LevenbergMarquardt};
use nalgebra::storage::Owned;
use nalgebra::{DMatrix, DVector, Dyn};
use std::collections::BTreeMap;

/// An extended Morse function in atomic units; one exponent makes the plain function.
#[derive(Debug, Clone, PartialEq)]
pub struct Morse {
    /// Energy at the minimum, hartree.
    pub floor: f64,
    /// Well depth D, hartree.
    pub depth: f64,
    /// Place of the minimum r₀, bohr.
    pub equilibrium: f64,
    /// β₀, β₁, … in 1/bohr.
    pub exponents: Vec<f64>,
}

impl Morse {
    /// Energy in hartree at the length `r` in bohr.
    #[must_use]
    pub fn energy(&self, r: f64) -> f64 {
        let s = r - self.equilibrium;
        let y = s / (r + self.equilibrium);
        let beta = self.exponents.iter().rev().fold(0.0, |sum, b| sum * y + b);
        // 1 − exp(−u) without cancellation near the minimum.
        let w = (-beta * s).exp_m1();
        self.floor + self.depth * w * w
    }

    /// Second, third and fourth derivative at the minimum (hartree/bohrⁿ), in closed form.
    ///
    /// With u = βs = u₁s + u₂s² + u₃s³ + …, V/D = u² − u³ + 7u⁴/12 − …
    #[must_use]
    pub fn derivatives(&self) -> [f64; 3] {
        let beta = |j: usize| self.exponents.get(j).copied().unwrap_or(0.0);
        let two_r = 2.0 * self.equilibrium;
        let u1 = beta(0);
        let u2 = beta(1) / two_r;
        let u3 = (beta(2) - beta(1)) / (two_r * two_r);
        let d = self.depth;
        [
            2.0 * d * u1 * u1,
            6.0 * d * (2.0 * u1 * u2 - u1.powi(3)),
            24.0 * d * (u2 * u2 + 2.0 * u1 * u3 - 3.0 * u1 * u1 * u2 + 7.0 / 12.0 * u1.powi(4)),
        ]
    }
}

/// Least-squares problem in the parameters E₀, r₀, ln k, β₀, β₁, …: the curvature k is what the points
/// determine best, so it is a parameter itself and the depth k/(2β₀²) follows. With a fixed depth, β₀
/// follows from k instead.
struct Problem<'a> {
    x: &'a [f64],
    /// Energies above the lowest point, hartree.
    energies: &'a [f64],
    depth: Option<f64>,
    parameters: DVector<f64>,
}

const FLOOR: usize = 0;
const PLACE: usize = 1;
const LOG_K: usize = 2;
const FIRST_EXPONENT: usize = 3;

impl Problem<'_> {
    fn morse(&self) -> Morse {
        let p = &self.parameters;
        let k = p[LOG_K].exp();
        let (depth, exponents) = match self.depth {
            Some(depth) => {
                let mut exponents = vec![(0.5 * k / depth).sqrt()];
                exponents.extend(p.iter().skip(FIRST_EXPONENT));
                (depth, exponents)
            }
            None => {
                let exponents: Vec<f64> = p.iter().skip(FIRST_EXPONENT).copied().collect();
                (0.5 * k / (exponents[0] * exponents[0]), exponents)
            }
        };
        Morse {
            floor: p[FLOOR],
            depth,
            equilibrium: p[PLACE],
            exponents,
        }
    }

    /// Derivatives of the energy at every point with respect to the parameters.
    fn sensitivities(&self) -> DMatrix<f64> {
        let m = self.morse();
        let k = self.parameters[LOG_K].exp();
        let b0 = m.exponents[0];
        let mut out = DMatrix::zeros(self.x.len(), self.parameters.len());
        for (i, &x) in self.x.iter().enumerate() {
            let s = x - m.equilibrium;
            let sum = x + m.equilibrium;
            let y = s / sum;
            let (mut beta, mut slope) = (0.0, 0.0);
            for b in m.exponents.iter().rev() {
                slope = slope * y + beta;
                beta = beta * y + b;
            }
            let u = beta * s;
            // V = E₀ + k/2 w², w = (1 − e⁻ᵘ)/β₀
            let w = -(-u).exp_m1() / b0;
            let by_u = k * w * (-u).exp() / b0;
            let by_b0 = by_u * s - k * w * w / b0;
            out[(i, FLOOR)] = 1.0;
            out[(i, PLACE)] = by_u * (-beta - s * slope * 2.0 * x / (sum * sum));
            out[(i, LOG_K)] = 0.5 * k * w * w;
            let mut power = s;
            if self.depth.is_some() {
                out[(i, LOG_K)] += 0.5 * b0 * by_b0;
            } else {
                out[(i, FIRST_EXPONENT)] = by_b0;
            }
            let further = FIRST_EXPONENT + usize::from(self.depth.is_none());
            for j in further..self.parameters.len() {
                power *= y;
                out[(i, j)] = by_u * power;
            }
        }
        out
    }

    fn differences(&self) -> DVector<f64> {
        let m = self.morse();
        DVector::from_iterator(
            self.x.len(),
            self.x
                .iter()
                .zip(self.energies)
                .map(|(&x, &e)| e - m.energy(x)),
        )
    }
}

impl LeastSquaresProblem<f64, Dyn, Dyn> for Problem<'_> {
    type ResidualStorage = Owned<f64, Dyn>;
    type JacobianStorage = Owned<f64, Dyn, Dyn>;
    type ParameterStorage = Owned<f64, Dyn>;

    fn set_params(&mut self, p: &DVector<f64>) {
        self.parameters.copy_from(p);
    }

    fn params(&self) -> DVector<f64> {
        self.parameters.clone()
    }

    fn residuals(&self) -> Option<DVector<f64>> {
        let d = self.differences();
        d.iter().all(|v| v.is_finite()).then_some(d)
    }

    fn jacobian(&self) -> Option<DMatrix<f64>> {
        let j = -self.sensitivities();
        j.iter().all(|v| v.is_finite()).then_some(j)
    }
}

struct Solved {
    morse: Morse,
    linear: LinearFit,
    parameters: DVector<f64>,
}

/// One fit from `start`; `None` when it does not converge to a well.
fn attempt(
    curve: &Curve,
    range: std::ops::Range<usize>,
    start: DVector<f64>,
    terms: usize,
    settings: &FitSettings,
) -> Option<Trial<Solved>> {
    let x = &curve.x[range.clone()];
    let floor = curve.energies[range.clone()]
        .iter()
        .copied()
        .fold(f64::INFINITY, f64::min);
    let energies: Vec<f64> = curve.energies[range.clone()]
        .iter()
        .map(|e| e - floor)
        .collect();
    let problem = Problem {
        x,
        energies: &energies,
        depth: settings.morse_depth,
        parameters: start,
    };
    let (problem, report) = LevenbergMarquardt::new()
        .with_tol(1e-14)
        .with_patience(60)
        .minimize(problem);
    // "No improvement possible" is success here: the tolerances ask for all digits there are.
    if report.termination.was_usage_issue() || !report.objective_function.is_finite() {
        return None;
    }
    let mut morse = problem.morse();
    let inside = morse.equilibrium > x[0] && morse.equilibrium < x[x.len() - 1];
    if !inside
        || morse.exponents[0].is_nan()
        || morse.exponents[0] <= 0.0
        || !morse.depth.is_finite()
    {
        return None;
    }
    // The model is linear in its parameters to first order, so leaving out points costs nothing here either.
    let linear = LinearFit::new(problem.sensitivities(), &problem.differences()).ok()?;
    let k = morse.derivatives()[0];
    // Unless the Gauss–Newton step that is left is negligible, the search has not converged.
    if linear.coefficients[LOG_K].abs() > 1e-6 {
        return None;
    }
    let mut gradient = DVector::zeros(problem.parameters.len());
    gradient[LOG_K] = k;
    let error = linear.model_error(&gradient, settings.noise_hartree);
    morse.floor += floor;
    let followed = follows(
        &linear,
        &curve.energies[range.clone()],
        settings.noise_hartree,
    );
    (error.is_finite() && followed).then_some(Trial {
        order: terms,
        range,
        force_constant: k,
        error,
        model: Solved {
            morse,
            linear,
            parameters: problem.parameters,
        },
    })
}

/// Starting values from the derivatives of the interpolated points: the plain function has
/// V‴ = −3β₀k.
fn start(minimum: &Extremum, depth: Option<f64>) -> DVector<f64> {
    let [_, second, third, _] = minimum.derivatives;
    let k = if second > 0.0 { second } else { 0.3 };
    let mut start = vec![0.0, minimum.x, k.ln()];
    if depth.is_none() {
        let guess = -third / (3.0 * k);
        // 0.2 to 4 per bohr spans every bond (common practice); else a depth of 0.2 hartree.
        let sensible = (0.2..4.0).contains(&guess);
        start.push(if sensible { guess } else { (2.5 * k).sqrt() });
    }
    DVector::from_vec(start)
}

/// Fits plain and extended Morse functions to a minimum over all windows and numbers of terms and
/// reports the one whose force constant has the smallest leave-one-out error.
pub(super) fn fit(
    curve: &Curve,
    minimum: &Extremum,
    settings: &FitSettings,
) -> Result<Fit, FitError> {
    let growth = Growth::new(
        &curve.x,
        &curve.energies,
        minimum,
        curve.basin(minimum),
        settings.window,
    );
    let (from, to) = settings.morse_terms;
    let plain = FIRST_EXPONENT + usize::from(settings.morse_depth.is_none());
    let failed = || FitError::NoFit {
        at: minimum.x,
        points: curve.x.len(),
        needed: plain + from + 3,
    };
    if from > to || curve.x[0] + minimum.x <= 0.0 {
        return Err(failed());
    }
    let mut trials: Vec<Trial<Solved>> = Vec::new();
    for range in growth.windows(plain + from + 3) {
        let mut begin = start(minimum, settings.morse_depth);
        for terms in 0..=to {
            if range.len() < plain + terms + 3 {
                break;
            }
            if let Some(trial) = attempt(curve, range.clone(), begin.clone(), terms, settings) {
                // Each further term starts from the best function without it.
                begin = trial.model.parameters.clone();
                if terms >= from {
                    trials.push(trial);
                }
            }
            begin = begin.push(0.0);
        }
    }
    let choice = choose(&trials).ok_or_else(failed)?;
    let trial = &trials[choice.best];
    let Solved { morse, linear, .. } = &trial.model;
    let noise = settings.noise_hartree;
    let [k, third, fourth] = morse.derivatives();

    let error_of = |entries: &[(usize, f64)]| {
        let mut gradient = DVector::zeros(plain + trial.order);
        for &(i, v) in entries {
            gradient[i] = v;
        }
        linear.jackknife_error(&gradient, noise)
    };
    let b0 = morse.exponents[0];
    let (depth_error, exponent_error) = if settings.morse_depth.is_some() {
        (0.0, error_of(&[(LOG_K, 0.5 * b0)]))
    } else {
        let depth = [
            (LOG_K, morse.depth),
            (FIRST_EXPONENT, -2.0 * morse.depth / b0),
        ];
        (error_of(&depth), error_of(&[(FIRST_EXPONENT, 1.0)]))
    };
    let mut parameters = BTreeMap::from([
        ("energy_hartree".to_owned(), morse.floor),
        ("depth_hartree".to_owned(), morse.depth),
        ("equilibrium_bohr".to_owned(), morse.equilibrium),
        ("exponent_per_bohr".to_owned(), b0),
    ]);
    let mut parameter_errors = BTreeMap::from([
        ("energy_hartree".to_owned(), error_of(&[(FLOOR, 1.0)])),
        ("depth_hartree".to_owned(), depth_error),
        ("equilibrium_bohr".to_owned(), error_of(&[(PLACE, 1.0)])),
        ("exponent_per_bohr".to_owned(), exponent_error),
    ]);
    for (j, b) in morse.exponents.iter().enumerate().skip(1) {
        let name = format!("exponent_{j}_per_bohr");
        parameter_errors.insert(name.clone(), error_of(&[(plain + j - 1, 1.0)]));
        parameters.insert(name, *b);
    }
    let half_range = |value: fn(&Morse) -> f64| {
        let values = choice
            .acceptable
            .iter()
            .map(|&i| value(&trials[i].model.morse));
        let (low, high) = values.fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), v| {
            (l.min(v), h.max(v))
        });
        0.5 * (high - low)
    };
    let parameter_spreads = BTreeMap::from([
        ("depth_hartree".to_owned(), half_range(|m| m.depth)),
        (
            "exponent_per_bohr".to_owned(),
            half_range(|m| m.exponents[0]),
        ),
    ]);
    let top = curve.energies[trial.range.clone()]
        .iter()
        .copied()
        .fold(f64::NEG_INFINITY, f64::max);
    let mut notes = Vec::new();
    if settings.morse_depth.is_none() && top - morse.floor < 0.8 * morse.depth {
        notes.push(
            "the depth is an extrapolation: the points used rise to less than 80 % of it"
                .to_owned(),
        );
    }
    if trial.order > 0 {
        notes.push(format!(
            "extended Morse oscillator with {} further exponent(s): the plain Morse function leaves a larger error of k",
            trial.order
        ));
    }
    Ok(Fit {
        form: Form::Morse,
        order: trial.order,
        coordinate: Coordinate::Length,
        window: WindowUsed::of(curve, trial.range.clone()),
        equilibrium: morse.equilibrium,
        energy: morse.floor,
        force_constant: k,
        third_derivative: Some(third),
        fourth_derivative: Some(fourth),
        spread: choice.spread,
        trials_accepted: choice.acceptable.len(),
        trials: trials.len(),
        leave_one_out_hartree: linear.leave_one_out_rms(),
        rms_residual_hartree: linear.rms(),
        parameters,
        parameter_errors,
        parameter_spreads,
        derivative_check: None,
        notes,
        model: Model::Morse(morse.clone()),
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn sample() -> Morse {
        Morse {
            floor: -0.3,
            depth: 0.17,
            equilibrium: 1.8,
            exponents: vec![1.1, -0.3, 0.7],
        }
    }

    #[test]
    fn derivatives_are_those_of_the_energy() {
        let m = sample();
        let h = 0.02;
        let at = |n: i32| m.energy(m.equilibrium + f64::from(n) * h);
        // central differences of sixth order
        let second = (at(3) / 90.0 - 0.15 * at(2) + 1.5 * at(1) - 49.0 / 18.0 * at(0)
            + 1.5 * at(-1)
            - 0.15 * at(-2)
            + at(-3) / 90.0)
            / (h * h);
        let third =
            ((at(3) - at(-3)) * -0.125 + (at(2) - at(-2)) - 1.625 * (at(1) - at(-1))) / h.powi(3);
        let [k, f3, _] = m.derivatives();
        assert!((k - second).abs() < 1e-8 * k);
        assert!((f3 - third).abs() < 1e-4 * f3.abs());
        let taylor = |s: f64| {
            let [a, b, c] = m.derivatives();
            m.floor + s * s * (a / 2.0 + s * (b / 6.0 + s * c / 24.0))
        };
        // What is left after the fourth order is of the fifth: halving s divides it by 32.
        let left = |s: f64| m.energy(m.equilibrium + s) - taylor(s);
        let ratio = left(0.04) / left(0.02);
        assert!((ratio - 32.0).abs() < 3.0, "{ratio}");
    }

    #[test]
    fn sensitivities_are_those_of_the_energy() {
        let x = [1.2, 1.7, 1.8, 2.3, 3.0];
        for depth in [None, Some(0.2)] {
            let mut parameters = vec![0.01, 1.85, (0.4_f64).ln()];
            if depth.is_none() {
                parameters.push(1.2);
            }
            parameters.extend([-0.4, 0.9]);
            let problem = |p: &[f64]| Problem {
                x: &x,
                energies: &[0.0; 5],
                depth,
                parameters: DVector::from_column_slice(p),
            };
            let analytic = problem(&parameters).sensitivities();
            for j in 0..parameters.len() {
                let h = 1e-5;
                let (mut up, mut down) = (parameters.clone(), parameters.clone());
                up[j] += h;
                down[j] -= h;
                let numeric =
                    (problem(&down).differences() - problem(&up).differences()) / (2.0 * h);
                for i in 0..x.len() {
                    assert!((analytic[(i, j)] - numeric[i]).abs() < 1e-9);
                }
            }
        }
    }
}
