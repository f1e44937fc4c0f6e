//! Hessians by central differences of gradients, with the derivatives of the dipole moment.

use super::MinimiseError;
use crate::molecule::Molecule;
use crate::surface::{PointRequest, SeedPoint, StabilityDemand, Start, Surface};
use nalgebra::DMatrix;
use rayon::prelude::*;

/// How gradients are differentiated.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct HessianSettings {
    /// Displacement of each position, bohr. The default, 0.005, balances the truncation (the quartic force
    /// constants, about 1 hartree/bohr⁴, times its square) against the noise of gradients (10⁻⁷ hartree/bohr over it):
    /// both stay near 10⁻⁵ hartree/bohr², 0.05 cm⁻¹ of a stretch.
    pub displacement: f64,
    /// Memory that the workspaces of all threads may take together, bytes.
    pub memory_bytes: u64,
}

impl Default for HessianSettings {
    fn default() -> Self {
        Self {
            displacement: 0.005,
            memory_bytes: 4 << 30,
        }
    }
}

/// Second derivatives of the energy and first derivatives of the dipole moment by the positions.
#[derive(Debug, Clone, PartialEq)]
pub struct CartesianHessian {
    /// 3N × 3N in hartree/bohr², symmetric; x, y, z of the first atom, then of the next.
    pub matrix: DMatrix<f64>,
    /// 3 × 3N in e: the dipole moment about a point fixed in space by the positions.
    pub dipole_derivatives: DMatrix<f64>,
    /// Largest |Hᵢⱼ − Hⱼᵢ| before the mean of both was taken, hartree/bohr²: how well the gradients were differentiated.
    pub asymmetry: f64,
    /// Gradient calls.
    pub gradient_calls: usize,
    /// Fock builds of all of them.
    pub fock_builds: usize,
}

/// A column of derivatives by one position.
struct Column {
    gradient: Vec<f64>,
    dipole: [f64; 3],
    fock_builds: usize,
}

/// Hessian and dipole derivatives at the positions of `molecule`, each calculation started from `seed`.
///
/// The 6N calculations run on the threads of the current pool where the memory allows, each by itself from the same
/// seed, so that the result does not depend on their order.
///
/// # Errors
/// A calculation that does not converge or gives no gradient, and what [`Surface::evaluate`] objects to.
pub fn hessian<S: Surface>(
    surface: &S,
    molecule: &Molecule,
    coordinates: &[f64],
    seed: Option<&S::Seed>,
    settings: &HessianSettings,
    workspace: &S::Workspace,
) -> Result<CartesianHessian, MinimiseError> {
    let size = 3 * molecule.atoms.len();
    let place = |workspace: &mut S::Workspace, index: usize| {
        column(
            surface,
            molecule,
            coordinates,
            seed,
            settings.displacement,
            workspace,
            index,
        )
    };
    let threads = rayon::current_num_threads() as u64;
    let fits = surface.workspace_bytes().saturating_mul(threads) <= settings.memory_bytes;
    let columns: Vec<Result<Column, MinimiseError>> = if fits {
        (0..size)
            .into_par_iter()
            .with_max_len(1)
            .map_with(workspace.clone(), place)
            .collect()
    } else {
        let mut own = workspace.clone();
        (0..size).map(|index| place(&mut own, index)).collect()
    };
    let mut matrix = DMatrix::zeros(size, size);
    let mut dipole_derivatives = DMatrix::zeros(3, size);
    let mut fock_builds = 0;
    for (index, column) in columns.into_iter().enumerate() {
        let column = column?;
        for row in 0..size {
            matrix[(row, index)] = column.gradient[row];
        }
        for axis in 0..3 {
            dipole_derivatives[(axis, index)] = column.dipole[axis];
        }
        fock_builds += column.fock_builds;
    }
    // The moment is recorded about the centre of nuclear charge, which moves with the nuclei of an ion.
    let nuclear = molecule.nuclear_charge() as f64;
    if molecule.charge != 0 && nuclear > 0.0 {
        for (atom, kind) in molecule.atoms.iter().enumerate() {
            for axis in 0..3 {
                dipole_derivatives[(axis, 3 * atom + axis)] +=
                    f64::from(molecule.charge) * kind.charge() / nuclear;
            }
        }
    }
    let asymmetry = (&matrix - matrix.transpose()).amax();
    let matrix = (&matrix + matrix.transpose()) * 0.5;
    Ok(CartesianHessian {
        matrix,
        dipole_derivatives,
        asymmetry,
        gradient_calls: 2 * size,
        fock_builds,
    })
}

fn column<S: Surface>(
    surface: &S,
    molecule: &Molecule,
    coordinates: &[f64],
    seed: Option<&S::Seed>,
    displacement: f64,
    workspace: &mut S::Workspace,
    index: usize,
) -> Result<Column, MinimiseError> {
    let (atom, axis) = (index / 3, index % 3);
    // Along the displacement it is one more coordinate, in which the second point is extrapolated from the first.
    let place = |shift: f64| -> Vec<f64> { coordinates.iter().copied().chain([shift]).collect() };
    let (centre, first) = (place(0.0), place(displacement));
    let mut known: Vec<(&[f64], S::Seed)> = seed
        .map(|s| (centre.as_slice(), s.clone()))
        .into_iter()
        .collect();
    let mut fock_builds = 0;
    let mut at = |sign: f64| -> Result<(Vec<f64>, [f64; 3]), MinimiseError> {
        let mut positions = molecule.positions.clone();
        positions[atom][axis] += sign * displacement;
        let points: Vec<SeedPoint<'_, S::Seed>> = known
            .iter()
            .map(|(coordinates, seed)| SeedPoint { coordinates, seed })
            .collect();
        let request = PointRequest {
            positions: &positions,
            coordinates: &place(sign * displacement),
            start: if points.is_empty() {
                Start::Fresh
            } else {
                Start::Extrapolated(points)
            },
            gradient: true,
            stability: StabilityDemand::None,
            follow: None,
        };
        let outcome = surface.evaluate(&request, workspace)?;
        let record = outcome.record;
        if let Some(seed) = outcome.seed {
            // The centre is the nearest of both.
            known.insert(0, (&first, seed));
        }
        fock_builds += record.all_builds;
        if record.energy.is_none() {
            return Err(MinimiseError::NotConverged { atom });
        }
        let gradient = record.gradient.ok_or(MinimiseError::NoGradient)?;
        let flat: Vec<f64> = gradient.into_iter().flatten().collect();
        if flat.len() != 3 * positions.len() {
            return Err(MinimiseError::Counts {
                expected: 3 * positions.len(),
                given: flat.len(),
            });
        }
        Ok((flat, record.dipole))
    };
    let (above, dipole_above) = at(1.0)?;
    let (below, dipole_below) = at(-1.0)?;
    let width = 2.0 * displacement;
    Ok(Column {
        gradient: above
            .iter()
            .zip(&below)
            .map(|(a, b)| (a - b) / width)
            .collect(),
        dipole: std::array::from_fn(|k| (dipole_above[k] - dipole_below[k]) / width),
        fock_builds,
    })
}
