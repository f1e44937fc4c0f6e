//! The tables `[[level]]`: method, basis, charge, multiplicity and a name of its own for each.

use super::electrons::{self, spin_word};
use super::molecule::{Input, charge, multiplicity};
use super::{short_text, span_or};
use crate::basis::{BasisError, BasisSet, FunctionKind, Shell, library};
use crate::molecule::Molecule;
use crate::scf::Method;
use crate::spec::Level;
use crate::spec::diagnostic::{Problems, all_of, counted, nearest, quoted};
use crate::spec::load::{MAX_BASIS_BYTES, read_text};
use crate::spec::raw::{RawBasis, RawLevel};
use crate::spec::read::{Field, Given};
use std::ops::Range;
use std::path::{Path, PathBuf};

/// Checks all levels; those that are wrong are left out.
pub(super) fn levels(
    raw: &Field<Vec<Given<RawLevel>>>,
    input: Option<&Input>,
    problems: &mut Problems<'_>,
) -> Vec<Level> {
    let Some(list) = raw.get() else {
        return Vec::new();
    };
    if list.value.is_empty() {
        problems
            .at(&list.span, "there is no level")
            .expected("expected one [[level]] or more");
    }
    let drafts: Vec<(&Given<RawLevel>, Draft)> = list
        .value
        .iter()
        .filter_map(|given| draft(given, input, problems).map(|d| (given, d)))
        .collect();
    named(drafts, input, problems)
}

/// A level without its final name.
struct Draft {
    level: Level,
    /// Whether the spec names it.
    own_name: bool,
}

fn draft(
    given: &Given<RawLevel>,
    input: Option<&Input>,
    problems: &mut Problems<'_>,
) -> Option<Draft> {
    let raw = &given.value;
    let own_charge = charge(raw.charge.get(), problems);
    let own_multiplicity = multiplicity(raw.multiplicity.get(), problems);
    let name = raw
        .name
        .get()
        .and_then(|n| short_text(n, "the name", problems));
    let functions = raw.functions.get().map(|word| word.value.0);
    let basis = raw
        .basis
        .get()
        .and_then(|basis| find_basis(basis, problems));
    let method = raw.method.get().map(|word| word.value.0);
    let input = input?;
    let molecule = input.molecule.as_ref()?;
    // A wrong charge of its own, or of the molecule, is reported where it stands.
    let charge = match own_charge {
        None if raw.charge.is_absent() => Some(input.charge),
        own => own,
    };
    let count = charge.and_then(|charge| {
        let count = electrons::electrons(molecule.nuclear_charge(), charge);
        if let (Err(problem), Some(own)) = (&count, raw.charge.get()) {
            problems.at(&own.span, problem);
        }
        count.ok()
    });
    let shells = raw
        .basis
        .get()
        .zip(basis.as_ref())
        .and_then(|(place, found)| shells(found, molecule, functions, &place.span, problems));
    let multiplicity = charge.zip(count).and_then(|(charge, count)| {
        spin_state(given, count, charge, own_multiplicity, input, problems)
    });
    let (method, charge, count, multiplicity) = (method?, charge?, count?, multiplicity?);
    if method == Method::Rhf && multiplicity != 1 {
        let mut reason = String::new();
        if count % 2 == 1 {
            reason = format!(" of {}", counted(count, "electron"));
        }
        problems
            .at(
                span_or(&raw.method, &given.span),
                format!(
                    "an rhf level needs multiplicity 1, but this one is a {}{reason}",
                    spin_word(multiplicity)
                ),
            )
            .expected("restricted orbitals hold pairs of electrons only")
            .hint("use method = \"uhf\"");
        return None;
    }
    let (found, shells_of_atom) = (basis?, shells?);
    let most = (count + multiplicity as usize - 1) / 2;
    let room: usize = shells_of_atom.iter().flatten().map(Shell::functions).sum();
    if most > room {
        problems.at(
            span_or(&raw.basis, &given.span),
            format!(
                "{} cannot hold {} of one spin",
                counted(room, "basis function"),
                counted(most, "electron")
            ),
        );
        return None;
    }
    let basis_name = found.set().name.clone();
    let own_name = name.is_some();
    let name = name.unwrap_or_else(|| {
        let mut name = format!("{}/{basis_name}", method.name());
        match functions {
            Some(FunctionKind::Cartesian) => name += " (Cartesian)",
            Some(FunctionKind::Spherical) => name += " (spherical)",
            None => {}
        }
        name
    });
    let level = Level {
        name,
        method,
        basis_name,
        basis_file: found.file(),
        functions,
        charge,
        multiplicity,
        shells_of_atom,
    };
    Some(Draft { level, own_name })
}

/// The multiplicity of a level: its own, else the molecule's, else the lowest.
fn spin_state(
    given: &Given<RawLevel>,
    count: usize,
    charge: i32,
    own: Option<u32>,
    input: &Input,
    problems: &mut Problems<'_>,
) -> Option<u32> {
    let raw = &given.value;
    let asked = own.or(input.multiplicity);
    let Some(asked) = asked else {
        return Some(electrons::lowest(count));
    };
    if electrons::is_possible(count, asked) {
        return Some(asked);
    }
    // What is wrong with the molecule itself is reported there.
    if own.is_some() || charge != input.charge {
        let whose = if own.is_some() {
            ""
        } else {
            ", the molecule's"
        };
        let span = if own.is_some() {
            span_or(&raw.multiplicity, &given.span)
        } else {
            span_or(&raw.charge, &given.span)
        };
        problems
            .at(
                span,
                format!(
                    "{} cannot have multiplicity {asked}{whose}",
                    counted(count, "electron")
                ),
            )
            .expected(format!("possible: {}", electrons::possible(count)));
    }
    None
}

/// Names the levels that have none of their own, and checks that no name stands twice.
fn named(
    drafts: Vec<(&Given<RawLevel>, Draft)>,
    input: Option<&Input>,
    problems: &mut Problems<'_>,
) -> Vec<Level> {
    let molecule = input.and_then(|i| i.molecule.as_ref());
    let mut levels: Vec<Level> = Vec::with_capacity(drafts.len());
    for (given, draft) in drafts {
        let mut level = draft.level;
        if let (false, Some(molecule)) = (draft.own_name, molecule) {
            if level.charge != molecule.charge {
                level.name += &format!(", charge {:+}", level.charge);
            }
            if level.multiplicity != molecule.multiplicity {
                level.name += &format!(", {}", spin_word(level.multiplicity));
            }
        }
        if levels.iter().any(|other| other.name == level.name) {
            let place = span_or(&given.value.name, &given.span);
            problems
                .at(
                    place,
                    format!("the level {} stands twice", quoted(&level.name)),
                )
                .hint("give one of them another name, or take it out");
        }
        levels.push(level);
    }
    levels
}

/// A set from the library or from a file.
enum Found {
    BuiltIn(&'static BasisSet),
    Own(Box<BasisSet>, PathBuf),
}

impl Found {
    fn set(&self) -> &BasisSet {
        match self {
            Self::BuiltIn(set) => set,
            Self::Own(set, _) => set,
        }
    }

    fn file(&self) -> Option<PathBuf> {
        match self {
            Self::BuiltIn(_) => None,
            Self::Own(_, path) => Some(path.clone()),
        }
    }
}

fn find_basis(given: &Given<RawBasis>, problems: &mut Problems<'_>) -> Option<Found> {
    match &given.value {
        RawBasis::Name(name) => match library::find(name) {
            Ok(set) => Some(Found::BuiltIn(set)),
            Err(BasisError::UnknownSet { .. }) => {
                unknown_set(name, &given.span, problems);
                None
            }
            Err(other) => {
                problems.at(&given.span, other.to_string());
                None
            }
        },
        RawBasis::File(file) => {
            let folder = problems.file.parent().unwrap_or(Path::new(""));
            let path = folder.join(&file.value);
            let found = read_text(&path, MAX_BASIS_BYTES)
                .map_err(|e| format!("{}: {}", path.display(), e.message))
                .and_then(|text| {
                    BasisSet::from_json(&text, &path.display().to_string())
                        .map_err(|e| e.to_string())
                })
                .and_then(|set| {
                    let path = std::path::absolute(&path).map_err(|e| e.to_string())?;
                    // The resolved spec names the file, and is UTF-8.
                    if path.to_str().is_none() {
                        return Err(format!("the path {} is not UTF-8", path.display()));
                    }
                    Ok(Found::Own(Box::new(set), path))
                });
            match found {
                Ok(found) => Some(found),
                Err(problem) => {
                    let missing = !path.exists();
                    let diagnostic = problems.at(&file.span, problem);
                    if missing {
                        diagnostic.hint("a relative path starts at the folder of the spec");
                    }
                    None
                }
            }
        }
    }
}

fn unknown_set(name: &str, span: &Range<usize>, problems: &mut Problems<'_>) {
    let known = library::names();
    let diagnostic = problems.at(span, format!("no basis set is called {}", quoted(name)));
    diagnostic.expected("expected a name that `thalweg basis` lists, or { file = \"…\" }");
    diagnostic.hint(match nearest(name, known.iter().copied()) {
        Some(near) => format!("did you mean \"{near}\"?"),
        None => format!("the sets are {}", known.join(", ")),
    });
}

fn shells(
    found: &Found,
    molecule: &Molecule,
    functions: Option<FunctionKind>,
    span: &Range<usize>,
    problems: &mut Problems<'_>,
) -> Option<Vec<Vec<Shell>>> {
    match found.set().shells_of(molecule, functions) {
        Ok(shells) => Some(shells),
        Err(BasisError::MissingElements { set, missing }) => {
            for lacking in missing {
                let diagnostic = problems.at(
                    span,
                    format!("{set} has no functions for {}", lacking.element.symbol()),
                );
                diagnostic.hint(if lacking.covered_by.is_empty() {
                    format!("no built-in set has {}", lacking.element.symbol())
                } else {
                    format!(
                        "{} is covered by {}",
                        lacking.element.symbol(),
                        all_of(&lacking.covered_by)
                    )
                });
            }
            None
        }
        Err(other) => {
            problems.at(span, other.to_string());
            None
        }
    }
}
