//! The narrow line between electronic structure and everything above it: a geometry and a seed go in,
//! an energy and its diagnostics come out.
//!
//! [`Surface`] is implemented by Hartree–Fock and by closed-form model surfaces whose
//! answers are known, so that walks, journals, reports and figures are tested in milliseconds.

mod hartree_fock;
pub mod model;
mod stoppable;

pub use crate::scf::StopReason;
pub use hartree_fock::{HartreeFock, Workspace};
use nalgebra::Vector3;
use serde::{Deserialize, Serialize};
pub use stoppable::Stoppable;

/// A potential-energy surface at one level of theory.
///
/// An evaluation depends only on its [`PointRequest`]; a workspace saves work (integrals of atoms that did
/// not move) but never changes a bit of the result.
pub trait Surface: Sync {
    /// What a point leaves behind for its neighbours to start from.
    type Seed: Clone + Send + Sync;
    /// What is kept from one point to the next to save work.
    type Workspace: Clone + Send;

    /// An empty workspace.
    fn workspace(&self) -> Self::Workspace;

    /// Memory that one workspace may come to hold, in bytes.
    fn workspace_bytes(&self) -> u64;

    /// Energy and diagnostics at a geometry. A calculation that does not converge is a result
    /// whose record has no energy.
    ///
    /// # Errors
    /// [`SurfaceError`] when the geometry itself cannot be treated.
    fn evaluate(
        &self,
        request: &PointRequest<'_, Self::Seed>,
        workspace: &mut Self::Workspace,
    ) -> Result<PointOutcome<Self::Seed>, SurfaceError>;

    /// How much two points share of their occupied spaces, α and β: the smallest cosine of the
    /// principal angles between the spaces carried to one orthonormal frame (1: the same space, 0: an electron
    /// moved to an orthogonal orbital).
    fn likeness(&self, one: &Self::Seed, other: &Self::Seed) -> [f64; 2];

    /// Starts for positions (bohr) at which the molecule has fallen apart, made of its free atoms. None where it has
    /// not, or where the method has no such start.
    fn apart(&self, positions: &[Vector3<f64>]) -> Vec<Self::Seed>;

    /// Whether [`Start::Plain`] is another start than [`Start::Fresh`].
    fn has_plain_start(&self) -> bool;
}

impl<S: Surface> Surface for &S {
    type Seed = S::Seed;
    type Workspace = S::Workspace;

    fn workspace(&self) -> Self::Workspace {
        (**self).workspace()
    }

    fn workspace_bytes(&self) -> u64 {
        (**self).workspace_bytes()
    }

    fn evaluate(
        &self,
        request: &PointRequest<'_, Self::Seed>,
        workspace: &mut Self::Workspace,
    ) -> Result<PointOutcome<Self::Seed>, SurfaceError> {
        (**self).evaluate(request, workspace)
    }

    fn likeness(&self, one: &Self::Seed, other: &Self::Seed) -> [f64; 2] {
        (**self).likeness(one, other)
    }

    fn apart(&self, positions: &[Vector3<f64>]) -> Vec<Self::Seed> {
        (**self).apart(positions)
    }

    fn has_plain_start(&self) -> bool {
        (**self).has_plain_start()
    }
}

/// A point already computed that the next may start from.
#[derive(Debug)]
pub struct SeedPoint<'a, S> {
    /// Values of the swept coordinates, ångström or degree.
    pub coordinates: &'a [f64],
    /// What that point left behind.
    pub seed: &'a S,
}

/// What a calculation starts from.
#[derive(Debug)]
pub enum Start<'a, S> {
    /// Nothing.
    Fresh,
    /// Nothing, and from superposed atomic densities whatever first density is asked for.
    Plain,
    /// The solution of the last point listed, carried to the new geometry.
    Previous(SeedPoint<'a, S>),
    /// An extrapolation through several points, nearest last; never empty.
    Extrapolated(Vec<SeedPoint<'a, S>>),
}

/// What is asked about stability.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum StabilityDemand {
    /// Nothing.
    #[default]
    None,
    /// Test the solution and report its lowest eigenvalues.
    Report,
    /// Test it, and leave an unstable solution of the same method downhill until it is stable.
    Leave,
}

/// One question to a surface.
#[derive(Debug)]
pub struct PointRequest<'a, S> {
    /// Positions in bohr, one per atom.
    pub positions: &'a [Vector3<f64>],
    /// Values of the swept coordinates, ångström or degree (empty without a sweep).
    pub coordinates: &'a [f64],
    /// What the calculation starts from.
    pub start: Start<'a, S>,
    /// Whether the gradient is wanted.
    pub gradient: bool,
    /// What is asked about stability.
    pub stability: StabilityDemand,
    /// Keep to the state that overlaps most with this one instead of the lowest orbitals.
    pub follow: Option<&'a S>,
}

/// The answer: what is recorded, and what neighbours may start from (nothing without convergence).
#[derive(Debug, Clone)]
pub struct PointOutcome<S> {
    /// Numbers that are kept and written.
    pub record: PointRecord,
    /// What a neighbour may start from.
    pub seed: Option<S>,
}

/// Lowest eigenvalues of the orbital Hessians, hartree; negative: unstable.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct StabilityRecord {
    /// Within the method itself (RHF singlet, or UHF).
    pub internal: f64,
    /// The lowest within the method that is not zero: a state that breaks a symmetry can be turned as a whole at
    /// no cost, and only the next eigenvalue tells when another state comes near.
    #[serde(default)]
    pub internal_next: Option<f64>,
    /// Towards unrestricted orbitals (RHF triplet); none for UHF.
    pub triplet: Option<f64>,
    /// Trial rotations whose Hessian products the tests took.
    #[serde(alias = "builds")]
    pub products: usize,
    /// Passes over the integrals that these took.
    #[serde(default)]
    pub passes: usize,
    /// How often an unstable solution was left.
    pub left: usize,
}

/// How the relaxation of a point went.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct RelaxationRecord {
    /// Gradient calls.
    pub gradient_calls: usize,
    /// Whether a stationary point was reached; if not, the record has no energy.
    pub converged: bool,
    /// Largest component of the gradient left, swept coordinates apart, hartree/bohr; none without an energy.
    pub gradient_max: Option<f64>,
}

/// Unique repulsion integrals computed and taken over.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, Serialize, Deserialize)]
pub struct IntegralCounts {
    /// computed at this point
    pub computed: u64,
    /// taken over because no atom they touch had moved
    pub reused: u64,
}

impl std::ops::AddAssign for IntegralCounts {
    fn add_assign(&mut self, other: Self) {
        self.computed += other.computed;
        self.reused += other.reused;
    }
}

/// Everything that is kept of one evaluation.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct PointRecord {
    /// Total energy in hartree; none if the calculation did not converge.
    pub energy: Option<f64>,
    /// Why it stopped.
    pub stop: StopReason,
    /// Fock builds of the calculation that gave the kept solution; of a relaxed point, those of all its calls.
    pub fock_builds: usize,
    /// All Fock builds spent here, abandoned solutions and stability tests included.
    pub all_builds: usize,
    /// ⟨S²⟩.
    pub s_squared: f64,
    /// Highest occupied orbital energy over both spins, hartree; none without electrons.
    pub homo: Option<f64>,
    /// Lowest empty orbital energy over both spins, hartree; none if all are full.
    pub lumo: Option<f64>,
    /// Dipole moment about the centre of nuclear charge, e·bohr.
    pub dipole: [f64; 3],
    /// Mulliken charges, e, one per atom.
    pub charges_mulliken: Vec<f64>,
    /// Löwdin charges, e, one per atom.
    pub charges_loewdin: Vec<f64>,
    /// Löwdin spin populations (α − β), one per atom.
    pub spins_loewdin: Vec<f64>,
    /// Mayer bond orders of atom pairs (i < j).
    pub bond_orders: Vec<(usize, usize, f64)>,
    /// tr(PS): the electrons in the density.
    pub electrons: f64,
    /// Largest |FPS − SPF| in an orthonormal basis at the end, hartree.
    pub commutator: f64,
    /// Kinetic energy, hartree (for the virial ratio).
    pub kinetic: f64,
    /// Basis functions kept after near-dependent combinations are dropped.
    pub functions_kept: usize,
    /// Smallest eigenvalue of the overlap matrix.
    pub overlap_smallest: f64,
    /// Energy gradient in hartree/bohr, one per atom, where it was asked for.
    pub gradient: Option<Vec<[f64; 3]>>,
    /// Positions in bohr, where they were relaxed; otherwise they are those asked for.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub positions: Option<Vec<[f64; 3]>>,
    /// How the relaxation went, where there was one.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub relaxation: Option<RelaxationRecord>,
    /// What the stability test found, where there was one.
    pub stability: Option<StabilityRecord>,
    /// Repulsion integrals.
    pub integrals: IntegralCounts,
    /// Wall time of the whole evaluation, s.
    pub seconds: f64,
    /// Wall time of integrals and SCF alone, s (stability tests and gradients left out).
    pub scf_seconds: f64,
}

/// Why a geometry cannot be treated.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum SurfaceError {
    /// Two nuclei on one spot, or a position that is not a number.
    #[error("atoms {first} and {second} lie {distance_bohr:.2e} bohr apart")]
    Coincident {
        /// index of one atom
        first: usize,
        /// index of the other
        second: usize,
        /// their distance
        distance_bohr: f64,
    },
    /// Fewer independent functions than occupied orbitals.
    #[error("{functions} independent basis functions cannot hold {occupied} occupied orbitals")]
    TooFewFunctions {
        /// independent basis functions
        functions: usize,
        /// occupied orbitals of one spin
        occupied: usize,
    },
    /// Charge and multiplicity do not fit the molecule.
    #[error(transparent)]
    Electrons(crate::molecule::ElectronCountError),
    /// Restricted orbitals for unpaired electrons.
    #[error("restricted Hartree–Fock treats closed shells only, not multiplicity {multiplicity}")]
    OpenShell {
        /// multiplicity asked for
        multiplicity: u32,
    },
    /// The calculation was not begun because the program is to stop.
    #[error("stopped on request")]
    Stopped,
    /// The eigenvalue iteration did not end.
    #[error("a matrix of order {order} could not be diagonalised")]
    Eigenproblem {
        /// its order
        order: usize,
    },
}
