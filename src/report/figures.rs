//! Results → figures: fills the plain structs of [`plot`](crate::plot) and renders them in the formats asked for.

use super::{figure_fits, state_figures};
use crate::job::{JobResult, LevelResult, PointResult};
use crate::plot::{Axis, CurveFigure, CurveLevel, CurveLimit, Figure, PlotError, SurfaceFigure};
use crate::scan::StationaryKind;
use crate::spec::{FigureFormat, Spec};

/// Every figure of a result: file name and bytes. A run without a sweep has none.
///
/// # Errors
/// [`PlotError`] if a figure cannot be drawn.
pub fn render(spec: &Spec, result: &JobResult) -> Result<Vec<(String, Vec<u8>)>, PlotError> {
    let mut files = Vec::new();
    for (name, figure) in draw(spec, result)? {
        for format in &spec.output.figures {
            let bytes = match format {
                FigureFormat::Svg => figure.svg.clone().into_bytes(),
                FigureFormat::Png => figure.png()?,
            };
            files.push((format!("{name}.{}", format.word()), bytes));
        }
    }
    Ok(files)
}

fn draw(spec: &Spec, result: &JobResult) -> Result<Vec<(String, Figure)>, PlotError> {
    if result.sweeps.is_empty() {
        return Ok(Vec::new());
    }
    let mut figures = vec![("audit".to_owned(), state_figures::audit(result).draw()?)];
    if result.sweeps.len() == 1 {
        figures.push(("curve".to_owned(), curve(spec, result).draw()?));
        for (name, figure) in figure_fits::vibrations(spec, result, &axis(result, 0)) {
            figures.push((name, figure.draw()?));
        }
    }
    for (k, level) in result.levels.iter().enumerate() {
        if result.sweeps.len() == 1 {
            figures.push((
                numbered("density", k),
                state_figures::density(result, level).draw()?,
            ));
        } else {
            figures.push((numbered("surface", k), surface(spec, result, level).draw()?));
        }
    }
    Ok(figures)
}

/// The first level's figure has the plain name; further ones are numbered from 2.
fn numbered(name: &str, level: usize) -> String {
    if level == 0 {
        name.to_owned()
    } else {
        format!("{name}-{}", level + 1)
    }
}

/// Axis of a sweep.
pub(super) fn axis(result: &JobResult, sweep: usize) -> Axis {
    let sweep = &result.sweeps[sweep];
    let quantity = match sweep.kind {
        "bond" => "distance",
        kind => kind,
    };
    let unit = if sweep.unit == "angstrom" { "Å" } else { "°" };
    Axis::new(format!("{} {quantity}", sweep.atoms.join("–")), unit)
}

/// An energy in the figure's unit, with as many decimals as a reader needs.
fn energy_words(spec: &Spec, hartree: f64) -> String {
    let unit = spec.output.energy;
    let value = hartree * unit.per_hartree();
    let decimals = match value.abs() {
        v if v >= 100.0 => 1,
        v if v >= 1.0 => 3,
        _ => 5,
    };
    format!("{value:.decimals$} {}", unit.symbol())
}

fn relative(spec: &Spec, point: &PointResult, zero: f64) -> Option<f64> {
    point
        .record
        .energy
        .map(|e| (e - zero) * spec.output.energy.per_hartree())
}

fn curve(spec: &Spec, result: &JobResult) -> CurveFigure {
    CurveFigure {
        title: result.title.clone(),
        notes: Vec::new(),
        sweep: axis(result, 0),
        energy_unit: spec.output.energy.symbol().to_owned(),
        zero: result.zero_words(),
        levels: result
            .levels
            .iter()
            .map(|level| curve_level(spec, result, level))
            .collect(),
    }
}

fn curve_level(spec: &Spec, result: &JobResult, level: &LevelResult) -> CurveLevel {
    // Without one converged point there is nothing that the zero would matter to.
    let zero = result.zero_of(level).unwrap_or(0.0);
    let scale = spec.output.energy.per_hartree();
    let second: Vec<(f64, Option<f64>)> = level
        .points
        .iter()
        .map(|p| (p.values[0], p.second_energy.map(|e| (e - zero) * scale)))
        .collect();
    CurveLevel {
        name: level.name.clone(),
        points: level
            .points
            .iter()
            .map(|p| (p.values[0], relative(spec, p, zero)))
            .collect(),
        second_solution: if second.iter().any(|(_, e)| e.is_some()) {
            second
        } else {
            Vec::new()
        },
        minima: figure_fits::curve_minima(level, zero, scale),
        fits: figure_fits::fits(result, level, zero, scale),
        breaks: state_figures::breaks(level),
        limit: level
            .limit
            .as_ref()
            .and_then(|l| l.energy)
            .map(|e| CurveLimit {
                energy: (e - zero) * scale,
                // The zero is a grid point, the dissociation energy counts from the refined minimum.
                text: level
                    .dissociation_energy()
                    .filter(|_| level.analysis.minima.iter().any(|m| m.interior))
                    .map(|de| {
                        let corrected = match level.limit.as_ref().and_then(|l| l.counterpoise) {
                            Some(_) => ", counterpoise-corrected",
                            None => "",
                        };
                        format!("separated parts, De {}{corrected}", energy_words(spec, de))
                    }),
            }),
        onset: level.onset.map(|o| o.value),
        findings: (0..level.points.len())
            .filter(|&k| {
                level.points[k].record.energy.is_some()
                    && level.points[k].findings.iter().any(|f| f.is_ringed())
            })
            .collect(),
    }
}

fn surface(spec: &Spec, result: &JobResult, level: &LevelResult) -> SurfaceFigure {
    let zero = level.bottom().unwrap_or(0.0);
    let refined = level.analysis.minima.iter().any(|m| m.interior);
    let scale = spec.output.energy.per_hartree();
    let mut energies = vec![None; result.grid.len()];
    for point in &level.points {
        energies[point.point] = relative(spec, point, zero);
    }
    SurfaceFigure {
        title: result.title.clone(),
        notes: Vec::new(),
        level: level.name.clone(),
        x: axis(result, 0),
        y: axis(result, 1),
        energy_unit: spec.output.energy.symbol().to_owned(),
        zero: if refined {
            "the lowest minimum".to_owned()
        } else {
            "the lowest point of the grid".to_owned()
        },
        x_values: result.sweeps[0].values.clone(),
        y_values: result.sweeps[1].values.clone(),
        energies,
        cap: None,
        minima: figure_fits::surface_marks(level, StationaryKind::Minimum, zero, scale),
        saddles: figure_fits::surface_marks(level, StationaryKind::Saddle, zero, scale),
        path: figure_fits::valley_path(level),
        findings: level
            .points
            .iter()
            .filter(|p| p.record.energy.is_some() && p.findings.iter().any(|f| f.is_ringed()))
            .map(|p| (p.index[0], p.index[1]))
            .collect(),
    }
}
