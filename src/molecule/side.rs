//! Which atoms move when a coordinate is set: the sides of a bond, a vertex or an axis.

use super::Molecule;
use super::connectivity::{Connectivity, Cut};
use super::frame::sine_between;
use super::internal::Coordinate;
use super::motion_error::MotionError;

/// First and last atom of a coordinate.
fn ends(coordinate: Coordinate) -> (usize, usize) {
    match coordinate {
        Coordinate::Bond([a, b]) => (a, b),
        Coordinate::Angle([a, _, c]) => (a, c),
        Coordinate::Dihedral([a, _, _, d]) => (a, d),
    }
}

/// The atoms asked to move, ascending, if they can.
pub(super) fn requested_side(
    coordinate: Coordinate,
    molecule: &Molecule,
    atoms: &[usize],
) -> Result<Vec<usize>, MotionError> {
    let label = |i: usize| molecule.atoms[i].label.clone();
    let mut moves = atoms.to_vec();
    moves.sort_unstable();
    if let Some(&atom) = moves.iter().find(|&&i| i >= molecule.atoms.len()) {
        return Err(MotionError::MovesList { atom, twice: false });
    }
    if let Some(pair) = moves.windows(2).find(|pair| pair[0] == pair[1]) {
        return Err(MotionError::MovesList {
            atom: pair[0],
            twice: true,
        });
    }
    let (first, last) = ends(coordinate);
    let described = coordinate.describe(&molecule.atoms);
    let moving = match (moves.contains(&first), moves.contains(&last)) {
        (false, true) => last,
        (true, false) => first,
        (holds, _) => {
            let (first, second) = (label(first), label(last));
            return Err(if holds {
                MotionError::MovesBothEnds {
                    coordinate: described,
                    first,
                    second,
                }
            } else {
                MotionError::MovesNoEnd {
                    coordinate: described,
                    first,
                    second,
                }
            });
        }
    };
    // An axis atom beside the moving end may be listed: it is part of that side and on the axis, so it stays anyway.
    let pivot = match coordinate {
        Coordinate::Bond(_) => None,
        Coordinate::Angle([_, b, _]) => Some(b),
        Coordinate::Dihedral([_, b, c, _]) => Some(if moving == last { b } else { c }),
    };
    match pivot {
        Some(atom) if moves.contains(&atom) => Err(MotionError::MovesPivot {
            coordinate: described,
            atom: label(atom),
            moving: label(moving),
        }),
        _ => Ok(moves),
    }
}

/// The side that moves when nothing is asked (see [`Motion::resolve`](super::motion::Motion::resolve)).
pub(super) fn default_side(
    coordinate: Coordinate,
    molecule: &Molecule,
    connectivity: &Connectivity,
    functions_per_atom: &[usize],
) -> Result<Vec<usize>, MotionError> {
    let label = |i: usize| molecule.atoms[i].label.clone();
    let cut = match coordinate {
        Coordinate::Bond([a, b]) => Cut::Bond(a, b),
        Coordinate::Angle([_, b, _]) => Cut::Atom(b),
        Coordinate::Dihedral([_, b, c, _]) => axis_cut(molecule, connectivity, b, c),
    };
    let (first, last) = ends(coordinate);
    if let Some(path) = connectivity.path(first, last, cut) {
        return Err(MotionError::Joined {
            coordinate: coordinate.describe(&molecule.atoms),
            cut: match cut {
                Cut::Bond(i, j) if connectivity.bonded(i, j) => {
                    Some(format!("the bond {}–{}", label(i), label(j)))
                }
                Cut::Atom(i) => Some(format!("atom {}", label(i))),
                Cut::Bond(..) | Cut::Nothing => None,
            },
            first: label(first),
            second: label(last),
            path: path[1..path.len() - 1].iter().map(|&i| label(i)).collect(),
        });
    }
    let functions = |side: &[usize]| -> usize {
        side.iter()
            .map(|&i| functions_per_atom.get(i).copied().unwrap_or(0))
            .sum()
    };
    let first_side = connectivity.component(first, cut);
    let last_side = connectivity.component(last, cut);
    Ok(if functions(&last_side) <= functions(&first_side) {
        last_side
    } else {
        first_side
    })
}

/// The bond to take out for a turn about the axis b–c: their own, or where they are joined through atoms that all lie
/// on the axis, the first bond of that way.
fn axis_cut(molecule: &Molecule, connectivity: &Connectivity, b: usize, c: usize) -> Cut {
    let own = Cut::Bond(b, c);
    if connectivity.bonded(b, c) {
        return own;
    }
    let Some(path) = connectivity.path(b, c, Cut::Nothing) else {
        return own;
    };
    // Atoms this near the axis turn with it as good as in place.
    const ON_AXIS_SINE: f64 = 1e-3;
    let axis = molecule.positions[c] - molecule.positions[b];
    let straight = path[1..path.len() - 1].iter().all(|&i| {
        sine_between(&(molecule.positions[i] - molecule.positions[b]), &axis) < ON_AXIS_SINE
    });
    if straight {
        Cut::Bond(path[0], path[1])
    } else {
        own
    }
}
