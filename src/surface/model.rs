//! Closed-form surfaces: energies, minima and force constants known exactly, in microseconds.
//!
//! They stand in for electronic structure where walks, journals, reports and figures are tested. A model may
//! have several states (as an SCF has several solutions): a fresh start lands on the first, a seed stays on
//! its own state.

use super::{
    IntegralCounts, PointOutcome, PointRecord, PointRequest, Start, StopReason, Surface,
    SurfaceError,
};
use crate::molecule::internal::Coordinate;
use nalgebra::Vector3;

/// The energy of one internal coordinate.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Form {
    /// k/2 (q − q₀)²
    Harmonic {
        /// k, hartree/bohr² or hartree/rad²
        force_constant: f64,
        /// q₀, bohr or radian
        equilibrium: f64,
    },
    /// D (1 − exp(−a (q − q₀)))² (P. M. Morse, Phys. Rev. 34, 57 (1929)); k = 2 D a²
    Morse {
        /// D, hartree
        depth: f64,
        /// a, 1/bohr
        steepness: f64,
        /// q₀, bohr
        equilibrium: f64,
    },
    /// V/2 (1 − cos n (q − q₀))
    Cosine {
        /// V, hartree
        barrier: f64,
        /// n
        fold: u32,
        /// q₀, radian
        equilibrium: f64,
    },
}

impl Form {
    /// Energy in hartree at `q` (bohr or radian).
    #[must_use]
    pub fn energy(&self, q: f64) -> f64 {
        match *self {
            Self::Harmonic {
                force_constant,
                equilibrium,
            } => 0.5 * force_constant * (q - equilibrium).powi(2),
            Self::Morse {
                depth,
                steepness,
                equilibrium,
            } => depth * (1.0 - (-steepness * (q - equilibrium)).exp()).powi(2),
            Self::Cosine {
                barrier,
                fold,
                equilibrium,
            } => 0.5 * barrier * (1.0 - (f64::from(fold) * (q - equilibrium)).cos()),
        }
    }

    /// dE/dq in hartree per bohr or radian.
    #[must_use]
    pub fn slope(&self, q: f64) -> f64 {
        match *self {
            Self::Harmonic {
                force_constant,
                equilibrium,
            } => force_constant * (q - equilibrium),
            Self::Morse {
                depth,
                steepness,
                equilibrium,
            } => {
                let decay = (-steepness * (q - equilibrium)).exp();
                2.0 * depth * steepness * decay * (1.0 - decay)
            }
            Self::Cosine {
                barrier,
                fold,
                equilibrium,
            } => {
                let n = f64::from(fold);
                0.5 * barrier * n * (n * (q - equilibrium)).sin()
            }
        }
    }
}

/// One state of a model: an energy at the bottom and a sum of terms.
#[derive(Debug, Clone, PartialEq)]
pub struct ModelState {
    /// Energy where every term is at its minimum, hartree.
    pub bottom: f64,
    /// The terms.
    pub terms: Vec<(Coordinate, Form)>,
}

impl ModelState {
    /// Energy in hartree.
    #[must_use]
    pub fn energy(&self, positions: &[Vector3<f64>]) -> f64 {
        self.bottom
            + self
                .terms
                .iter()
                .map(|(q, form)| form.energy(q.value(positions)))
                .sum::<f64>()
    }

    /// Gradient in hartree/bohr.
    #[must_use]
    pub fn gradient(&self, positions: &[Vector3<f64>]) -> Vec<Vector3<f64>> {
        let mut gradient = vec![Vector3::zeros(); positions.len()];
        for (coordinate, form) in &self.terms {
            let slope = form.slope(coordinate.value(positions));
            for (atom, derivative) in coordinate.derivative(positions) {
                gradient[atom] += derivative * slope;
            }
        }
        gradient
    }
}

/// A model surface.
#[derive(Debug, Clone)]
pub struct ModelSurface {
    /// Its states; a fresh start lands on the first.
    pub states: Vec<ModelState>,
    /// Where no calculation converges, whatever the seed.
    pub fails: fn(&[Vector3<f64>]) -> bool,
    /// Where a state no longer exists and a seed of it falls to the lowest one.
    pub vanishes: fn(usize, &[Vector3<f64>]) -> bool,
}

impl ModelSurface {
    /// A surface of one state that always converges.
    #[must_use]
    pub fn simple(bottom: f64, terms: Vec<(Coordinate, Form)>) -> Self {
        Self {
            states: vec![ModelState { bottom, terms }],
            fails: |_| false,
            vanishes: |_, _| false,
        }
    }
}

impl Surface for ModelSurface {
    type Seed = usize;
    type Workspace = ();

    fn workspace(&self) {}

    fn workspace_bytes(&self) -> u64 {
        0
    }

    fn evaluate(
        &self,
        request: &PointRequest<'_, usize>,
        (): &mut (),
    ) -> Result<PointOutcome<usize>, SurfaceError> {
        let positions = request.positions;
        let energy = |s: usize| self.states[s].energy(positions);
        let seeded = match &request.start {
            Start::Fresh | Start::Plain => 0,
            Start::Previous(point) => *point.seed,
            Start::Extrapolated(points) => points.last().map_or(0, |p| *p.seed),
        };
        let state = if (self.vanishes)(seeded, positions) {
            (0..self.states.len())
                .min_by(|&a, &b| energy(a).total_cmp(&energy(b)))
                .unwrap_or(0)
        } else {
            seeded
        };
        let converged = !(self.fails)(positions);
        let builds = if matches!(request.start, Start::Fresh | Start::Plain) {
            10
        } else {
            5
        };
        let atoms = positions.len();
        let record = PointRecord {
            energy: converged.then(|| energy(state)),
            stop: if converged {
                StopReason::Converged
            } else {
                StopReason::IterationLimit
            },
            fock_builds: builds,
            all_builds: builds,
            s_squared: 0.0,
            homo: None,
            lumo: None,
            dipole: [0.0; 3],
            charges_mulliken: vec![0.0; atoms],
            charges_loewdin: vec![0.0; atoms],
            spins_loewdin: vec![0.0; atoms],
            bond_orders: Vec::new(),
            electrons: 0.0,
            commutator: 0.0,
            kinetic: 0.0,
            functions_kept: 0,
            overlap_smallest: 1.0,
            gradient: request.gradient.then(|| {
                self.states[state]
                    .gradient(positions)
                    .iter()
                    .map(|g| [g.x, g.y, g.z])
                    .collect()
            }),
            positions: None,
            relaxation: None,
            stability: None,
            integrals: IntegralCounts::default(),
            seconds: 0.0,
            scf_seconds: 0.0,
        };
        Ok(PointOutcome {
            record,
            seed: converged.then_some(state),
        })
    }

    fn likeness(&self, one: &usize, other: &usize) -> [f64; 2] {
        let same = if one == other { 1.0 } else { 0.0 };
        [same, same]
    }

    fn apart(&self, _: &[Vector3<f64>]) -> Vec<Self::Seed> {
        Vec::new()
    }

    fn has_plain_start(&self) -> bool {
        false
    }
}
