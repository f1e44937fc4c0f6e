//! Shell pairs prepared once per geometry, and packed four at a time into lanes.

use super::class::{ClassKey, PairClass, Scalar, ShellType};
use super::lanes::{Four, Kernel, Lanes, Run, dispatch};
use super::pair_count;
use super::primitives::field;
use crate::basis::{Basis, Shell};
use crate::integrals::recurrence::{hermite_count, hermite_powers};
use crate::integrals::screening::{PRIMITIVE_FLOOR, hermite_norms};
use std::f64::consts::PI;
use std::sync::Arc;

/// Everything about a pair of shells that its quartets need.
#[derive(Debug, Clone)]
pub(super) struct ShellPair {
    pub(super) shells: [usize; 2],
    pub(super) atoms: [usize; 2],
    pub(super) class: Arc<PairClass>,
    /// Packed index a(a+1)/2 + b of each function pair, in the order of the class.
    pub(super) places: Vec<u32>,
    /// Where the row of each function pair starts in the packed list.
    pub(super) rows: Vec<usize>,
    /// How many places of the list's rows belong to pairs with an earlier first shell: the first so many.
    pub(super) earlier_places: usize,
    /// The function pairs in runs of places that follow one another, and the distance of the function pairs in a
    /// run: 1, or the number of functions of shell B where A's functions come first.
    pub(super) runs: Vec<Run>,
    pub(super) run_stride: usize,
    /// Functions (a, b) of each function pair.
    pub(super) functions: Vec<[u32; 2]>,
    /// Primitive pairs kept, largest bound first.
    pub(super) primitives: usize,
    /// For each primitive the numbers named in [`field`], then the scalars.
    numbers: Vec<f64>,
    /// Elements of the class's sparse transformation.
    elements: Vec<f64>,
    /// √ of the largest integral (ab|ab); set by the list that owns the pair.
    pub(super) norm: f64,
}

/// One primitive pair while a shell pair is being made.
struct Primitive {
    bound: f64,
    numbers: Vec<f64>,
}

/// x^0 … x^n
fn powers(x: f64, n: usize) -> Vec<f64> {
    std::iter::successors(Some(1.0), |p| Some(p * x))
        .take(n + 1)
        .collect()
}

impl ShellPair {
    /// Prepares the pair of shells `s` ≥ `t`. Primitives whose bound times `largest` is below
    /// [`PRIMITIVE_FLOOR`] are dropped.
    pub(super) fn new(basis: &Basis, s: usize, t: usize, largest: f64) -> Self {
        let shells = basis.shells();
        let types = [s, t].map(|i| ShellType::of(&shells[i]));
        let (a, b) = if types[0] < types[1] { (t, s) } else { (s, t) };
        let (shell_a, shell_b) = (&shells[a], &shells[b]);
        let displacement = basis.centre(a) - basis.centre(b);
        let one_centre = shell_a.atom == shell_b.atom;
        let key = ClassKey {
            contracted: [shell_a, shell_b].map(|s| s.exponents.len() > 1),
            types: [a, b].map(|i| ShellType::of(&shells[i])),
            one_centre,
            same_shell: a == b,
        };
        let class = PairClass::get(&key);
        let functions: Vec<[u32; 2]> = class
            .functions
            .iter()
            .map(|&(f, g)| [(basis.offset(a) + f) as u32, (basis.offset(b) + g) as u32])
            .collect();
        let places: Vec<u32> = functions
            .iter()
            .map(|&[f, g]| {
                let (high, low) = (f.max(g), f.min(g));
                high * (high + 1) / 2 + low
            })
            .collect();
        let run_stride = if a < b { shell_b.functions() } else { 1 };
        let monomials: Vec<f64> = {
            let axes = [0, 1, 2].map(|i| powers(displacement[i], class.degree));
            hermite_powers()[..hermite_count(class.degree)]
                .iter()
                .map(|m| axes[0][m[0]] * axes[1][m[1]] * axes[2][m[2]])
                .collect()
        };
        // What is folded depends on the exponents of single primitives only: any primitive will do.
        let pair = [shell_a, shell_b];
        let elements = class.elements(
            &monomials,
            &scalar_values(&class, &class.folded, pair, [0, 0]),
        );
        let mut primitives = Vec::new();
        for i in 0..shell_a.exponents.len() {
            for j in 0..shell_b.exponents.len() {
                let exponents = [shell_a.exponents[i], shell_b.exponents[j]];
                let p = exponents[0] + exponents[1];
                let reduced = exponents[0] * exponents[1] / p;
                let factor = (2.0 * PI.powf(2.5)).sqrt() / p
                    * (-reduced * displacement.norm_squared()).exp();
                let centre = basis.centre(a) - displacement * (exponents[1] / p);
                let carried = scalar_values(&class, &class.carried, pair, [i, j]);
                let bound =
                    factor / (2.0 * p).powf(0.25) * class.largest_norm(&elements, &carried, p);
                if bound * largest < PRIMITIVE_FLOOR {
                    continue;
                }
                let mut numbers = vec![p, centre.x, centre.y, centre.z, factor, bound];
                numbers.extend(carried);
                primitives.push(Primitive { bound, numbers });
            }
        }
        primitives.sort_by(|x, y| y.bound.total_cmp(&x.bound));
        Self {
            earlier_places: pair_count(basis.offset(s)),
            shells: [s, t],
            atoms: [shell_a.atom, shell_b.atom],
            runs: runs(&places, run_stride),
            run_stride,
            rows: places.iter().map(|&ab| pair_count(ab as usize)).collect(),
            places,
            functions,
            primitives: primitives.len(),
            numbers: primitives.into_iter().flat_map(|p| p.numbers).collect(),
            elements,
            norm: 0.0,
            class,
        }
    }

    /// Sum of the bounds of all primitives: an upper bound of the norm.
    pub(super) fn bound(&self) -> f64 {
        let stride = self.stride();
        (0..self.primitives)
            .map(|k| self.numbers[k * stride + field::BOUND])
            .sum()
    }

    /// Whether one of the shells is on an atom that moves.
    pub(super) fn touches(&self, moved: &[bool]) -> bool {
        self.atoms.iter().any(|&atom| moved[atom])
    }

    fn stride(&self) -> usize {
        field::SCALARS + self.class.carried()
    }
}

/// Divides places, visited every `stride`, into runs.
fn runs(places: &[u32], stride: usize) -> Vec<Run> {
    let mut runs: Vec<Run> = Vec::new();
    for start in 0..stride {
        for index in (start..places.len()).step_by(stride) {
            let place = places[index] as usize;
            match runs.last_mut() {
                Some(run) if place == run.place + run.len && index >= start + stride => {
                    run.len += 1;
                }
                _ => runs.push(Run {
                    first: index,
                    place,
                    len: 1,
                }),
            }
        }
    }
    runs
}

/// An upper bound of the norm of every pair of the basis, independent of where the centres are:
/// (ab|ab) ≤ (aa|bb) ≤ ‖aa‖ ‖bb‖, so the pairs of shells with themselves suffice.
pub(super) fn largest_bound(basis: &Basis) -> f64 {
    (0..basis.shells().len())
        .map(|s| ShellPair::new(basis, s, s, f64::INFINITY).bound())
        .fold(0.0, f64::max)
}

/// Values of scalars for primitives i and j.
fn scalar_values(
    class: &PairClass,
    scalars: &[Scalar],
    shells: [&Shell; 2],
    [i, j]: [usize; 2],
) -> Vec<f64> {
    let (a, b) = (shells[0].exponents[i], shells[1].exponents[j]);
    let p = a + b;
    let single = if class.key.contracted[0] { b } else { a };
    let powers_of = [b / p, a / p, 0.5 / p, 0.5 / single].map(|x| powers(x, 2 * class.degree));
    let coefficient = |shell: usize, contraction: Option<usize>, primitive: usize| {
        contraction.map_or(1.0, |c| {
            shells[shell].contractions[c].coefficients[primitive]
        })
    };
    let value = |s: &Scalar| {
        coefficient(0, s.contraction_a, i)
            * coefficient(1, s.contraction_b, j)
            * powers_of[0][s.power_b]
            * powers_of[1][s.power_a]
            * powers_of[2][s.power_p]
            * powers_of[3][s.power_single]
    };
    scalars.iter().map(value).collect()
}

impl PairClass {
    /// Elements of the transformation for given monomials of AB and scalars.
    fn elements(&self, monomials: &[f64], folded: &[f64]) -> Vec<f64> {
        let mut start = 0;
        self.term_ends
            .iter()
            .map(|&end| {
                let end = end as usize;
                let sum = self.terms[start..end]
                    .iter()
                    .map(|t| {
                        t.coefficient * monomials[t.monomial as usize] * folded[t.scalar as usize]
                    })
                    .sum();
                start = end;
                sum
            })
            .collect()
    }

    /// Largest over all function pairs of the sum of the norms of its Hermite parts, in units of the
    /// norm of Λ_0, for one primitive.
    fn largest_norm(&self, elements: &[f64], carried: &[f64], p: f64) -> f64 {
        let root = powers(p.sqrt(), self.degree);
        let parts: Vec<f64> = self
            .hermites
            .iter()
            .map(|&(h, s)| {
                let degree: usize = hermite_powers()[h].iter().sum();
                (carried[s] * root[degree] * hermite_norms()[h]).abs()
            })
            .collect();
        let mut start = 0;
        let mut largest: f64 = 0.0;
        for &end in &self.row_ends {
            let end = end as usize;
            let row = start..end;
            let sum: f64 = self.columns[row.clone()]
                .iter()
                .zip(&elements[row])
                .map(|(&u, e)| e.abs() * parts[u as usize])
                .sum();
            largest = largest.max(sum);
            start = end;
        }
        largest
    }
}

/// Which side of a quartet a block is for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Side {
    Bra,
    Ket,
}

/// Four pairs of one class in lanes, each with its own primitives, padded with zeros.
#[derive(Debug, Clone, Default)]
pub(super) struct PairBlock {
    /// Longest list of primitives.
    pub(super) primitives: usize,
    /// Numbers of one primitive.
    pub(super) stride: usize,
    /// See [`field`]; BOUND holds, for the bra, bound times number of primitives, and for the ket the
    /// sum of the bounds from here on.
    pub(super) numbers: Vec<Four>,
    /// Elements of the transformation, for the ket with the sign (−1)^|t|.
    pub(super) elements: Vec<Four>,
}

impl PairBlock {
    /// Packs pairs of one class (the same one may fill several lanes).
    pub(super) fn pack(&mut self, pairs: [&ShellPair; 4], side: Side) {
        let class = &pairs[0].class;
        let stride = pairs[0].stride();
        self.stride = stride;
        self.primitives = pairs.iter().map(|p| p.primitives).max().unwrap_or(0);
        self.numbers.clear();
        self.numbers
            .resize(self.primitives * stride, Four::default());
        let mut shortest = self.numbers.len();
        for pair in pairs {
            shortest = shortest.min(pair.numbers.len());
        }
        dispatch(Interleave {
            from: pairs.map(|p| &p.numbers[..shortest]),
            to: &mut self.numbers[..shortest],
        });
        for (lane, pair) in pairs.iter().enumerate() {
            let rest = self.numbers[shortest..].iter_mut();
            for (to, from) in rest.zip(&pair.numbers[shortest..]) {
                to.0[lane] = *from;
            }
            let bounds = field::BOUND..;
            match side {
                Side::Bra => {
                    let count = pair.primitives as f64;
                    for k in 0..pair.primitives {
                        self.numbers[k * stride..][bounds.clone()][0].0[lane] *= count;
                    }
                }
                Side::Ket => {
                    let mut sum = 0.0;
                    for k in (0..pair.primitives).rev() {
                        let bound = &mut self.numbers[k * stride..][bounds.clone()][0].0[lane];
                        sum += *bound;
                        *bound = sum;
                    }
                }
            }
            // A padded primitive has no weight, but its exponent must not vanish.
            for k in pair.primitives..self.primitives {
                self.numbers[k * stride + field::EXPONENT].0[lane] = 1.0;
            }
        }
        self.elements.clear();
        self.elements.resize(class.columns.len(), Four::default());
        dispatch(Interleave {
            from: pairs.map(|p| p.elements.as_slice()),
            to: &mut self.elements,
        });
        if side == Side::Ket {
            for (element, sign) in self.elements.iter_mut().zip(&class.ket_signs) {
                element.0.iter_mut().for_each(|e| *e *= sign);
            }
        }
    }
}

/// Four lists of one length become one list of lanes.
struct Interleave<'a> {
    from: [&'a [f64]; 4],
    to: &'a mut [Four],
}

impl Kernel for Interleave<'_> {
    type Output = ();

    #[inline(always)]
    fn run<V: Lanes>(self) {
        let count = self.to.len();
        let [a, b, c, d] = self.from;
        let (a, b, c, d) = (&a[..count], &b[..count], &c[..count], &d[..count]);
        let (a_fours, a_rest) = a.as_chunks::<4>();
        let (b_fours, b_rest) = b.as_chunks::<4>();
        let (c_fours, c_rest) = c.as_chunks::<4>();
        let (d_fours, d_rest) = d.as_chunks::<4>();
        let (to_fours, to_rest) = self.to.as_chunks_mut::<4>();
        for i in 0..to_fours.len() {
            let square = V::transposed_square([
                V::from_array(&a_fours[i]),
                V::from_array(&b_fours[i]),
                V::from_array(&c_fours[i]),
                V::from_array(&d_fours[i]),
            ]);
            for (to, column) in to_fours[i].iter_mut().zip(square) {
                column.store(to);
            }
        }
        for (i, to) in to_rest.iter_mut().enumerate() {
            to.0 = [a_rest[i], b_rest[i], c_rest[i], d_rest[i]];
        }
    }
}
