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

use super::class::{ClassKey, PairClass, ScalarGroup};
use super::hermite::scratch_len;
use super::lanes::{Four, dispatch};
use super::pairs::PairBlock;
use super::primitives::{PRIMITIVES, field};
use super::products::{Contraction, SparseProduct};
use crate::integrals::boys::{self, BoysTable};
use crate::integrals::recurrence::{hermite_count, hermite_index, hermite_powers};
use std::collections::HashMap;
use std::sync::{Arc, Mutex, OnceLock, PoisonError};

/// Most ket primitives between two contractions.
const KET_BATCH: usize = 8;
/// Most numbers that the half-contracted integrals of one batch of bra primitives may take.
const HALF_NUMBERS: usize = 640;

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
    /// Bra primitives contracted together.
    bra_batch: usize,
    /// Contractions of stage 3.
    steps: Vec<BraStep>,
    full_len: usize,
    /// Place among the fully contracted numbers of each (ket Hermite, bra Hermite).
    expansion: Vec<u32>,
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
    /// The plan for two classes, made on first use.
    pub(super) fn get(bra: &Arc<PairClass>, ket: &Arc<PairClass>) -> Arc<Self> {
        static PLANS: OnceLock<Mutex<HashMap<[ClassKey; 2], Arc<QuartetPlan>>>> = OnceLock::new();
        let plans = PLANS.get_or_init(Mutex::default);
        let mut plans = plans.lock().unwrap_or_else(PoisonError::into_inner);
        let plan = plans
            .entry([bra.key.clone(), ket.key.clone()])
            .or_insert_with(|| Arc::new(Self::new(bra, ket)));
        Arc::clone(plan)
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
        let mut expansion = Vec::with_capacity(bra.hermites.len() * ket.hermites.len());
        for &(ket_hermite, ket_scalar) in &ket.hermites {
            for &(bra_hermite, bra_scalar) in &bra.hermites {
                let group = bra
                    .groups
                    .iter()
                    .position(|g| bra_scalar < g.first + g.count)
                    .unwrap_or(0);
                let (start, columns, first) = layout[group * ket_scalars + ket_scalar];
                let (t, u) = (powers[bra_hermite], powers[ket_hermite]);
                let sum = hermite_index(t[0] + u[0], t[1] + u[1], t[2] + u[2]);
                let place = start + (bra_scalar - bra.groups[group].first) * columns + sum - first;
                expansion.push(place as u32);
            }
        }
        Self {
            bra: Arc::clone(bra),
            ket: Arc::clone(ket),
            degree,
            table: boys::table(degree),
            half,
            half_len,
            bra_batch: (HALF_NUMBERS / half_len).clamp(1, 8),
            steps,
            full_len,
            expansion,
        }
    }

    /// Function pairs of the bra and of the ket.
    pub(super) fn shape(&self) -> (usize, usize) {
        (self.bra.functions.len(), self.ket.functions.len())
    }
}

/// Which pair of a quartet is the bra, by their classes: the one with fewer primitives to loop over
/// inside; a contracted pair is the ket. Equal classes are decided elsewhere.
pub(super) fn bra_first(x: &PairClass, y: &PairClass) -> bool {
    let cost = |bra: &PairClass, ket: &PairClass| -> usize {
        ket.groups
            .iter()
            .map(|g| g.count * (hermite_count(g.high + bra.degree) - below(g.low)))
            .sum()
    };
    let rank = |bra: &PairClass, ket: &PairClass| (bra.key.contracted, cost(bra, ket));
    (rank(x, y), &x.key) < (rank(y, x), &y.key)
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
    /// The integrals of four quartets: result[f · ket functions + g], one quartet in each lane.
    ///
    /// Primitives are left out as [`crate::integrals::screening`] says, with `budget` the error allowed.
    pub(super) fn evaluate(
        &mut self,
        plan: &QuartetPlan,
        bra: &PairBlock,
        ket: &PairBlock,
        budget: f64,
    ) -> &[Four] {
        let nherm = hermite_count(plan.degree);
        let (bra_functions, ket_functions) = plan.shape();
        let (bra_hermites, ket_hermites) = (plan.bra.hermites.len(), plan.ket.hermites.len());
        reserve(&mut self.hermites, KET_BATCH * nherm);
        reserve(&mut self.scratch, scratch_len(plan.degree));
        reserve(&mut self.half, plan.bra_batch * plan.half_len);
        reserve(&mut self.full, plan.full_len);
        reserve(&mut self.expanded, bra_hermites * ket_hermites);
        reserve(&mut self.ket_done, bra_hermites * ket_functions);
        reserve(&mut self.result, bra_functions * ket_functions);
        let cut = Four([budget; 4]);

        let mut start = 0;
        let mut any = false;
        while start < bra.primitives {
            let mut active = 0;
            while active < plan.bra_batch && start + active < bra.primitives {
                let numbers = &bra.numbers[(start + active) * bra.stride..][..bra.stride];
                if !self.half_contract(plan, numbers, ket, active, &cut) {
                    break;
                }
                active += 1;
            }
            if active == 0 {
                break;
            }
            if plan.bra.key.contracted {
                self.bra_contract(plan, bra, start, active, any);
            }
            any = true;
            start += active;
            if active < plan.bra_batch {
                break;
            }
        }
        let result = &mut self.result[..bra_functions * ket_functions];
        if !any {
            result.fill(Four::default());
            return result;
        }
        let full = if plan.bra.key.contracted {
            &self.full
        } else {
            &self.half
        };
        for (to, &from) in self.expanded.iter_mut().zip(&plan.expansion) {
            *to = full[from as usize];
        }
        dispatch(SparseProduct {
            row_ends: &plan.ket.row_ends,
            columns: &plan.ket.columns,
            elements: &ket.elements,
            values: &self.expanded,
            width: bra_hermites,
            out: &mut self.ket_done,
            out_row: 1,
            out_column: ket_functions,
        });
        dispatch(SparseProduct {
            row_ends: &plan.bra.row_ends,
            columns: &plan.bra.columns,
            elements: &bra.elements,
            values: &self.ket_done,
            width: ket_functions,
            out: result,
            out_row: ket_functions,
            out_column: 1,
        });
        result
    }

    /// Stages 1 and 2 for one bra primitive; false when all its primitive quartets are negligible.
    fn half_contract(
        &mut self,
        plan: &QuartetPlan,
        bra: &[Four],
        ket: &PairBlock,
        slot: usize,
        cut: &Four,
    ) -> bool {
        let nherm = hermite_count(plan.degree);
        let primitives = PRIMITIVES[plan.degree];
        let half = &mut self.half[slot * plan.half_len..][..plan.half_len];
        if !plan.ket.key.contracted {
            // The one ket primitive needs no contraction: its R are the half-contracted numbers.
            let out = &mut half[..nherm];
            let scratch = &mut self.scratch;
            return primitives(bra, &ket.numbers, ket.stride, cut, plan.table, out, scratch) > 0;
        }
        let mut k = 0;
        while k < ket.primitives {
            let batch = KET_BATCH.min(ket.primitives - k);
            let numbers = &ket.numbers[k * ket.stride..][..batch * ket.stride];
            let done = primitives(
                bra,
                numbers,
                ket.stride,
                cut,
                plan.table,
                &mut self.hermites[..batch * nherm],
                &mut self.scratch,
            );
            if done == 0 {
                break;
            }
            for (group, &(start, columns)) in plan.ket.groups.iter().zip(&plan.half) {
                dispatch(Contraction {
                    values: &self.hermites[below(group.low)..],
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
            k += done;
            if done < batch {
                break;
            }
        }
        k > 0
    }

    /// Stage 3 for `count` bra primitives from `start` on.
    fn bra_contract(
        &mut self,
        plan: &QuartetPlan,
        bra: &PairBlock,
        start: usize,
        count: usize,
        accumulate: bool,
    ) {
        for step in &plan.steps {
            dispatch(Contraction {
                values: &self.half[step.from..],
                value_stride: plan.half_len,
                scalars: &bra.numbers[start * bra.stride + field::SCALARS + step.group.first..],
                scalar_stride: bra.stride,
                primitives: count,
                columns: step.columns,
                scalar_count: step.group.count,
                out: &mut self.full[step.to..],
                accumulate,
            });
        }
    }
}
