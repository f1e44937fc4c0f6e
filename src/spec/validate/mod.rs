//! Raw tables → [`Spec`]: units, ranges, atoms that exist, coordinates that make sense together.
//!
//! Each table has its file. A table that is wrong gives none, and what depends on it is checked as far as it can be.

mod dissociation;
mod electrons;
mod level;
mod molecule;
mod settings;
mod sweep;
mod values;

use super::diagnostic::{Problems, nearest, number, quoted};
use super::raw::{RawLabels, RawSpec};
use super::read::{Field, Given};
use super::{MAX_ATOMS, Spec};
use crate::molecule::Molecule;
use std::ops::Range;

/// Checks everything; none if a table that the run needs is wrong. The resolved text is still empty.
pub(super) fn validate(raw: &RawSpec, problems: &mut Problems<'_>) -> Option<Spec> {
    let title = settings::title(&raw.title, problems);
    let unit = molecule::unit(raw);
    let input = raw
        .molecule
        .get()
        .map(|m| molecule::molecule(m, unit, problems));
    let molecule = input.as_ref().and_then(|i| i.molecule.as_ref());
    let levels = level::levels(&raw.level, input.as_ref(), problems);
    // One side moves for all levels, or their curves could not be compared: the first level decides.
    let functions_per_atom: Vec<usize> = levels.first().map_or_else(Vec::new, |level| {
        level
            .shells_of_atom
            .iter()
            .map(|shells| shells.iter().map(crate::basis::Shell::functions).sum())
            .collect()
    });
    let mut notes = Problems::new(problems.file, problems.text);
    let sweeps = sweep::sweeps(
        &raw.sweep,
        &sweep::Context {
            unit,
            molecule,
            functions_per_atom: &functions_per_atom,
        },
        problems,
        &mut notes,
    );
    let dissociation = dissociation::dissociation(&raw.dissociation, molecule, &levels, problems);
    let kinds: Vec<&'static str> = sweeps.iter().map(super::Sweep::kind).collect();
    let all_sweeps_good = raw.sweep.get().map_or(0, |s| s.value.len()) == sweeps.len();
    let fits = settings::fits(&raw.fit, &kinds, all_sweeps_good, problems);
    let walk = settings::walk(&raw.walk, problems);
    let scf = settings::scf(&raw.scf, problems);
    let vibration = settings::vibration(&raw.vibration, problems);
    let output = settings::output(&raw.output, problems);
    let input = input?;
    Some(Spec {
        title,
        molecule: input.molecule?,
        masses_u: input.masses_u,
        levels,
        sweeps,
        walk,
        scf,
        dissociation,
        fits,
        vibration: vibration.unwrap_or_default(),
        output,
        unit,
        text: String::new(),
        notes: notes.into_sorted(),
        fingerprint: String::new(),
    })
}

/// The index of a labelled atom; a label that does not exist is recorded.
fn atom(label: &Given<String>, molecule: &Molecule, problems: &mut Problems<'_>) -> Option<usize> {
    let index = molecule.index_of(&label.value);
    if index.is_none() {
        let known = molecule.atoms.iter().map(|a| a.label.as_str());
        let near = nearest(&label.value, known.clone()).map(str::to_owned);
        let diagnostic = problems.at(
            &label.span,
            format!("there is no atom {}", quoted(&label.value)),
        );
        let listed: Vec<&str> = known.take(12).collect();
        let more = if molecule.atoms.len() > listed.len() {
            ", …"
        } else {
            ""
        };
        diagnostic.expected(format!("the atoms are {}{more}", listed.join(", ")));
        if let Some(near) = near {
            diagnostic.hint(format!("did you mean \"{near}\"?"));
        }
    }
    index
}

/// The indices of labelled atoms, each once; none if a label is wrong.
fn atoms(
    labels: &RawLabels,
    molecule: &Molecule,
    problems: &mut Problems<'_>,
) -> Option<Vec<usize>> {
    if labels.len() > MAX_ATOMS {
        let span = labels[0].span.start..labels[labels.len() - 1].span.end;
        problems.at(&span, format!("{} labels", labels.len()));
        return None;
    }
    let found: Vec<Option<usize>> = labels.iter().map(|l| atom(l, molecule, problems)).collect();
    let mut good = found.iter().all(Option::is_some);
    for (place, label) in labels.iter().enumerate() {
        if labels[..place].iter().any(|l| l.value == label.value) {
            problems.at(
                &label.span,
                format!("the atom {} stands here twice", quoted(&label.value)),
            );
            good = false;
        }
    }
    good.then(|| found.into_iter().flatten().collect())
}

/// A number that must be positive, or its default.
fn positive(field: &Field<f64>, default: f64, what: &str, problems: &mut Problems<'_>) -> f64 {
    let Some(given) = field.get() else {
        return default;
    };
    if given.value > 0.0 {
        return given.value;
    }
    problems
        .at(
            &given.span,
            format!("{} cannot be {what}", number(given.value)),
        )
        .expected("expected a number greater than zero");
    default
}

/// A whole number within a range, or its default.
fn whole<N: TryFrom<i64>>(
    given: Option<&Given<i64>>,
    range: (i64, i64),
    what: &str,
    problems: &mut Problems<'_>,
) -> Option<N> {
    let given = given?;
    let inside = (range.0..=range.1).contains(&given.value);
    let number = N::try_from(given.value).ok().filter(|_| inside);
    if number.is_none() {
        problems
            .at(&given.span, format!("{} cannot be {what}", given.value))
            .expected(format!(
                "expected a whole number from {} to {}",
                range.0, range.1
            ));
    }
    number
}

/// A short text for people: without control characters, not endless.
fn short_text(given: &Given<String>, what: &str, problems: &mut Problems<'_>) -> Option<String> {
    const MOST_CHARACTERS: usize = 200;
    let text = given.value.trim();
    let problem = if text.is_empty() {
        Some(format!("{what} is empty"))
    } else if text.chars().any(char::is_control) {
        Some(format!(
            "{what} holds a line break or another control character"
        ))
    } else if text.chars().count() > MOST_CHARACTERS {
        Some(format!(
            "{what} is longer than {MOST_CHARACTERS} characters"
        ))
    } else {
        None
    };
    match problem {
        Some(problem) => {
            problems.at(&given.span, problem);
            None
        }
        None => Some(text.to_owned()),
    }
}

/// Where a key's value stands, or else the table that lacks it.
fn span_or<'s, T>(field: &'s Field<T>, table: &'s Range<usize>) -> &'s Range<usize> {
    field.get().map_or(table, |given| &given.span)
}
