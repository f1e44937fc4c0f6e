//! Tests of stationary points on curves and surfaces.

use super::landscape::{GridAxis, Landscape};
use super::path::{PathSettings, PathTask, Target, refine_on_path};
use super::test_fields::named;
use super::valley::{PointKind, minimax_path, stationary_points, valley_floor};
use super::*;
use crate::molecule::connectivity::Connectivity;
use crate::molecule::motion::{Motion, set_all};
use crate::surface::model::{Form, ModelSurface};
use nalgebra::Vector2;
use std::f64::consts::PI;

/// The surface of K. Müller, L. D. Brown, Theor. Chim. Acta 53, 75 (1979).
fn mueller_brown(x: f64, y: f64) -> f64 {
    let terms = [
        (-200.0, -1.0, 0.0, -10.0, 1.0, 0.0),
        (-100.0, -1.0, 0.0, -10.0, 0.0, 0.5),
        (-170.0, -6.5, 11.0, -6.5, -0.5, 1.5),
        (15.0, 0.7, 0.6, 0.7, -1.0, 1.0),
    ];
    terms
        .iter()
        .map(|&(height, a, b, c, x0, y0)| {
            let (dx, dy): (f64, f64) = (x - x0, y - y0);
            height * (a * dx * dx + b * dx * dy + c * dy * dy).exp()
        })
        .sum()
}

fn axis(from: f64, to: f64, points: usize) -> GridAxis {
    GridAxis {
        values: (0..points)
            .map(|i| from + (to - from) * i as f64 / (points - 1) as f64)
            .collect(),
        period: None,
    }
}

fn landscape(axes: &[GridAxis; 2], energy: impl Fn(f64, f64) -> Option<f64>) -> Landscape {
    let energies: Vec<Option<f64>> = axes[0]
        .values
        .iter()
        .flat_map(|&x| axes[1].values.iter().map(move |&y| (x, y)))
        .map(|(x, y)| energy(x, y))
        .collect();
    Landscape::new(axes, &energies).unwrap()
}

#[test]
fn between_the_points_a_cubic_surface_is_exact() {
    let f = |x: f64, y: f64| 1.0 + x * y * y - 0.3 * x * x * x + 2.0 * x * x * y - y * y * y;
    let surface = landscape(&[axis(-1.0, 1.5, 6), axis(0.0, 2.0, 7)], |x, y| {
        Some(f(x, y))
    });
    for (x, y) in [(-0.93, 0.1), (0.2, 1.7), (1.49, 0.77), (-1.0, 2.0)] {
        let local = surface.local(&Vector2::new(x, y));
        assert!((local.energy - f(x, y)).abs() < 1e-12);
        assert!((local.slope.x - (y * y - 0.9 * x * x + 4.0 * x * y)).abs() < 1e-11);
        assert!((local.slope.y - (2.0 * x * y + 2.0 * x * x - 3.0 * y * y)).abs() < 1e-11);
        assert!((local.curvature[(0, 1)] - (2.0 * y + 4.0 * x)).abs() < 1e-10);
        assert!((local.curvature[(1, 1)] - (2.0 * x - 6.0 * y)).abs() < 1e-10);
    }
}

/// Minima and saddle points as the paper lists them (figures from memory; the test would find them moved).
#[test]
fn val_the_surface_of_mueller_and_brown_has_its_five_stationary_points_and_its_barrier() {
    let surface = landscape(&[axis(-1.5, 1.2, 73), axis(-0.3, 2.1, 65)], |x, y| {
        Some(mueller_brown(x, y))
    });
    let points = stationary_points(&surface);
    let kinds = |kind| {
        points
            .iter()
            .filter(|p| p.kind == kind)
            .copied()
            .collect::<Vec<_>>()
    };
    let minima = kinds(PointKind::Minimum);
    let saddles = kinds(PointKind::Saddle);
    let listed = [
        (-0.558, 1.442, -146.700),
        (0.623, 0.028, -108.167),
        (-0.050, 0.467, -80.768),
    ];
    assert_eq!(minima.len(), 3);
    for (found, (x, y, energy)) in minima.iter().zip(listed) {
        assert!((found.at - Vector2::new(x, y)).amax() < 2e-3, "{found:?}");
        assert!((found.energy - energy).abs() < 0.02, "{found:?}");
    }
    let listed = [(0.212, 0.293, -72.249), (-0.822, 0.624, -40.665)];
    for (found, (x, y, energy)) in saddles.iter().zip(listed) {
        assert!((found.at - Vector2::new(x, y)).amax() < 2e-3, "{found:?}");
        assert!((found.energy - energy).abs() < 0.02, "{found:?}");
    }
    let floor = valley_floor(&surface, &minima[0].at, &minima[1].at)
        .unwrap()
        .unwrap();
    assert!(floor.is_saddle);
    assert!(
        (floor.barrier - (146.700 - 40.665)).abs() < 0.04,
        "{}",
        floor.barrier
    );
    assert!((floor.barrier_back - (108.167 - 40.665)).abs() < 0.04);
    assert!(floor.movement < 1e-4, "{}", floor.movement);
    // The valley passes the third minimum and the second saddle point.
    for between in [minima[2].at, saddles[0].at] {
        let near = floor
            .points
            .iter()
            .map(|p| (p.at - between).norm())
            .fold(f64::INFINITY, f64::min);
        assert!(near < 0.03, "{near}");
    }
    // Along it the slope is along it.
    for three in floor.points.windows(3) {
        let along = (three[2].at - three[0].at)
            .component_div(&surface.spacing())
            .normalize();
        let slope = surface
            .local(&three[1].at)
            .slope
            .component_mul(&surface.spacing());
        let across = (slope - along * along.dot(&slope)).norm();
        assert!(across < 0.25, "{across} at {:?}", three[1]);
    }
}

#[test]
fn the_way_goes_round_the_period_and_round_missing_points() {
    let ring = GridAxis {
        values: (0..=24).map(|i| PI * f64::from(i) / 12.0).collect(),
        period: Some(2.0 * PI),
    };
    let axes = [ring, axis(-1.0, 1.0, 9)];
    let f = |x: f64, y: f64| 0.02 * (2.0 * x).cos() + 0.005 * x.cos() + 0.5 * y * y;
    let surface = landscape(&axes, |x, y| Some(f(x, y)));
    assert_eq!(surface.shape(), [24, 9]);
    let minima: Vec<_> = stationary_points(&surface)
        .into_iter()
        .filter(|p| p.kind == PointKind::Minimum)
        .collect();
    // cos x = −V₁/4V₂, on both sides of 180°.
    let expected = (-0.005_f64 / 0.08).acos();
    assert_eq!(minima.len(), 2);
    for minimum in &minima {
        let off = (minimum.at.x - expected)
            .abs()
            .min((minimum.at.x - (2.0 * PI - expected)).abs());
        assert!(off < 1e-3, "{minimum:?}");
    }
    let floor = valley_floor(&surface, &minima[0].at, &minima[1].at)
        .unwrap()
        .unwrap();
    // The lower way leads over 180°.
    assert!((floor.top.at.x - PI).abs() < 1e-3, "{floor:?}");
    assert!((floor.barrier - (f(PI, 0.0) - f(expected, 0.0))).abs() < 1e-5);
    // With 180° barred it leads over 0°, past the seam.
    let barred = landscape(&axes, |x, y| ((x - PI).abs() > 0.1).then(|| f(x, y)));
    let floor = valley_floor(&barred, &minima[0].at, &minima[1].at)
        .unwrap()
        .unwrap();
    let off = floor.barrier - (f(0.0, 0.0) - f(expected, 0.0));
    assert!(
        off.abs() < 1e-5,
        "{off} {:?} {}",
        floor.top,
        floor.is_saddle
    );
    // With both barred there is none.
    let shut = landscape(&axes, |x, y| (x.sin().abs() > 0.1).then(|| f(x, y)));
    assert_eq!(
        valley_floor(&shut, &minima[0].at, &minima[1].at).unwrap(),
        None
    );
}

#[test]
fn the_grid_path_has_the_lowest_highest_point() {
    // A wall with a low pass at one end and a straight but high way across.
    let axes = [axis(0.0, 4.0, 5), axis(0.0, 4.0, 5)];
    let f = |x: f64, y: f64| {
        let wall = if (x - 2.0).abs() < 0.5 { 1.0 } else { 0.0 };
        Some(wall * (1.0 + y) + 0.01 * y)
    };
    let surface = landscape(&axes, f);
    let path = minimax_path(&surface, [0, 4], [4, 4]).unwrap();
    let highest = path
        .iter()
        .filter_map(|&i| surface.energy(i))
        .fold(f64::MIN, f64::max);
    assert!((highest - 1.0).abs() < 1e-12, "{path:?}");
}

/// Water with two coupled coordinates to sweep, and its minimum away from the model's equilibria.
fn coupled() -> (Molecule, ModelSurface) {
    let water = named("water");
    let terms = vec![
        (
            Coordinate::Bond([0, 1]),
            Form::Morse {
                depth: 0.2,
                steepness: 1.2,
                equilibrium: 1.8,
            },
        ),
        (
            Coordinate::Angle([1, 0, 2]),
            Form::Harmonic {
                force_constant: 0.15,
                equilibrium: 1.8,
            },
        ),
        (
            Coordinate::Bond([1, 2]),
            Form::Harmonic {
                force_constant: 0.05,
                equilibrium: 3.2,
            },
        ),
    ];
    (water, ModelSurface::simple(-1.0, terms))
}

#[test]
fn a_minimum_on_a_rigid_path_is_refined_until_the_slope_vanishes() {
    let (water, surface) = coupled();
    let connectivity = Connectivity::of(&water);
    let motion = |c| Motion::resolve(c, &water, &connectivity, &[9, 1, 1], None).unwrap();
    let motions = [
        motion(Coordinate::Bond([0, 1])),
        motion(Coordinate::Angle([1, 0, 2])),
    ];
    for n in [1, 2] {
        let path = |q: &[f64]| {
            let mut positions = water.positions.clone();
            let pairs: Vec<(Motion, f64)> =
                motions.iter().cloned().zip(q.iter().copied()).collect();
            set_all(&pairs, &mut positions)?;
            Ok(positions)
        };
        let start = [1.9, 1.7];
        let task = PathTask {
            positions: &path,
            start: &start[..n],
            curvature: None,
            reach: &[0.1, 0.1][..n],
            reported: &[1.0, 1.0][..n],
            target: Target::Minimum,
            seed: None,
        };
        let found = refine_on_path(&surface, &task, &PathSettings::default(), &mut ()).unwrap();
        assert!(found.converged && found.slopes.iter().all(|s| s.abs() < 1e-6));
        assert!(found.gradient_calls <= 20, "{}", found.gradient_calls);
        // By energies alone: higher all around, and the curvature of differences.
        let energy = |q: &[f64]| surface.states[0].energy(&path(q).unwrap());
        let q = found.coordinates.clone();
        let curvature = found.curvature.unwrap();
        for k in 0..n {
            let h = 1e-3;
            let shifted = |s: f64| {
                let mut moved = q.clone();
                moved[k] += s * h;
                energy(&moved)
            };
            let (up, here, down) = (shifted(1.0), shifted(0.0), shifted(-1.0));
            assert!(up > here && down > here);
            let second = (up + down - 2.0 * here) / (h * h);
            assert!(
                (second - curvature[(k, k)]).abs() < 1e-3 * second,
                "{second} {curvature}"
            );
        }
    }
}

#[test]
fn the_top_of_a_torsion_is_refined_as_a_saddle() {
    let peroxide = named("peroxide");
    let torsion = Coordinate::Dihedral([2, 0, 1, 3]);
    let form = Form::Cosine {
        barrier: 0.01,
        fold: 1,
        equilibrium: 2.0,
    };
    let surface = ModelSurface::simple(0.0, vec![(torsion, form)]);
    let connectivity = Connectivity::of(&peroxide);
    let motion = Motion::resolve(torsion, &peroxide, &connectivity, &[5, 5, 1, 1], None).unwrap();
    let path = |q: &[f64]| {
        let mut positions = peroxide.positions.clone();
        motion.set(&mut positions, q[0])?;
        Ok(positions)
    };
    let task = PathTask {
        positions: &path,
        start: &[-1.0],
        curvature: Some(DMatrix::from_element(1, 1, -0.004)),
        reach: &[0.2],
        reported: &[180.0 / PI],
        target: Target::Saddle,
        seed: None,
    };
    let found = refine_on_path(&surface, &task, &PathSettings::default(), &mut ()).unwrap();
    assert!((found.coordinates[0] - (2.0 - PI)).abs() < 1e-3);
    assert!((found.curvature.unwrap()[(0, 0)] + 0.005).abs() < 1e-6);
}

#[test]
fn a_path_without_an_energy_is_an_error() {
    let (water, surface) = coupled();
    let surface = ModelSurface {
        fails: |_| true,
        ..surface
    };
    let path = |_: &[f64]| Ok(water.positions.clone());
    let task = PathTask {
        positions: &path,
        start: &[1.0],
        curvature: None,
        reach: &[0.1],
        reported: &[1.0],
        target: Target::Minimum,
        seed: None,
    };
    let error = refine_on_path(&surface, &task, &PathSettings::default(), &mut ());
    assert!(matches!(
        error,
        Err(MinimiseError::NotConvergedOnPath { .. })
    ));
}
