//! Why a coordinate cannot be set.

use super::internal::CoordinateError;

/// Why a coordinate cannot be set. Atoms are labels.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum MotionError {
    /// The coordinate itself means nothing.
    #[error(transparent)]
    Coordinate(#[from] CoordinateError),
    /// No side can move by itself: a ring, or ends that are joined some other way.
    #[error(
        "{coordinate} has no side that can move by itself: {first} and {second} are {}",
        joined(.cut.as_deref(), .path)
    )]
    Joined {
        /// kind and labels
        coordinate: String,
        /// what was taken out: `the bond C1–C2`, `atom C2`; nothing if the ends of the cut are not bonded
        cut: Option<String>,
        /// label of one end
        first: String,
        /// label of the other end
        second: String,
        /// labels of the atoms between the ends on a shortest way
        path: Vec<String>,
    },
    /// The atoms asked to move hold neither end.
    #[error("the atoms that move must hold one end of {coordinate}: {first} or {second}")]
    MovesNoEnd {
        /// kind and labels
        coordinate: String,
        /// label of one end
        first: String,
        /// label of the other end
        second: String,
    },
    /// The atoms asked to move hold both ends.
    #[error(
        "the atoms that move hold both ends of {coordinate}, {first} and {second}, so it would not change"
    )]
    MovesBothEnds {
        /// kind and labels
        coordinate: String,
        /// label of one end
        first: String,
        /// label of the other end
        second: String,
    },
    /// The atoms asked to move hold the vertex or the wrong atom of the axis.
    #[error("{atom} must stay where {moving} moves, because {coordinate} turns about it")]
    MovesPivot {
        /// kind and labels
        coordinate: String,
        /// label of the atom
        atom: String,
        /// label of the end that moves
        moving: String,
    },
    /// An atom asked to move stands twice or does not exist.
    #[error("the atoms that move are listed wrongly: atom number {} {}", atom + 1, if *twice { "stands twice" } else { "does not exist" })]
    MovesList {
        /// index of the atom
        atom: usize,
        /// stands twice, or else does not exist
        twice: bool,
    },
    /// A bond length that is not positive and finite.
    #[error("a bond cannot be set to {value} bohr")]
    BondRange {
        /// bohr
        value: f64,
    },
    /// An angle outside 0–180°.
    #[error("an angle cannot be set to {value_degree}°: it lies between 0° and 180°")]
    AngleRange {
        /// degree
        value_degree: f64,
    },
    /// A dihedral that is not a finite number.
    #[error("a dihedral cannot be set to {value_degree}°")]
    DihedralRange {
        /// degree
        value_degree: f64,
    },
    /// Several coordinates that do not fit together.
    #[error(
        "the coordinates cannot be set together: after {rounds} rounds the {kind} number {} of them is still off by {off:.3e} {unit}",
        place + 1
    )]
    Contradiction {
        /// place of the coordinate in the list
        place: usize,
        /// `bond`, `angle` or `dihedral`
        kind: &'static str,
        /// how far it is off, ångström or degree
        off: f64,
        /// `angstrom` or `degree`
        unit: &'static str,
        /// how often all were set
        rounds: usize,
    },
}

fn joined(cut: Option<&str>, path: &[String]) -> String {
    let still = if cut.is_some() {
        "still joined"
    } else {
        "joined"
    };
    let through = if path.is_empty() {
        String::new()
    } else {
        format!(" through {}", path.join(", "))
    };
    let without = cut.map_or_else(String::new, |cut| format!(" when {cut} is taken out"));
    format!("{still}{through}{without}")
}

impl MotionError {
    /// How to mend it, where there is more to say than the message says.
    #[must_use]
    pub fn help(&self) -> Option<String> {
        match self {
            Self::Joined { second, .. } => Some(format!(
                "list the atoms that are to move, for example moves = [\"{second}\"]"
            )),
            Self::Coordinate(CoordinateError::Collinear { .. }) => {
                Some("take a dihedral about another axis".to_owned())
            }
            Self::Contradiction { .. } => {
                Some("set fewer coordinates, or let other atoms move with `moves`".to_owned())
            }
            _ => None,
        }
    }
}
