//! All shell pairs of a geometry, grouped by class, and the walk over their quartets.

use super::RepulsionSettings;
use super::class::{ClassKey, PairClass};
use super::lanes::Four;
use super::pairs::{PairBlock, ShellPair, Side, largest_bound};
use super::quartets::{QuartetEngine, QuartetPlan};
use super::segments::segmented;
use crate::basis::Basis;
use rayon::prelude::*;
use std::collections::{BTreeMap, HashMap};
use std::ops::Range;
use std::sync::Arc;

/// Quartets that one task has at least, where there are that many: a fixed number, so that the
/// partition of the work does not depend on the machine.
const QUARTETS_PER_TASK: usize = 4096;
/// Blocks of left-over quartets in one task.
const LEFT_BLOCKS_PER_TASK: usize = 32;
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
struct Group {
    class: Arc<PairClass>,
    /// Whether these pairs touch a moved atom.
    moved: bool,
    members: Vec<usize>,
    largest_norm: f64,
    /// The members four by four, as bra and as ket; a last incomplete four is left out.
    blocks: [Vec<PairBlock>; 2],
}

/// How the pairs of one class meet those of a group.
struct Meeting {
    plan: Arc<QuartetPlan>,
    /// Side of the group's pairs.
    side: Side,
}

/// A quartet that found no three others for its lanes.
struct LeftOver {
    plan: Arc<QuartetPlan>,
    bra: usize,
    ket: usize,
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

    fn groups(&self, moved: &[bool]) -> Vec<Group> {
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

    /// Evaluates all unique quartets in which an atom of `moved` takes part, and hands each to one of
    /// the sinks that `sink` makes: one for each task, or `sinks` in all, between which the tasks are
    /// dealt out in turn. Which sink gets which quartets does not depend on the number of threads.
    /// Returns the sinks in order.
    ///
    /// The outer pair of a quartet is the later one. All its quartets follow one another, so that the
    /// rows of the packed list that they fill stay in the cache.
    pub(super) fn walk<S: QuartetSink + Send>(
        &self,
        moved: &[bool],
        settings: &RepulsionSettings,
        sinks: Option<usize>,
        sink: impl Fn() -> S + Sync,
    ) -> Vec<S> {
        let groups = self.groups(moved);
        let mut classes: Vec<&Arc<PairClass>> = Vec::new();
        let mut class_index: HashMap<&ClassKey, usize> = HashMap::new();
        for group in &groups {
            class_index.entry(&group.class.key).or_insert_with(|| {
                classes.push(&group.class);
                classes.len() - 1
            });
        }
        let meetings: Vec<Vec<Meeting>> = classes
            .iter()
            .map(|outer| {
                groups
                    .iter()
                    .map(|g| Meeting::of(outer, &g.class))
                    .collect()
            })
            .collect();
        let walk = Walk {
            set: self,
            moved,
            groups: &groups,
            classes: self
                .pairs
                .iter()
                .map(|p| class_index[&p.class.key])
                .collect(),
            meetings: &meetings,
            threshold: settings.threshold,
        };
        let tasks = self.tasks();
        let sinks = sinks.unwrap_or(tasks.len()).min(tasks.len());
        let (sinks, left): (Vec<S>, Vec<Vec<Vec<LeftOver>>>) = (0..sinks)
            .into_par_iter()
            .map_init(Walker::default, |walker, first| {
                let mut sink = sink();
                let left = tasks[first..]
                    .iter()
                    .step_by(sinks)
                    .map(|task| {
                        let mut left = Vec::new();
                        for outer in task.clone() {
                            walker.run(&walk, outer, &mut sink, &mut left);
                        }
                        left
                    })
                    .collect();
                (sink, left)
            })
            .unzip();
        walk.run_left_over(left.into_iter().flatten().flatten().collect(), sinks)
    }

    /// Stretches of outer pairs with about equally many quartets.
    fn tasks(&self) -> Vec<Range<usize>> {
        let mut tasks = Vec::new();
        let (mut start, mut quartets) = (0, 0);
        for outer in 0..self.pairs.len() {
            quartets += outer + 1;
            if quartets >= QUARTETS_PER_TASK || outer + 1 == self.pairs.len() {
                tasks.push(start..outer + 1);
                (start, quartets) = (outer + 1, 0);
            }
        }
        tasks
    }
}

impl Meeting {
    fn of(outer: &Arc<PairClass>, inner: &Arc<PairClass>) -> Self {
        let plan = QuartetPlan::get(outer, inner);
        let side = if Arc::ptr_eq(&plan.bra, outer) {
            Side::Ket
        } else {
            Side::Bra
        };
        Self { plan, side }
    }
}

/// What all tasks of a walk share.
struct Walk<'a> {
    set: &'a PairSet,
    moved: &'a [bool],
    groups: &'a [Group],
    /// For each pair its row of `meetings`.
    classes: Vec<usize>,
    meetings: &'a [Vec<Meeting>],
    threshold: f64,
}

/// Buffers of one thread.
#[derive(Default)]
struct Walker {
    engine: QuartetEngine,
    outer_blocks: [PairBlock; 2],
    mixed_blocks: [PairBlock; 2],
    queue: Vec<usize>,
}

impl Walker {
    /// All quartets with one outer pair, except those left over.
    fn run(
        &mut self,
        walk: &Walk<'_>,
        outer: usize,
        sink: &mut impl QuartetSink,
        left: &mut Vec<LeftOver>,
    ) {
        let pairs = &walk.set.pairs;
        let pair = &pairs[outer];
        let class = walk.classes[outer];
        let moved = pair.touches(walk.moved);
        for (block, side) in self.outer_blocks.iter_mut().zip([Side::Bra, Side::Ket]) {
            block.pack([pair; 4], side);
        }
        for (index, group) in walk.groups.iter().enumerate() {
            if !(moved || group.moved) {
                continue;
            }
            // Pairs with an earlier first shell all are earlier pairs; those with the same may be.
            let shell = pair.shells[0];
            let first = |i: usize| pairs[i].shells[0];
            let earlier = group.members.partition_point(|&i| first(i) < shell);
            let members = &group.members[..earlier];
            let same = group.members[earlier..]
                .iter()
                .copied()
                .take_while(|&i| first(i) == shell)
                .filter(|&i| i <= outer);
            if sink.largest_weight() * pair.norm * group.largest_norm < walk.threshold {
                let all = members.iter().copied().chain(same);
                all.for_each(|i| sink.skip(pair, &pairs[i]));
                continue;
            }
            let meeting = &walk.meetings[class][index];
            let blocks = &group.blocks[meeting.side as usize];
            let fours = members.chunks_exact(4);
            let rest = fours.remainder();
            for (four, block) in fours.zip(blocks) {
                let inner = [0, 1, 2, 3].map(|l| &pairs[four[l]]);
                let weights = inner.map(|i| sink.weight(pair, i));
                let kept = |l: usize| weights[l] * pair.norm * inner[l].norm >= walk.threshold;
                if (0..4).all(kept) {
                    let weight = weights.into_iter().fold(0.0, f64::max);
                    let outer_block = &self.outer_blocks[1 - meeting.side as usize];
                    let engine = &mut self.engine;
                    meeting.evaluate(engine, outer_block, block, walk.threshold / weight);
                    meeting.hand_over(engine, &[pair; 4], &inner, sink);
                } else {
                    for l in 0..4 {
                        if !kept(l) {
                            sink.skip(pair, inner[l]);
                            continue;
                        }
                        self.queue.push(four[l]);
                        if self.queue.len() == 4 {
                            self.run_queue(walk, meeting, pair, sink);
                        }
                    }
                }
            }
            for i in rest.iter().copied().chain(same) {
                if sink.weight(pair, &pairs[i]) * pair.norm * pairs[i].norm >= walk.threshold {
                    self.queue.push(i);
                    if self.queue.len() == 4 {
                        self.run_queue(walk, meeting, pair, sink);
                    }
                } else {
                    sink.skip(pair, &pairs[i]);
                }
            }
            left.extend(self.queue.drain(..).map(|inner| {
                let (bra, ket) = match meeting.side {
                    Side::Bra => (inner, outer),
                    Side::Ket => (outer, inner),
                };
                LeftOver {
                    plan: Arc::clone(&meeting.plan),
                    bra,
                    ket,
                }
            }));
        }
    }

    /// Four inner pairs from the queue with one outer pair.
    fn run_queue(
        &mut self,
        walk: &Walk<'_>,
        meeting: &Meeting,
        pair: &ShellPair,
        sink: &mut impl QuartetSink,
    ) {
        let inner = [0, 1, 2, 3].map(|l| &walk.set.pairs[self.queue[l]]);
        self.queue.clear();
        let weight = inner
            .iter()
            .map(|i| sink.weight(pair, i))
            .fold(0.0, f64::max);
        let block = &mut self.mixed_blocks[0];
        block.pack(inner, meeting.side);
        let outer_block = &self.outer_blocks[1 - meeting.side as usize];
        meeting.evaluate(
            &mut self.engine,
            outer_block,
            block,
            walk.threshold / weight,
        );
        meeting.hand_over(&self.engine, &[pair; 4], &inner, sink);
    }

    /// Up to four quartets of one plan that may differ in both pairs.
    fn run_mixed(&mut self, walk: &Walk<'_>, four: &[LeftOver], sink: &mut impl QuartetSink) {
        let pairs = &walk.set.pairs;
        let plan = &four[0].plan;
        let lane = |l: usize| &four[l.min(four.len() - 1)];
        let bra = [0, 1, 2, 3].map(|l| &pairs[lane(l).bra]);
        let ket = [0, 1, 2, 3].map(|l| &pairs[lane(l).ket]);
        let weight = (0..4)
            .map(|l| sink.weight(bra[l], ket[l]))
            .fold(0.0, f64::max);
        let [bra_block, ket_block] = &mut self.mixed_blocks;
        bra_block.pack(bra, Side::Bra);
        ket_block.pack(ket, Side::Ket);
        let engine = &mut self.engine;
        engine.evaluate(plan, bra_block, ket_block, walk.threshold / weight);
        let count = four.len();
        sink.take(&bra[..count], &ket[..count], engine.result(plan));
    }
}

impl Meeting {
    fn evaluate(
        &self,
        engine: &mut QuartetEngine,
        outer: &PairBlock,
        inner: &PairBlock,
        budget: f64,
    ) {
        match self.side {
            Side::Ket => engine.evaluate(&self.plan, outer, inner, budget),
            Side::Bra => engine.evaluate(&self.plan, inner, outer, budget),
        };
    }

    fn hand_over(
        &self,
        engine: &QuartetEngine,
        outer: &[&ShellPair],
        inner: &[&ShellPair],
        sink: &mut impl QuartetSink,
    ) {
        let result = engine.result(&self.plan);
        match self.side {
            Side::Ket => sink.take(outer, inner, result),
            Side::Bra => sink.take(inner, outer, result),
        }
    }
}

impl Walk<'_> {
    /// The quartets that filled no block, now sorted so that those of one kind share lanes.
    fn run_left_over<S: QuartetSink + Send>(
        &self,
        mut left: Vec<LeftOver>,
        mut sinks: Vec<S>,
    ) -> Vec<S> {
        let primitives = |i: usize| self.set.pairs[i].primitives;
        // Plans in order of appearance, which does not depend on where they are in memory.
        let plan = |q: &LeftOver| Arc::as_ptr(&q.plan) as usize;
        let mut first_seen: HashMap<usize, usize> = HashMap::new();
        for q in &left {
            let next = first_seen.len();
            first_seen.entry(plan(q)).or_insert(next);
        }
        left.sort_by_cached_key(|q| {
            // Which pair is the later one matters to those who store the integrals.
            let (bra, ket) = (&self.set.pairs[q.bra], &self.set.pairs[q.ket]);
            let order = bra.shells[0].cmp(&ket.shells[0]);
            let counts = (primitives(q.bra), primitives(q.ket));
            (first_seen[&plan(q)], order, counts, q.bra, q.ket)
        });
        let blocks: Vec<&[LeftOver]> = left
            .chunk_by(|x, y| plan(x) == plan(y))
            .flat_map(|alike| alike.chunks(4))
            .collect();
        let tasks: Vec<&[&[LeftOver]]> = blocks.chunks(LEFT_BLOCKS_PER_TASK).collect();
        // Each sink takes every so manieth task.
        let count = sinks.len().max(1);
        sinks
            .par_iter_mut()
            .enumerate()
            .for_each_init(Walker::default, |walker, (first, sink)| {
                for task in tasks.iter().skip(first).step_by(count) {
                    task.iter()
                        .for_each(|four| walker.run_mixed(self, four, sink));
                }
            });
        sinks
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
            let [bra, ket] = &mut walker.mixed_blocks;
            bra.pack(lanes, Side::Bra);
            ket.pack(lanes, Side::Ket);
            walker.engine.evaluate(&plan, bra, ket, 0.0);
            let result = walker.engine.result(&plan);
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
