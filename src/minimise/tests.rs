//! Tests of the optimiser on force fields whose minima are known.

use super::coordinates::InternalSet;
use super::test_fields::{distorted, field, from_zmatrix, named, text_of, zmatrices};
use super::*;
use crate::surface::model::{Form, ModelSurface};
use std::f64::consts::PI;

fn run(molecule: &Molecule, surface: &ModelSurface, settings: &MinimiseSettings) -> Minimum<usize> {
    minimise(surface, Task::of(molecule), settings, &mut ()).unwrap()
}

/// Largest difference of bonds (bohr) and angles (radian) of a molecule at two geometries.
fn deviation(molecule: &Molecule, positions: &[Vector3<f64>]) -> f64 {
    let set = InternalSet::of(molecule, &[]);
    let stiff = set.primitives.iter().filter(|p| {
        matches!(
            p,
            primitive::Primitive::Internal(Coordinate::Bond(_) | Coordinate::Angle(_))
        )
    });
    stiff
        .map(|p| (p.value(positions) - p.value(&molecule.positions)).abs())
        .fold(0.0, f64::max)
}

#[test]
fn distorted_molecules_find_their_minimum_in_few_calls() {
    let mut calls = Vec::new();
    for (number, (name, text)) in zmatrices().iter().enumerate() {
        let reference = from_zmatrix(text);
        let surface = field(&reference);
        let start = distorted(text, 11 + 97 * number as u64);
        let minimum = run(&start, &surface, &MinimiseSettings::default());
        assert!(minimum.converged(), "{name}: {:?}", minimum.stop);
        let energy = minimum.record.energy.unwrap();
        assert!((-1.0..-1.0 + 1e-6).contains(&energy), "{name}: {energy}");
        let off = deviation(&reference, &minimum.positions);
        assert!(off < 3e-3, "{name}: {off}");
        calls.push(minimum.calls.len());
    }
    calls.sort_unstable();
    assert!(calls[calls.len() / 2] <= 9, "{calls:?}");
    assert!(calls[calls.len() - 1] <= 20, "{calls:?}");
}

#[test]
fn tight_thresholds_are_met_and_said() {
    let reference = named("methanol");
    let minimum = run(
        &distorted(text_of("methanol"), 5),
        &field(&reference),
        &MinimiseSettings::tight(),
    );
    let last = minimum.last().unwrap();
    assert!(minimum.converged() && last.gradient_max < 1e-5 && last.displacement < 1e-4);
    assert!(deviation(&reference, &minimum.positions) < 1e-4);
}

#[test]
fn turning_the_molecule_turns_the_way_and_nothing_else() {
    let surface = field(&named("ethanol"));
    let start = distorted(text_of("ethanol"), 3);
    let turn = nalgebra::Rotation3::from_euler_angles(0.3, 1.1, -2.0);
    let turned: Vec<Vector3<f64>> = start
        .positions
        .iter()
        .map(|p| turn * p + Vector3::new(3.0, -1.0, 2.0))
        .collect();
    let settings = MinimiseSettings::default();
    let one = run(&start, &surface, &settings);
    let other = run(&start.at(&turned), &surface, &settings);
    assert_eq!(one.calls.len(), other.calls.len());
    for (a, b) in one.calls.iter().zip(&other.calls) {
        assert!((a.energy - b.energy).abs() < 1e-9);
    }
}

#[test]
fn held_coordinates_keep_their_values_exactly() {
    let reference = named("peroxide");
    let surface = field(&reference);
    let torsion = Coordinate::Dihedral([2, 0, 1, 3]);
    let bond = Coordinate::Bond([0, 1]);
    for degree in [-170.0_f64, 40.0, 90.0, 180.0] {
        let held = [
            Held {
                coordinate: torsion,
                value: degree.to_radians(),
            },
            Held {
                coordinate: bond,
                value: 3.0,
            },
        ];
        let task = Task {
            held: &held,
            ..Task::of(&reference)
        };
        let minimum = minimise(&surface, task, &MinimiseSettings::tight(), &mut ()).unwrap();
        assert!(minimum.converged());
        for h in &held {
            let off = h
                .coordinate
                .difference(h.coordinate.value(&minimum.positions), h.value);
            assert!(off.abs() < 1e-10, "{degree}: {off}");
        }
        // Nothing couples to the held coordinates in this field: all others are at their minimum.
        for free in [Coordinate::Bond([0, 2]), Coordinate::Angle([1, 0, 2])] {
            let off = free.value(&minimum.positions) - free.value(&reference.positions);
            assert!(off.abs() < 1e-4, "{degree}: {off}");
        }
    }
}

#[test]
fn an_angle_is_held_straight_and_near_to_straight() {
    let reference = named("water");
    let surface = field(&reference);
    let angle = Coordinate::Angle([1, 0, 2]);
    for degree in [150.0_f64, 171.0, 178.0, 179.9, 180.0] {
        let held = [Held {
            coordinate: angle,
            value: degree.to_radians(),
        }];
        let task = Task {
            held: &held,
            ..Task::of(&reference)
        };
        let minimum = minimise(&surface, task, &MinimiseSettings::tight(), &mut ()).unwrap();
        assert!(minimum.converged(), "{degree}");
        let off = angle.value(&minimum.positions) - degree.to_radians();
        assert!(off.abs() < 1e-9, "{degree}: {off}");
        let bond = Coordinate::Bond([0, 1]);
        let off = bond.value(&minimum.positions) - bond.value(&reference.positions);
        assert!(off.abs() < 1e-4, "{degree}: {off}");
    }
}

#[test]
fn held_coordinates_that_contradict_each_other_are_an_error() {
    let reference = named("water");
    let hold = |a, b, value| Held {
        coordinate: Coordinate::Bond([a, b]),
        value,
    };
    let held = [hold(0, 1, 1.8), hold(0, 2, 1.8), hold(1, 2, 5.0)];
    let task = Task {
        held: &held,
        ..Task::of(&reference)
    };
    let error = minimise(
        &field(&reference),
        task,
        &MinimiseSettings::default(),
        &mut (),
    );
    assert!(matches!(error, Err(MinimiseError::Contradiction { .. })));
}

#[test]
fn atoms_and_diatomics_are_molecules_too() {
    let mut atom = named("water");
    atom.atoms.truncate(1);
    atom.positions.truncate(1);
    let minimum = run(
        &atom,
        &ModelSurface::simple(-3.0, vec![]),
        &MinimiseSettings::default(),
    );
    assert!(minimum.converged());
    assert_eq!(minimum.calls.len(), 1);
    let pair = from_zmatrix("C\nO C 1.5");
    let form = Form::Morse {
        depth: 0.4,
        steepness: 1.2,
        equilibrium: 2.1,
    };
    let surface = ModelSurface::simple(0.0, vec![(Coordinate::Bond([0, 1]), form)]);
    let minimum = run(&pair, &surface, &MinimiseSettings::tight());
    let length = (minimum.positions[1] - minimum.positions[0]).norm();
    assert!((length - 2.1).abs() < 1e-5 && minimum.converged());
}

#[test]
fn fragments_are_joined_by_their_shortest_distance() {
    let dimer = from_zmatrix(
        "O1\nH1 O1 0.96\nH2 O1 0.96 H1 104\nO2 H1 1.95 O1 172 H2 180\n\
         H3 O2 0.96 H1 110 O1 60\nH4 O2 0.96 H1 110 O1 -60",
    );
    let set = InternalSet::of(&dimer, &[]);
    assert!(set.place_of(&Coordinate::Bond([1, 3])).is_some());
    let surface = field(&dimer);
    let mut start = dimer.clone();
    for (i, p) in start.positions.iter_mut().enumerate() {
        *p += Vector3::new(0.1, -0.05 * i as f64, 0.08 * (i % 2) as f64);
    }
    let minimum = run(&start, &surface, &MinimiseSettings::default());
    assert!(minimum.converged());
    assert!((minimum.record.energy.unwrap() + 1.0).abs() < 1e-6);
}

#[test]
fn a_chain_that_straightens_on_the_way_is_described_anew() {
    // Bent by 40°, so that it begins with an ordinary angle.
    let bent = from_zmatrix("C\nN C 1.2\nH C 1.1 N 140");
    let minimum = run(
        &bent,
        &field(&named("hydrogen cyanide")),
        &MinimiseSettings::default(),
    );
    assert!(minimum.converged(), "{:?}", minimum.calls);
    let angle = Coordinate::Angle([1, 0, 2]).value(&minimum.positions);
    assert!(angle > PI - 5e-3, "{angle}");
}

#[test]
fn a_region_without_energies_is_walked_around_or_reported() {
    let form = Form::Harmonic {
        force_constant: 0.4,
        equilibrium: 2.0,
    };
    let bond = Coordinate::Bond([0, 1]);
    let surface = |fails: fn(&[Vector3<f64>]) -> bool| ModelSurface {
        fails,
        ..ModelSurface::simple(0.0, vec![(bond, form)])
    };
    let start = from_zmatrix("C\nO C 1.25");
    let passing = run(
        &start,
        &surface(|x| (x[1] - x[0]).norm() < 1.99),
        &MinimiseSettings::default(),
    );
    assert!(passing.converged());
    let at_once = run(&start, &surface(|_| true), &MinimiseSettings::default());
    assert_eq!(at_once.stop, MinimiseStop::NoEnergy);
    assert_eq!(at_once.record.energy, None);
    let wall = run(
        &start,
        &surface(|x| (x[1] - x[0]).norm() < 2.2),
        &MinimiseSettings::default(),
    );
    assert!(!wall.converged());
    assert!(wall.record.energy.is_some());
}

#[test]
fn what_was_learnt_of_the_hessian_shortens_the_next_optimisation() {
    let reference = named("ethanol");
    let surface = field(&reference);
    let first = run(
        &distorted(text_of("ethanol"), 3),
        &surface,
        &MinimiseSettings::default(),
    );
    let again = distorted(text_of("ethanol"), 8);
    let fresh = run(&again, &surface, &MinimiseSettings::default());
    let task = Task {
        curvature: Some(&first.curvature),
        ..Task::of(&again)
    };
    let carried = minimise(&surface, task, &MinimiseSettings::default(), &mut ()).unwrap();
    assert!(carried.converged());
    assert!(carried.calls.len() <= fresh.calls.len() + 1);
}
