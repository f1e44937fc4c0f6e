//! The self-consistent field iteration, shared by RHF (one spin block) and UHF (two).
//!
//! A ladder of methods: extrapolation (with the energy minimised over combinations of iterates while far away) →
//! level shift and damping where that stalls → quasi-Newton descent → Newton steps in a trust region. Each rung starts
//! from the lowest determinant so far.

use super::ScfError;
use super::canonical::{Canonical, Kappa, combined, inner};
use super::diis::{Difference, EnergyInterpolation, Extrapolation};
use super::fock::{Evaluation, Field};
use super::grassmann;
use super::orthogonal::Orbitals;
use super::quasi_newton;
use super::second_order;
use super::settings::ScfSettings;
use super::stability::{self, CarriedVectors, Precision};
use crate::scf::StopReason;
use nalgebra::DMatrix;
use std::sync::Arc;

/// Commutator above which the energy is minimised over combinations of iterates, hartree, and below which the
/// error alone decides; in between both are mixed (A. J. Garza, G. E. Scuseria, J. Chem. Phys. 137, 054110 (2012)).
const FAR: f64 = 0.1;
/// See [`FAR`].
const NEAR: f64 = 1e-4;
/// Builds without progress after which a rung is given up.
const PATIENCE: usize = 8;
/// Builds of the first rung at most.
const FIRST_RUNG: usize = 30;
/// Builds of the shifted rung at most.
const SHIFTED_RUNG: usize = 14;
/// Level shift, hartree.
const SHIFT: f64 = 0.4;
/// Commutator at which the shifted rung hands over to plain extrapolation, hartree.
const SHIFT_ENDS: f64 = 5e-3;
/// Builds after which a calculation with a good seed is given to the Newton rung.
const SEEDED_RUNG: usize = 14;
/// Rise of the energy above the lowest so far (hartree) that counts as climbing towards a saddle point, where the commutator
/// is below [`NEARBY`]: from farther away the way down may well lead over a rise.
const RISE: f64 = 1e-5;
/// Commutator below which a stall is a saddle point or a flat valley rather than oscillation, hartree.
const NEARBY: f64 = 0.02;
/// Commutator below which a seed counts as good, hartree.
const GOOD_SEED: f64 = 0.05;

/// Commutator below which a calculation that makes no progress any more is asked for the error of its energy, hartree:
/// along a soft mode the gradient vanishes long before the orbitals settle.
const FLAT: f64 = 1e-5;
/// Eigenvalue of the orbital Hessian (hartree, absolute) below which a mode is soft.
const SOFT: f64 = 0.01;
/// Curvatures below this are raised to it, hartree: rotations of a symmetry-broken state as a whole have none, and
/// no gradient either.
const LEAST_CURVATURE: f64 = 1e-6;
/// Error of the energy that is accepted in the end where a mode is soft, hartree.
pub const FLAT_ENERGY: f64 = 3e-7;

/// Quasi-Newton steps before exact ones.
const DESCENT: usize = 45;

/// When an iteration counts as converged.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Thresholds {
    /// Largest energy change, hartree.
    pub energy: f64,
    /// Largest element of |FPS − SPF| in the orthonormal frame, hartree.
    pub commutator: f64,
}

impl From<&ScfSettings> for Thresholds {
    fn from(settings: &ScfSettings) -> Self {
        Self {
            energy: settings.energy,
            commutator: settings.commutator,
        }
    }
}

/// What an iteration starts from.
#[derive(Debug, Clone)]
pub enum Beginning {
    /// Density matrices in the basis, one per spin block, that need not belong to a determinant.
    Densities(Vec<DMatrix<f64>>),
    /// Orbitals of the one-electron Hamiltonian.
    Core,
    /// Orthonormal occupied orbitals of the frame, one matrix per spin block.
    Occupied(Vec<DMatrix<f64>>),
}

/// What is asked of an iteration.
#[derive(Debug, Clone)]
pub struct Plan<'a> {
    /// When it counts as converged.
    pub thresholds: Thresholds,
    /// Passes over the integrals allowed in all: Fock builds, and passes for Hessian products.
    pub limit: usize,
    /// Differences carried over from earlier geometries, the most trusted first.
    pub carried: Vec<Arc<Difference>>,
    /// Occupied orbitals (frame) to keep to by overlap, instead of filling the lowest.
    pub follow: Option<&'a [DMatrix<f64>]>,
    /// Eigenvectors of the orbital Hessian of a neighbouring geometry: where the energy is soft.
    pub soft: Option<&'a CarriedVectors>,
    /// Go straight to the rungs that never climb.
    pub downhill: bool,
}

/// Where an iteration ended.
#[derive(Debug, Clone)]
pub struct Solution {
    /// The last determinant (without convergence: the lowest).
    pub evaluation: Evaluation,
    /// Occupied orbitals after one more extrapolation without a build: less noisy, meant for seeds.
    pub refined: Vec<DMatrix<f64>>,
    /// Why it stopped.
    pub stop: StopReason,
    /// Differences to carry over: those made on the way, newest first, then those taken over that proved good.
    pub differences: Vec<Arc<Difference>>,
}

/// Occupied orbitals of Fock matrices: the lowest, or those that overlap most with `follow` (A. T. B.
/// Gilbert, N. A. Besley, P. M. W. Gill, J. Phys. Chem. A 112, 13164 (2008), with a fixed reference).
fn occupy(
    orbitals: &[Orbitals],
    counts: &[usize],
    follow: Option<&[DMatrix<f64>]>,
) -> Vec<DMatrix<f64>> {
    orbitals
        .iter()
        .zip(counts)
        .enumerate()
        .map(
            |(block, (o, &count))| match follow.and_then(|f| f.get(block)) {
                Some(reference) if count > 0 => {
                    let overlap = reference.transpose() * &o.vectors;
                    let shares: Vec<f64> =
                        overlap.column_iter().map(|c| c.norm_squared()).collect();
                    let mut order: Vec<usize> = (0..shares.len()).collect();
                    order.sort_by(|&i, &j| shares[j].total_cmp(&shares[i]).then(i.cmp(&j)));
                    let mut chosen = order[..count].to_vec();
                    chosen.sort_unstable();
                    o.vectors.select_columns(&chosen)
                }
                _ => o.lowest(count),
            },
        )
        .collect()
}

/// Energy that one more step would gain, to second order: the energy is quadratic in the distance to the solution.
fn expected_change(
    field: &Field<'_>,
    evaluation: &Evaluation,
    follow: Option<&[DMatrix<f64>]>,
) -> Result<f64, ScfError> {
    let orbitals = field.diagonalise(&evaluation.focks)?;
    let keep_to = follow.unwrap_or(&evaluation.occupied);
    let next = occupy(&orbitals, &field.occupation().blocks(), Some(keep_to));
    let mut change = 0.0;
    for ((y, to), fock) in evaluation.occupied.iter().zip(&next).zip(&evaluation.focks) {
        let Some(gamma) = grassmann::logarithm(y, to)? else {
            return Ok(f64::INFINITY);
        };
        let gradient = fock * y;
        change += super::diis::dot(gradient.as_slice(), gamma.as_slice());
    }
    Ok((field.occupation().weight() * change).abs())
}

/// Whether a determinant meets the thresholds: its commutator, and either the energy change of the last step or
/// that to be expected of the next (all there is at the first build).
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn is_converged(
    field: &Field<'_>,
    evaluation: &Evaluation,
    last_energy: Option<f64>,
    thresholds: &Thresholds,
) -> Result<bool, ScfError> {
    if evaluation.commutator > thresholds.commutator || evaluation.commutator.is_nan() {
        return Ok(false);
    }
    if last_energy.is_some_and(|e| (e - evaluation.energy).abs() <= thresholds.energy) {
        return Ok(true);
    }
    Ok(expected_change(field, evaluation, None)? <= thresholds.energy)
}

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Rung {
    Extrapolated,
    Shifted,
    Final,
}

/// Adds a level shift to the empty orbitals (V. R. Saunders, I. H. Hillier, Int. J. Quantum Chem. 7, 699 (1973)).
fn shifted(focks: &[DMatrix<f64>], occupied: &[DMatrix<f64>], shift: f64) -> Vec<DMatrix<f64>> {
    focks
        .iter()
        .zip(occupied)
        .map(|(f, y)| f - y * y.transpose() * shift)
        .collect()
}

fn mixed(a: &[DMatrix<f64>], share: f64, b: &[DMatrix<f64>]) -> Vec<DMatrix<f64>> {
    a.iter()
        .zip(b)
        .map(|(x, y)| x * share + y * (1.0 - share))
        .collect()
}

/// Iterates to self-consistency. Not converging is a result, told by [`Solution::stop`].
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn converge(
    field: &mut Field<'_>,
    beginning: Beginning,
    plan: &Plan<'_>,
) -> Result<Solution, ScfError> {
    let counts = field.occupation().blocks();
    let weight = field.occupation().weight();
    let mut occupied = match beginning {
        Beginning::Occupied(orbitals) => orbitals,
        Beginning::Core => {
            let orbitals = field.diagonalise(&field.core_in_frame())?;
            occupy(&orbitals, &counts, plan.follow)
        }
        Beginning::Densities(densities) => {
            let focks = field.focks_of_densities(&densities);
            occupy(&field.diagonalise(&focks)?, &counts, plan.follow)
        }
    };
    let mut history = Extrapolation::with_carried(plan.carried.clone());
    let mut interpolation = EnergyInterpolation::default();
    let mut lowest: Option<Evaluation> = None;
    let mut last: Option<(f64, f64)> = None;
    let mut last_focks: Option<Vec<DMatrix<f64>>> = None;
    let mut rung = Rung::Extrapolated;
    let mut rung_builds = 0;
    let mut best = f64::INFINITY;
    let mut since_best = 0;
    let mut good_seed = false;
    loop {
        let here = field.evaluate(occupied);
        rung_builds += 1;
        if !here.energy.is_finite() || here.commutator.is_nan() {
            return Ok(Solution {
                refined: here.occupied.clone(),
                evaluation: here,
                stop: StopReason::NotFinite,
                differences: Vec::new(),
            });
        }
        if last.is_none() {
            good_seed = history.has_carried() && here.commutator < GOOD_SEED;
        }
        history.record(&here.focks, &here.errors);
        if is_converged(field, &here, last.map(|l| l.0), &plan.thresholds)? {
            let orbitals = field.diagonalise(&history.suggest(&here.focks))?;
            let refined = occupy(
                &orbitals,
                &counts,
                Some(plan.follow.unwrap_or(&here.occupied)),
            );
            return Ok(Solution {
                evaluation: here,
                refined,
                stop: StopReason::Converged,
                differences: history.differences().to_vec(),
            });
        }
        if lowest.as_ref().is_none_or(|l| here.energy < l.energy) {
            lowest = Some(here.clone());
        }
        let lowest_energy = lowest.as_ref().map_or(here.energy, |l| l.energy);
        if field.passes() >= plan.limit {
            return Ok(unconverged(lowest.unwrap_or(here)));
        }
        if here.commutator < 0.8 * best {
            best = here.commutator;
            since_best = 0;
        } else {
            since_best += 1;
        }

        // Choice of the rung.
        let mut downhill = plan.downhill;
        let stalled = since_best >= PATIENCE;
        // With a good seed any rise tells that carried differences mislead.
        let climbs = here.energy > lowest_energy + RISE && (good_seed || here.commutator < NEARBY);
        match rung {
            _ if climbs => downhill = true,
            Rung::Extrapolated if good_seed => downhill |= rung_builds >= SEEDED_RUNG,
            Rung::Extrapolated if stalled || rung_builds >= FIRST_RUNG => {
                if here.commutator < NEARBY {
                    downhill = true;
                } else {
                    rung = Rung::Shifted;
                    rung_builds = 0;
                }
            }
            Rung::Shifted if here.commutator < SHIFT_ENDS => {
                rung = Rung::Final;
                rung_builds = 0;
                since_best = 0;
                history.restart();
                history.record(&here.focks, &here.errors);
            }
            Rung::Shifted => downhill |= rung_builds >= SHIFTED_RUNG,
            Rung::Final => downhill |= stalled || rung_builds >= SHIFTED_RUNG,
            Rung::Extrapolated => {}
        }
        if downhill && plan.follow.is_none() {
            let start = if plan.downhill {
                here
            } else {
                lowest.unwrap_or(here)
            };
            return descend(field, start, plan);
        }
        if rung == Rung::Shifted && rung_builds == 0 {
            // From here on from the lowest determinant, without memory of what led astray.
            history.restart();
            last_focks = None;
            since_best = 0;
            let start = lowest.clone().unwrap_or_else(|| here.clone());
            let focks = shifted(&start.focks, &start.occupied, SHIFT);
            last = Some((start.energy, start.commutator));
            occupied = occupy(&field.diagonalise(&focks)?, &counts, plan.follow);
            continue;
        }

        // The next Fock matrix.
        let rises = last.is_some_and(|(_, commutator)| here.commutator > commutator);
        if rises && history.has_carried() && here.commutator > 10.0 * plan.thresholds.commutator {
            history.drop_carried();
        }
        let suggested = history.suggest(&here.focks);
        let next = match rung {
            Rung::Shifted => {
                let damped = match &last_focks {
                    Some(previous) if last.is_some_and(|(e, _)| here.energy > e) => {
                        mixed(&here.focks, 0.5, previous)
                    }
                    _ => suggested,
                };
                shifted(&damped, &here.occupied, SHIFT)
            }
            _ if !history.has_carried() && plan.follow.is_none() => {
                interpolation.record(here.energy, &here.focks, here.projectors());
                if here.commutator > NEAR {
                    let share = (here.commutator / FAR).min(1.0);
                    match interpolation.suggest(weight) {
                        Some(other) => mixed(&other, share, &suggested),
                        None => suggested,
                    }
                } else {
                    suggested
                }
            }
            _ => suggested,
        };
        occupied = occupy(&field.diagonalise(&next)?, &counts, plan.follow);
        last = Some((here.energy, here.commutator));
        last_focks = Some(here.focks);
    }
}

/// The rungs that never climb: quasi-Newton steps, then exact Newton steps.
fn descend(
    field: &mut Field<'_>,
    start: Evaluation,
    plan: &Plan<'_>,
) -> Result<Solution, ScfError> {
    let left = plan.limit.saturating_sub(field.passes());
    let mut history = Extrapolation::default();
    history.record(&start.focks, &start.errors);
    let descent = quasi_newton::descend(
        field,
        start,
        &plan.thresholds,
        left.min(DESCENT),
        plan.soft,
        &mut history,
    )?;
    if descent.converged {
        return Ok(Solution {
            evaluation: descent.evaluation,
            refined: descent.refined,
            stop: StopReason::Converged,
            differences: history.own().to_vec(),
        });
    }
    let (evaluation, mut stop) =
        second_order::minimise(field, descent.evaluation, &plan.thresholds, plan.limit)?;
    if stop == StopReason::IterationLimit && is_certain(field, &evaluation, plan)? {
        stop = StopReason::SoftMode;
    }
    Ok(Solution {
        refined: evaluation.occupied.clone(),
        evaluation,
        stop,
        differences: history.own().to_vec(),
    })
}

/// Whether the energy of a determinant is certain although a soft mode keeps its commutator from the threshold.
fn is_certain(
    field: &mut Field<'_>,
    evaluation: &Evaluation,
    plan: &Plan<'_>,
) -> Result<bool, ScfError> {
    Ok(evaluation.commutator < FLAT && energy_left(field, evaluation, plan.soft)? < FLAT_ENERGY)
}

/// Bound of the energy between a determinant and the stationary one nearby, hartree: w g·|H|⁻¹·g with the lowest
/// eigenpairs of the orbital Hessian, and for what of the gradient lies outside them the highest of their eigenvalues. Infinite where no mode is soft:
/// such a calculation has no excuse.
fn energy_left(
    field: &mut Field<'_>,
    evaluation: &Evaluation,
    soft: Option<&CarriedVectors>,
) -> Result<f64, ScfError> {
    let orbitals = Canonical::of(field, evaluation)?;
    let gradient: Kappa = orbitals
        .iter()
        .zip(&evaluation.focks)
        .map(|(o, f)| o.off_diagonal(f))
        .collect();
    let kind = second_order::internal_rotation(field.occupation().method);
    let carried: Vec<&CarriedVectors> = soft.into_iter().collect();
    let found =
        stability::lowest_eigenpairs(field, &orbitals, &[kind], &carried, Precision::Sufficient)?;
    let Some(pairs) = found.first() else {
        return Ok(0.0);
    };
    if pairs.values.iter().all(|v| v.abs() > SOFT) {
        return Ok(f64::INFINITY);
    }
    let mut rest = gradient.clone();
    let mut sum = 0.0;
    for (value, vector) in pairs.values.iter().zip(&pairs.vectors) {
        let share = inner(vector, &gradient);
        rest = combined(&rest, -share, vector);
        sum += share * share / value.abs().max(LEAST_CURVATURE);
    }
    let highest = pairs.values.last().map_or(LEAST_CURVATURE, |v| v.abs());
    sum += inner(&rest, &rest) / highest.max(LEAST_CURVATURE);
    Ok(field.occupation().weight() * sum)
}

fn unconverged(evaluation: Evaluation) -> Solution {
    Solution {
        refined: evaluation.occupied.clone(),
        evaluation,
        stop: StopReason::IterationLimit,
        differences: Vec::new(),
    }
}
