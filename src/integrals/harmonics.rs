//! From Cartesian monomials to the functions of a basis: normalised monomials and real solid harmonics.
//!
//! The recursions below are those of T. Helgaker, P. Jørgensen and J. Olsen, "Molecular
//! Electronic-Structure Theory" (Wiley, 2000), section 6.4.3 (from memory), and are checked here by
//! orthonormality and by Laplace's equation.

use crate::basis::FunctionKind;
use crate::basis::shell::{
    MAX_ANGULAR_MOMENTUM, cartesian_count, cartesian_powers, odd_double_factorial,
};
use std::sync::OnceLock;

/// Coefficients of the functions of one angular momentum in Cartesian monomials.
///
/// The monomials carry the radial part for which x^l has unit norm (see [`crate::basis::Contraction`]).
#[derive(Debug, Clone)]
pub struct FunctionTransform {
    functions: usize,
    monomials: usize,
    coefficients: Vec<f64>,
}

impl FunctionTransform {
    /// Number of functions.
    #[must_use]
    pub fn functions(&self) -> usize {
        self.functions
    }

    /// Number of monomials, (l+1)(l+2)/2.
    #[must_use]
    pub fn monomials(&self) -> usize {
        self.monomials
    }

    /// Coefficients of function `f`, in the order of [`cartesian_powers`].
    #[must_use]
    pub fn row(&self, f: usize) -> &[f64] {
        &self.coefficients[f * self.monomials..(f + 1) * self.monomials]
    }
}

/// The functions of angular momentum `l` in monomials; s and p are the same for both kinds.
///
/// # Panics
/// If `l` exceeds [`MAX_ANGULAR_MOMENTUM`].
#[must_use]
pub fn function_transform(l: usize, kind: FunctionKind) -> &'static FunctionTransform {
    static CARTESIAN: OnceLock<Vec<FunctionTransform>> = OnceLock::new();
    static SPHERICAL: OnceLock<Vec<FunctionTransform>> = OnceLock::new();
    let all = 0..=MAX_ANGULAR_MOMENTUM;
    match kind {
        FunctionKind::Spherical if l >= 2 => {
            &SPHERICAL.get_or_init(|| all.map(spherical).collect())[l]
        }
        _ => &CARTESIAN.get_or_init(|| all.map(cartesian).collect())[l],
    }
}

fn cartesian(l: usize) -> FunctionTransform {
    let n = cartesian_count(l);
    let mut coefficients = vec![0.0; n * n];
    for (m, powers) in cartesian_powers(l).enumerate() {
        let norm: f64 = powers.iter().map(|&i| odd_double_factorial(i)).product();
        coefficients[m * n + m] = (odd_double_factorial(l) / norm).sqrt();
    }
    FunctionTransform {
        functions: n,
        monomials: n,
        coefficients,
    }
}

/// A homogeneous polynomial: one coefficient per monomial of its degree.
type Polynomial = Vec<f64>;

/// `factor` · x_axis · `polynomial` of degree `l`, added to `sum` of degree l + 1.
fn add_times_axis(
    sum: &mut Polynomial,
    polynomial: &Polynomial,
    l: usize,
    axis: usize,
    factor: f64,
) {
    for (mut powers, &c) in cartesian_powers(l).zip(polynomial) {
        powers[axis] += 1;
        sum[monomial_index(powers)] += factor * c;
    }
}

/// Place of a monomial in the order of [`cartesian_powers`].
#[must_use]
pub fn monomial_index([i, j, k]: [usize; 3]) -> usize {
    let _ = i;
    let rest = j + k;
    rest * (rest + 1) / 2 + k
}

/// Real solid harmonics of degree `l`, m = −l … l, unnormalised.
fn solid_harmonics(l: usize) -> Vec<Polynomial> {
    if l == 0 {
        return vec![vec![1.0]];
    }
    let lower = solid_harmonics(l - 1);
    let at = |m: i64, degree: usize| usize::try_from(m + degree as i64).unwrap_or(0);
    let mut all = vec![vec![0.0; cartesian_count(l)]; 2 * l + 1];
    let top = l as i64;
    // S(l, ±l) from S(l−1, ±(l−1)); for l = 1 the sine partner of S(0, 0) vanishes.
    let cosine = &lower[at(top - 1, l - 1)];
    add_times_axis(&mut all[at(top, l)], cosine, l - 1, 0, 1.0);
    add_times_axis(&mut all[at(-top, l)], cosine, l - 1, 1, 1.0);
    if l > 1 {
        let sine = &lower[at(1 - top, l - 1)];
        add_times_axis(&mut all[at(top, l)], sine, l - 1, 1, -1.0);
        add_times_axis(&mut all[at(-top, l)], sine, l - 1, 0, 1.0);
    }
    for m in (1 - top)..top {
        let s = &mut all[at(m, l)];
        let z_factor = (2 * l - 1) as f64;
        add_times_axis(s, &lower[at(m, l - 1)], l - 1, 2, z_factor);
        if m.unsigned_abs() as usize + 2 <= l {
            let lowest = &solid_harmonics(l - 2)[at(m, l - 2)];
            for axis in 0..3 {
                let mut once = vec![0.0; cartesian_count(l - 1)];
                add_times_axis(&mut once, lowest, l - 2, axis, 1.0);
                add_times_axis(s, &once, l - 1, axis, -1.0);
            }
        }
        // For S/√((l+m)!(l−m)!) the recursion has no square roots:
        // (l² − m²) S(l) = (2l − 1) z S(l−1) − r² S(l−2).
        let divisor = ((top - m) * (top + m)) as f64;
        s.iter_mut().for_each(|c| *c /= divisor);
    }
    all
}

/// Overlap of two monomials of degree `l`, in units of the overlap of x^l with itself.
pub(crate) fn monomial_overlap(l: usize, a: [usize; 3], b: [usize; 3]) -> f64 {
    let mut product = 1.0;
    for axis in 0..3 {
        let power = a[axis] + b[axis];
        if power % 2 == 1 {
            return 0.0;
        }
        product *= odd_double_factorial(power / 2);
    }
    product / odd_double_factorial(l)
}

fn spherical(l: usize) -> FunctionTransform {
    let powers: Vec<_> = cartesian_powers(l).collect();
    let mut coefficients = Vec::new();
    for polynomial in solid_harmonics(l) {
        let mut norm = 0.0;
        for (a, ca) in powers.iter().zip(&polynomial) {
            for (b, cb) in powers.iter().zip(&polynomial) {
                norm += ca * cb * monomial_overlap(l, *a, *b);
            }
        }
        coefficients.extend(polynomial.iter().map(|c| c / norm.sqrt()));
    }
    FunctionTransform {
        functions: 2 * l + 1,
        monomials: powers.len(),
        coefficients,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn functions_are_normalised_and_harmonics_orthogonal() {
        for l in 0..=MAX_ANGULAR_MOMENTUM {
            for kind in [FunctionKind::Cartesian, FunctionKind::Spherical] {
                let t = function_transform(l, kind);
                let powers: Vec<_> = cartesian_powers(l).collect();
                for f in 0..t.functions() {
                    for g in 0..=f {
                        if kind == FunctionKind::Cartesian && f != g {
                            continue;
                        }
                        let mut s = 0.0;
                        for (a, ca) in powers.iter().zip(t.row(f)) {
                            for (b, cb) in powers.iter().zip(t.row(g)) {
                                s += ca * cb * monomial_overlap(l, *a, *b);
                            }
                        }
                        let expected = f64::from(u8::from(f == g));
                        assert!((s - expected).abs() < 1e-14, "l {l} {f} {g}: {s}");
                    }
                }
            }
        }
    }

    #[test]
    fn harmonics_solve_the_laplace_equation() {
        for l in 2..=MAX_ANGULAR_MOMENTUM {
            let t = function_transform(l, FunctionKind::Spherical);
            for f in 0..t.functions() {
                let mut laplacian = vec![0.0; cartesian_count(l - 2)];
                for (powers, c) in cartesian_powers(l).zip(t.row(f)) {
                    for axis in 0..3 {
                        if powers[axis] >= 2 {
                            let mut lower = powers;
                            lower[axis] -= 2;
                            let factor = (powers[axis] * (powers[axis] - 1)) as f64;
                            laplacian[monomial_index(lower)] += factor * c;
                        }
                    }
                }
                assert!(laplacian.iter().all(|c| c.abs() < 1e-13), "l {l} f {f}");
            }
        }
    }

    #[test]
    fn order_and_signs_of_d_functions() {
        // m = −2 … 2: xy, yz, 2z² − x² − y², xz, x² − y², each with a positive leading coefficient.
        let t = function_transform(2, FunctionKind::Spherical);
        let [xx, xy, xz, yy, yz, zz] = [0, 1, 2, 3, 4, 5];
        assert!(t.row(0)[xy] > 0.0 && t.row(1)[yz] > 0.0 && t.row(3)[xz] > 0.0);
        assert!((t.row(2)[zz] + 2.0 * t.row(2)[xx]).abs() < 1e-15 && t.row(2)[zz] > 0.0);
        assert!((t.row(4)[xx] + t.row(4)[yy]).abs() < 1e-15 && t.row(4)[xx] > 0.0);
    }
}
