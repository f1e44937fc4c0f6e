//! The walk over the shell quartets of a geometry, four at a time.

use super::RepulsionSettings;
use super::class::{ClassKey, PairClass};
use super::groups::{Group, PairSet};
use super::lanes::Four;
use super::pairs::{PairBlock, ShellPair, Side};
use super::quartets::{QuartetEngine, QuartetPlan};
use rayon::prelude::*;
use std::cmp::Ordering;
use std::collections::HashMap;
use std::ops::Range;
use std::sync::Arc;

/// Quartets that one task has at least, where there are that many: a fixed number, so that the
/// partition of the work does not depend on the machine.
const QUARTETS_PER_TASK: usize = 4096;
/// Blocks of left-over quartets in one task.
const LEFT_BLOCKS_PER_TASK: usize = 32;

/// How the pairs of one class meet those of a group.
struct Meeting {
    /// Index of the plan.
    plan: u32,
    /// Side of the group's pairs.
    side: Side,
}

/// A quartet that found no three others with its outer pair for its lanes. The order is by what those
/// that share lanes should have in common.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
struct LeftOver {
    plan: u32,
    /// Which pair is the later one, which matters to those who store the integrals.
    order: Ordering,
    /// Numbers of primitives of bra and ket.
    primitives: [u32; 2],
    /// Indices of bra and ket.
    pairs: [u32; 2],
}

/// Where quartets go.
pub(super) trait QuartetSink {
    /// What comes until [`Self::end`] are quartets with this outer pair: all that are not left over.
    fn begin(&mut self, outer: &ShellPair) {
        let _ = outer;
    }
    /// Quartets in the first `bra.len()` lanes of `result`, laid out as
    /// [`QuartetEngine::evaluate`] says.
    fn take(&mut self, bra: &[&ShellPair], ket: &[&ShellPair], result: &[Four]);
    /// A quartet whose integrals are all below the threshold.
    fn skip(&mut self, bra: &ShellPair, ket: &ShellPair);
    /// The outer pair is done.
    fn end(&mut self) {}
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

/// Evaluates all unique quartets of a set in which an atom of `moved` takes part, and hands each to one
/// of the sinks that `sink` makes: one for each task, or `sinks` in all, between which the tasks are
/// dealt out in turn. Which sink gets which quartets does not depend on the number of threads.
/// Returns the sinks in order.
///
/// The outer pair of a quartet is the later one. All its quartets but those left over follow one
/// another, so that the rows of the packed list that they fill stay in the cache.
pub(super) fn walk<S: QuartetSink + Send>(
    set: &PairSet,
    moved: &[bool],
    settings: &RepulsionSettings,
    sinks: Option<usize>,
    sink: impl Fn() -> S + Sync,
) -> Vec<S> {
    let groups = set.groups(moved);
    let walk = Walk::new(set, moved, &groups, settings.threshold);
    let tasks = tasks(set.pairs.len());
    let sinks = sinks.unwrap_or(tasks.len()).min(tasks.len());
    let (sinks, left): (Vec<S>, Vec<Vec<LeftOver>>) = (0..sinks)
        .into_par_iter()
        .map_init(Walker::default, |walker, first| {
            let mut sink = sink();
            for task in tasks[first..].iter().step_by(sinks) {
                for outer in task.clone() {
                    sink.begin(&set.pairs[outer]);
                    walker.run(&walk, outer, &mut sink);
                    sink.end();
                }
            }
            (sink, std::mem::take(&mut walker.left))
        })
        .unzip();
    walk.run_left_over(left.concat(), sinks)
}

/// Stretches of outer pairs with about equally many quartets.
fn tasks(pairs: usize) -> Vec<Range<usize>> {
    let mut tasks = Vec::new();
    let (mut start, mut quartets) = (0, 0);
    for outer in 0..pairs {
        quartets += outer + 1;
        if quartets >= QUARTETS_PER_TASK || outer + 1 == pairs {
            tasks.push(start..outer + 1);
            (start, quartets) = (outer + 1, 0);
        }
    }
    tasks
}

/// What all tasks of a walk share.
struct Walk<'a> {
    set: &'a PairSet,
    moved: &'a [bool],
    groups: &'a [Group],
    /// For each pair its row of `meetings`.
    classes: Vec<usize>,
    /// For each class, how it meets each group.
    meetings: Vec<Vec<Meeting>>,
    /// The plans in order of appearance, which does not depend on where they are in memory.
    plans: Vec<Arc<QuartetPlan>>,
    threshold: f64,
}

impl<'a> Walk<'a> {
    fn new(set: &'a PairSet, moved: &'a [bool], groups: &'a [Group], threshold: f64) -> Self {
        let mut classes: Vec<&Arc<PairClass>> = Vec::new();
        let mut class_index: HashMap<&ClassKey, usize> = HashMap::new();
        for group in groups {
            class_index.entry(&group.class.key).or_insert_with(|| {
                classes.push(&group.class);
                classes.len() - 1
            });
        }
        let mut plans: Vec<Arc<QuartetPlan>> = Vec::new();
        let mut plan_index: HashMap<*const QuartetPlan, u32> = HashMap::new();
        let mut meet = |outer: &Arc<PairClass>, group: &Group| {
            let plan = QuartetPlan::get(outer, &group.class);
            let side = if Arc::ptr_eq(&plan.bra, outer) {
                Side::Ket
            } else {
                Side::Bra
            };
            let plan = *plan_index.entry(Arc::as_ptr(&plan)).or_insert_with(|| {
                plans.push(plan);
                plans.len() as u32 - 1
            });
            Meeting { plan, side }
        };
        let meetings = classes
            .iter()
            .map(|outer| groups.iter().map(|group| meet(outer, group)).collect())
            .collect();
        Self {
            set,
            moved,
            groups,
            classes: set
                .pairs
                .iter()
                .map(|p| class_index[&p.class.key])
                .collect(),
            meetings,
            plans,
            threshold,
        }
    }
}

/// Buffers of one thread.
#[derive(Default)]
struct Walker {
    engine: QuartetEngine,
    outer_blocks: [PairBlock; 2],
    mixed_blocks: [PairBlock; 2],
    queue: Vec<usize>,
    left: Vec<LeftOver>,
}

impl Walker {
    /// All quartets with one outer pair, except those left over.
    fn run(&mut self, walk: &Walk<'_>, outer: usize, sink: &mut impl QuartetSink) {
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
                    let plan = &walk.plans[meeting.plan as usize];
                    let blocks = meeting.sides(outer_block, block);
                    let budget = walk.threshold / weight;
                    let result = self.engine.evaluate(plan, blocks, budget);
                    let [bra, ket] = meeting.sides([pair; 4], inner);
                    sink.take(&bra, &ket, result);
                } else {
                    for l in 0..4 {
                        if kept(l) {
                            self.enqueue(walk, meeting, pair, four[l], sink);
                        } else {
                            sink.skip(pair, inner[l]);
                        }
                    }
                }
            }
            for i in rest.iter().copied().chain(same) {
                if sink.weight(pair, &pairs[i]) * pair.norm * pairs[i].norm >= walk.threshold {
                    self.enqueue(walk, meeting, pair, i, sink);
                } else {
                    sink.skip(pair, &pairs[i]);
                }
            }
            self.left.extend(self.queue.drain(..).map(|inner| {
                let quartet = meeting.sides(outer, inner);
                let [bra, ket] = quartet.map(|i| &pairs[i]);
                LeftOver {
                    plan: meeting.plan,
                    order: bra.shells[0].cmp(&ket.shells[0]),
                    primitives: [bra, ket].map(|pair| pair.primitives as u32),
                    pairs: quartet.map(|i| i as u32),
                }
            }));
        }
    }

    /// Puts an inner pair into the queue, and evaluates the four in it once they are four.
    fn enqueue(
        &mut self,
        walk: &Walk<'_>,
        meeting: &Meeting,
        pair: &ShellPair,
        inner: usize,
        sink: &mut impl QuartetSink,
    ) {
        self.queue.push(inner);
        if self.queue.len() < 4 {
            return;
        }
        let inner = [0, 1, 2, 3].map(|l| &walk.set.pairs[self.queue[l]]);
        self.queue.clear();
        let weight = inner
            .iter()
            .map(|i| sink.weight(pair, i))
            .fold(0.0, f64::max);
        let block = &mut self.mixed_blocks[0];
        block.pack(inner, meeting.side);
        let outer_block = &self.outer_blocks[1 - meeting.side as usize];
        let plan = &walk.plans[meeting.plan as usize];
        let blocks = meeting.sides(outer_block, &*block);
        let budget = walk.threshold / weight;
        let result = self.engine.evaluate(plan, blocks, budget);
        let [bra, ket] = meeting.sides([pair; 4], inner);
        sink.take(&bra, &ket, result);
    }

    /// Up to four quartets of one plan that may differ in both pairs.
    fn run_mixed(&mut self, walk: &Walk<'_>, four: &[LeftOver], sink: &mut impl QuartetSink) {
        let pairs = &walk.set.pairs;
        let lane = |l: usize| four[l.min(four.len() - 1)].pairs;
        let bra = [0, 1, 2, 3].map(|l| &pairs[lane(l)[0] as usize]);
        let ket = [0, 1, 2, 3].map(|l| &pairs[lane(l)[1] as usize]);
        let weight = (0..4)
            .map(|l| sink.weight(bra[l], ket[l]))
            .fold(0.0, f64::max);
        let [bra_block, ket_block] = &mut self.mixed_blocks;
        bra_block.pack(bra, Side::Bra);
        ket_block.pack(ket, Side::Ket);
        let plan = &walk.plans[four[0].plan as usize];
        let blocks = [&*bra_block, &*ket_block];
        let result = self.engine.evaluate(plan, blocks, walk.threshold / weight);
        sink.take(&bra[..four.len()], &ket[..four.len()], result);
    }
}

impl Walk<'_> {
    /// The quartets that filled no block, now sorted so that those of one kind share lanes.
    fn run_left_over<S: QuartetSink + Send>(
        &self,
        mut left: Vec<LeftOver>,
        mut sinks: Vec<S>,
    ) -> Vec<S> {
        left.sort_unstable();
        let blocks: Vec<&[LeftOver]> = left
            .chunk_by(|x, y| x.plan == y.plan)
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

impl Meeting {
    /// Bra and ket of an outer and an inner thing.
    fn sides<T>(&self, outer: T, inner: T) -> [T; 2] {
        match self.side {
            Side::Ket => [outer, inner],
            Side::Bra => [inner, outer],
        }
    }
}
