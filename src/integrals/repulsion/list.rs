//! The packed list of all unique integrals of one geometry.

use super::digestion::{CoulombExchange, CoulombExchangePair, coulomb_exchange_packed};
use super::groups::{PairSet, QuartetSink};
use super::lanes::{Four, SharedList};
use super::pairs::ShellPair;
use super::{IntegralCounts, RepulsionSettings, pair_count};
use crate::basis::Basis;
use nalgebra::DMatrix;

/// All unique integrals of one geometry, packed with their eight-fold symmetry.
///
/// Pair ab of functions a ≥ b is at a(a+1)/2 + b, integral (ab|cd) with ab ≥ cd at ab(ab+1)/2 + cd.
#[derive(Debug, Clone)]
pub struct RepulsionList {
    basis: Basis,
    settings: RepulsionSettings,
    set: PairSet,
    integrals: Vec<f64>,
    counts: IntegralCounts,
}

impl RepulsionList {
    /// Memory of the list for a basis of `functions` functions, in bytes (shell pairs come on top,
    /// with a few per cent).
    #[must_use]
    pub fn bytes_needed(functions: usize) -> u64 {
        let n = functions as u128;
        let pairs = n * (n + 1) / 2;
        u64::try_from(8 * (pairs * (pairs + 1) / 2)).unwrap_or(u64::MAX)
    }

    /// Evaluates all integrals of a basis.
    #[must_use]
    pub fn compute(basis: &Basis, settings: &RepulsionSettings) -> Self {
        let total = pair_count(pair_count(basis.len()));
        let mut list = Self {
            basis: basis.clone(),
            settings: *settings,
            set: PairSet::new(basis),
            integrals: vec![0.0; total],
            counts: IntegralCounts {
                computed: total as u64,
                reused: 0,
            },
        };
        list.fill(&vec![true; basis.centres().len()], false);
        list
    }

    /// Moves to a geometry of the same shells, evaluating only the integrals that touch an atom whose
    /// centre differs in any bit. The list then equals the one that [`Self::compute`] gives, bit for bit.
    ///
    /// # Panics
    /// If the shells differ.
    pub fn update(&mut self, moved: &Basis) -> IntegralCounts {
        assert_eq!(self.basis.shells(), moved.shells());
        let bits = |r: &nalgebra::Vector3<f64>| [r.x, r.y, r.z].map(f64::to_bits);
        let touched: Vec<bool> = self
            .basis
            .centres()
            .iter()
            .zip(moved.centres())
            .map(|(old, new)| bits(old) != bits(new))
            .collect();
        self.basis = moved.clone();
        let still = self
            .basis
            .function_atoms()
            .iter()
            .filter(|&&atom| !touched[atom])
            .count();
        let reused = pair_count(pair_count(still)) as u64;
        self.counts = IntegralCounts {
            computed: self.integrals.len() as u64 - reused,
            reused,
        };
        if touched.contains(&true) {
            self.set.update(moved, &touched);
            self.fill(&touched, true);
        }
        self.counts
    }

    /// Evaluates all integrals once more at the geometry that the list has, with the shell pairs that it
    /// has: what the benchmark times.
    pub fn refill(&mut self) {
        self.fill(&vec![true; self.basis.centres().len()], true);
    }

    /// Unique integrals evaluated and taken over by the last [`Self::compute`] or [`Self::update`].
    #[must_use]
    pub fn counts(&self) -> IntegralCounts {
        self.counts
    }

    /// The integrals, in the order said at the type, in hartree.
    #[must_use]
    pub fn integrals(&self) -> &[f64] {
        &self.integrals
    }

    /// Number of basis functions.
    #[must_use]
    pub fn functions(&self) -> usize {
        self.basis.len()
    }

    fn fill(&mut self, moved: &[bool], erase_skipped: bool) {
        let list = SharedList::new(&mut self.integrals);
        self.set.walk(moved, &self.settings, None, || ListSink {
            list,
            erase_skipped,
        });
    }
}

impl CoulombExchange for RepulsionList {
    fn coulomb_exchange(&self, densities: &[DMatrix<f64>]) -> Vec<CoulombExchangePair> {
        coulomb_exchange_packed(&self.integrals, self.basis.len(), densities)
    }
}

/// Writes quartets to their places in the list.
struct ListSink<'a> {
    list: SharedList<'a>,
    /// Whether skipped quartets may hold integrals of an earlier geometry.
    erase_skipped: bool,
}

impl ListSink<'_> {
    #[inline]
    fn write(&self, bra: &ShellPair, ket: &ShellPair, value: impl Fn(usize, usize) -> f64) {
        // A pair with itself has every integral twice, and the two may differ by rounding.
        let same = std::ptr::eq(bra, ket);
        for (f, &ab) in bra.places.iter().enumerate() {
            let ab = ab as usize;
            for (g, &cd) in ket.places.iter().enumerate() {
                let cd = cd as usize;
                if same && ab < cd {
                    continue;
                }
                let (high, low) = (ab.max(cd), ab.min(cd));
                self.list.set(pair_count(high) + low, value(f, g));
            }
        }
    }
}

impl QuartetSink for ListSink<'_> {
    fn take(&mut self, bra: &[&ShellPair], ket: &[&ShellPair], result: &[Four]) {
        for (lane, (bra, ket)) in bra.iter().zip(ket).enumerate() {
            let width = ket.places.len();
            self.write(bra, ket, |f, g| result[f * width + g].0[lane]);
        }
    }

    fn skip(&mut self, bra: &ShellPair, ket: &ShellPair) {
        if self.erase_skipped {
            self.write(bra, ket, |_, _| 0.0);
        }
    }
}
