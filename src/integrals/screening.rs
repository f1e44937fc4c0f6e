//! Bounds by which integrals and primitives are left out, and the error that this allows.
//!
//! The Coulomb energy is a scalar product of charge distributions, so
//! |(ρ|σ)| ≤ ‖ρ‖ ‖σ‖ with ‖ρ‖ = √(ρ|ρ) (J. L. Whitten, J. Chem. Phys. 58, 4496 (1973)).
//! - A shell quartet is left out when the norms of its pairs, exact from the integrals (ab|ab),
//!   multiply to less than the threshold: every integral of it is below the threshold.
//! - Inside a quartet that is kept, primitives are left out only while the norms of all that is left
//!   out of the bra primitive's row sum to less than the threshold divided by the number of bra
//!   primitives. Here the norm of a primitive pair is the sum of the norms of its Hermite parts,
//!   a true upper bound. The error of an integral is below the threshold.
//! - Primitive pairs too small for any partner are never stored ([`PRIMITIVE_FLOOR`]).

use super::recurrence::{hermite_count, hermite_powers};
use crate::basis::shell::odd_double_factorial;
use std::sync::OnceLock;

/// Default threshold, hartree.
pub const INTEGRAL_THRESHOLD: f64 = 1e-12;

/// A primitive pair is dropped when its norm times the largest norm of any pair of the basis is below
/// this. A thousand such products change an integral by 1e-14.
pub const PRIMITIVE_FLOOR: f64 = 1e-17;

/// √(Λ_t|Λ_t) in units of p^(|t|/2) √(Λ_0|Λ_0), in Hermite order up to a pair of g functions.
///
/// (Λ_t|Λ_t) = (−1)^|t| R_2t, and at distance zero R_2t is (−2α)^|t| F_|t|(0) Π(2t_i − 1)!! with
/// α = p/2.
pub(crate) fn hermite_norms() -> &'static [f64] {
    static NORMS: OnceLock<Vec<f64>> = OnceLock::new();
    NORMS.get_or_init(|| {
        hermite_powers()[..hermite_count(8)]
            .iter()
            .map(|t| {
                let degree: usize = t.iter().sum();
                let product: f64 = t.iter().map(|&i| odd_double_factorial(i)).product();
                (product / (2 * degree + 1) as f64).sqrt()
            })
            .collect()
    })
}
