//! Hermite Coulomb integrals R_tuv on four lanes.
//!
//! L. E. McMurchie and E. R. Davidson, J. Comput. Phys. 26, 218 (1978), eqs. 4.6–4.8:
//! R^(m)_(t+1) = X R^(m+1)_t + t R^(m+1)_(t−1) in each direction, from
//! R^(m)_0 = (−2α)^m F_m(α |PQ|²). Wanted are all R^(0) up to degree L.
//!
//! The steps of the recursion are a table made at compile time. Up to [`UNROLLED`] they are
//! unrolled with the table folded into the code; beyond, a loop runs over the table, because
//! unrolled code would take the compiler minutes and spill every register anyway.

use super::lanes::{Four, Lanes};
use crate::integrals::recurrence::{hermite_count, hermite_index};

/// Highest degree whose recursion is unrolled.
pub(super) const UNROLLED: usize = 6;
/// Highest degree: a derivative of (gg|gg).
pub(super) const MAX_DEGREE: usize = 17;

/// One step: work[target] = PQ[axis] · work[first] + factor · work[second].
#[derive(Clone, Copy)]
struct Step {
    target: u16,
    first: u16,
    second: u16,
    axis: u8,
    factor: u8,
}

const NO_STEP: Step = Step {
    target: 0,
    first: 0,
    second: 0,
    axis: 0,
    factor: 0,
};

/// Number of intermediates R^(m)_tuv with t + u + v + m ≤ `degree`.
const fn work_len(degree: usize) -> usize {
    hermite_count(degree) * (degree + 4) / 4
}

/// Room for the steps of degree `UNROLLED` (203), in whole tens.
const MAX_UNROLLED_STEPS: usize = 210;

/// Place of R^(m)_tuv: R^(0) first and in Hermite order, then R^(1), and so on.
const fn place(degree: usize, m: usize, t: usize, u: usize, v: usize) -> usize {
    let mut start = 0;
    let mut k = 0;
    while k < m {
        start += hermite_count(degree - k);
        k += 1;
    }
    start + hermite_index(t, u, v)
}

/// The steps for one degree in an order that has sources before targets.
const fn steps<const N: usize>(degree: usize) -> [Step; N] {
    let mut list = [NO_STEP; N];
    let mut filled = 0;
    let mut d = 1;
    while d <= degree {
        let mut rest = 0;
        while rest <= d {
            let mut v = 0;
            while v <= rest {
                let power = [d - rest, rest - v, v];
                // The direction of lowest positive power: with power one the second term vanishes.
                let mut axis = 3;
                let mut k = 0;
                while k < 3 {
                    if power[k] > 0 && (axis == 3 || power[k] < power[axis]) {
                        axis = k;
                    }
                    k += 1;
                }
                let mut lower = power;
                lower[axis] -= 1;
                let mut lowest = lower;
                let factor = lower[axis];
                if factor > 0 {
                    lowest[axis] -= 1;
                }
                let mut m = 0;
                while m + d <= degree {
                    list[filled] = Step {
                        target: place(degree, m, power[0], power[1], power[2]) as u16,
                        first: place(degree, m + 1, lower[0], lower[1], lower[2]) as u16,
                        second: place(degree, m + 1, lowest[0], lowest[1], lowest[2]) as u16,
                        axis: axis as u8,
                        factor: factor as u8,
                    };
                    filled += 1;
                    m += 1;
                }
                v += 1;
            }
            rest += 1;
        }
        d += 1;
    }
    list
}

/// Places of R^(m)_000.
const fn roots(degree: usize) -> [usize; MAX_DEGREE + 1] {
    let mut list = [0; MAX_DEGREE + 1];
    let mut m = 0;
    while m <= degree {
        list[m] = place(degree, m, 0, 0, 0);
        m += 1;
    }
    list
}

/// The tables of one degree.
#[derive(Clone, Copy)]
struct Table {
    steps: &'static [Step],
    roots: [usize; MAX_DEGREE + 1],
}

/// All tables by degree.
static TABLES: [Table; MAX_DEGREE + 1] = {
    macro_rules! tables {
        ($($degree:literal)*) => {
            [$(Table {
                steps: const { &steps::<{ work_len($degree) - $degree - 1 }>($degree) },
                roots: roots($degree),
            }),*]
        };
    }
    tables!(0 1 2 3 4 5 6 7 8 9 10 11 12 13 14 15 16 17)
};

/// A way to run the recursion of one degree.
pub(super) trait Recursion: Copy {
    /// The degree L.
    fn degree(self) -> usize;

    /// All R^(0) of degree up to L, in Hermite order, into `out`.
    ///
    /// `roots[m]` is (−2α)^m F_m times whatever factor the integrals carry. `scratch` holds
    /// [`work_elements`] elements.
    fn run<V: Lanes>(
        self,
        roots: &[V; MAX_DEGREE + 1],
        pq: &[V; 3],
        out: &mut [Four],
        scratch: &mut [Four],
    );
}

/// The recursion as a loop over its table.
#[derive(Clone, Copy)]
pub(super) struct Looped(pub(super) usize);

impl Recursion for Looped {
    #[inline(always)]
    fn degree(self) -> usize {
        self.0
    }

    #[inline(always)]
    fn run<V: Lanes>(
        self,
        roots: &[V; MAX_DEGREE + 1],
        pq: &[V; 3],
        out: &mut [Four],
        scratch: &mut [Four],
    ) {
        let table = &TABLES[self.0];
        let work = &mut scratch[..work_len(self.0)];
        for m in 0..=self.0 {
            roots[m].store(&mut work[table.roots[m]]);
        }
        for s in table.steps {
            let product = pq[s.axis as usize].mul(V::load(&work[s.first as usize]));
            let second = V::load(&work[s.second as usize]);
            let sum = V::splat(f64::from(s.factor)).mul_add(second, product);
            sum.store(&mut work[s.target as usize]);
        }
        let count = hermite_count(self.0);
        out[..count].copy_from_slice(&work[..count]);
    }
}

/// The recursion as straight code.
#[derive(Clone, Copy)]
pub(super) struct Unrolled<const L: usize>;

impl<const L: usize> Unrolled<L> {
    const COUNT: usize = work_len(L) - L - 1;
    /// The steps, and room for whole tens.
    const STEPS: [Step; MAX_UNROLLED_STEPS] = steps(L);
    const ROOTS: [usize; MAX_DEGREE + 1] = roots(L);

    #[inline(always)]
    fn step<V: Lanes, const I: usize>(
        work: &mut [V; work_len(UNROLLED)],
        pq: &[V; 3],
        small: &[V; UNROLLED],
    ) {
        if const { I < Self::COUNT } {
            let s = const { Self::STEPS[I] };
            let product = pq[s.axis as usize].mul(work[s.first as usize]);
            work[s.target as usize] = match s.factor {
                0 => product,
                1 => pq[s.axis as usize].mul_add(work[s.first as usize], work[s.second as usize]),
                n => small[n as usize].mul_add(work[s.second as usize], product),
            };
        }
    }
}

macro_rules! unrolled {
    ($($degree:literal: $($ten:literal)*;)*) => {
        $(impl Recursion for Unrolled<$degree> {
            #[inline(always)]
            fn degree(self) -> usize {
                $degree
            }

            #[inline(always)]
            fn run<V: Lanes>(
                self,
                roots: &[V; MAX_DEGREE + 1],
                pq: &[V; 3],
                out: &mut [Four],
                _scratch: &mut [Four],
            ) {
                let out = &mut out[..const { hermite_count($degree) }];
                let mut work = [V::zero(); work_len(UNROLLED)];
                for m in 0..=$degree {
                    work[Self::ROOTS[m]] = roots[m];
                }
                let mut small = [V::zero(); UNROLLED];
                for (i, number) in small.iter_mut().enumerate() {
                    *number = V::splat(i as f64);
                }
                $(
                    Self::step::<V, { 10 * $ten }>(&mut work, pq, &small);
                    Self::step::<V, { 10 * $ten + 1 }>(&mut work, pq, &small);
                    Self::step::<V, { 10 * $ten + 2 }>(&mut work, pq, &small);
                    Self::step::<V, { 10 * $ten + 3 }>(&mut work, pq, &small);
                    Self::step::<V, { 10 * $ten + 4 }>(&mut work, pq, &small);
                    Self::step::<V, { 10 * $ten + 5 }>(&mut work, pq, &small);
                    Self::step::<V, { 10 * $ten + 6 }>(&mut work, pq, &small);
                    Self::step::<V, { 10 * $ten + 7 }>(&mut work, pq, &small);
                    Self::step::<V, { 10 * $ten + 8 }>(&mut work, pq, &small);
                    Self::step::<V, { 10 * $ten + 9 }>(&mut work, pq, &small);
                )*
                let _ = pq;
                for (to, from) in out.iter_mut().zip(work.iter()) {
                    from.store(to);
                }
            }
        })*
    };
}

unrolled! {
    0: ;
    1: 0;
    2: 0 1;
    3: 0 1 2 3;
    4: 0 1 2 3 4 5 6;
    5: 0 1 2 3 4 5 6 7 8 9 10 11;
    6: 0 1 2 3 4 5 6 7 8 9 10 11 12 13 14 15 16 17 18 19 20;
}

/// Scratch that the recursion of `degree` needs.
pub(super) const fn work_elements(degree: usize) -> usize {
    work_len(degree)
}
