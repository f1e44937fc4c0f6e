//! Electron-repulsion integrals (ab|cd): the fast kernel, the packed list, and Coulomb and exchange
//! matrices from it.
//!
//! Shell pairs are prepared once per geometry ([`pairs`]), their quartets visited ([`walk`]) and evaluated
//! four at a time in vector lanes ([`quartets`]). [`RepulsionList`] keeps all unique integrals of one geometry and, when
//! atoms move, evaluates again only what touches them; [`DirectRepulsion`] keeps none.
//! Both give the same bits for any number of threads.

#[cfg(test)]
mod checks;
mod class;
mod digestion;
mod direct;
mod groups;
mod hermite;
pub(in crate::integrals) mod lanes;
mod list;
mod numbers;
mod pairs;
pub mod peak;
pub(in crate::integrals) mod primitives;
mod products;
mod quartets;
mod segments;
mod walk;

pub use digestion::{CoulombExchange, CoulombExchangePair};
pub use direct::DirectRepulsion;
pub use list::RepulsionList;

use super::screening::INTEGRAL_THRESHOLD;

/// What may be left out of the repulsion integrals.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct RepulsionSettings {
    /// Upper bound of the error of any integral, in hartree (≥ 0); see [`crate::integrals::screening`].
    pub threshold: f64,
}

impl Default for RepulsionSettings {
    fn default() -> Self {
        Self {
            threshold: INTEGRAL_THRESHOLD,
        }
    }
}

/// How many unique integrals were evaluated, and how many were taken over from the geometry before.
///
/// Integrals known to lie below the threshold count as evaluated.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct IntegralCounts {
    /// Evaluated.
    pub computed: u64,
    /// Taken over.
    pub reused: u64,
}

/// Number of unordered pairs with repetition of `n` things.
const fn pair_count(n: usize) -> usize {
    n * (n + 1) / 2
}
