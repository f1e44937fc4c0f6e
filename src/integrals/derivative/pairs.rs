//! Shell pairs in Hermite form, as the derivative of the repulsion needs them.
//!
//! For a pair of functions Ω = Σ_h E_h Λ_h on centres A and B with exponents a and b, p = a + b and
//! μ = ab/p, the derivatives with respect to the centres are (from the recursions of L. E. McMurchie
//! and E. R. Davidson, J. Comput. Phys. 26, 218 (1978); T. Helgaker and P. R. Taylor, Theor. Chim. Acta
//! 83, 177 (1992) split them the same way)
//!
//! ∂_A Ω = (a/p) ∂_P Ω + S, ∂_B Ω = (b/p) ∂_P Ω − S, and in direction x
//! S = −2μ (A − B)_x Ω + j Ω(j − 1) − 2b Σ_h (h_x + 1) E_{h+x} Λ_h,
//!
//! where Ω(j − 1) has the power j of (x − B) lowered by one. So only the lowered second function
//! needs coefficients of its own; the second shell is the one with the lower angular momentum, and
//! for s nothing is left. On one centre S is not needed at all.

use crate::basis::shell::cartesian_powers;
use crate::basis::{Basis, FunctionKind, Shell};
use crate::integrals::harmonics::function_transform;
use crate::integrals::recurrence::{PrimitivePair, hermite_count, hermite_index, hermite_powers};
use std::collections::BTreeMap;
use std::f64::consts::PI;

/// What decides the shape of all numbers of a shell pair.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord)]
struct Key {
    first: Vec<usize>,
    first_spherical: bool,
    second: Vec<usize>,
    second_spherical: bool,
    one_centre: bool,
}

/// One product of one-dimensional coefficients.
#[derive(Debug, Clone, Copy)]
struct Term {
    factor: f64,
    /// (i, j, t) in each direction
    indices: [[u8; 3]; 3],
}

/// A coefficient of the expansion: which pair of functions, and the terms it is made of.
#[derive(Debug, Clone)]
struct Element {
    row: u16,
    contractions: (u16, u16),
    terms: Vec<Term>,
}

/// Pairs of shells of one kind: shape and places of their non-zero coefficients.
///
/// Columns are the Hermite functions up to degree l + l', then for each direction those up to
/// l + l' − 1 of the products with lowered second function. Rows are pairs of functions.
#[derive(Debug, Clone)]
pub(super) struct PairClass {
    key: Key,
    /// numbers of functions of the two shells
    pub(super) functions: [usize; 2],
    /// l + l'
    pub(super) degree: usize,
    /// whether derivatives of the two centres must be told apart
    pub(super) two_centre: bool,
    /// number of Hermite functions up to `degree`
    pub(super) hermites: usize,
    /// number of Hermite functions per direction of the lowered products (0 if not needed)
    pub(super) lowered: usize,
    /// `starts[c]..starts[c + 1]`: the elements of column c
    pub(super) starts: Vec<usize>,
    /// row of each element
    pub(super) rows: Vec<u16>,
    /// (−1)^degree of the column of each element
    pub(super) signs: Vec<f64>,
    elements: Vec<Element>,
    /// pairs of this class in order
    pub(super) pairs: Vec<Pair>,
    /// values of all elements, primitive after primitive
    pub(super) values: Vec<f64>,
    /// primitives of all pairs
    pub(super) primitives: Vec<Primitive>,
}

/// A pair of contracted shells.
#[derive(Debug, Clone)]
pub(super) struct Pair {
    /// shells of the basis
    pub(super) shells: [usize; 2],
    /// their atoms
    pub(super) atoms: [usize; 2],
    /// primitives in `PairClass::primitives`, largest weight first
    pub(super) primitives: std::ops::Range<usize>,
    /// sum of the weights of the primitives
    pub(super) weight: f64,
}

/// A pair of primitives.
#[derive(Debug, Clone)]
pub(super) struct Primitive {
    /// p
    pub(super) exponent: f64,
    /// P
    pub(super) centre: [f64; 3],
    /// a/p and b/p
    pub(super) fractions: [f64; 2],
    /// −2μ (A − B)
    pub(super) stretch: [f64; 3],
    /// −2μ
    pub(super) stretch_factor: f64,
    /// −2b
    pub(super) twice_second: f64,
    /// bound for the derivative of √(ΩΩ|ΩΩ) over all pairs of functions
    pub(super) weight: f64,
}

impl PairClass {
    /// Number of pairs of functions.
    pub(super) fn rows_count(&self) -> usize {
        self.functions[0] * self.functions[1]
    }

    /// Number of columns: Hermite functions and three times those of lowered products.
    pub(super) fn columns(&self) -> usize {
        self.hermites + 3 * self.lowered
    }

    /// Number of elements that may differ from zero.
    pub(super) fn len(&self) -> usize {
        self.rows.len()
    }

    /// Values of the elements for a primitive of this class.
    pub(super) fn values_of(&self, primitive: usize) -> &[f64] {
        &self.values[primitive * self.len()..(primitive + 1) * self.len()]
    }

    /// Deepest contraction among the pairs.
    pub(super) fn depth(&self) -> usize {
        let depths = self.pairs.iter().map(|p| p.primitives.len());
        depths.max().unwrap_or(0)
    }

    fn new(key: Key) -> Self {
        let kind = |spherical| {
            if spherical {
                FunctionKind::Spherical
            } else {
                FunctionKind::Cartesian
            }
        };
        let kinds = [kind(key.first_spherical), kind(key.second_spherical)];
        let count = |ls: &[usize], kind| -> usize {
            let of_one = |&l: &usize| function_transform(l, kind).functions();
            ls.iter().map(of_one).sum()
        };
        let functions = [count(&key.first, kinds[0]), count(&key.second, kinds[1])];
        let highest = |ls: &[usize]| ls.iter().copied().max().unwrap_or(0);
        let second_l = highest(&key.second);
        let degree = highest(&key.first) + second_l;
        let hermites = hermite_count(degree);
        let lowered = if key.one_centre || second_l == 0 {
            0
        } else {
            hermite_count(degree - 1)
        };
        // (column, row) → element
        let mut elements: BTreeMap<(usize, usize), Element> = BTreeMap::new();
        let mut first_start = 0;
        for (c, &l) in key.first.iter().enumerate() {
            let first = function_transform(l, kinds[0]);
            let mut second_start = 0;
            for (d, &k) in key.second.iter().enumerate() {
                let second = function_transform(k, kinds[1]);
                for f in 0..first.functions() {
                    for g in 0..second.functions() {
                        let row = (first_start + f) * functions[1] + second_start + g;
                        let mut add = |column: usize, term: Term| {
                            let fresh = || Element {
                                row: row as u16,
                                contractions: (c as u16, d as u16),
                                terms: Vec::new(),
                            };
                            let element = elements.entry((column, row)).or_insert_with(fresh);
                            element.terms.push(term);
                        };
                        for (m, &cm) in cartesian_powers(l).zip(first.row(f)) {
                            for (n, &cn) in cartesian_powers(k).zip(second.row(g)) {
                                let factor = cm * cn;
                                if factor.abs() < 1e-300 {
                                    continue;
                                }
                                products(m, n, factor, key.one_centre, &mut add);
                                for axis in (0..3).filter(|_| lowered > 0) {
                                    if n[axis] == 0 {
                                        continue;
                                    }
                                    let mut lower = n;
                                    lower[axis] -= 1;
                                    let start = hermites + axis * lowered;
                                    let factor = factor * n[axis] as f64;
                                    products(m, lower, factor, false, |h, term| {
                                        add(start + h, term);
                                    });
                                }
                            }
                        }
                    }
                }
                second_start += second.functions();
            }
            first_start += first.functions();
        }
        let mut class = Self {
            functions,
            degree,
            two_centre: !key.one_centre,
            hermites,
            lowered,
            starts: vec![0],
            rows: Vec::new(),
            signs: Vec::new(),
            elements: Vec::new(),
            pairs: Vec::new(),
            values: Vec::new(),
            primitives: Vec::new(),
            key,
        };
        let mut elements = elements.into_iter().peekable();
        for column in 0..class.columns() {
            let hermite = if column < hermites {
                column
            } else {
                (column - hermites) % lowered
            };
            let degree: usize = hermite_powers()[hermite].iter().sum();
            while let Some((_, element)) = elements.next_if(|((c, _), _)| *c == column) {
                class.rows.push(element.row);
                class
                    .signs
                    .push(if degree.is_multiple_of(2) { 1.0 } else { -1.0 });
                class.elements.push(element);
            }
            class.starts.push(class.rows.len());
        }
        class
    }

    /// Adds a pair of shells; `pair` is work space.
    fn push(&mut self, basis: &Basis, [s, t]: [usize; 2], pair: &mut PrimitivePair) {
        let (first, second) = (&basis.shells()[s], &basis.shells()[t]);
        let (a_centre, b_centre) = (basis.centre(s), basis.centre(t));
        let apart = a_centre - b_centre;
        let mut fresh: Vec<(Primitive, Vec<f64>)> = Vec::new();
        for (i, &a) in first.exponents.iter().enumerate() {
            for (j, &b) in second.exponents.iter().enumerate() {
                if !pair.set((a, a_centre), (b, b_centre), first.max_l(), second.max_l()) {
                    continue;
                }
                let p = a + b;
                // The factor 2π^(5/2)/(pq) of a repulsion integral, shared between the two sides.
                let share = 2f64.sqrt() * PI.powf(1.25) / p;
                let mut values = Vec::with_capacity(self.len());
                for element in &self.elements {
                    let (c, d) = element.contractions;
                    let mut sum = 0.0;
                    for term in &element.terms {
                        let mut product = term.factor;
                        for axis in 0..3 {
                            let [i, j, t] = term.indices[axis].map(usize::from);
                            product *= pair.hermite[axis].row(i, j)[t];
                        }
                        sum += product;
                    }
                    let coefficient = first.contractions[usize::from(c)].coefficients[i]
                        * second.contractions[usize::from(d)].coefficients[j];
                    values.push(share * coefficient * sum);
                }
                let stretch = -2.0 * a * b / p;
                let primitive = Primitive {
                    exponent: p,
                    centre: [pair.centre[0], pair.centre[1], pair.centre[2]],
                    fractions: [a / p, b / p],
                    stretch: [stretch * apart[0], stretch * apart[1], stretch * apart[2]],
                    stretch_factor: stretch,
                    twice_second: -2.0 * b,
                    weight: self.weight(p, &values),
                };
                if primitive.weight > 0.0 {
                    fresh.push((primitive, values));
                }
            }
        }
        fresh.sort_by(|x, y| y.0.weight.total_cmp(&x.0.weight));
        let start = self.primitives.len();
        let weight = fresh.iter().map(|(primitive, _)| primitive.weight).sum();
        for (primitive, values) in fresh {
            self.primitives.push(primitive);
            self.values.extend(values);
        }
        self.pairs.push(Pair {
            shells: [s, t],
            atoms: [first.atom, second.atom],
            primitives: start..self.primitives.len(),
            weight,
        });
    }

    /// Estimate of √(ΩΩ|ΩΩ) times 2√p, largest over the rows: (Λ_h|Λ_h) is about (2p)^|h| (Λ_0|Λ_0), and
    /// a derivative brings about 2√p.
    fn weight(&self, p: f64, values: &[f64]) -> f64 {
        let mut sums = vec![0.0; self.rows_count()];
        for column in 0..self.hermites {
            let degree: usize = hermite_powers()[column].iter().sum();
            let scale = (2.0 * p).powf(0.5 * degree as f64);
            for e in self.starts[column]..self.starts[column + 1] {
                sums[usize::from(self.rows[e])] += scale * values[e].abs();
            }
        }
        let largest = sums.iter().fold(0.0f64, |m, v| m.max(*v));
        largest / (2.0 * p).powf(0.25) * 2.0 * p.sqrt()
    }
}

/// Terms of the product of two monomials in Hermite functions. On one centre E_t^{ij} vanishes unless
/// i + j − t is even.
fn products(
    m: [usize; 3],
    n: [usize; 3],
    factor: f64,
    one_centre: bool,
    mut add: impl FnMut(usize, Term),
) {
    let step = if one_centre { 2 } else { 1 };
    let degrees: [usize; 3] = std::array::from_fn(|i| m[i] + n[i]);
    let from = |axis: usize| if one_centre { degrees[axis] % 2 } else { 0 };
    for t in (from(0)..=degrees[0]).step_by(step) {
        for u in (from(1)..=degrees[1]).step_by(step) {
            for v in (from(2)..=degrees[2]).step_by(step) {
                let powers = [t, u, v];
                let indices = std::array::from_fn(|i| [m[i] as u8, n[i] as u8, powers[i] as u8]);
                add(hermite_index(t, u, v), Term { factor, indices });
            }
        }
    }
}

/// All pairs of shells of a basis by class; classes with deeper contractions come first.
pub(super) fn pair_classes(basis: &Basis) -> Vec<PairClass> {
    let shells = basis.shells();
    let mut classes: BTreeMap<Key, PairClass> = BTreeMap::new();
    let mut work = PrimitivePair::default();
    for s in 0..shells.len() {
        for t in 0..=s {
            let momenta = |shell: &Shell| shell.contractions.iter().map(|c| c.l).collect();
            let spherical = |shell: &Shell| shell.kind == FunctionKind::Spherical;
            let [s, t] = if shells[s].max_l() >= shells[t].max_l() {
                [s, t]
            } else {
                [t, s]
            };
            let key = Key {
                first: momenta(&shells[s]),
                first_spherical: spherical(&shells[s]) && shells[s].max_l() >= 2,
                second: momenta(&shells[t]),
                second_spherical: spherical(&shells[t]) && shells[t].max_l() >= 2,
                one_centre: shells[s].atom == shells[t].atom,
            };
            let class = classes
                .entry(key.clone())
                .or_insert_with(|| PairClass::new(key));
            class.push(basis, [s, t], &mut work);
        }
    }
    let mut classes: Vec<PairClass> = classes.into_values().collect();
    classes
        .iter_mut()
        .for_each(|c| c.pairs.retain(|p| !p.primitives.is_empty()));
    classes.sort_by_key(|c| (std::cmp::Reverse(c.depth()), c.rows_count(), c.key.clone()));
    classes
}
