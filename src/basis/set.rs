//! Basis sets by element, before they are placed on a molecule.

use super::error::{BasisError, MissingElement};
use super::library;
use super::shell::{Contraction, FunctionKind, Shell};
use crate::elements::Element;
use crate::molecule::Molecule;
use std::collections::BTreeMap;

/// Papers to cite when a set is used for certain elements.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Citation {
    /// The elements concerned, in order of atomic number.
    pub elements: Vec<Element>,
    /// One line per paper; empty where the collection names none.
    pub papers: Vec<String>,
}

/// A basis set: the shells of each element it covers.
#[derive(Debug, Clone, PartialEq)]
pub struct BasisSet {
    /// Name in its usual spelling, such as `6-31G*`.
    pub name: String,
    /// What kind of set it is, in a few words.
    pub description: String,
    /// Kind of the d functions as the set defines it (f and g may differ: 6-31G* has Cartesian d and
    /// spherical f).
    pub kind: FunctionKind,
    /// Where the numbers come from: the collection or file, and the version of the set in it.
    pub source: String,
    shells: BTreeMap<Element, Vec<Shell>>,
    citations: Vec<Citation>,
}

impl BasisSet {
    /// Builds a set from the shells of each element (atom index 0) and its citations.
    ///
    /// Shells of one angular momentum and kind that share exponents become one shell: where all
    /// exponents of one occur in the other, its contractions are appended as further columns. The
    /// functions stay the same, only their order changes, and each primitive is computed once.
    pub(super) fn new(
        name: String,
        description: String,
        kind: FunctionKind,
        source: String,
        shells: BTreeMap<Element, Vec<Shell>>,
        citations: Vec<Citation>,
    ) -> Self {
        let shells = shells
            .into_iter()
            .map(|(element, shells)| (element, merge_shared_exponents(shells)))
            .collect();
        Self {
            name,
            description,
            kind,
            source,
            shells,
            citations,
        }
    }

    /// The elements that the set covers, in order of atomic number.
    pub fn elements(&self) -> impl Iterator<Item = Element> + '_ {
        self.shells.keys().copied()
    }

    /// Shells of one element with unit-norm contractions and atom index 0, or `None` if the set
    /// does not cover it. `kind` replaces the kind of all functions with l ≥ 2.
    #[must_use]
    pub fn shells(&self, element: Element, kind: Option<FunctionKind>) -> Option<Vec<Shell>> {
        let mut shells = self.shells.get(&element)?.clone();
        if let Some(kind) = kind {
            shells.iter_mut().for_each(|shell| shell.kind = kind);
        }
        Some(shells)
    }

    /// Shells for each atom of a molecule, ghosts included, as [`super::Basis::of_molecule`] takes them.
    ///
    /// # Errors
    /// [`BasisError::MissingElements`] names every element that is not covered.
    pub fn shells_of(
        &self,
        molecule: &Molecule,
        kind: Option<FunctionKind>,
    ) -> Result<Vec<Vec<Shell>>, BasisError> {
        let mut missing: Vec<Element> = molecule
            .atoms
            .iter()
            .map(|atom| atom.element)
            .filter(|element| !self.shells.contains_key(element))
            .collect();
        missing.sort_unstable();
        missing.dedup();
        if !missing.is_empty() {
            return Err(BasisError::MissingElements {
                set: self.name.clone(),
                missing: missing
                    .into_iter()
                    .map(|element| MissingElement {
                        element,
                        covered_by: library::names_covering(element),
                    })
                    .collect(),
            });
        }
        Ok(molecule
            .atoms
            .iter()
            .filter_map(|atom| self.shells(atom.element, kind))
            .collect())
    }

    /// The papers to cite, by groups of elements.
    #[must_use]
    pub fn citations(&self) -> &[Citation] {
        &self.citations
    }

    /// Highest angular momentum over all elements.
    #[must_use]
    pub fn max_l(&self) -> usize {
        self.shells
            .values()
            .flatten()
            .map(Shell::max_l)
            .max()
            .unwrap_or(0)
    }
}

/// The one angular momentum of a shell, if it has only one.
fn single_l(shell: &Shell) -> Option<usize> {
    let l = shell.contractions.first()?.l;
    shell.contractions.iter().all(|c| c.l == l).then_some(l)
}

/// Where each exponent of `part` stands in `whole`, if all do. Exponents are compared bit by bit:
/// they come from the same decimal strings or they are different functions.
fn places(part: &[f64], whole: &[f64]) -> Option<Vec<usize>> {
    let found: Vec<usize> = part
        .iter()
        .map(|a| whole.iter().position(|b| a.to_bits() == b.to_bits()))
        .collect::<Option<_>>()?;
    let mut distinct = found.clone();
    distinct.sort_unstable();
    distinct.dedup();
    (distinct.len() == found.len()).then_some(found)
}

fn widened(part: &Shell, places: &[usize], width: usize) -> impl Iterator<Item = Contraction> {
    part.contractions.iter().map(move |c| {
        let mut coefficients = vec![0.0; width];
        for (&place, &value) in places.iter().zip(&c.coefficients) {
            coefficients[place] = value;
        }
        Contraction {
            l: c.l,
            coefficients,
        }
    })
}

fn merge_shared_exponents(shells: Vec<Shell>) -> Vec<Shell> {
    let mut merged: Vec<Shell> = Vec::with_capacity(shells.len());
    for shell in shells {
        let l = single_l(&shell);
        let alike = |other: &Shell| {
            l.is_some() && single_l(other) == l && (other.kind == shell.kind || l < Some(2))
        };
        let host = merged
            .iter_mut()
            .filter(|other| alike(other))
            .find_map(|other| {
                let inside = places(&shell.exponents, &other.exponents);
                let around = places(&other.exponents, &shell.exponents);
                (inside.is_some() || around.is_some()).then_some((other, inside, around))
            });
        match host {
            Some((other, Some(inside), _)) => {
                let columns: Vec<_> = widened(&shell, &inside, other.exponents.len()).collect();
                other.contractions.extend(columns);
            }
            Some((other, None, Some(around))) => {
                let columns = widened(other, &around, shell.exponents.len()).collect();
                other.contractions = columns;
                other.contractions.extend(shell.contractions);
                other.exponents = shell.exponents;
            }
            _ => merged.push(shell),
        }
    }
    merged
}

#[cfg(test)]
mod tests {
    use super::*;

    fn shell(l: usize, exponents: &[f64], columns: &[&[f64]]) -> Shell {
        Shell {
            atom: 0,
            exponents: exponents.to_vec(),
            contractions: columns
                .iter()
                .map(|c| Contraction::normalised(l, exponents, c))
                .collect(),
            kind: FunctionKind::Spherical,
        }
    }

    #[test]
    fn uncontracted_shell_joins_the_general_one() {
        let general = shell(0, &[9.0, 3.0, 1.0], &[&[0.2, 0.5, 0.4]]);
        let single = shell(0, &[1.0], &[&[1.0]]);
        for order in [
            vec![general.clone(), single.clone()],
            vec![single.clone(), general.clone()],
        ] {
            let merged = merge_shared_exponents(order.clone());
            assert_eq!(merged.len(), 1);
            assert_eq!(merged[0].exponents, general.exponents);
            assert_eq!(merged[0].functions(), 2);
            let own = Contraction {
                l: 0,
                coefficients: vec![0.0, 0.0, single.contractions[0].coefficients[0]],
            };
            assert!(merged[0].contractions.contains(&own));
            assert!(merged[0].contractions.contains(&general.contractions[0]));
        }
    }

    #[test]
    fn overlapping_but_not_nested_shells_stay_apart() {
        let first = shell(0, &[9.0, 3.0], &[&[0.2, 0.5]]);
        let second = shell(0, &[3.0, 1.0], &[&[0.4, 0.7]]);
        let other_l = shell(1, &[9.0, 3.0], &[&[0.2, 0.5]]);
        let all = vec![first, second, other_l];
        assert_eq!(merge_shared_exponents(all.clone()), all);
    }
}
