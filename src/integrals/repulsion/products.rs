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
        if !V::WIDE {
            for s in 0..self.scalar_count {
                self.columns_of::<V, 2, 1>(s);
            }
            return;
        }
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
        // `min` tells the compiler which tiles cannot occur.
        match (self.columns - n).min(N - 1) {
            7 => self.tile::<V, 7, S>(n, s),
            6 => self.tile::<V, 6, S>(n, s),
            5 => self.tile::<V, 5, S>(n, s),
            4 => self.tile::<V, 4, S>(n, s),
            3 => self.tile::<V, 3, S>(n, s),
            2 => self.tile::<V, 2, S>(n, s),
            1 => self.tile::<V, 1, S>(n, s),
            _ => {}
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
            // The shorter side waits in registers: with the sums they are sixteen at most.
            if N < S {
                let mut held = [V::zero(); N];
                for a in 0..N {
                    held[a] = V::load(&values[a]);
                }
                for b in 0..S {
                    let scalar = V::load(&scalars[b]);
                    for a in 0..N {
                        sums[b][a] = held[a].mul_add(scalar, sums[b][a]);
                    }
                }
            } else {
                let mut held = [V::zero(); S];
                for b in 0..S {
                    held[b] = V::load(&scalars[b]);
                }
                for a in 0..N {
                    let value = V::load(&values[a]);
                    for b in 0..S {
                        sums[b][a] = value.mul_add(held[b], sums[b][a]);
                    }
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

/// A matrix stored in tiles of neighbouring columns, each tile contiguous: what a product works on then
/// lies in few pages. The last tile may be narrower.
#[derive(Debug, Clone, Copy)]
pub(super) struct Tiled {
    rows: usize,
    columns: usize,
    /// Columns of a tile.
    width: usize,
}

impl Tiled {
    pub(super) fn new(rows: usize, columns: usize) -> Self {
        // At most as wide as sums fit the registers, and the taller the narrower, so that a tile stays
        // in the first cache.
        let widest = match rows {
            0..=60 => 12,
            61..=110 => 8,
            _ => 4,
        };
        let tiles = columns.div_ceil(widest).max(1);
        Self {
            rows,
            columns,
            width: columns.div_ceil(tiles).max(1),
        }
    }

    pub(super) fn len(self) -> usize {
        self.rows * self.columns
    }

    /// Where column `c` starts, and the distance of its rows.
    pub(super) fn column(self, c: usize) -> (usize, usize) {
        let start = c / self.width * self.width;
        let width = self.width.min(self.columns - start);
        (start * self.rows + c - start, width)
    }
}

/// Where a product goes.
#[derive(Debug, Clone, Copy)]
pub(super) enum Layout {
    /// Row g after row g − 1.
    Rows,
    /// Transposed: row g of the product is column g of a tiled matrix.
    TiledColumns(Tiled),
}

/// A product with a sparse matrix: out[g][r] = Σ_u matrix[g][u] · values[u][r].
///
/// `values` is tiled as `shape` says.
pub(super) struct SparseProduct<'a> {
    /// End of each row g in `columns`.
    pub(super) row_ends: &'a [u32],
    /// Column u of each element.
    pub(super) columns: &'a [u16],
    /// Each element.
    pub(super) elements: &'a [Four],
    pub(super) values: &'a [Four],
    pub(super) shape: Tiled,
    pub(super) out: &'a mut [Four],
    pub(super) layout: Layout,
}

impl Kernel for SparseProduct<'_> {
    type Output = ();

    #[inline(always)]
    fn run<V: Lanes>(mut self) {
        let mut r = 0;
        while r < self.shape.columns {
            let width = self.shape.width.min(self.shape.columns - r);
            if V::WIDE {
                match width {
                    12 => self.tile::<V, 12>(r),
                    11 => self.tile::<V, 11>(r),
                    10 => self.tile::<V, 10>(r),
                    9 => self.tile::<V, 9>(r),
                    8 => self.tile::<V, 8>(r),
                    7 => self.tile::<V, 7>(r),
                    6 => self.tile::<V, 6>(r),
                    5 => self.tile::<V, 5>(r),
                    4 => self.tile::<V, 4>(r),
                    3 => self.tile::<V, 3>(r),
                    2 => self.tile::<V, 2>(r),
                    _ => self.tile::<V, 1>(r),
                }
            } else {
                self.plain_tile::<V>(r, width);
            }
            r += width;
        }
    }
}

/// Where the rows of a tile of the product go, one after another.
struct Places {
    first: usize,
    step: usize,
    /// For a transposed product, what is left of the present tile, and where the next one starts.
    layout: Layout,
    column: usize,
    r: usize,
}

impl Places {
    #[inline(always)]
    fn new(layout: Layout, columns: usize, r: usize) -> Self {
        match layout {
            Layout::Rows => Self {
                first: r,
                step: 1,
                layout,
                column: columns,
                r,
            },
            Layout::TiledColumns(tiled) => {
                let step = tiled.width.min(tiled.columns);
                Self {
                    first: r * step,
                    step,
                    layout,
                    column: 0,
                    r,
                }
            }
        }
    }

    /// Moves on to the next row.
    #[inline(always)]
    fn advance(&mut self) {
        match self.layout {
            Layout::Rows => self.first += self.column,
            Layout::TiledColumns(tiled) => {
                self.column += 1;
                self.first += 1;
                if self.column.is_multiple_of(tiled.width) && self.column < tiled.columns {
                    self.step = tiled.width.min(tiled.columns - self.column);
                    self.first = self.column * tiled.rows + self.r * self.step;
                }
            }
        }
    }
}

impl SparseProduct<'_> {
    #[inline(always)]
    fn tile<V: Lanes, const N: usize>(&mut self, r: usize) {
        let tile = &self.values[r * self.shape.rows..][..N * self.shape.rows];
        let tile = tile.as_chunks::<N>().0;
        let mut places = Places::new(self.layout, self.shape.columns, r);
        let mut start = 0;
        for &end in self.row_ends {
            let end = end as usize;
            let mut sums = [V::zero(); N];
            for (&u, element) in self.columns[start..end]
                .iter()
                .zip(&self.elements[start..end])
            {
                let values = &tile[u as usize];
                let element = V::load(element);
                for a in 0..N {
                    sums[a] = element.mul_add(V::load(&values[a]), sums[a]);
                }
            }
            let to = &mut self.out[places.first..][..(N - 1) * places.step + 1];
            for (a, sum) in sums.iter().enumerate() {
                sum.store(&mut to[a * places.step]);
            }
            places.advance();
            start = end;
        }
    }

    /// The same for tiles of any width, one column at a time.
    #[inline(always)]
    fn plain_tile<V: Lanes>(&mut self, r: usize, width: usize) {
        let tile = &self.values[r * self.shape.rows..][..width * self.shape.rows];
        for a in 0..width {
            let mut places = Places::new(self.layout, self.shape.columns, r);
            let mut start = 0;
            for &end in self.row_ends {
                let end = end as usize;
                let mut sum = V::zero();
                let columns = &self.columns[start..end];
                for (&u, element) in columns.iter().zip(&self.elements[start..end]) {
                    let value = V::load(&tile[u as usize * width + a]);
                    sum = V::load(element).mul_add(value, sum);
                }
                sum.store(&mut self.out[places.first + a * places.step]);
                places.advance();
                start = end;
            }
        }
    }
}
