//! The packed list of all unique integrals of one geometry.

use super::digestion::{CoulombExchange, CoulombExchangePair, coulomb_exchange_packed};
use super::groups::PairSet;
use super::lanes::{Four, Scatter, SharedList, Streams, Stretch, dispatch};
use super::numbers::Numbers;
use super::pairs::ShellPair;
use super::walk::{QuartetSink, walk};
use super::{IntegralCounts, RepulsionSettings, pair_count};
use crate::basis::Basis;
use nalgebra::DMatrix;
use std::cmp::Ordering;
use std::sync::{Mutex, PoisonError};

/// All unique integrals of one geometry, packed with their eight-fold symmetry.
///
/// Pair ab of functions a ≥ b is at a(a+1)/2 + b, integral (ab|cd) with ab ≥ cd at ab(ab+1)/2 + cd.
#[derive(Debug, Clone)]
pub struct RepulsionList {
    basis: Basis,
    settings: RepulsionSettings,
    set: PairSet,
    integrals: Numbers,
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
            integrals: Numbers::zeros(total),
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
        let touched = moved.moved_since(&self.basis);
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
        let buffers = Mutex::default();
        walk(&self.set, moved, &self.settings, None, || ListSink {
            list,
            moved,
            erase_skipped,
            buffers: &buffers,
            staging: None,
            zeros: Vec::new(),
        });
    }
}

impl CoulombExchange for RepulsionList {
    fn coulomb_exchange(&self, densities: &[DMatrix<f64>]) -> Vec<CoulombExchangePair> {
        coulomb_exchange_packed(&self.integrals, self.basis.len(), densities)
    }
}

/// Lists of at least so many integrals do not fit the caches.
const STAGED_FROM: usize = 1 << 20;
/// Most numbers in a buffer, so that it stays in the second cache.
const STAGED_AT_MOST: usize = 1 << 17;

/// Writes quartets to their places in the list.
struct ListSink<'a> {
    list: SharedList<'a>,
    moved: &'a [bool],
    /// Whether skipped quartets may hold integrals of an earlier geometry.
    erase_skipped: bool,
    /// Buffers not in use.
    buffers: &'a Mutex<Vec<Staging>>,
    staging: Option<Staging>,
    /// What skipped quartets have.
    zeros: Vec<Four>,
}

/// The rows of one outer pair, as far as their columns belong to earlier shells, on their way to a list
/// that does not fit the caches: written here piece by piece, they go to memory in long streams.
#[derive(Default)]
struct Staging {
    /// Where the rows begin in `numbers`.
    rows: Vec<usize>,
    stretches: Vec<Stretch>,
    numbers: Vec<f64>,
}

impl Staging {
    fn prepare(&mut self, outer: &ShellPair) {
        self.rows.clear();
        self.stretches.clear();
        let mut from = 0;
        for &to in &outer.rows {
            let len = outer.earlier_places;
            self.rows.push(from);
            self.stretches.push(Stretch { from, to, len });
            from += len.next_multiple_of(4);
        }
        if self.numbers.len() < from {
            self.numbers.resize(from, 0.0);
        }
    }
}

impl ListSink<'_> {
    /// Where the rows of a pair go that meets pairs with an earlier first shell.
    #[inline]
    fn target<'b>(&'b mut self, pair: &'b ShellPair) -> (SharedList<'b>, &'b [usize]) {
        match &mut self.staging {
            Some(staging) => (SharedList::new(&mut staging.numbers), &staging.rows),
            None => (self.list, &pair.rows),
        }
    }

    /// Writes the quartet of a bra and a ket: `values` row by row, of which one lane counts.
    #[inline]
    fn write(&mut self, bra: &ShellPair, ket: &ShellPair, values: &[Four], lane: usize) {
        let width = ket.places.len();
        // Pairs are ordered by their higher shell first, as are the places of their functions.
        match bra.shells[0].cmp(&ket.shells[0]) {
            Ordering::Greater => {
                let (list, rows) = self.target(bra);
                list.scatter(rows, &ket.places, values, lane, [width, 1]);
            }
            Ordering::Less => {
                let (list, rows) = self.target(ket);
                list.scatter(rows, &bra.places, values, lane, [1, width]);
            }
            Ordering::Equal => {
                // A pair with itself has every integral twice, and the two may differ by rounding.
                let same = std::ptr::eq(bra, ket);
                for (f, &ab) in bra.places.iter().enumerate() {
                    for (g, &cd) in ket.places.iter().enumerate() {
                        if !(same && ab < cd) {
                            let place = pair_count(ab.max(cd) as usize) + ab.min(cd) as usize;
                            self.list.set(place, values[f * width + g].0[lane]);
                        }
                    }
                }
            }
        }
    }
}

impl QuartetSink for ListSink<'_> {
    fn begin(&mut self, outer: &ShellPair) {
        // The rows of a moved pair are written whole, other rows only in part.
        let staged = self.list.len() >= STAGED_FROM
            && outer.rows.len() * outer.earlier_places <= STAGED_AT_MOST
            && outer.touches(self.moved);
        self.staging = staged.then(|| {
            let mut buffers = self.buffers.lock().unwrap_or_else(PoisonError::into_inner);
            let mut staging = buffers.pop().unwrap_or_default();
            staging.prepare(outer);
            staging
        });
    }

    fn take(&mut self, bra: &[&ShellPair], ket: &[&ShellPair], result: &[Four]) {
        let width = ket[0].places.len();
        let lanes = bra.len();
        let all = |order: Ordering| {
            let mut orders = bra
                .iter()
                .zip(ket)
                .map(|(b, k)| b.shells[0].cmp(&k.shells[0]));
            orders.all(|o| o == order)
        };
        let sides = if all(Ordering::Greater) {
            Some((bra, ket, [width, 1]))
        } else if all(Ordering::Less) {
            Some((ket, bra, [1, width]))
        } else {
            None
        };
        // Pairs of one class have the same runs if their shells come in the same order.
        let order = |c: &ShellPair| (c.run_stride, c.runs.len());
        let alike = |columns: &[&ShellPair]| columns.iter().all(|c| order(c) == order(columns[0]));
        if let Some((rows, columns, strides)) = sides.filter(|(_, columns, _)| alike(columns)) {
            let lane = |l: usize| l.min(lanes - 1);
            let (list, rows) = match &mut self.staging {
                Some(staging) => {
                    let rows = [staging.rows.as_slice(); 4];
                    (SharedList::new(&mut staging.numbers), rows)
                }
                None => (
                    self.list,
                    [0, 1, 2, 3].map(|l| rows[lane(l)].rows.as_slice()),
                ),
            };
            dispatch(Scatter {
                list,
                rows,
                runs: [0, 1, 2, 3].map(|l| columns[lane(l)].runs.as_slice()),
                run_stride: columns[0].run_stride,
                values: result,
                strides,
                lanes,
            });
        } else {
            for (lane, (bra, ket)) in bra.iter().zip(ket).enumerate() {
                self.write(bra, ket, result, lane);
            }
        }
    }

    fn skip(&mut self, bra: &ShellPair, ket: &ShellPair) {
        // A buffer holds what the pair before left there.
        if self.erase_skipped || self.staging.is_some() {
            let count = bra.places.len() * ket.places.len();
            let mut zeros = std::mem::take(&mut self.zeros);
            if zeros.len() < count {
                zeros.resize(count, Four::default());
            }
            self.write(bra, ket, &zeros, 0);
            self.zeros = zeros;
        }
    }

    fn end(&mut self) {
        if let Some(staging) = self.staging.take() {
            dispatch(Streams {
                list: self.list,
                from: &staging.numbers,
                stretches: &staging.stretches,
            });
            let mut buffers = self.buffers.lock().unwrap_or_else(PoisonError::into_inner);
            buffers.push(staging);
        }
    }
}
