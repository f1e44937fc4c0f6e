//! All shell pairs of a geometry, grouped by class.

use super::class::{ClassKey, PairClass};
use super::pairs::{PairBlock, ShellPair, Side, largest_bound};
use super::quartets::{QuartetEngine, QuartetPlan};
use super::segments::segmented;
use crate::basis::Basis;
use rayon::prelude::*;
use std::collections::BTreeMap;
use std::sync::Arc;

/// All shell pairs of a basis at one geometry.
#[derive(Debug, Clone)]
pub(super) struct PairSet {
    pub(super) pairs: Vec<ShellPair>,
    shells: Vec<[usize; 2]>,
    largest: f64,
}

/// Pairs of one class, by their later shell, and those with one later shell by falling number of
/// primitives: the lanes of a block then have about equally much to do.
#[derive(Debug)]
pub(super) struct Group {
    pub(super) class: Arc<PairClass>,
    /// Whether these pairs touch a moved atom.
    pub(super) moved: bool,
    pub(super) members: Vec<usize>,
    pub(super) largest_norm: f64,
    /// The members four by four, as bra and as ket; a last incomplete four is left out.
    pub(super) blocks: [Vec<PairBlock>; 2],
}

impl PairSet {
    pub(super) fn new(basis: &Basis) -> Self {
        let basis = &segmented(basis);
        let shells: Vec<[usize; 2]> = (0..basis.shells().len())
            .flat_map(|s| (0..=s).map(move |t| [s, t]))
            .collect();
        let largest = largest_bound(basis);
        let mut pairs: Vec<ShellPair> = shells
            .par_iter()
            .map(|&[s, t]| ShellPair::new(basis, s, t, largest))
            .collect();
        set_norms(pairs.iter_mut().collect());
        Self {
            pairs,
            shells,
            largest,
        }
    }

    /// Prepares again the pairs that touch a moved atom.
    pub(super) fn update(&mut self, basis: &Basis, moved: &[bool]) {
        let basis = &segmented(basis);
        let mut touched: Vec<(&mut ShellPair, [usize; 2])> = self
            .pairs
            .iter_mut()
            .zip(self.shells.iter().copied())
            .filter(|(pair, _)| pair.atoms.iter().any(|&a| moved[a]))
            .collect();
        let largest = self.largest;
        touched
            .par_iter_mut()
            .for_each(|(pair, [s, t])| **pair = ShellPair::new(basis, *s, *t, largest));
        set_norms(touched.into_iter().map(|(pair, _)| pair).collect());
    }

    /// The flags that make [`Self::walk`] visit every quartet.
    pub(super) fn all_moved(&self) -> Vec<bool> {
        let atoms = self
            .pairs
            .iter()
            .map(|p| p.atoms[0].max(p.atoms[1]) + 1)
            .max();
        vec![true; atoms.unwrap_or(0)]
    }

    pub(super) fn groups(&self, moved: &[bool]) -> Vec<Group> {
        let mut by_class: BTreeMap<(&ClassKey, bool), Vec<usize>> = BTreeMap::new();
        for (i, pair) in self.pairs.iter().enumerate() {
            let key = (&pair.class.key, pair.touches(moved));
            by_class.entry(key).or_default().push(i);
        }
        let mut groups: Vec<Group> = by_class
            .into_iter()
            .map(|((_, moved), mut members)| {
                members.sort_by_key(|&i| {
                    let pair = &self.pairs[i];
                    (pair.shells[0], std::cmp::Reverse(pair.primitives), i)
                });
                Group {
                    class: Arc::clone(&self.pairs[members[0]].class),
                    moved,
                    largest_norm: members
                        .iter()
                        .map(|&i| self.pairs[i].norm)
                        .fold(0.0, f64::max),
                    members,
                    blocks: [Vec::new(), Vec::new()],
                }
            })
            .collect();
        groups.par_iter_mut().for_each(|group| {
            group.blocks = [Side::Bra, Side::Ket].map(|side| {
                group
                    .members
                    .chunks_exact(4)
                    .map(|four| {
                        let mut block = PairBlock::default();
                        block.pack([0, 1, 2, 3].map(|l| &self.pairs[four[l]]), side);
                        block
                    })
                    .collect()
            });
        });
        groups
    }
}

type Buffers = (QuartetEngine, [PairBlock; 2]);

/// Sets the norm √ max (ab|ab) of each pair from its own quartet.
fn set_norms(mut pairs: Vec<&mut ShellPair>) {
    pairs.sort_by(|x, y| x.class.key.cmp(&y.class.key));
    let mut fours: Vec<Vec<&mut ShellPair>> = Vec::new();
    for pair in pairs {
        match fours.last_mut() {
            Some(four) if four.len() < 4 && four[0].class.key == pair.class.key => four.push(pair),
            _ => fours.push(vec![pair]),
        }
    }
    fours
        .par_iter_mut()
        .for_each_init(Default::default, |(engine, blocks): &mut Buffers, four| {
            let class = &four[0].class;
            let plan = QuartetPlan::get(class, class);
            let lanes = [0, 1, 2, 3].map(|l: usize| &*four[l.min(four.len() - 1)]);
            let [bra, ket] = blocks;
            bra.pack(lanes, Side::Bra);
            ket.pack(lanes, Side::Ket);
            let result = engine.evaluate(&plan, [bra, ket], 0.0);
            let functions = class.functions.len();
            let norms: [f64; 4] = std::array::from_fn(|l| {
                (0..functions)
                    .map(|f| result[f * functions + f].0[l])
                    .fold(0.0, f64::max)
                    .sqrt()
            });
            for (pair, norm) in four.iter_mut().zip(norms) {
                pair.norm = norm;
            }
        });
}
