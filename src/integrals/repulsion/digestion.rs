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
const INTEGRALS_PER_TASK: usize = 1 << 20;
/// Most tasks: each holds matrices of its own.
const MOST_TASKS: usize = 16;

/// A density in the forms that the pass over the list needs, and the sums that it makes.
struct Sums {
    /// P, rows contiguous.
    full: Vec<f64>,
    /// (2 − δ_cd) P_cd at packed place cd.
    packed: Vec<f64>,
    /// J at packed places.
    coulomb: Vec<f64>,
    /// Half of the exchange matrix: K is this plus its transpose.
    exchange: Vec<f64>,
}

impl Sums {
    fn new(density: &DMatrix<f64>) -> Self {
        let n = density.nrows();
        let mut packed = Vec::with_capacity(pair_count(n));
        for c in 0..n {
            packed.extend((0..c).map(|d| 2.0 * density[(c, d)]));
            packed.push(density[(c, c)]);
        }
        Self {
            full: density.as_slice().to_vec(),
            packed,
            coulomb: vec![0.0; pair_count(n)],
            exchange: vec![0.0; n * n],
        }
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
    let mut results = Vec::with_capacity(densities.len());
    // Two densities (α and β) share one pass.
    for few in densities.chunks(2) {
        let parts: Vec<Vec<Sums>> = (0..tasks)
            .into_par_iter()
            .map(|k| {
                let mut sums: Vec<Sums> = few.iter().map(Sums::new).collect();
                let rows = ends[k]..ends[k + 1];
                match sums.as_mut_slice() {
                    [one] => dispatch(Rows {
                        list,
                        rows,
                        sums: [one],
                    }),
                    [one, two] => dispatch(Rows {
                        list,
                        rows,
                        sums: [one, two],
                    }),
                    _ => {}
                }
                sums
            })
            .collect();
        for index in 0..few.len() {
            results.push(add_up(n, parts.iter().map(|part| &part[index])));
        }
    }
    results
}

/// Adds the sums of all tasks in order.
fn add_up<'a>(n: usize, parts: impl Iterator<Item = &'a Sums>) -> CoulombExchangePair {
    let mut coulomb = vec![0.0; pair_count(n)];
    let mut half = DMatrix::zeros(n, n);
    for part in parts {
        for (sum, term) in coulomb.iter_mut().zip(&part.coulomb) {
            *sum += term;
        }
        for (sum, term) in half.as_mut_slice().iter_mut().zip(&part.exchange) {
            *sum += term;
        }
    }
    CoulombExchangePair {
        coulomb: DMatrix::from_fn(n, n, |a, b| coulomb[pair_count(a.max(b)) + a.min(b)]),
        exchange: &half + half.transpose(),
    }
}

/// A range of rows ab of the list, for `D` densities at once.
///
/// A stretch of a row with fixed c is contiguous over d, and serves two dot products (K_ac, K_bc) and
/// two updates (rows a and b of K) besides the two of J. For K, integrals with a = b, c = d or ab = cd
/// count half for each of these.
struct Rows<'a, const D: usize> {
    list: &'a [f64],
    rows: std::ops::Range<usize>,
    sums: [&'a mut Sums; D],
}

/// Rows a and b of the exchange sums while row ab is at work (a = b is possible, so they cannot be
/// borrowed from the matrix), and the sum for J_ab.
struct RowSums {
    a: Vec<f64>,
    b: Vec<f64>,
    coulomb: f64,
}

/// What one density lends to a stretch of integrals over d < `last`.
struct Stretch<'a> {
    density_a: &'a [[f64; 4]],
    density_b: &'a [[f64; 4]],
    density_cd: &'a [[f64; 4]],
    exchange_a: &'a mut [[f64; 4]],
    exchange_b: &'a mut [[f64; 4]],
    coulomb_cd: &'a mut [[f64; 4]],
    /// P_ac, P_bc, (2 − δ_ab) P_ab
    density_ac: f64,
    density_bc: f64,
    density_ab: f64,
    /// Σ_d v P_bd, Σ_d v P_ad, Σ_d v P'_cd
    dots: [f64; 3],
}

impl<const D: usize> Kernel for Rows<'_, D> {
    type Output = ();

    #[inline(always)]
    fn run<V: Lanes>(self) {
        let Self {
            list,
            rows,
            mut sums,
        } = self;
        let n = sums[0].full.len().isqrt();
        // Row ab: a is the largest with a(a+1)/2 ≤ ab.
        let mut a = ((8 * rows.start + 1).isqrt() - 1) / 2;
        let mut b = rows.start - pair_count(a);
        let mut row_sums = [(); D].map(|()| RowSums {
            a: vec![0.0; n],
            b: vec![0.0; n],
            coulomb: 0.0,
        });
        for ab in rows {
            let row = &list[pair_count(ab)..][..=ab];
            for c in 0..=a {
                let start = pair_count(c);
                // The last d of a stretch has c = d, or ab = cd, or both.
                let last = if c == a { b } else { c };
                let values = &row[start..=start + last];
                let mut lenders = sums.iter_mut().zip(&mut row_sums);
                let mut stretches = [(); D].map(|()| {
                    lenders
                        .next()
                        .map(|(sums, rows)| Stretch::new(sums, rows, [n, a, b, c, ab], last))
                });
                pass::<V, D>(&values[..last], &mut stretches);
                let dots = stretches.map(|s| s.map_or([0.0; 3], |s| s.dots));
                for ((sums, rows), dots) in sums.iter_mut().zip(&mut row_sums).zip(dots) {
                    finish_stretch(sums, rows, [n, a, b, c, ab], values, dots);
                }
            }
            let weight = if a == b { 0.5 } else { 1.0 };
            for (sums, rows) in sums.iter_mut().zip(&mut row_sums) {
                for (row, from) in [(a, &mut rows.a), (b, &mut rows.b)] {
                    let to = &mut sums.exchange[row * n..][..=a];
                    for (to, from) in to.iter_mut().zip(&mut from[..=a]) {
                        *to += weight * *from;
                        *from = 0.0;
                    }
                }
                sums.coulomb[ab] += rows.coulomb;
                rows.coulomb = 0.0;
            }
            b += 1;
            if b > a {
                a += 1;
                b = 0;
            }
        }
    }
}

impl<'a> Stretch<'a> {
    #[inline(always)]
    fn new(
        sums: &'a mut Sums,
        rows: &'a mut RowSums,
        [n, a, b, c, ab]: [usize; 5],
        last: usize,
    ) -> Self {
        let whole = last / 4 * 4;
        let start = pair_count(c);
        Self {
            density_ac: sums.full[a * n + c],
            density_bc: sums.full[b * n + c],
            density_ab: sums.packed[ab],
            density_a: sums.full[a * n..][..whole].as_chunks().0,
            density_b: sums.full[b * n..][..whole].as_chunks().0,
            density_cd: sums.packed[start..][..whole].as_chunks().0,
            exchange_a: rows.a[..whole].as_chunks_mut().0,
            exchange_b: rows.b[..whole].as_chunks_mut().0,
            coulomb_cd: sums.coulomb[start..][..whole].as_chunks_mut().0,
            dots: [0.0; 3],
        }
    }
}

/// The whole fours of a stretch of integrals, for all densities.
#[inline(always)]
fn pass<V: Lanes, const D: usize>(values: &[f64], stretches: &mut [Option<Stretch<'_>>; D]) {
    let values = values.as_chunks::<4>().0;
    for stretch in stretches.iter_mut().flatten() {
        let count = values.len();
        let density_a = &stretch.density_a[..count];
        let density_b = &stretch.density_b[..count];
        let density_cd = &stretch.density_cd[..count];
        let exchange_a = &mut stretch.exchange_a[..count];
        let exchange_b = &mut stretch.exchange_b[..count];
        let coulomb_cd = &mut stretch.coulomb_cd[..count];
        let ac = V::splat(stretch.density_ac);
        let bc = V::splat(stretch.density_bc);
        let ab = V::splat(stretch.density_ab);
        let mut dots = [V::zero(); 3];
        for i in 0..count {
            let v = V::from_array(values[i]);
            dots[0] = v.mul_add(V::from_array(density_b[i]), dots[0]);
            dots[1] = v.mul_add(V::from_array(density_a[i]), dots[1]);
            dots[2] = v.mul_add(V::from_array(density_cd[i]), dots[2]);
            let update = |to: &mut [f64; 4], factor: V| {
                *to = v.mul_add(factor, V::from_array(*to)).to_array();
            };
            update(&mut exchange_a[i], bc);
            update(&mut exchange_b[i], ac);
            update(&mut coulomb_cd[i], ab);
        }
        stretch.dots = dots.map(|dot| {
            let [p, q, r, s] = dot.to_array();
            (p + q) + (r + s)
        });
    }
}

/// The integrals of a stretch beyond its whole fours, and the sums over all of it.
#[inline(always)]
fn finish_stretch(
    sums: &mut Sums,
    rows: &mut RowSums,
    [n, a, b, c, ab]: [usize; 5],
    values: &[f64],
    dots: [f64; 3],
) {
    let last = values.len() - 1;
    let start = pair_count(c);
    let [mut k_ac, mut k_bc, mut j_ab] = dots;
    let (density_ac, density_bc) = (sums.full[a * n + c], sums.full[b * n + c]);
    let density_ab = sums.packed[ab];
    for d in last / 4 * 4..=last {
        let value = values[d];
        j_ab += value * sums.packed[start + d];
        if start + d < ab {
            sums.coulomb[start + d] += value * density_ab;
        }
        let mut weight = 1.0;
        if d == c {
            weight *= 0.5;
        }
        if start + d == ab {
            weight *= 0.5;
        }
        let value = weight * value;
        k_ac += value * sums.full[b * n + d];
        k_bc += value * sums.full[a * n + d];
        rows.a[d] += value * density_bc;
        rows.b[d] += value * density_ac;
    }
    rows.a[c] += k_ac;
    rows.b[c] += k_bc;
    rows.coulomb += j_ab;
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
