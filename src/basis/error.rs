//! What can be wrong with a basis set.

use crate::elements::Element;

/// An element that a set does not cover, and the built-in sets that do.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct MissingElement {
    /// The element.
    pub element: Element,
    /// Names of built-in sets that cover it.
    pub covered_by: Vec<&'static str>,
}

impl std::fmt::Display for MissingElement {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        write!(f, "{}", self.element.symbol())?;
        if self.covered_by.is_empty() {
            write!(f, " (no built-in set has it)")
        } else {
            write!(f, " (covered by {})", self.covered_by.join(", "))
        }
    }
}

/// Why a basis set cannot be used.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum BasisError {
    /// No built-in set of that name.
    #[error("no basis set is called '{name}'; did you mean '{nearest}'? Known: {}", .known.join(", "))]
    UnknownSet {
        /// name asked for
        name: String,
        /// the most similar name there is
        nearest: &'static str,
        /// all names
        known: &'static [&'static str],
    },
    /// The molecule has elements that the set does not cover.
    #[error("basis set {set} has no functions for {}",
        .missing.iter().map(ToString::to_string).collect::<Vec<_>>().join("; "))]
    MissingElements {
        /// name of the set
        set: String,
        /// every element it lacks
        missing: Vec<MissingElement>,
    },
    /// A basis file is not JSON at all.
    #[error("{origin}:{line}:{column}: not valid JSON: {problem}")]
    Syntax {
        /// file name
        origin: String,
        /// line, from 1
        line: usize,
        /// column, from 1
        column: usize,
        /// what the parser says
        problem: String,
    },
    /// A basis file does not follow the schema.
    #[error("{origin}: {path}: expected {expected}, found {found}")]
    Schema {
        /// file name
        origin: String,
        /// place inside the JSON, such as `elements.8 (O).electron_shells[2].exponents[0]`
        path: String,
        /// what should stand there
        expected: String,
        /// what stands there
        found: String,
    },
    /// A basis file asks for something that cannot be done.
    #[error("{origin}: {path}: {problem}")]
    Unsupported {
        /// file name
        origin: String,
        /// place inside the JSON
        path: String,
        /// what cannot be done, and what to do instead
        problem: String,
    },
    /// An embedded data file is damaged; a fault of the build, not of the input.
    #[error("embedded basis data '{set}', line {line}: {problem}")]
    Embedded {
        /// name of the set
        set: &'static str,
        /// line, from 1
        line: usize,
        /// what is wrong
        problem: String,
    },
}
