//! Surfaces of two sweeps: cuts through their minima, the quadratic force field, and valley floors.

use super::fits::{PathKind, coordinate};
use super::lines::Line;
use super::{LevelAnalysis, Material, MinimumResult, fits};
use crate::fit::constant::Coordinate;
use crate::fit::spline::Spline;
use crate::fit::surface::{QuadraticField, SurfaceSettings, quadratic_field};
use crate::fit::{Verdict, verdict};
use crate::minimise::valley::valley_floor;
use crate::scan::{Grid, StationaryKind};
use crate::units::KJ_PER_MOL_PER_HARTREE;
use nalgebra::Vector2;

/// Quadratic force field of two swept coordinates, E = E₀ + ½k₁₁d₁² + k₁₂d₁d₂ + ½k₂₂d₂².
#[derive(Debug, Clone, PartialEq)]
pub struct ForceField {
    /// The fit, atomic units.
    pub field: QuadraticField,
    /// Kind of each coordinate.
    pub coordinates: [Coordinate; 2],
    /// Values at the minimum, ångström or degree.
    pub values: [f64; 2],
    /// k₁₁, k₁₂, k₂₂ from gradients at the minimum.
    pub from_gradients: Option<[f64; 3]>,
    /// What they say about the fitted k₁₁ and k₂₂, and about k₁₂ measured by √(k₁₁k₂₂).
    pub verdicts: Vec<Verdict>,
    /// Rigid or relaxed.
    pub path: PathKind,
}

/// The path of least energy between two minima of a surface.
#[derive(Debug, Clone, PartialEq)]
pub struct Valley {
    /// Values of the two sweeps along it, ångström or degree, with the energy in hartree, from one minimum to the other.
    pub points: Vec<([f64; 2], f64)>,
    /// Values at its top.
    pub top: [f64; 2],
    /// Energy of the top, hartree: of the refined saddle point where there is one.
    pub top_energy: f64,
    /// Whether the top is a saddle point.
    pub is_saddle: bool,
    /// Height of the top above the first and above the last minimum, hartree.
    pub barriers: [f64; 2],
}

/// Most minima between which valley floors are followed.
const MOST_VALLEYS: usize = 4;

/// Adds the lowest point of the grid where it lies on its border and below every minimum inside: the surface goes on
/// falling beyond.
pub(super) fn add_edge(material: &Material<'_>, minima: &mut Vec<MinimumResult>) {
    let lowest = material
        .points
        .iter()
        .filter_map(|p| Some((p, p.record.energy?)))
        .min_by(|a, b| a.1.total_cmp(&b.1));
    let Some((point, energy)) = lowest else {
        return;
    };
    let on_border = point
        .index
        .iter()
        .zip(material.grid.shape())
        .any(|(&i, &n)| i == 0 || i + 1 == n);
    let above = minima.iter().all(|m| m.energy > energy);
    if on_border && above {
        minima.push(MinimumResult {
            kind: StationaryKind::Minimum,
            interior: false,
            values: point.values.clone(),
            energy,
            positions: Some(point.positions.clone()),
            refined: None,
            second_derivatives: Vec::new(),
        });
    }
}

pub(super) fn analyse(material: &Material<'_>, analysis: &mut LevelAnalysis) {
    let energies = material.energies();
    let path = material.path();
    let axes = [path.axis(0), path.axis(1)];
    force_field(material, &axes, &energies, analysis);
    let places: Vec<Vec<f64>> = analysis
        .minima
        .iter()
        .filter(|m| m.interior)
        .map(|m| m.values.clone())
        .collect();
    let lines: Vec<Line> = places
        .iter()
        .flat_map(|place| [0, 1].map(|sweep| cut(material, &axes, &energies, place, sweep)))
        .flatten()
        .collect();
    fits::fit_lines(material, &lines, &[], analysis);
    keep_at_their_minima(material, &places, analysis);
    valleys(material, &energies, analysis);
}

fn force_field(
    material: &Material<'_>,
    axes: &[Vec<f64>; 2],
    energies: &[Option<f64>],
    analysis: &mut LevelAnalysis,
) {
    let settings = SurfaceSettings {
        noise_hartree: fits::noise(material),
        ..SurfaceSettings::default()
    };
    let field = match quadratic_field(&axes[0], &axes[1], energies, &settings) {
        Ok(field) => field,
        Err(error) => {
            analysis
                .notes
                .push(format!("no quadratic force field: {error}"));
            return;
        }
    };
    let sweeps = &material.spec.sweeps;
    let values = [0, 1].map(|k| {
        sweeps[k]
            .motion
            .coordinate
            .to_reported(field.equilibrium[k])
    });
    let exact = material
        .minimum_at(&analysis.minima, &values)
        .and_then(|m| m.refined.as_ref())
        .map(|r| [r.curvature[0][0], r.curvature[0][1], r.curvature[1][1]]);
    let verdicts = exact.map_or_else(Vec::new, |[k11, k12, k22]| {
        let scale = (field.k11 * field.k22).sqrt();
        // A coupling may vanish, so it is compared on the scale of the constants that it couples.
        vec![
            verdict(field.k11, field.half_ranges[0] / field.k11, k11),
            verdict(scale + field.k12, field.half_ranges[1] / scale, scale + k12),
            verdict(field.k22, field.half_ranges[2] / field.k22, k22),
        ]
    });
    analysis.force_field = Some(ForceField {
        coordinates: [coordinate(&sweeps[0]), coordinate(&sweeps[1])],
        values,
        from_gradients: exact,
        verdicts,
        path: material.path_kind(),
        field,
    });
}

/// Energies along one sweep through a place, by quintic splines along the other.
fn cut(
    material: &Material<'_>,
    axes: &[Vec<f64>; 2],
    energies: &[Option<f64>],
    place: &[f64],
    sweep: usize,
) -> Option<Line> {
    let other = 1 - sweep;
    let grid: &Grid = material.grid;
    let at = material.spec.sweeps[other]
        .motion
        .coordinate
        .from_reported(place[other]);
    let mut x = Vec::new();
    let mut cut = Vec::new();
    for (i, &q) in axes[sweep].iter().enumerate() {
        let (across, values): (Vec<f64>, Vec<f64>) = axes[other]
            .iter()
            .enumerate()
            .filter_map(|(j, &r)| {
                let index = if sweep == 0 { [i, j] } else { [j, i] };
                Some((r, energies[grid.point(&index)]?))
            })
            .unzip();
        let spline = Spline::new(&across, &values).ok()?;
        if (spline.lower()..=spline.upper()).contains(&at) {
            x.push(q);
            cut.push(spline.value(at));
        }
    }
    let settings = super::super::stationary::curve_settings(
        &material.spec.sweeps[sweep],
        &x,
        material.spec.scf.energy,
    );
    (!x.is_empty()).then(|| Line {
        continued: false,
        sweep,
        x,
        energies: cut,
        settings,
        others: place.to_vec(),
    })
}

/// Of the fits of all cuts, those at the minimum that the cut was made through.
fn keep_at_their_minima(
    material: &Material<'_>,
    places: &[Vec<f64>],
    analysis: &mut LevelAnalysis,
) {
    analysis.fits.retain(|fit| {
        places
            .iter()
            .any(|p| material.is_same_place(p, &fit.values))
    });
}

fn valleys(material: &Material<'_>, energies: &[Option<f64>], analysis: &mut LevelAnalysis) {
    let Some(landscape) = super::super::stationary::landscape(&material.path(), energies) else {
        return;
    };
    let sweeps = &material.spec.sweeps;
    let inside = |values: &[f64]| {
        Vector2::from([0, 1].map(|k| sweeps[k].motion.coordinate.from_reported(values[k])))
    };
    let reported =
        |at: &Vector2<f64>| [0, 1].map(|k| sweeps[k].motion.coordinate.to_reported(at[k]));
    let minima: Vec<&MinimumResult> = analysis.minima.iter().filter(|m| m.interior).collect();
    let mut found = Vec::new();
    for pair in minima.windows(2).take(MOST_VALLEYS) {
        let (from, to) = (inside(&pair[0].values), inside(&pair[1].values));
        let floor = match valley_floor(&landscape, &from, &to) {
            Ok(Some(floor)) => floor,
            Ok(None) => continue,
            Err(error) => {
                analysis.notes.push(format!("no valley floor: {error}"));
                continue;
            }
        };
        let mut top = reported(&floor.top.at);
        let mut top_energy = floor.top.energy;
        let exact = analysis
            .barriers
            .iter()
            .find(|b| floor.is_saddle && material.is_same_place(&b.values, &top));
        if let Some(saddle) = exact {
            top = [saddle.values[0], saddle.values[1]];
            top_energy = saddle.energy;
        }
        found.push(Valley {
            points: floor
                .points
                .iter()
                .map(|p| (reported(&p.at), p.energy))
                .collect(),
            top,
            top_energy,
            is_saddle: floor.is_saddle,
            barriers: [top_energy - pair[0].energy, top_energy - pair[1].energy],
        });
    }
    for valley in &found {
        if !valley.is_saddle {
            analysis.notes.push(format!(
                "the highest place of the path between two minima, {:.3} kJ/mol above the lower one, is no saddle point",
                valley.barriers[0].max(valley.barriers[1]) * KJ_PER_MOL_PER_HARTREE
            ));
        }
    }
    analysis.valleys = found;
}
