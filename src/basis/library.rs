//! Built-in basis sets by name.
//!
//! The numbers are those of the Basis Set Exchange collection; `data/README.md` names the sources and
//! `data/write.py` writes the files. Each set is parsed when it is first asked for.

use super::error::BasisError;
use super::set::{BasisSet, Citation};
use super::shell::{Contraction, FunctionKind, MAX_ANGULAR_MOMENTUM, Shell};
use crate::elements::Element;
use std::collections::{BTreeMap, HashMap};
use std::sync::OnceLock;

struct Embedded {
    name: &'static str,
    text: &'static str,
    parsed: OnceLock<Result<BasisSet, BasisError>>,
}

macro_rules! embedded {
    ($($name:literal in $file:literal;)*) => {
        const NAMES: &[&str] = &[$($name),*];
        static SETS: [Embedded; NAMES.len()] = [$(Embedded {
            name: $name,
            text: include_str!(concat!("data/", $file)),
            parsed: OnceLock::new(),
        }),*];
    };
}

embedded! {
    "STO-3G" in "sto-3g.txt";
    "3-21G" in "3-21g.txt";
    "6-31G" in "6-31g.txt";
    "6-31G*" in "6-31g_d.txt";
    "6-31G**" in "6-31g_dp.txt";
    "6-31+G*" in "6-31+g_d.txt";
    "6-31++G**" in "6-31++g_dp.txt";
    "6-311G" in "6-311g.txt";
    "6-311G**" in "6-311g_dp.txt";
    "6-311++G**" in "6-311++g_dp.txt";
    "cc-pVDZ" in "cc-pvdz.txt";
    "cc-pVTZ" in "cc-pvtz.txt";
    "cc-pVQZ" in "cc-pvqz.txt";
    "aug-cc-pVDZ" in "aug-cc-pvdz.txt";
    "aug-cc-pVTZ" in "aug-cc-pvtz.txt";
    "def2-SVP" in "def2-svp.txt";
    "def2-TZVP" in "def2-tzvp.txt";
}

/// Names of the built-in sets in their usual spelling, smaller sets of a family first.
#[must_use]
pub fn names() -> &'static [&'static str] {
    NAMES
}

/// The built-in set of a name.
///
/// Case, spaces, hyphens and underscores do not matter; `(d)` is read as `*` and `(d,p)` as `**`.
///
/// # Errors
/// [`BasisError::UnknownSet`] with the most similar name and the list of all.
pub fn find(name: &str) -> Result<&'static BasisSet, BasisError> {
    let wanted = canonical(name);
    match SETS.iter().find(|set| canonical(set.name) == wanted) {
        Some(set) => set.get(),
        None => Err(BasisError::UnknownSet {
            name: name.to_string(),
            nearest: nearest(&wanted),
            known: NAMES,
        }),
    }
}

/// Names of the built-in sets that cover an element.
#[must_use]
pub fn names_covering(element: Element) -> Vec<&'static str> {
    SETS.iter()
        .filter(|set| {
            set.get()
                .is_ok_and(|s| s.elements().any(|covered| covered == element))
        })
        .map(|set| set.name)
        .collect()
}

/// One spelling for all ways to write a name.
fn canonical(name: &str) -> String {
    name.chars()
        .filter(|c| !c.is_whitespace() && !"-_‐‑–−".contains(*c))
        .flat_map(char::to_lowercase)
        .collect::<String>()
        .replace("(d,p)", "**")
        .replace("(d)", "*")
}

fn nearest(wanted: &str) -> &'static str {
    NAMES
        .iter()
        .copied()
        .min_by_key(|name| strsim::damerau_levenshtein(wanted, &canonical(name)))
        .unwrap_or(NAMES[0])
}

impl Embedded {
    fn get(&'static self) -> Result<&'static BasisSet, BasisError> {
        self.parsed
            .get_or_init(|| parse(self.name, self.text))
            .as_ref()
            .map_err(Clone::clone)
    }
}

/// The shell being read: angular momenta, kind, exponents, one column per contraction.
struct Open {
    momenta: Vec<usize>,
    kind: FunctionKind,
    exponents: Vec<f64>,
    columns: Vec<Vec<f64>>,
}

impl Open {
    fn close(self) -> Shell {
        let contractions = self
            .momenta
            .iter()
            .zip(&self.columns)
            .map(|(&l, column)| Contraction::normalised(l, &self.exponents, column))
            .collect();
        Shell {
            atom: 0,
            exponents: self.exponents,
            contractions,
            kind: self.kind,
        }
    }
}

fn kind(word: &str) -> Option<FunctionKind> {
    match word {
        "cartesian" => Some(FunctionKind::Cartesian),
        "spherical" => Some(FunctionKind::Spherical),
        _ => None,
    }
}

/// Reads one data file; the format is described in `data/write.py`.
fn parse(name: &'static str, text: &str) -> Result<BasisSet, BasisError> {
    let mut head: HashMap<&str, &str> = HashMap::new();
    let mut papers: HashMap<&str, &str> = HashMap::new();
    let mut citations = Vec::new();
    let mut shells: BTreeMap<Element, Vec<Shell>> = BTreeMap::new();
    let mut element = None;
    let mut open: Option<Open> = None;
    for (number, line) in text.lines().enumerate() {
        let damaged = |problem: &str| BasisError::Embedded {
            set: name,
            line: number + 1,
            problem: problem.to_string(),
        };
        let (word, rest) = line.split_once(' ').unwrap_or((line, ""));
        match word {
            "#" => continue,
            "paper" => {
                let (key, paper) = rest.split_once(' ').ok_or_else(|| damaged("no paper"))?;
                papers.insert(key, paper);
                continue;
            }
            "cite" => {
                let (symbols, keys) = rest.split_once(':').ok_or_else(|| damaged("no colon"))?;
                citations.push(Citation {
                    elements: symbols
                        .split_whitespace()
                        .map(Element::from_symbol)
                        .collect::<Option<_>>()
                        .ok_or_else(|| damaged("unknown element"))?,
                    papers: keys
                        .split_whitespace()
                        .map(|key| papers.get(key).map(ToString::to_string))
                        .collect::<Option<_>>()
                        .ok_or_else(|| damaged("unknown paper"))?,
                });
                continue;
            }
            "element" | "shell" => {
                if let (Some(shell), Some(element)) = (open.take(), element) {
                    shells.entry(element).or_default().push(shell.close());
                }
            }
            _ => {}
        }
        match (word, &mut open) {
            ("element", _) => {
                element =
                    Some(Element::from_symbol(rest).ok_or_else(|| damaged("unknown element"))?);
            }
            ("shell", _) => {
                let (letters, word) = rest.split_once(' ').unwrap_or((rest, "spherical"));
                let momenta: Vec<usize> = letters
                    .chars()
                    .map(|c| "spdfg".find(c))
                    .collect::<Option<_>>()
                    .ok_or_else(|| damaged("unknown shell letter"))?;
                open = Some(Open {
                    kind: kind(word).ok_or_else(|| damaged("unknown kind"))?,
                    exponents: Vec::new(),
                    columns: vec![Vec::new(); momenta.len()],
                    momenta,
                });
            }
            (_, Some(shell)) => {
                let row: Vec<f64> = line
                    .split(' ')
                    .map(str::parse)
                    .collect::<Result<_, _>>()
                    .map_err(|_| damaged("not a row of numbers"))?;
                if row.len() != shell.columns.len() + 1 {
                    return Err(damaged("wrong number of columns"));
                }
                shell.exponents.push(row[0]);
                for (column, value) in shell.columns.iter_mut().zip(&row[1..]) {
                    column.push(*value);
                }
            }
            _ => {
                head.insert(word, rest);
            }
        }
    }
    if let (Some(shell), Some(element)) = (open, element) {
        shells.entry(element).or_default().push(shell.close());
    }
    let field = |key: &str| {
        head.get(key).copied().ok_or_else(|| BasisError::Embedded {
            set: name,
            line: 1,
            problem: format!("no line '{key}'"),
        })
    };
    let set_kind = kind(field("kind")?).ok_or_else(|| BasisError::Embedded {
        set: name,
        line: 1,
        problem: "unknown kind".to_string(),
    })?;
    debug_assert!(
        shells
            .values()
            .flatten()
            .all(|s| s.max_l() <= MAX_ANGULAR_MOMENTUM)
    );
    Ok(BasisSet::new(
        field("name")?.to_string(),
        field("description")?.to_string(),
        set_kind,
        format!(
            "{}, set version {}",
            field("collection")?,
            field("version")?
        ),
        shells,
        citations,
    ))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::basis::Basis;
    use crate::basis::shell::one_centre_overlap;
    use crate::molecule::{Atom, Molecule};
    use nalgebra::Vector3;

    /// Atoms of a formula far apart; only counts matter here.
    fn atoms(symbols: &[&str]) -> Molecule {
        Molecule {
            atoms: symbols
                .iter()
                .enumerate()
                .map(|(i, s)| Atom {
                    label: format!("{s}{i}"),
                    element: Element::from_symbol(s).unwrap(),
                    ghost: false,
                })
                .collect(),
            positions: (0..symbols.len())
                .map(|i| Vector3::new(0.0, 0.0, 3.0 * i as f64))
                .collect(),
            charge: 0,
            multiplicity: 1,
        }
    }

    fn functions(set: &str, symbols: &[&str]) -> usize {
        let molecule = atoms(symbols);
        let shells = find(set).unwrap().shells_of(&molecule, None).unwrap();
        Basis::of_molecule(&shells, &molecule).len()
    }

    #[test]
    fn every_set_parses_and_is_normalised() {
        for &name in names() {
            let set = find(name).unwrap();
            assert_eq!(set.name, name);
            assert!(set.elements().count() >= 18 - 1, "{name}");
            for element in set.elements() {
                let shells = set.shells(element, None).unwrap();
                assert!(!shells.is_empty());
                for shell in &shells {
                    assert!(shell.exponents.iter().all(|&a| a > 0.0 && a.is_finite()));
                    for c in &shell.contractions {
                        let mut norm = 0.0;
                        for (a, ca) in shell.exponents.iter().zip(&c.coefficients) {
                            for (b, cb) in shell.exponents.iter().zip(&c.coefficients) {
                                norm += ca * cb * one_centre_overlap(c.l, a + b);
                            }
                        }
                        assert!((norm - 1.0).abs() < 1e-12, "{name} {element:?} {norm}");
                    }
                }
                let cited = set
                    .citations()
                    .iter()
                    .filter(|c| c.elements.contains(&element));
                assert_eq!(cited.count(), 1, "{name} {element:?}");
            }
        }
    }

    #[test]
    fn spellings_resolve() {
        for (spelling, name) in [
            ("6-31g(d)", "6-31G*"),
            ("6-31G(d,p)", "6-31G**"),
            ("6-31+g(d)", "6-31+G*"),
            ("6-31++G(d,p)", "6-31++G**"),
            ("6-31++g (d, p)", "6-31++G**"),
            ("6-311G(D,P)", "6-311G**"),
            ("6-311++g**", "6-311++G**"),
            ("sto3g", "STO-3G"),
            ("ccpvtz", "cc-pVTZ"),
            ("CC-PVQZ", "cc-pVQZ"),
            ("AUG-cc-pVDZ", "aug-cc-pVDZ"),
            ("def2_svp", "def2-SVP"),
            ("Def2TZVP", "def2-TZVP"),
        ] {
            assert_eq!(find(spelling).unwrap().name, name);
        }
        for name in names() {
            assert_eq!(&find(&name.to_uppercase()).unwrap().name, name);
            assert_eq!(&find(&name.to_lowercase()).unwrap().name, name);
        }
    }

    #[test]
    fn unknown_name_suggests_the_nearest() {
        let error = find("6-31GG*").unwrap_err();
        assert!(matches!(
            error,
            BasisError::UnknownSet {
                nearest: "6-31G*",
                ..
            }
        ));
        let text = error.to_string();
        assert!(text.starts_with("no basis set is called '6-31GG*'; did you mean '6-31G*'?"));
        assert!(names().iter().all(|name| text.contains(name)));
    }

    /// Numbers of functions follow from the published compositions, counted by hand:
    /// 6-31G* is [3s2p1d] with six d, cc-pVDZ [3s2p1d]/[2s1p], cc-pVTZ [4s3p2d1f]/[3s2p1d],
    /// aug-cc-pVDZ [4s3p2d]/[3s2p], def2-SVP [3s2p1d]/[2s1p].
    #[test]
    fn val_function_counts() {
        let water = ["O", "H", "H"];
        let benzene = ["C", "C", "C", "C", "C", "C", "H", "H", "H", "H", "H", "H"];
        assert_eq!(functions("6-31G*", &water), 19);
        assert_eq!(functions("cc-pVDZ", &water), 24);
        assert_eq!(functions("cc-pVTZ", &water), 58);
        assert_eq!(functions("aug-cc-pVDZ", &water), 41);
        assert_eq!(functions("def2-SVP", &water), 24);
        assert_eq!(functions("6-31G*", &benzene), 102);
        assert_eq!(functions("cc-pVTZ", &benzene), 264);
    }

    /// Shell records and primitives of the collection's data (set version 1; 0 for 6-311G**) as
    /// counted by an independent reader whose energies serve as references elsewhere. Nothing in
    /// these sets is merged, so shells here are records there.
    #[test]
    fn val_shell_and_primitive_counts() {
        type Counts = (&'static str, usize, usize);
        let cases: [(&str, &[Counts]); 10] = [
            (
                "STO-3G",
                &[("H", 1, 3), ("Li", 2, 6), ("O", 2, 6), ("C", 2, 6)],
            ),
            (
                "3-21G",
                &[("O", 3, 6), ("H", 2, 3), ("C", 3, 6), ("F", 3, 6)],
            ),
            ("6-31G", &[("H", 2, 4), ("O", 3, 10)]),
            (
                "6-31G*",
                &[
                    ("H", 2, 4),
                    ("Li", 4, 11),
                    ("O", 4, 11),
                    ("N", 4, 11),
                    ("C", 4, 11),
                ],
            ),
            (
                "6-31G**",
                &[("H", 3, 5), ("F", 4, 11), ("N", 4, 11), ("O", 4, 11)],
            ),
            ("6-311G**", &[("He", 4, 6), ("H", 4, 6), ("O", 5, 12)]),
            (
                "cc-pVDZ",
                &[("O", 3, 14), ("H", 2, 5), ("C", 3, 14), ("N", 3, 14)],
            ),
            ("cc-pVTZ", &[("H", 3, 8), ("F", 4, 18), ("O", 4, 18)]),
            ("aug-cc-pVDZ", &[("O", 6, 17), ("H", 4, 7), ("C", 6, 17)]),
            ("def2-SVP", &[("O", 6, 12), ("H", 3, 5), ("N", 6, 12)]),
        ];
        for (name, counts) in cases {
            for &(symbol, records, primitives) in counts {
                let element = Element::from_symbol(symbol).unwrap();
                let shells = find(name).unwrap().shells(element, None).unwrap();
                assert_eq!(shells.len(), records, "{name} {symbol}");
                let exponents: usize = shells.iter().map(|s| s.exponents.len()).sum();
                assert_eq!(exponents, primitives, "{name} {symbol}");
            }
        }
    }

    #[test]
    fn missing_elements_are_all_named_with_the_sets_that_have_them() {
        let error = find("6-31+G*")
            .unwrap()
            .shells_of(&atoms(&["Br", "O", "K", "Br"]), None)
            .unwrap_err();
        let text = error.to_string();
        assert!(text.starts_with("basis set 6-31+G* has no functions for K (covered by STO-3G"));
        assert!(text.contains("; Br (covered by"));
        let BasisError::MissingElements { missing, .. } = error else {
            panic!("{text}");
        };
        assert_eq!(missing.len(), 2);
        assert!(missing[1].covered_by.contains(&"cc-pVTZ"));
        assert!(!missing[1].covered_by.contains(&"6-311++G**"));
    }
}
