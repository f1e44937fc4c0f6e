//! Cartesian geometries as text: blocks of `LABEL x y z`, and XYZ files.

use super::Atom;
use super::geometry_error::{GeometryError, GeometryProblem};
use super::label::{Writing, element_of, number_bare_symbols};
use super::rows::{Word, lines, rows, span_of, words};
use crate::elements::Element;
use crate::units::LengthUnit;
use nalgebra::Vector3;
use std::fmt::Write as _;
use std::ops::Range;

/// Label, element and the three coordinates as written, in the unit of the text.
pub type Entry = (String, Element, [f64; 3]);

/// Two atoms nearer to each other than this (ångström) are taken for a mistake of the input.
///
/// No molecule or useful scan comes near it (the shortest bond, in H₂, is 0.74 Å), and two sets of basis functions so
/// close are dependent to working precision.
pub const COINCIDENT_WITHIN_ANGSTROM: f64 = 0.1;

/// Two atoms on practically one spot.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[error(
    "{first} and {second} are {distance_angstrom:.3} Å apart; atoms nearer than {COINCIDENT_WITHIN_ANGSTROM} Å are taken for a mistake"
)]
pub struct CoincidentAtoms {
    /// label of the earlier atom
    pub first: String,
    /// label of the later atom
    pub second: String,
    /// indices of both
    pub atoms: [usize; 2],
    /// how far apart, ångström
    pub distance_angstrom: f64,
}

/// Checks that no two atoms, ghosts included, are nearer than [`COINCIDENT_WITHIN_ANGSTROM`]. Positions in bohr.
///
/// # Errors
/// The first pair that is too near.
pub fn check_distances(atoms: &[Atom], positions: &[Vector3<f64>]) -> Result<(), CoincidentAtoms> {
    for j in 0..positions.len() {
        for i in 0..j {
            let distance_angstrom =
                LengthUnit::Angstrom.from_bohr((positions[j] - positions[i]).norm());
            if distance_angstrom < COINCIDENT_WITHIN_ANGSTROM {
                return Err(CoincidentAtoms {
                    first: atoms[i].label.clone(),
                    second: atoms[j].label.clone(),
                    atoms: [i, j],
                    distance_angstrom,
                });
            }
        }
    }
    Ok(())
}

/// Reads rows `LABEL x y z`; `#` begins a comment. A bare symbol that occurs several times is numbered per element
/// (`O`, `H1`, `H2`); all other labels are what is written.
///
/// # Errors
/// Every mistake in the text, in order.
pub fn parse_cartesian(text: &str) -> Result<Vec<Entry>, Vec<GeometryError>> {
    let rows = rows(text);
    let mut errors = Vec::new();
    if rows.is_empty() {
        errors.push(GeometryError {
            span: 0..text.len(),
            problem: GeometryProblem::NoAtoms,
        });
    }
    let entries = parse_rows(&rows, Writing::Labelled, &mut errors);
    if errors.is_empty() {
        Ok(entries)
    } else {
        Err(errors)
    }
}

/// Bytes of the rows that [`parse_cartesian`] makes its entries from.
#[must_use]
pub fn row_spans(text: &str) -> Vec<Range<usize>> {
    rows(text).iter().map(|row| span_of(row)).collect()
}

/// Reads an XYZ file with one geometry: the number of atoms, a comment line, then one row `SYMBOL x y z` per atom, in
/// ångström. Further columns are ignored, as programs put charges or velocities there. Labels as in [`parse_cartesian`],
/// but a word that is a symbol as a whole may be in any case (`CL`). Returns the atoms and the comment.
///
/// # Errors
/// Every mistake in the text, in order.
pub fn parse_xyz(text: &str) -> Result<(Vec<Entry>, String), Vec<GeometryError>> {
    // Some editors put a byte-order mark at the beginning of a file.
    let mark = '\u{feff}';
    let begin = if text.starts_with(mark) {
        mark.len_utf8()
    } else {
        0
    };
    let lines: Vec<(usize, &str)> = lines(&text[begin..])
        .map(|(start, line)| (start + begin, line))
        .collect();
    let first = lines.first().map_or("", |(_, line)| line.trim());
    let announced = match first.parse::<usize>() {
        Ok(count) => count,
        Err(_) => {
            let (start, line) = lines.first().copied().unwrap_or((begin, ""));
            return Err(vec![GeometryError {
                span: start..start + line.len(),
                problem: GeometryProblem::XyzCount {
                    found: first.to_owned(),
                },
            }]);
        }
    };
    let comment = lines.get(1).map_or("", |(_, line)| line.trim()).to_owned();
    let body: Vec<Vec<Word<'_>>> = lines
        .iter()
        .skip(2)
        .map(|&(start, line)| words(line, start))
        .collect();
    let mut errors = Vec::new();
    // A row of one whole number where an atom should be begins another frame, or the count is wrong.
    let is_count = |row: &[Word<'_>]| row.len() == 1 && row[0].text.parse::<usize>().is_ok();
    let present = body
        .iter()
        .take(announced)
        .take_while(|row| !row.is_empty() && !is_count(row))
        .count();
    if announced == 0 {
        errors.push(GeometryError {
            span: 0..text.len(),
            problem: GeometryProblem::NoAtoms,
        });
    } else if present < announced {
        errors.push(GeometryError {
            span: lines[0].0..lines[0].0 + lines[0].1.len(),
            problem: GeometryProblem::XyzTooFewRows {
                announced,
                found: present,
            },
        });
    }
    let entries = parse_rows(&body[..present], Writing::Symbols, &mut errors);
    if present == announced
        && let Some(row) = body[present..].iter().find(|row| !row.is_empty())
    {
        errors.push(GeometryError {
            span: span_of(row),
            problem: if is_count(row) {
                GeometryProblem::XyzSecondFrame
            } else {
                GeometryProblem::XyzTooManyRows { announced }
            },
        });
    }
    if errors.is_empty() {
        Ok((entries, comment))
    } else {
        Err(errors)
    }
}

fn parse_rows(
    rows: &[Vec<Word<'_>>],
    writing: Writing,
    errors: &mut Vec<GeometryError>,
) -> Vec<Entry> {
    let mut atoms: Vec<(String, Element)> = Vec::with_capacity(rows.len());
    let mut coordinates: Vec<[f64; 3]> = Vec::with_capacity(rows.len());
    for (index, row) in rows.iter().enumerate() {
        let label = &row[0];
        match element_of(label.text, writing) {
            Ok(element) => {
                let bare = label.text.eq_ignore_ascii_case(element.symbol());
                let first = rows[..index].iter().position(|r| r[0].text == label.text);
                if let (false, Some(first)) = (bare, first) {
                    errors.push(label.error(GeometryProblem::DuplicateLabel {
                        label: label.text.to_owned(),
                        first: first + 1,
                    }));
                }
                atoms.push((label.text.to_owned(), element));
            }
            Err(problem) => errors.push(label.error(problem)),
        }
        let enough = match writing {
            Writing::Labelled => row.len() == 4,
            Writing::Symbols => row.len() >= 4,
        };
        if !enough {
            errors.push(GeometryError {
                span: if row.len() > 4 {
                    span_of(&row[4..])
                } else {
                    span_of(row)
                },
                problem: GeometryProblem::WordCount {
                    row: index + 1,
                    found: row.len(),
                    expected: 4,
                    form: "LABEL x y z",
                },
            });
        }
        let mut position = [0.0; 3];
        for (axis, word) in row[1..].iter().take(3).enumerate() {
            match word.number("a coordinate") {
                Ok(value) => position[axis] = value,
                Err(error) => errors.push(error),
            }
        }
        coordinates.push(position);
    }
    if !errors.is_empty() {
        return Vec::new();
    }
    number_bare_symbols(&mut atoms);
    atoms
        .into_iter()
        .zip(coordinates)
        .map(|((label, element), position)| (label, element, position))
        .collect()
}

/// Positions in bohr of entries whose lengths are in `length_unit`.
#[must_use]
pub fn positions_of(entries: &[Entry], length_unit: LengthUnit) -> Vec<Vector3<f64>> {
    entries
        .iter()
        .map(|(_, _, position)| Vector3::from(position.map(|x| length_unit.to_bohr(x))))
        .collect()
}

/// The atoms of entries, none of them a ghost.
#[must_use]
pub fn atoms_of(entries: &[Entry]) -> Vec<Atom> {
    entries
        .iter()
        .map(|(label, element, _)| Atom {
            label: label.clone(),
            element: *element,
            ghost: false,
        })
        .collect()
}

/// Rows that [`parse_cartesian`] reads back to the same entries, bit for bit.
#[must_use]
pub fn cartesian_text(entries: &[Entry]) -> String {
    let mut text = String::new();
    for (label, _, [x, y, z]) in entries {
        // Writing to a string cannot fail.
        let _ = writeln!(text, "{label} {x} {y} {z}");
    }
    text
}

/// One frame of an XYZ file: count, comment (its line breaks made spaces), symbols, and the positions (given in bohr)
/// in ångström to ten decimals.
#[must_use]
pub fn xyz_frame(atoms: &[Atom], positions: &[Vector3<f64>], comment: &str) -> String {
    let comment = comment.replace(['\n', '\r'], " ");
    let mut text = format!("{}\n{comment}\n", atoms.len());
    for (atom, position) in atoms.iter().zip(positions) {
        let [x, y, z] =
            [position.x, position.y, position.z].map(|x| LengthUnit::Angstrom.from_bohr(x));
        // Writing to a string cannot fail.
        let _ = writeln!(
            text,
            "{:<2} {x:>16.10} {y:>16.10} {z:>16.10}",
            atom.element.symbol()
        );
    }
    text
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn problems(text: &str, errors: Vec<GeometryError>) -> Vec<(&str, GeometryProblem)> {
        errors
            .into_iter()
            .map(|error| (&text[error.span], error.problem))
            .collect()
    }

    fn labels(entries: &[Entry]) -> Vec<&str> {
        entries.iter().map(|(label, _, _)| label.as_str()).collect()
    }

    #[test]
    fn a_block_is_read_with_numbered_symbols() {
        let text = "# water\nO 0.0 0.0 0.1173\nH 0 .7572 -4.692e-1 # one\n\nH 0 -0.7572 -0.4692\n";
        let entries = parse_cartesian(text).unwrap();
        assert_eq!(labels(&entries), ["O", "H1", "H2"]);
        assert_eq!(
            entries[1].2.map(f64::to_bits),
            [0.0, 0.7572, -0.4692].map(f64::to_bits)
        );
        let rows: Vec<&str> = row_spans(text)
            .into_iter()
            .map(|span| &text[span])
            .collect();
        assert_eq!(rows[1], "H 0 .7572 -4.692e-1");
        let positions = positions_of(&entries, LengthUnit::Angstrom);
        assert!((positions[1].y * crate::units::ANGSTROM_PER_BOHR - 0.7572).abs() < 1e-15);
        assert!((positions_of(&entries, LengthUnit::Bohr)[1].y - 0.7572).abs() < 1e-15);
    }

    #[test]
    fn every_mistake_of_a_block_is_found_with_its_place() {
        let text = "H1 0 0 0\nH1 1 0 0\nX 2 0 zero\nCl 3 0\nN 0 4 0 5 6";
        let found = problems(text, parse_cartesian(text).unwrap_err());
        let places: Vec<&str> = found.iter().map(|(place, _)| *place).collect();
        assert_eq!(places, ["H1", "X", "zero", "Cl 3 0", "5 6"]);
        assert_eq!(
            found[3].1.to_string(),
            "row 4 has 3 words, but needs 4: LABEL x y z"
        );
        assert_eq!(
            parse_cartesian("").unwrap_err()[0].problem,
            GeometryProblem::NoAtoms
        );
    }

    #[test]
    fn an_xyz_file_is_read() {
        let text = "\u{feff}3\r\n  a comment # kept \r\nO 0 0 0.1\r\nH 0 0.7 -0.4 0.33 ignored\r\nH 0 -0.7 -0.4\r\n\r\n";
        let (entries, comment) = parse_xyz(text).unwrap();
        assert_eq!(comment, "a comment # kept");
        assert_eq!(labels(&entries), ["O", "H1", "H2"]);
        let (entries, _) = parse_xyz("2\n\nCL 0 0 0\nCO 0 0 2").unwrap();
        assert_eq!(
            entries.iter().map(|e| e.1.symbol()).collect::<Vec<_>>(),
            ["Cl", "Co"]
        );
    }

    #[test]
    fn mistakes_of_xyz_files_are_told_apart() {
        let of = |text: &str| -> Vec<GeometryProblem> {
            let errors = parse_xyz(text).unwrap_err();
            for error in &errors {
                assert!(text.get(error.span.clone()).is_some(), "{error}");
            }
            errors.into_iter().map(|e| e.problem).collect()
        };
        assert_eq!(
            of("H 0 0 0"),
            [GeometryProblem::XyzCount {
                found: "H 0 0 0".to_owned()
            }]
        );
        assert_eq!(
            of(""),
            [GeometryProblem::XyzCount {
                found: String::new()
            }]
        );
        assert_eq!(of("0\n\n"), [GeometryProblem::NoAtoms]);
        assert_eq!(
            of("3\n\nH 0 0 0\nH 0 0 1\n"),
            [GeometryProblem::XyzTooFewRows {
                announced: 3,
                found: 2
            }]
        );
        assert_eq!(
            of("1\n\nH 0 0 0\nH 0 0 1\n"),
            [GeometryProblem::XyzTooManyRows { announced: 1 }]
        );
        assert_eq!(
            of("1\n\nH 0 0 0\n1\n\nH 0 0 1\n"),
            [GeometryProblem::XyzSecondFrame]
        );
        assert_eq!(
            of("2\n\nH 0 0 x\nQ 0 0 1\n"),
            [
                GeometryProblem::NotANumber {
                    word: "x".to_owned(),
                    what: "a coordinate"
                },
                GeometryProblem::UnknownElement {
                    label: "Q".to_owned()
                }
            ]
        );
    }

    #[test]
    fn coincident_atoms_are_named() {
        let entries = parse_cartesian("O 0 0 0\nH 0 0 0.9\nH 0 0.05 0.95").unwrap();
        let atoms = atoms_of(&entries);
        let error =
            check_distances(&atoms, &positions_of(&entries, LengthUnit::Angstrom)).unwrap_err();
        assert_eq!(error.atoms, [1, 2]);
        assert_eq!(
            error.to_string(),
            "H1 and H2 are 0.071 Å apart; atoms nearer than 0.1 Å are taken for a mistake"
        );
        let bohr = positions_of(&entries[..2], LengthUnit::Bohr);
        assert_eq!(check_distances(&atoms, &bohr), Ok(()));
    }

    proptest! {
        #[test]
        fn text_comes_back_bit_for_bit(points in prop::collection::vec(prop::array::uniform3(-1e3..1e3_f64), 1..6)) {
            let mut text = String::new();
            for [x, y, z] in &points {
                text += &format!("H {x:?} {y:e} {z}\n");
            }
            let entries = parse_cartesian(&text).unwrap();
            prop_assert_eq!(&parse_cartesian(&cartesian_text(&entries)).unwrap(), &entries);
            for (entry, point) in entries.iter().zip(&points) {
                prop_assert_eq!(entry.2.map(f64::to_bits), point.map(f64::to_bits));
            }
        }

        #[test]
        fn frames_are_read_back_to_their_decimals(points in prop::collection::vec(prop::array::uniform3(-90.0..90.0_f64), 1..6)) {
            let text: String = points.iter().map(|[x, y, z]| format!("C {x} {y} {z}\n")).collect();
            let entries = parse_cartesian(&text).unwrap();
            let positions = positions_of(&entries, LengthUnit::Bohr);
            let frame = xyz_frame(&atoms_of(&entries), &positions, "two\nlines");
            let (back, comment) = parse_xyz(&frame).unwrap();
            prop_assert_eq!(comment, "two lines");
            for (one, two) in positions.iter().zip(positions_of(&back, LengthUnit::Angstrom)) {
                // Half a unit of the tenth decimal in ångström.
                prop_assert!((one - two).iter().all(|x| x.abs() < 0.95e-10));
            }
        }

        #[test]
        fn any_text_is_read_or_refused_with_spans_inside_it(text in "[1-3HOC .\né-]{0,60}") {
            for result in [parse_cartesian(&text).map(|_| ()), parse_xyz(&text).map(|_| ())] {
                for error in result.err().unwrap_or_default() {
                    prop_assert!(text.get(error.span.clone()).is_some());
                    let _ = error.help();
                }
            }
        }
    }
}
