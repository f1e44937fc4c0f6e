//! Fourier series of a torsion, and the same as force-field terms.
//!
//! E(φ) = a₀ + Σₙ aₙ cos nφ + bₙ sin nφ = c + Σₙ Vₙ/2 [1 + cos(nφ − γₙ)], Vₙ = 2√(aₙ² + bₙ²) ≥ 0. For a
//! torsion that is even in φ this is the usual form Σₙ Vₙ/2 [1 ± cos nφ] with signed Vₙ.

use super::choice::{Trial, assess, choose};
use super::constant::Coordinate;
use super::curve::Curve;
use super::extrema::{ExtremaSettings, Kind, check_curve};
use super::least_squares::LinearFit;
use super::{Fit, FitError, FitSettings, Form, Model, WindowUsed, dihedral_period};
use nalgebra::{DMatrix, DVector};
use std::collections::BTreeMap;
use std::f64::consts::{FRAC_PI_2, PI, TAU};

/// A Fourier series in hartree of an angle in radian.
#[derive(Debug, Clone, PartialEq)]
pub struct Fourier {
    /// a₀, a₁, … of cos nφ, hartree.
    pub cosines: Vec<f64>,
    /// b₁, b₂, … of sin nφ, hartree; empty when the torsion was taken to be even.
    pub sines: Vec<f64>,
}

/// One force-field term V/2 [1 + cos(nφ − γ)].
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct TorsionTerm {
    /// Multiple n of the angle.
    pub multiple: usize,
    /// V ≥ 0 in hartree.
    pub height: f64,
    /// Phase γ in radian, in (−π, π]; 0 or π for an even torsion.
    pub phase: f64,
}

impl Fourier {
    /// m-th derivative of the energy at φ (hartree/radianᵐ); m = 0 is the energy.
    #[must_use]
    pub fn derivative(&self, angle: f64, m: usize) -> f64 {
        let turn = m as f64 * FRAC_PI_2;
        let term = |n: usize, c: f64, s: f64| {
            let (sin, cos) = (n as f64 * angle + turn).sin_cos();
            (n as f64).powi(m as i32) * (c * cos + s * sin)
        };
        // From the highest multiple down: the constant may be a total energy.
        let mut sum = 0.0;
        for n in (1..self.cosines.len()).rev() {
            sum += term(
                n,
                self.cosines[n],
                self.sines.get(n - 1).copied().unwrap_or(0.0),
            );
        }
        if m == 0 {
            sum += self.cosines.first().copied().unwrap_or(0.0);
        }
        sum
    }

    /// The terms V/2 [1 + cos(nφ − γ)], n = 1, 2, …
    #[must_use]
    pub fn terms(&self) -> Vec<TorsionTerm> {
        (1..self.cosines.len())
            .map(|n| {
                let (a, b) = (
                    self.cosines[n],
                    self.sines.get(n - 1).copied().unwrap_or(0.0),
                );
                TorsionTerm {
                    multiple: n,
                    height: 2.0 * a.hypot(b),
                    phase: b.atan2(a),
                }
            })
            .collect()
    }

    /// V₁, V₂, … (hartree) of Σ Vₙ/2 [1 + (−1)ⁿ⁺¹ cos nφ], with signs; `None` unless the series is even.
    #[must_use]
    pub fn even_heights(&self) -> Option<Vec<f64>> {
        self.sines.is_empty().then(|| {
            (1..self.cosines.len())
                .map(|n| if n % 2 == 1 { 2.0 } else { -2.0 } * self.cosines[n])
                .collect()
        })
    }

    /// Minima and maxima in the order of the angle in [0, 2π): kind, angle, energy in hartree.
    #[must_use]
    pub fn stationary_points(&self) -> Vec<(Kind, f64, f64)> {
        // 48 samples per period of the highest multiple leave no pair of roots between two.
        let samples = 48 * self.cosines.len().max(2);
        let at = |i: usize| TAU * (i as f64 + 0.123) / samples as f64;
        let mut found = Vec::new();
        for i in 0..samples {
            let (mut low, mut high) = (at(i), at(i + 1));
            let (left, right) = (self.derivative(low, 1), self.derivative(high, 1));
            if (left < 0.0) == (right < 0.0) {
                continue;
            }
            for _ in 0..60 {
                let middle = 0.5 * (low + high);
                if (self.derivative(middle, 1) < 0.0) == (left < 0.0) {
                    low = middle;
                } else {
                    high = middle;
                }
            }
            let angle = 0.5 * (low + high);
            let kind = if left < 0.0 {
                Kind::Minimum
            } else {
                Kind::Maximum
            };
            // An angle a rounding error below 2π is 0.
            let wrapped = (angle + 1e-12).rem_euclid(TAU) - 1e-12;
            found.push((kind, wrapped.max(0.0), self.derivative(angle, 0)));
        }
        found.sort_by(|a, b| a.1.total_cmp(&b.1));
        found
    }

    /// Newton's method from `start`, staying within `reach` of it.
    fn minimum_near(&self, start: f64, reach: f64) -> Option<f64> {
        let mut angle = start;
        for _ in 0..50 {
            let curvature = self.derivative(angle, 2);
            if curvature <= 0.0 {
                return None;
            }
            let step = -self.derivative(angle, 1) / curvature;
            angle += step;
            if (angle - start).abs() > reach {
                return None;
            }
            if step.abs() < 1e-14 {
                break;
            }
        }
        Some(angle)
    }
}

/// Row of derivatives of the m-th derivative at φ with respect to the coefficients.
fn row(angle: f64, order: usize, sines: bool, m: usize) -> DVector<f64> {
    let turn = m as f64 * FRAC_PI_2;
    let mut out = vec![if m == 0 { 1.0 } else { 0.0 }];
    let scale = |n: usize| (n as f64).powi(m as i32);
    out.extend((1..=order).map(|n| scale(n) * (n as f64 * angle + turn).cos()));
    if sines {
        out.extend((1..=order).map(|n| scale(n) * (n as f64 * angle + turn).sin()));
    }
    DVector::from_vec(out)
}

/// The points as a whole turn: as they are, or mirrored at 0 when they go from 0 to π only.
struct Turn {
    curve: Curve,
    x: Vec<f64>,
    energies: Vec<f64>,
    even: bool,
}

fn whole_turn(x: &[f64], energies: &[f64], settings: &FitSettings) -> Result<Turn, FitError> {
    check_curve(x, energies)?;
    let periodic = ExtremaSettings {
        period: Some(TAU),
        ..settings.extrema
    };
    if dihedral_period(x).is_some() {
        return Ok(Turn {
            curve: Curve::new(x, energies, &periodic)?,
            x: x.to_vec(),
            energies: energies.to_vec(),
            even: false,
        });
    }
    // Folded into 0..=π; the two must be reached within a step and a half.
    let mut folded: Vec<(f64, f64)> = x
        .iter()
        .zip(energies)
        .map(|(&a, &e)| (PI - ((a.rem_euclid(TAU)) - PI).abs(), e))
        .collect();
    folded.sort_by(|a, b| a.0.total_cmp(&b.0));
    folded.dedup_by(|a, b| (a.0 - b.0).abs() < 1e-9);
    let step = folded
        .windows(2)
        .map(|w| w[1].0 - w[0].0)
        .fold(0.0, f64::max);
    let mut full: Vec<(f64, f64)> = folded
        .iter()
        .rev()
        .filter(|p| p.0 > 1e-9 && p.0 < PI - 1e-9)
        .map(|p| (-p.0, p.1))
        .collect();
    full.extend(&folded);
    let (a, e): (Vec<f64>, Vec<f64>) = full.into_iter().unzip();
    let span = x.last().unwrap_or(&0.0) - x.first().unwrap_or(&0.0);
    let first = folded.first().map_or(PI, |p| p.0);
    let last = folded.last().map_or(0.0, |p| p.0);
    if first > 1.5 * step || PI - last > 1.5 * step || folded.len() < 4 {
        return Err(FitError::NotAllRound { span, period: TAU });
    }
    let (x, energies) = folded.into_iter().unzip();
    Ok(Turn {
        curve: Curve::new(&a, &e, &periodic)?,
        x,
        energies,
        even: true,
    })
}

/// Fits Fourier series to a torsion, one [`Fit`] per minimum, all with the series of one order.
///
/// Points that go round the circle determine cosines and sines. Points that cover half of it (0 to π)
/// determine cosines only: the torsion is then taken to be even in φ, which the fit's notes say.
/// Of the orders, the one with the smallest leave-one-out error of its least certain force
/// constant is kept.
///
/// # Errors
/// Points that cover neither, no minimum, or too few points for the lowest order.
pub(super) fn fit(
    x: &[f64],
    energies: &[f64],
    settings: &FitSettings,
) -> Result<super::CurveFits, FitError> {
    let Turn {
        curve,
        x,
        energies,
        even,
    } = whole_turn(x, energies, settings)?;
    let step = x.windows(2).map(|w| w[1] - w[0]).fold(0.0, f64::max);
    let minima: Vec<f64> = curve
        .minima()
        .map(|m| m.x)
        .filter(|&m| !even || m > -0.5 * step)
        .collect();
    if minima.is_empty() {
        return Err(FitError::NoMinimum { points: x.len() });
    }
    let floor = energies.iter().copied().fold(f64::INFINITY, f64::min);
    let values = DVector::from_iterator(energies.len(), energies.iter().map(|e| e - floor));
    let (from, to) = (settings.orders.0.max(1), settings.orders.1);
    let mut trials: Vec<Vec<Trial<(Fourier, LinearFit, f64)>>> = vec![Vec::new(); minima.len()];
    for order in from..=to {
        let columns = if even { order + 1 } else { 2 * order + 1 };
        if x.len() < columns + 3 {
            break;
        }
        let rows: Vec<_> = x
            .iter()
            .map(|&a| row(a, order, !even, 0).transpose())
            .collect();
        let linear = LinearFit::new(DMatrix::from_rows(&rows), &values)?;
        let mut cosines: Vec<f64> = linear
            .coefficients
            .iter()
            .take(order + 1)
            .copied()
            .collect();
        cosines[0] += floor;
        let sines = linear
            .coefficients
            .iter()
            .skip(order + 1)
            .copied()
            .collect();
        let series = Fourier { cosines, sines };
        for (place, found) in minima.iter().zip(&mut trials) {
            let Some(angle) = series.minimum_near(*place, 2.0 * step) else {
                continue;
            };
            let k = series.derivative(angle, 2);
            let third = series.derivative(angle, 3);
            // As for polynomials: the minimum moves with the data.
            let gradient = row(angle, order, !even, 2) - row(angle, order, !even, 1) * (third / k);
            found.push(Trial {
                order,
                range: 0..x.len(),
                force_constant: k,
                error: linear.model_error(&gradient, settings.noise_hartree),
                model: (series.clone(), linear.clone(), angle),
            });
        }
    }
    // One order for all minima, so that they share one series.
    let worst = |order: usize| {
        trials
            .iter()
            .filter(|t| !t.is_empty())
            .map(|of_minimum| {
                of_minimum
                    .iter()
                    .find(|t| t.order == order)
                    .map_or(f64::INFINITY, |t| t.error / t.force_constant)
            })
            .fold(0.0, f64::max)
    };
    let common = (from..=to)
        .min_by(|&a, &b| worst(a).total_cmp(&worst(b)))
        .filter(|&order| worst(order).is_finite());
    let mut fits = super::CurveFits::default();
    for (place, of_minimum) in minima.iter().zip(&trials) {
        let choice = common
            .and_then(|order| of_minimum.iter().position(|t| t.order == order))
            .and_then(|best| assess(of_minimum, best))
            .or_else(|| choose(of_minimum));
        match choice {
            Some(choice) => {
                let trial = &of_minimum[choice.best];
                let mut fit = describe(trial, even, settings, (&x, x.len()));
                fit.spread = choice.spread;
                fit.trials = of_minimum.len();
                fit.trials_accepted = choice.acceptable.len();
                fits.fits.push(fit);
            }
            None => fits.failures.push(FitError::NoFit {
                at: *place,
                points: x.len(),
                needed: if even { from + 4 } else { 2 * from + 4 },
            }),
        }
    }
    Ok(fits)
}

fn describe(
    trial: &Trial<(Fourier, LinearFit, f64)>,
    even: bool,
    settings: &FitSettings,
    (x, points): (&[f64], usize),
) -> Fit {
    let (series, linear, angle) = &trial.model;
    let order = trial.order;
    let mut parameters = BTreeMap::from([("constant_hartree".to_owned(), series.cosines[0])]);
    let mut parameter_errors = BTreeMap::new();
    let error_of = |column: usize| {
        let mut gradient = DVector::zeros(linear.coefficients.len());
        gradient[column] = 1.0;
        linear.jackknife_error(&gradient, settings.noise_hartree)
    };
    parameter_errors.insert("constant_hartree".to_owned(), error_of(0));
    for n in 1..=order {
        let name = format!("cosine_{n}_hartree");
        parameter_errors.insert(name.clone(), error_of(n));
        parameters.insert(name, series.cosines[n]);
        if !even {
            let name = format!("sine_{n}_hartree");
            parameter_errors.insert(name.clone(), error_of(order + n));
            parameters.insert(name, series.sines[n - 1]);
        }
    }
    for term in series.terms() {
        let n = term.multiple;
        parameters.insert(format!("height_{n}_hartree"), term.height);
        parameters.insert(format!("phase_{n}_radian"), term.phase);
    }
    for (i, v) in series.even_heights().unwrap_or_default().iter().enumerate() {
        parameters.insert(format!("even_height_{}_hartree", i + 1), *v);
    }
    // Barriers to the two sides of this minimum.
    let energy = series.derivative(*angle, 0);
    let tops: Vec<_> = series
        .stationary_points()
        .into_iter()
        .filter(|p| p.0 == Kind::Maximum)
        .collect();
    let away = |top: f64| (top - angle).rem_euclid(TAU);
    if let Some(up) = tops.iter().min_by(|a, b| away(a.1).total_cmp(&away(b.1))) {
        parameters.insert("barrier_up_hartree".to_owned(), up.2 - energy);
    }
    if let Some(down) = tops.iter().max_by(|a, b| away(a.1).total_cmp(&away(b.1))) {
        parameters.insert("barrier_down_hartree".to_owned(), down.2 - energy);
    }
    let notes = if even {
        vec![
            "the points cover half a turn: the torsion is taken to be even in the angle".to_owned(),
        ]
    } else {
        Vec::new()
    };
    Fit {
        form: Form::Fourier,
        order,
        coordinate: Coordinate::Angle,
        window: WindowUsed {
            from: x.first().copied().unwrap_or(0.0),
            to: x.last().copied().unwrap_or(0.0),
            points,
        },
        equilibrium: *angle,
        energy,
        force_constant: trial.force_constant,
        third_derivative: Some(series.derivative(*angle, 3)),
        fourth_derivative: Some(series.derivative(*angle, 4)),
        spread: 0.0,
        trials_accepted: 0,
        trials: 0,
        leave_one_out_hartree: linear.leave_one_out_rms(),
        rms_residual_hartree: linear.rms(),
        parameters,
        parameter_errors,
        parameter_spreads: BTreeMap::new(),
        derivative_check: None,
        notes,
        model: Model::Fourier(series.clone()),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn force_field_terms_are_the_same_function() {
        let series = Fourier {
            cosines: vec![-1.0, 0.003, -0.002, 0.001],
            sines: vec![0.0005, -0.004, 0.0],
        };
        let terms = series.terms();
        let constant = -1.0 - terms.iter().map(|t| 0.5 * t.height).sum::<f64>();
        for i in 0..17 {
            let a = 0.4 * f64::from(i);
            let e: f64 = terms
                .iter()
                .map(|t| 0.5 * t.height * (1.0 + (t.multiple as f64 * a - t.phase).cos()))
                .sum();
            assert!((constant + e - series.derivative(a, 0)).abs() < 1e-14);
        }
    }

    #[test]
    fn even_heights_are_the_signed_form() {
        let series = Fourier {
            cosines: vec![0.0, 0.003, -0.002, 0.001],
            sines: vec![],
        };
        let v = series.even_heights().unwrap();
        for i in 0..9 {
            let a = 0.7 * f64::from(i);
            let e: f64 = v
                .iter()
                .enumerate()
                .map(|(i, v)| {
                    let n = i + 1;
                    let sign = if n % 2 == 1 { 1.0 } else { -1.0 };
                    0.5 * v * (1.0 + sign * (n as f64 * a).cos())
                })
                .sum();
            let shift = v.iter().sum::<f64>() / 2.0;
            assert!((e - shift - series.derivative(a, 0)).abs() < 1e-15);
        }
    }

    #[test]
    fn derivatives_follow_each_other() {
        let series = Fourier {
            cosines: vec![0.1, 0.3, -0.2],
            sines: vec![0.5, -0.4],
        };
        for m in 0..4 {
            let h = 1e-4;
            let numeric =
                (series.derivative(0.9 + h, m) - series.derivative(0.9 - h, m)) / (2.0 * h);
            assert!((numeric - series.derivative(0.9, m + 1)).abs() < 1e-6);
        }
    }

    #[test]
    fn stationary_points_go_round_once() {
        let series = Fourier {
            cosines: vec![0.0, 0.0, 0.0, 0.01],
            sines: vec![0.0; 3],
        };
        let found = series.stationary_points();
        assert_eq!(found.len(), 6);
        for (i, p) in found.iter().enumerate() {
            assert!((p.1 - i as f64 * PI / 3.0).abs() < 1e-9);
        }
    }
}
