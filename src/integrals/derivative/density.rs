//! The two-particle density of a Hartree–Fock state, block by block.

use crate::basis::Basis;
use nalgebra::DMatrix;

/// Density matrices in rows, with the largest element of each shell block.
struct Density {
    n: usize,
    values: Vec<f64>,
    shells: usize,
    largest: Vec<f64>,
}

impl Density {
    fn new(basis: &Basis, matrix: &DMatrix<f64>) -> Self {
        let n = basis.len();
        let shells = basis.shells().len();
        let mut density = Self {
            n,
            values: vec![0.0; n * n],
            shells,
            largest: vec![0.0; shells * shells],
        };
        for s in 0..shells {
            for t in 0..shells {
                let mut largest = 0.0f64;
                for i in basis.range(s) {
                    for j in basis.range(t) {
                        let value = 0.5 * (matrix[(i, j)] + matrix[(j, i)]);
                        density.values[i * n + j] = value;
                        largest = largest.max(value.abs());
                    }
                }
                density.largest[s * shells + t] = largest;
            }
        }
        density
    }

    fn row(&self, i: usize) -> &[f64] {
        &self.values[i * self.n..(i + 1) * self.n]
    }

    fn largest(&self, s: usize, t: usize) -> f64 {
        self.largest[s * self.shells + t]
    }
}

/// One-particle densities from which Γ is made.
pub(super) struct Densities {
    total: Density,
    /// α − β, unless they are the same
    spin: Option<Density>,
}

impl Densities {
    pub(super) fn new(basis: &Basis, alpha: &DMatrix<f64>, beta: &DMatrix<f64>) -> Self {
        let spin = alpha - beta;
        Self {
            total: Density::new(basis, &(alpha + beta)),
            spin: (spin.amax() > 0.0).then(|| Density::new(basis, &spin)),
        }
    }

    /// Upper bound of |Γ| / weight over four shells.
    pub(super) fn bound(&self, [a, b]: [usize; 2], [c, d]: [usize; 2]) -> f64 {
        let exchange = |p: &Density| {
            0.125 * (p.largest(a, c) * p.largest(b, d) + p.largest(a, d) * p.largest(b, c))
        };
        0.5 * self.total.largest(a, b) * self.total.largest(c, d)
            + exchange(&self.total)
            + self.spin.as_ref().map_or(0.0, exchange)
    }

    /// Γ_abcd = weight (½ P_ab P_cd − ⅛ Σ_{P, M} (P_ac P_bd + P_ad P_bc)) appended to `out`, P the total
    /// density and M the spin density; returns the largest magnitude.
    pub(super) fn two_particle(
        &self,
        basis: &Basis,
        [a, b]: [usize; 2],
        [c, d]: [usize; 2],
        weight: f64,
        out: &mut Vec<f64>,
    ) -> f64 {
        let (c_range, d_range) = (basis.range(c), basis.range(d));
        let start = out.len();
        let width = d_range.len();
        let size = basis.range(a).len() * basis.range(b).len() * c_range.len() * width;
        out.resize(start + size, 0.0);
        let out = &mut out[start..];
        // The loop runs along the third function if the fourth is alone, as it often is.
        let (along, across) = if width == 1 {
            (c_range, d_range)
        } else {
            (d_range, c_range)
        };
        let spin = self.spin.as_ref();
        let mut rows = out.chunks_exact_mut(along.len());
        for i in basis.range(a) {
            let pi = self.total.row(i);
            for j in basis.range(b) {
                let pj = self.total.row(j);
                let coulomb = 0.5 * weight * pi[j];
                let (pi_along, pj_along) = (&pi[along.clone()], &pj[along.clone()]);
                for (k, row) in across.clone().zip(&mut rows) {
                    let (ik, jk) = (-0.125 * weight * pi[k], -0.125 * weight * pj[k]);
                    let pk = &self.total.row(k)[along.clone()];
                    let of_row = row.iter_mut().zip(pk).zip(pi_along).zip(pj_along);
                    for (((value, &kl), &il), &jl) in of_row {
                        *value = coulomb * kl + ik * jl + jk * il;
                    }
                    if let Some(spin) = spin {
                        let (mi, mj) = (spin.row(i), spin.row(j));
                        let (ik, jk) = (-0.125 * weight * mi[k], -0.125 * weight * mj[k]);
                        let (mi, mj) = (&mi[along.clone()], &mj[along.clone()]);
                        for ((value, &il), &jl) in row.iter_mut().zip(mi).zip(mj) {
                            *value += ik * jl + jk * il;
                        }
                    }
                }
            }
        }
        let mut largest = 0.0;
        for value in out.iter() {
            let magnitude = value.abs();
            if magnitude > largest {
                largest = magnitude;
            }
        }
        largest
    }
}
