//! Four contracted shell quartets of one pair of classes at once.
//!
//! Stages (names of intermediates as in the code):
//! 1. R: Hermite Coulomb integrals of primitive quartets ([`super::primitives`]);
//! 2. half: Σ over ket primitives of ket scalar × R, for the Hermite degrees that the bra can add;
//! 3. full: Σ over bra primitives of bra scalar × half, for each pair of scalars;
//! 4. ket functions, then bra functions, by the sparse transformations of the classes.
//!
//! Hermite functions of bra and ket enter R by their sum only, so that stages 2 and 3 hold each number
//! once for each pair of scalars, and are plain products over contiguous ranges of degrees.

use super::class::{PairClass, ScalarGroup};
use super::lanes::{Four, Gather, Kernel, Lanes, dispatch};
use super::pairs::PairBlock;
use super::primitives::{field, primitives, scratch_len};
use super::products::{Contraction, Layout, SparseProduct, Tiled};
use crate::integrals::boys::{self, BoysTable};
use crate::integrals::recurrence::{hermite_count, hermite_index, hermite_powers};
use std::collections::HashMap;
use std::sync::{Arc, Mutex, OnceLock, PoisonError};

/// Most Hermite integrals of primitives between two contractions.
const BATCH_NUMBERS: usize = 512;
/// Bounds of the number of ket primitives between two contractions.
const KET_BATCH: std::ops::RangeInclusive<usize> = 8..=36;
/// Most numbers that the half-contracted integrals of one batch of bra primitives may take.
const HALF_NUMBERS: usize = 8192;

/// Number of Hermite functions of degree below `degree`.
const fn below(degree: usize) -> usize {
    if degree == 0 {
        0
    } else {
        hermite_count(degree - 1)
    }
}

/// The layout of all intermediates for a bra class and a ket class.
#[derive(Debug)]
pub(super) struct QuartetPlan {
    pub(super) bra: Arc<PairClass>,
    pub(super) ket: Arc<PairClass>,
    degree: usize,
    table: &'static BoysTable,
    /// For each ket group: where it starts among the half-contracted numbers, and how many each scalar has.
    half: Vec<(usize, usize)>,
    half_len: usize,
    /// Ket primitives contracted together.
    ket_batch: usize,
    /// Bra primitives contracted together.
    bra_batch: usize,
    /// Contractions of stage 3.
    steps: Vec<BraStep>,
    full_len: usize,
    /// Ket Hermites by bra Hermites, as the first transformation wants them, and for each element its
    /// place among the fully contracted numbers.
    expanded: Tiled,
    /// Bra Hermites by ket functions.
    ket_done: Tiled,
    expansion: Gather,
}

/// One contraction over bra primitives: a group of bra scalars with one ket scalar.
#[derive(Debug)]
struct BraStep {
    group: ScalarGroup,
    /// Where the columns start among the half-contracted numbers.
    from: usize,
    columns: usize,
    /// Where the result starts among the fully contracted numbers.
    to: usize,
}

impl QuartetPlan {
    /// The plan for the quartets of two classes, made on first use. Which class is the bra is a matter of
    /// cost, unless they are one.
    pub(super) fn get(x: &Arc<PairClass>, y: &Arc<PairClass>) -> Arc<Self> {
        static PLANS: OnceLock<Mutex<HashMap<[usize; 2], Arc<QuartetPlan>>>> = OnceLock::new();
        let plans = PLANS.get_or_init(Mutex::default);
        let mut plans = plans.lock().unwrap_or_else(PoisonError::into_inner);
        // Classes live as long as the program: their addresses name them.
        let key = [x, y].map(|class| Arc::as_ptr(class) as usize);
        if let Some(plan) = plans.get(&key).or_else(|| plans.get(&[key[1], key[0]])) {
            return Arc::clone(plan);
        }
        let x_first = (cost(x, y), &x.key) <= (cost(y, x), &y.key);
        let plan = Arc::new(if x_first {
            Self::new(x, y)
        } else {
            Self::new(y, x)
        });
        plans.insert(key, Arc::clone(&plan));
        plan
    }

    fn new(bra: &Arc<PairClass>, ket: &Arc<PairClass>) -> Self {
        let degree = bra.degree + ket.degree;
        let mut half = Vec::new();
        let mut half_len = 0;
        for group in &ket.groups {
            let columns = hermite_count(group.high + bra.degree) - below(group.low);
            half.push((half_len, columns));
            half_len += group.count * columns;
        }
        let mut steps = Vec::new();
        let mut full_len = 0;
        // (start, columns, first Hermite) for each (bra group, ket scalar)
        let mut layout = Vec::new();
        for group in &bra.groups {
            for (ket_group, &(start, half_columns)) in ket.groups.iter().zip(&half) {
                let first = below(group.low + ket_group.low);
                let columns = hermite_count(group.high + ket_group.high) - first;
                for s in 0..ket_group.count {
                    layout.push((full_len, columns, first));
                    steps.push(BraStep {
                        group: *group,
                        from: start + s * half_columns + first - below(ket_group.low),
                        columns,
                        to: full_len,
                    });
                    full_len += group.count * columns;
                }
            }
        }
        let ket_scalars = ket.carried();
        let powers = hermite_powers();
        let expanded = Tiled::new(ket.hermites.len(), bra.hermites.len());
        let mut expansion = vec![0; expanded.len()];
        for (column, &(bra_hermite, bra_scalar)) in bra.hermites.iter().enumerate() {
            let group = bra
                .groups
                .iter()
                .position(|g| bra_scalar < g.first + g.count)
                .unwrap_or(0);
            let (to, step) = expanded.column(column);
            for (row, &(ket_hermite, ket_scalar)) in ket.hermites.iter().enumerate() {
                let (start, columns, first) = layout[group * ket_scalars + ket_scalar];
                let (t, u) = (powers[bra_hermite], powers[ket_hermite]);
                let sum = hermite_index(t[0] + u[0], t[1] + u[1], t[2] + u[2]);
                let place = start + (bra_scalar - bra.groups[group].first) * columns + sum - first;
                expansion[to + row * step] = place as u32;
            }
        }
        Self {
            bra: Arc::clone(bra),
            ket: Arc::clone(ket),
            degree,
            table: boys::table(degree),
            half,
            half_len,
            ket_batch: (BATCH_NUMBERS / hermite_count(degree))
                .clamp(*KET_BATCH.start(), *KET_BATCH.end()),
            bra_batch: (HALF_NUMBERS / half_len).clamp(1, 8),
            steps,
            full_len,
            expanded,
            ket_done: Tiled::new(bra.hermites.len(), ket.functions.len()),
            expansion: Gather::new(expansion),
        }
    }

    /// Function pairs of the bra and of the ket.
    pub(super) fn shape(&self) -> (usize, usize) {
        (self.bra.functions.len(), self.ket.functions.len())
    }
}

/// Primitives that a contracted pair is taken to have when costs are compared.
const TYPICAL_PRIMITIVES: usize = 6;

/// Multiply-adds of a quartet, roughly.
fn cost(bra: &PairClass, ket: &PairClass) -> usize {
    let primitives = |class: &PairClass| {
        if class.contracted() {
            TYPICAL_PRIMITIVES
        } else {
            1
        }
    };
    let mut half = 0;
    let mut full = 0;
    for k in &ket.groups {
        half += k.count * (hermite_count(k.high + bra.degree) - below(k.low));
        for b in &bra.groups {
            full += k.count * b.count * (hermite_count(k.high + b.high) - below(k.low + b.low));
        }
    }
    let mut cost = bra.hermites.len() * ket.columns.len() + ket.functions.len() * bra.columns.len();
    if ket.contracted() {
        cost += primitives(bra) * primitives(ket) * half;
    }
    if bra.contracted() {
        cost += primitives(bra) * full;
    }
    cost
}

/// Buffers for the evaluation of quartets; one for each thread.
#[derive(Debug, Default)]
pub(super) struct QuartetEngine {
    hermites: Vec<Four>,
    scratch: Vec<Four>,
    half: Vec<Four>,
    full: Vec<Four>,
    expanded: Vec<Four>,
    ket_done: Vec<Four>,
    result: Vec<Four>,
}

fn reserve(buffer: &mut Vec<Four>, len: usize) {
    if buffer.len() < len {
        buffer.resize(len, Four::default());
    }
}

impl QuartetEngine {
    /// Evaluates the integrals of four quartets: element f · ket functions + g, one quartet in each lane.
    ///
    /// Primitives are left out as [`crate::integrals::screening`] says, with `budget` the error allowed.
    pub(super) fn evaluate(
        &mut self,
        plan: &QuartetPlan,
        [bra, ket]: [&PairBlock; 2],
        budget: f64,
    ) -> &[Four] {
        let nherm = hermite_count(plan.degree);
        let (bra_functions, ket_functions) = plan.shape();
        reserve(&mut self.hermites, plan.ket_batch * nherm);
        reserve(&mut self.scratch, scratch_len(plan.degree, plan.ket_batch));
        reserve(&mut self.half, plan.bra_batch * plan.half_len);
        reserve(&mut self.full, plan.full_len);
        reserve(&mut self.expanded, plan.expanded.len());
        reserve(&mut self.ket_done, plan.ket_done.len());
        reserve(&mut self.result, bra_functions * ket_functions);
        dispatch(Evaluation {
            engine: self,
            plan,
            bra,
            ket,
            cut: Four([budget; 4]),
        });
        &self.result[..bra_functions * ket_functions]
    }
}

/// The evaluation of one block.
struct Evaluation<'a> {
    engine: &'a mut QuartetEngine,
    plan: &'a QuartetPlan,
    bra: &'a PairBlock,
    ket: &'a PairBlock,
    cut: Four,
}

impl Kernel for Evaluation<'_> {
    type Output = ();

    #[inline(always)]
    fn run<V: Lanes>(mut self) {
        let (plan, bra) = (self.plan, self.bra);
        let (bra_functions, ket_functions) = plan.shape();
        let mut start = 0;
        while start < bra.primitives {
            let wanted = plan.bra_batch.min(bra.primitives - start);
            let mut active = 0;
            while active < wanted && self.half_contract::<V>(start + active, active) {
                active += 1;
            }
            if active > 0 && plan.bra.contracted() {
                self.bra_contract::<V>(start, active);
            }
            start += active;
            if active < wanted {
                break;
            }
        }
        let engine = self.engine;
        let result = &mut engine.result[..bra_functions * ket_functions];
        if start == 0 {
            result.fill(Four::default());
            return;
        }
        let full = if plan.bra.contracted() {
            &engine.full
        } else {
            &engine.half
        };
        plan.expansion.copy::<V>(full, &mut engine.expanded);
        V::call(SparseProduct {
            row_ends: &plan.ket.row_ends,
            columns: &plan.ket.columns,
            elements: &self.ket.elements,
            values: &engine.expanded,
            shape: plan.expanded,
            out: &mut engine.ket_done,
            layout: Layout::TiledColumns(plan.ket_done),
        });
        V::call(SparseProduct {
            row_ends: &plan.bra.row_ends,
            columns: &plan.bra.columns,
            elements: &bra.elements,
            values: &engine.ket_done,
            shape: plan.ket_done,
            out: result,
            layout: Layout::Rows,
        });
    }
}

impl Evaluation<'_> {
    /// Stages 1 and 2 for one bra primitive; false when all its primitive quartets are negligible.
    #[inline(always)]
    fn half_contract<V: Lanes>(&mut self, primitive: usize, slot: usize) -> bool {
        let (plan, ket) = (self.plan, self.ket);
        let engine = &mut *self.engine;
        let bra = &self.bra.numbers[primitive * self.bra.stride..][..self.bra.stride];
        let nherm = hermite_count(plan.degree);
        let half = &mut engine.half[slot * plan.half_len..][..plan.half_len];
        let contracted = plan.ket.contracted();
        let mut k = 0;
        while k < ket.primitives {
            let batch = plan.ket_batch.min(ket.primitives - k);
            let numbers = &ket.numbers[k * ket.stride..][..batch * ket.stride];
            // The one ket primitive of an uncontracted pair needs no contraction: its R are the
            // half-contracted numbers.
            let out = if contracted {
                &mut engine.hermites[..batch * nherm]
            } else {
                &mut half[..nherm]
            };
            let done = primitives::<V>(
                plan.degree,
                bra,
                numbers,
                ket.stride,
                &self.cut,
                plan.table,
                out,
                &mut engine.scratch,
            );
            if done > 0 && contracted {
                for (group, &(start, columns)) in plan.ket.groups.iter().zip(&plan.half) {
                    V::call(Contraction {
                        values: &engine.hermites[below(group.low)..],
                        value_stride: nherm,
                        scalars: &numbers[field::SCALARS + group.first..],
                        scalar_stride: ket.stride,
                        primitives: done,
                        columns,
                        scalar_count: group.count,
                        out: &mut half[start..],
                        accumulate: k > 0,
                    });
                }
            }
            k += done;
            if done < batch {
                break;
            }
        }
        k > 0
    }

    /// Stage 3 for `count` bra primitives from `start` on.
    #[inline(always)]
    fn bra_contract<V: Lanes>(&mut self, start: usize, count: usize) {
        let bra = self.bra;
        let scalars = &bra.numbers[start * bra.stride + field::SCALARS..];
        for step in &self.plan.steps {
            V::call(Contraction {
                values: &self.engine.half[step.from..],
                value_stride: self.plan.half_len,
                scalars: &scalars[step.group.first..],
                scalar_stride: bra.stride,
                primitives: count,
                columns: step.columns,
                scalar_count: step.group.count,
                out: &mut self.engine.full[step.to..],
                accumulate: start > 0,
            });
        }
    }
}
