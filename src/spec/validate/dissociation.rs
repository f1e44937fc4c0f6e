//! The table `[dissociation]`: parts that together are the molecule.

use super::electrons::{self, spin_word};
use super::molecule::{charge, multiplicity};
use super::{atoms, span_or};
use crate::molecule::Molecule;
use crate::spec::diagnostic::{Problems, all_of, counted, quoted};
use crate::spec::not_yet::Feature;
use crate::spec::raw::{RawDissociation, RawPart};
use crate::spec::read::{Field, Given};
use crate::spec::{DissociationSpec, Level, Part};

/// Checks the parts against the molecule and every level's charge.
pub(super) fn dissociation(
    raw: &Field<RawDissociation>,
    molecule: Option<&Molecule>,
    levels: &[Level],
    problems: &mut Problems<'_>,
) -> Option<DissociationSpec> {
    let given = raw.get()?;
    Feature::Dissociation.demand(&given.span, problems);
    let counterpoise = given.value.counterpoise.get().is_some_and(|c| c.value);
    let Some(list) = given.value.parts.get() else {
        return Some(DissociationSpec {
            parts: Vec::new(),
            counterpoise,
        });
    };
    if list.value.len() < 2 {
        problems
            .at(
                &list.span,
                "a molecule does not separate into fewer than two parts",
            )
            .expected("expected two parts or more");
    }
    let molecule = molecule?;
    let parts: Vec<Option<Part>> = list
        .value
        .iter()
        .map(|given| part(given, molecule, problems))
        .collect();
    let mut owner: Vec<Option<usize>> = vec![None; molecule.atoms.len()];
    for (number, given) in list.value.iter().enumerate() {
        for label in given.value.atoms.get().map_or(&[][..], |l| &l.value) {
            let Some(index) = molecule.index_of(&label.value) else {
                continue;
            };
            match owner[index] {
                Some(other) if other != number => {
                    problems
                        .at(
                            &label.span,
                            format!("{} is already in part {}", quoted(&label.value), other + 1),
                        )
                        .expected("each atom belongs to one part");
                }
                _ => owner[index] = Some(number),
            }
        }
    }
    // A part that could not be read may hold the atoms that seem to be missing.
    let parts: Vec<Part> = parts.into_iter().collect::<Option<_>>()?;
    let missing: Vec<&str> = owner
        .iter()
        .zip(&molecule.atoms)
        .filter(|(owner, _)| owner.is_none())
        .map(|(_, atom)| atom.label.as_str())
        .collect();
    if !missing.is_empty() {
        problems
            .at(&list.span, format!("no part holds {}", all_of(&missing)))
            .expected("each atom belongs to one part");
    }
    let total: i64 = parts.iter().map(|p| i64::from(p.charge)).sum();
    if let Some(level) = levels.iter().find(|l| i64::from(l.charge) != total) {
        problems
            .at(
                &list.span,
                format!(
                    "the charges of the parts add up to {total}, but the level {} has {}",
                    quoted(&level.name),
                    level.charge
                ),
            )
            .hint("give the parts charges that add up to the whole");
    }
    Some(DissociationSpec {
        parts,
        counterpoise,
    })
}

fn part(given: &Given<RawPart>, molecule: &Molecule, problems: &mut Problems<'_>) -> Option<Part> {
    let raw = &given.value;
    let own_charge = charge(raw.charge.get(), problems);
    let own_multiplicity = multiplicity(raw.multiplicity.get(), problems);
    let list = raw.atoms.get()?;
    if list.value.is_empty() {
        problems.at(&list.span, "a part without atoms");
        return None;
    }
    let mut atoms = atoms(&list.value, molecule, problems)?;
    atoms.sort_unstable();
    let charge = own_charge.unwrap_or(0);
    let nuclear: i64 = atoms
        .iter()
        .map(|&i| i64::from(molecule.atoms[i].element.atomic_number()))
        .sum();
    // A bare proton is a part without electrons, and its energy is zero.
    let count = if nuclear == i64::from(charge) {
        0
    } else {
        match electrons::electrons(nuclear, charge) {
            Ok(count) => count,
            Err(problem) => {
                problems.at(span_or(&raw.charge, &given.span), problem);
                return None;
            }
        }
    };
    let multiplicity = own_multiplicity.unwrap_or_else(|| electrons::lowest(count));
    if !electrons::is_possible(count, multiplicity) {
        problems
            .at(
                span_or(&raw.multiplicity, &given.span),
                format!(
                    "{} cannot be a {}",
                    counted(count, "electron"),
                    spin_word(multiplicity)
                ),
            )
            .expected(format!("possible: {}", electrons::possible(count)));
        return None;
    }
    Some(Part {
        atoms,
        charge,
        multiplicity,
    })
}
