//! Contracted Gaussian shells: exponents, coefficients, normalisation.

use std::f64::consts::PI;

/// Highest angular momentum of a basis function: g.
pub const MAX_ANGULAR_MOMENTUM: usize = 4;

/// Cartesian functions or real solid harmonics, for d and higher.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum FunctionKind {
    /// (l+1)(l+2)/2 monomials
    Cartesian,
    /// 2l+1 real solid harmonics
    Spherical,
}

/// One contraction of a shell: an angular momentum and a coefficient for every exponent.
#[derive(Debug, Clone, PartialEq)]
pub struct Contraction {
    /// Angular momentum l.
    pub l: usize,
    /// Coefficients of *unnormalised* primitives x^i y^j z^k exp(−αr²), scaled so that the
    /// contracted function with the monomial x^l has unit norm.
    pub coefficients: Vec<f64>,
}

/// A shell: contractions that share one centre and one set of exponents.
///
/// An sp shell has an s and a p contraction; a generally contracted shell has several of one l.
#[derive(Debug, Clone, PartialEq)]
pub struct Shell {
    /// Index of the atom that carries the shell.
    pub atom: usize,
    /// Gaussian exponents in bohr⁻², all positive.
    pub exponents: Vec<f64>,
    /// The contractions, in the order of their functions.
    pub contractions: Vec<Contraction>,
    /// Kind of the functions with l ≥ 2 (s and p are the same either way).
    pub kind: FunctionKind,
}

/// Number of Cartesian monomials of degree `l`.
#[must_use]
pub const fn cartesian_count(l: usize) -> usize {
    (l + 1) * (l + 2) / 2
}

/// Powers (i, j, k) of the monomials of degree `l`: x^l first, z^l last (xx, xy, xz, yy, yz, zz).
pub fn cartesian_powers(l: usize) -> impl Iterator<Item = [usize; 3]> {
    (0..=l).flat_map(move |rest| (0..=rest).map(move |k| [l - rest, rest - k, k]))
}

/// (2n − 1)!! with (−1)!! = 1.
#[must_use]
pub fn odd_double_factorial(n: usize) -> f64 {
    (1..=n).map(|i| (2 * i - 1) as f64).product()
}

/// ∫ x^(2l) exp(−pr²) dV, the overlap of two unnormalised x^l primitives on one centre with
/// exponents adding to `p`.
#[must_use]
pub fn one_centre_overlap(l: usize, p: f64) -> f64 {
    odd_double_factorial(l) / (2.0 * p).powi(l as i32) * (PI / p).powf(1.5)
}

impl Contraction {
    /// Builds a contraction from tabulated coefficients, which multiply *normalised* primitives, and
    /// scales it to unit norm.
    #[must_use]
    pub fn normalised(l: usize, exponents: &[f64], tabulated: &[f64]) -> Self {
        let mut coefficients: Vec<f64> = exponents
            .iter()
            .zip(tabulated)
            .map(|(&a, &c)| c / one_centre_overlap(l, 2.0 * a).sqrt())
            .collect();
        let mut norm = 0.0;
        for (&a, &c) in exponents.iter().zip(&coefficients) {
            for (&b, &d) in exponents.iter().zip(&coefficients) {
                norm += c * d * one_centre_overlap(l, a + b);
            }
        }
        let scale = 1.0 / norm.sqrt();
        coefficients.iter_mut().for_each(|c| *c *= scale);
        Self { l, coefficients }
    }

    /// Number of functions of this contraction.
    #[must_use]
    pub fn functions(&self, kind: FunctionKind) -> usize {
        match kind {
            FunctionKind::Spherical if self.l >= 2 => 2 * self.l + 1,
            _ => cartesian_count(self.l),
        }
    }
}

impl Shell {
    /// Number of functions of all contractions.
    #[must_use]
    pub fn functions(&self) -> usize {
        self.contractions
            .iter()
            .map(|c| c.functions(self.kind))
            .sum()
    }

    /// Highest angular momentum in the shell.
    #[must_use]
    pub fn max_l(&self) -> usize {
        self.contractions.iter().map(|c| c.l).max().unwrap_or(0)
    }
}
