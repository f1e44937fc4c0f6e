//! The table `[molecule]`: geometry in one of three forms, charge, multiplicity, masses.

use super::electrons;
use super::{atom, whole};
use crate::elements::Element;
use crate::molecule::cartesian::{
    Entry, atoms_of, check_distances, parse_cartesian, parse_xyz, positions_of, row_spans,
};
use crate::molecule::geometry_error::{GeometryError, GeometryProblem};
use crate::molecule::{Atom, Molecule, zmatrix};
use crate::spec::diagnostic::{Diagnostic, Problems, counted, nearest, number};
use crate::spec::load::{MAX_SPEC_BYTES, read_text};
use crate::spec::raw::{RawMolecule, RawSpec};
use crate::spec::read::Given;
use crate::spec::{MAX_ATOMS, resolved};
use crate::units::LengthUnit;
use nalgebra::Vector3;
use std::ops::Range;
use std::path::Path;

/// The molecule as far as it is known.
pub(super) struct Input {
    /// Atoms and positions, if the geometry is good; the electrons may still be wrong.
    pub(super) molecule: Option<Molecule>,
    /// Masses in u, one per atom.
    pub(super) masses_u: Vec<f64>,
    /// Charge in units of e.
    pub(super) charge: i32,
    /// The multiplicity, if the spec names one.
    pub(super) multiplicity: Option<u32>,
}

/// Largest position, ångström or bohr: beyond it the file holds no molecule.
const MAX_COORDINATE: f64 = 1e4;
/// Largest mass of an isotope, u.
const MAX_MASS_U: f64 = 1e3;
/// Largest charge.
const MAX_CHARGE: i64 = 1000;

/// The unit of lengths; ångström while it is wrong.
pub(super) fn unit(raw: &RawSpec) -> LengthUnit {
    raw.molecule
        .get()
        .and_then(|m| m.value.unit.get())
        .map_or(LengthUnit::default(), |word| word.value.0)
}

/// A charge, if it is given and sensible.
pub(super) fn charge(given: Option<&Given<i64>>, problems: &mut Problems<'_>) -> Option<i32> {
    whole(given, (-MAX_CHARGE, MAX_CHARGE), "a charge", problems)
}

/// A multiplicity, if it is given and sensible by itself.
pub(super) fn multiplicity(given: Option<&Given<i64>>, problems: &mut Problems<'_>) -> Option<u32> {
    whole(given, (1, MAX_CHARGE), "a multiplicity 2S+1", problems)
}

/// Checks the whole table.
pub(super) fn molecule(
    given: &Given<RawMolecule>,
    unit: LengthUnit,
    problems: &mut Problems<'_>,
) -> Input {
    let raw = &given.value;
    let charge = charge(raw.charge.get(), problems).unwrap_or(0);
    let multiplicity = multiplicity(raw.multiplicity.get(), problems);
    let Some((atoms, positions)) = geometry(given, unit, problems) else {
        return Input {
            molecule: None,
            masses_u: Vec::new(),
            charge,
            multiplicity,
        };
    };
    let mut molecule = Molecule {
        atoms,
        positions: positions
            .iter()
            .map(|p| p.map(|x| resolved::writable(x, unit)))
            .collect(),
        charge,
        multiplicity: 1,
    };
    let masses_u = masses_u(raw, &molecule, problems);
    match electrons::electrons(molecule.nuclear_charge(), charge) {
        Err(problem) => {
            if let Some(given) = raw.charge.get() {
                problems.at(&given.span, problem);
            }
        }
        Ok(count) => {
            molecule.multiplicity = multiplicity.unwrap_or_else(|| electrons::lowest(count));
            if let Some(given) = raw.multiplicity.get()
                && !electrons::is_possible(count, molecule.multiplicity)
            {
                problems
                    .at(
                        &given.span,
                        format!(
                            "{} cannot have multiplicity {}",
                            counted(count, "electron"),
                            given.value
                        ),
                    )
                    .expected(format!("possible: {}", electrons::possible(count)));
            }
        }
    }
    Input {
        molecule: Some(molecule),
        masses_u,
        charge,
        multiplicity,
    }
}

fn masses_u(raw: &RawMolecule, molecule: &Molecule, problems: &mut Problems<'_>) -> Vec<f64> {
    let mut masses: Vec<f64> = molecule.atoms.iter().map(|a| a.element.mass_u()).collect();
    if let Some(given) = raw.isotopes.get()
        && given.value.0.len() > MAX_ATOMS
    {
        problems.at(&given.span, format!("{} masses", given.value.0.len()));
        return masses;
    }
    // A symbol that is no label stands for all atoms of its element; labels go before it.
    let symbol = |name: &str| {
        let is_label = molecule.atoms.iter().any(|a| a.label == name);
        let element = Element::from_symbol(name).filter(|_| !is_label)?;
        molecule
            .atoms
            .iter()
            .any(|a| a.element == element)
            .then_some(element)
    };
    let given = raw.isotopes.get().map_or(&[][..], |e| &e.value.0);
    for (name, mass) in given {
        if let Some(element) = symbol(&name.value) {
            for (own, atom) in masses.iter_mut().zip(&molecule.atoms) {
                if atom.element == element && mass.value > 0.0 && mass.value <= MAX_MASS_U {
                    *own = mass.value;
                }
            }
        }
    }
    for (label, mass) in given {
        let index = match symbol(&label.value) {
            Some(_) => None,
            None => atom(label, molecule, problems),
        };
        if !(mass.value > 0.0 && mass.value <= MAX_MASS_U) {
            problems
                .at(
                    &mass.span,
                    format!("{} u is no mass of an atom", number(mass.value)),
                )
                .expected(format!("expected a number above 0 and up to {MAX_MASS_U}"));
        } else if let Some(index) = index {
            masses[index] = mass.value;
        }
    }
    masses
}

/// Atoms and positions (bohr) from whichever form is given.
fn geometry(
    table: &Given<RawMolecule>,
    unit: LengthUnit,
    problems: &mut Problems<'_>,
) -> Option<(Vec<Atom>, Vec<Vector3<f64>>)> {
    let raw = &table.value;
    let forms = [
        ("zmatrix", &raw.zmatrix),
        ("cartesian", &raw.cartesian),
        ("file", &raw.file),
    ];
    let mut present = forms.iter().filter(|(_, field)| !field.is_absent());
    let Some((form, field)) = present.next() else {
        problems
            .at(&table.span, "[molecule] has no geometry")
            .expected("expected one of zmatrix, cartesian and file");
        return None;
    };
    for (other, field) in present {
        if let Some(given) = field.get() {
            problems
                .at(
                    &key_before(problems.text, other, &given.span),
                    format!("[molecule] has {form} and {other}"),
                )
                .expected("expected one of zmatrix, cartesian and file")
                .hint("take one of the two out");
        }
    }
    let given = field.get()?;
    match *form {
        "zmatrix" => from_zmatrix(given, unit, problems),
        "cartesian" => from_cartesian(given, unit, problems),
        _ => from_file(given, problems),
    }
}

/// The place of a key on the line where its value begins, else the value's.
fn key_before(text: &str, key: &str, value: &Range<usize>) -> Range<usize> {
    let line = text[..value.start].rfind('\n').map_or(0, |i| i + 1);
    text[line..value.start]
        .find(key)
        .map_or(value.clone(), |i| line + i..line + i + key.len())
}

fn from_zmatrix(
    given: &Given<String>,
    unit: LengthUnit,
    problems: &mut Problems<'_>,
) -> Option<(Vec<Atom>, Vec<Vector3<f64>>)> {
    let block = Block::new(given, problems.text);
    too_many(row_spans(&given.value).len(), &given.span, problems)?;
    let matrix = match zmatrix::parse(&given.value) {
        Ok(matrix) => matrix,
        Err(errors) => {
            block.report(&errors, problems);
            return None;
        }
    };
    let positions = match matrix.positions(unit) {
        Ok(positions) => positions,
        Err(error) => {
            block.report(&[error], problems);
            return None;
        }
    };
    let atoms = matrix.atoms();
    let rows: Vec<_> = matrix.rows().iter().map(|r| block.place(&r.span)).collect();
    sound(&atoms, &positions, &rows, problems)?;
    Some((atoms, positions))
}

fn from_cartesian(
    given: &Given<String>,
    unit: LengthUnit,
    problems: &mut Problems<'_>,
) -> Option<(Vec<Atom>, Vec<Vector3<f64>>)> {
    let block = Block::new(given, problems.text);
    let rows = row_spans(&given.value);
    too_many(rows.len(), &given.span, problems)?;
    let entries = match parse_cartesian(&given.value) {
        Ok(entries) => entries,
        Err(errors) => {
            block.report(&errors, problems);
            return None;
        }
    };
    let (atoms, positions) = (atoms_of(&entries), positions_of(&entries, unit));
    let rows: Vec<_> = rows.iter().map(|r| block.place(r)).collect();
    sound(&atoms, &positions, &rows, problems)?;
    Some((atoms, positions))
}

fn from_file(
    given: &Given<String>,
    problems: &mut Problems<'_>,
) -> Option<(Vec<Atom>, Vec<Vector3<f64>>)> {
    let folder = problems.file.parent().unwrap_or(Path::new(""));
    let path = folder.join(&given.value);
    let text = match read_text(&path, MAX_SPEC_BYTES) {
        Ok(text) => text,
        Err(error) => {
            problems
                .at(
                    &given.span,
                    format!("{}: {}", path.display(), error.message),
                )
                .hint("a relative path starts at the folder of the spec");
            return None;
        }
    };
    let announced = text.trim_start_matches('\u{feff}').lines().next();
    if let Some(Ok(count)) = announced.map(|line| line.trim().parse::<usize>()) {
        too_many(count, &given.span, problems)?;
    }
    let mut entries: Vec<Entry> = match parse_xyz(&text) {
        Ok((entries, _)) => entries,
        Err(errors) => {
            for error in &errors {
                problems.push(in_other_file(&path, &text, error));
            }
            return None;
        }
    };
    // A bare symbol in capitals (CL) reads as an element only in an XYZ file; its usual spelling reads so anywhere.
    for (label, element, _) in &mut entries {
        if label.eq_ignore_ascii_case(element.symbol()) {
            *label = element.symbol().to_owned();
        }
    }
    let (atoms, positions) = (
        atoms_of(&entries),
        positions_of(&entries, LengthUnit::Angstrom),
    );
    let rows = vec![given.span.clone(); atoms.len()];
    sound(&atoms, &positions, &rows, problems)?;
    Some((atoms, positions))
}

fn too_many(count: usize, span: &Range<usize>, problems: &mut Problems<'_>) -> Option<()> {
    if count <= MAX_ATOMS {
        return Some(());
    }
    problems.at(
        span,
        format!("{count} atoms are more than the {MAX_ATOMS} that a molecule may have"),
    );
    None
}

/// Whether the positions are those of a molecule; `rows` says where each atom stands.
fn sound(
    atoms: &[Atom],
    positions: &[Vector3<f64>],
    rows: &[Range<usize>],
    problems: &mut Problems<'_>,
) -> Option<()> {
    if let Some(far) = positions
        .iter()
        .position(|p| p.iter().any(|x| !x.is_finite() || x.abs() > MAX_COORDINATE))
    {
        problems.at(
            &rows[far],
            format!(
                "{} is more than {MAX_COORDINATE} bohr from the origin",
                atoms[far].label
            ),
        );
        return None;
    }
    if let Err(error) = check_distances(atoms, positions) {
        problems.at(&rows[error.atoms[1]], error.to_string());
        return None;
    }
    Some(())
}

fn hint_of(error: &GeometryError) -> Option<String> {
    if let GeometryProblem::UnknownReference { label, known } = &error.problem
        && let Some(near) = nearest(label, known.iter().map(String::as_str))
    {
        return Some(format!("did you mean {near}?"));
    }
    error.help()
}

fn in_other_file(path: &Path, text: &str, error: &GeometryError) -> Diagnostic {
    let mut diagnostic = Diagnostic::at(path, text, &error.span, error.to_string());
    diagnostic.hint = hint_of(error);
    diagnostic
}

/// A text block of the spec, whose errors are placed inside it.
struct Block {
    /// Where the block's value stands.
    whole: Range<usize>,
    /// For each byte of the value, and its end, the offset in the file; none if the block holds escapes.
    offsets: Option<Vec<usize>>,
}

impl Block {
    fn new(given: &Given<String>, text: &str) -> Self {
        let source = text.get(given.span.clone()).unwrap_or("");
        let quotes = ["\"\"\"", "'''", "\"", "'"]
            .into_iter()
            .find(|q| source.starts_with(q))
            .map_or(0, str::len);
        let mut place = quotes;
        // A line break right after three quotes is not part of the value.
        if quotes == 3 {
            let rest = &source[place..];
            place += if rest.starts_with("\r\n") {
                2
            } else {
                usize::from(rest.starts_with('\n'))
            };
        }
        let bytes = source.as_bytes();
        let mut offsets = Vec::with_capacity(given.value.len() + 1);
        for byte in given.value.bytes() {
            // The value may have its line breaks written as \n alone.
            if byte == b'\n' && bytes.get(place) == Some(&b'\r') {
                place += 1;
            }
            if bytes.get(place) != Some(&byte) {
                return Self {
                    whole: given.span.clone(),
                    offsets: None,
                };
            }
            offsets.push(given.span.start + place);
            place += 1;
        }
        offsets.push(given.span.start + place);
        Self {
            whole: given.span.clone(),
            offsets: Some(offsets),
        }
    }

    /// The place in the file of a place in the block.
    fn place(&self, span: &Range<usize>) -> Range<usize> {
        let place = |i: usize| self.offsets.as_ref().and_then(|o| o.get(i).copied());
        match (place(span.start), place(span.end)) {
            (Some(start), Some(end)) => start..end,
            _ => self.whole.clone(),
        }
    }

    fn report(&self, errors: &[GeometryError], problems: &mut Problems<'_>) {
        for error in errors {
            problems
                .at(&self.place(&error.span), error.to_string())
                .hint = hint_of(error);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn block(text: &str, value: &str) -> Block {
        let given = Given {
            span: 4..text.len(),
            value: value.to_owned(),
        };
        Block::new(&given, text)
    }

    #[test]
    fn places_in_blocks_are_places_in_the_file() {
        let text = "k = \"\"\"\nO\nH1\"\"\"";
        let place = block(text, "O\nH1").place(&(2..4));
        assert_eq!(&text[place], "H1");
        let text = "k = '''\r\nO\r\nH1'''";
        let place = block(text, "O\nH1").place(&(2..4));
        assert_eq!(&text[place], "H1");
        let place = block(text, "O\r\nH1").place(&(3..5));
        assert_eq!(&text[place], "H1");
        let text = "k = 'O'";
        assert_eq!(&text[block(text, "O").place(&(0..1))], "O");
    }

    #[test]
    fn escapes_give_the_place_of_the_block() {
        let text = "k = \"O\\nH\"";
        assert_eq!(block(text, "O\nH").place(&(2..3)), 4..text.len());
    }
}
