use super::*;
use crate::molecule::connectivity::Cut;
use crate::molecule::frame::sine_between;
use crate::molecule::test_molecules::{
    Tree, ethane, from_cartesian, from_zmatrix, hydrogen_cyanide, indices, labels, peroxide, ring,
    trees, water,
};
use proptest::prelude::*;
use std::f64::consts::PI;

/// One function on each hydrogen atom, five on any other.
fn functions(molecule: &Molecule) -> Vec<usize> {
    molecule
        .atoms
        .iter()
        .map(|atom| {
            if atom.element.atomic_number() == 1 {
                1
            } else {
                5
            }
        })
        .collect()
}

fn resolve(
    coordinate: Coordinate,
    molecule: &Molecule,
    requested: Option<&[usize]>,
) -> Result<Motion, MotionError> {
    let connectivity = Connectivity::of(molecule);
    Motion::resolve(
        coordinate,
        molecule,
        &connectivity,
        &functions(molecule),
        requested,
    )
}

fn bond(molecule: &Molecule, labels: [&str; 2]) -> Coordinate {
    Coordinate::Bond(indices(molecule, labels))
}

fn angle(molecule: &Molecule, labels: [&str; 3]) -> Coordinate {
    Coordinate::Angle(indices(molecule, labels))
}

fn dihedral(molecule: &Molecule, labels: [&str; 4]) -> Coordinate {
    Coordinate::Dihedral(indices(molecule, labels))
}

fn moved_labels(coordinate: Coordinate, molecule: &Molecule) -> Vec<&str> {
    let motion = resolve(coordinate, molecule, None).unwrap();
    labels(molecule, &motion.moves)
}

fn bits(position: &Vector3<f64>) -> [u64; 3] {
    [position.x, position.y, position.z].map(f64::to_bits)
}

/// A random tree, a coordinate along it, whether the first end's side moves, and a value for the coordinate.
fn motions() -> impl Strategy<Value = (Tree, Motion, f64)> {
    let choice = (
        any::<prop::sample::Index>(),
        0..3_usize,
        any::<bool>(),
        0.0..1.0_f64,
    );
    (trees(4..9, 20.0..160.0), choice).prop_filter_map(
        "no such coordinate",
        |(tree, (pick, kind, first_moves, fraction))| {
            let bonds: Vec<[usize; 2]> = tree
                .parents
                .iter()
                .enumerate()
                .map(|(place, &parent)| [parent, place + 1])
                .collect();
            let connectivity = Connectivity::from_bonds(tree.molecule.atoms.len(), &bonds);
            let paths: Vec<Vec<usize>> = (0..connectivity.atoms())
                .flat_map(|i| (0..connectivity.atoms()).map(move |j| (i, j)))
                .filter_map(|(i, j)| connectivity.path(i, j, Cut::Nothing))
                .filter(|path| path.len() == kind + 2)
                .collect();
            if paths.is_empty() {
                return None;
            }
            let (coordinate, value) = match paths[pick.index(paths.len())][..] {
                [a, b] => (Coordinate::Bond([a, b]), 0.3 + 5.0 * fraction),
                [a, b, c] => (Coordinate::Angle([a, b, c]), PI * fraction),
                [a, b, c, d] => (
                    Coordinate::Dihedral([a, b, c, d]),
                    4.0 * PI * (fraction - 0.5),
                ),
                _ => return None,
            };
            coordinate.check(&tree.molecule.positions).ok()?;
            let functions = vec![1; connectivity.atoms()];
            let mut motion =
                Motion::resolve(coordinate, &tree.molecule, &connectivity, &functions, None)
                    .ok()?;
            if first_moves {
                let ends = coordinate.atoms();
                let cut = match coordinate {
                    Coordinate::Bond([a, b]) => Cut::Bond(a, b),
                    Coordinate::Angle([_, b, _]) => Cut::Atom(b),
                    Coordinate::Dihedral([_, b, c, _]) => Cut::Bond(b, c),
                };
                motion.moves = connectivity.component(ends[0], cut);
            }
            Some((tree, motion, value))
        },
    )
}

proptest! {
    #[test]
    fn a_coordinate_has_the_value_it_was_set_to((tree, motion, value) in motions()) {
        let mut positions = tree.molecule.positions.clone();
        motion.set(&mut positions, value).unwrap();
        let off = motion.coordinate.difference(value, motion.coordinate.value(&positions));
        prop_assert!(off.abs() <= motion.tolerance(&positions, value), "off by {off:e}");
    }

    #[test]
    fn sides_move_rigidly_or_not_at_all((tree, motion, value) in motions()) {
        let before = &tree.molecule.positions;
        let mut after = before.clone();
        motion.set(&mut after, value).unwrap();
        for i in 0..before.len() {
            if !motion.moves.contains(&i) {
                prop_assert_eq!(bits(&before[i]), bits(&after[i]));
            }
            for j in (0..i).filter(|j| motion.moves.contains(&i) == motion.moves.contains(j)) {
                let change = (after[i] - after[j]).norm() - (before[i] - before[j]).norm();
                prop_assert!(change.abs() < 1e-12, "distance {i}–{j} changed by {change:e}");
            }
        }
        // No side is mirrored: signed volumes are kept too.
        let moved = &motion.moves;
        for quartet in moved.windows(4) {
            let volume = |p: &[Vector3<f64>]| {
                let [a, b, c, d] = [0, 1, 2, 3].map(|k| p[quartet[k]]);
                (b - a).cross(&(c - a)).dot(&(d - a))
            };
            prop_assert!((volume(before) - volume(&after)).abs() < 1e-9);
        }
    }

    #[test]
    fn only_coordinates_through_the_moved_hinge_change((tree, motion, value) in motions()) {
        // Setting a bond leaves all angles at its atoms, setting a dihedral all bonds and angles along the tree.
        let before = &tree.molecule.positions;
        let mut after = before.clone();
        motion.set(&mut after, value).unwrap();
        for (place, &parent) in tree.parents.iter().enumerate() {
            let pair = [parent, place + 1];
            let set = match motion.coordinate {
                Coordinate::Bond([a, b]) => pair == [a, b] || pair == [b, a],
                _ => false,
            };
            if !set {
                let length = Coordinate::Bond(pair);
                prop_assert!((length.value(before) - length.value(&after)).abs() < 1e-12);
            }
        }
    }

    #[test]
    fn displacements_are_the_derivative_of_the_motion((tree, motion, value) in motions()) {
        let mut positions = tree.molecule.positions.clone();
        // Away from the ends of the range of an angle, where one side of the difference would leave it.
        let value = match motion.coordinate {
            Coordinate::Angle(_) => value.clamp(0.05, PI - 0.05),
            _ => value,
        };
        motion.set(&mut positions, value).unwrap();
        let displacement = motion.displacement(&positions);
        let step = 1e-4;
        let at = |steps: f64| {
            let mut moved = positions.clone();
            motion.set(&mut moved, value + steps * step).unwrap();
            moved
        };
        let [up, down, far_up, far_down] = [1.0, -1.0, 2.0, -2.0].map(at);
        for i in 0..positions.len() {
            let expected = ((up[i] - down[i]) * 8.0 - (far_up[i] - far_down[i])) / (12.0 * step);
            prop_assert!((displacement[i] - expected).norm() < 1e-9);
        }
        let along: f64 = motion
            .coordinate
            .derivative(&positions)
            .iter()
            .map(|(i, d)| d.dot(&displacement[*i]))
            .sum();
        prop_assert!((along - 1.0).abs() < 1e-9, "dq/dq is {along}");
    }

    #[test]
    fn either_side_gives_the_same_molecule_when_two_sides_are_all_there_is(
        (tree, motion, value) in motions(),
    ) {
        prop_assume!(!matches!(motion.coordinate, Coordinate::Angle(_)));
        let mut other = motion.clone();
        other.moves = (0..tree.molecule.atoms.len()).filter(|i| !motion.moves.contains(i)).collect();
        let mut one = tree.molecule.positions.clone();
        let mut two = one.clone();
        motion.set(&mut one, value).unwrap();
        other.set(&mut two, value).unwrap();
        for i in 0..one.len() {
            for j in 0..i {
                let difference = (one[i] - one[j]).norm() - (two[i] - two[j]).norm();
                prop_assert!(difference.abs() < 1e-11);
            }
        }
    }
}

#[test]
fn the_side_with_fewer_functions_moves() {
    let water = water();
    assert_eq!(moved_labels(bond(&water, ["O", "H1"]), &water), ["H1"]);
    assert_eq!(moved_labels(bond(&water, ["H1", "O"]), &water), ["H1"]);
    let methanol = from_zmatrix(
        "C\nO C 1.42\nH1 O 0.96 C 108\nH2 C 1.09 O 107 H1 180\nH3 C 1.09 O 112 H1 61\nH4 C 1.09 O 112 H1 -61",
    );
    assert_eq!(
        moved_labels(bond(&methanol, ["O", "C"]), &methanol),
        ["O", "H1"]
    );
    assert_eq!(
        moved_labels(dihedral(&methanol, ["H2", "C", "O", "H1"]), &methanol),
        ["O", "H1"]
    );
    assert_eq!(
        moved_labels(angle(&methanol, ["H2", "C", "O"]), &methanol),
        ["H2"]
    );
}

#[test]
fn of_equal_sides_the_one_written_last_moves() {
    let water = water();
    assert_eq!(
        moved_labels(angle(&water, ["H1", "O", "H2"]), &water),
        ["H2"]
    );
    assert_eq!(
        moved_labels(angle(&water, ["H2", "O", "H1"]), &water),
        ["H1"]
    );
    let peroxide = peroxide();
    assert_eq!(
        moved_labels(dihedral(&peroxide, ["H1", "O1", "O2", "H2"]), &peroxide),
        ["O2", "H2"]
    );
}

#[test]
fn peroxide_turns_through_more_than_a_circle() {
    let molecule = peroxide();
    let torsion = dihedral(&molecule, ["H1", "O1", "O2", "H2"]);
    let motion = resolve(torsion, &molecule, None).unwrap();
    for degrees in (-180..=360).step_by(15) {
        let value = f64::from(degrees).to_radians();
        let mut positions = molecule.positions.clone();
        motion.set(&mut positions, value).unwrap();
        let off = torsion.difference(value, torsion.value(&positions));
        assert!(off.abs() < 1e-13, "{degrees}°: {off:e}");
        let reported = torsion.reported_value(&positions);
        assert!(reported > -180.0 - 1e-9 && reported < 180.0 + 1e-9);
        // The axis stays where it was.
        for i in indices(&molecule, ["O1", "O2", "H1"]) {
            assert_eq!(bits(&positions[i]), bits(&molecule.positions[i]));
        }
    }
}

#[test]
fn ethane_turns_one_methyl_group() {
    let molecule = ethane();
    let torsion = dihedral(&molecule, ["H1", "C1", "C2", "H4"]);
    let motion = resolve(torsion, &molecule, None).unwrap();
    assert_eq!(labels(&molecule, &motion.moves), ["C2", "H4", "H5", "H6"]);
    let mut positions = molecule.positions.clone();
    motion.set(&mut positions, 0.0).unwrap();
    let eclipsed = dihedral(&molecule, ["H2", "C1", "C2", "H6"]).value(&positions);
    let third = dihedral(&molecule, ["H1", "C1", "C2", "H5"]).value(&positions);
    assert!((third.abs().to_degrees() - 120.0).abs() < 1e-10);
    assert!(eclipsed.abs() < 1e-10 || (eclipsed.abs().to_degrees() - 120.0).abs() < 1e-10);
}

#[test]
fn both_bonds_of_water_are_tied() {
    let molecule = water();
    let both: Vec<(Motion, f64)> = [["O", "H1"], ["O", "H2"]]
        .into_iter()
        .map(|labels| {
            (
                resolve(bond(&molecule, labels), &molecule, None).unwrap(),
                2.5,
            )
        })
        .collect();
    let mut positions = molecule.positions.clone();
    set_all(&both, &mut positions).unwrap();
    for (motion, value) in &both {
        assert!((motion.coordinate.value(&positions) - value).abs() < 1e-14);
    }
    let opening = angle(&molecule, ["H1", "O", "H2"]);
    let change = opening.value(&positions) - opening.value(&molecule.positions);
    assert!(change.abs() < 1e-14);
}

#[test]
fn coordinates_that_influence_each_other_settle_together() {
    // The distance of the hydrogen atoms changes with both bonds.
    let molecule = water();
    let hydrogen = indices(&molecule, ["H2"]);
    let set = [
        (
            resolve(bond(&molecule, ["O", "H1"]), &molecule, None).unwrap(),
            2.0,
        ),
        (
            resolve(bond(&molecule, ["O", "H2"]), &molecule, None).unwrap(),
            1.9,
        ),
        (
            resolve(bond(&molecule, ["H1", "H2"]), &molecule, Some(&hydrogen)).unwrap(),
            3.0,
        ),
    ];
    let mut positions = molecule.positions.clone();
    set_all(&set, &mut positions).unwrap();
    for (motion, value) in &set {
        assert!((motion.coordinate.value(&positions) - value).abs() <= 1e-12 * value);
    }
}

#[test]
fn coordinates_that_contradict_each_other_are_refused_and_nothing_moves() {
    let molecule = water();
    let hydrogen = indices(&molecule, ["H2"]);
    let set = [
        (
            resolve(bond(&molecule, ["O", "H1"]), &molecule, None).unwrap(),
            2.0,
        ),
        (
            resolve(bond(&molecule, ["O", "H2"]), &molecule, None).unwrap(),
            2.0,
        ),
        (
            resolve(bond(&molecule, ["H1", "H2"]), &molecule, Some(&hydrogen)).unwrap(),
            5.0,
        ),
    ];
    let mut positions = molecule.positions.clone();
    let error = set_all(&set, &mut positions).unwrap_err();
    assert!(
        matches!(error, MotionError::Contradiction { kind: "bond", .. }),
        "{error}"
    );
    assert_eq!(positions, molecule.positions);
    // One coordinate asked to have two values at once.
    let twice = [set[0].clone(), (set[0].0.clone(), 2.5)];
    assert!(matches!(
        set_all(&twice, &mut positions),
        Err(MotionError::Contradiction { .. })
    ));
}

#[test]
fn rings_have_no_side_unless_told() {
    for (carbons, length, hydrogens) in [(3, 1.51, 2), (6, 1.39, 1)] {
        let molecule = ring(carbons, length, hydrogens);
        let connectivity = Connectivity::of(&molecule);
        assert_eq!(
            connectivity.bonds().len(),
            carbons * (1 + hydrogens),
            "{carbons} carbons"
        );
        for coordinate in [
            bond(&molecule, ["C1", "C2"]),
            angle(&molecule, ["C1", "C2", "C3"]),
        ] {
            let error = resolve(coordinate, &molecule, None).unwrap_err();
            assert!(matches!(error, MotionError::Joined { .. }), "{error}");
            assert!(error.help().is_some_and(|help| help.contains("moves = [")));
        }
        // A bond that sticks out of the ring is free.
        assert_eq!(
            moved_labels(bond(&molecule, ["C1", "H1"]), &molecule),
            ["H1"]
        );
        let [c2] = indices(&molecule, ["C2"]);
        let motion = resolve(bond(&molecule, ["C1", "C2"]), &molecule, Some(&[c2])).unwrap();
        let mut positions = molecule.positions.clone();
        motion.set(&mut positions, 3.2).unwrap();
        assert!((motion.coordinate.value(&positions) - 3.2).abs() < 1e-14);
    }
    let benzene = ring(6, 1.39, 1);
    let torsion = dihedral(&benzene, ["C1", "C2", "C3", "C4"]);
    assert_eq!(
        resolve(torsion, &benzene, None).unwrap_err().to_string(),
        "dihedral C1–C2–C3–C4 has no side that can move by itself: C1 and C4 are still joined through C6, C5 \
         when the bond C2–C3 is taken out"
    );
}

#[test]
fn ends_joined_another_way_are_named() {
    let molecule = water();
    let error = resolve(bond(&molecule, ["H1", "H2"]), &molecule, None).unwrap_err();
    assert_eq!(
        error.to_string(),
        "bond H1–H2 has no side that can move by itself: H1 and H2 are joined through O"
    );
}

#[test]
fn fragments_apart_are_the_sides() {
    let dimer = from_cartesian(
        "O1 0 0 0\nHa 0.96 0 0\nHb -0.24 0.93 0\nO2 2.9 0 0\nHc 3.3 0.6 0.6\nHd 3.3 0.6 -0.6\nHe 0 9 0",
    );
    let connectivity = Connectivity::of(&dimer);
    assert_eq!(
        connectivity.components(),
        [vec![0, 1, 2], vec![3, 4, 5], vec![6]]
    );
    assert_eq!(
        moved_labels(bond(&dimer, ["O2", "O1"]), &dimer),
        ["O1", "Ha", "Hb"]
    );
    assert_eq!(
        moved_labels(bond(&dimer, ["Ha", "O2"]), &dimer),
        ["O2", "Hc", "Hd"]
    );
    assert_eq!(moved_labels(bond(&dimer, ["He", "O1"]), &dimer), ["He"]);
    // Vertex in one fragment, arms in both.
    assert_eq!(
        moved_labels(angle(&dimer, ["Hb", "O1", "O2"]), &dimer),
        ["Hb"]
    );
    assert_eq!(
        moved_labels(dihedral(&dimer, ["Hb", "O1", "O2", "Hc"]), &dimer),
        ["O2", "Hc", "Hd"]
    );
}

#[test]
fn hydrogen_cyanide_bends_and_straightens_in_one_plane() {
    let molecule = hydrogen_cyanide();
    let bend = angle(&molecule, ["H", "C", "N"]);
    let motion = resolve(bend, &molecule, None).unwrap();
    assert_eq!(labels(&molecule, &motion.moves), ["H"]);
    let mut walked = molecule.positions.clone();
    let mut before = molecule.positions.clone();
    for degrees in [
        180.0, 179.99999, 179.9, 170.0, 120.0, 60.0, 120.0, 179.0, 180.0, 175.0, 0.0,
    ] {
        let value = f64::to_radians(degrees);
        let mut fresh = molecule.positions.clone();
        motion.set(&mut fresh, value).unwrap();
        motion.set(&mut walked, value).unwrap();
        assert!((bend.value(&fresh) - value).abs() < 1e-13, "{degrees}°");
        assert!((bend.value(&walked) - value).abs() < 1e-13, "{degrees}°");
        // From the start or step by step: the same plane, the same side of it.
        let [hydrogen] = indices(&molecule, ["H"]);
        assert!(
            (fresh[hydrogen] - walked[hydrogen]).norm() < 1e-9,
            "{degrees}°"
        );
        // A small change of the angle is a small step of the atom, at 180° too.
        let arm = (molecule.positions[1] - molecule.positions[hydrogen]).norm();
        let turned = (bend.value(&before) - value).abs();
        assert!((fresh[hydrogen] - before[hydrogen]).norm() <= arm * turned + 1e-9);
        before = fresh;
    }
}

#[test]
fn a_grid_may_end_at_180_degrees_with_its_rounding() {
    let molecule = water();
    let opening = angle(&molecule, ["H1", "O", "H2"]);
    let motion = resolve(opening, &molecule, None).unwrap();
    for degrees in [180.0, 180.0 + 3e-14, -1e-14] {
        let mut positions = molecule.positions.clone();
        let value = opening.from_reported(degrees);
        set_all(&[(motion.clone(), value)], &mut positions).unwrap();
        assert!((opening.reported_value(&positions) - degrees).abs() < 1e-12);
    }
}

#[test]
fn acetylene_bends_at_both_ends_in_one_plane() {
    let molecule = from_zmatrix("C1\nC2 C1 1.2\nH1 C1 1.06 C2 180\nH2 C2 1.06 C1 180 H1 0");
    let ends = [["H1", "C1", "C2"], ["C1", "C2", "H2"]]
        .map(|labels| resolve(angle(&molecule, labels), &molecule, None).unwrap());
    for (one, two) in [(120.0, 120.0), (179.0, 130.0), (100.0, 179.9)] {
        let mut positions = molecule.positions.clone();
        let set = [
            (ends[0].clone(), f64::to_radians(one)),
            (ends[1].clone(), f64::to_radians(two)),
        ];
        set_all(&set, &mut positions).unwrap();
        let torsion = dihedral(&molecule, ["H1", "C1", "C2", "H2"]).reported_value(&positions);
        assert!(
            (torsion.abs() - 180.0).abs() < 1e-9,
            "{one}°, {two}°: {torsion}"
        );
        assert_eq!(labels(&molecule, &ends[0].moves), ["H1"]);
    }
}

#[test]
fn a_straight_group_bends_in_the_plane_of_the_rest() {
    // Formyl cyanide, flat; its straight C–C≡N bends without leaving the plane, away from the first atom off the line.
    let molecule = from_zmatrix(
        "C1\nC2 C1 1.46\nN C2 1.15 C1 180\nO C1 1.19 C2 124 N 0\nH C1 1.10 C2 114 O 180",
    );
    let bend = angle(&molecule, ["C1", "C2", "N"]);
    let motion = resolve(bend, &molecule, None).unwrap();
    let mut positions = molecule.positions.clone();
    motion.set(&mut positions, f64::to_radians(150.0)).unwrap();
    let flat = dihedral(&molecule, ["O", "C1", "C2", "N"]).value(&positions);
    assert!((flat.abs() - PI).abs() < 1e-12, "{flat}");
    // Almost straight, out of that plane by rounding: the value still comes out exactly.
    let mut noisy = molecule.positions.clone();
    let [n] = indices(&molecule, ["N"]);
    noisy[n] += Vector3::new(3e-7, 1e-7, 0.0);
    for degrees in [180.0, 179.9999999, 90.0, 0.0] {
        let value = f64::to_radians(degrees);
        let mut positions = noisy.clone();
        motion.set(&mut positions, value).unwrap();
        assert!((bend.value(&positions) - value).abs() < 1e-13, "{degrees}°");
    }
}

#[test]
fn a_torsion_about_a_straight_chain_is_cut_on_the_chain() {
    let butyne = from_zmatrix(
        "C2\nC3 C2 1.2\nC1 C2 1.47 C3 180\nC4 C3 1.47 C2 180 C1 0\n\
         H1 C1 1.09 C2 110 C4 0\nH2 C1 1.09 C2 110 H1 120\nH3 C1 1.09 C2 110 H1 -120\n\
         H4 C4 1.09 C3 110 H1 180\nH5 C4 1.09 C3 110 H1 60\nH6 C4 1.09 C3 110 H1 -60",
    );
    let torsion = dihedral(&butyne, ["H1", "C1", "C4", "H4"]);
    let motion = resolve(torsion, &butyne, None).unwrap();
    // The sides are equal but for the cut, which leaves the inner carbon atoms to the other one.
    assert_eq!(labels(&butyne, &motion.moves), ["C1", "H1", "H2", "H3"]);
    let mut positions = butyne.positions.clone();
    motion.set(&mut positions, 0.3).unwrap();
    assert!((torsion.value(&positions) - 0.3).abs() < 1e-13);
    for i in indices(&butyne, ["C1", "C2", "C3", "C4", "H4"]) {
        assert!((positions[i] - butyne.positions[i]).norm() < 1e-12);
    }
}

#[test]
fn atoms_asked_to_move_replace_the_side() {
    let molecule = ethane();
    let [c1, c2, h1, h4, h5] = indices(&molecule, ["C1", "C2", "H1", "H4", "H5"]);
    let torsion = Coordinate::Dihedral([h1, c1, c2, h4]);
    let accepted = |atoms: &[usize]| resolve(torsion, &molecule, Some(atoms)).map(|m| m.moves);
    assert_eq!(accepted(&[h4]), Ok(vec![h4]));
    assert_eq!(accepted(&[h5, c2, h4]), Ok(vec![c2, h4, h5]));
    assert_eq!(accepted(&[h1]), Ok(vec![h1]));
    assert!(matches!(
        accepted(&[h4, c1]),
        Err(MotionError::MovesPivot { .. })
    ));
    assert!(matches!(
        accepted(&[h1, h4]),
        Err(MotionError::MovesBothEnds { .. })
    ));
    assert!(matches!(
        accepted(&[h5]),
        Err(MotionError::MovesNoEnd { .. })
    ));
    assert!(matches!(accepted(&[]), Err(MotionError::MovesNoEnd { .. })));
    assert_eq!(
        accepted(&[h4, h4]),
        Err(MotionError::MovesList {
            atom: h4,
            twice: true
        })
    );
    assert_eq!(
        accepted(&[h4, 99]),
        Err(MotionError::MovesList {
            atom: 99,
            twice: false
        })
    );
    let opening = Coordinate::Angle([h1, c1, c2]);
    assert!(matches!(
        resolve(opening, &molecule, Some(&[h1, c1])),
        Err(MotionError::MovesPivot { .. })
    ));
}

#[test]
fn values_out_of_range_are_refused_and_nothing_moves() {
    let molecule = ethane();
    let stretch = resolve(bond(&molecule, ["C1", "C2"]), &molecule, None).unwrap();
    let bend = resolve(angle(&molecule, ["H1", "C1", "C2"]), &molecule, None).unwrap();
    let torsion = dihedral(&molecule, ["H1", "C1", "C2", "H4"]);
    let torsion = resolve(torsion, &molecule, None).unwrap();
    for (motion, values) in [
        (&stretch, &[0.0, -1.0, f64::NAN, f64::INFINITY][..]),
        (&bend, &[-0.1, PI + 1e-9, f64::NAN][..]),
        (&torsion, &[f64::NAN, f64::NEG_INFINITY][..]),
    ] {
        for &value in values {
            let mut positions = molecule.positions.clone();
            let error = motion.set(&mut positions, value).unwrap_err();
            assert!(matches!(
                error,
                MotionError::BondRange { .. }
                    | MotionError::AngleRange { .. }
                    | MotionError::DihedralRange { .. }
            ));
            assert_eq!(positions, molecule.positions);
        }
    }
}

#[test]
fn meaningless_coordinates_are_refused() {
    let line = from_zmatrix("C1\nC2 C1 1.2\nH1 C1 1.06 C2 180\nH2 C2 1.06 C1 180 H1 0");
    let error = resolve(dihedral(&line, ["H1", "C1", "C2", "H2"]), &line, None).unwrap_err();
    assert!(matches!(
        error,
        MotionError::Coordinate(CoordinateError::Collinear { .. })
    ));
    assert!(error.help().is_some());
    let repeated = resolve(Coordinate::Angle([0, 1, 0]), &line, None).unwrap_err();
    assert!(matches!(
        repeated,
        MotionError::Coordinate(CoordinateError::Repeated { .. })
    ));
}

#[test]
fn near_a_line_a_dihedral_is_set_as_sharply_as_it_is_defined() {
    let molecule = from_zmatrix("O1\nO2 O1 1.45\nH1 O1 0.97 O2 179.99\nH2 O2 0.97 O1 100 H1 115");
    let torsion = dihedral(&molecule, ["H1", "O1", "O2", "H2"]);
    let motion = resolve(torsion, &molecule, None).unwrap();
    let [o1, o2, h1] = indices(&molecule, ["O1", "O2", "H1"]);
    let sine = sine_between(
        &(molecule.positions[h1] - molecule.positions[o1]),
        &(molecule.positions[o2] - molecule.positions[o1]),
    );
    assert!(sine < 2e-4);
    let mut positions = molecule.positions.clone();
    set_all(&[(motion, 1.0)], &mut positions).unwrap();
    assert!((torsion.value(&positions) - 1.0).abs() < 1e-11);
}
