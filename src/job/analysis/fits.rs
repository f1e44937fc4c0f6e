//! Fits of curves as the spec asks for them, each with the derivative-based force constant beside it.

use super::lines::Line;
use super::{LevelAnalysis, Material, MinimumResult};
use crate::fit::{Coordinate, Fit, FitError, FitSettings, Form, Window, fit_curve};
use crate::scan::{Others, Stationary, Sweep};
use crate::spec::{FitForm, FitSpec, FitWindow};

/// What the coordinates that are not swept do along a curve.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize)]
#[serde(rename_all = "lowercase")]
pub enum PathKind {
    /// they keep their values
    Rigid,
    /// they are optimised at every point
    Relaxed,
}

impl PathKind {
    /// The path of a walk whose other coordinates do this.
    #[must_use]
    pub fn of(others: Others) -> Self {
        match others {
            Others::Fixed => Self::Rigid,
            Others::Optimised => Self::Relaxed,
        }
    }

    /// The word used in files.
    #[must_use]
    pub fn word(self) -> &'static str {
        match self {
            Self::Rigid => "rigid",
            Self::Relaxed => "relaxed",
        }
    }
}

/// One fit and the sweep it belongs to.
#[derive(Debug, Clone, PartialEq)]
pub struct FitResult {
    /// Number of the sweep.
    pub sweep: usize,
    /// The fit, in atomic units.
    pub fit: Fit,
    /// Values of all sweeps at the fitted minimum, ångström or degree.
    pub values: Vec<f64>,
}

/// Fits every form of the spec to lines; where a form finds nothing on them, to those of `instead`.
pub(super) fn fit_lines(
    material: &Material<'_>,
    lines: &[Line],
    instead: &[Line],
    analysis: &mut LevelAnalysis,
) {
    for wanted in &material.spec.fits {
        let mut found = fit_form(material, wanted, lines, &analysis.minima);
        if found.fits.is_empty() && !instead.is_empty() && instead != lines {
            found = fit_form(material, wanted, instead, &analysis.minima);
        }
        analysis.fits.extend(found.fits);
        analysis.notes.extend(found.notes);
    }
}

/// What came of one form.
#[derive(Default)]
struct Found {
    fits: Vec<FitResult>,
    notes: Vec<String>,
}

fn fit_form(
    material: &Material<'_>,
    wanted: &FitSpec,
    lines: &[Line],
    minima: &[MinimumResult],
) -> Found {
    let mut found = Found::default();
    let mut refusal = None;
    for line in lines {
        let sweep = &material.spec.sweeps[line.sweep];
        if !wanted.form.suits(sweep.kind()) {
            continue;
        }
        let settings = settings(material, wanted, sweep, line);
        let fits = fit_curve(
            &line.x,
            &line.energies,
            form(wanted.form),
            coordinate(sweep),
            &settings,
        );
        match fits {
            Ok(fits) => {
                let own = |fit: &Fit| line.owns(fit.equilibrium);
                let results = fits.fits.into_iter().filter(own);
                found
                    .fits
                    .extend(results.map(|fit| result(material, line, fit, minima)));
                found.notes.extend(fits.failures.iter().map(|failure| {
                    format!(
                        "no {} fit of one minimum: {}",
                        wanted.form.word(),
                        reason(failure, sweep)
                    )
                }));
            }
            Err(error) => refusal = Some((line.sweep, error)),
        }
    }
    // That one piece of a curve has no minimum is worth a word only where no other has one.
    if let (true, Some((sweep, error))) = (found.fits.is_empty(), refusal) {
        let sweep = &material.spec.sweeps[sweep];
        found.notes.push(format!(
            "no {} fit of the {} {}: {}",
            wanted.form.word(),
            sweep.kind(),
            sweep.labels(&material.spec.molecule).join("–"),
            reason(&error, sweep)
        ));
    }
    found
}

/// A refusal with its place in the sweep's own unit.
fn reason(error: &FitError, sweep: &Sweep) -> String {
    match error {
        FitError::NoFit { at, points, needed } => {
            let unit = if sweep.unit() == "degree" {
                "°"
            } else {
                " Å"
            };
            format!(
                "near {:.3}{unit} no order and window holds; {points} points are there and the lowest order needs \
                 {needed}",
                sweep.motion.coordinate.to_reported(*at)
            )
        }
        FitError::NotAllRound { span, .. } => format!(
            "points over {:.1}° do not go round the circle",
            span.to_degrees()
        ),
        other => other.to_string(),
    }
}

fn form(form: FitForm) -> Form {
    match form {
        FitForm::Polynomial => Form::Polynomial,
        FitForm::Morse => Form::Morse,
        FitForm::Fourier => Form::Fourier,
    }
}

pub(super) fn coordinate(sweep: &Sweep) -> Coordinate {
    if sweep.unit() == "degree" {
        Coordinate::Angle
    } else {
        Coordinate::Length
    }
}

fn settings(material: &Material<'_>, wanted: &FitSpec, sweep: &Sweep, line: &Line) -> FitSettings {
    let default = FitSettings::default();
    let width = wanted
        .window
        .half_width(sweep.kind(), material.spec.unit)
        .map(|w| sweep.motion.coordinate.from_reported(w));
    FitSettings {
        orders: wanted.orders.unwrap_or(default.orders),
        window: match (wanted.window, width) {
            (FitWindow::Below { energy, unit }, _) => Window::Below {
                hartree: energy / unit.per_hartree(),
            },
            (FitWindow::Within(_), Some(half_width)) => Window::Within { half_width },
            (FitWindow::Within(_), None) => default.window,
        },
        noise_hartree: noise(material),
        extrema: line.settings,
        ..default
    }
}

/// What the energies of a relaxed scan scatter by, hartree: the optimisation ends when a step promises less than 1e-6, and
/// the last one as a rule leaves a fiftieth of that.
const RELAXED_NOISE: f64 = 2e-8;

/// Scatter of the energies, hartree.
pub(super) fn noise(material: &Material<'_>) -> f64 {
    match material.path_kind() {
        PathKind::Rigid => material.spec.scf.energy,
        PathKind::Relaxed => material.spec.scf.energy.max(RELAXED_NOISE),
    }
}

fn result(
    material: &Material<'_>,
    line: &Line,
    mut fit: Fit,
    minima: &[MinimumResult],
) -> FitResult {
    let sweep = &material.spec.sweeps[line.sweep];
    let mut values = line.others.clone();
    values[line.sweep] = sweep.motion.coordinate.to_reported(fit.equilibrium);
    if !line.owns(fit.window.to) {
        fit.notes.push(
            "the curve is continued past 180° by its mirror image, which a straight molecule has there".to_owned(),
        );
    }
    if let Some(second) = material
        .minimum_at(minima, &values)
        .and_then(|m| m.second_derivatives.get(line.sweep).copied())
    {
        fit.check_against(second);
    }
    FitResult {
        sweep: line.sweep,
        values,
        fit,
    }
}

/// The second derivative from gradients along a sweep at a minimum, hartree per bohr² or radian²: from the Hessian with
/// all else following for a relaxed path, from differences of dE/dq for a rigid one.
pub(super) fn second_derivative(refined: &Stationary, sweep: usize, path: PathKind) -> Option<f64> {
    let relaxed = refined
        .harmonic
        .as_ref()
        .filter(|_| path == PathKind::Relaxed && refined.curvature.len() == 1)
        .and_then(|h| h.relaxed.get(sweep));
    match relaxed {
        Some(second) => Some(*second),
        None => refined.curvature.get(sweep)?.get(sweep).copied(),
    }
}
