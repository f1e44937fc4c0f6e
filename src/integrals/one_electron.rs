//! The loop over shell pairs and primitives that all one-electron integrals share.

use crate::basis::shell::cartesian_count;
use crate::basis::{Basis, Contraction, FunctionKind, Shell};
use crate::integrals::harmonics::function_transform;
use crate::integrals::recurrence::PrimitivePair;
use nalgebra::{DMatrix, Vector3};
use rayon::prelude::*;

/// What is integrated between two primitives.
pub(crate) trait Operator: Sync {
    /// What is the same for all angular momenta of a primitive pair.
    type Prepared: Default;

    /// Number of matrices.
    fn components(&self) -> usize;

    /// How much higher than the ket's angular momentum the expansion must reach.
    const KET_RAISE: usize;

    /// Fills `prepared` for a pair whose angular momenta add up to at most `degree`.
    fn prepare(&self, pair: &PrimitivePair, degree: usize, prepared: &mut Self::Prepared);

    /// Adds `coefficient` × the integrals over the monomials of degrees `bra_l` and `ket_l` to
    /// `out`: components slowest, ket monomials fastest.
    fn add(
        &self,
        pair: &PrimitivePair,
        prepared: &Self::Prepared,
        bra_l: usize,
        ket_l: usize,
        coefficient: f64,
        out: &mut [f64],
    );
}

/// Integrals between two shells: one row-major block (bra functions × ket functions) per component.
fn shell_block<O: Operator>(
    operator: &O,
    (bra, bra_centre): (&Shell, &Vector3<f64>),
    (ket, ket_centre): (&Shell, &Vector3<f64>),
) -> Vec<f64> {
    let mut monomials: Vec<Vec<f64>> = pairs_of(bra, ket)
        .map(|(c, d)| {
            vec![0.0; operator.components() * cartesian_count(c.l) * cartesian_count(d.l)]
        })
        .collect();
    let mut pair = PrimitivePair::default();
    let mut prepared = O::Prepared::default();
    let (bra_l, ket_l) = (bra.max_l(), ket.max_l());
    for (i, &a) in bra.exponents.iter().enumerate() {
        for (j, &b) in ket.exponents.iter().enumerate() {
            let ket_power = ket_l + O::KET_RAISE;
            if !pair.set((a, bra_centre), (b, ket_centre), bra_l, ket_power) {
                continue;
            }
            operator.prepare(&pair, bra_l + ket_l, &mut prepared);
            for ((c, d), out) in pairs_of(bra, ket).zip(&mut monomials) {
                let coefficient = c.coefficients[i] * d.coefficients[j];
                if coefficient.abs() > 0.0 {
                    operator.add(&pair, &prepared, c.l, d.l, coefficient, out);
                }
            }
        }
    }
    let columns = ket.functions();
    let size = bra.functions() * columns;
    let mut block = vec![0.0; operator.components() * size];
    let mut monomials = monomials.iter();
    let mut row = 0;
    for c in &bra.contractions {
        let mut column = 0;
        for (d, values) in ket.contractions.iter().zip(&mut monomials) {
            let values_of_one = cartesian_count(c.l) * cartesian_count(d.l);
            for component in 0..operator.components() {
                transform(
                    (c.l, bra.kind),
                    (d.l, ket.kind),
                    &values[component * values_of_one..],
                    &mut block[component * size + row * columns + column..],
                    columns,
                );
            }
            column += d.functions(ket.kind);
        }
        row += c.functions(bra.kind);
    }
    block
}

fn pairs_of<'a>(
    bra: &'a Shell,
    ket: &'a Shell,
) -> impl Iterator<Item = (&'a Contraction, &'a Contraction)> {
    bra.contractions
        .iter()
        .flat_map(|c| ket.contractions.iter().map(move |d| (c, d)))
}

/// Monomials to functions on both sides.
fn transform(
    bra: (usize, FunctionKind),
    ket: (usize, FunctionKind),
    monomials: &[f64],
    out: &mut [f64],
    stride: usize,
) {
    let bra = function_transform(bra.0, bra.1);
    let ket = function_transform(ket.0, ket.1);
    let n = ket.monomials();
    let mut half = vec![0.0; n];
    for f in 0..bra.functions() {
        half.fill(0.0);
        for (m, &c) in bra.row(f).iter().enumerate() {
            for (h, v) in half.iter_mut().zip(&monomials[m * n..]) {
                *h += c * v;
            }
        }
        for g in 0..ket.functions() {
            out[f * stride + g] = ket.row(g).iter().zip(&half).map(|(c, h)| c * h).sum();
        }
    }
}

/// Symmetric matrices of an operator in one basis.
pub(crate) fn symmetric_matrices<O: Operator>(operator: &O, basis: &Basis) -> Vec<DMatrix<f64>> {
    let mut matrices = vec![DMatrix::zeros(basis.len(), basis.len()); operator.components()];
    renew_symmetric(operator, basis, |_, _| true, &mut matrices);
    matrices
}

/// Evaluates the elements of symmetric matrices anew that belong to the `wanted` pairs of shells (first index not the
/// smaller). Every element has the bits that [`symmetric_matrices`] gives it.
pub(crate) fn renew_symmetric<O: Operator>(
    operator: &O,
    basis: &Basis,
    wanted: impl Fn(usize, usize) -> bool,
    matrices: &mut [DMatrix<f64>],
) {
    let pairs: Vec<_> = (0..basis.shells().len())
        .flat_map(|s| (0..=s).map(move |t| (s, t)))
        .filter(|&(s, t)| wanted(s, t))
        .collect();
    place_blocks(operator, basis, basis, &pairs, |component, i, j, value| {
        matrices[component][(i, j)] = value;
        matrices[component][(j, i)] = value;
    });
}

/// Matrices of an operator between two bases (rows: bra functions).
pub(crate) fn matrices_between<O: Operator>(
    operator: &O,
    bra: &Basis,
    ket: &Basis,
) -> Vec<DMatrix<f64>> {
    let pairs: Vec<_> = (0..bra.shells().len())
        .flat_map(|s| (0..ket.shells().len()).map(move |t| (s, t)))
        .collect();
    let mut matrices = vec![DMatrix::zeros(bra.len(), ket.len()); operator.components()];
    place_blocks(operator, bra, ket, &pairs, |component, i, j, value| {
        matrices[component][(i, j)] = value;
    });
    matrices
}

/// Computes the blocks in parallel (each on its own, so that threads do not change bits) and hands
/// every element to `place`.
fn place_blocks<O: Operator>(
    operator: &O,
    bra: &Basis,
    ket: &Basis,
    pairs: &[(usize, usize)],
    mut place: impl FnMut(usize, usize, usize, f64),
) {
    let blocks: Vec<Vec<f64>> = pairs
        .par_iter()
        .with_min_len(16)
        .map(|&(s, t)| {
            shell_block(
                operator,
                (&bra.shells()[s], bra.centre(s)),
                (&ket.shells()[t], ket.centre(t)),
            )
        })
        .collect();
    for (&(s, t), block) in pairs.iter().zip(&blocks) {
        let mut values = block.iter();
        for component in 0..operator.components() {
            for i in bra.range(s) {
                for (j, &value) in ket.range(t).zip(&mut values) {
                    place(component, i, j, value);
                }
            }
        }
    }
}

/// Shells and molecules that the tests of all one-electron operators use.
#[cfg(test)]
pub(crate) mod samples {
    use super::*;

    /// One contraction of two primitives with made-up exponents.
    pub(crate) fn shell(atom: usize, l: usize, kind: FunctionKind) -> Shell {
        let exponents = vec![1.1 + 0.2 * l as f64, 0.35 + 0.05 * atom as f64];
        let contraction = Contraction::normalised(l, &exponents, &[0.6, 0.5]);
        Shell {
            atom,
            exponents,
            contractions: vec![contraction],
            kind,
        }
    }

    /// Two centres with all angular momenta, an sp shell and generally contracted s and d shells.
    pub(crate) fn mixed_basis(kind: FunctionKind, max_l: usize) -> Basis {
        let mut shells = Vec::new();
        for atom in 0..2 {
            shells.extend((0..=max_l).map(|l| shell(atom, l, kind)));
        }
        let mut sp = shell(0, 0, kind);
        let p = Contraction::normalised(1, &sp.exponents, &[0.2, 0.9]);
        sp.contractions.push(p);
        shells.push(sp);
        let mut general = shell(1, 0, kind);
        let second = Contraction::normalised(0, &general.exponents, &[0.7, -0.9]);
        general.contractions.push(second);
        shells.push(general);
        if max_l >= 2 {
            let mut general = shell(1, 2, kind);
            let second = Contraction::normalised(2, &general.exponents, &[-0.4, 1.0]);
            general.contractions.push(second);
            shells.push(general);
        }
        let centres = vec![Vector3::new(0.1, -0.2, 0.3), Vector3::new(-0.4, 0.5, 1.2)];
        Basis::new(shells, centres)
    }

    /// Points and weights of a trapezoid grid on a cube, spectrally accurate for Gaussians.
    pub(crate) fn integrate(mut f: impl FnMut(&Vector3<f64>, f64)) {
        let (step, reach) = (0.3, 8.1);
        let count = (2.0 * reach / step) as usize;
        let at = |i: usize| i as f64 * step - reach;
        for i in 0..=count {
            for j in 0..=count {
                for k in 0..=count {
                    f(&Vector3::new(at(i), at(j), at(k)), step.powi(3));
                }
            }
        }
    }
}
