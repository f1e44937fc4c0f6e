//! Checks of the fast kernel against the plain recursion, over all classes.

use super::{CoulombExchange, DirectRepulsion, IntegralCounts, RepulsionList, RepulsionSettings};
use crate::basis::{Basis, Contraction, FunctionKind, Shell};
use crate::integrals::reference::{repulsion_block, repulsion_list};
use nalgebra::{DMatrix, Vector3};

/// Pseudo-random numbers between 0 and 1 (a 64-bit linear congruence, high bits).
struct Numbers(u64);

impl Numbers {
    fn next(&mut self) -> f64 {
        self.0 = self
            .0
            .wrapping_mul(6_364_136_223_846_793_005)
            .wrapping_add(1_442_695_040_888_963_407);
        (self.0 >> 11) as f64 / (1u64 << 53) as f64
    }

    fn below(&mut self, n: usize) -> usize {
        (self.next() * n as f64) as usize
    }

    fn centre(&mut self) -> Vector3<f64> {
        Vector3::from_fn(|_, _| 4.0 * self.next() - 2.0)
    }

    /// A shell with contractions of the given l and one to five exponents.
    fn shell(&mut self, atom: usize, ls: &[usize], kind: FunctionKind) -> Shell {
        let count = 1 + self.below(5);
        let exponents: Vec<f64> = (0..count)
            .map(|_| 10f64.powf(2.5 * self.next() - 1.0))
            .collect();
        let contractions = ls
            .iter()
            .map(|&l| {
                let tabulated: Vec<f64> = exponents.iter().map(|_| self.next() + 0.1).collect();
                Contraction::normalised(l, &exponents, &tabulated)
            })
            .collect();
        Shell {
            atom,
            exponents,
            contractions,
            kind,
        }
    }
}

fn place(a: usize, b: usize) -> usize {
    a.max(b) * (a.max(b) + 1) / 2 + a.min(b)
}

/// Largest error of the list of `basis` over the integrals of four given shells.
fn worst_of_block(list: &RepulsionList, basis: &Basis, shells: [usize; 4]) -> f64 {
    let mut exact = repulsion_block(basis, shells).into_iter();
    let mut worst: f64 = 0.0;
    let [a, b, c, d] = shells.map(|s| basis.range(s));
    for i in a {
        for j in b.clone() {
            for k in c.clone() {
                for l in d.clone() {
                    let value = list.integrals()[place(place(i, j), place(k, l))];
                    worst = worst.max((value - exact.next().unwrap_or(f64::NAN)).abs());
                }
            }
        }
    }
    worst
}

/// Contractions of the shells tested: s to g, sp, general.
const SHELL_KINDS: [&[usize]; 8] = [&[0], &[1], &[0, 1], &[2], &[3], &[4], &[0, 0], &[1, 1, 1]];

#[test]
fn every_class_agrees_with_the_reference() {
    let mut numbers = Numbers(7);
    let settings = RepulsionSettings::default();
    for kind in [FunctionKind::Cartesian, FunctionKind::Spherical] {
        for (i, a) in SHELL_KINDS.iter().enumerate() {
            for b in &SHELL_KINDS[..=i] {
                // A third and fourth shell at random: every pair class meets several others.
                let c = SHELL_KINDS[numbers.below(SHELL_KINDS.len())];
                let d = SHELL_KINDS[numbers.below(6)];
                let centres: Vec<_> = (0..4).map(|_| numbers.centre()).collect();
                let mut shells = vec![
                    numbers.shell(0, a, kind),
                    numbers.shell(1, b, kind),
                    numbers.shell(2, c, kind),
                    numbers.shell(3, d, kind),
                ];
                if numbers.below(3) == 0 {
                    shells[1].atom = 0;
                }
                let basis = Basis::new(shells, centres);
                let list = RepulsionList::compute(&basis, &settings);
                for shells in [
                    [1, 0, 3, 2],
                    [1, 0, 1, 0],
                    [0, 0, 2, 1],
                    [2, 0, 3, 1],
                    [3, 3, 1, 1],
                ] {
                    let error = worst_of_block(&list, &basis, shells);
                    assert!(
                        error < 1e-11,
                        "{kind:?} {a:?} {b:?} {c:?} {d:?} {shells:?}: {error:e}"
                    );
                }
            }
        }
    }
}

/// Five atoms with assorted shells, contracted and not.
fn assorted_basis() -> Basis {
    let mut numbers = Numbers(99);
    let kind = FunctionKind::Cartesian;
    let mut shells = Vec::new();
    for atom in 0..5 {
        for ls in [&[0][..], &[0, 1], &[2], &[0, 1]] {
            shells.push(numbers.shell(atom, ls, kind));
        }
    }
    let centres = (0..5).map(|_| numbers.centre()).collect();
    Basis::new(shells, centres)
}

#[test]
fn whole_list_agrees_with_the_reference() {
    let mut basis = assorted_basis();
    basis = Basis::new(basis.shells()[..9].to_vec(), basis.centres().to_vec());
    let list = RepulsionList::compute(&basis, &RepulsionSettings::default());
    let exact = repulsion_list(&basis);
    assert_eq!(list.integrals().len(), exact.len());
    for (i, (value, exact)) in list.integrals().iter().zip(&exact).enumerate() {
        assert!((value - exact).abs() < 1e-11, "{i}: {value} {exact}");
    }
}

fn bits(list: &RepulsionList) -> Vec<u64> {
    list.integrals().iter().map(|v| v.to_bits()).collect()
}

fn in_pool<T: Send>(threads: usize, f: impl FnOnce() -> T + Send) -> Option<T> {
    let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build();
    pool.ok().map(|pool| pool.install(f))
}

#[test]
fn bits_do_not_depend_on_threads() {
    let basis = assorted_basis();
    let settings = RepulsionSettings::default();
    let density = DMatrix::from_fn(basis.len(), basis.len(), |i, j| 1.0 / (1 + i + j) as f64);
    let run = |threads| {
        in_pool(threads, || {
            let list = RepulsionList::compute(&basis, &settings);
            let stored = list.coulomb_exchange(std::slice::from_ref(&density));
            let direct = DirectRepulsion::new(&basis, &settings)
                .coulomb_exchange(std::slice::from_ref(&density));
            (bits(&list), stored, direct)
        })
    };
    let one = run(1);
    assert!(one.is_some());
    assert!(one == run(2));
    assert!(one == run(4));
}

#[test]
fn update_gives_the_bits_of_a_fresh_list() {
    let basis = assorted_basis();
    let settings = RepulsionSettings::default();
    let mut list = RepulsionList::compute(&basis, &settings);
    let total = list.integrals().len() as u64;
    assert_eq!(
        list.counts(),
        IntegralCounts {
            computed: total,
            reused: 0
        }
    );
    let mut centres = basis.centres().to_vec();
    // One atom, two atoms, an atom so far that its quartets vanish, and back.
    for (atoms, shift) in [
        (&[2][..], 0.1),
        (&[0, 4], -0.3),
        (&[1], 40.0),
        (&[1], -40.1),
        (&[], 0.0),
    ] {
        for &atom in atoms {
            centres[atom] += Vector3::new(shift, 0.5 * shift, -shift);
        }
        let moved = basis.at(&centres);
        let counts = list.update(&moved);
        assert_eq!(counts.computed + counts.reused, total);
        assert_eq!(counts.computed == 0, atoms.is_empty());
        let fresh = RepulsionList::compute(&moved, &settings);
        assert!(bits(&list) == bits(&fresh), "{atoms:?}");
        let still = moved
            .function_atoms()
            .iter()
            .filter(|a| !atoms.contains(a))
            .count();
        let pairs = still * (still + 1) / 2;
        assert_eq!(counts.reused, (pairs * (pairs + 1) / 2) as u64);
    }
}

#[test]
fn direct_agrees_with_the_list() {
    let basis = assorted_basis();
    let settings = RepulsionSettings::default();
    let n = basis.len();
    let mut numbers = Numbers(3);
    let densities: Vec<DMatrix<f64>> = (0..2)
        .map(|_| {
            let m = DMatrix::from_fn(n, n, |_, _| numbers.next() - 0.5);
            &m + m.transpose()
        })
        .collect();
    let direct = DirectRepulsion::new(&basis, &settings);
    let stored = RepulsionList::compute(&basis, &settings).coulomb_exchange(&densities);
    for (x, y) in direct.coulomb_exchange(&densities).iter().zip(&stored) {
        // Elements are sums of n² products, each with an error below the threshold.
        assert!((&x.coulomb - &y.coulomb).amax() < 1e-10);
        assert!((&x.exchange - &y.exchange).amax() < 1e-10);
    }
    assert!(direct.counts().computed > 0);
}
