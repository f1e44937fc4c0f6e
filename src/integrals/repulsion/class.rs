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
//! J. A. Pople, Int. J. Quantum Chem. 40, 745 (1991)). Pairs of one primitive each have the scalar
//! folded into the polynomials.

use crate::basis::shell::{cartesian_count, cartesian_powers};
use crate::basis::{FunctionKind, Shell};
use crate::integrals::harmonics::function_transform;
use crate::integrals::recurrence::{hermite_count, hermite_index, hermite_powers};
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
    /// More than one primitive pair: scalars are kept apart from the polynomials.
    pub(super) contracted: bool,
    pub(super) types: [ShellType; 2],
    /// Both shells on one centre: AB = 0, and all terms with powers of AB are absent.
    pub(super) one_centre: bool,
    /// The pair of a shell with itself: only functions a ≥ b.
    pub(super) same_shell: bool,
}

/// c_a c_b (b/p)^power_b (a/p)^power_a (1/2p)^power_p.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub(super) struct Scalar {
    /// Degree of the Hermite functions that it multiplies.
    pub(super) degree: usize,
    pub(super) contraction_a: usize,
    pub(super) contraction_b: usize,
    pub(super) power_b: usize,
    pub(super) power_a: usize,
    pub(super) power_p: usize,
}

/// Scalars whose Hermite functions have the same range of degrees.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct ScalarGroup {
    pub(super) first: usize,
    pub(super) count: usize,
    pub(super) low: usize,
    pub(super) high: usize,
}

/// One term of an element of the transformation: coefficient · scalar · monomial of AB.
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
    /// Scalars by degree. For uncontracted pairs they enter the elements only.
    pub(super) scalars: Vec<Scalar>,
    /// Ranges of the scalars that primitives carry; one group of one scalar (worth 1, all degrees)
    /// for uncontracted pairs.
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

type Symbolic = BTreeMap<(Scalar, usize), BTreeMap<usize, f64>>;

/// Terms of the product of two monomials, keyed by (scalar, Hermite index) and monomial of AB.
fn monomial_product(
    a: [usize; 3],
    b: [usize; 3],
    one_centre: bool,
) -> Vec<(Scalar, usize, usize, f64)> {
    let directions: [_; 3] = std::array::from_fn(|k| {
        let mut terms = one_direction(a[k], b[k]);
        terms.retain(|term| !one_centre || term.1 == 0);
        terms
    });
    let mut all = Vec::new();
    for x in &directions[0] {
        for y in &directions[1] {
            for z in &directions[2] {
                let scalar = Scalar {
                    degree: x.0 + y.0 + z.0,
                    contraction_a: 0,
                    contraction_b: 0,
                    power_b: x.2 + y.2 + z.2,
                    power_a: x.3 + y.3 + z.3,
                    power_p: x.4 + y.4 + z.4,
                };
                let hermite = hermite_index(x.0, y.0, z.0);
                let monomial = hermite_index(x.1, y.1, z.1);
                all.push((scalar, hermite, monomial, x.5 * y.5 * z.5));
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
        let products: HashMap<_, _> =
            a.ls.iter()
                .flat_map(|&la| b.ls.iter().map(move |&lb| (la, lb)))
                .map(|(la, lb)| ((la, lb), Self::monomial_products(la, lb, key.one_centre)))
                .collect();
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
                        for &(scalar, hermite, monomial, c) in
                            &products[&(la, lb)][ma * cartesian_count(lb) + mb]
                        {
                            let scalar = Scalar {
                                contraction_a: ca,
                                contraction_b: cb,
                                ..scalar
                            };
                            *row.entry((scalar, hermite))
                                .or_default()
                                .entry(monomial)
                                .or_insert(0.0) += wa * wb * c;
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

    fn monomial_products(
        la: usize,
        lb: usize,
        one_centre: bool,
    ) -> Vec<Vec<(Scalar, usize, usize, f64)>> {
        cartesian_powers(la)
            .flat_map(|a| cartesian_powers(lb).map(move |b| (a, b)))
            .map(|(a, b)| monomial_product(a, b, one_centre))
            .collect()
    }

    fn assemble(key: ClassKey, functions: Vec<(usize, usize)>, rows: &[Symbolic]) -> Self {
        let degree = key.types[0].max_l() + key.types[1].max_l();
        let mut scalars: Vec<Scalar> = rows
            .iter()
            .flat_map(|row| row.keys().map(|(s, _)| *s))
            .collect();
        scalars.sort_unstable();
        scalars.dedup();
        let index: HashMap<Scalar, usize> =
            scalars.iter().enumerate().map(|(i, s)| (*s, i)).collect();
        let groups = if key.contracted {
            let mut groups: Vec<ScalarGroup> = Vec::new();
            for (i, s) in scalars.iter().enumerate() {
                match groups.last_mut() {
                    Some(group) if group.low == s.degree => group.count += 1,
                    _ => groups.push(ScalarGroup {
                        first: i,
                        count: 1,
                        low: s.degree,
                        high: s.degree,
                    }),
                }
            }
            groups
        } else {
            vec![ScalarGroup {
                first: 0,
                count: 1,
                low: 0,
                high: degree,
            }]
        };
        let mut hermites: Vec<(usize, usize)> = if key.contracted {
            let mut used: Vec<_> = rows
                .iter()
                .flat_map(|row| row.keys().map(|(s, h)| (*h, index[s])))
                .collect();
            used.sort_unstable_by_key(|&(h, s)| (s, h));
            used
        } else {
            (0..hermite_count(degree)).map(|h| (h, 0)).collect()
        };
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
            scalars,
            groups,
            hermites,
            row_ends: Vec::new(),
            columns: Vec::new(),
            ket_signs: Vec::new(),
            term_ends: Vec::new(),
            terms: Vec::new(),
        };
        for row in rows {
            // Elements by column; an uncontracted element sums over scalars.
            let mut elements: BTreeMap<usize, Vec<Term>> = BTreeMap::new();
            for ((scalar, hermite), polynomial) in row {
                let scalar = index[scalar];
                let carried = if class.key.contracted { scalar } else { 0 };
                let terms = elements.entry(column[&(*hermite, carried)]).or_default();
                terms.extend(polynomial.iter().map(|(&monomial, &coefficient)| Term {
                    scalar: scalar as u32,
                    monomial: monomial as u32,
                    coefficient,
                }));
            }
            for (u, terms) in elements {
                class.columns.push(u as u16);
                let degree: usize = hermite_powers()[class.hermites[u].0].iter().sum();
                class
                    .ket_signs
                    .push(if degree.is_multiple_of(2) { 1.0 } else { -1.0 });
                class.terms.extend(terms);
                class.term_ends.push(class.terms.len() as u32);
            }
            class.row_ends.push(class.columns.len() as u32);
        }
        class
    }

    /// Number of scalars that a primitive carries.
    pub(super) fn carried(&self) -> usize {
        self.groups.iter().map(|g| g.count).sum()
    }
}
