//! Primitive quartets: geometry, Boys functions and Hermite Coulomb integrals on four lanes.

use super::hermite::{Looped, MAX_DEGREE, Recursion, Unrolled, work_elements};
use super::lanes::{Four, Kernel, Lanes, dispatch};
use crate::integrals::boys::{BoysTable, CELLS_PER_UNIT};
use crate::integrals::recurrence::hermite_count;

/// Places of the numbers of one primitive pair in a block; its scalars follow.
pub(in crate::integrals) mod field {
    /// Exponent p = a + b.
    pub(in crate::integrals) const EXPONENT: usize = 0;
    /// Centre of charge P, three numbers.
    pub(in crate::integrals) const CENTRE: usize = 1;
    /// √(2π^(5/2)) exp(−ab/p |AB|²) / p.
    pub(in crate::integrals) const FACTOR: usize = 4;
    /// Upper bound of the self-repulsion, square root of.
    pub(in crate::integrals) const BOUND: usize = 5;
    /// First scalar of the pair class.
    pub(in crate::integrals) const SCALARS: usize = 6;
}

/// One bra primitive with a run of ket primitives.
pub(super) struct Primitives<'a, R> {
    pub(super) recursion: R,
    /// Numbers of the bra primitive.
    pub(super) bra: &'a [Four],
    /// Numbers of the ket primitives, `stride` for each.
    pub(super) ket: &'a [Four],
    pub(super) stride: usize,
    /// Primitive quartets whose bounds multiply to less are left out.
    pub(super) cut: &'a Four,
    pub(super) table: &'a BoysTable,
    /// R for each ket primitive in turn, [`hermite_count`] of L numbers each.
    pub(super) out: &'a mut [Four],
    pub(super) scratch: &'a mut [Four],
}

impl<R: Recursion> Kernel for Primitives<'_, R> {
    /// Number of ket primitives done: it stops at the first that is negligible in all lanes.
    type Output = usize;

    #[inline(always)]
    fn run<V: Lanes>(self) -> usize {
        let number = |index: usize| V::load(&self.bra[index]);
        let p = number(field::EXPONENT);
        let centre = [
            number(field::CENTRE),
            number(field::CENTRE + 1),
            number(field::CENTRE + 2),
        ];
        let factor = number(field::FACTOR);
        let bound = number(field::BOUND);
        let cut = V::load(self.cut);
        let degree = self.recursion.degree();
        let stage_len = stage_len(degree);
        let (stages, scratch) = self
            .scratch
            .split_at_mut(self.scratch.len() - work_elements(degree));
        // Two loops instead of one: each body is a long chain of dependent operations, and the
        // processor overlaps neighbouring bodies only while they are short.
        let mut done = 0;
        let kets = self.ket.chunks_exact(self.stride);
        for (ket, stage) in kets.zip(stages.chunks_exact_mut(stage_len)) {
            let number = |index: usize| V::load(&ket[index]);
            let kept = bound.mul(number(field::BOUND)).at_least(cut);
            if kept.count_set() == 0 {
                break;
            }
            let q = number(field::EXPONENT);
            let pq = [
                centre[0].sub(number(field::CENTRE)),
                centre[1].sub(number(field::CENTRE + 1)),
                centre[2].sub(number(field::CENTRE + 2)),
            ];
            let inverse = V::splat(1.0).div(p.add(q));
            let alpha = p.mul(q).mul(inverse);
            let square = pq[0].mul_add(pq[0], pq[1].mul_add(pq[1], pq[2].mul(pq[2])));
            let prefactor = factor
                .mul(number(field::FACTOR))
                .mul(inverse.sqrt())
                .only(kept);
            let power = alpha.mul(V::splat(-2.0));
            let roots = boys_roots::<V>(degree, self.table, alpha.mul(square), power, prefactor);
            for (to, from) in stage.iter_mut().zip(pq.iter().chain(&roots[..=degree])) {
                from.store(to);
            }
            done += 1;
        }
        let outs = self.out.chunks_exact_mut(hermite_count(degree));
        for (stage, out) in stages.chunks_exact(stage_len).zip(outs).take(done) {
            let pq = [V::load(&stage[0]), V::load(&stage[1]), V::load(&stage[2])];
            let mut roots = [V::zero(); MAX_DEGREE + 1];
            for (root, from) in roots[..=degree].iter_mut().zip(&stage[3..]) {
                *root = V::load(from);
            }
            self.recursion.run::<V>(&roots, &pq, out, scratch);
        }
        done
    }
}

/// Vector PQ and the roots of one primitive quartet.
const fn stage_len(degree: usize) -> usize {
    degree + 4
}

/// Scratch that [`primitives`] and [`run_primitives`] need for `count` ket primitives at once.
pub(in crate::integrals) const fn scratch_len(degree: usize, count: usize) -> usize {
    count * stage_len(degree) + work_elements(degree)
}

/// prefactor · power^m · F_m(x) for m = 0 … degree.
///
/// What a lane gets does not depend on the other lanes: each value comes from the table or from the
/// asymptotic form by its own x alone, so that a quartet has the same bits in any company.
#[inline(always)]
fn boys_roots<V: Lanes>(
    degree: usize,
    table: &BoysTable,
    x: V,
    power: V,
    prefactor: V,
) -> [V; MAX_DEGREE + 1] {
    let limit = V::splat(table.limit);
    let far = x.at_least(limit);
    let far_lanes = far.count_set();
    let mut roots = [V::zero(); MAX_DEGREE + 1];
    if far_lanes < 4 {
        let x = x.min(limit);
        let (cells, cell) = x
            .mul_add(V::splat(CELLS_PER_UNIT), V::splat(0.5))
            .truncate();
        let d = cell.mul_add(V::splat(-1.0 / CELLS_PER_UNIT), x);
        let exponential = {
            let start = V::from_array(&[
                table.exponentials[cells[0]],
                table.exponentials[cells[1]],
                table.exponentials[cells[2]],
                table.exponentials[cells[3]],
            ]);
            let p = &table.exponential;
            let mut sum = V::splat(p[7]);
            for k in (0..7).rev() {
                sum = sum.mul_add(d, V::splat(p[k]));
            }
            start.mul(sum)
        };
        let polynomial = V::transposed([
            &table.cells[cells[0]],
            &table.cells[cells[1]],
            &table.cells[cells[2]],
            &table.cells[cells[3]],
        ]);
        let mut sum = polynomial[7];
        for k in (0..7).rev() {
            sum = sum.mul_add(d, polynomial[k]);
        }
        roots[degree] = sum;
        let twice = x.add(x);
        for m in (0..degree).rev() {
            let next = twice.mul_add(roots[m + 1], exponential);
            roots[m] = next.mul(V::splat(1.0 / (2 * m + 1) as f64));
        }
    }
    if far_lanes > 0 {
        let inverse = V::splat(1.0).div(x);
        let half = inverse.mul(V::splat(0.5));
        let mut value = inverse.mul(V::splat(std::f64::consts::FRAC_PI_4)).sqrt();
        for m in 0..=degree {
            roots[m] = far.choose(value, roots[m]);
            value = value.mul(half.mul(V::splat((2 * m + 1) as f64)));
        }
    }
    let mut scale = prefactor;
    for root in &mut roots[..=degree] {
        *root = root.mul(scale);
        scale = scale.mul(power);
    }
    roots
}

/// The primitive kernel of a degree known at run time only.
#[inline(always)]
pub(super) fn primitives<V: Lanes>(
    degree: usize,
    bra: &[Four],
    ket: &[Four],
    stride: usize,
    cut: &Four,
    table: &BoysTable,
    out: &mut [Four],
    scratch: &mut [Four],
) -> usize {
    macro_rules! by_degree {
        ($($degree:literal)*) => {
            match degree {
                $($degree if V::WIDE => V::call(Primitives {
                    recursion: Unrolled::<$degree>,
                    bra, ket, stride, cut, table, out, scratch,
                }),)*
                _ => V::call(Primitives {
                    recursion: Looped(degree),
                    bra, ket, stride, cut, table, out, scratch,
                }),
            }
        };
    }
    by_degree!(0 1 2 3 4 5 6)
}

/// One bra primitive with a run of ket primitives, for callers outside the vector code: how many of the
/// ket primitives were done, see [`Primitives`].
pub(in crate::integrals) fn run_primitives(
    degree: usize,
    bra: &[Four],
    ket: &[Four],
    stride: usize,
    cut: &Four,
    table: &BoysTable,
    out: &mut [Four],
    scratch: &mut [Four],
) -> usize {
    struct ByDegree<'a> {
        degree: usize,
        bra: &'a [Four],
        ket: &'a [Four],
        stride: usize,
        cut: &'a Four,
        table: &'a BoysTable,
        out: &'a mut [Four],
        scratch: &'a mut [Four],
    }
    impl Kernel for ByDegree<'_> {
        type Output = usize;

        #[inline(always)]
        fn run<V: Lanes>(self) -> usize {
            primitives::<V>(
                self.degree,
                self.bra,
                self.ket,
                self.stride,
                self.cut,
                self.table,
                self.out,
                self.scratch,
            )
        }
    }
    dispatch(ByDegree {
        degree,
        bra,
        ket,
        stride,
        cut,
        table,
        out,
        scratch,
    })
}
