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
pub(in crate::integrals) const MAX_DEGREE: usize = 17;

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

/// The compile-time tables of one degree.
struct Table<const L: usize>;

impl<const L: usize> Table<L> {
    /// Unrolled steps: none where the loop takes over.
    const COUNT: usize = if L > UNROLLED { 0 } else { work_len(L) - L - 1 };
    const UNROLLED_STEPS: [Step; MAX_UNROLLED_STEPS] = steps(if L > UNROLLED { 0 } else { L });
    const ROOTS: [usize; MAX_DEGREE + 1] = roots(L);
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

/// All steps of the degrees beyond `UNROLLED`, in one table.
static LONG_STEPS: [&[Step]; MAX_DEGREE + 1] = {
    const fn of<const L: usize, const N: usize>() -> &'static [Step] {
        const { &steps::<N>(L) }
    }
    macro_rules! table {
        ($($degree:literal)*) => {
            [&[], &[], &[], &[], &[], &[], &[],
             $(of::<$degree, { work_len($degree) - $degree - 1 }>()),*]
        };
    }
    table!(7 8 9 10 11 12 13 14 15 16 17)
};

#[inline(always)]
fn step<V: Lanes, const L: usize, const I: usize>(
    work: &mut [V; work_len(UNROLLED)],
    pq: &[V; 3],
    small: &[V; UNROLLED],
) {
    if const { I < Table::<L>::COUNT } {
        let s = const { Table::<L>::UNROLLED_STEPS[I] };
        let product = pq[s.axis as usize].mul(work[s.first as usize]);
        work[s.target as usize] = match s.factor {
            0 => product,
            1 => pq[s.axis as usize].mul_add(work[s.first as usize], work[s.second as usize]),
            n => small[n as usize].mul_add(work[s.second as usize], product),
        };
    }
}

macro_rules! unrolled {
    ($work:ident $pq:ident $small:ident $L:ident: $($ten:literal)*) => {
        $(
            step::<V, $L, { 10 * $ten }>($work, $pq, $small);
            step::<V, $L, { 10 * $ten + 1 }>($work, $pq, $small);
            step::<V, $L, { 10 * $ten + 2 }>($work, $pq, $small);
            step::<V, $L, { 10 * $ten + 3 }>($work, $pq, $small);
            step::<V, $L, { 10 * $ten + 4 }>($work, $pq, $small);
            step::<V, $L, { 10 * $ten + 5 }>($work, $pq, $small);
            step::<V, $L, { 10 * $ten + 6 }>($work, $pq, $small);
            step::<V, $L, { 10 * $ten + 7 }>($work, $pq, $small);
            step::<V, $L, { 10 * $ten + 8 }>($work, $pq, $small);
            step::<V, $L, { 10 * $ten + 9 }>($work, $pq, $small);
        )*
    };
}

/// All R^(0) of degree up to `L`, in Hermite order, into `out`.
///
/// `roots[m]` is (−2α)^m F_m times whatever factor the integrals carry. `scratch` serves the degrees
/// beyond [`UNROLLED`] and holds [`scratch_len`] elements.
#[inline(always)]
pub(super) fn hermite_coulomb<V: Lanes, const L: usize>(
    roots: &[V; MAX_DEGREE + 1],
    pq: &[V; 3],
    out: &mut [Four],
    scratch: &mut [Four],
) {
    let out = &mut out[..const { hermite_count(L) }];
    if L > UNROLLED {
        looped::<V, L>(roots, pq, out, scratch);
        return;
    }
    let work = &mut [V::zero(); work_len(UNROLLED)];
    for m in 0..=L {
        work[Table::<L>::ROOTS[m]] = roots[m];
    }
    let small: &[V; UNROLLED] = &std::array::from_fn(|i| V::splat(i as f64));
    unrolled!(work pq small L: 0 1 2 3 4 5 6 7 8 9 10 11 12 13 14 15 16 17 18 19 20);
    for (to, from) in out.iter_mut().zip(work.iter()) {
        from.store(to);
    }
}

/// Scratch that [`hermite_coulomb`] needs for `degree`.
pub(in crate::integrals) const fn scratch_len(degree: usize) -> usize {
    if degree > UNROLLED {
        work_len(degree)
    } else {
        0
    }
}

#[inline(always)]
fn looped<V: Lanes, const L: usize>(
    roots: &[V; MAX_DEGREE + 1],
    pq: &[V; 3],
    out: &mut [Four],
    scratch: &mut [Four],
) {
    let work = &mut scratch[..const { work_len(L) }];
    for m in 0..=L {
        roots[m].store(&mut work[Table::<L>::ROOTS[m]]);
    }
    for s in LONG_STEPS[L] {
        let product = pq[s.axis as usize].mul(V::load(&work[s.first as usize]));
        let sum = V::splat(f64::from(s.factor)).mul_add(V::load(&work[s.second as usize]), product);
        sum.store(&mut work[s.target as usize]);
    }
    out.copy_from_slice(&work[..out.len()]);
}
