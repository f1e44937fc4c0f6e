//! Vectors of four doubles, and the choice of instruction set at run time.
//!
//! The only file of the crate with `unsafe` code. Kernels are written once, generic over [`Lanes`],
//! as types that implement [`Kernel`]; [`dispatch`] runs them compiled for AVX2 and FMA where the
//! processor has them, and compiled for the plain target otherwise (which also serves Arm).
//!
//! Every method of a [`Lanes`] type and every `Kernel::run` is `#[inline(always)]`, so that all of
//! it ends up inside the one function that carries `#[target_feature]`.
#![expect(
    unsafe_code,
    reason = "vector instructions, and disjoint writes from several threads"
)]

use crate::integrals::boys::CellPolynomial;

/// Four doubles in memory, one per lane.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
#[repr(C, align(32))]
pub(in crate::integrals) struct Four(pub(in crate::integrals) [f64; 4]);

/// Arithmetic on four lanes at once.
pub(in crate::integrals) trait Lanes: Copy {
    /// Whether straight code and large register tiles pay: not where four lanes are more than one
    /// register, and the compiler would need long for it.
    const WIDE: bool;
    fn load(from: &Four) -> Self;
    fn store(self, to: &mut Four);
    fn splat(value: f64) -> Self;
    fn from_array(values: &[f64; 4]) -> Self;
    fn to_array(self) -> [f64; 4];
    /// Writes four doubles anywhere.
    ///
    /// # Safety
    /// `to` must be valid for writes.
    unsafe fn write(self, to: *mut [f64; 4]);
    /// Writes four doubles to memory past the caches, if the instruction set can.
    ///
    /// # Safety
    /// `to` must be valid for writes and aligned to 32 bytes, and nobody may read it before
    /// [`Self::finish_streams`].
    unsafe fn stream(self, to: *mut [f64; 4]);
    /// Makes visible what was streamed.
    fn finish_streams();
    fn add(self, other: Self) -> Self;
    fn sub(self, other: Self) -> Self;
    fn mul(self, other: Self) -> Self;
    fn div(self, other: Self) -> Self;
    fn sqrt(self) -> Self;
    fn min(self, other: Self) -> Self;
    /// self · factor + addend
    fn mul_add(self, factor: Self, addend: Self) -> Self;
    /// All bits set in the lanes where self ≥ other.
    fn at_least(self, other: Self) -> Self;
    /// self where the mask is set, zero elsewhere.
    fn only(self, mask: Self) -> Self;
    /// `yes` where the mask self is set, `no` elsewhere.
    fn choose(self, yes: Self, no: Self) -> Self;
    /// How many lanes of a mask are set.
    fn count_set(self) -> u32;
    /// Each lane cut to an integer (lanes in 0 … 2³¹), as indices and as doubles.
    fn truncate(self) -> ([usize; 4], Self);
    /// Row l goes to lane l: coefficient k of all four rows in one vector.
    fn transposed(rows: [&CellPolynomial; 4]) -> [Self; 8];
    /// Element l of the four goes to lane of its place in vector l.
    fn transposed_square(square: [Self; 4]) -> [Self; 4];
    /// Asks for the line of memory with number `index` of a list, which may lie beyond its end, in time
    /// for its use.
    fn prefetch(list: &[f64], index: usize);
    /// Runs a kernel compiled for these lanes.
    fn call<K: Kernel>(kernel: K) -> K::Output;
    /// Zero in all lanes.
    #[inline(always)]
    fn zero() -> Self {
        Self::splat(0.0)
    }
}

/// A piece of work compiled once per instruction set.
pub(in crate::integrals) trait Kernel {
    type Output;
    /// Must be `#[inline(always)]`.
    fn run<V: Lanes>(self) -> Self::Output;
}

/// Runs a kernel with the widest instruction set that both processor and program know.
#[inline]
pub(in crate::integrals) fn dispatch<K: Kernel>(kernel: K) -> K::Output {
    #[cfg(target_arch = "x86_64")]
    if std::arch::is_x86_feature_detected!("avx2") && std::arch::is_x86_feature_detected!("fma") {
        // SAFETY: the processor has both features, as just asked.
        return unsafe { run_avx2(kernel) };
    }
    kernel.run::<Portable>()
}

#[cfg(target_arch = "x86_64")]
#[target_feature(enable = "avx2,fma")]
fn run_avx2<K: Kernel>(kernel: K) -> K::Output {
    kernel.run::<avx2::Avx2>()
}

/// Four lanes in plain Rust, without fused multiply–add (which would be a library call).
#[derive(Clone, Copy)]
pub(super) struct Portable([f64; 4]);

impl Portable {
    #[inline(always)]
    fn zip(self, other: Self, f: impl Fn(f64, f64) -> f64) -> Self {
        Self(std::array::from_fn(|l| f(self.0[l], other.0[l])))
    }
}

impl Lanes for Portable {
    const WIDE: bool = false;
    #[inline(always)]
    fn load(from: &Four) -> Self {
        Self(from.0)
    }
    #[inline(always)]
    fn store(self, to: &mut Four) {
        to.0 = self.0;
    }
    #[inline(always)]
    fn splat(value: f64) -> Self {
        Self([value; 4])
    }
    #[inline(always)]
    fn from_array(values: &[f64; 4]) -> Self {
        Self(*values)
    }
    #[inline(always)]
    fn to_array(self) -> [f64; 4] {
        self.0
    }
    #[inline(always)]
    unsafe fn write(self, to: *mut [f64; 4]) {
        // SAFETY: promised by the caller.
        unsafe { *to = self.0 }
    }
    #[inline(always)]
    unsafe fn stream(self, to: *mut [f64; 4]) {
        // SAFETY: promised by the caller.
        unsafe { *to = self.0 }
    }
    #[inline(always)]
    fn finish_streams() {}
    #[inline(always)]
    fn add(self, other: Self) -> Self {
        self.zip(other, |a, b| a + b)
    }
    #[inline(always)]
    fn sub(self, other: Self) -> Self {
        self.zip(other, |a, b| a - b)
    }
    #[inline(always)]
    fn mul(self, other: Self) -> Self {
        self.zip(other, |a, b| a * b)
    }
    #[inline(always)]
    fn div(self, other: Self) -> Self {
        self.zip(other, |a, b| a / b)
    }
    #[inline(always)]
    fn sqrt(self) -> Self {
        Self(self.0.map(f64::sqrt))
    }
    #[inline(always)]
    fn min(self, other: Self) -> Self {
        self.zip(other, |a, b| if a < b { a } else { b })
    }
    #[inline(always)]
    fn mul_add(self, factor: Self, addend: Self) -> Self {
        self.mul(factor).add(addend)
    }
    #[inline(always)]
    fn at_least(self, other: Self) -> Self {
        self.zip(other, |a, b| {
            f64::from_bits(if a >= b { u64::MAX } else { 0 })
        })
    }
    #[inline(always)]
    fn only(self, mask: Self) -> Self {
        self.zip(mask, |a, m| f64::from_bits(a.to_bits() & m.to_bits()))
    }
    #[inline(always)]
    fn choose(self, yes: Self, no: Self) -> Self {
        Self(std::array::from_fn(|l| {
            if self.0[l].to_bits() == 0 {
                no.0[l]
            } else {
                yes.0[l]
            }
        }))
    }
    #[inline(always)]
    fn count_set(self) -> u32 {
        self.0.iter().map(|m| u32::from(m.to_bits() != 0)).sum()
    }
    #[inline(always)]
    fn truncate(self) -> ([usize; 4], Self) {
        let cells = self.0.map(|x| x as usize);
        (cells, Self(cells.map(|c| c as f64)))
    }
    #[inline(always)]
    fn transposed(rows: [&CellPolynomial; 4]) -> [Self; 8] {
        std::array::from_fn(|k| Self(rows.map(|row| row[k])))
    }
    #[inline(always)]
    fn transposed_square(square: [Self; 4]) -> [Self; 4] {
        std::array::from_fn(|l| Self(square.map(|v| v.0[l])))
    }
    #[inline(always)]
    fn prefetch(_list: &[f64], _index: usize) {}
    #[inline(always)]
    fn call<K: Kernel>(kernel: K) -> K::Output {
        kernel.run::<Self>()
    }
}

#[cfg(target_arch = "x86_64")]
mod avx2 {
    use super::{CellPolynomial, Four, Kernel, Lanes};
    use std::arch::x86_64::*;

    /// Four lanes in one AVX register.
    ///
    /// Values are only made inside `run_avx2`, after the processor was asked for AVX2 and FMA:
    /// that is what makes every block below sound.
    #[derive(Clone, Copy)]
    pub(super) struct Avx2(__m256d);

    impl Lanes for Avx2 {
        const WIDE: bool = true;
        #[inline(always)]
        fn load(from: &Four) -> Self {
            // SAFETY: features as said at the type; `Four` is 32 bytes, aligned to 32.
            Self(unsafe { _mm256_load_pd(from.0.as_ptr()) })
        }
        #[inline(always)]
        fn store(self, to: &mut Four) {
            // SAFETY: as for `load`.
            unsafe { _mm256_store_pd(to.0.as_mut_ptr(), self.0) }
        }
        #[inline(always)]
        fn splat(value: f64) -> Self {
            // SAFETY: features as said at the type.
            Self(unsafe { _mm256_set1_pd(value) })
        }
        #[inline(always)]
        fn from_array(values: &[f64; 4]) -> Self {
            // SAFETY: features as said at the type; four doubles are read.
            Self(unsafe { _mm256_loadu_pd(values.as_ptr()) })
        }
        #[inline(always)]
        fn to_array(self) -> [f64; 4] {
            let mut values = [0.0; 4];
            // SAFETY: features as said at the type; four doubles are written.
            unsafe { _mm256_storeu_pd(values.as_mut_ptr(), self.0) };
            values
        }
        #[inline(always)]
        unsafe fn write(self, to: *mut [f64; 4]) {
            // SAFETY: features as said at the type; the place is promised by the caller.
            unsafe { _mm256_storeu_pd(to.cast(), self.0) }
        }
        #[inline(always)]
        unsafe fn stream(self, to: *mut [f64; 4]) {
            // SAFETY: features as said at the type; place and alignment are promised by the caller.
            unsafe { _mm256_stream_pd(to.cast(), self.0) }
        }
        #[inline(always)]
        fn finish_streams() {
            // SAFETY: features as said at the type.
            unsafe { _mm_sfence() }
        }
        #[inline(always)]
        fn add(self, other: Self) -> Self {
            // SAFETY: features as said at the type.
            Self(unsafe { _mm256_add_pd(self.0, other.0) })
        }
        #[inline(always)]
        fn sub(self, other: Self) -> Self {
            // SAFETY: features as said at the type.
            Self(unsafe { _mm256_sub_pd(self.0, other.0) })
        }
        #[inline(always)]
        fn mul(self, other: Self) -> Self {
            // SAFETY: features as said at the type.
            Self(unsafe { _mm256_mul_pd(self.0, other.0) })
        }
        #[inline(always)]
        fn div(self, other: Self) -> Self {
            // SAFETY: features as said at the type.
            Self(unsafe { _mm256_div_pd(self.0, other.0) })
        }
        #[inline(always)]
        fn sqrt(self) -> Self {
            // SAFETY: features as said at the type.
            Self(unsafe { _mm256_sqrt_pd(self.0) })
        }
        #[inline(always)]
        fn min(self, other: Self) -> Self {
            // SAFETY: features as said at the type.
            Self(unsafe { _mm256_min_pd(self.0, other.0) })
        }
        #[inline(always)]
        fn mul_add(self, factor: Self, addend: Self) -> Self {
            // SAFETY: features as said at the type.
            Self(unsafe { _mm256_fmadd_pd(self.0, factor.0, addend.0) })
        }
        #[inline(always)]
        fn at_least(self, other: Self) -> Self {
            // SAFETY: features as said at the type.
            Self(unsafe { _mm256_cmp_pd::<_CMP_GE_OQ>(self.0, other.0) })
        }
        #[inline(always)]
        fn only(self, mask: Self) -> Self {
            // SAFETY: features as said at the type.
            Self(unsafe { _mm256_and_pd(self.0, mask.0) })
        }
        #[inline(always)]
        fn choose(self, yes: Self, no: Self) -> Self {
            // SAFETY: features as said at the type.
            Self(unsafe { _mm256_blendv_pd(no.0, yes.0, self.0) })
        }
        #[inline(always)]
        fn count_set(self) -> u32 {
            // SAFETY: features as said at the type.
            unsafe { _mm256_movemask_pd(self.0) }.count_ones()
        }
        #[inline(always)]
        fn truncate(self) -> ([usize; 4], Self) {
            // SAFETY: features as said at the type.
            unsafe {
                let cells = _mm256_cvttpd_epi32(self.0);
                let low = _mm_cvtsi128_si64(cells) as u64;
                let high = _mm_extract_epi64::<1>(cells) as u64;
                let index = [low & 0xffff_ffff, low >> 32, high & 0xffff_ffff, high >> 32];
                (index.map(|i| i as usize), Self(_mm256_cvtepi32_pd(cells)))
            }
        }
        #[inline(always)]
        fn transposed(rows: [&CellPolynomial; 4]) -> [Self; 8] {
            // No closures here: they would be functions of their own, without the features, into which
            // the intrinsics cannot be inlined.
            macro_rules! square {
                ($offset:literal) => {
                    // SAFETY: features as said at the type; each row holds eight doubles.
                    unsafe {
                        [
                            Self(_mm256_loadu_pd(rows[0].as_ptr().add($offset))),
                            Self(_mm256_loadu_pd(rows[1].as_ptr().add($offset))),
                            Self(_mm256_loadu_pd(rows[2].as_ptr().add($offset))),
                            Self(_mm256_loadu_pd(rows[3].as_ptr().add($offset))),
                        ]
                    }
                };
            }
            let [a, b, c, d] = Self::transposed_square(square!(0));
            let [e, f, g, h] = Self::transposed_square(square!(4));
            [a, b, c, d, e, f, g, h]
        }
        #[inline(always)]
        fn transposed_square([a, b, c, d]: [Self; 4]) -> [Self; 4] {
            // SAFETY: features as said at the type.
            unsafe {
                let ab_even = _mm256_unpacklo_pd(a.0, b.0);
                let ab_odd = _mm256_unpackhi_pd(a.0, b.0);
                let cd_even = _mm256_unpacklo_pd(c.0, d.0);
                let cd_odd = _mm256_unpackhi_pd(c.0, d.0);
                [
                    Self(_mm256_permute2f128_pd::<0x20>(ab_even, cd_even)),
                    Self(_mm256_permute2f128_pd::<0x20>(ab_odd, cd_odd)),
                    Self(_mm256_permute2f128_pd::<0x31>(ab_even, cd_even)),
                    Self(_mm256_permute2f128_pd::<0x31>(ab_odd, cd_odd)),
                ]
            }
        }
        #[inline(always)]
        fn prefetch(list: &[f64], index: usize) {
            let place = list.as_ptr().wrapping_add(index);
            // SAFETY: features as said at the type; nothing is read, and any address may be named.
            unsafe { _mm_prefetch::<_MM_HINT_T0>(place.cast()) }
        }
        #[inline(always)]
        fn call<K: Kernel>(kernel: K) -> K::Output {
            // SAFETY: features as said at the type.
            unsafe { super::run_avx2(kernel) }
        }
    }
}

/// Indices that have been checked once, for copying without a check for each element.
#[derive(Debug, Default)]
pub(super) struct Gather {
    index: Vec<u32>,
    /// One more than the largest index.
    needed: usize,
}

impl Gather {
    pub(super) fn new(index: Vec<u32>) -> Self {
        let needed = index.iter().max().map_or(0, |&i| i as usize + 1);
        Self { index, needed }
    }

    /// to[i] = from[index[i]]
    ///
    /// # Panics
    /// If `to` is shorter than the index, or `from` does not hold the largest.
    #[inline(always)]
    pub(super) fn copy<V: Lanes>(&self, from: &[Four], to: &mut [Four]) {
        assert!(from.len() >= self.needed);
        for (to, &i) in to[..self.index.len()].iter_mut().zip(&self.index) {
            // SAFETY: the largest index was checked above.
            V::load(unsafe { from.get_unchecked(i as usize) }).store(to);
        }
    }
}

/// Function pairs of a shell pair whose places in the packed list follow one another.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct Run {
    /// Index of the first function pair.
    pub(super) first: usize,
    /// Place of the first.
    pub(super) place: usize,
    pub(super) len: usize,
}

/// Four quartets on their way from lanes to the packed list.
pub(super) struct Scatter<'a> {
    pub(super) list: SharedList<'a>,
    /// For each lane where the rows of the later pair start in the list.
    pub(super) rows: [&'a [usize]; 4],
    /// For each lane the earlier pairs in runs, which differ by their places only.
    pub(super) runs: [&'a [Run]; 4],
    /// Distance of the function pairs of a run.
    pub(super) run_stride: usize,
    pub(super) values: &'a [Four],
    /// Distance in `values` of rows, and of function pairs of the columns.
    pub(super) strides: [usize; 2],
    /// Lanes to write.
    pub(super) lanes: usize,
}

impl Kernel for Scatter<'_> {
    type Output = ();

    #[inline(always)]
    fn run<V: Lanes>(self) {
        let [row_stride, column_stride] = self.strides;
        let step = self.run_stride * column_stride;
        let row_count = self.rows[0].len();
        let mut last_value = 0;
        for lane in 0..self.lanes {
            let last_row = self.rows[lane].iter().copied().max().unwrap_or(0);
            assert_eq!(self.rows[lane].len(), row_count);
            assert_eq!(self.runs[lane].len(), self.runs[0].len());
            for (run, first) in self.runs[lane].iter().zip(self.runs[0]) {
                assert!(run.len == first.len && run.len > 0);
                assert!(last_row + run.place + run.len <= self.list.len);
                last_value = last_value.max(first.first * column_stride + (run.len - 1) * step);
            }
        }
        if row_count == 0 || self.lanes == 0 {
            return;
        }
        assert!((row_count - 1) * row_stride + last_value < self.values.len());
        // SAFETY: all places and all indices into `values` were checked just now, by the largest; places
        // are disjoint between threads.
        unsafe {
            if self.lanes == 4 {
                self.write::<V, 4>();
            } else {
                for lane in 0..self.lanes {
                    self.write_lane(lane);
                }
            }
        }
    }
}

impl Scatter<'_> {
    /// # Safety
    /// All places must be inside the list, and all values inside `values`.
    #[inline(always)]
    unsafe fn write<V: Lanes, const LANES: usize>(&self) {
        let [row_stride, column_stride] = self.strides;
        let step = self.run_stride * column_stride;
        for r in 0..self.rows[0].len() {
            let mut starts = [self.list.start; LANES];
            for lane in 0..LANES {
                // SAFETY: promised by the caller.
                unsafe {
                    starts[lane] = starts[lane].add(*self.rows[lane].get_unchecked(r));
                }
            }
            for k in 0..self.runs[0].len() {
                let Run { first, len, .. } = self.runs[0][k];
                let mut value = r * row_stride + first * column_stride;
                let mut places = starts;
                let mut left = len;
                // SAFETY: promised by the caller.
                unsafe {
                    for lane in 0..LANES {
                        places[lane] = places[lane].add(self.runs[lane].get_unchecked(k).place);
                    }
                    while left >= 4 {
                        let square = [
                            V::load(self.values.get_unchecked(value)),
                            V::load(self.values.get_unchecked(value + step)),
                            V::load(self.values.get_unchecked(value + 2 * step)),
                            V::load(self.values.get_unchecked(value + 3 * step)),
                        ];
                        let rows = V::transposed_square(square);
                        for lane in 0..LANES {
                            rows[lane].write(places[lane].cast::<[f64; 4]>());
                            places[lane] = places[lane].add(4);
                        }
                        value += 4 * step;
                        left -= 4;
                    }
                    while left > 0 {
                        let from = self.values.get_unchecked(value);
                        for lane in 0..LANES {
                            *places[lane] = from.0[lane];
                            places[lane] = places[lane].add(1);
                        }
                        value += step;
                        left -= 1;
                    }
                }
            }
        }
    }

    /// # Safety
    /// As for [`Self::write`].
    unsafe fn write_lane(&self, lane: usize) {
        let [row_stride, column_stride] = self.strides;
        let step = self.run_stride * column_stride;
        for (r, &row) in self.rows[lane].iter().enumerate() {
            for run in self.runs[lane] {
                let value = r * row_stride + run.first * column_stride;
                let place = row + run.place;
                for i in 0..run.len {
                    // SAFETY: promised by the caller.
                    unsafe {
                        let value = self.values.get_unchecked(value + i * step).0[lane];
                        *self.list.start.add(place + i) = value;
                    }
                }
            }
        }
    }
}

/// A list of doubles that several threads write, each place by at most one of them.
#[derive(Clone, Copy)]
pub(super) struct SharedList<'a> {
    start: *mut f64,
    len: usize,
    owner: std::marker::PhantomData<&'a mut [f64]>,
}

// SAFETY: `set` is the only access; whoever shares the list promises that no place is written twice
// at the same time (each integral of the packed list belongs to one shell quartet, and each quartet
// to one task).
unsafe impl Send for SharedList<'_> {}
// SAFETY: as above.
unsafe impl Sync for SharedList<'_> {}

impl<'a> SharedList<'a> {
    pub(super) fn new(list: &'a mut [f64]) -> Self {
        Self {
            start: list.as_mut_ptr(),
            len: list.len(),
            owner: std::marker::PhantomData,
        }
    }

    pub(super) fn len(&self) -> usize {
        self.len
    }

    /// Writes one lane of a block of values: the one for row r and column c, at r · strides[0] +
    /// c · strides[1] of `values`, to place rows[r] + columns[c].
    ///
    /// # Panics
    /// If a place is beyond the end of the list, or `values` is too short.
    #[inline]
    pub(super) fn scatter(
        &self,
        rows: &[usize],
        columns: &[u32],
        values: &[Four],
        lane: usize,
        strides: [usize; 2],
    ) {
        let (Some(&last_row), Some(&last_column)) = (rows.iter().max(), columns.iter().max())
        else {
            return;
        };
        assert!(last_row + (last_column as usize) < self.len);
        assert!((rows.len() - 1) * strides[0] + (columns.len() - 1) * strides[1] < values.len());
        assert!(lane < 4);
        for (r, &row) in rows.iter().enumerate() {
            for (c, &column) in columns.iter().enumerate() {
                // SAFETY: the largest place and the largest index were checked above; places are
                // disjoint between threads.
                unsafe {
                    let value = values.get_unchecked(r * strides[0] + c * strides[1]);
                    *self.start.add(row + column as usize) = *value.0.get_unchecked(lane);
                }
            }
        }
    }

    /// Writes one place.
    ///
    /// # Panics
    /// Beyond the end of the list.
    #[inline(always)]
    pub(super) fn set(&self, index: usize, value: f64) {
        assert!(index < self.len);
        // SAFETY: inside the list, which is borrowed for 'a; places are disjoint between threads.
        unsafe { *self.start.add(index) = value }
    }
}

/// Stretches of numbers on their way from a buffer to the list, past the caches.
pub(super) struct Streams<'a> {
    pub(super) list: SharedList<'a>,
    pub(super) from: &'a [f64],
    pub(super) stretches: &'a [Stretch],
}

/// Numbers that stay together.
#[derive(Debug, Clone, Copy)]
pub(super) struct Stretch {
    /// Where they start in the buffer.
    pub(super) from: usize,
    /// Where they start in the list.
    pub(super) to: usize,
    pub(super) len: usize,
}

impl Kernel for Streams<'_> {
    type Output = ();

    #[inline(always)]
    fn run<V: Lanes>(self) {
        for &Stretch { from, to, len } in self.stretches {
            let numbers = &self.from[from..][..len];
            assert!(to + len <= self.list.len);
            // SAFETY: inside the list, as just checked; places are disjoint between threads. The streams
            // begin at a multiple of 64 bytes.
            unsafe {
                let mut to = self.list.start.add(to);
                let head = to.align_offset(64).min(len);
                let (head, rest) = numbers.split_at(head);
                for &number in head {
                    *to = number;
                    to = to.add(1);
                }
                let (lines, rest) = rest.as_chunks::<8>();
                for line in lines {
                    let (fours, _) = line.as_chunks::<4>();
                    V::from_array(&fours[0]).stream(to.cast());
                    V::from_array(&fours[1]).stream(to.add(4).cast());
                    to = to.add(8);
                }
                for &number in rest {
                    *to = number;
                    to = to.add(1);
                }
            }
        }
        V::finish_streams();
    }
}
