//! Basis sets from a user's file in the open JSON schema of the Basis Set Exchange.
//!
//! Schema: B. P. Pritchard et al., J. Chem. Inf. Model. 59, 4814 (2019). Read are `name`,
//! `description`, `version`, `function_types` and, of each of `elements` (keyed by atomic number),
//! `electron_shells` and `references`. Unknown keys are passed over, as the schema grows. Elements
//! beyond krypton are passed over too: no molecule here can hold them.

use super::error::BasisError;
use super::set::{BasisSet, Citation};
use super::shell::{Contraction, FunctionKind, MAX_ANGULAR_MOMENTUM, Shell};
use crate::elements::Element;
use serde_json::{Map, Value};
use std::collections::BTreeMap;

/// Heaviest atomic number that a file may name.
const LAST_KNOWN_ELEMENT: u8 = 118;

impl BasisSet {
    /// Reads a basis set from the open JSON schema; `source` is the file name for messages.
    ///
    /// Kind of the functions with l ≥ 2: `gto_cartesian` and `gto_spherical` say it for their shell. A
    /// shell marked just `gto` follows `function_types` of the set where that names one kind only, and
    /// is Cartesian otherwise.
    ///
    /// # Errors
    /// [`BasisError::Syntax`] if the text is not JSON; [`BasisError::Schema`] with the place in the
    /// file, what was expected and what was found; [`BasisError::Unsupported`] for effective core
    /// potentials and for functions beyond g.
    pub fn from_json(text: &str, source: &str) -> Result<Self, BasisError> {
        let value: Value = serde_json::from_str(text).map_err(|error| BasisError::Syntax {
            origin: source.to_string(),
            line: error.line(),
            column: error.column(),
            problem: first_words(&error.to_string()),
        })?;
        let root = Place {
            origin: source,
            path: String::new(),
            value: &value,
        };
        root.object("an object with the key 'elements'")?;
        let set_kind = root.set_kind()?;
        let mut shells = BTreeMap::new();
        let mut citations: Vec<Citation> = Vec::new();
        let elements = root.get("elements", "an object keyed by atomic number")?;
        for key in elements.object("an object keyed by atomic number")?.keys() {
            let Some(element) = elements.element(key)? else {
                continue;
            };
            let place = elements.child(
                format!("elements.{key} ({})", element.symbol()),
                &elements.value[key.as_str()],
            );
            shells.insert(element, place.element_shells(set_kind)?);
            add_citation(&mut citations, element, place.papers());
        }
        if shells.is_empty() {
            return Err(elements.expected("at least one element of H–Kr"));
        }
        let kind = shells
            .values()
            .flatten()
            .find(|shell| shell.max_l() >= 2)
            .map_or(set_kind, |shell| shell.kind);
        for citation in &mut citations {
            citation.elements.sort_unstable();
        }
        Ok(Self::new(
            root.text("name").unwrap_or_else(|| source.to_string()),
            root.text("description").unwrap_or_default(),
            kind,
            match root.text("version") {
                Some(version) => format!("file {source}, set version {version}"),
                None => format!("file {source}"),
            },
            shells,
            citations,
        ))
    }
}

/// Message of the JSON parser without the position at its end, which is reported apart.
fn first_words(message: &str) -> String {
    let end = message.rfind(" at line ").unwrap_or(message.len());
    message[..end].to_string()
}

fn add_citation(citations: &mut Vec<Citation>, element: Element, papers: Vec<String>) {
    match citations.iter_mut().find(|c| c.papers == papers) {
        Some(citation) => citation.elements.push(element),
        None => citations.push(Citation {
            elements: vec![element],
            papers,
        }),
    }
}

/// A value of the file and where it stands.
struct Place<'a> {
    origin: &'a str,
    path: String,
    value: &'a Value,
}

impl<'a> Place<'a> {
    fn child(&self, path: String, value: &'a Value) -> Self {
        Self {
            origin: self.origin,
            path,
            value,
        }
    }

    fn join(&self, key: &str) -> String {
        if self.path.is_empty() {
            key.to_string()
        } else {
            format!("{}.{key}", self.path)
        }
    }

    fn get(&self, key: &str, expected: &str) -> Result<Self, BasisError> {
        match self.value.get(key) {
            Some(value) => Ok(self.child(self.join(key), value)),
            None => Err(BasisError::Schema {
                origin: self.origin.to_string(),
                path: self.join(key),
                expected: expected.to_string(),
                found: "nothing".to_string(),
            }),
        }
    }

    fn expected(&self, expected: &str) -> BasisError {
        BasisError::Schema {
            origin: self.origin.to_string(),
            path: if self.path.is_empty() {
                "top level".to_string()
            } else {
                self.path.clone()
            },
            expected: expected.to_string(),
            found: summary(self.value),
        }
    }

    fn unsupported(&self, problem: String) -> BasisError {
        BasisError::Unsupported {
            origin: self.origin.to_string(),
            path: self.path.clone(),
            problem,
        }
    }

    fn object(&self, expected: &str) -> Result<&'a Map<String, Value>, BasisError> {
        self.value
            .as_object()
            .ok_or_else(|| self.expected(expected))
    }

    /// Items of a list that is not empty.
    fn items(&self, expected: &str) -> Result<Vec<Self>, BasisError> {
        match self.value.as_array() {
            Some(items) if !items.is_empty() => Ok(items
                .iter()
                .enumerate()
                .map(|(i, item)| self.child(format!("{}[{i}]", self.path), item))
                .collect()),
            _ => Err(self.expected(expected)),
        }
    }

    fn text(&self, key: &str) -> Option<String> {
        match self.value.get(key)? {
            Value::String(text) if !text.trim().is_empty() => Some(text.trim().to_string()),
            Value::Number(number) => Some(number.to_string()),
            _ => None,
        }
    }

    /// A finite number, written as a number or, as the schema has it, in a string.
    fn number(&self, expected: &str) -> Result<f64, BasisError> {
        let number = match self.value {
            // some tables use the letter D of Fortran's double precision
            Value::String(text) => text.trim().replace(['d', 'D'], "e").parse().ok(),
            value => value.as_f64(),
        };
        number
            .filter(|n: &f64| n.is_finite())
            .ok_or_else(|| self.expected(expected))
    }

    /// Kind for shells that do not say theirs.
    fn set_kind(&self) -> Result<FunctionKind, BasisError> {
        if self.value.get("function_types").is_none() {
            return Ok(FunctionKind::Cartesian);
        }
        let types = self.get("function_types", "a list of function types")?;
        let names: Vec<&str> = types
            .value
            .as_array()
            .and_then(|list| list.iter().map(Value::as_str).collect())
            .ok_or_else(|| types.expected("a list of function types"))?;
        let spherical = names.contains(&"gto_spherical");
        let cartesian = names.contains(&"gto_cartesian");
        Ok(if spherical && !cartesian {
            FunctionKind::Spherical
        } else {
            FunctionKind::Cartesian
        })
    }

    /// The element of a key of `elements`; `None` beyond krypton.
    fn element(&self, key: &str) -> Result<Option<Element>, BasisError> {
        match key.parse::<u8>() {
            Ok(z) if (1..=LAST_KNOWN_ELEMENT).contains(&z) => Ok(Element::from_atomic_number(z)),
            _ => Err(BasisError::Schema {
                origin: self.origin.to_string(),
                path: self.path.clone(),
                expected: "atomic numbers as keys".to_string(),
                found: format!("\"{key}\""),
            }),
        }
    }

    fn element_shells(&self, set_kind: FunctionKind) -> Result<Vec<Shell>, BasisError> {
        self.object("an object with 'electron_shells'")?;
        for key in ["ecp_potentials", "ecp_electrons"] {
            if self.value.get(key).is_some_and(|value| !value.is_null()) {
                let place = self.get(key, "")?;
                return Err(place.unsupported(
                    "effective core potentials are not available; take an all-electron set, or \
                     leave this element out of the file"
                        .to_string(),
                ));
            }
        }
        self.get("electron_shells", "a list of shells")?
            .items("a list of at least one shell")?
            .iter()
            .map(|shell| shell.shell(set_kind))
            .collect()
    }

    fn shell(&self, set_kind: FunctionKind) -> Result<Shell, BasisError> {
        self.object("a shell with 'angular_momentum', 'exponents' and 'coefficients'")?;
        let kind = self.shell_kind(set_kind)?;
        let momenta = self.momenta()?;
        let exponents: Vec<f64> = self
            .get("exponents", "a list of exponents")?
            .items("a list of at least one exponent")?
            .iter()
            .map(|place| {
                let expected = "a positive exponent (bohr⁻²)";
                let exponent = place.number(expected)?;
                if exponent > 0.0 {
                    Ok(exponent)
                } else {
                    Err(place.expected(expected))
                }
            })
            .collect::<Result<_, _>>()?;
        let coefficients = self.get("coefficients", "a list of contractions")?;
        let columns = coefficients.items("a list of at least one contraction")?;
        // one momentum for all contractions, or one for each (sp shells)
        let momenta = if momenta.len() == 1 {
            vec![momenta[0]; columns.len()]
        } else {
            momenta
        };
        if momenta.len() != columns.len() {
            return Err(BasisError::Schema {
                origin: self.origin.to_string(),
                path: coefficients.path,
                expected: format!("{} contractions, one per angular momentum", momenta.len()),
                found: format!("{}", columns.len()),
            });
        }
        let contractions = momenta
            .iter()
            .zip(&columns)
            .map(|(&l, column)| column.contraction(l, &exponents))
            .collect::<Result<_, _>>()?;
        Ok(Shell {
            atom: 0,
            exponents,
            contractions,
            kind,
        })
    }

    fn shell_kind(&self, set_kind: FunctionKind) -> Result<FunctionKind, BasisError> {
        let Some(value) = self.value.get("function_type") else {
            return Ok(set_kind);
        };
        match value.as_str() {
            Some("gto") => Ok(set_kind),
            Some("gto_cartesian") => Ok(FunctionKind::Cartesian),
            Some("gto_spherical") => Ok(FunctionKind::Spherical),
            _ => Err(self
                .get("function_type", "")?
                .expected("\"gto\", \"gto_cartesian\" or \"gto_spherical\"")),
        }
    }

    fn momenta(&self) -> Result<Vec<usize>, BasisError> {
        self.get("angular_momentum", "a list of angular momenta")?
            .items("a list of at least one angular momentum")?
            .iter()
            .map(|place| {
                let l = place
                    .value
                    .as_u64()
                    .and_then(|l| usize::try_from(l).ok())
                    .ok_or_else(|| place.expected("a whole number from 0 (s) to 4 (g)"))?;
                if l > MAX_ANGULAR_MOMENTUM {
                    return Err(place.unsupported(format!(
                        "functions with l = {l}; up to l = {MAX_ANGULAR_MOMENTUM} (g) can be \
                         used. Take a smaller set, or leave this element out of the file"
                    )));
                }
                Ok(l)
            })
            .collect()
    }

    fn contraction(&self, l: usize, exponents: &[f64]) -> Result<Contraction, BasisError> {
        let column: Vec<f64> = self
            .items("a list of coefficients")?
            .iter()
            .map(|place| place.number("a coefficient"))
            .collect::<Result<_, _>>()?;
        if column.len() != exponents.len() {
            return Err(BasisError::Schema {
                origin: self.origin.to_string(),
                path: self.path.clone(),
                expected: format!("{} coefficients, one per exponent", exponents.len()),
                found: format!("{}", column.len()),
            });
        }
        let contraction = Contraction::normalised(l, exponents, &column);
        if contraction.coefficients.iter().all(|c| c.is_finite()) {
            Ok(contraction)
        } else {
            // all coefficients zero, primitives that cancel, or numbers out of range
            Err(self.expected("a contraction with a norm above zero"))
        }
    }

    /// Descriptions and keys of the references; what does not follow the schema is passed over,
    /// since no number depends on it.
    fn papers(&self) -> Vec<String> {
        let references = self.value.get("references").and_then(Value::as_array);
        let mut papers = Vec::new();
        for reference in references.into_iter().flatten() {
            let keys = reference.get("reference_keys").and_then(Value::as_array);
            let keys: Vec<&str> = keys
                .into_iter()
                .flatten()
                .filter_map(Value::as_str)
                .collect();
            let about = reference
                .get("reference_description")
                .and_then(Value::as_str);
            let paper = match about {
                Some(about) if !keys.is_empty() => format!("{about}: {}", keys.join(", ")),
                Some(about) => about.to_string(),
                None => keys.join(", "),
            };
            if !paper.is_empty() && !papers.contains(&paper) {
                papers.push(paper);
            }
        }
        papers
    }
}

/// A value in a few words, for messages.
fn summary(value: &Value) -> String {
    match value {
        Value::Array(items) if items.is_empty() => "an empty list".to_string(),
        Value::Array(items) => format!("a list of {}", items.len()),
        Value::Object(map) if map.is_empty() => "an empty object".to_string(),
        Value::Object(_) => "an object".to_string(),
        Value::String(text) if text.chars().count() > 40 => {
            format!("\"{}…\"", text.chars().take(40).collect::<String>())
        }
        other => other.to_string(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::basis::library;

    const CC_PVDZ: &str = include_str!("../../tests/data/basis/cc-pvdz-h-o.json");
    const SPLIT_VALENCE: &str = include_str!("../../tests/data/basis/6-31g_d-h-o-sc.json");

    /// A file with one oxygen shell, as text to be spoilt.
    fn one_shell(shell: &str) -> String {
        format!(r#"{{"name": "mine", "elements": {{"8": {{"electron_shells": [{shell}]}}}}}}"#)
    }

    fn message(text: &str) -> String {
        BasisSet::from_json(text, "my-set.json")
            .unwrap_err()
            .to_string()
    }

    #[test]
    fn val_collection_files_equal_the_embedded_sets_bit_by_bit() {
        for (text, name, symbols) in [
            (CC_PVDZ, "cc-pVDZ", vec!["H", "O"]),
            (SPLIT_VALENCE, "6-31G*", vec!["H", "O", "Sc"]),
        ] {
            let file = BasisSet::from_json(text, "f.json").unwrap();
            let embedded = library::find(name).unwrap();
            assert_eq!(file.name, name);
            assert_eq!(file.kind, embedded.kind);
            assert_eq!(file.elements().count(), symbols.len());
            for symbol in symbols {
                let element = Element::from_symbol(symbol).unwrap();
                let (mine, theirs) = (file.shells(element, None), embedded.shells(element, None));
                let (mine, theirs) = (mine.unwrap(), theirs.unwrap());
                assert_eq!(mine.len(), theirs.len());
                for (a, b) in mine.iter().zip(&theirs) {
                    assert_eq!(a.exponents, b.exponents);
                    assert_eq!(a.contractions, b.contractions);
                    assert!(a.max_l() < 2 || a.kind == b.kind);
                }
            }
        }
    }

    #[test]
    fn references_are_kept_by_element() {
        let set = BasisSet::from_json(SPLIT_VALENCE, "f.json").unwrap();
        assert_eq!(set.citations().len(), 3);
        assert!(
            set.citations()[0].papers[0].ends_with("ditchfield1971a"),
            "{:?}",
            set.citations()
        );
    }

    #[test]
    fn kind_of_an_unmarked_shell() {
        let d = r#"{"angular_momentum": [2], "exponents": ["0.8"], "coefficients": [["1.0"]], "function_type": "gto"}"#;
        let oxygen = Element::from_symbol("O").unwrap();
        let plain = BasisSet::from_json(&one_shell(d), "f").unwrap();
        assert_eq!(plain.kind, FunctionKind::Cartesian);
        assert_eq!(plain.shells(oxygen, None).unwrap()[0].functions(), 6);
        let other = plain.shells(oxygen, Some(FunctionKind::Spherical)).unwrap();
        assert_eq!(other[0].functions(), 5);
        let said = one_shell(d).replace(
            r#""elements""#,
            r#""function_types": ["gto", "gto_spherical"], "elements""#,
        );
        let said = BasisSet::from_json(&said, "f").unwrap();
        assert_eq!(said.shells(oxygen, None).unwrap()[0].functions(), 5);
    }

    #[test]
    fn segmented_general_contraction_is_joined() {
        let shells = r#"
            {"angular_momentum": [0], "exponents": [9.0, 3.0, 1.0], "coefficients": [[0.2, 0.5, 0.4]]},
            {"angular_momentum": [0], "exponents": [9.0, 3.0, 1.0], "coefficients": [[-0.1, -0.2, 0.8]]},
            {"angular_momentum": [0], "exponents": [1.0], "coefficients": [[1.0]]}"#;
        let set = BasisSet::from_json(&one_shell(shells), "f").unwrap();
        let shells = set
            .shells(Element::from_symbol("O").unwrap(), None)
            .unwrap();
        assert_eq!(shells.len(), 1);
        assert_eq!(shells[0].contractions.len(), 3);
    }

    #[test]
    fn syntax_error_names_line_and_column() {
        assert_eq!(
            message("{\n  \"elements\": {,}\n}"),
            "my-set.json:2:16: not valid JSON: key must be a string"
        );
    }

    #[test]
    fn schema_errors_name_place_expectation_and_finding() {
        for (text, expected) in [
            (
                "[]",
                "my-set.json: top level: expected an object with the key 'elements', found an empty list",
            ),
            (
                "{}",
                "my-set.json: elements: expected an object keyed by atomic number, found nothing",
            ),
            (
                r#"{"elements": {"O": {}}}"#,
                "my-set.json: elements: expected atomic numbers as keys, found \"O\"",
            ),
            (
                r#"{"elements": {"92": {}}}"#,
                "my-set.json: elements: expected at least one element of H–Kr, found an object",
            ),
            (
                r#"{"elements": {"8": {}}}"#,
                "my-set.json: elements.8 (O).electron_shells: expected a list of shells, found nothing",
            ),
        ] {
            assert_eq!(message(text), expected);
        }
        let at = "my-set.json: elements.8 (O).electron_shells[0]";
        for (shell, expected) in [
            (
                r#"7"#,
                ": expected a shell with 'angular_momentum', 'exponents' and 'coefficients', found 7",
            ),
            (
                r#"{"angular_momentum": [-1], "exponents": [1], "coefficients": [[1]]}"#,
                ".angular_momentum[0]: expected a whole number from 0 (s) to 4 (g), found -1",
            ),
            (
                r#"{"angular_momentum": [0], "exponents": ["1.0", "-0.5"], "coefficients": [[1, 1]]}"#,
                ".exponents[1]: expected a positive exponent (bohr⁻²), found \"-0.5\"",
            ),
            (
                r#"{"angular_momentum": [0], "exponents": ["inf"], "coefficients": [[1]]}"#,
                ".exponents[0]: expected a positive exponent (bohr⁻²), found \"inf\"",
            ),
            (
                r#"{"angular_momentum": [0], "exponents": [1, 2], "coefficients": [[1]]}"#,
                ".coefficients[0]: expected 2 coefficients, one per exponent, found 1",
            ),
            (
                r#"{"angular_momentum": [0, 1], "exponents": [1], "coefficients": [[1]]}"#,
                ".coefficients: expected 2 contractions, one per angular momentum, found 1",
            ),
            (
                r#"{"angular_momentum": [0], "exponents": [1], "coefficients": [["x"]]}"#,
                ".coefficients[0][0]: expected a coefficient, found \"x\"",
            ),
            (
                r#"{"angular_momentum": [0], "exponents": [2, 1], "coefficients": [[0, 0]]}"#,
                ".coefficients[0]: expected a contraction with a norm above zero, found a list of 2",
            ),
            (
                r#"{"angular_momentum": [0], "exponents": [1], "coefficients": [[1]], "function_type": "sto"}"#,
                ".function_type: expected \"gto\", \"gto_cartesian\" or \"gto_spherical\", found \"sto\"",
            ),
        ] {
            assert_eq!(message(&one_shell(shell)), format!("{at}{expected}"));
        }
    }

    #[test]
    fn what_cannot_be_done_is_refused() {
        let h = r#"{"angular_momentum": [5], "exponents": [1], "coefficients": [[1]]}"#;
        assert!(message(&one_shell(h)).starts_with(
            "my-set.json: elements.8 (O).electron_shells[0].angular_momentum[0]: functions with l = 5"
        ));
        let potential = r#"{"elements": {"35": {"electron_shells": [], "ecp_electrons": 10, "ecp_potentials": [{}]}}}"#;
        assert!(message(potential).starts_with(
            "my-set.json: elements.35 (Br).ecp_potentials: effective core potentials are not available"
        ));
    }
}
