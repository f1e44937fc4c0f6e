//! Findings: what a person should see before trusting a curve.

use serde::{Deserialize, Serialize};

/// The kinds of finding.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum FindingKind {
    /// The calculation did not converge: there is no energy.
    NotConverged,
    /// The electronic state changes between two neighbouring points.
    StateJump,
    /// Different ways to a point led to different solutions.
    Hysteresis,
    /// The solution is not the lowest of its kind, or of a less restricted kind.
    Unstable,
    /// ⟨S²⟩ is well above that of a pure spin state.
    SpinContaminated,
    /// The highest occupied and the lowest empty orbital come close.
    SmallGap,
    /// The energy is flat along some rotation of orbitals, and less exact than asked for.
    SoftMode,
    /// Near-dependent combinations of basis functions were dropped.
    NearDependentBasis,
    /// The lowest states of the separated parts cannot be reached by one determinant of the molecule's spin.
    UnreachableParts,
}

impl FindingKind {
    /// The word used in files.
    #[must_use]
    pub fn word(self) -> &'static str {
        match self {
            Self::NotConverged => "not-converged",
            Self::StateJump => "state-jump",
            Self::Hysteresis => "hysteresis",
            Self::Unstable => "unstable",
            Self::SpinContaminated => "spin-contaminated",
            Self::SmallGap => "small-gap",
            Self::SoftMode => "soft-mode",
            Self::NearDependentBasis => "near-dependent-basis",
            Self::UnreachableParts => "unreachable-parts",
        }
    }

    /// Whether it casts doubt on a single point's place on the curve, so that the point is ringed on figures. Spin
    /// contamination, soft modes, an instability that the method was asked to ignore and a limit out of reach belong to
    /// whole regions.
    #[must_use]
    pub fn is_ringed(self) -> bool {
        !matches!(
            self,
            Self::SpinContaminated | Self::SoftMode | Self::Unstable | Self::UnreachableParts
        )
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
