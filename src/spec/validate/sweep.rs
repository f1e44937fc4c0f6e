//! The tables `[[sweep]]`: coordinates, the atoms that move, and a grid on which every geometry is sound.

use super::{atoms, values};
use crate::molecule::Molecule;
use crate::molecule::cartesian::check_distances;
use crate::molecule::connectivity::Connectivity;
use crate::molecule::internal::{Coordinate, CoordinateError};
use crate::molecule::motion::{Motion, MotionError};
use crate::scan::sweep::positions_at;
use crate::spec::diagnostic::{Problems, all_of, number};
use crate::spec::raw::{RawLabels, RawSweep, RawTied};
use crate::spec::read::{Field, Given};
use crate::spec::{MAX_POINTS, Sweep};
use crate::units::LengthUnit;
use std::ops::Range;

/// What a sweep is checked against.
pub(super) struct Context<'a> {
    /// Unit of lengths.
    pub(super) unit: LengthUnit,
    /// The molecule, if it is good.
    pub(super) molecule: Option<&'a Molecule>,
    /// Basis functions of each atom at the first level; empty if that is wrong.
    pub(super) functions_per_atom: &'a [usize],
}

/// Kind of a coordinate.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Kind {
    Bond,
    Angle,
    Dihedral,
}

impl Kind {
    fn with_article(self) -> &'static str {
        match self {
            Self::Bond => "a bond",
            Self::Angle => "an angle",
            Self::Dihedral => "a dihedral",
        }
    }

    fn form(self) -> &'static str {
        match self {
            Self::Bond => "bond = [a, b]",
            Self::Angle => "angle = [a, b, c], b the vertex",
            Self::Dihedral => "dihedral = [a, b, c, d]",
        }
    }

    fn coordinate(self, atoms: &[usize]) -> Option<Coordinate> {
        match self {
            Self::Bond => atoms.try_into().ok().map(Coordinate::Bond),
            Self::Angle => atoms.try_into().ok().map(Coordinate::Angle),
            Self::Dihedral => atoms.try_into().ok().map(Coordinate::Dihedral),
        }
    }

    fn atoms(self) -> usize {
        match self {
            Self::Bond => 2,
            Self::Angle => 3,
            Self::Dihedral => 4,
        }
    }
}

/// A coordinate as the spec names it.
struct Target {
    kind: Kind,
    span: Range<usize>,
    /// None if its atoms are wrong, or the molecule is.
    coordinate: Option<Coordinate>,
}

/// Checks all sweeps and the grid they span; those that are wrong are left out.
pub(super) fn sweeps(
    raw: &Field<Vec<Given<RawSweep>>>,
    context: &Context<'_>,
    problems: &mut Problems<'_>,
    notes: &mut Problems<'_>,
) -> Vec<Sweep> {
    let Some(list) = raw.get() else {
        return Vec::new();
    };
    if let Some(third) = list.value.get(2) {
        problems
            .at(
                &third.span,
                format!("there are {} sweeps", list.value.len()),
            )
            .expected("one sweep gives a curve, two a surface; more are not scanned")
            .hint("tie coordinates together with also = [{ … }]");
    }
    let before = problems.found.len();
    let connectivity = context.molecule.map(Connectivity::of);
    let mut taken: Vec<Coordinate> = Vec::new();
    let mut sweeps = Vec::new();
    let mut places = Vec::new();
    for given in list.value.iter().take(2) {
        let target = target(
            [&given.value.bond, &given.value.angle, &given.value.dihedral],
            &given.span,
            "[[sweep]]",
            context,
            problems,
        );
        let values = values::values(
            given,
            target.as_ref().map(|t| t.kind),
            context.unit,
            problems,
            notes,
        );
        let tied: Vec<(&Given<RawTied>, Option<Target>)> = given
            .value
            .also
            .get()
            .map_or(&[][..], |also| &also.value)
            .iter()
            .map(|tied| {
                let raw = &tied.value;
                let fields = [&raw.bond, &raw.angle, &raw.dihedral];
                (
                    tied,
                    self::target(fields, &tied.span, "also", context, problems),
                )
            })
            .collect();
        let Some(target) = target else {
            continue;
        };
        for other in tied.iter().filter_map(|(_, t)| t.as_ref()) {
            if other.kind != target.kind {
                problems
                    .at(
                        &other.span,
                        format!(
                            "{} cannot be moved in step with {}",
                            other.kind.with_article(),
                            target.kind.with_article()
                        ),
                    )
                    .expected(format!("expected {}", target.kind.form()));
            }
        }
        let own = (&given.value.moves, Some(&target));
        let others = tied.iter().map(|(raw, t)| (&raw.value.moves, t.as_ref()));
        let motions: Vec<Option<Motion>> = std::iter::once(own)
            .chain(others)
            .map(|(moves, target)| {
                let (target, connectivity) = (target?, connectivity.as_ref()?);
                let coordinate = target.coordinate?;
                once(coordinate, target, &mut taken, context, problems);
                motion(coordinate, moves, target, connectivity, context, problems)
            })
            .collect();
        let motions: Option<Vec<Motion>> = motions.into_iter().collect();
        let (Some(mut motions), Some((values, written))) = (motions, values) else {
            continue;
        };
        let also = motions.split_off(1);
        if let Some(motion) = motions.pop() {
            places.push(target.span);
            sweeps.push(Sweep {
                motion,
                also,
                values,
                written,
            });
        }
    }
    // A grid whose sweeps or molecule are wrong says nothing.
    if let (Some(molecule), true) = (context.molecule, problems.found.len() == before) {
        grid(molecule, &sweeps, &places, problems);
    }
    sweeps
}

/// The one coordinate that a table names.
fn target(
    fields: [&Field<RawLabels>; 3],
    table: &Range<usize>,
    written: &str,
    context: &Context<'_>,
    problems: &mut Problems<'_>,
) -> Option<Target> {
    let kinds = [Kind::Bond, Kind::Angle, Kind::Dihedral];
    let present: Vec<(Kind, &Field<RawLabels>)> = kinds
        .into_iter()
        .zip(fields)
        .filter(|(_, field)| !field.is_absent())
        .collect();
    let forms = "expected one of bond = [a, b], angle = [a, b, c] and dihedral = [a, b, c, d]";
    let Some((kind, field)) = present.first().copied() else {
        problems
            .at(table, format!("{written} names no coordinate"))
            .expected(forms);
        return None;
    };
    for (other, field) in &present[1..] {
        if let Some(given) = field.get() {
            problems
                .at(
                    &given.span,
                    format!(
                        "{written} names {} and {}",
                        kind.with_article(),
                        other.with_article()
                    ),
                )
                .expected(forms);
        }
    }
    let given = field.get()?;
    let count = given.value.len();
    if count != kind.atoms() {
        problems
            .at(
                &given.span,
                format!(
                    "{} has {} atoms, not {count}",
                    kind.with_article(),
                    kind.atoms()
                ),
            )
            .expected(format!("expected {}", kind.form()));
    }
    let coordinate = context
        .molecule
        .and_then(|molecule| atoms(&given.value, molecule, problems))
        .and_then(|atoms| kind.coordinate(&atoms));
    Some(Target {
        kind,
        span: given.span.clone(),
        coordinate,
    })
}

/// Records a coordinate that is already swept, in this direction or the other.
fn once(
    coordinate: Coordinate,
    target: &Target,
    taken: &mut Vec<Coordinate>,
    context: &Context<'_>,
    problems: &mut Problems<'_>,
) {
    let reversed: Vec<usize> = coordinate.atoms().iter().rev().copied().collect();
    let same = |other: &Coordinate| {
        other.kind_word() == coordinate.kind_word()
            && (other.atoms() == coordinate.atoms() || other.atoms() == reversed)
    };
    if taken.iter().any(same) {
        let name = context
            .molecule
            .map_or_else(String::new, |m| coordinate.describe(&m.atoms));
        problems.at(&target.span, format!("the {name} is already swept"));
    }
    taken.push(coordinate);
}

fn motion(
    coordinate: Coordinate,
    moves: &Field<RawLabels>,
    target: &Target,
    connectivity: &Connectivity,
    context: &Context<'_>,
    problems: &mut Problems<'_>,
) -> Option<Motion> {
    let molecule = context.molecule?;
    let requested = match moves {
        Field::Absent => None,
        Field::Wrong => return None,
        Field::Given(list) => Some(atoms(&list.value, molecule, problems)?),
    };
    match Motion::resolve(
        coordinate,
        molecule,
        connectivity,
        context.functions_per_atom,
        requested.as_deref(),
    ) {
        Ok(motion) => Some(motion),
        Err(error) => {
            let span = moves.get().map_or(&target.span, |list| &list.span);
            let hint = error.help();
            problems
                .at(span, describe(&error, coordinate, molecule))
                .hint = hint;
            None
        }
    }
}

/// The error in the molecule's labels.
fn describe(error: &MotionError, coordinate: Coordinate, molecule: &Molecule) -> String {
    let labels = |atoms: &[usize]| -> String {
        let labels: Vec<&str> = atoms
            .iter()
            .map(|&i| molecule.atoms.get(i).map_or("?", |a| a.label.as_str()))
            .collect();
        all_of(&labels)
    };
    let name = coordinate.describe(&molecule.atoms);
    match error {
        MotionError::Coordinate(CoordinateError::Collinear { atoms }) => format!(
            "{} are on one line, so the {name} is undefined",
            labels(atoms)
        ),
        MotionError::Coordinate(CoordinateError::Coincident { atoms, .. }) => format!(
            "{} are on one spot, so the {name} is undefined",
            labels(atoms)
        ),
        other => other.to_string(),
    }
}

/// Checks the geometry at every point of the grid; the first that is unsound is recorded.
fn grid(
    molecule: &Molecule,
    sweeps: &[Sweep],
    places: &[Range<usize>],
    problems: &mut Problems<'_>,
) {
    let Some(place) = places.first() else {
        return;
    };
    let points: usize = sweeps.iter().map(|s| s.values.len()).product();
    if points > MAX_POINTS {
        let sizes: Vec<String> = sweeps.iter().map(|s| s.values.len().to_string()).collect();
        problems
            .at(
                place,
                format!("the grid has {} = {points} points", sizes.join(" × ")),
            )
            .expected(format!("expected at most {MAX_POINTS}"));
        return;
    }
    for point in 0..points {
        let mut rest = point;
        let mut at = vec![0.0; sweeps.len()];
        for (value, sweep) in at.iter_mut().zip(sweeps).rev() {
            *value = sweep.values[rest % sweep.values.len()];
            rest /= sweep.values.len();
        }
        let problem = match positions_at(&molecule.positions, sweeps, &at) {
            Ok(positions) => match check_distances(&molecule.atoms, &positions) {
                Ok(()) => continue,
                Err(near) => (near.to_string(), None),
            },
            Err(error) => (cannot_be_set(&error, sweeps, molecule), error.help()),
        };
        let point: Vec<String> = sweeps
            .iter()
            .zip(&at)
            .map(|(sweep, value)| {
                let unit = if sweep.unit() == "degree" {
                    "°"
                } else {
                    " Å"
                };
                format!(
                    "{} = {}{unit}",
                    sweep.motion.coordinate.describe(&molecule.atoms),
                    number((value * 1e6).round() / 1e6)
                )
            })
            .collect();
        problems
            .at(place, format!("at {}: {}", all_of(&point), problem.0))
            .hint = problem.1;
        return;
    }
}

/// Why a point of the grid cannot be reached.
fn cannot_be_set(error: &MotionError, sweeps: &[Sweep], molecule: &Molecule) -> String {
    let motions: Vec<&Motion> = sweeps.iter().flat_map(Sweep::motions).collect();
    match error {
        MotionError::Contradiction {
            place, off, unit, ..
        } if *place < motions.len() => format!(
            "the coordinates cannot be set together: the {} stays {off:.3} {unit} off",
            motions[*place].coordinate.describe(&molecule.atoms)
        ),
        MotionError::Coordinate(_) => {
            let coordinate = motions
                .iter()
                .map(|m| m.coordinate)
                .find(|c| matches!(c, Coordinate::Dihedral(_)))
                .unwrap_or(motions[0].coordinate);
            describe(error, coordinate, molecule)
        }
        other => other.to_string(),
    }
}
