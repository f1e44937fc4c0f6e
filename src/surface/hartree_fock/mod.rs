//! Hartree–Fock as a potential-energy surface.

mod apart;
mod record;

use super::{
    IntegralCounts, PointOutcome, PointRequest, SeedPoint, StabilityDemand, StabilityRecord, Start,
    Surface, SurfaceError,
};
use crate::basis::{Basis, Shell};
use crate::integrals::repulsion::{DirectRepulsion, RepulsionList, RepulsionSettings};
use crate::integrals::{self, OneElectronIntegrals};
use crate::molecule::connectivity::Connectivity;
use crate::molecule::{ElectronCountError, Molecule, nuclear};
use crate::scf::canonical::Canonical;
use crate::scf::diis::Difference;
use crate::scf::fock::{Evaluation, Field, Occupation, Repulsion, Rotation};
use crate::scf::iteration::{self, Beginning, Plan, Solution, Thresholds};
use crate::scf::orthogonal::Orthogonal;
use crate::scf::seed::{self, Seed, SeedState};
use crate::scf::stability::{self, CarriedVectors, Eigenpairs, Precision};
use crate::scf::{FirstDensity, Method, ScfError, ScfSettings, guess};
use nalgebra::{DMatrix, Vector3};
use std::sync::Arc;
use std::time::Instant;

/// Nuclei nearer than this (bohr) count as being on one spot.
const COINCIDENT: f64 = 1e-4;
/// Calculations allowed for the way down from one saddle point, each with as many builds as the settings say.
const DESCENTS: usize = 3;
/// How often unstable solutions are left at one geometry.
const LEAVES: usize = 5;

/// RHF or UHF for one molecule, charge and multiplicity in one basis.
#[derive(Debug)]
pub struct HartreeFock {
    molecule: Molecule,
    shells_of_atom: Vec<Vec<Shell>>,
    occupation: Occupation,
    settings: ScfSettings,
    /// One-spin densities of the free atoms, where calculations begin from them. They are computed at once: a point
    /// that waited for them inside the thread pool could wait for itself.
    atoms: Vec<DMatrix<f64>>,
}

/// Integrals kept from one point to the next.
#[derive(Debug, Clone, Default)]
pub struct Workspace {
    one_electron: Option<OneElectronIntegrals>,
    list: Option<(Vec<Shell>, RepulsionList)>,
}

impl Workspace {
    /// The one-electron integrals of a basis in the field of charges, those of what stayed in place taken over.
    fn one_electron_of(
        &mut self,
        basis: &Basis,
        charges: &[(f64, Vector3<f64>)],
    ) -> &OneElectronIntegrals {
        match self.one_electron.take() {
            Some(mut kept) => {
                kept.update(basis, charges);
                self.one_electron.insert(kept)
            }
            None => self
                .one_electron
                .insert(OneElectronIntegrals::compute(basis, charges)),
        }
    }

    /// The repulsion integrals of a basis, those of atoms that stayed in place taken over.
    fn list_of(&mut self, basis: &Basis) -> &RepulsionList {
        // A list of other shells (the workspace of another surface) is of no use.
        let kept = self
            .list
            .take()
            .filter(|(shells, _)| shells == basis.shells());
        let (_, list) = match kept {
            Some((shells, mut list)) => {
                list.update(basis);
                self.list.insert((shells, list))
            }
            None => self.list.insert((
                basis.shells().to_vec(),
                RepulsionList::compute(basis, &RepulsionSettings::default()),
            )),
        };
        list
    }
}

impl From<ScfError> for SurfaceError {
    fn from(error: ScfError) -> Self {
        match error {
            ScfError::Eigenproblem { order } => Self::Eigenproblem { order },
        }
    }
}

/// One-electron integrals and frame of a geometry.
struct Geometry {
    molecule: Molecule,
    basis: Basis,
    overlap: DMatrix<f64>,
    kinetic: DMatrix<f64>,
    core: DMatrix<f64>,
    frame: Orthogonal,
    nuclear: f64,
}

/// A solution with what stability tests said of it.
struct Settled {
    solution: Solution,
    fock_builds: usize,
    stability: Option<StabilityRecord>,
    internal: Option<CarriedVectors>,
    triplet: Option<CarriedVectors>,
    stability_seconds: f64,
}

impl HartreeFock {
    /// A surface for the charge and multiplicity of `molecule`; `shells_of_atom` holds the shells of each of its atoms.
    ///
    /// # Errors
    /// [`SurfaceError::Electrons`] when charge and multiplicity do not fit, [`SurfaceError::OpenShell`] for RHF with unpaired
    /// electrons, [`SurfaceError::TooFewFunctions`] when the basis cannot hold the electrons, [`SurfaceError::Eigenproblem`].
    pub fn new(
        molecule: &Molecule,
        shells_of_atom: Vec<Vec<Shell>>,
        method: Method,
        settings: ScfSettings,
    ) -> Result<Self, SurfaceError> {
        let (alpha, beta) = molecule.electrons()?;
        if method == Method::Rhf && alpha != beta {
            return Err(SurfaceError::OpenShell {
                multiplicity: molecule.multiplicity,
            });
        }
        let functions: usize = shells_of_atom.iter().flatten().map(Shell::functions).sum();
        if functions < alpha {
            return Err(SurfaceError::TooFewFunctions {
                functions,
                occupied: alpha,
            });
        }
        let atoms = guess::atomic_densities(molecule, &shells_of_atom, settings.dependence)?;
        Ok(Self {
            molecule: molecule.clone(),
            shells_of_atom,
            occupation: Occupation {
                method,
                alpha,
                beta,
            },
            settings,
            atoms,
        })
    }

    /// Number of basis functions.
    #[must_use]
    pub fn functions(&self) -> usize {
        self.shells_of_atom
            .iter()
            .flatten()
            .map(Shell::functions)
            .sum()
    }

    /// Whether the integrals are too many to be kept.
    fn is_direct(&self) -> bool {
        RepulsionList::bytes_needed(self.functions()) > self.settings.memory_mib << 20
    }

    fn check_positions(&self, positions: &[Vector3<f64>]) -> Result<(), SurfaceError> {
        for (i, a) in positions.iter().enumerate() {
            if a.iter().any(|x| !x.is_finite()) {
                return Err(SurfaceError::Coincident {
                    first: i,
                    second: i,
                    distance_bohr: f64::NAN,
                });
            }
            for (j, b) in positions[..i].iter().enumerate() {
                let distance = (a - b).norm();
                let ghost = self.molecule.atoms[i].ghost || self.molecule.atoms[j].ghost;
                if distance < COINCIDENT && !ghost {
                    return Err(SurfaceError::Coincident {
                        first: j,
                        second: i,
                        distance_bohr: distance,
                    });
                }
            }
        }
        Ok(())
    }

    fn geometry(
        &self,
        positions: &[Vector3<f64>],
        keep: Option<usize>,
        workspace: &mut Workspace,
    ) -> Result<Geometry, SurfaceError> {
        let molecule = self.molecule.at(positions);
        let basis = Basis::of_molecule(&self.shells_of_atom, &molecule);
        let charges: Vec<_> = molecule
            .atoms
            .iter()
            .zip(&molecule.positions)
            .map(|(atom, position)| (atom.charge(), *position))
            .collect();
        let integrals = workspace.one_electron_of(&basis, &charges);
        let frame = Orthogonal::new(integrals.overlap(), self.settings.dependence, keep)?;
        if frame.kept() < self.occupation.alpha {
            return Err(SurfaceError::TooFewFunctions {
                functions: frame.kept(),
                occupied: self.occupation.alpha,
            });
        }
        Ok(Geometry {
            nuclear: nuclear::repulsion_energy(&molecule),
            molecule,
            overlap: integrals.overlap().clone(),
            kinetic: integrals.kinetic().clone(),
            core: integrals.core(),
            basis,
            frame,
        })
    }

    /// What a calculation without a seed starts from.
    fn fresh(&self, first_density: FirstDensity, functions: usize) -> Beginning {
        match first_density {
            FirstDensity::CoreHamiltonian => Beginning::Core,
            FirstDensity::Atoms => {
                let density = guess::superposed(&self.atoms, functions);
                Beginning::Densities(vec![density; self.occupation.blocks().len()])
            }
        }
    }

    /// Whether a seed belongs to a calculation like this one.
    fn fits(&self, seed: &Seed, functions: usize) -> bool {
        let blocks = self.occupation.blocks();
        let occupied = &seed.state().occupied;
        occupied.len() == blocks.len()
            && occupied
                .iter()
                .zip(blocks)
                .all(|(y, count)| y.shape() == (functions, count))
    }

    /// What the iteration starts from, with differences to carry over.
    fn beginning(
        &self,
        request: &PointRequest<'_, Seed>,
        geometry: &Geometry,
    ) -> Result<(Beginning, Vec<Arc<Difference>>), SurfaceError> {
        let functions = geometry.basis.len();
        let points = start_points(&request.start);
        let usable: Vec<(&[f64], &Seed)> = points
            .iter()
            .filter(|p| self.fits(p.seed, functions))
            .map(|p| (p.coordinates, p.seed))
            .collect();
        let single = matches!(request.start, Start::Previous(_));
        let prediction = match usable.last() {
            None => None,
            Some(&last) if single || last.0.len() != request.coordinates.len() => {
                seed::predict(&[last], last.0)?
            }
            Some(_) => seed::predict(&usable, request.coordinates)?,
        };
        let Some(prediction) = prediction else {
            let first_density = match request.start {
                Start::Plain => FirstDensity::Atoms,
                _ => self.settings.first_density,
            };
            return Ok((self.fresh(first_density, functions), Vec::new()));
        };
        let occupied = prediction
            .occupied
            .iter()
            .map(|y| geometry.frame.nearest(y))
            .collect::<Result<_, _>>()?;
        Ok((Beginning::Occupied(occupied), prediction.differences))
    }

    /// Solves for self-consistency and, where asked, tests and leaves unstable solutions.
    fn settle(
        &self,
        request: &PointRequest<'_, Seed>,
        geometry: &Geometry,
        field: &mut Field<'_>,
    ) -> Result<Settled, SurfaceError> {
        let (beginning, carried) = self.beginning(request, geometry)?;
        let newest = start_points(&request.start).last().map(|p| p.seed.state());
        let follow = request
            .follow
            .filter(|seed| self.fits(seed, geometry.basis.len()))
            .map(|seed| seed.state().occupied.as_slice());
        let plan = Plan {
            thresholds: Thresholds::from(&self.settings),
            limit: self.settings.iterations,
            carried,
            follow,
            soft: newest.and_then(|s| s.internal.as_ref()),
            downhill: false,
        };
        let mut solution = iteration::converge(field, beginning, &plan)?;
        let mut settled = Settled {
            fock_builds: field.passes(),
            stability: None,
            // Vectors of an earlier point still tell where the energy is soft, and where the next test may begin.
            internal: newest.and_then(|s| s.internal.clone()),
            triplet: newest.and_then(|s| s.triplet.clone()),
            stability_seconds: 0.0,
            solution: solution.clone(),
        };
        if request.stability == StabilityDemand::None {
            return Ok(settled);
        }
        let mut internal = settled.internal.take();
        let mut triplet = settled.triplet.take();
        let (mut products, mut passes, mut left) = (0, 0, 0);
        let mut found: Vec<Eigenpairs> = Vec::new();
        let kinds: &[Rotation] = match self.occupation.method {
            Method::Rhf => &[Rotation::Singlet, Rotation::Triplet],
            Method::Uhf => &[Rotation::Unrestricted],
        };
        // On the way along a sweep a test has to tell the sign, and where it may change.
        let precision = match newest {
            Some(_) => Precision::Sufficient,
            None => Precision::Full,
        };
        while solution.stop.is_converged() {
            let clock = Instant::now();
            let before = (field.products(), field.product_passes());
            let orbitals = Canonical::of(field, &solution.evaluation)?;
            // Triplet eigenvectors are the lower ones: they come first where both are alike.
            let carried: Vec<&CarriedVectors> = triplet.iter().chain(&internal).collect();
            found = stability::lowest_eigenpairs(field, &orbitals, kinds, &carried, precision)?;
            settled.stability_seconds += clock.elapsed().as_secs_f64();
            products += field.products() - before.0;
            passes += field.product_passes() - before.1;
            let Some(pairs) = found.first() else {
                break;
            };
            internal = Some(CarriedVectors::of(&orbitals, pairs));
            triplet = found.get(1).map(|p| CarriedVectors::of(&orbitals, p));
            let unstable = pairs.values[0] < stability::UNSTABLE;
            let leave = unstable
                && request.stability == StabilityDemand::Leave
                && follow.is_none()
                && left < LEAVES;
            if !leave {
                break;
            }
            let energy = solution.evaluation.energy;
            let Some(lower) = stability::downhill(field, &orbitals, energy, &pairs.vectors[0])?
            else {
                break;
            };
            left += 1;
            let saddle = solution.evaluation.energy;
            let before = field.passes();
            let mut onwards = Plan {
                thresholds: plan.thresholds,
                limit: before + self.settings.iterations,
                carried: Vec::new(),
                follow: None,
                soft: internal.as_ref(),
                downhill: false,
            };
            solution = self.descend(field, &lower, saddle, &mut onwards)?;
            settled.fock_builds = field.passes() - before;
        }
        settled.stability = found.first().map(|pairs| StabilityRecord {
            internal: pairs.values[0],
            internal_next: pairs
                .values
                .iter()
                .copied()
                .find(|v| v.abs() > -stability::UNSTABLE),
            triplet: found.get(1).map(|p| p.values[0]),
            products,
            passes,
            left,
        });
        settled.internal = internal;
        settled.triplet = triplet;
        settled.solution = solution;
        Ok(settled)
    }

    /// Converges from below a saddle without climbing back onto it.
    fn descend(
        &self,
        field: &mut Field<'_>,
        lower: &Evaluation,
        saddle: f64,
        plan: &mut Plan<'_>,
    ) -> Result<Solution, ScfError> {
        let mut start = lower.occupied.clone();
        let mut below = lower.energy.min(saddle) + 1e-9;
        let mut rounds = 0;
        loop {
            plan.limit = field.passes() + self.settings.iterations;
            let beginning = Beginning::Occupied(start.clone());
            let solution = iteration::converge(field, beginning, plan)?;
            rounds += 1;
            let better = solution.evaluation.energy <= below;
            if (better && solution.stop.is_converged()) || rounds == DESCENTS {
                return Ok(solution);
            }
            plan.downhill = true;
            if better {
                below = solution.evaluation.energy + 1e-9;
                start = solution.evaluation.occupied;
            }
        }
    }
}

fn counts(counts: integrals::repulsion::IntegralCounts) -> IntegralCounts {
    IntegralCounts {
        computed: counts.computed,
        reused: counts.reused,
    }
}

/// The points of a start, nearest last.
fn start_points<'r, 's>(start: &'r Start<'s, Seed>) -> Vec<&'r SeedPoint<'s, Seed>> {
    match start {
        Start::Fresh | Start::Plain => Vec::new(),
        Start::Previous(point) => vec![point],
        Start::Extrapolated(points) => points.iter().collect(),
    }
}

impl Surface for HartreeFock {
    type Seed = Seed;
    type Workspace = Workspace;

    fn workspace(&self) -> Workspace {
        Workspace::default()
    }

    fn workspace_bytes(&self) -> u64 {
        // The budget is for repulsion integrals; beside them a few matrices do not count.
        if self.is_direct() {
            0
        } else {
            RepulsionList::bytes_needed(self.functions())
        }
    }

    fn has_plain_start(&self) -> bool {
        self.settings.first_density != FirstDensity::Atoms
    }

    fn apart(&self, positions: &[Vector3<f64>]) -> Vec<Seed> {
        let pieces = Connectivity::of(&self.molecule.at(positions)).components();
        if self.occupation.method == Method::Rhf || pieces.len() < 2 {
            return Vec::new();
        }
        self.atoms_side_by_side(positions)
    }

    fn evaluate(
        &self,
        request: &PointRequest<'_, Seed>,
        workspace: &mut Workspace,
    ) -> Result<PointOutcome<Seed>, SurfaceError> {
        let clock = Instant::now();
        self.check_positions(request.positions)?;
        let points = start_points(&request.start);
        let keep = points.last().map(|p| p.seed.state().kept);
        let geometry = self.geometry(request.positions, keep, workspace)?;
        let direct = self
            .is_direct()
            .then(|| DirectRepulsion::new(&geometry.basis, &RepulsionSettings::default()));
        let mut integrals = IntegralCounts::default();
        let repulsion = match &direct {
            Some(direct) => Repulsion::Direct(direct),
            None => {
                let list = workspace.list_of(&geometry.basis);
                integrals = counts(list.counts());
                Repulsion::Stored(list)
            }
        };
        let mut field = Field::new(
            geometry.core.clone(),
            &geometry.frame,
            repulsion,
            geometry.nuclear,
            self.occupation,
        );
        let mut settled = self.settle(request, &geometry, &mut field)?;
        let scf_seconds = clock.elapsed().as_secs_f64() - settled.stability_seconds;
        if let Some(newest) = points.last() {
            // One labelling of the spins along a chain.
            let state = newest.seed.state();
            if seed::is_swapped(&settled.solution.evaluation.occupied, &state.occupied)? {
                let solution = &mut settled.solution;
                solution.evaluation.occupied.swap(0, 1);
                solution.evaluation.focks.swap(0, 1);
                solution.evaluation.errors.swap(0, 1);
                solution.refined.swap(0, 1);
                // What else was carried belongs to the other labelling.
                solution.differences.clear();
                settled.internal = None;
            }
        }
        let mut record = record::point_record(&geometry, &field, &settled)?;
        record.integrals = direct.as_ref().map_or(integrals, |d| counts(d.counts()));
        record.scf_seconds = scf_seconds;
        record.seconds = clock.elapsed().as_secs_f64();
        if request.gradient && record.energy.is_some() {
            record.gradient = Some(record::gradient(
                &geometry,
                &field,
                &settled.solution.evaluation,
            ));
            record.seconds = clock.elapsed().as_secs_f64();
        }
        let seed = record.energy.is_some().then(|| {
            Seed::new(SeedState {
                occupied: settled.solution.refined,
                kept: geometry.frame.kept(),
                differences: settled.solution.differences,
                internal: settled.internal,
                triplet: settled.triplet,
                lowest_eigenvalue: settled.stability.map(|s| s.internal),
            })
        });
        Ok(PointOutcome { record, seed })
    }

    fn likeness(&self, one: &Seed, other: &Seed) -> [f64; 2] {
        // Overlaps of orthonormal orbitals are finite, so that their eigenvalues are found; 0 reports "unlike".
        one.likeness(other).unwrap_or([0.0, 0.0])
    }
}

impl From<ElectronCountError> for SurfaceError {
    fn from(error: ElectronCountError) -> Self {
        Self::Electrons(error)
    }
}
