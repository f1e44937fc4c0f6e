//! The two kinds of small matrix product behind every quartet, on four lanes.

use super::lanes::{Four, Kernel, Lanes};

/// A contraction: out[s][n] (+)= Σ_k scalars[k][s] · values[k][n].
///
/// Register-tiled: up to twelve sums stay in registers over all k.
pub(super) struct Contraction<'a> {
    /// values[k · value_stride + n]
    pub(super) values: &'a [Four],
    pub(super) value_stride: usize,
    /// scalars[k · scalar_stride + s]
    pub(super) scalars: &'a [Four],
    pub(super) scalar_stride: usize,
    /// Number of primitives k.
    pub(super) primitives: usize,
    /// Number of columns n.
    pub(super) columns: usize,
    /// Number of scalars s.
    pub(super) scalar_count: usize,
    /// out[s · columns + n]
    pub(super) out: &'a mut [Four],
    /// Add to what `out` holds, instead of starting from zero.
    pub(super) accumulate: bool,
}

impl Kernel for Contraction<'_> {
    type Output = ();

    #[inline(always)]
    fn run<V: Lanes>(mut self) {
        let mut s = 0;
        while s < self.scalar_count {
            match self.scalar_count - s {
                1 => {
                    self.columns_of::<V, 8, 1>(s);
                    s += 1;
                }
                2 => {
                    self.columns_of::<V, 5, 2>(s);
                    s += 2;
                }
                4 => {
                    self.columns_of::<V, 3, 4>(s);
                    s += 4;
                }
                _ => {
                    self.columns_of::<V, 4, 3>(s);
                    s += 3;
                }
            }
        }
    }
}

impl Contraction<'_> {
    #[inline(always)]
    fn columns_of<V: Lanes, const N: usize, const S: usize>(&mut self, s: usize) {
        let mut n = 0;
        while n + N <= self.columns {
            self.tile::<V, N, S>(n, s);
            n += N;
        }
        if N > 4 && n + 4 <= self.columns {
            self.tile::<V, 4, S>(n, s);
            n += 4;
        }
        if N > 2 && n + 2 <= self.columns {
            self.tile::<V, 2, S>(n, s);
            n += 2;
        }
        while n < self.columns {
            self.tile::<V, 1, S>(n, s);
            n += 1;
        }
    }

    #[inline(always)]
    fn tile<V: Lanes, const N: usize, const S: usize>(&mut self, n: usize, s: usize) {
        let mut sums = [[V::zero(); N]; S];
        if self.accumulate {
            for (b, row) in sums.iter_mut().enumerate() {
                let from = &self.out[(s + b) * self.columns + n..][..N];
                for (sum, from) in row.iter_mut().zip(from) {
                    *sum = V::load(from);
                }
            }
        }
        for k in 0..self.primitives {
            let values = &self.values[k * self.value_stride + n..][..N];
            let scalars = &self.scalars[k * self.scalar_stride + s..][..S];
            let values: [V; N] = std::array::from_fn(|a| V::load(&values[a]));
            for b in 0..S {
                let scalar = V::load(&scalars[b]);
                for a in 0..N {
                    sums[b][a] = values[a].mul_add(scalar, sums[b][a]);
                }
            }
        }
        for (b, row) in sums.iter().enumerate() {
            let to = &mut self.out[(s + b) * self.columns + n..][..N];
            for (sum, to) in row.iter().zip(to) {
                sum.store(to);
            }
        }
    }
}

/// A product with a sparse matrix: out[g][r] = Σ_u matrix[g][u] · values[u][r].
pub(super) struct SparseProduct<'a> {
    /// End of each row g in `columns`.
    pub(super) row_ends: &'a [u32],
    /// Column u of each element.
    pub(super) columns: &'a [u16],
    /// Each element.
    pub(super) elements: &'a [Four],
    /// values[u · width + r]
    pub(super) values: &'a [Four],
    pub(super) width: usize,
    /// out[g · out_row + r · out_column]
    pub(super) out: &'a mut [Four],
    pub(super) out_row: usize,
    pub(super) out_column: usize,
}

impl Kernel for SparseProduct<'_> {
    type Output = ();

    #[inline(always)]
    fn run<V: Lanes>(mut self) {
        let mut r = 0;
        while r + 8 <= self.width {
            self.tile::<V, 8>(r);
            r += 8;
        }
        if r + 4 <= self.width {
            self.tile::<V, 4>(r);
            r += 4;
        }
        if r + 2 <= self.width {
            self.tile::<V, 2>(r);
            r += 2;
        }
        if r < self.width {
            self.tile::<V, 1>(r);
        }
    }
}

impl SparseProduct<'_> {
    #[inline(always)]
    fn tile<V: Lanes, const N: usize>(&mut self, r: usize) {
        let mut start = 0;
        for (g, &end) in self.row_ends.iter().enumerate() {
            let end = end as usize;
            let mut sums = [V::zero(); N];
            for (&u, element) in self.columns[start..end]
                .iter()
                .zip(&self.elements[start..end])
            {
                let values = &self.values[u as usize * self.width + r..][..N];
                let element = V::load(element);
                for a in 0..N {
                    sums[a] = element.mul_add(V::load(&values[a]), sums[a]);
                }
            }
            let to = &mut self.out[g * self.out_row + r * self.out_column..];
            for (a, sum) in sums.iter().enumerate() {
                sum.store(&mut to[a * self.out_column]);
            }
            start = end;
        }
    }
}
