//! Fits of curves as the spec asks for them, each with the derivative-based force constant beside it.

use super::lines::Line;
use super::{LevelAnalysis, Material, MinimumResult, PointResult};
use crate::fit::{Coordinate, Fit, FitError, FitSettings, Form, Window, fit_curve};
use crate::scan::{Others, Stationary, StationaryKind, Sweep};
use crate::scf::iteration::FLAT_ENERGY;
use crate::spec::{FitForm, FitSpec, FitWindow};
use crate::surface::StopReason;
use crate::units::short;

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

/// Fits every form of the spec to lines; minima that find no fit on them are fitted on those of `instead`.
pub(super) fn fit_lines(
    material: &Material<'_>,
    lines: &[Line],
    instead: &[Line],
    analysis: &mut LevelAnalysis,
) {
    for wanted in &material.spec.fits {
        let mut found = fit_form(material, wanted, lines, &analysis.minima);
        let suits = |sweep: &Sweep| wanted.form.suits(sweep.kind());
        if !material.spec.sweeps.iter().any(suits) {
            continue;
        }
        if found.fits.is_empty() || !bare(material, &found, &analysis.minima).is_empty() {
            for fit in fit_form(material, wanted, instead, &analysis.minima).fits {
                let same = |f: &FitResult| material.is_same_place(&f.values, &fit.values);
                if !found.fits.iter().any(same) {
                    found.unfitted.retain(|(place, _)| {
                        material.apart(fit.sweep, *place, fit.values[fit.sweep])
                            > material.half_step(fit.sweep)
                    });
                    found.fits.push(fit);
                }
            }
        }
        for place in bare(material, &found, &analysis.minima) {
            let sweep = &material.spec.sweeps[0];
            found.unfitted.push((
                place,
                format!(
                    "no {} fit of the minimum at {}{}: too few points around it are on one smooth piece of the curve",
                    wanted.form.word(),
                    short(place),
                    unit_sign(sweep)
                ),
            ));
        }
        // That a piece of a curve has no minimum is worth a word only where no other has one.
        if found.fits.is_empty() && found.unfitted.is_empty() {
            analysis.notes.extend(found.refusal);
        }
        analysis
            .notes
            .extend(found.unfitted.into_iter().map(|(_, note)| note));
        analysis.fits.extend(found.fits);
    }
}

/// Minima of a curve (ångström or degree) that have neither a fit nor a word on why.
fn bare(material: &Material<'_>, found: &Found, minima: &[MinimumResult]) -> Vec<f64> {
    if material.spec.sweeps.len() != 1 {
        return Vec::new();
    }
    let near = |a: f64, b: f64| material.apart(0, a, b) <= material.half_step(0);
    minima
        .iter()
        .filter(|m| m.interior && m.kind == StationaryKind::Minimum)
        .map(|m| m.values[0])
        .filter(|&q| !found.fits.iter().any(|f| near(q, f.values[0])))
        .filter(|&q| !found.unfitted.iter().any(|(place, _)| near(q, *place)))
        .collect()
}

/// What came of one form.
#[derive(Default)]
struct Found {
    fits: Vec<FitResult>,
    /// Minima (ångström or degree) on which no order and window holds, with a sentence each.
    unfitted: Vec<(f64, String)>,
    /// Why a line has no fit at all.
    refusal: Option<String>,
}

fn fit_form(
    material: &Material<'_>,
    wanted: &FitSpec,
    lines: &[Line],
    minima: &[MinimumResult],
) -> Found {
    let mut found = Found::default();
    for line in lines {
        let sweep = &material.spec.sweeps[line.sweep];
        if !wanted.form.suits(sweep.kind()) {
            continue;
        }
        let word = wanted.form.word();
        let mut unfitted = |failure: &FitError| {
            let FitError::NoFit { at, .. } = failure else {
                return false;
            };
            let place = sweep.motion.coordinate.to_reported(*at);
            if line.owns(*at) {
                let note = format!("no {word} fit of one minimum: {}", reason(failure, sweep));
                found.unfitted.push((place, note));
            }
            true
        };
        let settings = settings(material, wanted, sweep, line);
        match fit_curve(
            &line.x,
            &line.energies,
            form(wanted.form),
            coordinate(sweep),
            &settings,
        ) {
            Ok(fits) => {
                for failure in &fits.failures {
                    unfitted(failure);
                }
                let own = |fit: &Fit| line.owns(fit.equilibrium);
                let results = fits.fits.into_iter().filter(own);
                found
                    .fits
                    .extend(results.map(|fit| result(material, line, fit, minima)));
            }
            Err(error) => {
                if !unfitted(&error) {
                    found.refusal = Some(format!(
                        "no {word} fit of the {} {}: {}",
                        sweep.kind(),
                        sweep.labels(&material.spec.molecule).join("–"),
                        reason(&error, sweep)
                    ));
                }
            }
        }
    }
    found
}

fn unit_sign(sweep: &Sweep) -> &'static str {
    if sweep.unit() == "degree" {
        "°"
    } else {
        " Å"
    }
}

/// A refusal with its place in the sweep's own unit.
fn reason(error: &FitError, sweep: &Sweep) -> String {
    match error {
        FitError::NoFit { at, points, needed } => {
            let unit = unit_sign(sweep);
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
    let threshold = match material.path_kind() {
        PathKind::Rigid => material.spec.scf.energy,
        PathKind::Relaxed => material.spec.scf.energy.max(RELAXED_NOISE),
    };
    let is_soft = |p: &PointResult| p.record.stop == StopReason::SoftMode;
    if material.points.iter().any(is_soft) {
        threshold.max(FLAT_ENERGY)
    } else {
        threshold
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
