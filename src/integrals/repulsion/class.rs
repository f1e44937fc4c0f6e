//! Classes of shell pairs: which scaled, contracted Hermite functions stand for a pair, and how its
//! functions follow from them.
//!
//! For a primitive pair with exponents a, b, p = a + b, the vector from centre to centre of charge is
//! P − A = −(b/p) AB and P − B = (a/p) AB with AB = A − B, and a power (x − P)^k of the product
//! Gaussian is a sum of Hermite functions Λ_t with factors (1/2p)^((k+t)/2). So the product of two
//! functions is
//!
//!   Σ polynomial(AB) · c_a c_b (b/p)^i (a/p)^j (1/2p)^n · Λ_tuv:
//!
//! primitives enter by their *scalars* c_a c_b (b/p)^i (a/p)^j (1/2p)^n only. Contraction over
//! primitives is done with these, and the polynomials in AB are applied once for each contracted
//! quartet (the idea of contracting before the transformation: P. M. W. Gill, B. G. Johnson,
//! J. A. Pople, Int. J. Quantum Chem. 40, 745 (1991)).
//!
//! Where one shell has a single primitive, say b, everything is a power of y = b/p: a/p = 1 − y and
//! 1/2p = y/2b. Then the scalars are c_a y^m, far fewer, and the rest (c_b and powers of 1/2b) is
//! *folded* into the polynomials. Where both are single, all of the scalar is.

use crate::basis::shell::{cartesian_count, cartesian_powers};
use crate::basis::{FunctionKind, Shell};
use crate::integrals::harmonics::function_transform;
use crate::integrals::recurrence::{hermite_index, hermite_powers};
use std::collections::{BTreeMap, HashMap};
use std::sync::{Arc, Mutex, OnceLock};

/// Angular momenta of the contractions of a shell, and the kind of its functions.
#[derive(Debug, Clone, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub(super) struct ShellType {
    ls: Vec<usize>,
    spherical: bool,
}

impl ShellType {
    pub(super) fn of(shell: &Shell) -> Self {
        let ls: Vec<usize> = shell.contractions.iter().map(|c| c.l).collect();
        let spherical = shell.kind == FunctionKind::Spherical && ls.iter().any(|&l| l > 1);
        Self { ls, spherical }
    }

    fn max_l(&self) -> usize {
        self.ls.iter().copied().max().unwrap_or(0)
    }

    fn kind(&self) -> FunctionKind {
        if self.spherical {
            FunctionKind::Spherical
        } else {
            FunctionKind::Cartesian
        }
    }

    /// (contraction, function within the contraction) of every function.
    fn functions(&self) -> Vec<(usize, usize)> {
        let count = |l| function_transform(l, self.kind()).functions();
        self.ls
            .iter()
            .enumerate()
            .flat_map(|(c, &l)| (0..count(l)).map(move |f| (c, f)))
            .collect()
    }
}

/// What makes two shell pairs members of one class. The order decides which pair of a quartet is the
/// bra where cost does not.
#[derive(Debug, Clone, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub(super) struct ClassKey {
    /// Whether each shell has more than one primitive.
    pub(super) contracted: [bool; 2],
    pub(super) types: [ShellType; 2],
    /// Both shells on one centre: AB = 0, and all terms with powers of AB are absent.
    pub(super) one_centre: bool,
    /// The pair of a shell with itself: only functions a ≥ b.
    pub(super) same_shell: bool,
}

/// Highest angular momentum of a single primitive whose scalars are folded: with any partner, and with
/// a partner that keeps the sum of both within the third number. (1 − y)^l in powers of y loses digits
/// when it is multiplied by a large |AB|^l: more than 1e-11 in integrals over a tight and a diffuse f
/// or g function, below 1e-12 within these limits.
const FOLDED_L: [usize; 3] = [2, 3, 4];

impl ClassKey {
    /// Whether scalars that only single primitives determine go into the transformation.
    fn folds(&self) -> bool {
        let [la, lb] = [0, 1].map(|i| self.types[i].max_l());
        let [any, some, sum] = FOLDED_L;
        let safe = |single: usize| single <= any || (single <= some && la + lb <= sum);
        match self.contracted {
            [true, true] => false,
            [false, false] => true,
            [true, false] => safe(lb),
            [false, true] => safe(la),
        }
    }
}

/// Product of the contraction coefficients named, (b/p)^power_b (a/p)^power_a (1/2p)^power_p and
/// (1/2e)^power_single, with e the exponent of the shell that has only one.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, Default)]
pub(super) struct Scalar {
    pub(super) contraction_a: Option<usize>,
    pub(super) contraction_b: Option<usize>,
    pub(super) power_b: usize,
    pub(super) power_a: usize,
    pub(super) power_p: usize,
    pub(super) power_single: usize,
}

/// Scalars whose Hermite functions have the same range of degrees.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct ScalarGroup {
    pub(super) first: usize,
    pub(super) count: usize,
    pub(super) low: usize,
    pub(super) high: usize,
}

/// One term of an element of the transformation: coefficient · folded scalar · monomial of AB.
#[derive(Debug, Clone, Copy)]
pub(super) struct Term {
    pub(super) scalar: u32,
    /// Hermite index of the monomial's powers.
    pub(super) monomial: u32,
    pub(super) coefficient: f64,
}

/// A class of shell pairs.
#[derive(Debug)]
pub(super) struct PairClass {
    pub(super) key: ClassKey,
    /// Highest sum of angular momenta.
    pub(super) degree: usize,
    /// Pairs of functions (within shell A, within shell B), A slower.
    pub(super) functions: Vec<(usize, usize)>,
    /// Scalars that primitives carry, by the degrees of their Hermite functions.
    pub(super) carried: Vec<Scalar>,
    /// Scalars that are folded into the elements of the transformation.
    pub(super) folded: Vec<Scalar>,
    /// Ranges of `carried`.
    pub(super) groups: Vec<ScalarGroup>,
    /// (Hermite index, carried scalar) of each scaled Hermite function.
    pub(super) hermites: Vec<(usize, usize)>,
    /// Sparse transformation, one row for each function pair: end of each row, and columns.
    pub(super) row_ends: Vec<u32>,
    pub(super) columns: Vec<u16>,
    /// (−1)^|t| of each element, |t| the degree of its Hermite function.
    pub(super) ket_signs: Vec<f64>,
    /// End of the terms of each element, and the terms.
    pub(super) term_ends: Vec<u32>,
    pub(super) terms: Vec<Term>,
}

/// Terms of x_A^i x_B^j: (Hermite degree, power of AB, power_b, power_a, power_p, coefficient).
fn one_direction(i: usize, j: usize) -> Vec<(usize, usize, usize, usize, usize, f64)> {
    let mut terms = Vec::new();
    for m in 0..=i {
        for n in 0..=j {
            let sign = if (i - m).is_multiple_of(2) { 1.0 } else { -1.0 };
            let c = sign * binomial(i, m) * binomial(j, n);
            for (t, &h) in power_in_hermites(m + n).iter().enumerate() {
                if h != 0.0 {
                    terms.push((t, i - m + j - n, i - m, j - n, (m + n + t) / 2, c * h));
                }
            }
        }
    }
    terms
}

fn binomial(n: usize, k: usize) -> f64 {
    (0..k).fold(1.0, |c, i| c * (n - i) as f64 / (i + 1) as f64)
}

/// Coefficients h_t of x^k exp(−p x²) = Σ h_t (1/2p)^((k+t)/2) Λ_t.
fn power_in_hermites(k: usize) -> Vec<f64> {
    let mut h = vec![1.0];
    for _ in 0..k {
        // x Λ_t = Λ_(t+1) / 2p + t Λ_(t−1)
        let mut next = vec![0.0; h.len() + 1];
        for (t, c) in h.iter().enumerate() {
            next[t + 1] += c;
            if t > 0 {
                next[t - 1] += t as f64 * c;
            }
        }
        h = next;
    }
    h
}

/// Terms of one function pair, by carried scalar and Hermite index.
type Symbolic = BTreeMap<(Scalar, usize), Polynomial>;

/// Coefficients by folded scalar and monomial of AB.
type Polynomial = BTreeMap<(Scalar, usize), f64>;

/// One term of the product of two monomials.
#[derive(Debug, Clone, Copy)]
struct ProductTerm {
    carried: Scalar,
    folded: Scalar,
    hermite: usize,
    monomial: usize,
    coefficient: f64,
}

/// Divides a scalar into sums of what primitives carry and what is folded into the elements.
fn divided(scalar: Scalar, key: &ClassKey) -> Vec<(Scalar, Scalar, f64)> {
    let contracted = key.contracted;
    let (same, other) = match contracted {
        _ if !key.folds() => return vec![(scalar, Scalar::default(), 1.0)],
        [true, true] => return vec![(scalar, Scalar::default(), 1.0)],
        [false, false] => return vec![(Scalar::default(), scalar, 1.0)],
        // b is the single one: powers of y = b/p.
        [true, false] => (scalar.power_b, scalar.power_a),
        [false, true] => (scalar.power_a, scalar.power_b),
    };
    (0..=other)
        .map(|l| {
            let power = same + l + scalar.power_p;
            let sign = if l.is_multiple_of(2) { 1.0 } else { -1.0 };
            let carried = if contracted[0] {
                Scalar {
                    contraction_a: scalar.contraction_a,
                    power_b: power,
                    ..Scalar::default()
                }
            } else {
                Scalar {
                    contraction_b: scalar.contraction_b,
                    power_a: power,
                    ..Scalar::default()
                }
            };
            let folded = Scalar {
                contraction_a: scalar.contraction_a.filter(|_| !contracted[0]),
                contraction_b: scalar.contraction_b.filter(|_| !contracted[1]),
                power_single: scalar.power_p,
                ..Scalar::default()
            };
            (carried, folded, sign * binomial(other, l))
        })
        .collect()
}

/// Terms of the product of two monomials of the contractions (ca, cb).
fn monomial_product(
    a: [usize; 3],
    b: [usize; 3],
    [ca, cb]: [usize; 2],
    key: &ClassKey,
) -> Vec<ProductTerm> {
    let directions: [_; 3] = std::array::from_fn(|k| {
        let mut terms = one_direction(a[k], b[k]);
        terms.retain(|term| !key.one_centre || term.1 == 0);
        terms
    });
    let mut all = Vec::new();
    for x in &directions[0] {
        for y in &directions[1] {
            for z in &directions[2] {
                let scalar = Scalar {
                    contraction_a: Some(ca),
                    contraction_b: Some(cb),
                    power_b: x.2 + y.2 + z.2,
                    power_a: x.3 + y.3 + z.3,
                    power_p: x.4 + y.4 + z.4,
                    power_single: 0,
                };
                let coefficient = x.5 * y.5 * z.5;
                let parts = divided(scalar, key);
                all.extend(parts.into_iter().map(|(carried, folded, c)| ProductTerm {
                    carried,
                    folded,
                    hermite: hermite_index(x.0, y.0, z.0),
                    monomial: hermite_index(x.1, y.1, z.1),
                    coefficient: c * coefficient,
                }));
            }
        }
    }
    all
}

impl PairClass {
    /// The class for a key, made on first use.
    pub(super) fn get(key: &ClassKey) -> Arc<Self> {
        static CLASSES: OnceLock<Mutex<HashMap<ClassKey, Arc<PairClass>>>> = OnceLock::new();
        let classes = CLASSES.get_or_init(Mutex::default);
        let mut classes = classes
            .lock()
            .unwrap_or_else(std::sync::PoisonError::into_inner);
        Arc::clone(
            classes
                .entry(key.clone())
                .or_insert_with(|| Arc::new(Self::build(key.clone()))),
        )
    }

    fn build(key: ClassKey) -> Self {
        let [a, b] = &key.types;
        let mut products: HashMap<[usize; 2], Vec<Vec<ProductTerm>>> = HashMap::new();
        for (ca, &la) in a.ls.iter().enumerate() {
            for (cb, &lb) in b.ls.iter().enumerate() {
                let all = cartesian_powers(la)
                    .flat_map(|x| cartesian_powers(lb).map(move |y| (x, y)))
                    .map(|(x, y)| monomial_product(x, y, [ca, cb], &key))
                    .collect();
                products.insert([ca, cb], all);
            }
        }
        let mut functions = Vec::new();
        let mut rows: Vec<Symbolic> = Vec::new();
        for (fa, &(ca, ia)) in a.functions().iter().enumerate() {
            for (fb, &(cb, ib)) in b.functions().iter().enumerate() {
                if key.same_shell && fb > fa {
                    continue;
                }
                functions.push((fa, fb));
                let (la, lb) = (a.ls[ca], b.ls[cb]);
                let row_a = function_transform(la, a.kind()).row(ia);
                let row_b = function_transform(lb, b.kind()).row(ib);
                let mut row = Symbolic::new();
                for (ma, wa) in row_a.iter().enumerate().filter(|(_, w)| **w != 0.0) {
                    for (mb, wb) in row_b.iter().enumerate().filter(|(_, w)| **w != 0.0) {
                        for term in &products[&[ca, cb]][ma * cartesian_count(lb) + mb] {
                            *row.entry((term.carried, term.hermite))
                                .or_default()
                                .entry((term.folded, term.monomial))
                                .or_insert(0.0) += wa * wb * term.coefficient;
                        }
                    }
                }
                // Harmonics make terms cancel: what is left is rounding.
                for polynomial in row.values_mut() {
                    polynomial.retain(|_, c| c.abs() > 1e-13);
                }
                row.retain(|_, polynomial| !polynomial.is_empty());
                rows.push(row);
            }
        }
        Self::assemble(key, functions, &rows)
    }

    fn assemble(key: ClassKey, functions: Vec<(usize, usize)>, rows: &[Symbolic]) -> Self {
        let degree = key.types[0].max_l() + key.types[1].max_l();
        let degree_of = |hermite: usize| hermite_powers()[hermite].iter().sum::<usize>();
        // Carried scalars with the range of degrees of their Hermite functions.
        let mut ranges: BTreeMap<Scalar, (usize, usize)> = BTreeMap::new();
        let mut folded: Vec<Scalar> = Vec::new();
        for ((scalar, hermite), polynomial) in rows.iter().flatten() {
            let d = degree_of(*hermite);
            let range = ranges.entry(*scalar).or_insert((d, d));
            *range = (range.0.min(d), range.1.max(d));
            folded.extend(polynomial.keys().map(|(scalar, _)| *scalar));
        }
        folded.sort_unstable();
        folded.dedup();
        if key.contracted == [false; 2] {
            // The primitive's integrals are used as they come, all degrees.
            ranges.insert(Scalar::default(), (0, degree));
        }
        let mut ordered: Vec<((usize, usize), Scalar)> = ranges
            .into_iter()
            .map(|(scalar, range)| (range, scalar))
            .collect();
        ordered.sort_unstable();
        let groups = ordered
            .chunk_by(|x, y| x.0 == y.0)
            .scan(0, |first, alike| {
                let group = ScalarGroup {
                    first: *first,
                    count: alike.len(),
                    low: alike[0].0.0,
                    high: alike[0].0.1,
                };
                *first += alike.len();
                Some(group)
            })
            .collect();
        let carried: Vec<Scalar> = ordered.into_iter().map(|(_, scalar)| scalar).collect();
        let place = |list: &[Scalar]| -> HashMap<Scalar, usize> {
            list.iter().enumerate().map(|(i, s)| (*s, i)).collect()
        };
        let (carried_place, folded_place) = (place(&carried), place(&folded));
        let mut hermites: Vec<(usize, usize)> = rows
            .iter()
            .flat_map(|row| row.keys().map(|(s, h)| (*h, carried_place[s])))
            .collect();
        hermites.sort_unstable_by_key(|&(h, s)| (s, h));
        hermites.dedup();
        let column: HashMap<(usize, usize), usize> = hermites
            .iter()
            .enumerate()
            .map(|(u, key)| (*key, u))
            .collect();
        let mut class = Self {
            key,
            degree,
            functions,
            carried,
            folded,
            groups,
            hermites,
            row_ends: Vec::new(),
            columns: Vec::new(),
            ket_signs: Vec::new(),
            term_ends: Vec::new(),
            terms: Vec::new(),
        };
        for row in rows {
            let mut elements: Vec<(usize, &Polynomial)> = row
                .iter()
                .map(|((s, h), polynomial)| (column[&(*h, carried_place[s])], polynomial))
                .collect();
            elements.sort_unstable_by_key(|(u, _)| *u);
            for (u, polynomial) in elements {
                class.columns.push(u as u16);
                let degree = degree_of(class.hermites[u].0);
                class
                    .ket_signs
                    .push(if degree.is_multiple_of(2) { 1.0 } else { -1.0 });
                class
                    .terms
                    .extend(polynomial.iter().map(|((scalar, monomial), &c)| Term {
                        scalar: folded_place[scalar] as u32,
                        monomial: *monomial as u32,
                        coefficient: c,
                    }));
                class.term_ends.push(class.terms.len() as u32);
            }
            class.row_ends.push(class.columns.len() as u32);
        }
        class
    }

    /// Whether any primitives are contracted.
    pub(super) fn contracted(&self) -> bool {
        self.key.contracted != [false; 2]
    }

    /// Number of scalars that a primitive carries.
    pub(super) fn carried(&self) -> usize {
        self.carried.len()
    }
}
