//! Twenty beginnings for one unrestricted calculation: systematic ones and ones drawn from a fixed sequence.

use nalgebra::{DMatrix, Matrix3};
use thalweg::basis::Shell;
use thalweg::molecule::Molecule;
use thalweg::scf::grassmann::{exponential, orthonormalised};
use thalweg::scf::seed::{Seed, SeedState};
use thalweg::scf::{FirstDensity, Method, ScfSettings};
use thalweg::spec::Spec;
use thalweg::surface::{
    HartreeFock, PointOutcome, PointRequest, SeedPoint, StabilityDemand, Start, Surface, Workspace,
};

/// Starts at every point.
pub(crate) const STARTS: usize = 20;
/// Of these, patterns of free atoms.
const PATTERNS: usize = 8;
/// Rotation along an eigenvector of the orbital Hessian, radian: nearly the exchange of two orbitals.
const MIXING: f64 = 1.2;
/// Charges a free atom of a pattern may have.
const ATOM_CHARGES: [i32; 3] = [0, 1, -1];

/// Numbers between −1 and 1, the same on every machine (G. Marsaglia, J. Stat. Softw. 8, 14 (2003)).
pub(crate) struct Draw(u64);

impl Draw {
    pub(crate) fn new(seed: u64) -> Self {
        Self(seed.wrapping_mul(0x9E37_79B9_7F4A_7C15) | 1)
    }

    fn next(&mut self) -> f64 {
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 7;
        self.0 ^= self.0 << 17;
        (self.0 >> 11) as f64 / (1u64 << 52) as f64 - 1.0
    }

    fn matrix(&mut self, rows: usize, columns: usize) -> DMatrix<f64> {
        DMatrix::from_fn(rows, columns, |_, _| self.next())
    }

    /// A rotation of space.
    fn turn(&mut self) -> Matrix3<f64> {
        Matrix3::from_fn(|_, _| self.next()).qr().q()
    }
}

/// Everything that starts at the points of one level need.
pub(crate) struct Starts {
    spec: Spec,
    molecule: Molecule,
    shells: Vec<Vec<Shell>>,
    atoms: HartreeFock,
    core: HartreeFock,
    workspace: Workspace,
    patterns: Vec<Vec<(DMatrix<f64>, DMatrix<f64>)>>,
}

impl Starts {
    /// The first level of a spec; it must be unrestricted.
    pub(crate) fn new(spec: &Spec) -> Self {
        let level = &spec.levels[0];
        assert_eq!(level.method, Method::Uhf);
        let molecule = level.molecule(&spec.molecule);
        let surface = |first_density| {
            let settings = ScfSettings {
                first_density,
                // Wild starts and soft modes take longer than a walk.
                iterations: 400,
                ..ScfSettings::default()
            };
            let shells = level.shells_of_atom.clone();
            HartreeFock::new(&molecule, shells, Method::Uhf, settings).unwrap()
        };
        let atoms = surface(FirstDensity::Atoms);
        let core = surface(FirstDensity::CoreHamiltonian);
        let workspace = atoms.workspace();
        let shells = level.shells_of_atom.clone();
        let patterns = patterns(&molecule, &shells);
        assert!(!patterns.is_empty());
        Self {
            spec: spec.clone(),
            molecule,
            shells,
            atoms,
            core,
            workspace,
            patterns,
        }
    }

    fn solve(
        &mut self,
        at: f64,
        start: Start<'_, Seed>,
        core: bool,
        stability: StabilityDemand,
    ) -> PointOutcome<Seed> {
        let positions = self.spec.positions_at(&[at]).unwrap();
        let request = PointRequest {
            positions: &positions,
            coordinates: &[at],
            start,
            gradient: false,
            stability,
            follow: None,
        };
        let surface = if core { &self.core } else { &self.atoms };
        surface.evaluate(&request, &mut self.workspace).unwrap()
    }

    /// Energies of the solutions found from all starts, each left downhill until it is stable; those that do not
    /// converge give none.
    pub(crate) fn energies(&mut self, at: f64, ends: [f64; 2]) -> Vec<Option<f64>> {
        let mut draw = Draw::new(at.to_bits());
        let leave = StabilityDemand::Leave;
        let report = StabilityDemand::Report;
        let mut found = Vec::with_capacity(STARTS);
        // Atoms and core Hamiltonian.
        let fresh = self.solve(at, Start::Fresh, false, leave);
        found.push(fresh.record.energy);
        found.push(self.solve(at, Start::Fresh, true, leave).record.energy);
        // The solutions of both ends of the sweep, carried here.
        let carried: Vec<Seed> = ends
            .into_iter()
            .filter_map(|end| self.solve(end, Start::Fresh, false, leave).seed)
            .collect();
        let mut seeds: Vec<Seed> = carried;
        // Free atoms with spins up and down, their open shells turned at random.
        for k in 0..PATTERNS {
            let pattern = &self.patterns[k % self.patterns.len()];
            seeds.push(assembled(pattern, &self.shells, &mut draw));
        }
        if let Some(base) = fresh.seed {
            // Exchanges along the softest directions of the solution.
            let place = SeedPoint {
                coordinates: &[at],
                seed: &base,
            };
            let tested = self.solve(at, Start::Previous(place), false, report).seed;
            let base = tested.unwrap_or(base);
            let state = base.state();
            if let Some(vectors) = &state.internal {
                for tangent in vectors.tangents.iter().take(4) {
                    let turned = vectors.occupied.iter().zip(tangent);
                    let occupied = turned
                        .map(|(y, gamma)| exponential(y, &(gamma * MIXING)).unwrap())
                        .collect();
                    seeds.push(bare(occupied, state.kept));
                }
            }
            // Orbitals of the solution, shaken.
            for size in [0.2, 0.5] {
                let occupied = state
                    .occupied
                    .iter()
                    .map(|y| orthonormalised(&(y + draw.matrix(y.nrows(), y.ncols()) * size)))
                    .collect::<Result<_, _>>()
                    .unwrap();
                seeds.push(bare(occupied, state.kept));
            }
        }
        // The rest are orbitals drawn at random.
        let (alpha, beta) = self.molecule.electrons().unwrap();
        let functions = self.atoms.functions();
        while found.len() + seeds.len() < STARTS {
            let occupied = [alpha, beta]
                .iter()
                .map(|&n| orthonormalised(&draw.matrix(functions, n)))
                .collect::<Result<_, _>>()
                .unwrap();
            seeds.push(bare(occupied, functions));
        }
        for seed in &seeds {
            let place = SeedPoint {
                coordinates: &[at],
                seed,
            };
            let solution = self.solve(at, Start::Previous(place), false, leave);
            found.push(solution.record.energy);
        }
        found
    }
}

/// A seed of orbitals alone.
fn bare(occupied: Vec<DMatrix<f64>>, kept: usize) -> Seed {
    Seed::new(SeedState {
        occupied,
        kept,
        differences: Vec::new(),
        internal: None,
        triplet: None,
        lowest_eigenvalue: None,
    })
}

/// α and β orbitals of one atom in its own orthonormal frame, in one state of charge and spin.
type AtomState = (DMatrix<f64>, DMatrix<f64>);

/// Ways to make the molecule's spins up and down of free atoms, neutral ones first, lowest sums of energies first.
fn patterns(molecule: &Molecule, shells: &[Vec<Shell>]) -> Vec<Vec<AtomState>> {
    let wanted = molecule.electrons().unwrap();
    let mut partial: Vec<(i32, f64, Vec<AtomState>)> = vec![(0, 0.0, Vec::new())];
    for (i, own) in shells.iter().enumerate() {
        let states = atom_states(molecule, i, own);
        partial = partial
            .iter()
            .flat_map(|(ions, energy, chosen)| {
                states.iter().map(move |(charge, e, state)| {
                    let chosen = [chosen.as_slice(), std::slice::from_ref(state)].concat();
                    (ions + charge.abs(), energy + e, chosen)
                })
            })
            .filter(|(ions, ..)| *ions <= 2)
            .collect();
    }
    partial.retain(|(_, _, chosen)| {
        let count = |f: fn(&AtomState) -> usize| chosen.iter().map(f).sum::<usize>();
        (count(|s| s.0.ncols()), count(|s| s.1.ncols())) == wanted
    });
    partial.sort_by(|a, b| a.0.cmp(&b.0).then(a.1.total_cmp(&b.1)));
    let neutral = partial.iter().filter(|p| p.0 == 0).take(PATTERNS - 2);
    let ionic = partial.iter().filter(|p| p.0 != 0).take(2);
    neutral.chain(ionic).map(|p| p.2.clone()).collect()
}

/// States of one atom: charge, energy, orbitals; open shells with the unpaired electrons up and down.
fn atom_states(molecule: &Molecule, atom: usize, shells: &[Shell]) -> Vec<(i32, f64, AtomState)> {
    let nuclear = i32::from(molecule.atoms[atom].element.atomic_number());
    let diatomic = molecule.atoms.len() == 2;
    let charges = if diatomic { &ATOM_CHARGES[..] } else { &[0] };
    let mut states = Vec::new();
    for &charge in charges {
        if nuclear == charge {
            // A bare nucleus.
            let none = DMatrix::zeros(shells.iter().map(Shell::functions).sum(), 0);
            states.push((charge, 0.0, (none.clone(), none)));
            continue;
        }
        for multiplicity in 1..=4_u32 {
            let alone = Molecule {
                atoms: vec![molecule.atoms[atom].clone()],
                positions: vec![nalgebra::Vector3::zeros()],
                charge,
                multiplicity,
            };
            let settings = ScfSettings::default();
            let shells = vec![shells.to_vec()];
            let Ok(surface) = HartreeFock::new(&alone, shells, Method::Uhf, settings) else {
                continue;
            };
            let outcome = super::evaluate(&surface, &alone.positions, StabilityDemand::Leave);
            let (Some(energy), Some(seed)) = (outcome.record.energy, outcome.seed) else {
                continue;
            };
            let [up, down] = &seed.state().occupied[..] else {
                continue;
            };
            states.push((charge, energy, (up.clone(), down.clone())));
            if multiplicity > 1 {
                states.push((charge, energy, (down.clone(), up.clone())));
            }
        }
    }
    states
}

/// Orbitals of a molecule whose atoms do not feel each other. The frame of a molecule has a function for each basis
/// function, so that orbitals of atoms stay orthonormal side by side.
fn assembled(pattern: &[AtomState], shells: &[Vec<Shell>], draw: &mut Draw) -> Seed {
    let functions: usize = pattern.iter().map(|s| s.0.nrows()).sum();
    let mut blocks: Vec<DMatrix<f64>> = [0, 1]
        .iter()
        .map(|&spin| {
            let columns = |s: &AtomState| if spin == 0 { s.0.ncols() } else { s.1.ncols() };
            DMatrix::zeros(functions, pattern.iter().map(columns).sum())
        })
        .collect();
    let mut row = 0;
    let mut column = [0, 0];
    for ((up, down), own) in pattern.iter().zip(shells) {
        let turn = turned(own, &draw.turn());
        for (spin, y) in [up, down].into_iter().enumerate() {
            blocks[spin]
                .view_mut((row, column[spin]), y.shape())
                .copy_from(&(&turn * y));
            column[spin] += y.ncols();
        }
        row += up.nrows();
    }
    bare(blocks, functions)
}

/// A rotation of the p functions of an atom, the same for every p shell.
fn turned(shells: &[Shell], turn: &Matrix3<f64>) -> DMatrix<f64> {
    let functions: usize = shells.iter().map(Shell::functions).sum();
    let mut matrix = DMatrix::identity(functions, functions);
    let mut first = 0;
    for shell in shells {
        for contraction in &shell.contractions {
            if contraction.l == 1 {
                matrix.fixed_view_mut::<3, 3>(first, first).copy_from(turn);
            }
            first += contraction.functions(shell.kind);
        }
    }
    matrix
}
