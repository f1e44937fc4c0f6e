//! Fock matrices and energies of determinants at one geometry, and their response to orbital rotations.
//!
//! Spin blocks: one for RHF (α = β, orbitals doubly occupied), two for UHF. All matrices handed in and out are
//! in the orthonormal frame of [`Orthogonal`], except the density matrices of [`Field::densities`].

use super::ScfError;
use super::diis::dot;
use super::grassmann::tangent_part;
use super::orthogonal::Orthogonal;
use super::settings::Method;
use crate::integrals::repulsion::{CoulombExchange, CoulombExchangePair};
use nalgebra::DMatrix;

/// Direct builds add up density differences at most this often before everything is computed afresh, so that what
/// screening leaves out cannot pile up.
const INCREMENTAL_BUILDS: usize = 8;

/// How many orbitals of each spin are filled.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Occupation {
    /// Whether the spins share their orbitals.
    pub method: Method,
    /// Number of α electrons.
    pub alpha: usize,
    /// Number of β electrons; equal to `alpha` for RHF, never more.
    pub beta: usize,
}

impl Occupation {
    /// Occupied orbitals of each spin block.
    #[must_use]
    pub fn blocks(&self) -> Vec<usize> {
        match self.method {
            Method::Rhf => vec![self.alpha],
            Method::Uhf => vec![self.alpha, self.beta],
        }
    }

    /// Electrons per occupied orbital of a block.
    #[must_use]
    pub fn weight(&self) -> f64 {
        match self.method {
            Method::Rhf => 2.0,
            Method::Uhf => 1.0,
        }
    }
}

/// A determinant with its energy and Fock matrices.
#[derive(Debug, Clone)]
pub struct Evaluation {
    /// Occupied orbitals of each spin block (basis functions × occupied).
    pub occupied: Vec<DMatrix<f64>>,
    /// Total energy, hartree.
    pub energy: f64,
    /// Fock matrices.
    pub focks: Vec<DMatrix<f64>>,
    /// Commutators F P − P F.
    pub errors: Vec<DMatrix<f64>>,
    /// Largest element of the commutators, hartree.
    pub commutator: f64,
}

impl Evaluation {
    /// Density matrices Y Yᵀ of the frame.
    #[must_use]
    pub fn projectors(&self) -> Vec<DMatrix<f64>> {
        self.occupied.iter().map(|y| y * y.transpose()).collect()
    }
}

/// Which orbital rotations a Hessian product is about.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Rotation {
    /// RHF: both spins turn alike.
    Singlet,
    /// RHF: the spins turn oppositely, towards UHF.
    Triplet,
    /// UHF: each spin on its own.
    Unrestricted,
}

/// Where two-electron matrices come from.
pub enum Repulsion<'a> {
    /// A list in memory: every build starts afresh.
    Stored(&'a dyn CoulombExchange),
    /// Integrals computed at every build: only the change of the density is treated.
    Direct(&'a dyn CoulombExchange),
}

/// Density matrices and their two-electron matrices of the last direct build.
type LastBuild = (Vec<DMatrix<f64>>, Vec<DMatrix<f64>>);

/// The mean field at one geometry: integrals, frame, and a count of the Fock builds.
pub struct Field<'a> {
    core: DMatrix<f64>,
    frame: &'a Orthogonal,
    repulsion: Repulsion<'a>,
    nuclear: f64,
    occupation: Occupation,
    last: Option<LastBuild>,
    since_fresh: usize,
    builds: usize,
    products: usize,
    product_passes: usize,
}

impl<'a> Field<'a> {
    /// A field with one-electron Hamiltonian `core` (kinetic energy and nuclear attraction, in the basis) and
    /// nuclear repulsion energy `nuclear` (hartree).
    #[must_use]
    pub fn new(
        core: DMatrix<f64>,
        frame: &'a Orthogonal,
        repulsion: Repulsion<'a>,
        nuclear: f64,
        occupation: Occupation,
    ) -> Self {
        Self {
            core,
            frame,
            repulsion,
            nuclear,
            occupation,
            last: None,
            since_fresh: 0,
            builds: 0,
            products: 0,
            product_passes: 0,
        }
    }

    /// The frame of all matrices.
    #[must_use]
    pub fn frame(&self) -> &'a Orthogonal {
        self.frame
    }

    /// What is occupied.
    #[must_use]
    pub fn occupation(&self) -> Occupation {
        self.occupation
    }

    /// Fock builds so far.
    #[must_use]
    pub fn builds(&self) -> usize {
        self.builds
    }

    /// Trial rotations whose Hessian products were made so far, each at most the work of one Fock build.
    #[must_use]
    pub fn products(&self) -> usize {
        self.products
    }

    /// Passes over the integrals so far, for Fock builds and for Hessian products.
    #[must_use]
    pub fn passes(&self) -> usize {
        self.builds + self.product_passes
    }

    /// Passes over the integrals that the Hessian products took; one serves all rotations at once.
    #[must_use]
    pub fn product_passes(&self) -> usize {
        self.product_passes
    }

    /// Density matrices in the basis, one per spin block, of occupied orbitals of the frame.
    #[must_use]
    pub fn densities(&self, occupied: &[DMatrix<f64>]) -> Vec<DMatrix<f64>> {
        occupied.iter().map(|y| self.frame.density(y)).collect()
    }

    /// The one-electron Hamiltonian in the frame, once per spin block.
    #[must_use]
    pub fn core_in_frame(&self) -> Vec<DMatrix<f64>> {
        let core = self.frame.transform(&self.core);
        vec![core; self.occupation.blocks().len()]
    }

    /// Two-electron matrices G of density matrices in the basis, one per spin block:
    /// J(Pα + Pβ) − K(Pσ).
    fn two_electron(&mut self, densities: &[DMatrix<f64>]) -> Vec<DMatrix<f64>> {
        match &self.repulsion {
            Repulsion::Stored(list) => contract(*list, densities),
            Repulsion::Direct(integrals) => {
                let fresh = self.since_fresh == 0 || self.since_fresh >= INCREMENTAL_BUILDS;
                let sums = match &self.last {
                    Some((old, sums)) if !fresh => {
                        let changes: Vec<_> =
                            densities.iter().zip(old).map(|(p, q)| p - q).collect();
                        let added = contract(*integrals, &changes);
                        sums.iter().zip(added).map(|(g, d)| g + d).collect()
                    }
                    _ => {
                        self.since_fresh = 0;
                        contract(*integrals, densities)
                    }
                };
                self.since_fresh += 1;
                self.last = Some((densities.to_vec(), Vec::clone(&sums)));
                sums
            }
        }
    }

    /// Makes the next direct build start afresh.
    pub fn refresh(&mut self) {
        self.since_fresh = 0;
    }

    /// Whether the last build added up density differences.
    #[must_use]
    pub fn is_incremental(&self) -> bool {
        matches!(self.repulsion, Repulsion::Direct(_)) && self.since_fresh > 1
    }

    /// Fock matrices (frame) of density matrices (basis) that need not belong to a determinant.
    pub fn focks_of_densities(&mut self, densities: &[DMatrix<f64>]) -> Vec<DMatrix<f64>> {
        self.builds += 1;
        let two_electron = self.two_electron(densities);
        // Such a density is no point of the iteration: differences to it would be as large as itself.
        self.refresh();
        two_electron
            .iter()
            .map(|g| self.frame.transform(&(&self.core + g)))
            .collect()
    }

    /// Energy and Fock matrices of a determinant.
    pub fn evaluate(&mut self, occupied: Vec<DMatrix<f64>>) -> Evaluation {
        self.builds += 1;
        let densities = self.densities(&occupied);
        let two_electron = self.two_electron(&densities);
        let weight = self.occupation.weight();
        let mut energy = self.nuclear;
        let mut focks = Vec::with_capacity(occupied.len());
        let mut errors = Vec::with_capacity(occupied.len());
        let mut commutator: f64 = 0.0;
        for ((density, g), y) in densities.iter().zip(&two_electron).zip(&occupied) {
            energy += weight
                * (dot(density.as_slice(), self.core.as_slice())
                    + 0.5 * dot(density.as_slice(), g.as_slice()));
            let fock = self.frame.transform(&(&self.core + g));
            let product = (&fock * y) * y.transpose();
            let error = &product - product.transpose();
            if !error.is_empty() {
                // amax() would let NaN pass unseen.
                let largest =
                    error.iter().fold(
                        0.0,
                        |m: f64, x| if x.is_nan() { f64::NAN } else { m.max(x.abs()) },
                    );
                commutator = if largest.is_nan() {
                    largest
                } else {
                    commutator.max(largest)
                };
            }
            focks.push(fock);
            errors.push(error);
        }
        Evaluation {
            occupied,
            energy,
            focks,
            errors,
            commutator,
        }
    }

    /// Two-electron response of the Fock matrices to orbital rotations, frame, tangent part only.
    ///
    /// `tangents` are sets of tangents Γ (one per spin block) at `occupied`; the density changes by
    /// Γ Yᵀ + Y Γᵀ. For each kind of rotation and each set returns (1 − Y Yᵀ) δF Y per block. All sets share one
    /// pass over the integrals, and so do kinds that differ only in what they make of J and K.
    pub fn response(
        &mut self,
        occupied: &[DMatrix<f64>],
        tangents: &[Vec<DMatrix<f64>>],
        rotations: &[Rotation],
    ) -> Vec<Vec<Vec<DMatrix<f64>>>> {
        self.products += tangents.len();
        self.product_passes += 1;
        let root = self.frame.inverse_half();
        let orbitals: Vec<_> = occupied.iter().map(|y| root * y).collect();
        let mut densities = Vec::new();
        for tangent in tangents {
            for (gamma, y) in tangent.iter().zip(&orbitals) {
                let half = (root * gamma) * y.transpose();
                densities.push(&half + half.transpose());
            }
        }
        let (Repulsion::Stored(integrals) | Repulsion::Direct(integrals)) = &self.repulsion;
        let pairs = integrals.coulomb_exchange(&densities);
        let blocks = occupied.len();
        let one_kind = |rotation: Rotation| {
            let of_set = |set: &[CoulombExchangePair]| {
                let matrices: Vec<DMatrix<f64>> = match rotation {
                    Rotation::Singlet => vec![&set[0].coulomb * 2.0 - &set[0].exchange],
                    Rotation::Triplet => vec![-&set[0].exchange],
                    Rotation::Unrestricted => {
                        let mut coulomb = set[0].coulomb.clone();
                        for other in &set[1..] {
                            coulomb += &other.coulomb;
                        }
                        set.iter().map(|pair| &coulomb - &pair.exchange).collect()
                    }
                };
                matrices
                    .iter()
                    .zip(occupied)
                    .zip(&orbitals)
                    .map(|((g, y), c)| tangent_part(y, &(root * (g * c))))
                    .collect()
            };
            pairs.chunks(blocks).map(of_set).collect()
        };
        rotations.iter().map(|&r| one_kind(r)).collect()
    }

    /// Orbital energies and orbitals of Fock matrices.
    ///
    /// # Errors
    /// [`ScfError::Eigenproblem`].
    pub fn diagonalise(
        &self,
        focks: &[DMatrix<f64>],
    ) -> Result<Vec<super::orthogonal::Orbitals>, ScfError> {
        focks.iter().map(|f| self.frame.eigen(f)).collect()
    }
}

/// G per spin block of spin densities: J(Pα + Pβ) − K(Pσ), or 2 J(P) − K(P) for a single block.
fn contract(integrals: &dyn CoulombExchange, densities: &[DMatrix<f64>]) -> Vec<DMatrix<f64>> {
    let pairs = integrals.coulomb_exchange(densities);
    match pairs.as_slice() {
        [both] => vec![&both.coulomb * 2.0 - &both.exchange],
        several => {
            let mut coulomb = several[0].coulomb.clone();
            for other in &several[1..] {
                coulomb += &other.coulomb;
            }
            several
                .iter()
                .map(|pair| &coulomb - &pair.exchange)
                .collect()
        }
    }
}
