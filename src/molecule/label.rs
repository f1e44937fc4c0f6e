//! Atom labels: the element they begin with, and unique names for atoms written without a number.

use super::geometry_error::GeometryProblem;
use crate::elements::Element;

/// How a label may be written.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Writing {
    /// Symbol and suffix; two capitals that could be one element or another with a suffix are refused.
    Labelled,
    /// As in XYZ files: a word that is a symbol as a whole, in any case, is that element.
    Symbols,
}

/// The element of a label, which is a symbol and a suffix of ASCII letters, digits and underscores.
///
/// Two letters are read as one symbol before one is, so `Cl2` is chlorine, `Co` cobalt and `C_o` carbon. Where the second
/// of them is a capital and both readings exist (`CL1`, `CO`), neither is taken silently.
pub(super) fn element_of(label: &str, writing: Writing) -> Result<Element, GeometryProblem> {
    if let Some(sign) = label
        .chars()
        .find(|c| !(c.is_ascii_alphanumeric() || *c == '_'))
    {
        return Err(GeometryProblem::LabelSign {
            label: label.to_owned(),
            sign,
        });
    }
    if writing == Writing::Symbols
        && let Some(element) = Element::from_symbol(label)
    {
        return Ok(element);
    }
    // Only ASCII is left, so bytes are signs.
    let single = label.get(..1).and_then(Element::from_symbol);
    let pair = label.get(..2).and_then(Element::from_symbol);
    match (pair, single) {
        (Some(pair), Some(single)) if label.as_bytes()[1].is_ascii_uppercase() => {
            Err(GeometryProblem::AmbiguousElement {
                label: label.to_owned(),
                pair: pair.symbol(),
                single: single.symbol(),
            })
        }
        (Some(element), _) | (None, Some(element)) => Ok(element),
        (None, None) => Err(GeometryProblem::UnknownElement {
            label: label.to_owned(),
        }),
    }
}

/// Gives atoms that are written with their bare symbol (in any case) and share it with another such atom the symbol and
/// a running number that no written label has taken; all other labels stay as written.
pub(super) fn number_bare_symbols(atoms: &mut [(String, Element)]) {
    let bare: Vec<bool> = atoms
        .iter()
        .map(|(label, element)| label.eq_ignore_ascii_case(element.symbol()))
        .collect();
    let repeated: Vec<bool> = (0..atoms.len())
        .map(|i| bare[i] && (0..atoms.len()).any(|j| j != i && bare[j] && atoms[j].1 == atoms[i].1))
        .collect();
    for i in (0..atoms.len()).filter(|&i| repeated[i]) {
        let symbol = atoms[i].1.symbol();
        let free = (1..=atoms.len() + 1)
            .map(|number| format!("{symbol}{number}"))
            .find(|label| atoms.iter().all(|(taken, _)| taken != label));
        if let Some(label) = free {
            atoms[i].0 = label;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn symbol_of(label: &str) -> Option<&'static str> {
        element_of(label, Writing::Labelled)
            .ok()
            .map(Element::symbol)
    }

    #[test]
    fn labels_begin_with_their_element() {
        for (label, symbol) in [
            ("H1", "H"),
            ("O", "O"),
            ("Cl2", "Cl"),
            ("cl2", "Cl"),
            ("C_a", "C"),
            ("Co", "Co"),
            ("Ha", "H"),
            ("HO1", "H"),
            ("Hex", "He"),
            ("ZN1", "Zn"),
            ("n12", "N"),
        ] {
            assert_eq!(symbol_of(label), Some(symbol), "{label}");
        }
    }

    #[test]
    fn two_readings_are_refused_unless_the_word_must_be_a_symbol() {
        let refused = element_of("CL1", Writing::Labelled).unwrap_err();
        assert_eq!(refused.help().as_deref(), Some("write `Cl1` or `C_L1`"));
        assert!(element_of("CO", Writing::Labelled).is_err());
        assert_eq!(
            element_of("CO", Writing::Symbols).map(Element::symbol),
            Ok("Co")
        );
    }

    #[test]
    fn labels_without_an_element_are_refused() {
        for label in ["X1", "1H", "_", "Q", "H-1", "Hé"] {
            assert_eq!(symbol_of(label), None, "{label}");
        }
    }

    #[test]
    fn bare_symbols_are_numbered_per_element_around_what_is_written() {
        let mut atoms: Vec<(String, Element)> = ["O", "H", "h", "H2", "C"]
            .into_iter()
            .map(|label| {
                (
                    label.to_owned(),
                    element_of(label, Writing::Symbols).unwrap(),
                )
            })
            .collect();
        number_bare_symbols(&mut atoms);
        let labels: Vec<&str> = atoms.iter().map(|(label, _)| label.as_str()).collect();
        assert_eq!(labels, ["O", "H1", "H3", "H2", "C"]);
    }
}
