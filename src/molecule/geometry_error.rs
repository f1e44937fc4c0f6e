//! What can be wrong in a geometry given as text, and where.

use std::ops::Range;

/// One mistake and the bytes of the text it concerns.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[error("{problem}")]
pub struct GeometryError {
    /// Byte range inside the text that was read.
    pub span: Range<usize>,
    /// What is wrong.
    pub problem: GeometryProblem,
}

impl GeometryError {
    /// How to mend it, where there is more to say than the message says.
    #[must_use]
    pub fn help(&self) -> Option<String> {
        self.problem.help()
    }
}

/// The mistakes themselves.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum GeometryProblem {
    /// No atom at all.
    #[error("there is no atom")]
    NoAtoms,
    /// A label that does not begin with an element.
    #[error("`{label}` does not begin with the symbol of an element from H to Kr")]
    UnknownElement {
        /// as written
        label: String,
    },
    /// Capitals that allow two readings.
    #[error("`{label}` can be read as {pair} or as {single}")]
    AmbiguousElement {
        /// as written
        label: String,
        /// symbol of two letters
        pair: &'static str,
        /// symbol of one letter
        single: &'static str,
    },
    /// A sign that a label cannot hold.
    #[error(
        "`{label}` holds `{sign}`; a label is a symbol followed by letters, digits and underscores"
    )]
    LabelSign {
        /// as written
        label: String,
        /// the first sign that does not belong
        sign: char,
    },
    /// One label for two atoms.
    #[error("the label `{label}` is already taken by atom number {first}")]
    DuplicateLabel {
        /// as written
        label: String,
        /// number of the atom that has it, from 1
        first: usize,
    },
    /// A row with too few or too many words.
    #[error("row {row} has {found} words, but needs {expected}: {form}")]
    WordCount {
        /// number of the row, from 1
        row: usize,
        /// words found
        found: usize,
        /// words needed
        expected: usize,
        /// what the words are
        form: &'static str,
    },
    /// A word where a number should be.
    #[error("`{word}` is not a number (expected {what})")]
    NotANumber {
        /// as written
        word: String,
        /// what the number is
        what: &'static str,
    },
    /// A length that is not positive.
    #[error("a distance must be positive, not {value}")]
    DistanceRange {
        /// as written
        value: f64,
    },
    /// An angle outside 0–180°.
    #[error("an angle lies between 0° and 180°, so {value} cannot be one")]
    AngleRange {
        /// degree
        value: f64,
    },
    /// A reference to no atom.
    #[error("`{label}` is not the label of an earlier row")]
    UnknownReference {
        /// as written
        label: String,
        /// labels of the rows above
        known: Vec<String>,
    },
    /// A reference to a row further down, or to its own row.
    #[error("`{label}` is placed {}, but a row can only refer to rows above it", if *own { "by this row itself" } else { "further down" })]
    LaterReference {
        /// as written
        label: String,
        /// the row itself, or one further down
        own: bool,
    },
    /// One atom referred to twice in one row.
    #[error(
        "`{label}` is already a reference of this row; distance, angle and dihedral need different atoms"
    )]
    RepeatedReference {
        /// as written
        label: String,
    },
    /// References of a row on one line.
    #[error("`{label}` cannot be placed: {}, {} and {} are on one line, so the dihedral is undefined", .references[0], .references[1], .references[2])]
    CollinearReferences {
        /// label of the atom to place
        label: String,
        /// labels of its references
        references: [String; 3],
    },
    /// References of a row on one spot.
    #[error("`{label}` cannot be placed: {} and {} are on one spot, so the angle is undefined", .references[0], .references[1])]
    CoincidentReferences {
        /// label of the atom to place
        label: String,
        /// labels of its first two references
        references: [String; 2],
    },
    /// The first line of an XYZ file is not a count.
    #[error("the first line of an XYZ file is the number of atoms, not `{found}`")]
    XyzCount {
        /// as written
        found: String,
    },
    /// Fewer rows than announced.
    #[error("the file announces {announced} atoms but holds {found}")]
    XyzTooFewRows {
        /// count on the first line
        announced: usize,
        /// rows found
        found: usize,
    },
    /// Text after the last announced row.
    #[error("the file announces {announced} atoms but goes on after row {announced}")]
    XyzTooManyRows {
        /// count on the first line
        announced: usize,
    },
    /// A second geometry.
    #[error("the file holds more than one geometry; a molecule needs exactly one")]
    XyzSecondFrame,
}

impl GeometryProblem {
    /// How to mend it, where there is more to say than the message says.
    #[must_use]
    pub fn help(&self) -> Option<String> {
        match self {
            Self::UnknownElement { .. } => {
                Some("a label is a symbol and anything that tells atoms apart, such as O, H1, Cl2, C_a".to_owned())
            }
            Self::AmbiguousElement {
                label,
                pair,
                single,
            } => Some(format!(
                "write `{pair}{}` or `{single}_{}`",
                &label[2..],
                &label[1..]
            )),
            Self::DuplicateLabel { label, .. } => {
                let symbol = label.trim_end_matches(|c: char| c.is_ascii_digit());
                Some(format!("number the atoms: {symbol}1, {symbol}2, …"))
            }
            Self::UnknownReference { known, .. } if !known.is_empty() => {
                Some(format!("the rows above are {}", known.join(", ")))
            }
            Self::CollinearReferences { .. } => Some(
                "refer to another atom that is off the line, or write this row before the atoms that make the line"
                    .to_owned(),
            ),
            Self::XyzSecondFrame => Some("keep one frame of the file".to_owned()),
            _ => None,
        }
    }
}
