//! Equilibrium geometry, harmonic frequencies and force constants of a molecule.

use super::coordinates::InternalSet;
use super::hessian::{CartesianHessian, HessianSettings, hessian};
use super::primitive::Primitive;
use super::{MinimiseError, MinimiseSettings, Minimum, Task, minimise};
use crate::molecule::Molecule;
use crate::molecule::connectivity::Connectivity;
use crate::molecule::inertia;
use crate::molecule::internal::Coordinate;
use crate::molecule::motion::Motion;
use crate::surface::{StabilityDemand, Surface};
use crate::vibration::{HarmonicAnalysis, harmonic_analysis};
use nalgebra::{DMatrix, DVector, Vector3};

/// How a molecule is settled.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct SettleSettings {
    /// When the geometry counts as a minimum.
    pub minimise: MinimiseSettings,
    /// How the Hessian is made.
    pub hessian: HessianSettings,
    /// How often a saddle point is left along its imaginary mode; 0: it is only reported.
    pub pushes: usize,
    /// What is asked about the stability of solutions.
    pub stability: StabilityDemand,
}

impl Default for SettleSettings {
    fn default() -> Self {
        Self {
            minimise: MinimiseSettings::tight(),
            hessian: HessianSettings::default(),
            pushes: 0,
            stability: StabilityDemand::None,
        }
    }
}

/// What kind of stationary point a Hessian says it is.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "kebab-case", tag = "kind")]
pub enum Character {
    /// all vibrations real
    Minimum,
    /// imaginary vibrations: downhill directions
    Saddle {
        /// how many
        imaginary: usize,
    },
    /// vibrations below [`FLAT_PER_CM`] in size: the energy hardly changes along them, and the geometry there is loose
    Flat {
        /// how many
        modes: usize,
    },
}

/// A mode with a smaller wavenumber, cm⁻¹, real or imaginary, is flat: errors of finite differences (10⁻⁵
/// hartree/bohr²) already make wavenumbers of this size for light atoms.
pub const FLAT_PER_CM: f64 = 30.0;

/// Force constant of one coordinate.
#[derive(Debug, Clone, PartialEq)]
pub struct InternalConstant {
    /// The coordinate; tied ones share the constant.
    pub coordinates: Vec<Coordinate>,
    /// Equilibrium value of the first, bohr or radian.
    pub equilibrium: f64,
    /// Second derivative of the energy while all other coordinates follow, hartree per bohr² or radian²: the inverse of
    /// the compliance constant (J. C. Decius, J. Chem. Phys. 38, 241 (1963)), the same in every set of coordinates.
    pub relaxed: f64,
    /// Second derivative along the rigid motion of one side; none where no side can move by itself.
    pub rigid: Option<f64>,
}

/// A settled molecule.
#[derive(Debug, Clone)]
pub struct Settled<S> {
    /// The stationary point.
    pub minimum: Minimum<S>,
    /// Its Hessian.
    pub hessian: CartesianHessian,
    /// Wavenumbers, modes, intensities and zero-point energy.
    pub analysis: HarmonicAnalysis,
    /// Minimum, saddle point or flat.
    pub character: Character,
    /// Constants of the swept coordinates, in the order given.
    pub swept: Vec<InternalConstant>,
    /// Constants of all bonds, angles and dihedrals.
    pub internal: Vec<InternalConstant>,
    /// Saddle points left on the way.
    pub pushes: usize,
    /// Gradient calls of everything.
    pub gradient_calls: usize,
}

/// Settles a molecule: minimum, Hessian, vibrations and force constants.
///
/// `masses_u` holds one mass (u) per atom; `swept` for each swept coordinate its rigid motions (several where coordinates
/// are tied). Not reaching the thresholds is a result, see [`Minimum::stop`]; what follows is then that of a point
/// that is not stationary.
///
/// # Errors
/// What [`minimise`] and [`hessian()`] object to; masses that are not positive; a start without an energy.
pub fn settle<S: Surface>(
    surface: &S,
    molecule: &Molecule,
    masses_u: &[f64],
    swept: &[Vec<Motion>],
    settings: &SettleSettings,
    workspace: &mut S::Workspace,
) -> Result<Settled<S::Seed>, MinimiseError> {
    let mut moved = molecule.clone();
    let mut pushes = 0;
    let mut gradient_calls = 0;
    loop {
        let task = Task {
            stability: settings.stability,
            ..Task::of(&moved)
        };
        let minimum = minimise(surface, task, &settings.minimise, workspace)?;
        if minimum.record.energy.is_none() {
            return Err(MinimiseError::NoEnergy);
        }
        moved.positions.clone_from(&minimum.positions);
        let hessian = hessian(
            surface,
            &moved,
            &[],
            minimum.seed.as_ref(),
            &settings.hessian,
            workspace,
        )?;
        gradient_calls += minimum.calls.len() + hessian.gradient_calls;
        let analysis = harmonic_analysis(
            &hessian.matrix,
            &moved.positions,
            masses_u,
            Some(&hessian.dipole_derivatives),
        )?;
        let character = character(&analysis);
        let downhill = analysis
            .modes
            .first()
            .filter(|_| matches!(character, Character::Saddle { .. }));
        if let (true, Some(mode)) = (pushes < settings.pushes, downhill) {
            push(&mut moved.positions, &mode.displacements);
            pushes += 1;
            continue;
        }
        let compliance = compliance(&hessian.matrix, &moved.positions)?;
        let set = InternalSet::of(&moved, &[]);
        let connectivity = Connectivity::of(&moved);
        let internal = set
            .primitives
            .iter()
            .filter_map(|primitive| match primitive {
                Primitive::Internal(coordinate) => Some(*coordinate),
                _ => None,
            })
            .map(|coordinate| {
                let functions = vec![0; moved.atoms.len()];
                let motion = Motion::resolve(coordinate, &moved, &connectivity, &functions, None);
                let motions: Vec<Motion> = motion.into_iter().collect();
                constant(
                    &[coordinate],
                    &motions,
                    &moved,
                    &hessian.matrix,
                    &compliance,
                )
            })
            .collect::<Result<_, _>>()?;
        let swept = swept
            .iter()
            .map(|motions| {
                let coordinates: Vec<Coordinate> = motions.iter().map(|m| m.coordinate).collect();
                constant(&coordinates, motions, &moved, &hessian.matrix, &compliance)
            })
            .collect::<Result<_, _>>()?;
        return Ok(Settled {
            minimum,
            hessian,
            analysis,
            character,
            swept,
            internal,
            pushes,
            gradient_calls,
        });
    }
}

/// What the vibrations say.
#[must_use]
pub fn character(analysis: &HarmonicAnalysis) -> Character {
    let count = |holds: fn(f64) -> bool| {
        analysis
            .modes
            .iter()
            .filter(|m| holds(m.wavenumber_cm1))
            .count()
    };
    match (
        count(|w| w <= -FLAT_PER_CM),
        count(|w| w.abs() < FLAT_PER_CM),
    ) {
        (0, 0) => Character::Minimum,
        (0, modes) => Character::Flat { modes },
        (imaginary, _) => Character::Saddle { imaginary },
    }
}

/// Moves the atoms along a mode, the farthest by 0.2 bohr: out of the flat top of the saddle, not past the valley. The sense
/// is that in which the first component of size is positive.
fn push(positions: &mut [Vector3<f64>], mode: &DVector<f64>) {
    const FARTHEST_BOHR: f64 = 0.2;
    let size = mode.amax();
    let sense = mode
        .iter()
        .find(|x| x.abs() > 0.5 * size)
        .map_or(1.0, |x| x.signum());
    super::coordinates::shift(positions, mode, sense * FARTHEST_BOHR / size);
}

/// Inverse of the Hessian in the space of internal motions, 3N × 3N, bohr²/hartree.
fn compliance(
    hessian: &DMatrix<f64>,
    positions: &[Vector3<f64>],
) -> Result<DMatrix<f64>, MinimiseError> {
    let order = hessian.nrows();
    let rigid = inertia::rigid_motions(&vec![1.0; positions.len()], positions)?;
    let internal = DMatrix::identity(order, order) - &rigid * rigid.transpose();
    let projected = &internal * hessian * &internal;
    let eigen = nalgebra::SymmetricEigen::try_new(projected, f64::EPSILON, 10_000)
        .ok_or(MinimiseError::Eigenproblem { order })?;
    // The rigid motions have eigenvalues of rounding size; the softest torsions lie a thousand times higher.
    const NOTHING: f64 = 1e-8;
    let mut inverse = DMatrix::zeros(order, order);
    for (value, vector) in eigen
        .eigenvalues
        .iter()
        .zip(eigen.eigenvectors.column_iter())
    {
        if value.abs() > NOTHING {
            inverse += vector * vector.transpose() / *value;
        }
    }
    Ok(inverse)
}

/// Force constants of coordinates changed together. Relaxed: 1ᵀ(B H⁺ Bᵀ)⁻¹1, least energy at given changes; rigid: dᵀHd
/// along the motions' displacement d (at a stationary point it does not matter which side moves).
fn constant(
    coordinates: &[Coordinate],
    motions: &[Motion],
    molecule: &Molecule,
    hessian: &DMatrix<f64>,
    compliance: &DMatrix<f64>,
) -> Result<InternalConstant, MinimiseError> {
    let primitives: Vec<Primitive> = coordinates
        .iter()
        .map(|&c| Primitive::Internal(c))
        .collect();
    let b = super::coordinates::rows(&primitives, &molecule.positions);
    let compliances = &b * compliance * b.transpose();
    let inverse = compliances
        .pseudo_inverse(1e-12)
        .map_err(|_| MinimiseError::NotFinite)?;
    let rigid = (!motions.is_empty()).then(|| {
        let mut along = DVector::zeros(hessian.nrows());
        for motion in motions {
            for (atom, d) in motion.displacement(&molecule.positions).iter().enumerate() {
                for axis in 0..3 {
                    along[3 * atom + axis] += d[axis];
                }
            }
        }
        along.dot(&(hessian * &along))
    });
    Ok(InternalConstant {
        coordinates: coordinates.to_vec(),
        equilibrium: coordinates
            .first()
            .map_or(f64::NAN, |c| c.value(&molecule.positions)),
        relaxed: inverse.sum(),
        rigid,
    })
}
