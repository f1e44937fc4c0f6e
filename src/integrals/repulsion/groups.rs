//! All shell pairs of a geometry, grouped by class, and the walk over their quartets.

use super::RepulsionSettings;
use super::class::{ClassKey, PairClass};
use super::lanes::Four;
use super::pairs::{PairBlock, ShellPair, Side, largest_bound};
use super::quartets::{QuartetEngine, QuartetPlan, bra_first};
use crate::basis::Basis;
use rayon::prelude::*;
use std::collections::{BTreeMap, HashMap};
use std::ops::Range;
use std::sync::Arc;

/// Quartets that one task has at least, where there are that many: a fixed number, so that the
/// partition of the work does not depend on the machine.
const QUARTETS_PER_TASK: usize = 2048;
/// Groups of at least this many pairs are divided by number of primitives, so that the lanes of a
/// block have equally much to do.
const LARGE_GROUP: usize = 48;

/// All shell pairs of a basis at one geometry.
#[derive(Debug, Clone)]
pub(super) struct PairSet {
    pub(super) pairs: Vec<ShellPair>,
    shells: Vec<[usize; 2]>,
    largest: f64,
}

/// Pairs of one class in order of falling norm.
#[derive(Debug)]
struct Group {
    class: Arc<PairClass>,
    /// Whether these pairs touch a moved atom.
    moved: bool,
    members: Vec<usize>,
    /// The members four by four, for the ket; a last incomplete four is left out.
    blocks: Vec<PairBlock>,
}

/// A stretch of the bra pairs of one group with the ket pairs of another.
#[derive(Debug)]
struct Task {
    plan: usize,
    bra: usize,
    ket: usize,
    range: Range<usize>,
}

/// Where quartets go.
pub(super) trait QuartetSink {
    /// Quartets in the first `bra.len()` lanes of `result`, laid out as
    /// [`QuartetEngine::evaluate`] says.
    fn take(&mut self, bra: &[&ShellPair], ket: &[&ShellPair], result: &[Four]);
    /// A quartet whose integrals are all below the threshold.
    fn skip(&mut self, bra: &ShellPair, ket: &ShellPair);
    /// Factor on the product of norms below which a quartet may be skipped; 1 leaves the bound as it is.
    fn weight(&self, bra: &ShellPair, ket: &ShellPair) -> f64 {
        let _ = (bra, ket);
        1.0
    }
    /// Upper bound of all weights.
    fn largest_weight(&self) -> f64 {
        1.0
    }
}

impl PairSet {
    pub(super) fn new(basis: &Basis) -> Self {
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

    /// Whether pair `x` comes before pair `y` in order of falling norm.
    fn precedes(&self, x: usize, y: usize) -> bool {
        let (norm_x, norm_y) = (self.pairs[x].norm, self.pairs[y].norm);
        norm_x > norm_y || (norm_x >= norm_y && x < y)
    }

    fn groups(&self, moved: &[bool]) -> Vec<Group> {
        let mut by_class: BTreeMap<(&ClassKey, bool), Vec<usize>> = BTreeMap::new();
        for (i, pair) in self.pairs.iter().enumerate() {
            let touched = pair.atoms.iter().any(|&a| moved[a]);
            by_class
                .entry((&pair.class.key, touched))
                .or_default()
                .push(i);
        }
        let mut groups = Vec::new();
        for ((_, touched), members) in by_class {
            let mut divided: BTreeMap<u32, Vec<usize>> = BTreeMap::new();
            let large = members.len() >= LARGE_GROUP;
            for i in members {
                let count = self.pairs[i].primitives.max(1);
                divided
                    .entry(if large { count.ilog2() } else { 0 })
                    .or_default()
                    .push(i);
            }
            groups.extend(divided.into_values().map(|mut members| {
                members.sort_unstable_by(|&x, &y| {
                    let norms = (self.pairs[y].norm, self.pairs[x].norm);
                    norms.0.total_cmp(&norms.1).then(x.cmp(&y))
                });
                Group {
                    class: Arc::clone(&self.pairs[members[0]].class),
                    moved: touched,
                    members,
                    blocks: Vec::new(),
                }
            }));
        }
        groups.par_iter_mut().for_each(|group| {
            group.blocks = group
                .members
                .chunks_exact(4)
                .map(|four| {
                    let mut block = PairBlock::default();
                    block.pack([0, 1, 2, 3].map(|l| &self.pairs[four[l]]), Side::Ket);
                    block
                })
                .collect();
        });
        groups
    }

    /// Evaluates all unique quartets in which an atom of `moved` takes part, and hands each to one of
    /// the sinks that `sink` makes: one for each task, or `sinks` in all, between which the tasks are
    /// dealt out in turn. Which sink gets which quartets does not depend on the number of threads.
    /// Returns the sinks in order.
    pub(super) fn walk<S: QuartetSink + Send>(
        &self,
        moved: &[bool],
        settings: &RepulsionSettings,
        sinks: Option<usize>,
        sink: impl Fn() -> S + Sync,
    ) -> Vec<S> {
        let groups = self.groups(moved);
        let mut plans = Vec::new();
        let mut plan_index: HashMap<(&ClassKey, &ClassKey), usize> = HashMap::new();
        let mut tasks = Vec::new();
        for (i, first) in groups.iter().enumerate() {
            for (j, second) in groups.iter().enumerate().take(i + 1) {
                if !(first.moved || second.moved) {
                    continue;
                }
                let same_class = first.class.key == second.class.key;
                let orders: &[(usize, usize)] = if i == j {
                    &[(i, i)]
                } else if same_class {
                    &[(i, j), (j, i)]
                } else if bra_first(&first.class, &second.class) {
                    &[(i, j)]
                } else {
                    &[(j, i)]
                };
                for &(bra, ket) in orders {
                    let classes = (&groups[bra].class, &groups[ket].class);
                    let plan = *plan_index
                        .entry((&classes.0.key, &classes.1.key))
                        .or_insert_with(|| {
                            plans.push(QuartetPlan::get(classes.0, classes.1));
                            plans.len() - 1
                        });
                    let step = QUARTETS_PER_TASK.div_ceil(groups[ket].members.len());
                    let count = groups[bra].members.len();
                    tasks.extend((0..count).step_by(step).map(|start| Task {
                        plan,
                        bra,
                        ket,
                        range: start..(start + step).min(count),
                    }));
                }
            }
        }
        let sinks = sinks.unwrap_or(tasks.len()).min(tasks.len());
        (0..sinks)
            .into_par_iter()
            .map_init(Walker::default, |walker, first| {
                let mut sink = sink();
                for task in tasks.iter().skip(first).step_by(sinks) {
                    let (bra, ket) = (&groups[task.bra], &groups[task.ket]);
                    let work = Work {
                        set: self,
                        plan: &plans[task.plan],
                        threshold: settings.threshold,
                    };
                    walker.run(&work, bra, ket, task.range.clone(), &mut sink);
                }
                sink
            })
            .collect()
    }
}

/// What all quartets of a task share.
struct Work<'a> {
    set: &'a PairSet,
    plan: &'a QuartetPlan,
    threshold: f64,
}

/// Buffers of one thread.
#[derive(Default)]
struct Walker {
    engine: QuartetEngine,
    bra: PairBlock,
    bra_mixed: PairBlock,
    ket_mixed: PairBlock,
    /// Quartets that did not fill a block of ket pairs.
    left: Vec<(usize, usize)>,
}

impl Walker {
    fn run(
        &mut self,
        work: &Work<'_>,
        bra: &Group,
        ket: &Group,
        range: Range<usize>,
        sink: &mut impl QuartetSink,
    ) {
        let pairs = &work.set.pairs;
        let same_group = std::ptr::eq(bra, ket);
        let same_class = bra.class.key == ket.class.key;
        for position in range {
            let i = bra.members[position];
            let pair = &pairs[i];
            // Of two pairs of one class the one with the larger norm is the ket.
            let limit = if same_group {
                position + 1
            } else if same_class {
                ket.members.partition_point(|&j| work.set.precedes(j, i))
            } else {
                ket.members.len()
            };
            let kept = ket.members[..limit].partition_point(|&j| {
                sink.largest_weight() * pair.norm * pairs[j].norm >= work.threshold
            });
            for &j in &ket.members[kept..limit] {
                sink.skip(pair, &pairs[j]);
            }
            let blocks = kept / 4;
            if blocks > 0 {
                self.bra.pack([pair; 4], Side::Bra);
            }
            for (block, four) in ket.blocks[..blocks].iter().zip(ket.members.chunks_exact(4)) {
                let kets = [0, 1, 2, 3].map(|l| &pairs[four[l]]);
                let weight = kets
                    .iter()
                    .map(|k| sink.weight(pair, k))
                    .fold(0.0, f64::max);
                let largest = kets[0].norm;
                if weight * largest * pair.norm < work.threshold {
                    kets.iter().for_each(|k| sink.skip(pair, k));
                    continue;
                }
                let result =
                    self.engine
                        .evaluate(work.plan, &self.bra, block, work.threshold / weight);
                sink.take(&[pair; 4], &kets, result);
            }
            for &j in &ket.members[4 * blocks..kept] {
                self.left.push((i, j));
                if self.left.len() == 4 {
                    self.run_left(work, sink);
                }
            }
        }
        self.run_left(work, sink);
    }

    /// Evaluates the quartets left over, which may differ in both pairs.
    fn run_left(&mut self, work: &Work<'_>, sink: &mut impl QuartetSink) {
        let pairs = &work.set.pairs;
        self.left.retain(|&(i, j)| {
            let (bra, ket) = (&pairs[i], &pairs[j]);
            let kept = sink.weight(bra, ket) * bra.norm * ket.norm >= work.threshold;
            if !kept {
                sink.skip(bra, ket);
            }
            kept
        });
        let Some(&last) = self.left.last() else {
            return;
        };
        let lane = |l: usize| *self.left.get(l).unwrap_or(&last);
        let bra = [0, 1, 2, 3].map(|l| &pairs[lane(l).0]);
        let ket = [0, 1, 2, 3].map(|l| &pairs[lane(l).1]);
        let weight = (0..4)
            .map(|l| sink.weight(bra[l], ket[l]))
            .fold(0.0, f64::max);
        self.bra_mixed.pack(bra, Side::Bra);
        self.ket_mixed.pack(ket, Side::Ket);
        let result = self.engine.evaluate(
            work.plan,
            &self.bra_mixed,
            &self.ket_mixed,
            work.threshold / weight,
        );
        let lanes = self.left.len();
        sink.take(&bra[..lanes], &ket[..lanes], result);
        self.left.clear();
    }
}

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
        .for_each_init(Walker::default, |walker, four| {
            let class = &four[0].class;
            let plan = QuartetPlan::get(class, class);
            let lanes = [0, 1, 2, 3].map(|l: usize| &*four[l.min(four.len() - 1)]);
            walker.bra.pack(lanes, Side::Bra);
            walker.ket_mixed.pack(lanes, Side::Ket);
            let result = walker
                .engine
                .evaluate(&plan, &walker.bra, &walker.ket_mixed, 0.0);
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
