//! Shell pairs prepared once per geometry, and packed four at a time into lanes.

use super::class::{ClassKey, PairClass, Scalar, ShellType};
use super::lanes::Four;
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
            contracted: shell_a.exponents.len() * shell_b.exponents.len() > 1,
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
        let places = functions
            .iter()
            .map(|&[f, g]| {
                let (high, low) = (f.max(g), f.min(g));
                high * (high + 1) / 2 + low
            })
            .collect();
        let monomials: Vec<f64> = {
            let axes = [0, 1, 2].map(|i| powers(displacement[i], class.degree));
            hermite_powers()[..hermite_count(class.degree)]
                .iter()
                .map(|m| axes[0][m[0]] * axes[1][m[1]] * axes[2][m[2]])
                .collect()
        };
        let mut elements = Vec::new();
        if class.key.contracted {
            elements = class.elements(&monomials, |_| 1.0);
        }
        let mut primitives = Vec::new();
        for i in 0..shell_a.exponents.len() {
            for j in 0..shell_b.exponents.len() {
                let exponents = [shell_a.exponents[i], shell_b.exponents[j]];
                let p = exponents[0] + exponents[1];
                let reduced = exponents[0] * exponents[1] / p;
                let factor = (2.0 * PI.powf(2.5)).sqrt() / p
                    * (-reduced * displacement.norm_squared()).exp();
                let centre = basis.centre(a) - displacement * (exponents[1] / p);
                let scalars = scalar_values(&class, [shell_a, shell_b], [i, j]);
                let carried = if class.key.contracted {
                    scalars
                } else {
                    elements = class.elements(&monomials, |s| scalars[s]);
                    vec![1.0]
                };
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
            shells: [s, t],
            atoms: [shell_a.atom, shell_b.atom],
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

    fn stride(&self) -> usize {
        field::SCALARS + self.class.carried()
    }
}

/// An upper bound of the norm of every pair of the basis, independent of where the centres are:
/// (ab|ab) ≤ (aa|bb) ≤ ‖aa‖ ‖bb‖, so the pairs of shells with themselves suffice.
pub(super) fn largest_bound(basis: &Basis) -> f64 {
    (0..basis.shells().len())
        .map(|s| ShellPair::new(basis, s, s, f64::INFINITY).bound())
        .fold(0.0, f64::max)
}

/// Values of all scalars of a class for primitives i and j.
fn scalar_values(class: &PairClass, shells: [&Shell; 2], [i, j]: [usize; 2]) -> Vec<f64> {
    let (a, b) = (shells[0].exponents[i], shells[1].exponents[j]);
    let p = a + b;
    let degree = class.degree;
    let [from_b, from_a, from_p] = [b / p, a / p, 0.5 / p].map(|x| powers(x, degree));
    let value = |s: &Scalar| {
        shells[0].contractions[s.contraction_a].coefficients[i]
            * shells[1].contractions[s.contraction_b].coefficients[j]
            * from_b[s.power_b]
            * from_a[s.power_a]
            * from_p[s.power_p]
    };
    class.scalars.iter().map(value).collect()
}

impl PairClass {
    /// Elements of the transformation for given monomials of AB and scalars.
    fn elements(&self, monomials: &[f64], scalar: impl Fn(usize) -> f64) -> Vec<f64> {
        let mut start = 0;
        self.term_ends
            .iter()
            .map(|&end| {
                let end = end as usize;
                let sum = self.terms[start..end]
                    .iter()
                    .map(|t| {
                        t.coefficient * monomials[t.monomial as usize] * scalar(t.scalar as usize)
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
        for (lane, pair) in pairs.iter().enumerate() {
            for (to, from) in self.numbers.iter_mut().zip(&pair.numbers) {
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
        for (lane, pair) in pairs.iter().enumerate() {
            for (to, from) in self.elements.iter_mut().zip(&pair.elements) {
                to.0[lane] = *from;
            }
        }
        if side == Side::Ket {
            for (element, sign) in self.elements.iter_mut().zip(&class.ket_signs) {
                element.0.iter_mut().for_each(|e| *e *= sign);
            }
        }
    }
}
