//! The optimisation itself, as a solver of argmin: the only file that names that library.

use super::coordinates::{Frame, InternalSet};
use super::evaluator::{Evaluator, Point};
use super::held::{self, Condition};
use super::model_hessian::model_hessian;
use super::step::{self, Step, Trust};
use super::{Call, Curvature, MinimiseError, MinimiseSettings, MinimiseStop, Minimum, Task};
use crate::molecule::Molecule;
use crate::surface::{PointRecord, StabilityDemand, Surface};
use argmin::core::{
    Error, Executor, IterState, KV, Problem, Solver, TerminationReason, TerminationStatus,
};
use nalgebra::{DMatrix, DVector, Vector3};

/// The solver: coordinates, Hessian and trust, and the point it stands at.
struct Descent<'a, T> {
    /// Positions: where the run begins.
    molecule: Molecule,
    settings: &'a MinimiseSettings,
    stability: StabilityDemand,
    conditions: Vec<Condition>,
    curvature: Curvature,
    /// What the Hessian was before any step: the model, made anew at each point, or one that was carried here.
    base: Option<DMatrix<f64>>,
    /// Changes of coordinates and of the gradient in them, step by step.
    pairs: Vec<(DVector<f64>, DVector<f64>)>,
    /// Places of the held coordinates in the set.
    held: Vec<usize>,
    trust: f64,
    point: Option<Point<T>>,
    /// The step from the point.
    ahead: Option<(Frame, Step)>,
    calls: Vec<Call>,
    stop: Option<MinimiseStop>,
    /// What the surface said where it gave no energy at the start.
    refused: Option<PointRecord>,
    /// Times in a row that a step had to be taken back.
    taken_back: usize,
}

type State = IterState<DVector<f64>, DVector<f64>, (), DMatrix<f64>, (), f64>;

/// Steps shorter than this (bohr or radian) are no longer tried.
const SHORTEST: f64 = 1e-6;
const LARGEST_TRUST: f64 = 0.8;
/// A rise of the energy that is convergence noise of the surface, hartree.
const ENERGY_NOISE: f64 = 2e-9;
/// Energies nearer than this are of one solution, hartree.
const SAME_SOLUTION: f64 = 1e-7;

impl<'a, T: Clone> Descent<'a, T> {
    /// Makes the coordinates anew at `positions`, carrying the Hessian over through Cartesian coordinates.
    fn describe_anew(&mut self, positions: &[Vector3<f64>]) -> Result<(), MinimiseError> {
        let old = self.curvature.set.frame(positions)?;
        let cartesian = old.b.transpose() * &self.curvature.hessian * &old.b;
        let molecule = self.molecule.at(positions);
        let required = required(&self.conditions);
        let mut set = InternalSet::of(&molecule, &required);
        self.held = places(&mut set, &self.conditions);
        let new = set.frame(positions)?;
        // In the new coordinates what the old ones knew, and the model for what they did not span.
        let model = model_hessian(&molecule, positions, &set);
        let known = &new.inverse.transpose() * cartesian * &new.inverse;
        let spanned = &new.b * &old.inverse * &old.b * &new.inverse;
        let rest = DMatrix::identity(set.primitives.len(), set.primitives.len()) - spanned;
        let hessian = known + rest.transpose() * model * rest;
        let hessian = (&hessian + hessian.transpose()) * 0.5;
        self.base = Some(hessian.clone());
        self.pairs.clear();
        self.curvature = Curvature { set, hessian };
        Ok(())
    }

    /// Works out the next step at the point and judges convergence.
    fn look_ahead(&mut self) -> Result<(), MinimiseError> {
        let Some(point) = self.point.take() else {
            return Ok(());
        };
        if !self.curvature.set.is_sound(&point.positions, &self.held) {
            self.describe_anew(&point.positions)?;
        }
        let frame = self.curvature.set.frame(&point.positions)?;
        let free = step::free_basis(&frame, &self.held)?;
        let trust = Trust {
            largest: self.trust,
        };
        let ahead = step::step(
            &frame,
            &free,
            &self.curvature.hessian,
            &point.gradient,
            trust,
        )?;
        let left = held::free_gradient(&self.conditions, &point.positions, &point.gradient)?;
        self.calls.push(Call {
            energy: point.energy,
            gradient_max: left.amax(),
            displacement: ahead.displacement,
            promise: -ahead.predicted,
            kept: true,
        });
        let settings = self.settings;
        if left.amax() <= settings.gradient
            && ahead.displacement <= settings.displacement
            && -ahead.predicted <= settings.energy
        {
            self.stop = Some(MinimiseStop::Converged);
        }
        self.point = Some(point);
        self.ahead = Some((frame, ahead));
        Ok(())
    }

    /// Positions after the step ahead, with the held coordinates exactly at their values.
    fn arrive(&self, scale: f64) -> Result<Option<Vec<Vector3<f64>>>, MinimiseError> {
        let (Some(point), Some((_, ahead))) = (&self.point, &self.ahead) else {
            return Ok(None);
        };
        let mut positions = self
            .curvature
            .set
            .displaced(&point.positions, &(&ahead.change * scale))?;
        held::impose(&self.conditions, &mut positions)?;
        Ok(Some(positions))
    }

    /// Learns from a new point; `true` if it is kept.
    fn learn(&mut self, new: &Point<T>) -> Result<bool, MinimiseError> {
        let (Some(old), Some((frame, ahead))) = (&self.point, &self.ahead) else {
            return Ok(true);
        };
        let set = &self.curvature.set;
        let here = set.frame(&new.positions)?;
        let change = set.differences(&set.values(&new.positions), &set.values(&old.positions));
        let bend =
            here.inverse.transpose() * &new.gradient - frame.inverse.transpose() * &old.gradient;
        self.pairs.push((change.clone(), bend));
        let mut hessian = match &self.base {
            Some(base) => base.clone(),
            None => model_hessian(&self.molecule, &new.positions, set),
        };
        for (change, bend) in &self.pairs {
            step::update(&mut hessian, change, bend);
        }
        self.curvature.hessian = hessian;
        let rise = new.energy - old.energy;
        let length = change.amax();
        let ratio = if ahead.predicted < -1e-14 {
            rise / ahead.predicted
        } else {
            1.0
        };
        if rise > ENERGY_NOISE && rise > 0.1 * ahead.predicted.abs() {
            self.trust = (0.4 * length).min(self.trust);
            return Ok(false);
        }
        if ratio < 0.25 && rise.abs() > ENERGY_NOISE {
            self.trust = (0.5 * length).max(0.02);
        } else if ratio > 0.75 && ahead.bounded {
            self.trust = (2.0 * self.trust).min(LARGEST_TRUST);
        }
        Ok(true)
    }
}

/// Held bonds, angles and dihedrals, which must be in the set.
fn required(conditions: &[Condition]) -> Vec<crate::molecule::internal::Coordinate> {
    conditions
        .iter()
        .filter_map(|c| match c.primitive {
            super::primitive::Primitive::Internal(coordinate) => Some(coordinate),
            _ => None,
        })
        .collect()
}

/// Places of the held coordinates in the set; those that it lacks (linear bends) are added.
fn places(set: &mut InternalSet, conditions: &[Condition]) -> Vec<usize> {
    conditions
        .iter()
        .map(|condition| {
            let found = match condition.primitive {
                super::primitive::Primitive::Internal(coordinate) => set.place_of(&coordinate),
                other => set.primitives.iter().position(|p| *p == other),
            };
            found.unwrap_or_else(|| {
                set.primitives.push(condition.primitive);
                set.primitives.len() - 1
            })
        })
        .collect()
}

impl<'a, S: Surface> Solver<&'a Evaluator<'a, S>, State> for Descent<'a, S::Seed> {
    fn name(&self) -> &'static str {
        "quasi-Newton in redundant internal coordinates"
    }

    fn init(
        &mut self,
        problem: &mut Problem<&'a Evaluator<'a, S>>,
        state: State,
    ) -> Result<(State, Option<KV>), Error> {
        let positions = self.molecule.positions.clone();
        let stability = self.stability;
        let first = problem.problem("gradient_calls", |e| {
            e.point(positions, stability).map_err(Error::new)
        })?;
        match first {
            Ok(point) => {
                self.point = Some(point);
                self.look_ahead()?;
            }
            Err(record) => {
                self.refused = Some(record);
                self.stop = Some(MinimiseStop::NoEnergy);
            }
        }
        Ok((self.tell(state), None))
    }

    fn next_iter(
        &mut self,
        problem: &mut Problem<&'a Evaluator<'a, S>>,
        state: State,
    ) -> Result<(State, Option<KV>), Error> {
        let mut scale = 1.0;
        let mut new = None;
        while new.is_none() {
            let length = self.ahead.as_ref().map_or(0.0, |(_, s)| s.change.amax());
            if scale * length < SHORTEST || scale < 1e-3 {
                break;
            }
            let Some(positions) = self.arrive(scale)? else {
                break;
            };
            let found = problem.problem("gradient_calls", |e| {
                e.point(positions, StabilityDemand::None)
                    .map_err(Error::new)
            })?;
            match found {
                Ok(point) => new = Some(point),
                // No energy there: half the way.
                Err(_) => scale *= 0.5,
            }
        }
        let Some(new) = new else {
            self.stop = Some(if scale < 1.0 {
                MinimiseStop::NoEnergy
            } else {
                MinimiseStop::NoDescent
            });
            return Ok((self.tell(state), None));
        };
        if self.learn(&new)? {
            self.taken_back = 0;
            self.point = Some(new);
            self.look_ahead()?;
        } else {
            self.taken_back += 1;
            let left = held::free_gradient(&self.conditions, &new.positions, &new.gradient)?;
            let refused = Call {
                energy: new.energy,
                gradient_max: left.amax(),
                displacement: 0.0,
                promise: 0.0,
                kept: false,
            };
            // The step is worked out again at the old point, whose call is listed already.
            self.look_ahead()?;
            self.calls.pop();
            self.calls.push(refused);
            if self.taken_back > 10 {
                self.stop = Some(MinimiseStop::NoDescent);
            }
        }
        if self.stop.is_none() && self.calls.len() >= self.settings.calls {
            self.stop = Some(MinimiseStop::CallLimit);
        }
        Ok((self.tell(state), None))
    }

    fn terminate(&mut self, _state: &State) -> TerminationStatus {
        match self.stop {
            None => TerminationStatus::NotTerminated,
            Some(MinimiseStop::Converged) => {
                TerminationStatus::Terminated(TerminationReason::SolverConverged)
            }
            Some(MinimiseStop::CallLimit) => {
                TerminationStatus::Terminated(TerminationReason::MaxItersReached)
            }
            Some(MinimiseStop::NoEnergy | MinimiseStop::NoDescent) => {
                TerminationStatus::Terminated(TerminationReason::SolverExit(
                    "no shorter step helps".to_owned(),
                ))
            }
        }
    }
}

impl<T> Descent<'_, T> {
    fn tell(&self, state: State) -> State {
        match &self.point {
            Some(point) => {
                let at = point.positions.iter().flat_map(|p| [p.x, p.y, p.z]);
                state
                    .param(DVector::from_iterator(3 * point.positions.len(), at))
                    .gradient(point.gradient.clone())
                    .cost(point.energy)
            }
            None => state,
        }
    }
}

/// See [`super::minimise`].
pub(super) fn run<S: Surface>(
    surface: &S,
    task: Task<'_, S::Seed>,
    settings: &MinimiseSettings,
    workspace: &mut S::Workspace,
) -> Result<Minimum<S::Seed>, MinimiseError> {
    let Prepared {
        molecule,
        conditions,
        curvature,
        base,
        held,
    } = prepare(&task)?;
    let evaluator = Evaluator::new(
        surface,
        task.coordinates,
        task.follow,
        task.start,
        workspace,
    );
    let started = molecule.positions.clone();
    let mut descent = Descent {
        molecule,
        settings,
        stability: task.stability,
        conditions,
        curvature,
        base,
        pairs: Vec::new(),
        held,
        trust: settings.trust,
        point: None,
        ahead: None,
        calls: Vec::new(),
        stop: None,
        refused: None,
        taken_back: 0,
    };
    // An unstable solution at the end is left downhill, and the way goes on from there.
    const MOST_ROUNDS: usize = 4;
    for _ in 0..MOST_ROUNDS {
        descent = descend(&evaluator, descent)?;
        let untested = descent.stability != StabilityDemand::None && descent.calls.len() > 1;
        let (Some(point), true, Some(MinimiseStop::Converged)) =
            (descent.point.as_mut(), untested, descent.stop)
        else {
            break;
        };
        let (record, seed) = evaluator.evaluate(&point.positions, descent.stability, false)?;
        let left = record.stability.is_some_and(|s| s.left > 0);
        if left
            && record
                .energy
                .is_some_and(|e| e < point.energy - SAME_SOLUTION)
        {
            descent.molecule.positions.clone_from(&point.positions);
            descent.point = None;
            descent.ahead = None;
            descent.stop = None;
            descent.taken_back = 0;
            descent.trust = settings.trust;
            continue;
        }
        if record.energy.is_some() {
            let gradient = point.record.gradient.take();
            point.record = PointRecord { gradient, ..record };
            point.seed = seed;
        }
        break;
    }
    finish(descent, &evaluator, started)
}

/// One run of argmin's loop.
fn descend<'a, S: Surface>(
    evaluator: &'a Evaluator<'a, S>,
    descent: Descent<'a, S::Seed>,
) -> Result<Descent<'a, S::Seed>, MinimiseError> {
    let limit = descent.settings.calls as u64;
    let result = Executor::new(evaluator, descent)
        .configure(|state: State| state.max_iters(limit))
        .run();
    match result {
        Ok(result) => Ok(result.solver),
        Err(error) => Err(error
            .downcast::<MinimiseError>()
            .unwrap_or(MinimiseError::NotFinite)),
    }
}

struct Prepared {
    molecule: Molecule,
    conditions: Vec<Condition>,
    curvature: Curvature,
    base: Option<DMatrix<f64>>,
    held: Vec<usize>,
}

/// Coordinates, Hessian and a start at which the held coordinates have their values.
fn prepare<T>(task: &Task<'_, T>) -> Result<Prepared, MinimiseError> {
    let mut molecule = task.molecule.clone();
    let conditions = held::conditions(task.held, &molecule.positions)?;
    let required = required(&conditions);
    let carried = task.curvature.filter(|c| {
        required.iter().all(|r| c.set.place_of(r).is_some())
            && c.set.is_sound(&molecule.positions, &[])
            && c.set.connectivity.atoms() == molecule.atoms.len()
    });
    let (mut set, hessian) = match carried {
        Some(curvature) => (curvature.set.clone(), Some(curvature.hessian.clone())),
        None => (InternalSet::of(&molecule, &required), None),
    };
    let held = places(&mut set, &conditions);
    let base = hessian.filter(|h| h.nrows() == set.primitives.len());
    let hessian = base
        .clone()
        .unwrap_or_else(|| model_hessian(&molecule, &molecule.positions, &set));
    let curvature = Curvature { set, hessian };
    approach(&curvature, &held, &conditions, &mut molecule.positions)?;
    Ok(Prepared {
        molecule,
        conditions,
        curvature,
        base,
        held,
    })
}

/// Brings the held coordinates to their values while the others follow as the Hessian lets them: the change that
/// costs the least energy, H⁻¹Cᵀ(CH⁻¹Cᵀ)⁻¹ × what is missing.
fn approach(
    curvature: &Curvature,
    held: &[usize],
    conditions: &[Condition],
    positions: &mut Vec<Vector3<f64>>,
) -> Result<(), MinimiseError> {
    let missing = held::rest(conditions, positions);
    if held.is_empty() || missing.amax() < 1e-10 {
        return held::impose(conditions, positions);
    }
    let frame = curvature.set.frame(positions)?;
    let hessian = frame.basis.transpose() * &curvature.hessian * &frame.basis;
    let mut rows = DMatrix::zeros(held.len(), frame.basis.ncols());
    for (k, &place) in held.iter().enumerate() {
        rows.set_row(k, &frame.basis.row(place));
    }
    let inverse = hessian
        .pseudo_inverse(1e-6)
        .map_err(|_| MinimiseError::NotFinite)?;
    let response = &inverse * rows.transpose();
    let coupling = (&rows * &response)
        .pseudo_inverse(1e-9)
        .map_err(|_| MinimiseError::NotFinite)?;
    let change = &frame.basis * (response * (coupling * missing));
    let moved = curvature.set.displaced(positions, &change)?;
    if moved.iter().all(|p| p.iter().all(|x| x.is_finite())) {
        *positions = moved;
    }
    held::impose(conditions, positions)
}

fn finish<S: Surface>(
    done: Descent<'_, S::Seed>,
    evaluator: &Evaluator<'_, S>,
    started: Vec<Vector3<f64>>,
) -> Result<Minimum<S::Seed>, MinimiseError> {
    let spent = evaluator.spent();
    let (positions, mut record, seed) = match (done.point, done.refused) {
        (Some(point), _) => (point.positions, point.record, point.seed),
        (None, Some(record)) => (started, record, None),
        (None, None) => return Err(MinimiseError::NotFinite),
    };
    record.fock_builds = spent.fock_builds;
    record.all_builds = spent.all_builds;
    record.seconds = spent.seconds;
    record.scf_seconds = spent.scf_seconds;
    Ok(Minimum {
        positions,
        record,
        seed,
        stop: done.stop.unwrap_or(MinimiseStop::CallLimit),
        calls: done.calls,
        all_builds: spent.all_builds,
        curvature: done.curvature,
    })
}
