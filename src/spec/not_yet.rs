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
const NOT_YET: &[Feature] = &[];

impl Feature {
    /// How it is written in a spec, and what works instead.
    fn words(self) -> (&'static str, &'static str) {
        match self {
            Self::SeedExtrapolated => ("seed = \"extrapolated\"", "seed = \"previous\" works"),
            Self::PassesBoth => ("passes = \"both\"", "passes = \"one\" works"),
            Self::OthersOptimised => ("others = \"optimised\"", "others = \"fixed\" works"),
            Self::StateFollow => ("state = \"follow\"", "state = \"lowest\" works"),
            Self::Stability => ("stability = true", "stability = false works"),
            Self::Dissociation => ("[dissociation]", "leave the table out"),
            Self::Fit => ("[[fit]]", "leave the table out"),
            Self::Vibration => ("[vibration]", "leave the table out"),
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

#[cfg(test)]
mod tests {
    use super::*;
    use crate::spec::parse;
    use std::path::Path;

    const MOLECULE_AND_LEVEL: &str = "molecule = { cartesian = \"H 0 0 0\\nF 0 0 0.9\" }\nlevel = [{ method = \"rhf\", basis = \"sto-3g\" }]\n";

    #[test]
    fn what_is_not_built_is_refused_in_those_words_and_the_rest_is_taken() {
        let features = [
            (Feature::SeedExtrapolated, "walk.seed = \"extrapolated\""),
            (Feature::PassesBoth, "walk.passes = \"both\""),
            (Feature::OthersOptimised, "walk.others = \"optimised\""),
            (Feature::StateFollow, "walk.state = \"follow\""),
            (Feature::Stability, "walk.stability = true"),
            (
                Feature::Dissociation,
                "dissociation.parts = [{ atoms = [\"H\"] }, { atoms = [\"F\"] }]",
            ),
            (
                Feature::Fit,
                "sweep = [{ bond = [\"H\", \"F\"], values = [1] }]\nfit = [{ form = \"morse\" }]",
            ),
            (Feature::Vibration, "vibration.states = 3"),
            (Feature::Gradients, "output.gradients = true"),
        ];
        for (feature, asked) in features {
            let text = format!("{MOLECULE_AND_LEVEL}{asked}\n");
            match parse(&text, Path::new("a.toml")) {
                Ok(_) => assert!(feature.is_built(), "{feature:?}"),
                Err(errors) => {
                    assert!(!feature.is_built(), "{feature:?}: {errors}");
                    assert_eq!(errors.0.len(), 1, "{errors}");
                    let message = &errors.0[0].message;
                    assert!(message.starts_with("this version cannot do"), "{message}");
                }
            }
        }
    }

    #[test]
    fn the_defaults_are_built() {
        let spec = parse(MOLECULE_AND_LEVEL, Path::new("a.toml")).expect("sound");
        assert_eq!(spec.walk, default_walk());
        let again = parse(&spec.text, Path::new("b.toml")).expect("sound");
        assert_eq!(again.walk, spec.walk);
    }
}
