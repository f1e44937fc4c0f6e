//! Descent in the space of orbital rotations with a quasi-Newton model of the Hessian: one Fock build a step, never
//! uphill.
//!
//! After T. Van Voorhis, M. Head-Gordon, Mol. Phys. 100, 1713 (2002): all orbitals turn along, so that in
//! their own frame earlier steps and gradients need no transport. Limited-memory BFGS (J. Nocedal, Math. Comput.
//! 35, 773 (1980)) starts from orbital-energy differences, corrected by the lowest eigenvectors of the orbital Hessian of a
//! neighbouring geometry where they are known: those soft modes are what makes a difficult case difficult.

use super::ScfError;
use super::canonical::{Canonical, Kappa, combined, inner, scaled};
use super::diis::Extrapolation;
use super::fock::{Evaluation, Field};
use super::iteration::{self, Thresholds};
use super::orthogonal::{symmetric_eigen, symmetrise};
use super::stability::CarriedVectors;
use nalgebra::DMatrix;

/// Longest step: norm of the rotation.
const LONGEST: f64 = 0.5;
/// Curvatures below this are raised to it, hartree.
const LEAST_CURVATURE: f64 = 0.02;
/// Orbital-energy differences below this are raised to it, hartree.
const LEAST_GAP: f64 = 0.15;
/// Steps remembered.
const MEMORY: usize = 16;
/// Trials along one direction before it is given up.
const TRIALS: usize = 5;
/// Growth of the steps while the energy curves downwards.
const STRETCH: f64 = 2.5;
/// Steps over which progress is judged, and the energy gain (hartree) below which, with a commutator that hardly
/// falls, the descent is given over to exact Newton steps.
const WINDOW: usize = 8;
/// See [`WINDOW`].
const LITTLE: f64 = 1e-3;
/// Energy differences below this are rounding, hartree.
const ENERGY_NOISE: f64 = 2e-11;

/// A first model of the inverse Hessian.
struct Model {
    gaps: Kappa,
    soft: Vec<(f64, Kappa)>,
    steps: Vec<(Kappa, Kappa, f64)>,
}

impl Model {
    fn new(orbitals: &[Canonical], carried: Option<&CarriedVectors>) -> Self {
        let gaps = orbitals
            .iter()
            .map(|o| o.gaps().map(|gap| gap.max(LEAST_GAP)))
            .collect();
        let mut soft: Vec<(f64, Kappa)> = Vec::new();
        if let Some(carried) = carried {
            for (value, vector) in carried.values.iter().zip(carried.carried_to(orbitals)) {
                let mut rest = vector;
                for _ in 0..2 {
                    for (_, other) in &soft {
                        rest = combined(&rest, -inner(other, &rest), other);
                    }
                }
                let size = inner(&rest, &rest).sqrt();
                if size > 0.5 {
                    soft.push((value.abs().max(LEAST_CURVATURE), scaled(&rest, 1.0 / size)));
                }
            }
        }
        Self {
            gaps,
            soft,
            steps: Vec::new(),
        }
    }

    /// The first inverse Hessian on a vector: known curvatures for the soft modes, orbital-energy differences for the rest.
    fn first_inverse(&self, vector: &[DMatrix<f64>]) -> Kappa {
        let mut rest: Kappa = vector.to_vec();
        let mut shares = Vec::with_capacity(self.soft.len());
        for (value, mode) in &self.soft {
            let share = inner(mode, vector);
            rest = combined(&rest, -share, mode);
            shares.push(share / value);
        }
        let mut result: Kappa = rest
            .iter()
            .zip(&self.gaps)
            .map(|(r, g)| r.component_div(g))
            .collect();
        for (_, mode) in &self.soft {
            result = combined(&result, -inner(mode, &result), mode);
        }
        for ((_, mode), share) in self.soft.iter().zip(shares) {
            result = combined(&result, share, mode);
        }
        result
    }

    /// Direction −H⁻¹ g by the two-loop recursion.
    fn direction(&self, gradient: &[DMatrix<f64>]) -> Kappa {
        let mut vector: Kappa = gradient.to_vec();
        let mut factors = Vec::with_capacity(self.steps.len());
        for (step, change, curvature) in self.steps.iter().rev() {
            let factor = inner(step, &vector) / curvature;
            vector = combined(&vector, -factor, change);
            factors.push(factor);
        }
        let mut result = self.first_inverse(&vector);
        for ((step, change, curvature), factor) in self.steps.iter().zip(factors.iter().rev()) {
            let share = inner(change, &result) / curvature;
            result = combined(&result, factor - share, step);
        }
        scaled(&result, -1.0)
    }

    fn learn(&mut self, step: Kappa, change: Kappa) {
        let curvature = inner(&step, &change);
        if curvature > 1e-8 * inner(&step, &step) {
            self.steps.push((step, change, curvature));
            if self.steps.len() > MEMORY {
                self.steps.remove(0);
            }
        }
    }
}

/// Occupied and empty orbitals that turn together.
struct Frame {
    occupied: DMatrix<f64>,
    empty: DMatrix<f64>,
}

impl Frame {
    /// Both sets turned by exp of the antisymmetric matrix with lower left block κ.
    fn turned(&self, kappa: &DMatrix<f64>) -> Result<Self, ScfError> {
        let mut gram = kappa.transpose() * kappa;
        symmetrise(&mut gram);
        let (squares, vectors) = symmetric_eigen(&gram)?;
        let function = |f: &dyn Fn(f64) -> f64| {
            let mut scaled = vectors.clone();
            for (square, mut column) in squares.iter().zip(scaled.column_iter_mut()) {
                column *= f(square.max(0.0));
            }
            scaled * vectors.transpose()
        };
        let cosine = function(&|x| x.sqrt().cos());
        let sinc = function(&|x| {
            if x < 1e-8 {
                1.0 - x / 6.0
            } else {
                x.sqrt().sin() / x.sqrt()
            }
        });
        // (cos √x − 1)/x without cancellation.
        let versine = function(&|x| {
            if x < 1e-8 {
                -0.5 + x / 24.0
            } else {
                let s = (0.5 * x.sqrt()).sin();
                -2.0 * s * s / x
            }
        });
        let forward = kappa * &sinc;
        Ok(Self {
            occupied: &self.occupied * cosine + &self.empty * &forward,
            empty: &self.empty + (&self.empty * kappa) * (versine * kappa.transpose())
                - &self.occupied * forward.transpose(),
        })
    }
}

fn turned(frames: &[Frame], kappa: &[DMatrix<f64>]) -> Result<Vec<Frame>, ScfError> {
    frames.iter().zip(kappa).map(|(f, k)| f.turned(k)).collect()
}

fn stopped(evaluation: Evaluation) -> Descent {
    Descent {
        refined: evaluation.occupied.clone(),
        evaluation,
        converged: false,
    }
}

fn gradient(frames: &[Frame], evaluation: &Evaluation) -> Kappa {
    frames
        .iter()
        .zip(&evaluation.focks)
        .map(|(f, fock)| f.empty.transpose() * (fock * &f.occupied))
        .collect()
}

/// Where a descent ended.
#[derive(Debug, Clone)]
pub struct Descent {
    /// The lowest determinant found.
    pub evaluation: Evaluation,
    /// Occupied orbitals one step further, without a build.
    pub refined: Vec<DMatrix<f64>>,
    /// Whether it meets the thresholds.
    pub converged: bool,
}

/// Descends from a determinant; `builds` bounds the Fock builds and `history` takes in every accepted step. `soft` are eigenvectors of the orbital Hessian of a neighbouring geometry.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn descend(
    field: &mut Field<'_>,
    start: Evaluation,
    thresholds: &Thresholds,
    builds: usize,
    soft: Option<&CarriedVectors>,
    history: &mut Extrapolation,
) -> Result<Descent, ScfError> {
    let limit = field.builds() + builds;
    let weight = field.occupation().weight();
    let orbitals = Canonical::of(field, &start)?;
    let mut model = Model::new(&orbitals, soft);
    let mut frames: Vec<Frame> = orbitals
        .into_iter()
        .map(|o| Frame {
            occupied: o.occupied,
            empty: o.empty,
        })
        .collect();
    let mut here = start;
    let mut slope = gradient(&frames, &here);
    let mut last_energy = None;
    let mut stretch = 1.0;
    let mut trail: Vec<(f64, f64)> = Vec::new();
    loop {
        if iteration::is_converged(field, &here, last_energy, thresholds)? {
            let step = model.direction(&slope);
            let refined = turned(&frames, &step)?;
            return Ok(Descent {
                refined: refined.into_iter().map(|f| f.occupied).collect(),
                evaluation: here,
                converged: true,
            });
        }
        let mut direction = model.direction(&slope);
        if inner(&direction, &slope) >= 0.0 {
            model.steps.clear();
            direction = model.direction(&slope);
        }
        trail.push((here.energy, here.commutator));
        if trail.len() > WINDOW {
            let (energy, commutator) = trail[trail.len() - 1 - WINDOW];
            if energy - here.energy < LITTLE && here.commutator > 0.3 * commutator {
                return Ok(stopped(here));
            }
        }
        let size = inner(&direction, &direction).sqrt();
        direction = scaled(&direction, f64::min(stretch, LONGEST / size));
        let descent = inner(&direction, &slope);
        let mut length = 1.0;
        let mut accepted = false;
        for _ in 0..TRIALS {
            if field.builds() >= limit {
                return Ok(stopped(here));
            }
            let step = scaled(&direction, length);
            let trial_frames = turned(&frames, &step)?;
            let occupied = trial_frames.iter().map(|f| f.occupied.clone()).collect();
            let trial = field.evaluate(occupied);
            if !trial.energy.is_finite() {
                return Ok(stopped(here));
            }
            let trial_slope = gradient(&trial_frames, &trial);
            let change = trial.energy - here.energy;
            let rounding = change.abs() < ENERGY_NOISE && trial.commutator < here.commutator;
            if rounding || change < 1e-4 * 2.0 * weight * length * descent {
                let change = combined(&trial_slope, -1.0, &slope);
                // Where the energy curves downwards the model has nothing to learn from, and steps would stay short.
                stretch = if inner(&step, &change) < 0.0 {
                    stretch * STRETCH
                } else {
                    1.0
                };
                model.learn(step, change);
                last_energy = Some(here.energy);
                history.record(&trial.focks, &trial.errors);
                here = trial;
                slope = trial_slope;
                frames = trial_frames;
                accepted = true;
                break;
            }
            // What the failed trial says of the curvature is used all the same.
            model.learn(step, combined(&trial_slope, -1.0, &slope));
            let trial_descent = inner(&direction, &trial_slope);
            // The slope along the direction goes through zero: secant, kept within the interval.
            let secant = if trial_descent > descent {
                length * descent / (descent - trial_descent)
            } else {
                0.3 * length
            };
            length = secant.clamp(0.1 * length, 0.6 * length);
        }
        if !accepted {
            return Ok(stopped(here));
        }
    }
}
