//! What the spec's words can ask for but this version cannot do yet, and the defaults that follow from it.
//!
//! Taking a line out of [`NOT_YET`] is all it takes to switch a feature on: it is then accepted, and becomes the
//! default where it is the default of its settings.

use super::diagnostic::Problems;
use crate::scan::{Passes, SeedKind, WalkSettings};
use std::ops::Range;

/// Something that a spec may ask for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Feature {
    SeedExtrapolated,
    PassesBoth,
    OthersOptimised,
    StateFollow,
    Stability,
    Dissociation,
    Fit,
    Vibration,
    Gradients,
}

/// The features that are not built.
const NOT_YET: &[Feature] = &[
    Feature::OthersOptimised,
    Feature::Dissociation,
    Feature::Fit,
    Feature::Vibration,
    Feature::Gradients,
];

impl Feature {
    /// How it is written in a spec, and what works instead.
    fn words(self) -> (&'static str, &'static str) {
        match self {
            Self::SeedExtrapolated => ("seed = \"extrapolated\"", "seed = \"previous\" works"),
            Self::PassesBoth => ("passes = \"both\"", "passes = \"one\" works"),
            Self::OthersOptimised => ("others = \"optimised\"", "others = \"fixed\" works"),
            Self::StateFollow => ("state = \"follow\"", "state = \"lowest\" works"),
            Self::Stability => ("stability = true", "stability = false works"),
            Self::Dissociation => ("a [dissociation] table", "leave the table out"),
            Self::Fit => ("a [[fit]] table", "leave the table out"),
            Self::Vibration => ("a [vibration] table", "leave the table out"),
            Self::Gradients => ("gradients = true", "gradients = false works"),
        }
    }

    /// Whether this version has it.
    pub(super) fn is_built(self) -> bool {
        !NOT_YET.contains(&self)
    }

    /// Records the refusal if the feature is not built.
    pub(super) fn demand(self, span: &Range<usize>, problems: &mut Problems<'_>) {
        if !self.is_built() {
            let (written, instead) = self.words();
            problems
                .at(span, format!("this version cannot do {written} yet"))
                .hint(instead);
        }
    }
}

/// The defaults of `[walk]` among what is built.
pub(super) fn default_walk() -> WalkSettings {
    let mut walk = WalkSettings::default();
    if !Feature::SeedExtrapolated.is_built() {
        walk.seed = SeedKind::Previous;
    }
    if !Feature::PassesBoth.is_built() {
        walk.passes = Passes::One;
    }
    walk.stability &= Feature::Stability.is_built();
    walk
}
