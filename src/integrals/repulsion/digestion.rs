//! Coulomb and exchange matrices from densities.

use super::lanes::{Kernel, Lanes, dispatch};
use super::pair_count;
use nalgebra::DMatrix;
use rayon::prelude::*;

/// The two matrices of one density.
#[derive(Debug, Clone, PartialEq)]
pub struct CoulombExchangePair {
    /// J_ab = Σ (ab|cd) P_cd, in hartree.
    pub coulomb: DMatrix<f64>,
    /// K_ab = Σ (ac|bd) P_cd, in hartree.
    pub exchange: DMatrix<f64>,
}

/// Something that can turn densities into Coulomb and exchange matrices.
pub trait CoulombExchange: Sync {
    /// J and K (n × n) for each of several symmetric densities (n × n), in one pass over the integrals.
    fn coulomb_exchange(&self, densities: &[DMatrix<f64>]) -> Vec<CoulombExchangePair>;
}

/// Integrals that one task handles at least: a fixed number, for the same bits on any machine.
const INTEGRALS_PER_TASK: usize = 1 << 18;
/// Most tasks: each holds matrices of its own.
const MOST_TASKS: usize = 16;

/// How far ahead of their use integrals are asked for, in numbers: about the time that memory takes to answer.
/// The processor's own look-ahead does not cross pages.
const AHEAD: usize = 512;

/// What whole vectors may read and write beyond the end of packed places.
const PADDING: usize = 3;

/// Distance of the rows of square matrices: whole vectors stay inside a row.
const fn row_stride(n: usize) -> usize {
    n.next_multiple_of(4)
}

/// A density in the forms that the pass over the list needs.
struct Density {
    /// P, rows contiguous, [`row_stride`] apart.
    full: Vec<f64>,
    /// (2 − δ_cd) P_cd at packed place cd.
    packed: Vec<f64>,
}

/// The sums that a pass makes for one density.
struct Sums {
    /// J at packed places.
    coulomb: Vec<f64>,
    /// Half of the exchange matrix, rows [`row_stride`] apart: K is this plus its transpose.
    exchange: Vec<f64>,
}

impl Density {
    fn new(density: &DMatrix<f64>) -> Self {
        let n = density.nrows();
        let stride = row_stride(n);
        let mut full = vec![0.0; n * stride];
        for (row, column) in full.chunks_exact_mut(stride).zip(density.column_iter()) {
            // Symmetric: a column is a row.
            for (to, from) in row.iter_mut().zip(column.iter()) {
                *to = *from;
            }
        }
        let mut packed = Vec::with_capacity(pair_count(n) + PADDING);
        for c in 0..n {
            packed.extend((0..c).map(|d| 2.0 * density[(c, d)]));
            packed.push(density[(c, c)]);
        }
        packed.extend([0.0; PADDING]);
        Self { full, packed }
    }
}

/// J and K from the packed list of a basis of `n` functions.
pub(super) fn coulomb_exchange_packed(
    list: &[f64],
    n: usize,
    densities: &[DMatrix<f64>],
) -> Vec<CoulombExchangePair> {
    assert!(densities.iter().all(|p| p.shape() == (n, n)));
    let pairs = pair_count(n);
    let tasks = (list.len() / INTEGRALS_PER_TASK).clamp(1, MOST_TASKS);
    // Rows ab have ab + 1 integrals: equal work ends at √(k / tasks) of all rows.
    let ends: Vec<usize> = (0..=tasks)
        .map(|k| ((k as f64 / tasks as f64).sqrt() * pairs as f64).round() as usize)
        .collect();
    let densities: Vec<Density> = densities.iter().map(Density::new).collect();
    let parts: Vec<Vec<Sums>> = (0..tasks)
        .into_par_iter()
        .map(|k| {
            dispatch(Rows {
                list,
                n,
                rows: ends[k]..ends[k + 1],
                densities: &densities,
            })
        })
        .collect();
    (0..densities.len())
        .map(|index| add_up(n, parts.iter().map(|part| &part[index])))
        .collect()
}

/// Adds the sums of all tasks in order.
fn add_up<'a>(n: usize, parts: impl Iterator<Item = &'a Sums>) -> CoulombExchangePair {
    let mut coulomb = vec![0.0; pair_count(n)];
    let stride = row_stride(n);
    let mut half = vec![0.0; n * stride];
    for part in parts {
        for (sum, term) in coulomb.iter_mut().zip(&part.coulomb) {
            *sum += term;
        }
        for (sum, term) in half.iter_mut().zip(&part.exchange) {
            *sum += term;
        }
    }
    CoulombExchangePair {
        coulomb: DMatrix::from_fn(n, n, |a, b| coulomb[pair_count(a.max(b)) + a.min(b)]),
        exchange: DMatrix::from_fn(n, n, |a, b| half[a * stride + b] + half[b * stride + a]),
    }
}

/// A range of rows ab of the list.
struct Rows<'a> {
    list: &'a [f64],
    n: usize,
    rows: std::ops::Range<usize>,
    densities: &'a [Density],
}

impl Kernel for Rows<'_> {
    type Output = Vec<Sums>;

    #[inline(always)]
    fn run<V: Lanes>(self) -> Vec<Sums> {
        let n = self.n;
        let stride = row_stride(n);
        let mut all: Vec<Sums> = self
            .densities
            .iter()
            .map(|_| Sums {
                coulomb: vec![0.0; pair_count(n) + PADDING],
                exchange: vec![0.0; n * stride],
            })
            .collect();
        // The two rows of K where they are one, a = b.
        let mut twins = [vec![0.0; stride], vec![0.0; stride]];
        // Row ab: a is the largest with a(a+1)/2 ≤ ab.
        let mut a = ((8 * self.rows.start + 1).isqrt() - 1) / 2;
        let mut b = self.rows.start - pair_count(a);
        for ab in self.rows {
            // The row is read from memory once and then, for further densities, from the cache.
            let integrals = &self.list[pair_count(ab)..][..=ab];
            for (density, sums) in self.densities.iter().zip(&mut all) {
                let [twin_a, twin_b] = &mut twins;
                let (exchange_a, exchange_b) = if a == b {
                    (twin_a.as_mut_slice(), twin_b.as_mut_slice())
                } else {
                    let (earlier, later) = sums.exchange.split_at_mut(a * stride);
                    (&mut later[..stride], &mut earlier[b * stride..][..stride])
                };
                let coulomb_ab = Row {
                    integrals,
                    a,
                    b,
                    density_a: &density.full[a * stride..][..stride],
                    density_b: &density.full[b * stride..][..stride],
                    packed: &density.packed,
                    exchange_a,
                    exchange_b,
                    coulomb: &mut sums.coulomb,
                }
                .add::<V>();
                sums.coulomb[ab] += coulomb_ab;
                if a == b {
                    let to = &mut sums.exchange[a * stride..][..stride];
                    for twin in &mut twins {
                        for (to, from) in to.iter_mut().zip(twin) {
                            *to += 0.5 * *from;
                            *from = 0.0;
                        }
                    }
                }
            }
            b += 1;
            if b > a {
                a += 1;
                b = 0;
            }
        }
        all
    }
}

/// One row ab of the list with one density.
///
/// A stretch of a row with fixed c is contiguous over d, and serves two dot products (K_ac, K_bc) and
/// two updates (rows a and b of K) besides the two of J. Two stretches share what they read and write
/// of rows a and b. For K, integrals with c = d or ab = cd
/// count half for each of these (a = b is dealt with by the caller).
struct Row<'a> {
    integrals: &'a [f64],
    a: usize,
    b: usize,
    density_a: &'a [f64],
    density_b: &'a [f64],
    packed: &'a [f64],
    exchange_a: &'a mut [f64],
    exchange_b: &'a mut [f64],
    coulomb: &'a mut [f64],
}

/// Weights, for J and for K, of the four integrals of which the one with this index is the last (c = d).
const LAST_FOUR: [[[f64; 4]; 2]; 4] = [
    [[1.0, 0.0, 0.0, 0.0], [0.5, 0.0, 0.0, 0.0]],
    [[1.0, 1.0, 0.0, 0.0], [1.0, 0.5, 0.0, 0.0]],
    [[1.0, 1.0, 1.0, 0.0], [1.0, 1.0, 0.5, 0.0]],
    [[1.0, 1.0, 1.0, 1.0], [1.0, 1.0, 1.0, 0.5]],
];

/// Sums of one stretch: Σ_d v P_bd, Σ_d v P_ad, Σ_d v P'_cd.
#[derive(Clone, Copy)]
struct Dots<V>([V; 3]);

impl Row<'_> {
    /// Adds the row to everything but J_ab, which it returns.
    #[inline(always)]
    fn add<V: Lanes>(mut self) -> f64 {
        let density_ab = V::splat(self.packed[self.integrals.len() - 1]);
        let mut coulomb = V::zero();
        // Two stretches at a time while whole vectors stay inside the row.
        let mut c = 0;
        while c + 1 < self.a && pair_count(c + 1) + c / 4 * 4 + 4 <= self.integrals.len() {
            self.two_stretches::<V>(c, density_ab, &mut coulomb);
            c += 2;
        }
        let mut coulomb_ab = sum(coulomb);
        for c in c..self.a {
            let start = pair_count(c);
            let whole = c / 4 * 4;
            let mut dots = self.whole_fours::<V>(c, start, whole, density_ab);
            if start + whole + 4 <= self.integrals.len() {
                let [weight_j, weight_k] = &LAST_FOUR[c - whole];
                let value = V::from_array(four(self.integrals, start + whole));
                let value_j = value.mul(V::from_array(weight_j));
                let value_k = value.mul(V::from_array(weight_k));
                self.four::<V>(c, whole, start, [value_j, value_k], density_ab, &mut dots);
                let [k_ac, k_bc, j_ab] = dots.sums();
                self.exchange_a[c] += k_ac;
                self.exchange_b[c] += k_bc;
                coulomb_ab += j_ab;
            } else {
                coulomb_ab += self.last_singly(c, start, whole, c, dots.sums());
            }
        }
        let start = pair_count(self.a);
        let whole = self.b / 4 * 4;
        let dots = self.whole_fours::<V>(self.a, start, whole, density_ab);
        coulomb_ab + self.last_singly(self.a, start, whole, self.b, dots.sums())
    }

    /// The stretches c, even, and c + 1; adds to the lanes of J_ab.
    #[inline(always)]
    fn two_stretches<V: Lanes>(&mut self, c: usize, density_ab: V, coulomb_ab: &mut V) {
        let factor_a0 = V::splat(self.density_b[c]);
        let factor_a1 = V::splat(self.density_b[c + 1]);
        let factor_b0 = V::splat(self.density_a[c]);
        let factor_b1 = V::splat(self.density_a[c + 1]);
        let [mut dot_a0, mut dot_a1] = [V::zero(); 2];
        let [mut dot_b0, mut dot_b1] = [V::zero(); 2];
        let mut total = *coulomb_ab;
        let (start0, start1) = (pair_count(c), pair_count(c + 1));
        let whole = c / 4 * 4;
        {
            let values0 = fours(self.integrals, start0, whole);
            let count = values0.len();
            let values1 = &fours(self.integrals, start1, whole)[..count];
            let packed0 = &fours(self.packed, start0, whole)[..count];
            let packed1 = &fours(self.packed, start1, whole)[..count];
            let density_a = &fours(self.density_a, 0, whole)[..count];
            let density_b = &fours(self.density_b, 0, whole)[..count];
            let exchange_a = &mut self.exchange_a[..whole].as_chunks_mut::<4>().0[..count];
            let exchange_b = &mut self.exchange_b[..whole].as_chunks_mut::<4>().0[..count];
            let (first, second) = self.coulomb.split_at_mut(start1);
            let coulomb0 = &mut first[start0..][..whole].as_chunks_mut::<4>().0[..count];
            let coulomb1 = &mut second[..whole].as_chunks_mut::<4>().0[..count];
            let coming = &self.integrals[start0..];
            for k in 0..count {
                V::prefetch(coming, 8 * k + AHEAD);
                let value0 = V::from_array(&values0[k]);
                let value1 = V::from_array(&values1[k]);
                let p_a = V::from_array(&density_a[k]);
                let p_b = V::from_array(&density_b[k]);
                dot_a0 = value0.mul_add(p_b, dot_a0);
                dot_a1 = value1.mul_add(p_b, dot_a1);
                dot_b0 = value0.mul_add(p_a, dot_b0);
                dot_b1 = value1.mul_add(p_a, dot_b1);
                total = value0.mul_add(V::from_array(&packed0[k]), total);
                total = value1.mul_add(V::from_array(&packed1[k]), total);
                let k_a = value0.mul_add(factor_a0, V::from_array(&exchange_a[k]));
                exchange_a[k] = value1.mul_add(factor_a1, k_a).to_array();
                let k_b = value0.mul_add(factor_b0, V::from_array(&exchange_b[k]));
                exchange_b[k] = value1.mul_add(factor_b1, k_b).to_array();
                let j = value0.mul_add(density_ab, V::from_array(&coulomb0[k]));
                coulomb0[k] = j.to_array();
                let j = value1.mul_add(density_ab, V::from_array(&coulomb1[k]));
                coulomb1[k] = j.to_array();
            }
        }
        // The two ends, up to c = d.
        let p_a = V::from_array(four(self.density_a, whole));
        let p_b = V::from_array(four(self.density_b, whole));
        let value = V::from_array(four(self.integrals, start0 + whole));
        let [weight_j, weight_k] = &LAST_FOUR[c - whole];
        let value_j0 = value.mul(V::from_array(weight_j));
        let value0 = value.mul(V::from_array(weight_k));
        let value = V::from_array(four(self.integrals, start1 + whole));
        let [weight_j, weight_k] = &LAST_FOUR[c + 1 - whole];
        let value_j1 = value.mul(V::from_array(weight_j));
        let value1 = value.mul(V::from_array(weight_k));
        dot_a0 = value0.mul_add(p_b, dot_a0);
        dot_a1 = value1.mul_add(p_b, dot_a1);
        dot_b0 = value0.mul_add(p_a, dot_b0);
        dot_b1 = value1.mul_add(p_a, dot_b1);
        total = value_j0.mul_add(V::from_array(four(self.packed, start0 + whole)), total);
        total = value_j1.mul_add(V::from_array(four(self.packed, start1 + whole)), total);
        add_two(
            self.exchange_a,
            whole,
            [value0, value1],
            [factor_a0, factor_a1],
        );
        add_two(
            self.exchange_b,
            whole,
            [value0, value1],
            [factor_b0, factor_b1],
        );
        if let Some(to) = self.coulomb[start0 + whole..].first_chunk_mut::<4>() {
            *to = value_j0.mul_add(density_ab, V::from_array(to)).to_array();
        }
        if let Some(to) = self.coulomb[start1 + whole..].first_chunk_mut::<4>() {
            *to = value_j1.mul_add(density_ab, V::from_array(to)).to_array();
        }
        let [p, q, r, s] = V::transposed_square([dot_a0, dot_a1, dot_b0, dot_b1]);
        let [k_ac0, k_ac1, k_bc0, k_bc1] = p.add(q).add(r.add(s)).to_array();
        self.exchange_a[c] += k_ac0;
        self.exchange_a[c + 1] += k_ac1;
        self.exchange_b[c] += k_bc0;
        self.exchange_b[c + 1] += k_bc1;
        *coulomb_ab = total;
    }

    /// The integrals d < `whole` of a stretch.
    #[inline(always)]
    fn whole_fours<V: Lanes>(
        &mut self,
        c: usize,
        start: usize,
        whole: usize,
        density_ab: V,
    ) -> Dots<V> {
        let factor_a = V::splat(self.density_b[c]);
        let factor_b = V::splat(self.density_a[c]);
        let mut dots = Dots([V::zero(); 3]);
        let values = fours(self.integrals, start, whole);
        let count = values.len();
        let density_a = &fours(self.density_a, 0, whole)[..count];
        let density_b = &fours(self.density_b, 0, whole)[..count];
        let packed = &fours(self.packed, start, whole)[..count];
        let exchange_a = &mut self.exchange_a[..whole].as_chunks_mut::<4>().0[..count];
        let exchange_b = &mut self.exchange_b[..whole].as_chunks_mut::<4>().0[..count];
        let coulomb = &mut self.coulomb[start..][..whole].as_chunks_mut::<4>().0[..count];
        for i in 0..count {
            let value = V::from_array(&values[i]);
            dots.0[0] = value.mul_add(V::from_array(&density_b[i]), dots.0[0]);
            dots.0[1] = value.mul_add(V::from_array(&density_a[i]), dots.0[1]);
            dots.0[2] = value.mul_add(V::from_array(&packed[i]), dots.0[2]);
            let sum = value.mul_add(factor_a, V::from_array(&exchange_a[i]));
            exchange_a[i] = sum.to_array();
            let sum = value.mul_add(factor_b, V::from_array(&exchange_b[i]));
            exchange_b[i] = sum.to_array();
            let sum = value.mul_add(density_ab, V::from_array(&coulomb[i]));
            coulomb[i] = sum.to_array();
        }
        dots
    }

    /// Four integrals from d on, already weighted for J and for K.
    #[inline(always)]
    fn four<V: Lanes>(
        &mut self,
        c: usize,
        d: usize,
        start: usize,
        [value_j, value_k]: [V; 2],
        density_ab: V,
        dots: &mut Dots<V>,
    ) {
        let add = |to: &mut [f64], at: usize, value: V, factor: V| {
            if let Some(to) = to[at..].first_chunk_mut::<4>() {
                *to = value.mul_add(factor, V::from_array(to)).to_array();
            }
        };
        dots.0[0] = value_k.mul_add(V::from_array(four(self.density_b, d)), dots.0[0]);
        dots.0[1] = value_k.mul_add(V::from_array(four(self.density_a, d)), dots.0[1]);
        dots.0[2] = value_j.mul_add(V::from_array(four(self.packed, start + d)), dots.0[2]);
        add(self.exchange_a, d, value_k, V::splat(self.density_b[c]));
        add(self.exchange_b, d, value_k, V::splat(self.density_a[c]));
        add(self.coulomb, start + d, value_j, density_ab);
    }

    /// The integrals from d = `whole` to `last` one by one, and the end of the stretch.
    fn last_singly(
        &mut self,
        c: usize,
        start: usize,
        whole: usize,
        last: usize,
        [mut k_ac, mut k_bc, mut j_ab]: [f64; 3],
    ) -> f64 {
        let ab = self.integrals.len() - 1;
        for d in whole..=last {
            let cd = start + d;
            let mut value = self.integrals[cd];
            j_ab += value * self.packed[cd];
            if cd < ab {
                self.coulomb[cd] += value * self.packed[ab];
            } else {
                value *= 0.5;
            }
            if d == c {
                value *= 0.5;
            }
            k_ac += value * self.density_b[d];
            k_bc += value * self.density_a[d];
            self.exchange_a[d] += value * self.density_b[c];
            self.exchange_b[d] += value * self.density_a[c];
        }
        self.exchange_a[c] += k_ac;
        self.exchange_b[c] += k_bc;
        j_ab
    }
}

impl<V: Lanes> Dots<V> {
    #[inline(always)]
    fn sums(self) -> [f64; 3] {
        let [a, b, j] = self.0;
        [sum(a), sum(b), sum(j)]
    }
}

/// Adds Σ values · factors to the four numbers from `at` on.
#[inline(always)]
fn add_two<V: Lanes>(to: &mut [f64], at: usize, values: [V; 2], factors: [V; 2]) {
    if let Some(to) = to[at..].first_chunk_mut::<4>() {
        let first = values[0].mul_add(factors[0], V::from_array(to));
        *to = values[1].mul_add(factors[1], first).to_array();
    }
}

/// The lanes added up.
#[inline(always)]
fn sum<V: Lanes>(lanes: V) -> f64 {
    let [p, q, r, s] = lanes.to_array();
    (p + q) + (r + s)
}

/// The four numbers from `at` on.
#[inline(always)]
fn four(list: &[f64], at: usize) -> &[f64; 4] {
    list[at..].first_chunk().unwrap_or(&[0.0; 4])
}

/// `count` numbers from `at` on, by four.
#[inline(always)]
fn fours(list: &[f64], at: usize, count: usize) -> &[[f64; 4]] {
    list[at..][..count].as_chunks().0
}

#[cfg(test)]
mod tests {
    use super::*;

    /// J and K from the definition, over all n⁴ integrals.
    fn by_definition(list: &[f64], n: usize, p: &DMatrix<f64>) -> CoulombExchangePair {
        let place = |a: usize, b: usize| pair_count(a.max(b)) + a.min(b);
        let integral = |a, b, c, d| list[place(place(a, b), place(c, d))];
        let sum = |f: &dyn Fn(usize, usize) -> f64| {
            let mut total = 0.0;
            for c in 0..n {
                for d in 0..n {
                    total += f(c, d) * p[(c, d)];
                }
            }
            total
        };
        CoulombExchangePair {
            coulomb: DMatrix::from_fn(n, n, |a, b| sum(&|c, d| integral(a, b, c, d))),
            exchange: DMatrix::from_fn(n, n, |a, b| sum(&|c, d| integral(a, c, b, d))),
        }
    }

    fn numbers(seed: u64, count: usize) -> Vec<f64> {
        let mut state = seed;
        (0..count)
            .map(|_| {
                state = state
                    .wrapping_mul(6_364_136_223_846_793_005)
                    .wrapping_add(1);
                (state >> 11) as f64 / (1u64 << 53) as f64 - 0.5
            })
            .collect()
    }

    #[test]
    fn agrees_with_the_definition() {
        for n in [1, 2, 5, 9, 14] {
            let list = numbers(n as u64, pair_count(pair_count(n)));
            let densities: Vec<DMatrix<f64>> = (0..3)
                .map(|k| {
                    let m = DMatrix::from_vec(n, n, numbers(100 + k, n * n));
                    &m + m.transpose()
                })
                .collect();
            let pairs = coulomb_exchange_packed(&list, n, &densities);
            for (p, pair) in densities.iter().zip(pairs) {
                let exact = by_definition(&list, n, p);
                assert!((pair.coulomb - exact.coulomb).amax() < 1e-12);
                assert!((pair.exchange - exact.exchange).amax() < 1e-12);
            }
        }
    }
}
