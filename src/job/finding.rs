//! Findings: what a person should see before trusting a curve.

use serde::{Deserialize, Serialize};

/// The kinds of finding.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum FindingKind {
    /// The calculation did not converge: there is no energy.
    NotConverged,
    /// Near-dependent combinations of basis functions were dropped.
    NearDependentBasis,
}

impl FindingKind {
    /// The word used in files.
    #[must_use]
    pub fn word(self) -> &'static str {
        match self {
            Self::NotConverged => "not-converged",
            Self::NearDependentBasis => "near-dependent-basis",
        }
    }
}

/// One finding: its kind, the points it concerns, and a sentence that says what it means and what to do.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Finding {
    /// The kind.
    pub kind: FindingKind,
    /// Numbers of the points.
    pub points: Vec<usize>,
    /// What it means and what to do.
    pub text: String,
}
