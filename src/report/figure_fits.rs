//! The analysed part of figures: fitted curves, refined minima, vibrational states.

use super::fitted::reported;
use super::text_fits::form_words;
use crate::job::analysis::FitResult;
use crate::job::{JobResult, LevelResult};
use crate::plot::{Axis, CurveFit, CurveMark, SurfaceMark, VibrationFigure, VibrationState};
use crate::scan::StationaryKind;
use crate::spec::Spec;
use std::f64::consts::PI;

/// Points that a fitted curve is drawn with.
const DRAWN: usize = 121;

/// The fits of a curve over the windows that they used; the minima of a series share one line.
pub(super) fn fits(
    result: &JobResult,
    level: &LevelResult,
    zero: f64,
    scale: f64,
) -> Vec<CurveFit> {
    let sweep = &result.sweeps[0];
    let all = &level.analysis.fits;
    let drawn = all.iter().enumerate().filter(|(k, f)| {
        let known = all[..*k].iter().any(|g| g.fit.model == f.fit.model);
        f.sweep == 0 && !known
    });
    drawn
        .map(|(_, f)| {
            let (from, mut to) = (f.fit.window.from, f.fit.window.to);
            if sweep.kind == "angle" {
                // A fit may use the mirror image beyond a straight angle, which the figure does not show.
                to = to.min(PI);
            }
            let own_place = |g: &&FitResult| g.fit.form == f.fit.form && g.fit.model != f.fit.model;
            let name = if all.iter().any(|g| own_place(&g)) {
                // Several wells, each with its own fit.
                let unit = if sweep.unit == "angstrom" {
                    " Å"
                } else {
                    "°"
                };
                let decimals = if sweep.unit == "angstrom" { 2 } else { 0 };
                let place = reported(sweep, f.fit.equilibrium);
                format!("{} at {place:.decimals$}{unit}", form_words(&f.fit))
            } else {
                form_words(&f.fit)
            };
            CurveFit {
                name,
                points: (0..DRAWN)
                    .map(|i| from + (to - from) * i as f64 / (DRAWN - 1) as f64)
                    .map(|q| (reported(sweep, q), (f.fit.model.energy(q) - zero) * scale))
                    .collect(),
            }
        })
        .collect()
}

/// Minima of a curve, not those at its ends.
pub(super) fn curve_minima(level: &LevelResult, zero: f64, scale: f64) -> Vec<CurveMark> {
    level
        .analysis
        .minima
        .iter()
        .filter(|m| m.interior)
        .map(|m| CurveMark {
            x: m.values[0],
            energy: (m.energy - zero) * scale,
            text: None,
        })
        .collect()
}

/// Minima and saddle points of a surface.
pub(super) fn surface_marks(
    level: &LevelResult,
    kind: StationaryKind,
    zero: f64,
    scale: f64,
) -> Vec<SurfaceMark> {
    let analysis = &level.analysis;
    analysis
        .minima
        .iter()
        .chain(&analysis.barriers)
        .filter(|m| m.interior && m.kind == kind)
        .map(|m| SurfaceMark {
            x: m.values[0],
            y: m.values[1],
            energy: (m.energy - zero) * scale,
            text: None,
        })
        .collect()
}

/// Valley floors of a surface, one after another.
pub(super) fn valley_path(level: &LevelResult) -> Vec<(f64, f64)> {
    level
        .analysis
        .valleys
        .first()
        .map(|v| v.points.iter().map(|([x, y], _)| (*x, *y)).collect())
        .unwrap_or_default()
}

/// Vibrational states of every level that has any, energies counted from the minimum that they belong to.
pub(super) fn vibrations(
    spec: &Spec,
    result: &JobResult,
    axis: &Axis,
) -> Vec<(String, VibrationFigure)> {
    let mut figures = Vec::new();
    for level in &result.levels {
        let Some(found) = &level.analysis.spectroscopy else {
            continue;
        };
        if found.states.is_empty() {
            continue;
        }
        let scale = spec.output.energy.per_hartree();
        // The first figure has the plain name; further ones are numbered from 2.
        let name = match figures.len() {
            0 => "vibration".to_owned(),
            n => format!("vibration-{}", n + 1),
        };
        let mass = found.mass.reduced();
        let note = match (found.mass.exact, found.mass.is_length) {
            (true, _) => format!("{}, reduced mass {mass:.5} u", level.name),
            (false, true) => format!(
                "{}, G element at the minimum, 1/g = {mass:.5} u",
                level.name
            ),
            (false, false) => format!(
                "{}, G element at the minimum, 1/g = {mass:.4} u Å²",
                level.name
            ),
        };
        let figure = VibrationFigure {
            title: result.title.clone(),
            notes: vec![note],
            sweep: axis.clone(),
            energy_unit: spec.output.energy.symbol().to_owned(),
            zero: "the minimum".to_owned(),
            points: level
                .points
                .iter()
                .map(|p| {
                    let energy = p.record.energy.map(|e| (e - found.minimum_energy) * scale);
                    (p.values[0], energy)
                })
                .collect(),
            states: found
                .states
                .iter()
                .enumerate()
                .map(|(v, s)| VibrationState {
                    energy: s.energy * scale,
                    name: format!("v = {v}"),
                    density: s.density.clone(),
                })
                .collect(),
            limit: level
                .limit
                .as_ref()
                .and_then(|l| l.energy)
                .map(|e| (e - found.minimum_energy) * scale),
        };
        figures.push((name, figure));
    }
    figures
}
