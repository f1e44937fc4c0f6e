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
    fn load(from: &Four) -> Self;
    fn store(self, to: &mut Four);
    fn splat(value: f64) -> Self;
    fn from_array(values: [f64; 4]) -> Self;
    fn to_array(self) -> [f64; 4];
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
    fn from_array(values: [f64; 4]) -> Self {
        Self(values)
    }
    #[inline(always)]
    fn to_array(self) -> [f64; 4] {
        self.0
    }
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
}

#[cfg(target_arch = "x86_64")]
mod avx2 {
    use super::{CellPolynomial, Four, Lanes};
    use std::arch::x86_64::*;

    /// Four lanes in one AVX register.
    ///
    /// Values are only made inside `run_avx2`, after the processor was asked for AVX2 and FMA:
    /// that is what makes every block below sound.
    #[derive(Clone, Copy)]
    pub(super) struct Avx2(__m256d);

    impl Lanes for Avx2 {
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
        fn from_array(values: [f64; 4]) -> Self {
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
            macro_rules! half {
                ($offset:literal) => {{
                    let a = _mm256_loadu_pd(rows[0].as_ptr().add($offset));
                    let b = _mm256_loadu_pd(rows[1].as_ptr().add($offset));
                    let c = _mm256_loadu_pd(rows[2].as_ptr().add($offset));
                    let d = _mm256_loadu_pd(rows[3].as_ptr().add($offset));
                    let ab_even = _mm256_unpacklo_pd(a, b);
                    let ab_odd = _mm256_unpackhi_pd(a, b);
                    let cd_even = _mm256_unpacklo_pd(c, d);
                    let cd_odd = _mm256_unpackhi_pd(c, d);
                    [
                        Self(_mm256_permute2f128_pd::<0x20>(ab_even, cd_even)),
                        Self(_mm256_permute2f128_pd::<0x20>(ab_odd, cd_odd)),
                        Self(_mm256_permute2f128_pd::<0x31>(ab_even, cd_even)),
                        Self(_mm256_permute2f128_pd::<0x31>(ab_odd, cd_odd)),
                    ]
                }};
            }
            // SAFETY: features as said at the type; each row holds eight doubles.
            unsafe {
                let [a, b, c, d] = half!(0);
                let [e, f, g, h] = half!(4);
                [a, b, c, d, e, f, g, h]
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
