//! Coulomb and exchange matrices with no integral stored.

use super::digestion::{CoulombExchange, CoulombExchangePair};
use super::groups::PairSet;
use super::lanes::Four;
use super::pairs::ShellPair;
use super::walk::{QuartetSink, walk};
use super::{IntegralCounts, RepulsionSettings, pair_count};
use crate::basis::Basis;
use nalgebra::DMatrix;
use std::sync::atomic::{AtomicU64, Ordering};

/// Evaluates all integrals again for every set of densities, leaving out what these densities make
/// negligible.
///
/// A quartet counts with the product of its pairs' norms times the largest density element that it
/// can meet; the error of any element of J and K is about the threshold times the square root of the number of
/// integrals left out, that of the energy is below 1e-10 hartree with the default threshold.
#[derive(Debug)]
pub struct DirectRepulsion {
    functions: usize,
    settings: RepulsionSettings,
    set: PairSet,
    computed: AtomicU64,
}

/// Sinks that the quartets are spread over, each with its own matrices; fixed, for the same bits on any
/// machine.
const SINKS: usize = 16;

impl DirectRepulsion {
    /// Prepares the shell pairs of a basis.
    #[must_use]
    pub fn new(basis: &Basis, settings: &RepulsionSettings) -> Self {
        Self {
            functions: basis.len(),
            settings: *settings,
            set: PairSet::new(basis),
            computed: AtomicU64::new(0),
        }
    }

    /// Unique integrals evaluated by all calls so far; none is ever taken over.
    pub fn counts(&self) -> IntegralCounts {
        IntegralCounts {
            computed: self.computed.load(Ordering::Relaxed),
            reused: 0,
        }
    }
}

impl CoulombExchange for DirectRepulsion {
    fn coulomb_exchange(&self, densities: &[DMatrix<f64>]) -> Vec<CoulombExchangePair> {
        let n = self.functions;
        assert!(densities.iter().all(|p| p.shape() == (n, n)));
        let blocks = BlockMaxima::new(&self.set, densities);
        let packed: Vec<Vec<f64>> = densities
            .iter()
            .map(|p| {
                (0..n)
                    .flat_map(|c| (0..=c).map(move |d| (c, d)))
                    .map(|(c, d)| if c == d { p[(c, d)] } else { 2.0 * p[(c, d)] })
                    .collect()
            })
            .collect();
        let moved = self.set.all_moved();
        let sinks = walk(&self.set, &moved, &self.settings, Some(SINKS), || {
            DigestSink {
                n,
                densities,
                packed: &packed,
                blocks: &blocks,
                sums: densities.iter().map(|_| Sums::new(n)).collect(),
                computed: 0,
            }
        });
        let mut totals: Vec<Sums> = densities.iter().map(|_| Sums::new(n)).collect();
        for sink in &sinks {
            for (total, part) in totals.iter_mut().zip(&sink.sums) {
                total.add(part);
            }
            self.computed.fetch_add(sink.computed, Ordering::Relaxed);
        }
        totals.iter().map(|sums| sums.matrices(n)).collect()
    }
}

/// J at packed places, and half of K: K is this plus its transpose.
struct Sums {
    coulomb: Vec<f64>,
    exchange: Vec<f64>,
}

impl Sums {
    fn new(n: usize) -> Self {
        Self {
            coulomb: vec![0.0; pair_count(n)],
            exchange: vec![0.0; n * n],
        }
    }

    fn add(&mut self, part: &Self) {
        for (sum, term) in self.coulomb.iter_mut().zip(&part.coulomb) {
            *sum += term;
        }
        for (sum, term) in self.exchange.iter_mut().zip(&part.exchange) {
            *sum += term;
        }
    }

    fn matrices(&self, n: usize) -> CoulombExchangePair {
        let place = |a: usize, b: usize| pair_count(a.max(b)) + a.min(b);
        let half = DMatrix::from_column_slice(n, n, &self.exchange);
        CoulombExchangePair {
            coulomb: DMatrix::from_fn(n, n, |a, b| self.coulomb[place(a, b)]),
            exchange: &half + half.transpose(),
        }
    }
}

/// Largest density element, over all densities, between the functions of two shells.
struct BlockMaxima {
    shells: usize,
    maxima: Vec<f64>,
    largest: f64,
}

impl BlockMaxima {
    fn new(set: &PairSet, densities: &[DMatrix<f64>]) -> Self {
        let shells = set.pairs.iter().map(|p| p.shells[0] + 1).max().unwrap_or(0);
        let mut maxima = vec![0.0; shells * shells];
        for pair in &set.pairs {
            let mut largest: f64 = 0.0;
            for &[a, b] in &pair.functions {
                for p in densities {
                    largest = largest.max(p[(a as usize, b as usize)].abs());
                }
            }
            let [s, t] = pair.shells;
            maxima[s * shells + t] = largest;
            maxima[t * shells + s] = largest;
        }
        Self {
            shells,
            largest: 2.0 * maxima.iter().copied().fold(0.0, f64::max),
            maxima,
        }
    }

    fn between(&self, s: usize, t: usize) -> f64 {
        self.maxima[s * self.shells + t]
    }
}

/// Adds quartets to J and K.
struct DigestSink<'a> {
    n: usize,
    densities: &'a [DMatrix<f64>],
    /// (2 − δ_cd) P_cd at packed places.
    packed: &'a [Vec<f64>],
    blocks: &'a BlockMaxima,
    sums: Vec<Sums>,
    computed: u64,
}

impl QuartetSink for DigestSink<'_> {
    fn take(&mut self, bra: &[&ShellPair], ket: &[&ShellPair], result: &[Four]) {
        let n = self.n;
        for (lane, (&bra, &ket)) in bra.iter().zip(ket).enumerate() {
            let same = std::ptr::eq(bra, ket);
            let width = ket.places.len();
            let count = if same {
                pair_count(width)
            } else {
                width * bra.places.len()
            };
            self.computed += count as u64;
            for ((density, packed), sums) in
                self.densities.iter().zip(self.packed).zip(&mut self.sums)
            {
                let density = density.as_slice();
                for (f, &[a, b]) in bra.functions.iter().enumerate() {
                    let (ab, a, b) = (bra.places[f] as usize, a as usize, b as usize);
                    for (g, &[c, d]) in ket.functions.iter().enumerate() {
                        let (cd, c, d) = (ket.places[g] as usize, c as usize, d as usize);
                        if same && ab < cd {
                            continue;
                        }
                        let value = result[f * width + g].0[lane];
                        sums.coulomb[ab] += value * packed[cd];
                        let mut weighted = value;
                        if ab == cd {
                            weighted *= 0.5;
                        } else {
                            sums.coulomb[cd] += value * packed[ab];
                        }
                        if a == b {
                            weighted *= 0.5;
                        }
                        if c == d {
                            weighted *= 0.5;
                        }
                        sums.exchange[a * n + c] += weighted * density[b * n + d];
                        sums.exchange[a * n + d] += weighted * density[b * n + c];
                        sums.exchange[b * n + c] += weighted * density[a * n + d];
                        sums.exchange[b * n + d] += weighted * density[a * n + c];
                    }
                }
            }
        }
    }

    fn skip(&mut self, _bra: &ShellPair, _ket: &ShellPair) {}

    fn weight(&self, bra: &ShellPair, ket: &ShellPair) -> f64 {
        let ([a, b], [c, d]) = (bra.shells, ket.shells);
        let coulomb = self.blocks.between(a, b).max(self.blocks.between(c, d));
        [(a, c), (a, d), (b, c), (b, d)]
            .iter()
            .map(|&(s, t)| self.blocks.between(s, t))
            .fold(2.0 * coulomb, f64::max)
    }

    fn largest_weight(&self) -> f64 {
        self.blocks.largest
    }
}
