//! One step of an optimisation in redundant internal coordinates, and what it teaches about the Hessian.

use super::MinimiseError;
use super::coordinates::Frame;
use nalgebra::{DMatrix, DVector, SymmetricEigen};

/// How the length of a step is bounded.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Trust {
    /// Largest change of any one coordinate, bohr or radian.
    pub largest: f64,
}

/// A step that has been worked out.
#[derive(Debug, Clone)]
pub struct Step {
    /// Changes of the coordinates, length m, bohr and radian.
    pub change: DVector<f64>,
    /// Change of the energy that the quadratic model predicts, hartree; not positive.
    pub predicted: f64,
    /// Largest displacement of a position to first order, bohr.
    pub displacement: f64,
    /// Whether the bound on its length shortened it.
    pub bounded: bool,
    /// Lowest eigenvalue of the model Hessian in the free coordinates.
    pub lowest: f64,
}

/// Orthonormal basis (m × n) of the changes that leave the coordinates at the places `held` alone.
pub fn free_basis(frame: &Frame, held: &[usize]) -> Result<DMatrix<f64>, MinimiseError> {
    if held.is_empty() {
        return Ok(frame.basis.clone());
    }
    let independent = frame.basis.ncols();
    let mut rows = DMatrix::zeros(held.len(), independent);
    for (k, &place) in held.iter().enumerate() {
        rows.set_row(k, &frame.basis.row(place));
    }
    let eigen = SymmetricEigen::try_new(rows.transpose() * &rows, f64::EPSILON, 1000)
        .ok_or(MinimiseError::Eigenproblem { order: independent })?;
    // A held coordinate takes away one direction, unless another one holds that direction already.
    const HELD: f64 = 1e-8;
    let free: Vec<DVector<f64>> = (0..independent)
        .filter(|&i| eigen.eigenvalues[i] < HELD)
        .map(|i| eigen.eigenvectors.column(i).into_owned())
        .collect();
    if free.is_empty() {
        return Ok(DMatrix::zeros(frame.basis.nrows(), 0));
    }
    Ok(&frame.basis * DMatrix::from_columns(&free))
}

/// The restricted rational-function step (A. Banerjee, N. Adams, J. Simons, R. Shepard, J. Phys. Chem. 89, 52 (1985)):
/// −Σ vᵢ gᵢ/(hᵢ − λ) over eigenpairs hᵢ, vᵢ of the Hessian, with λ lowered until no coordinate
/// changes by more than the trust allows. `gradient` has length 3N, `hessian` is m × m.
///
/// λ is the lowest root of λ = Σ gᵢ²/(λ − hᵢ) only where the Hessian has an eigenvalue that is not positive; otherwise the
/// step begins as the quasi-Newton step, λ = 0, because the root grows with the number of atoms and would
/// shorten the steps of large molecules.
pub fn step(
    frame: &Frame,
    free: &DMatrix<f64>,
    hessian: &DMatrix<f64>,
    gradient: &DVector<f64>,
    trust: Trust,
) -> Result<Step, MinimiseError> {
    let order = free.ncols();
    if order == 0 {
        return Ok(Step {
            change: DVector::zeros(free.nrows()),
            predicted: 0.0,
            displacement: 0.0,
            bounded: false,
            lowest: 0.0,
        });
    }
    let slopes = free.transpose() * (frame.inverse.transpose() * gradient);
    let curvature = free.transpose() * hessian * free;
    let eigen = SymmetricEigen::try_new(curvature, f64::EPSILON, 1000)
        .ok_or(MinimiseError::Eigenproblem { order })?;
    let along = eigen.eigenvectors.transpose() * &slopes;
    let lowest = eigen.eigenvalues.min();
    let at = |shift: f64| -> DVector<f64> {
        let parts = DVector::from_iterator(
            order,
            (0..order).map(|i| {
                // A direction without slope stays without a step, whatever its curvature.
                if along[i].abs() < 1e-14 {
                    0.0
                } else {
                    -along[i] / (eigen.eigenvalues[i] - shift)
                }
            }),
        );
        free * (&eigen.eigenvectors * parts)
    };
    // Below this curvature a quasi-Newton step is meaningless.
    const POSITIVE: f64 = 1e-4;
    let mut shift = if lowest > POSITIVE {
        0.0
    } else {
        rational_root(&eigen.eigenvalues, &along).min(lowest - POSITIVE)
    };
    let mut change = at(shift);
    // Positions may move twice as far as coordinates: a poorly conditioned set must not fling atoms about.
    let size = |change: &DVector<f64>| change.amax().max(0.5 * (&frame.inverse * change).amax());
    let bounded = size(&change) > trust.largest;
    if bounded {
        // The largest change falls as the shift is lowered: bracket, then halve.
        let (mut high, mut low) = (shift, shift - 0.1);
        while size(&at(low)) > trust.largest && low > -1e6 {
            high = low;
            low = shift + 4.0 * (low - shift);
        }
        for _ in 0..60 {
            let middle = 0.5 * (low + high);
            if size(&at(middle)) > trust.largest {
                high = middle;
            } else {
                low = middle;
            }
        }
        shift = low;
        change = at(shift);
    }
    let slope = (frame.inverse.transpose() * gradient).dot(&change);
    let predicted = slope + 0.5 * change.dot(&(hessian * &change));
    let displacement = (&frame.inverse * &change).amax();
    Ok(Step {
        change,
        predicted,
        displacement,
        bounded,
        lowest,
    })
}

/// Lowest root of λ = Σ gᵢ²/(λ − hᵢ), which lies below the lowest eigenvalue and below zero.
fn rational_root(eigenvalues: &DVector<f64>, slopes: &DVector<f64>) -> f64 {
    let off = |root: f64| -> f64 {
        let sum: f64 = eigenvalues
            .iter()
            .zip(slopes.iter())
            .map(|(h, g)| g * g / (root - h))
            .sum();
        root - sum
    };
    let mut high = eigenvalues.min().min(0.0) - 1e-12;
    let mut low = high - 1.0;
    while off(low) > 0.0 && low > -1e6 {
        low *= 2.0;
    }
    for _ in 0..100 {
        let middle = 0.5 * (low + high);
        if off(middle) > 0.0 {
            high = middle;
        } else {
            low = middle;
        }
    }
    low
}

/// Improves a Hessian (m × m) by what a step showed: `change` of the coordinates and `bend`, change of the gradient in
/// these coordinates. Broyden–Fletcher–Goldfarb–Shanno (for example R. Fletcher, *Practical Methods of
/// Optimization*, Wiley, 1987, §3.2), damped where the curvature found is not positive
/// (M. J. D. Powell, Lect. Notes Math. 630, 144 (1978)).
pub fn update(hessian: &mut DMatrix<f64>, change: &DVector<f64>, bend: &DVector<f64>) {
    let image = &*hessian * change;
    let model = change.dot(&image);
    let found = change.dot(bend);
    if !(model > 1e-14 && found.is_finite()) {
        return;
    }
    let least = 0.2;
    let mixed = if found >= least * model {
        bend.clone()
    } else {
        let share = (1.0 - least) * model / (model - found);
        bend * share + &image * (1.0 - share)
    };
    let found = change.dot(&mixed);
    *hessian += &mixed * mixed.transpose() / found - &image * image.transpose() / model;
    let symmetric = (&*hessian + hessian.transpose()) * 0.5;
    *hessian = symmetric;
}
