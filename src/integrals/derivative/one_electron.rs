//! Gradients of one-electron energies: derivative integrals contracted with a density on the spot.

use crate::basis::shell::{cartesian_count, cartesian_powers};
use crate::basis::{Basis, Contraction, FunctionKind};
use crate::integrals::harmonics::function_transform;
use crate::integrals::kinetic::kinetic_1d;
use crate::integrals::recurrence::{
    HermiteCoulomb, PrimitivePair, hermite_count, hermite_index, hermite_powers,
};
use nalgebra::{DMatrix, Vector3};
use rayon::prelude::*;
use std::f64::consts::PI;

/// Number of partial sums: fixed, so that the order of addition does not depend on threads.
const PARTS: usize = 64;

/// One contraction of each of two shells, with their part of the density in monomials.
struct Block<'a> {
    bra: &'a Contraction,
    ket: &'a Contraction,
    density: Vec<f64>,
}

/// Density of two contractions turned from functions to monomials, both triangles of the matrix.
fn monomial_density(
    density: &DMatrix<f64>,
    (bra, bra_kind, row): (usize, FunctionKind, usize),
    (ket, ket_kind, column): (usize, FunctionKind, usize),
    factor: f64,
) -> Vec<f64> {
    let bra = function_transform(bra, bra_kind);
    let ket = function_transform(ket, ket_kind);
    let mut out = vec![0.0; bra.monomials() * ket.monomials()];
    for f in 0..bra.functions() {
        for g in 0..ket.functions() {
            let (i, j) = (row + f, column + g);
            let value = 0.5 * factor * (density[(i, j)] + density[(j, i)]);
            for (m, cm) in bra.row(f).iter().enumerate() {
                for (n, cn) in ket.row(g).iter().enumerate() {
                    out[m * ket.monomials() + n] += value * cm * cn;
                }
            }
        }
    }
    out
}

/// Runs over primitive pairs of all shell pairs s ≥ t (those on one centre only if `one_centre`):
/// `visit(gradient, work, pair, blocks with their coefficient, (atom of s, atom of t))`.
fn accumulate<W: Default>(
    basis: &Basis,
    density: &DMatrix<f64>,
    one_centre: bool,
    (bra_raise, ket_raise): (usize, usize),
    visit: impl Fn(&mut [Vector3<f64>], &mut W, &PrimitivePair, &[(f64, &Block<'_>)], [usize; 2]) + Sync,
) -> Vec<Vector3<f64>> {
    let shells = basis.shells();
    let atoms = basis.centres().len();
    let pairs: Vec<_> = (0..shells.len())
        .flat_map(|s| (0..=s).map(move |t| (s, t)))
        .filter(|&(s, t)| one_centre || shells[s].atom != shells[t].atom)
        .collect();
    let parts: Vec<Vec<Vector3<f64>>> = (0..PARTS)
        .into_par_iter()
        .map(|part| {
            let mut gradient = vec![Vector3::zeros(); atoms];
            let mut pair = PrimitivePair::default();
            let mut work = W::default();
            for &(s, t) in pairs.iter().skip(part).step_by(PARTS) {
                let (bra, ket) = (&shells[s], &shells[t]);
                let factor = if s == t { 1.0 } else { 2.0 };
                let mut blocks = Vec::new();
                let mut row = basis.offset(s);
                for c in &bra.contractions {
                    let mut column = basis.offset(t);
                    for d in &ket.contractions {
                        let rows = (c.l, bra.kind, row);
                        let columns = (d.l, ket.kind, column);
                        blocks.push(Block {
                            bra: c,
                            ket: d,
                            density: monomial_density(density, rows, columns, factor),
                        });
                        column += d.functions(ket.kind);
                    }
                    row += c.functions(bra.kind);
                }
                for (i, &a) in bra.exponents.iter().enumerate() {
                    for (j, &b) in ket.exponents.iter().enumerate() {
                        let (bra_l, ket_l) = (bra.max_l() + bra_raise, ket.max_l() + ket_raise);
                        let places = ((a, basis.centre(s)), (b, basis.centre(t)));
                        if !pair.set(places.0, places.1, bra_l, ket_l) {
                            continue;
                        }
                        let weighted: Vec<_> = blocks
                            .iter()
                            .map(|k| (k.bra.coefficients[i] * k.ket.coefficients[j], k))
                            .filter(|(c, _)| c.abs() > 0.0)
                            .collect();
                        visit(
                            &mut gradient,
                            &mut work,
                            &pair,
                            &weighted,
                            [bra.atom, ket.atom],
                        );
                    }
                }
            }
            gradient
        })
        .collect();
    let mut gradient = vec![Vector3::zeros(); atoms];
    for part in parts {
        for (sum, value) in gradient.iter_mut().zip(part) {
            *sum += value;
        }
    }
    gradient
}

/// Gradient of the overlap or of the kinetic energy, whose integrals over primitives are products of
/// one-dimensional ones and depend on the two centres of the functions only.
fn separable(basis: &Basis, density: &DMatrix<f64>, kinetic: bool) -> Vec<Vector3<f64>> {
    let raise = (1, if kinetic { 2 } else { 0 });
    accumulate(
        basis,
        density,
        false,
        raise,
        |gradient, (): &mut (), pair, blocks, [bra_atom, ket_atom]| {
            let volume = (PI / pair.exponent()).powf(1.5);
            let mut force = Vector3::zeros();
            for (coefficient, block) in blocks {
                let mut density = block.density.iter();
                for a in cartesian_powers(block.bra.l) {
                    for (b, &d) in cartesian_powers(block.ket.l).zip(&mut density) {
                        let s = |axis: usize, i: usize| pair.hermite[axis].row(i, b[axis])[0];
                        let t = |axis: usize, i: usize| {
                            kinetic_1d(&pair.hermite[axis], pair.b, i, b[axis])
                        };
                        // d/dA x_A^i e^{−a x_A²} = (2a x_A^{i+1} − i x_A^{i−1}) e^{−a x_A²}
                        let slope = |f: &dyn Fn(usize, usize) -> f64, axis: usize| {
                            let i = a[axis];
                            let lower = if i > 0 {
                                i as f64 * f(axis, i - 1)
                            } else {
                                0.0
                            };
                            2.0 * pair.a * f(axis, i + 1) - lower
                        };
                        for axis in 0..3 {
                            let (y, z) = ((axis + 1) % 3, (axis + 2) % 3);
                            let (sy, sz) = (s(y, a[y]), s(z, a[z]));
                            let value = if kinetic {
                                slope(&t, axis) * sy * sz
                                    + slope(&s, axis) * (t(y, a[y]) * sz + sy * t(z, a[z]))
                            } else {
                                slope(&s, axis) * sy * sz
                            };
                            force[axis] += coefficient * d * value;
                        }
                    }
                }
            }
            gradient[bra_atom] += force * volume;
            gradient[ket_atom] -= force * volume;
        },
    )
}

/// Σ_ab W_ab ∂⟨a|b⟩ for every atom, per bohr; `weights` symmetric or taken as its symmetric part.
#[must_use]
pub fn overlap_gradient(basis: &Basis, weights: &DMatrix<f64>) -> Vec<Vector3<f64>> {
    separable(basis, weights, false)
}

/// Σ_ab D_ab ∂⟨a|−½∇²|b⟩ for every atom, in hartree/bohr.
#[must_use]
pub fn kinetic_gradient(basis: &Basis, density: &DMatrix<f64>) -> Vec<Vector3<f64>> {
    separable(basis, density, true)
}

/// What the attraction needs per primitive pair.
#[derive(Default)]
struct Work {
    coulomb: HermiteCoulomb,
    product: Vec<f64>,
    potential: Vec<f64>,
}

/// Σ_ab D_ab ∂⟨a|−Σ Z/|r − R||b⟩ in hartree/bohr, for every centre of the basis, charge k standing
/// on centre k (zero for ghosts).
///
/// # Panics
/// If there are not as many charges as centres.
#[must_use]
pub fn attraction_gradient(
    basis: &Basis,
    density: &DMatrix<f64>,
    charges: &[f64],
) -> Vec<Vector3<f64>> {
    assert_eq!(charges.len(), basis.centres().len());
    let powers = hermite_powers();
    accumulate(
        basis,
        density,
        true,
        (1, 0),
        |gradient, work: &mut Work, pair, blocks, [bra_atom, ket_atom]| {
            let p = pair.exponent();
            let degree = blocks
                .iter()
                .map(|(_, k)| k.bra.l + k.ket.l)
                .max()
                .unwrap_or(0);
            let (count, raised) = (hermite_count(degree), hermite_count(degree + 1));
            work.product.clear();
            work.product.resize(count, 0.0);
            for (coefficient, block) in blocks {
                expand(pair, block, |h, e| work.product[h] += coefficient * e);
            }
            work.potential.clear();
            work.potential.resize(raised, 0.0);
            let mut total = Vector3::zeros();
            for (k, &charge) in charges.iter().enumerate() {
                if charge.abs() > 0.0 {
                    let factor = -2.0 * PI / p * charge;
                    let r = pair.centre - basis.centres()[k];
                    let r = work.coulomb.compute(degree + 1, p, &r);
                    let mut force = Vector3::zeros();
                    for (&[t, u, v], e) in powers.iter().zip(&work.product) {
                        force[0] += e * r[hermite_index(t + 1, u, v)];
                        force[1] += e * r[hermite_index(t, u + 1, v)];
                        force[2] += e * r[hermite_index(t, u, v + 1)];
                    }
                    gradient[k] -= force * factor;
                    total += force * factor;
                    for (sum, r) in work.potential.iter_mut().zip(r) {
                        *sum += factor * r;
                    }
                }
            }
            let mut bra = Vector3::zeros();
            for (coefficient, block) in blocks {
                expand_slopes(pair, block, |axis, h, e| {
                    bra[axis] += coefficient * e * work.potential[h];
                });
            }
            gradient[bra_atom] += bra;
            gradient[ket_atom] += total - bra;
        },
    )
}

/// Hermite coefficients of the density of a block: `add(h, value)`.
fn expand(pair: &PrimitivePair, block: &Block<'_>, mut add: impl FnMut(usize, f64)) {
    let monomials = cartesian_count(block.ket.l);
    for (m, a) in cartesian_powers(block.bra.l).enumerate() {
        for (n, b) in cartesian_powers(block.ket.l).enumerate() {
            let place = m * monomials + n;
            let d = block.density[place];
            let [x, y, z] = std::array::from_fn(|i| pair.hermite[i].row(a[i], b[i]));
            for (t, ex) in x.iter().enumerate() {
                for (u, ey) in y.iter().enumerate() {
                    for (v, ez) in z.iter().enumerate() {
                        add(hermite_index(t, u, v), d * ex * ey * ez);
                    }
                }
            }
        }
    }
}

/// The same for the derivative of the bra functions with respect to their centre:
/// `add(axis, h, value)`.
fn expand_slopes(pair: &PrimitivePair, block: &Block<'_>, mut add: impl FnMut(usize, usize, f64)) {
    let mut density = block.density.iter();
    for a in cartesian_powers(block.bra.l) {
        for (b, &d) in cartesian_powers(block.ket.l).zip(&mut density) {
            for axis in 0..3 {
                let mut shifted = |i: usize, factor: f64| {
                    let mut raised = a;
                    raised[axis] = i;
                    let [x, y, z] = std::array::from_fn(|k| pair.hermite[k].row(raised[k], b[k]));
                    for (t, ex) in x.iter().enumerate() {
                        for (u, ey) in y.iter().enumerate() {
                            for (v, ez) in z.iter().enumerate() {
                                add(axis, hermite_index(t, u, v), factor * d * ex * ey * ez);
                            }
                        }
                    }
                };
                shifted(a[axis] + 1, 2.0 * pair.a);
                if a[axis] > 0 {
                    shifted(a[axis] - 1, -(a[axis] as f64));
                }
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::integrals::one_electron::samples;
    use crate::integrals::{attraction, kinetic, overlap};

    /// A symmetric matrix without structure.
    fn weights(n: usize) -> DMatrix<f64> {
        DMatrix::from_fn(n, n, |i, j| {
            ((i + j) as f64 * 0.7 + (i * j) as f64 * 0.31).sin()
        })
    }

    /// Five-point differences of `energy` over every coordinate of the centres.
    fn differences(basis: &Basis, energy: impl Fn(&Basis) -> f64) -> Vec<Vector3<f64>> {
        let h = 4e-3;
        (0..basis.centres().len())
            .map(|atom| {
                Vector3::from_fn(|axis, _| {
                    let at = |steps: f64| {
                        let mut centres = basis.centres().to_vec();
                        centres[atom][axis] += steps * h;
                        energy(&basis.at(&centres))
                    };
                    (8.0 * (at(1.0) - at(-1.0)) - (at(2.0) - at(-2.0))) / (12.0 * h)
                })
            })
            .collect()
    }

    fn compare(analytic: &[Vector3<f64>], numeric: &[Vector3<f64>], tolerance: f64) {
        let sum: Vector3<f64> = analytic.iter().sum();
        assert!(sum.norm() < 1e-10, "translation: {sum}");
        for (a, n) in analytic.iter().zip(numeric) {
            assert!((a - n).norm() < tolerance, "{a} {n}");
        }
    }

    #[test]
    fn gradients_match_differences() {
        for kind in [FunctionKind::Cartesian, FunctionKind::Spherical] {
            let basis = samples::mixed_basis(kind, 4);
            let w = weights(basis.len());
            // Differences err by h⁴ f⁽⁵⁾/30, up to 1e-8 of the second derivatives summed here.
            let numeric = differences(&basis, |b| overlap(b).dot(&w));
            compare(&overlap_gradient(&basis, &w), &numeric, 1e-6);
            let numeric = differences(&basis, |b| kinetic(b).dot(&w));
            compare(&kinetic_gradient(&basis, &w), &numeric, 1e-5);
            let charges = [3.0, 1.5];
            let numeric = differences(&basis, |b| {
                let charges: Vec<_> = charges
                    .into_iter()
                    .zip(b.centres().iter().copied())
                    .collect();
                attraction(b, &charges).dot(&w)
            });
            compare(&attraction_gradient(&basis, &w, &charges), &numeric, 1e-5);
        }
    }
}
