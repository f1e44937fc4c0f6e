//! Two-electron repulsion integrals the slow and plain way.
//!
//! Every integral is Σ E^{ab} (2π^{5/2}/(pq√(p+q))) (−1)^{h'} R_{h+h'} E^{cd} over primitives
//! (L. E. McMurchie and E. R. Davidson, J. Comput. Phys. 26, 218 (1978)), nothing is screened or
//! shared. This is the yardstick of the fast kernel and meant for tests only.

use super::harmonics::function_transform;
use super::recurrence::{
    HermiteCoulomb, PrimitivePair, hermite_count, hermite_index, hermite_powers,
};
use crate::basis::Basis;
use crate::basis::shell::cartesian_powers;
use nalgebra::{DMatrix, Vector3};
use std::f64::consts::PI;

/// One primitive pair of a shell pair: rows are function pairs (second function fastest), columns
/// Hermite functions; contraction coefficients and normalisation are inside.
struct Expansion {
    exponent: f64,
    centre: Vector3<f64>,
    coefficients: DMatrix<f64>,
}

fn expansions(basis: &Basis, s: usize, t: usize) -> Vec<Expansion> {
    let (bra, ket) = (&basis.shells()[s], &basis.shells()[t]);
    let degree = bra.max_l() + ket.max_l();
    let columns = ket.functions();
    let mut pair = PrimitivePair::default();
    let mut all = Vec::new();
    for (i, &a) in bra.exponents.iter().enumerate() {
        for (j, &b) in ket.exponents.iter().enumerate() {
            let (bra_place, ket_place) = ((a, basis.centre(s)), (b, basis.centre(t)));
            if !pair.set(bra_place, ket_place, bra.max_l(), ket.max_l()) {
                continue;
            }
            let rows = bra.functions() * columns;
            let mut coefficients = DMatrix::zeros(rows, hermite_count(degree));
            let mut f = 0;
            for c in &bra.contractions {
                let bra_transform = function_transform(c.l, bra.kind);
                for f_row in 0..bra_transform.functions() {
                    let mut g = 0;
                    for d in &ket.contractions {
                        let ket_transform = function_transform(d.l, ket.kind);
                        let product = c.coefficients[i] * d.coefficients[j];
                        for g_row in 0..ket_transform.functions() {
                            let bra_monomials = cartesian_powers(c.l).zip(bra_transform.row(f_row));
                            for (m, cm) in bra_monomials {
                                for (n, cn) in cartesian_powers(d.l).zip(ket_transform.row(g_row)) {
                                    add_monomials(&pair, m, n, product * cm * cn, |h, value| {
                                        coefficients[(f * columns + g, h)] += value;
                                    });
                                }
                            }
                            g += 1;
                        }
                    }
                    f += 1;
                }
            }
            all.push(Expansion {
                exponent: pair.exponent(),
                centre: pair.centre,
                coefficients,
            });
        }
    }
    all
}

/// Hands the Hermite coefficients of the product of two monomials to `add`.
fn add_monomials(
    pair: &PrimitivePair,
    m: [usize; 3],
    n: [usize; 3],
    factor: f64,
    mut add: impl FnMut(usize, f64),
) {
    if factor.abs() > 0.0 {
        let [x, y, z] = std::array::from_fn(|i| pair.hermite[i].row(m[i], n[i]));
        for (t, ex) in x.iter().enumerate() {
            for (u, ey) in y.iter().enumerate() {
                for (v, ez) in z.iter().enumerate() {
                    add(hermite_index(t, u, v), factor * ex * ey * ez);
                }
            }
        }
    }
}

/// All integrals (ab|cd) of four shells, in hartree: functions of shell 1 slowest, of shell 4 fastest.
///
/// For tests: exact to rounding, slow.
#[must_use]
pub fn repulsion_block(basis: &Basis, [s1, s2, s3, s4]: [usize; 4]) -> Vec<f64> {
    let shells = basis.shells();
    let bra_degree = shells[s1].max_l() + shells[s2].max_l();
    let ket_degree = shells[s3].max_l() + shells[s4].max_l();
    let (bra_count, ket_count) = (hermite_count(bra_degree), hermite_count(ket_degree));
    let powers = hermite_powers();
    let bra = expansions(basis, s1, s2);
    let ket = expansions(basis, s3, s4);
    let functions = |s: usize| shells[s].functions();
    let mut block = DMatrix::zeros(functions(s1) * functions(s2), functions(s3) * functions(s4));
    let mut work = HermiteCoulomb::default();
    let mut coulomb = DMatrix::zeros(bra_count, ket_count);
    for bra in &bra {
        let mut half = DMatrix::zeros(bra_count, block.ncols());
        for ket in &ket {
            let (p, q) = (bra.exponent, ket.exponent);
            let alpha = p * q / (p + q);
            let r = work.compute(bra_degree + ket_degree, alpha, &(bra.centre - ket.centre));
            let factor = 2.0 * PI.powf(2.5) / (p * q * (p + q).sqrt());
            for (h, a) in powers[..bra_count].iter().enumerate() {
                for (k, b) in powers[..ket_count].iter().enumerate() {
                    let sign = 1.0 - 2.0 * (b.iter().sum::<usize>() % 2) as f64;
                    let sum = hermite_index(a[0] + b[0], a[1] + b[1], a[2] + b[2]);
                    coulomb[(h, k)] = sign * factor * r[sum];
                }
            }
            half += &coulomb * ket.coefficients.transpose();
        }
        block += &bra.coefficients * half;
    }
    // Row-major: nalgebra stores columns.
    block.transpose().as_slice().to_vec()
}

/// All integrals of a basis as the packed list described in [`crate::integrals`]. For tests.
#[must_use]
pub fn repulsion_list(basis: &Basis) -> Vec<f64> {
    let pair = |a: usize, b: usize| a.max(b) * (a.max(b) + 1) / 2 + a.min(b);
    let pairs = basis.len() * (basis.len() + 1) / 2;
    let mut list = vec![0.0; pairs * (pairs + 1) / 2];
    let shells = basis.shells().len();
    for s1 in 0..shells {
        for s2 in 0..=s1 {
            for s3 in 0..=s1 {
                for s4 in 0..=(if s3 == s1 { s2 } else { s3 }) {
                    let block = repulsion_block(basis, [s1, s2, s3, s4]);
                    let mut values = block.iter();
                    for a in basis.range(s1) {
                        for b in basis.range(s2) {
                            for c in basis.range(s3) {
                                for (d, value) in basis.range(s4).zip(&mut values) {
                                    list[pair(pair(a, b), pair(c, d))] = *value;
                                }
                            }
                        }
                    }
                }
            }
        }
    }
    list
}

#[cfg(test)]
mod tests {
    use super::super::attraction::attraction;
    use super::super::one_electron::samples;
    use super::super::values::basis_values;
    use super::*;
    use crate::basis::{Contraction, FunctionKind, Shell};
    use nalgebra::Rotation3;

    fn primitive(atom: usize, l: usize, exponent: f64, kind: FunctionKind) -> Shell {
        Shell {
            atom,
            exponents: vec![exponent],
            contractions: vec![Contraction::normalised(l, &[exponent], &[1.0])],
            kind,
        }
    }

    #[test]
    fn val_two_charge_clouds_closed_form() {
        // Normalised spherical Gaussian charges with exponents p and q at distance R repel with
        // erf(√(pq/(p+q)) R)/R; at R = 0 with 2 √(pq/(p+q)/π).
        let shells = vec![
            primitive(0, 0, 0.6, FunctionKind::Cartesian),
            primitive(1, 0, 0.45, FunctionKind::Cartesian),
        ];
        let basis = Basis::new(shells, vec![Vector3::zeros(), Vector3::new(0.0, 0.0, 20.0)]);
        let far = repulsion_block(&basis, [0, 0, 1, 1])[0];
        assert!(
            (far - 1.0 / 20.0).abs() < 1e-15,
            "erf(14) = 1 to 1e-85: {far}"
        );
        let own = repulsion_block(&basis, [0, 0, 0, 0])[0];
        assert!((own - 2.0 * (0.6 / PI).sqrt()).abs() < 1e-14);
    }

    #[test]
    fn matches_integration_over_a_potential() {
        let kind = FunctionKind::Spherical;
        let mut shells = vec![
            primitive(0, 2, 0.9, kind),
            primitive(1, 1, 0.7, kind),
            primitive(1, 0, 0.8, kind),
            primitive(0, 3, 1.0, kind),
        ];
        // A second contraction, so that general contraction is covered.
        shells[2].exponents = vec![0.8, 1.4];
        shells[2].contractions = vec![
            Contraction::normalised(0, &[0.8, 1.4], &[0.5, 0.6]),
            Contraction::normalised(1, &[0.8, 1.4], &[0.9, -0.2]),
        ];
        let centres = vec![Vector3::new(0.0, 0.1, -0.2), Vector3::new(0.3, -0.4, 0.5)];
        let bra = Basis::new(shells[..2].to_vec(), centres.clone());
        let ket = Basis::new(shells[2..].to_vec(), centres.clone());
        let all = Basis::new(shells, centres);
        let block = repulsion_block(&all, [0, 1, 2, 3]);
        let columns = ket.range(0).len() * ket.range(1).len();
        let mut sums = vec![0.0; block.len()];
        let step = 0.3;
        let count = 17;
        for i in -count..=count {
            for j in -count..=count {
                for k in -count..=count {
                    let point = Vector3::new(f64::from(i), f64::from(j), f64::from(k)) * step;
                    let values = basis_values(&bra, &point);
                    if values.abs().max() < 1e-9 {
                        continue;
                    }
                    let potential = attraction(&ket, &[(-step.powi(3), point)]);
                    for a in bra.range(0) {
                        for b in bra.range(1) {
                            let ab = a * bra.range(1).len() + b - bra.range(1).start;
                            let mut place = ab * columns;
                            for c in ket.range(0) {
                                for d in ket.range(1) {
                                    sums[place] += values[a] * values[b] * potential[(c, d)];
                                    place += 1;
                                }
                            }
                        }
                    }
                }
            }
        }
        let largest = block.iter().fold(0.0f64, |m, v| m.max(v.abs()));
        for (value, sum) in block.iter().zip(&sums) {
            assert!(
                (value - sum).abs() < 1e-9 * (1.0 + largest),
                "{value} {sum}"
            );
        }
    }

    #[test]
    fn norm_of_a_block_of_harmonics_is_invariant_under_rotation() {
        let kind = FunctionKind::Spherical;
        let shells = (1..=4)
            .map(|l| primitive(l - 1, l, 0.4 + 0.2 * l as f64, kind))
            .collect();
        let centres = [
            [0.1, 0.2, 0.3],
            [1.0, -0.5, 0.2],
            [-0.3, 0.8, -0.9],
            [0.5, 0.5, 1.5],
        ];
        let basis = Basis::new(shells, centres.iter().map(|c| Vector3::from(*c)).collect());
        let rotation = Rotation3::from_euler_angles(0.4, -1.1, 2.3);
        let shift = Vector3::new(3.0, -7.0, 1.0);
        let moved: Vec<_> = basis
            .centres()
            .iter()
            .map(|c| rotation * c + shift)
            .collect();
        let norm = |basis: &Basis, quartet| -> f64 {
            repulsion_block(basis, quartet)
                .iter()
                .map(|v| v * v)
                .sum::<f64>()
                .sqrt()
        };
        for quartet in [[0, 1, 2, 3], [3, 3, 3, 3], [3, 0, 2, 2]] {
            let (here, there) = (norm(&basis, quartet), norm(&basis.at(&moved), quartet));
            assert!(
                (here - there).abs() < 1e-12 * here,
                "{quartet:?} {here} {there}"
            );
        }
    }

    #[test]
    fn blocks_have_the_symmetry_of_the_indices() {
        let basis = samples::mixed_basis(FunctionKind::Cartesian, 2);
        let sizes = [1, 2, 5, 6].map(|s| basis.range(s).len());
        let [n1, n2, n3, n4] = sizes;
        let block = repulsion_block(&basis, [1, 2, 5, 6]);
        let swapped = repulsion_block(&basis, [6, 5, 2, 1]);
        for a in 0..n1 {
            for b in 0..n2 {
                for c in 0..n3 {
                    for d in 0..n4 {
                        let here = block[((a * n2 + b) * n3 + c) * n4 + d];
                        let there = swapped[((d * n3 + c) * n2 + b) * n1 + a];
                        assert!((here - there).abs() < 1e-14);
                    }
                }
            }
        }
    }
}
