//! Primitive quartets: geometry, Boys functions and Hermite Coulomb integrals on four lanes.

use super::hermite::{MAX_DEGREE, hermite_coulomb};
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
pub(super) struct Primitives<'a, const L: usize> {
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

impl<const L: usize> Kernel for Primitives<'_, L> {
    /// Number of ket primitives done: it stops at the first that is negligible in all lanes.
    type Output = usize;

    #[inline(always)]
    fn run<V: Lanes>(self) -> usize {
        let number = |index: usize| V::load(&self.bra[index]);
        let p = number(field::EXPONENT);
        let centre: [V; 3] = std::array::from_fn(|i| number(field::CENTRE + i));
        let factor = number(field::FACTOR);
        let bound = number(field::BOUND);
        let cut = V::load(self.cut);
        let mut done = 0;
        let per_primitive = self.out.chunks_exact_mut(const { hermite_count(L) });
        for (ket, out) in self.ket.chunks_exact(self.stride).zip(per_primitive) {
            let number = |index: usize| V::load(&ket[index]);
            let kept = bound.mul(number(field::BOUND)).at_least(cut);
            if kept.count_set() == 0 {
                break;
            }
            let q = number(field::EXPONENT);
            let pq: [V; 3] = std::array::from_fn(|i| centre[i].sub(number(field::CENTRE + i)));
            let inverse = V::splat(1.0).div(p.add(q));
            let alpha = p.mul(q).mul(inverse);
            let square = pq[0].mul_add(pq[0], pq[1].mul_add(pq[1], pq[2].mul(pq[2])));
            let prefactor = factor
                .mul(number(field::FACTOR))
                .mul(inverse.sqrt())
                .only(kept);
            let roots = boys_roots::<V, L>(
                self.table,
                alpha.mul(square),
                alpha.mul(V::splat(-2.0)),
                prefactor,
            );
            hermite_coulomb::<V, L>(&roots, &pq, out, self.scratch);
            done += 1;
        }
        done
    }
}

/// prefactor · power^m · F_m(x) for m = 0 … L.
///
/// What a lane gets does not depend on the other lanes: each value comes from the table or from the
/// asymptotic form by its own x alone, so that a quartet has the same bits in any company.
#[inline(always)]
fn boys_roots<V: Lanes, const L: usize>(
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
            let start = V::from_array(cells.map(|c| table.exponentials[c]));
            let p = &table.exponential;
            let mut sum = V::splat(p[7]);
            for k in (0..7).rev() {
                sum = sum.mul_add(d, V::splat(p[k]));
            }
            start.mul(sum)
        };
        let polynomial = V::transposed(cells.map(|c| &table.cells[c]));
        let mut sum = polynomial[7];
        for k in (0..7).rev() {
            sum = sum.mul_add(d, polynomial[k]);
        }
        roots[L] = sum;
        let twice = x.add(x);
        for m in (0..L).rev() {
            let next = twice.mul_add(roots[m + 1], exponential);
            roots[m] = next.mul(V::splat(1.0 / (2 * m + 1) as f64));
        }
    }
    if far_lanes > 0 {
        let inverse = V::splat(1.0).div(x);
        let half = inverse.mul(V::splat(0.5));
        let mut value = inverse.mul(V::splat(std::f64::consts::FRAC_PI_4)).sqrt();
        for m in 0..=L {
            roots[m] = far.choose(value, roots[m]);
            value = value.mul(half.mul(V::splat((2 * m + 1) as f64)));
        }
    }
    let mut scale = prefactor;
    for root in &mut roots[..=L] {
        *root = root.mul(scale);
        scale = scale.mul(power);
    }
    roots
}

/// The primitive kernel of one degree as a plain function.
pub(in crate::integrals) type PrimitiveFunction =
    fn(&[Four], &[Four], usize, &Four, &BoysTable, &mut [Four], &mut [Four]) -> usize;

fn run<const L: usize>(
    bra: &[Four],
    ket: &[Four],
    stride: usize,
    cut: &Four,
    table: &BoysTable,
    out: &mut [Four],
    scratch: &mut [Four],
) -> usize {
    dispatch(Primitives::<L> {
        bra,
        ket,
        stride,
        cut,
        table,
        out,
        scratch,
    })
}

/// Primitive kernels by degree.
pub(in crate::integrals) const PRIMITIVES: [PrimitiveFunction; MAX_DEGREE + 1] = [
    run::<0>, run::<1>, run::<2>, run::<3>, run::<4>, run::<5>, run::<6>, run::<7>, run::<8>,
    run::<9>, run::<10>, run::<11>, run::<12>, run::<13>, run::<14>, run::<15>, run::<16>,
    run::<17>,
];
