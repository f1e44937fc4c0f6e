//! Basis sets in words: the list of built-in sets, and one set with its elements and papers.

use super::error::BasisError;
use super::library;
use super::set::BasisSet;
use super::shell::{FunctionKind, MAX_ANGULAR_MOMENTUM, Shell};
use crate::elements::Element;
use std::io::{self, Write};

const LETTERS: [char; MAX_ANGULAR_MOMENTUM + 1] = ['s', 'p', 'd', 'f', 'g'];

/// Composition of contracted functions in the usual shorthand, such as `3s2p1d`.
#[must_use]
pub fn composition(shells: &[Shell]) -> String {
    shorthand(|l| {
        let contractions = shells.iter().flat_map(|shell| &shell.contractions);
        contractions.filter(|c| c.l == l).count()
    })
}

/// Composition of primitives, such as `10s4p1d`; a primitive that several contractions of one shell
/// share counts once for each angular momentum.
#[must_use]
pub fn primitive_composition(shells: &[Shell]) -> String {
    shorthand(|l| {
        let with_l = shells
            .iter()
            .filter(|shell| shell.contractions.iter().any(|c| c.l == l));
        with_l.map(|shell| shell.exponents.len()).sum()
    })
}

fn shorthand(count: impl Fn(usize) -> usize) -> String {
    LETTERS
        .iter()
        .enumerate()
        .filter_map(|(l, letter)| {
            let number = count(l);
            (number > 0).then(|| format!("{number}{letter}"))
        })
        .collect()
}

/// Elements as ranges of neighbours, such as `H–Ca, Ga–Kr`.
#[must_use]
pub fn element_ranges(elements: impl IntoIterator<Item = Element>) -> String {
    let mut ranges: Vec<(Element, Element)> = Vec::new();
    for element in elements {
        match ranges.last_mut() {
            Some((_, last)) if last.atomic_number() + 1 == element.atomic_number() => {
                *last = element;
            }
            _ => ranges.push((element, element)),
        }
    }
    ranges
        .iter()
        .map(|(first, last)| {
            let (first, last) = (*first, *last);
            match last.atomic_number() - first.atomic_number() {
                0 => first.symbol().to_string(),
                1 => format!("{}, {}", first.symbol(), last.symbol()),
                _ => format!("{}–{}", first.symbol(), last.symbol()),
            }
        })
        .collect::<Vec<_>>()
        .join(", ")
}

/// Kind of the functions for each l ≥ 2 that occurs, such as `Cartesian d, spherical f`.
#[must_use]
pub fn kinds(set: &BasisSet) -> String {
    let shells: Vec<Shell> = set
        .elements()
        .filter_map(|element| set.shells(element, None))
        .flatten()
        .collect();
    let of_kind = |kind: FunctionKind, name: &str| {
        let letters: Vec<String> = (2..LETTERS.len())
            .filter(|&l| {
                let mut same = shells.iter().filter(|shell| shell.kind == kind);
                same.any(|shell| shell.contractions.iter().any(|c| c.l == l))
            })
            .map(|l| LETTERS[l].to_string())
            .collect();
        (!letters.is_empty()).then(|| format!("{name} {}", letters.join(" ")))
    };
    let kinds: Vec<String> = [
        of_kind(FunctionKind::Cartesian, "Cartesian"),
        of_kind(FunctionKind::Spherical, "spherical"),
    ]
    .into_iter()
    .flatten()
    .collect();
    if kinds.is_empty() {
        "s and p only".to_string()
    } else {
        kinds.join(", ")
    }
}

fn width(text: &str) -> usize {
    text.chars().count()
}

/// Writes rows with their columns lined up, two blanks apart.
fn write_table(out: &mut dyn Write, rows: &[Vec<String>]) -> io::Result<()> {
    let columns = rows.iter().map(Vec::len).max().unwrap_or(0);
    let widths: Vec<usize> = (0..columns)
        .map(|c| {
            let cells = rows.iter().filter_map(|row| row.get(c));
            cells.map(|cell| width(cell)).max().unwrap_or(0)
        })
        .collect();
    for row in rows {
        let mut line = String::new();
        for (cell, &full) in row.iter().zip(&widths) {
            line.push_str(cell);
            line.push_str(&" ".repeat(full - width(cell) + 2));
        }
        writeln!(out, "{}", line.trim_end())?;
    }
    Ok(())
}

/// Writes the list of built-in sets: name, elements, kind and highest l of the functions.
///
/// # Errors
/// Those of the writer.
pub fn write_list(out: &mut dyn Write) -> io::Result<()> {
    let mut rows = vec![
        ["set", "elements", "functions", "description"]
            .map(str::to_string)
            .to_vec(),
    ];
    for name in library::names() {
        let set = library::find(name).map_err(io::Error::other)?;
        rows.push(vec![
            set.name.clone(),
            element_ranges(set.elements()),
            format!("up to {}; {}", LETTERS[set.max_l()], kinds(set)),
            set.description.clone(),
        ]);
    }
    write_table(out, &rows)
}

/// Writes one set: where it comes from, the shells of each element, the papers to cite.
///
/// # Errors
/// Those of the writer.
pub fn write_set(set: &BasisSet, out: &mut dyn Write) -> io::Result<()> {
    writeln!(out, "{}: {}", set.name, set.description)?;
    writeln!(out, "functions: {}", kinds(set))?;
    writeln!(out, "elements: {}", element_ranges(set.elements()))?;
    writeln!(out, "source: {}", set.source)?;
    writeln!(out)?;
    let mut rows = vec![
        ["element", "contracted", "primitive", "functions"]
            .map(str::to_string)
            .to_vec(),
    ];
    for element in set.elements() {
        let shells = set.shells(element, None).unwrap_or_default();
        let functions: usize = shells.iter().map(Shell::functions).sum();
        rows.push(vec![
            element.symbol().to_string(),
            composition(&shells),
            primitive_composition(&shells),
            functions.to_string(),
        ]);
    }
    write_table(out, &rows)?;
    writeln!(out, "\nPlease cite, for")?;
    for citation in set.citations() {
        writeln!(out, "  {}:", element_ranges(citation.elements.clone()))?;
        for paper in &citation.papers {
            writeln!(out, "    {paper}")?;
        }
        if citation.papers.is_empty() {
            writeln!(out, "    the source above; it names no paper")?;
        }
    }
    Ok(())
}

/// The text of [`write_list`].
#[must_use]
pub fn list() -> String {
    let mut text = Vec::new();
    // a vector takes every write, and a damaged set is reported by whoever asks for it
    let _ = write_list(&mut text);
    String::from_utf8_lossy(&text).into_owned()
}

/// The text of [`write_set`] for a built-in set.
///
/// # Errors
/// [`BasisError::UnknownSet`] if there is none of that name.
pub fn set(name: &str) -> Result<String, BasisError> {
    let mut text = Vec::new();
    let _ = write_set(library::find(name)?, &mut text);
    Ok(String::from_utf8_lossy(&text).into_owned())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn shells(set: &str, symbol: &str) -> Vec<Shell> {
        let element = Element::from_symbol(symbol).unwrap();
        library::find(set).unwrap().shells(element, None).unwrap()
    }

    /// Compositions as the papers state them: Hehre 1972 and Hariharan 1973 (6-31G*), Krishnan 1980
    /// (6-311G**), Dunning 1989 (cc-pVXZ), Kendall 1992 (aug-cc-pVXZ), Weigend 2005 (def2), Woon 1993
    /// (cc-pVDZ of Cl), all from memory.
    #[test]
    fn val_compositions() {
        for (set, symbol, primitives, contracted) in [
            ("STO-3G", "O", "6s3p", "2s1p"),
            ("6-31G*", "C", "10s4p1d", "3s2p1d"),
            ("6-31G*", "Cl", "16s10p1d", "4s3p1d"),
            ("6-31++G**", "H", "5s1p", "3s1p"),
            ("6-311G**", "O", "11s5p1d", "4s3p1d"),
            ("cc-pVDZ", "O", "9s4p1d", "3s2p1d"),
            ("cc-pVDZ", "Cl", "12s8p1d", "4s3p1d"),
            ("cc-pVTZ", "O", "10s5p2d1f", "4s3p2d1f"),
            ("cc-pVQZ", "O", "12s6p3d2f1g", "5s4p3d2f1g"),
            ("aug-cc-pVDZ", "O", "10s5p2d", "4s3p2d"),
            ("aug-cc-pVTZ", "H", "6s3p2d", "4s3p2d"),
            ("def2-SVP", "O", "7s4p1d", "3s2p1d"),
            ("def2-TZVP", "O", "11s6p2d1f", "5s3p2d1f"),
        ] {
            let shells = shells(set, symbol);
            assert_eq!(primitive_composition(&shells), primitives, "{set} {symbol}");
            assert_eq!(composition(&shells), contracted, "{set} {symbol}");
        }
    }

    #[test]
    fn list_names_every_set_once() {
        let text = list();
        let lines: Vec<&str> = text.lines().collect();
        assert_eq!(lines.len(), library::names().len() + 1);
        for (line, name) in lines[1..].iter().zip(library::names()) {
            assert!(line.starts_with(&format!("{name} ")), "{line}");
        }
        let augmented = lines.iter().find(|l| l.starts_with("aug-cc-pVTZ")).unwrap();
        assert!(augmented.contains("H–Ar, Sc–Kr"));
        assert!(augmented.contains("up to g; spherical d f g"));
    }

    #[test]
    fn one_set_shows_shells_kind_and_papers() {
        let text = set("6-31g(d)").unwrap();
        assert!(text.starts_with("6-31G*: split valence, polarisation on heavy atoms\n"));
        assert!(text.contains("functions: Cartesian d, spherical f\nelements: H–Kr\n"));
        assert!(text.contains("source: Basis Set Exchange 0.12, set version 1\n"));
        let carbon = text.lines().find(|line| line.starts_with("C ")).unwrap();
        let cells: Vec<&str> = carbon.split_whitespace().collect();
        assert_eq!(cells, ["C", "3s2p1d", "10s4p1d", "15"]);
        assert!(text.contains("  C–F:\n    Hehre, W. J.; Ditchfield, R.; Pople, J. A.: "));
        assert!(text.contains("  He, Ne:\n    the source above"));
        assert!(set("6-31h").is_err());
    }
}
