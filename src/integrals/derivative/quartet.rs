//! Derivatives of four primitive quartets at once, contracted with the two-particle density.
//!
//! The density Γ of a contracted quartet is turned into Hermite functions of both sides,
//! G_hh' = Σ E_h^{ab} Γ_{ab,cd} E_h'^{cd}, after which the energy is Σ G_hh' R_{h+h'}(Q − P) and everything
//! else that [`super::pairs`] asks for is a sum over R with shifted indices. (−1)^|h| for the side of P is
//! part of its coefficients.

use super::pairs::PairClass;
use super::transform::{from_left, from_right};
use crate::integrals::recurrence::{hermite_count, hermite_index, hermite_powers};
use crate::integrals::repulsion::lanes::{Four, Kernel, Lanes};
use std::sync::OnceLock;

/// Highest degree on one side: gg.
const SIDE_DEGREE: usize = 8;
/// Hermite functions on one side, at most.
const SIDE: usize = hermite_count(SIDE_DEGREE);

/// Places of Hermite functions with added or shifted indices.
pub(super) struct Places {
    /// h + h' at [h · SIDE + h']
    sums: Vec<u16>,
    /// k + 1 in each direction
    up: Vec<[u16; 3]>,
    /// t, u, v as numbers
    powers: Vec<[f64; 3]>,
}

pub(super) fn places() -> &'static Places {
    static PLACES: OnceLock<Places> = OnceLock::new();
    PLACES.get_or_init(|| {
        let powers = &hermite_powers()[..hermite_count(2 * SIDE_DEGREE)];
        let index = |p: [usize; 3]| hermite_index(p[0], p[1], p[2]) as u16;
        Places {
            sums: (0..SIDE * SIDE)
                .map(|i| {
                    let (a, b) = (powers[i / SIDE], powers[i % SIDE]);
                    index(std::array::from_fn(|axis| a[axis] + b[axis]))
                })
                .collect(),
            up: powers
                .iter()
                .map(|p| {
                    std::array::from_fn(|axis| {
                        let mut raised = *p;
                        raised[axis] += 1;
                        index(raised)
                    })
                })
                .collect(),
            powers: powers.iter().map(|p| p.map(|i| i as f64)).collect(),
        }
    })
}

/// Sums that belong to the ket primitives, lane by lane; see [`super::pairs`] for their use.
#[derive(Debug, Clone, Copy, Default)]
pub(super) struct KetSums {
    /// derivative with respect to Q
    pub(super) force: [Four; 3],
    /// energy
    pub(super) energy: Four,
    /// products with lowered second function
    pub(super) lowered: [Four; 3],
    /// Σ h'_x G R_{h+h'−x}
    pub(super) shifted: [Four; 3],
}

/// Intermediate numbers of [`Quartets`], kept between calls.
#[derive(Debug, Default)]
pub(super) struct Work {
    half: Vec<Four>,
    hermite: Vec<Four>,
    folded: Vec<Four>,
}

/// A bra primitive in numbers that are the same in all lanes.
#[derive(Debug, Clone)]
pub(super) struct BraPrimitive {
    pub(super) fractions: [f64; 2],
    pub(super) stretch: [f64; 3],
    pub(super) stretch_factor: f64,
    pub(super) twice_second: f64,
}

/// All primitives of one bra pair with four ket primitives.
pub(super) struct Quartets<'a> {
    pub(super) places: &'a Places,
    pub(super) bra: &'a PairClass,
    pub(super) ket: &'a PairClass,
    pub(super) primitives: &'a [BraPrimitive],
    /// A − B of the bra pair
    pub(super) apart: [f64; 3],
    /// coefficients of the bra primitives with (−1)^|h|, `bra.len()` each
    pub(super) bra_values: &'a [f64],
    /// coefficients of the ket primitives
    pub(super) ket_values: &'a [Four],
    /// Γ, bra pairs slower
    pub(super) density: &'a [Four],
    /// R up to the sum of the degrees plus one, for each bra primitive
    pub(super) coulomb: &'a [Four],
    pub(super) work: &'a mut Work,
    /// gradient with respect to the two centres of the bra pair, added to
    pub(super) bra_gradient: &'a mut [[Four; 3]; 2],
}

impl Kernel for Quartets<'_> {
    type Output = KetSums;

    #[inline(always)]
    fn run<V: Lanes>(self) -> KetSums {
        if self.bra.hermites == 1 && self.bra.rows_count() == 1 {
            return self.run_spherical::<V>();
        }
        let (bra, ket) = (self.bra, self.ket);
        let (rows, columns) = (bra.columns(), ket.columns());
        let (bra_pairs, ket_pairs) = (bra.rows_count(), ket.rows_count());
        let work = self.work;
        resize(&mut work.hermite, rows * columns);
        resize(&mut work.folded, hermite_count(bra.degree + ket.degree));
        let coulomb_len = hermite_count(bra.degree + ket.degree + 1);
        // The ket is transformed first if enough bra primitives share the result.
        let ket_first = {
            let (bra_all, ket_all) = (bra.len(), ket.len());
            let n = self.primitives.len();
            bra_pairs * ket_all + n * bra_all * columns
                <= n * (ket_pairs * bra_all + rows * ket_all)
        };
        if ket_first {
            resize(&mut work.half, bra_pairs * columns);
            from_right::<V>(
                ket,
                0..columns,
                self.ket_values,
                (self.density, ket_pairs),
                (&mut work.half, columns),
                bra_pairs,
            );
        } else {
            resize(&mut work.half, rows * ket_pairs);
        }
        let mut sums = Sums::<V>::zero();
        let mut bra_sums = [[V::zero(); 3]; 2];
        for (i, primitive) in self.primitives.iter().enumerate() {
            let values = &self.bra_values[i * bra.len()..(i + 1) * bra.len()];
            let half = &mut work.half;
            let hermite = &mut work.hermite;
            if ket_first {
                let plain = 0..bra.hermites;
                from_left::<V>(
                    bra,
                    plain,
                    values,
                    (half, columns),
                    hermite,
                    columns,
                    columns,
                );
                let lowered = bra.hermites..rows;
                let width = ket.hermites;
                from_left::<V>(
                    bra,
                    lowered,
                    values,
                    (half, columns),
                    hermite,
                    columns,
                    width,
                );
            } else {
                let density = (self.density, ket_pairs);
                from_left::<V>(bra, 0..rows, values, density, half, ket_pairs, ket_pairs);
                let split = bra.hermites * ket_pairs;
                from_right::<V>(
                    ket,
                    0..columns,
                    self.ket_values,
                    (&half[..split], ket_pairs),
                    (hermite, columns),
                    bra.hermites,
                );
                if bra.lowered > 0 {
                    from_right::<V>(
                        ket,
                        0..ket.hermites,
                        self.ket_values,
                        (&half[split..], ket_pairs),
                        (&mut hermite[bra.hermites * columns..], columns),
                        rows - bra.hermites,
                    );
                }
            }
            let coulomb = &self.coulomb[i * coulomb_len..(i + 1) * coulomb_len];
            let one = reduce::<V>(self.places, bra, ket, hermite, &mut work.folded, coulomb);
            sums.add(&one.ket);
            for axis in 0..3 {
                let force = one.ket.force[axis];
                let mut split = V::zero();
                if bra.two_centre {
                    split = V::splat(primitive.stretch[axis])
                        .mul_add(one.ket.energy, one.bra_lowered[axis])
                        .sub(V::splat(primitive.twice_second).mul(one.bra_shifted[axis]));
                }
                let first = V::splat(primitive.fractions[0]);
                let second = V::splat(primitive.fractions[1]);
                let [a, b] = &mut bra_sums;
                a[axis] = a[axis].add(split.sub(first.mul(force)));
                b[axis] = b[axis].sub(second.mul_add(force, split));
            }
        }
        for (total, sum) in self.bra_gradient.iter_mut().zip(&bra_sums) {
            for (total, sum) in total.iter_mut().zip(sum) {
                V::load(total).add(*sum).store(total);
            }
        }
        sums.stored()
    }
}

impl Quartets<'_> {
    /// The same for two s functions as bra: all depends on the bra primitives through three sums of R
    /// with factors E, E a/p and −2μE, so that the ket is worked off only once.
    #[inline(always)]
    fn run_spherical<V: Lanes>(self) -> KetSums {
        let (places, ket) = (self.places, self.ket);
        let columns = ket.columns();
        let count = hermite_count(ket.degree + 1);
        let work = self.work;
        resize(&mut work.half, columns);
        resize(&mut work.folded, 3 * count);
        let ket_pairs = ket.rows_count();
        let half = (&mut work.half[..], columns);
        from_right::<V>(
            ket,
            0..columns,
            self.ket_values,
            (self.density, ket_pairs),
            half,
            1,
        );
        let (plain, rest) = work.folded.split_at_mut(count);
        let (first, stretched) = rest.split_at_mut(count);
        let stretched = &mut stretched[..count];
        let two_centre = self.bra.two_centre;
        plain.fill(Four::default());
        first.fill(Four::default());
        stretched.fill(Four::default());
        let of_primitives = self.primitives.iter().zip(self.bra_values);
        for ((primitive, &value), r) in of_primitives.zip(self.coulomb.chunks_exact(count)) {
            add_scaled::<V>(plain, value, r);
            if two_centre {
                add_scaled::<V>(first, value * primitive.fractions[0], r);
                add_scaled::<V>(stretched, value * primitive.stretch_factor, r);
            }
        }
        let mut sums = Sums::<V>::zero();
        let mut first_force = [V::zero(); 3];
        let mut stretched_energy = V::zero();
        for (k, w) in work.half[..ket.hermites].iter().enumerate() {
            let w = V::load(w);
            sums.energy = w.mul_add(V::load(&plain[k]), sums.energy);
            stretched_energy = w.mul_add(V::load(&stretched[k]), stretched_energy);
            for axis in 0..3 {
                let up = usize::from(places.up[k][axis]);
                sums.force[axis] = w.mul_add(V::load(&plain[up]), sums.force[axis]);
                first_force[axis] = w.mul_add(V::load(&first[up]), first_force[axis]);
            }
        }
        if ket.two_centre && ket.degree > 0 {
            for h in 0..hermite_count(ket.degree - 1) {
                let r = V::load(&plain[h]);
                for axis in 0..3 {
                    let w = V::load(&work.half[usize::from(places.up[h][axis])]);
                    let factor = w.mul(V::splat(places.powers[h][axis] + 1.0));
                    sums.shifted[axis] = factor.mul_add(r, sums.shifted[axis]);
                }
            }
        }
        for axis in 0..3 {
            let start = ket.hermites + axis * ket.lowered;
            for (value, r) in work.half[start..start + ket.lowered].iter().zip(&*plain) {
                sums.lowered[axis] = V::load(value).mul_add(V::load(r), sums.lowered[axis]);
            }
        }
        let [a, b] = self.bra_gradient;
        for axis in 0..3 {
            let split = V::splat(self.apart[axis]).mul(stretched_energy);
            // On one centre all of the force goes to the first: the two atoms are the same.
            let mut first = sums.force[axis];
            if two_centre {
                first = first_force[axis];
                let second = sums.force[axis].sub(first);
                V::load(&b[axis]).sub(second.add(split)).store(&mut b[axis]);
            }
            V::load(&a[axis]).add(split.sub(first)).store(&mut a[axis]);
        }
        sums.stored()
    }
}

/// sum += factor · values
#[inline(always)]
fn add_scaled<V: Lanes>(sum: &mut [Four], factor: f64, values: &[Four]) {
    let factor = V::splat(factor);
    for (sum, value) in sum.iter_mut().zip(values) {
        factor.mul_add(V::load(value), V::load(sum)).store(sum);
    }
}

fn resize(buffer: &mut Vec<Four>, len: usize) {
    if buffer.len() < len {
        buffer.resize(len, Four::default());
    }
}

/// [`KetSums`] in registers.
#[derive(Clone, Copy)]
struct Sums<V> {
    force: [V; 3],
    energy: V,
    lowered: [V; 3],
    shifted: [V; 3],
}

impl<V: Lanes> Sums<V> {
    #[inline(always)]
    fn zero() -> Self {
        Self {
            force: [V::zero(); 3],
            energy: V::zero(),
            lowered: [V::zero(); 3],
            shifted: [V::zero(); 3],
        }
    }

    #[inline(always)]
    fn add(&mut self, other: &Self) {
        self.energy = self.energy.add(other.energy);
        for axis in 0..3 {
            self.force[axis] = self.force[axis].add(other.force[axis]);
            self.lowered[axis] = self.lowered[axis].add(other.lowered[axis]);
            self.shifted[axis] = self.shifted[axis].add(other.shifted[axis]);
        }
    }

    /// Writes to memory. No closures: they would be functions of their own, without the vector
    /// instructions.
    #[inline(always)]
    fn stored(&self) -> KetSums {
        let mut sums = KetSums::default();
        self.energy.store(&mut sums.energy);
        for axis in 0..3 {
            self.force[axis].store(&mut sums.force[axis]);
            self.lowered[axis].store(&mut sums.lowered[axis]);
            self.shifted[axis].store(&mut sums.shifted[axis]);
        }
        sums
    }
}

/// Sums of one bra primitive with the four ket primitives.
struct Reduced<V> {
    ket: Sums<V>,
    bra_lowered: [V; 3],
    bra_shifted: [V; 3],
}

/// All sums over G and R.
#[inline(always)]
fn reduce<V: Lanes>(
    places: &Places,
    bra: &PairClass,
    ket: &PairClass,
    hermite: &[Four],
    folded: &mut [Four],
    coulomb: &[Four],
) -> Reduced<V> {
    let columns = ket.columns();
    let degree = bra.degree + ket.degree;
    let mut sums = Sums::<V>::zero();
    let mut bra_lowered = [V::zero(); 3];
    let folded = &mut folded[..hermite_count(degree)];
    folded[..ket.hermites].copy_from_slice(&hermite[..ket.hermites]);
    folded[ket.hermites..].fill(Four::default());
    for h in 1..bra.hermites {
        let row = &hermite[h * columns..h * columns + ket.hermites];
        for (value, &k) in row.iter().zip(&places.sums[h * SIDE..]) {
            let target = &mut folded[usize::from(k)];
            V::load(target).add(V::load(value)).store(target);
        }
    }
    for (k, w) in folded.iter().enumerate() {
        let w = V::load(w);
        sums.energy = w.mul_add(V::load(&coulomb[k]), sums.energy);
        let up = &places.up[k];
        for axis in 0..3 {
            let r = V::load(&coulomb[usize::from(up[axis])]);
            sums.force[axis] = w.mul_add(r, sums.force[axis]);
        }
    }
    if ket.lowered > 0 {
        for h in 0..bra.hermites {
            let start = h * columns + ket.hermites;
            let values = &hermite[start..start + 3 * ket.lowered];
            let sums_of = &places.sums[h * SIDE..];
            dots::<V>(three_parts(values), sums_of, coulomb, &mut sums.lowered);
        }
    }
    for h in 0..bra.lowered {
        let rows = std::array::from_fn(|axis| {
            let start = (bra.hermites + axis * bra.lowered + h) * columns;
            &hermite[start..start + ket.hermites]
        });
        dots::<V>(rows, &places.sums[h * SIDE..], coulomb, &mut bra_lowered);
    }
    let mut bra_shifted = [V::zero(); 3];
    if bra.two_centre || ket.two_centre {
        // Σ k_x W_k R_{k−x} is the sum over both sides; the side of lower degree is computed.
        let mut both = [V::zero(); 3];
        if degree > 0 {
            for h in 0..hermite_count(degree - 1) {
                let r = V::load(&coulomb[h]);
                for axis in 0..3 {
                    let w = V::load(&folded[usize::from(places.up[h][axis])]);
                    let factor = w.mul(V::splat(places.powers[h][axis] + 1.0));
                    both[axis] = factor.mul_add(r, both[axis]);
                }
            }
        }
        let on_bra = bra.degree <= ket.degree;
        let mut side = [V::zero(); 3];
        if on_bra && bra.degree > 0 {
            for h in 0..hermite_count(bra.degree - 1) {
                let rows = std::array::from_fn(|axis| {
                    let start = usize::from(places.up[h][axis]) * columns;
                    &hermite[start..start + ket.hermites]
                });
                let mut parts = [V::zero(); 3];
                dots::<V>(rows, &places.sums[h * SIDE..], coulomb, &mut parts);
                for axis in 0..3 {
                    let power = V::splat(places.powers[h][axis] + 1.0);
                    side[axis] = power.mul_add(parts[axis], side[axis]);
                }
            }
        } else if !on_bra && ket.degree > 0 {
            for h in 0..bra.hermites {
                let row = &hermite[h * columns..h * columns + ket.hermites];
                let sums_of = &places.sums[h * SIDE..];
                for k in 0..hermite_count(ket.degree - 1) {
                    let r = V::load(&coulomb[usize::from(sums_of[k])]);
                    for axis in 0..3 {
                        let value = V::load(&row[usize::from(places.up[k][axis])]);
                        let factor = r.mul(V::splat(places.powers[k][axis] + 1.0));
                        side[axis] = factor.mul_add(value, side[axis]);
                    }
                }
            }
        }
        for axis in 0..3 {
            let other = both[axis].sub(side[axis]);
            let (of_bra, of_ket) = if on_bra {
                (side[axis], other)
            } else {
                (other, side[axis])
            };
            bra_shifted[axis] = of_bra;
            sums.shifted[axis] = of_ket;
        }
    }
    Reduced {
        ket: sums,
        bra_lowered,
        bra_shifted,
    }
}

/// Thirds of a slice.
#[inline(always)]
fn three_parts(values: &[Four]) -> [&[Four]; 3] {
    let third = values.len() / 3;
    let (first, rest) = values.split_at(third);
    let (second, last) = rest.split_at(third);
    [first, second, last]
}

/// sums[axis] += Σ rows[axis] · R at the places given, for rows of one length.
#[inline(always)]
fn dots<V: Lanes>(rows: [&[Four]; 3], places: &[u16], coulomb: &[Four], sums: &mut [V; 3]) {
    let [x, y, z] = rows;
    let [mut a, mut b, mut c] = *sums;
    for (((x, y), z), &k) in x.iter().zip(y).zip(z).zip(places) {
        let r = V::load(&coulomb[usize::from(k)]);
        a = V::load(x).mul_add(r, a);
        b = V::load(y).mul_add(r, b);
        c = V::load(z).mul_add(r, c);
    }
    *sums = [a, b, c];
}
