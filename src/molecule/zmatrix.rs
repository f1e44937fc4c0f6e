//! Z-matrices: rows of distances, angles and dihedrals → positions, and back.
//!
//! A row reads `LABEL [REF distance [REF angle [REF dihedral]]]`: the distance to the first reference, the angle at that
//! reference with the second, the dihedral about the axis of the first two with the third (sign as in
//! [`Coordinate::Dihedral`]). The first row has no reference, the second one, the third two, all others three.
//! References are labels of rows above; angles are in degree. `#` begins a comment.

use super::Atom;
use super::frame::{COLLINEAR_SINE, fixed_perpendicular, sine_between, sine_cosine_of_degrees};
use super::geometry_error::{GeometryError, GeometryProblem};
use super::internal::Coordinate;
use super::label::{Writing, element_of};
use super::rows::{Word, rows, span_of};
use crate::elements::Element;
use crate::units::LengthUnit;
use nalgebra::Vector3;
use std::fmt;
use std::ops::Range;

/// A distance, angle or dihedral of a row, and the atom it is measured to.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Reference {
    /// Index of an earlier row.
    pub row: usize,
    /// Length in the unit of the text, or degree.
    pub value: f64,
}

/// One atom of a z-matrix.
#[derive(Debug, Clone, PartialEq)]
pub struct Row {
    /// Label, unique in the z-matrix.
    pub label: String,
    /// Element that the label begins with.
    pub element: Element,
    /// Distance, angle and dihedral: as many as there are earlier rows, at most three.
    pub references: Vec<Reference>,
    /// Bytes of the row inside the text.
    pub span: Range<usize>,
}

/// A checked z-matrix: labels are unique, every reference is an earlier row, distances are positive and angles
/// between 0° and 180°.
#[derive(Debug, Clone, PartialEq)]
pub struct ZMatrix {
    rows: Vec<Row>,
}

const FORMS: [&str; 4] = [
    "LABEL",
    "LABEL REF distance",
    "LABEL REF distance REF angle",
    "LABEL REF distance REF angle REF dihedral",
];

/// Reads a z-matrix.
///
/// # Errors
/// Every mistake in the text, in order.
pub fn parse(text: &str) -> Result<ZMatrix, Vec<GeometryError>> {
    let words = rows(text);
    let labels: Vec<&str> = words.iter().map(|row| row[0].text).collect();
    let mut errors = Vec::new();
    let mut parsed = Vec::with_capacity(words.len());
    for (index, row) in words.iter().enumerate() {
        match parse_row(index, row, &labels) {
            Ok(row) => parsed.push(row),
            Err(mut found) => errors.append(&mut found),
        }
    }
    if words.is_empty() {
        errors.push(GeometryError {
            span: 0..text.len(),
            problem: GeometryProblem::NoAtoms,
        });
    }
    if errors.is_empty() {
        Ok(ZMatrix { rows: parsed })
    } else {
        Err(errors)
    }
}

fn parse_row(index: usize, words: &[Word<'_>], labels: &[&str]) -> Result<Row, Vec<GeometryError>> {
    let mut errors = Vec::new();
    let label = &words[0];
    let element = match element_of(label.text, Writing::Labelled) {
        Ok(element) => Some(element),
        Err(problem) => {
            errors.push(label.error(problem));
            None
        }
    };
    if let Some(first) = labels[..index].iter().position(|l| *l == label.text) {
        errors.push(label.error(GeometryProblem::DuplicateLabel {
            label: label.text.to_owned(),
            first: first + 1,
        }));
    }
    let needed = index.min(3);
    let expected = 1 + 2 * needed;
    if words.len() != expected {
        let span = if words.len() > expected {
            span_of(&words[expected..])
        } else {
            span_of(words)
        };
        errors.push(GeometryError {
            span,
            problem: GeometryProblem::WordCount {
                row: index + 1,
                found: words.len(),
                expected,
                form: FORMS[needed],
            },
        });
    }
    let mut references: Vec<Reference> = Vec::with_capacity(needed);
    for (place, pair) in words[1..].chunks(2).take(needed).enumerate() {
        let row = parse_reference(index, &pair[0], labels, &references)
            .map_err(|error| errors.push(error))
            .ok();
        let value = pair.get(1).and_then(|word| {
            parse_value(place, word)
                .map_err(|error| errors.push(error))
                .ok()
        });
        if let (Some(row), Some(value)) = (row, value) {
            references.push(Reference { row, value });
        }
    }
    match element {
        Some(element) if errors.is_empty() => Ok(Row {
            label: label.text.to_owned(),
            element,
            references,
            span: span_of(words),
        }),
        _ => Err(errors),
    }
}

fn parse_reference(
    index: usize,
    word: &Word<'_>,
    labels: &[&str],
    before: &[Reference],
) -> Result<usize, GeometryError> {
    let label = word.text.to_owned();
    match labels.iter().position(|l| *l == word.text) {
        Some(row) if row < index && before.iter().any(|r| r.row == row) => {
            Err(word.error(GeometryProblem::RepeatedReference { label }))
        }
        Some(row) if row < index => Ok(row),
        Some(row) => Err(word.error(GeometryProblem::LaterReference {
            label,
            own: row == index,
        })),
        None => Err(word.error(GeometryProblem::UnknownReference {
            label,
            known: labels[..index].iter().map(|l| (*l).to_owned()).collect(),
        })),
    }
}

fn parse_value(place: usize, word: &Word<'_>) -> Result<f64, GeometryError> {
    let value = word.number(["a distance", "an angle", "a dihedral"][place.min(2)])?;
    match place {
        0 if value <= 0.0 => Err(word.error(GeometryProblem::DistanceRange { value })),
        1 if !(0.0..=180.0).contains(&value) => {
            Err(word.error(GeometryProblem::AngleRange { value }))
        }
        _ => Ok(value),
    }
}

impl ZMatrix {
    /// The rows in order.
    #[must_use]
    pub fn rows(&self) -> &[Row] {
        &self.rows
    }

    /// Labels in order.
    #[must_use]
    pub fn labels(&self) -> Vec<&str> {
        self.rows.iter().map(|row| row.label.as_str()).collect()
    }

    /// Elements in order.
    #[must_use]
    pub fn elements(&self) -> Vec<Element> {
        self.rows.iter().map(|row| row.element).collect()
    }

    /// The atoms in order, none of them a ghost.
    #[must_use]
    pub fn atoms(&self) -> Vec<Atom> {
        self.rows
            .iter()
            .map(|row| Atom {
                label: row.label.clone(),
                element: row.element,
                ghost: false,
            })
            .collect()
    }

    /// Positions in bohr, one per row: the first atom at the origin, the second on the z axis, the third in the xz plane
    /// with x ≥ 0.
    ///
    /// Angles of exactly 180° need no dihedral: an atom that continues a straight line can be placed from three
    /// references on that line. As long as all atoms so far are on one line, a dihedral only chooses how the molecule
    /// lies in space, so the first atom off the line is placed like a third row.
    ///
    /// # Errors
    /// A dihedral about three references on one line (sine below [`COLLINEAR_SINE`]) when that leaves the geometry open;
    /// references on one spot.
    pub fn positions(&self, length_unit: LengthUnit) -> Result<Vec<Vector3<f64>>, GeometryError> {
        let mut positions: Vec<Vector3<f64>> = Vec::with_capacity(self.rows.len());
        for row in &self.rows {
            let position = self.place(row, &positions, length_unit)?;
            positions.push(position);
        }
        Ok(positions)
    }

    fn place(
        &self,
        row: &Row,
        positions: &[Vector3<f64>],
        length_unit: LengthUnit,
    ) -> Result<Vector3<f64>, GeometryError> {
        let error = |problem| GeometryError {
            span: row.span.clone(),
            problem,
        };
        let label = |reference: &Reference| self.rows[reference.row].label.clone();
        let Some(distance) = row.references.first() else {
            return Ok(Vector3::zeros());
        };
        let near = positions[distance.row];
        let length = length_unit.to_bohr(distance.value);
        let Some(angle) = row.references.get(1) else {
            return Ok(near + Vector3::z() * length);
        };
        let axis = positions[angle.row] - near;
        if axis.norm() < 1e-8 {
            return Err(error(GeometryProblem::CoincidentReferences {
                label: row.label.clone(),
                references: [label(distance), label(angle)],
            }));
        }
        let axis = axis.normalize();
        let (sine, cosine) = sine_cosine_of_degrees(angle.value);
        let sideways = match row.references.get(2) {
            None => fixed_perpendicular(&axis),
            Some(dihedral) => {
                let arm = positions[dihedral.row] - positions[angle.row];
                let arm_sine = sine_between(&arm, &axis);
                if arm_sine >= COLLINEAR_SINE {
                    let towards = (arm - axis * axis.dot(&arm)).normalize();
                    let (turn_sine, turn_cosine) = sine_cosine_of_degrees(dihedral.value);
                    towards * turn_cosine - axis.cross(&towards) * turn_sine
                } else if sine.abs() < 1e-12 || all_on_line(&near, &axis, positions) {
                    fixed_perpendicular(&axis)
                } else {
                    return Err(error(GeometryProblem::CollinearReferences {
                        label: row.label.clone(),
                        references: [label(distance), label(angle), label(dihedral)],
                    }));
                }
            }
        };
        Ok(near + (axis * cosine + sideways * sine) * length)
    }

    /// The same rows with the values that `positions` (bohr, one per row) have: lengths in `length_unit`, angles in
    /// degree. A dihedral that is undefined there (three atoms on one line) keeps its value.
    #[must_use]
    pub fn with_values_of(&self, positions: &[Vector3<f64>], length_unit: LengthUnit) -> Self {
        let mut rows = self.rows.clone();
        for (atom, row) in rows.iter_mut().enumerate() {
            let indices: Vec<usize> = [atom]
                .into_iter()
                .chain(row.references.iter().map(|r| r.row))
                .collect();
            for (place, reference) in row.references.iter_mut().enumerate() {
                match (place, indices.as_slice()) {
                    (0, &[a, b, ..]) => {
                        let length = Coordinate::Bond([a, b]).value(positions);
                        reference.value = length_unit.from_bohr(length);
                    }
                    (1, &[a, b, c, ..]) => {
                        reference.value =
                            Coordinate::Angle([a, b, c]).value(positions).to_degrees();
                    }
                    (2, &[a, b, c, d]) => {
                        let dihedral = Coordinate::Dihedral([a, b, c, d]);
                        if dihedral.check(positions).is_ok() {
                            reference.value = dihedral.value(positions).to_degrees();
                        }
                    }
                    _ => {}
                }
            }
        }
        Self { rows }
    }
}

fn all_on_line(centre: &Vector3<f64>, axis: &Vector3<f64>, positions: &[Vector3<f64>]) -> bool {
    positions
        .iter()
        .all(|p| sine_between(&(p - centre), axis) < COLLINEAR_SINE)
}

/// Text that [`parse`] reads back to the same values, bit for bit.
impl fmt::Display for ZMatrix {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for row in &self.rows {
            write!(f, "{}", row.label)?;
            for reference in &row.references {
                write!(f, " {} {}", self.rows[reference.row].label, reference.value)?;
            }
            writeln!(f)?;
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::molecule::test_molecules::{from_zmatrix, trees};
    use proptest::prelude::*;

    fn problems(text: &str) -> Vec<(&str, GeometryProblem)> {
        parse(text)
            .expect_err("a wrong z-matrix")
            .into_iter()
            .map(|error| (&text[error.span], error.problem))
            .collect()
    }

    fn distances(positions: &[Vector3<f64>]) -> Vec<f64> {
        (0..positions.len())
            .flat_map(|j| (0..j).map(move |i| (i, j)))
            .map(|(i, j)| (positions[i] - positions[j]).norm())
            .collect()
    }

    proptest! {
        #[test]
        fn values_come_back_from_positions(tree in trees(1..9, 10.0..170.0)) {
            let rows = parse(&tree.text).unwrap();
            let positions = &tree.molecule.positions;
            let back = rows.with_values_of(positions, LengthUnit::Angstrom);
            for (atom, (row, again)) in rows.rows.iter().zip(&back.rows).enumerate() {
                for (place, (one, two)) in row.references.iter().zip(&again.references).enumerate() {
                    prop_assert_eq!(one.row, two.row);
                    // A dihedral is as sharp as the angle of its references is far from straight.
                    let sharpness = match (place, &row.references[..]) {
                        (2, [b, c, d]) => sine_between(
                            &(positions[b.row] - positions[c.row]),
                            &(positions[d.row] - positions[c.row]),
                        ),
                        _ => 1.0,
                    };
                    let off = (two.value - one.value).abs();
                    let off = if place == 2 { off.min((off - 360.0).abs()) } else { off };
                    prop_assert!(off * sharpness < 1e-10, "atom {atom} place {place}: {off:e}");
                }
            }
            let again = back.positions(LengthUnit::Angstrom).unwrap();
            for (one, two) in distances(positions).iter().zip(distances(&again)) {
                prop_assert!((one - two).abs() < 1e-8);
            }
        }

        #[test]
        fn text_comes_back_bit_for_bit(tree in trees(1..9, 10.0..170.0)) {
            let rows = parse(&tree.text).unwrap();
            let again = parse(&rows.to_string()).unwrap();
            for (one, two) in rows.rows.iter().zip(&again.rows) {
                prop_assert_eq!(&one.label, &two.label);
                prop_assert_eq!(one.element, two.element);
                prop_assert_eq!(&one.references, &two.references);
            }
        }

        #[test]
        fn any_text_is_read_or_refused_with_spans_inside_it(text in "[HCOlx12 0-9.#\n-]{0,80}") {
            if let Err(errors) = parse(&text) {
                prop_assert!(!errors.is_empty());
                for error in errors {
                    prop_assert!(text.get(error.span.clone()).is_some());
                    prop_assert!(!error.to_string().is_empty());
                    let _ = error.help();
                }
            }
        }
    }

    #[test]
    fn units_scale_lengths_only() {
        let rows = parse("O\nH1 O 0.96\nH2 O 0.96 H1 104.5").unwrap();
        let angstrom = rows.positions(LengthUnit::Angstrom).unwrap();
        let bohr = rows.positions(LengthUnit::Bohr).unwrap();
        for (one, two) in angstrom.iter().zip(&bohr) {
            assert!((one - two / crate::units::ANGSTROM_PER_BOHR).norm() < 1e-14);
        }
        assert!((bohr[2].norm() - 0.96).abs() < 1e-15);
    }

    #[test]
    fn straight_molecules_lie_exactly_on_the_axis() {
        for text in [
            "H\nC H 1.066\nN C 1.153 H 180",
            "C\nO1 C 1.16\nO2 C 1.16 O1 180",
            "C1\nC2 C1 1.2\nH1 C1 1.06 C2 180\nH2 C2 1.06 C1 180 H1 0",
            "C1\nC2 C1 1.2\nC3 C2 1.37 C1 180\nC4 C3 1.2 C2 180 C1 77\nH1 C1 1.06 C2 180 C3 0\nH2 C4 1.06 C3 180 C2 12",
        ] {
            let molecule = from_zmatrix(text);
            for position in &molecule.positions {
                let off = position.x.hypot(position.y);
                assert!(off.abs() < f64::MIN_POSITIVE, "{text}: {off:e}");
            }
        }
    }

    #[test]
    fn the_first_atom_off_a_line_needs_no_dihedral() {
        let text = "C1\nC2 C1 1.2\nH1 C1 1.06 C2 180\nH2 C2 1.06 C1 130 H1 33";
        let molecule = from_zmatrix(text);
        let angle = Coordinate::Angle([3, 1, 0]).value(&molecule.positions);
        assert!((angle.to_degrees() - 130.0).abs() < 1e-12);
        // What could not be measured keeps its value.
        let rows = parse(text).unwrap();
        let back = rows.with_values_of(&molecule.positions, LengthUnit::Angstrom);
        assert!((back.rows[3].references[2].value - 33.0).abs() < f64::EPSILON);
    }

    #[test]
    fn a_chain_may_go_straight_on_from_a_line() {
        // The oxygen is off the line, the last atom on it: its dihedral is undefined and does not matter.
        let molecule = from_zmatrix(
            "C1\nC2 C1 1.2\nC3 C2 1.45 C1 180\nO C3 1.2 C2 120 C1 0\nH C1 1.06 C2 180 C3 50",
        );
        let straight = Coordinate::Angle([4, 0, 1]).value(&molecule.positions);
        assert!((straight.to_degrees() - 180.0).abs() < 1e-12);
    }

    #[test]
    fn a_dihedral_about_a_line_is_refused_where_it_matters() {
        let text =
            "C1\nC2 C1 1.2\nC3 C2 1.45 C1 180\nO C3 1.2 C2 120 C1 0\nH1 C1 1.06 C2 150 C3 50";
        let error = parse(text)
            .unwrap()
            .positions(LengthUnit::Angstrom)
            .unwrap_err();
        assert_eq!(&text[error.span.clone()], "H1 C1 1.06 C2 150 C3 50");
        assert_eq!(
            error.to_string(),
            "`H1` cannot be placed: C1, C2 and C3 are on one line, so the dihedral is undefined"
        );
        assert!(error.help().is_some());
    }

    #[test]
    fn references_on_one_spot_are_refused() {
        let text = "C1\nC2 C1 1.2\nC3 C1 1.2 C2 0\nH C2 1 C3 100 C1 0";
        let error = parse(text)
            .unwrap()
            .positions(LengthUnit::Angstrom)
            .unwrap_err();
        assert!(matches!(
            error.problem,
            GeometryProblem::CoincidentReferences { .. }
        ));
    }

    #[test]
    fn every_mistake_is_found_with_its_place() {
        let text =
            "O\nH O 0.96 # fine\nH O nought Q 190\nXe H -1 O inf Z9 60\nC1 O 1 O 90 C1 5 9 # nine";
        let found = problems(text);
        let places: Vec<&str> = found.iter().map(|(place, _)| *place).collect();
        assert_eq!(
            places,
            [
                "H", "nought", "Q", "190", "Xe", "-1", "inf", "Z9", "9", "O", "C1"
            ]
        );
        assert_eq!(
            found[0].1,
            GeometryProblem::DuplicateLabel {
                label: "H".to_owned(),
                first: 2
            }
        );
        assert_eq!(
            found[2].1,
            GeometryProblem::UnknownReference {
                label: "Q".to_owned(),
                known: vec!["O".to_owned(), "H".to_owned()]
            }
        );
        assert!(matches!(
            found[10].1,
            GeometryProblem::LaterReference { own: true, .. }
        ));
        assert!(matches!(
            found[9].1,
            GeometryProblem::RepeatedReference { .. }
        ));
    }

    #[test]
    fn a_short_row_says_what_it_needs() {
        let found = problems("O\nH1 O 0.96\nH2 O 0.96");
        assert_eq!(found.len(), 1);
        assert_eq!(found[0].0, "H2 O 0.96");
        assert_eq!(
            found[0].1.to_string(),
            "row 3 has 3 words, but needs 5: LABEL REF distance REF angle"
        );
        assert_eq!(problems("O\nH1 H2 1\nH2 O 1 H1 90")[0].0, "H2");
        assert_eq!(problems(" # nothing\n")[0].1, GeometryProblem::NoAtoms);
    }
}
