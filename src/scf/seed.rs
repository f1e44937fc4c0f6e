//! What one solution leaves for its neighbours, and the occupied space extrapolated through several of them.
//!
//! Occupied orbitals are kept as C̃ = S^½ C. Carried to the next geometry they give the density
//! P' = S'^-½ S^½ P S^½ S'^-½, idempotent again. Several points are combined on the Grassmann manifold (É. Polack,
//! G. Dusson, B. Stamm, F. Lipparini, J. Chem. Theory Comput. 17, 6965 (2021)): tangents at the newest
//! point, extrapolated as a polynomial of the swept coordinates.

use super::ScfError;
use super::canonical::inner;
use super::diis::Difference;
use super::grassmann::{exponential, logarithm, smallest_cosine, tangent_part};
use super::onset;
use super::stability::CarriedVectors;
use nalgebra::{DMatrix, DVector};
use serde::{Deserialize, Serialize};
use std::sync::Arc;

/// Highest order of the polynomial.
const ORDER: usize = 5;
/// Sum of the absolute weights above which a polynomial would amplify noise too much (six equidistant points have 63).
const LARGEST_WEIGHTS: f64 = 80.0;
/// An estimated error (norm of the tangent) above which the newest point alone is safer.
const LARGEST_ERROR: f64 = 0.4;
/// Differences of earlier points that a seed holds.
const HELD: usize = 30;
/// Differences of earlier points taken over.
const CARRIED: usize = 36;
/// Eigenvalues of the orbital Hessian (hartree, absolute) below which a direction is extrapolated linearly at most.
const SOFT: f64 = 3e-3;
/// The same below which the newest point alone says where it is.
const FLAT: f64 = 1e-5;
/// ‖Pα − Pβ‖² above which a solution counts as spin-polarised.
const POLARISED: f64 = 1e-6;

/// What a solution leaves behind; cheap to clone.
#[derive(Debug, Clone, Serialize, Deserialize)]
#[serde(from = "StoredSeed", into = "StoredSeed")]
pub struct Seed(Arc<SeedState>);

/// The contents of a [`Seed`].
#[derive(Debug, Clone, PartialEq)]
pub struct SeedState {
    /// Occupied orbitals of the orthonormal frame, one matrix per spin block.
    pub occupied: Vec<DMatrix<f64>>,
    /// Independent functions kept in the frame.
    pub kept: usize,
    /// Differences of Fock matrices and errors, newest first, with what earlier points left.
    pub differences: Vec<Arc<Difference>>,
    /// Lowest eigenvectors of the internal orbital Hessian.
    pub internal: Option<CarriedVectors>,
    /// Lowest eigenvectors of the triplet orbital Hessian.
    pub triplet: Option<CarriedVectors>,
    /// Lowest eigenvalue of the internal orbital Hessian, hartree, where this very solution was tested.
    pub lowest_eigenvalue: Option<f64>,
}

impl Seed {
    /// Wraps what a solution leaves behind.
    #[must_use]
    pub fn new(mut state: SeedState) -> Self {
        state.differences.truncate(HELD);
        Self(Arc::new(state))
    }

    /// The contents.
    #[must_use]
    pub fn state(&self) -> &SeedState {
        &self.0
    }

    /// Whether α and β densities differ (never for one spin block).
    #[must_use]
    pub fn is_polarised(&self) -> bool {
        match self.0.occupied.as_slice() {
            [alpha, beta] => {
                let shared = (alpha.transpose() * beta).norm_squared();
                alpha.ncols() as f64 + beta.ncols() as f64 - 2.0 * shared > POLARISED
            }
            _ => false,
        }
    }

    /// Smallest cosines of the principal angles to another solution, α and β.
    ///
    /// # Errors
    /// [`ScfError::Eigenproblem`].
    pub fn likeness(&self, other: &Self) -> Result<[f64; 2], ScfError> {
        let (one, two) = (&self.0.occupied, &other.0.occupied);
        let alpha = block_likeness(one.first(), two.first())?;
        let beta = block_likeness(one.last(), two.last())?;
        Ok([alpha, beta])
    }
}

fn block_likeness(
    one: Option<&DMatrix<f64>>,
    other: Option<&DMatrix<f64>>,
) -> Result<f64, ScfError> {
    match (one, other) {
        (Some(a), Some(b)) if a.shape() == b.shape() => smallest_cosine(a, b),
        (None, None) => Ok(1.0),
        _ => Ok(0.0),
    }
}

/// Whether a solution fits a reference better with α and β exchanged. At one energy the two labels may come out
/// either way; an extrapolation through both would be nonsense.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn is_swapped(occupied: &[DMatrix<f64>], reference: &[DMatrix<f64>]) -> Result<bool, ScfError> {
    let ([alpha, beta], [ref_alpha, ref_beta]) = (occupied, reference) else {
        return Ok(false);
    };
    if alpha.ncols() != beta.ncols()
        || alpha.shape() != ref_alpha.shape()
        || beta.shape() != ref_beta.shape()
    {
        return Ok(false);
    }
    let straight = smallest_cosine(alpha, ref_alpha)? + smallest_cosine(beta, ref_beta)?;
    let crossed = smallest_cosine(alpha, ref_beta)? + smallest_cosine(beta, ref_alpha)?;
    Ok(crossed > straight + 1e-6)
}

/// What a calculation can start from, made from earlier points.
#[derive(Debug, Clone)]
pub struct Prediction {
    /// Occupied orbitals of the frame, one matrix per spin block.
    pub occupied: Vec<DMatrix<f64>>,
    /// Differences to carry over, the most trusted first.
    pub differences: Vec<Arc<Difference>>,
    /// Order of the polynomial that was used.
    pub order: usize,
    /// Estimated error: norm of the tangent between this order and the one below.
    pub estimate: f64,
}

/// Weights of the points for the value at `target` of the polynomial of total degree `degree` through (or, with
/// more points than terms, fitted to) them; nothing if the points do not determine it.
pub(super) fn polynomial_weights(
    points: &[&[f64]],
    target: &[f64],
    degree: usize,
) -> Option<Vec<f64>> {
    let dimensions = target.len();
    // Scaled offsets from the target keep the system well conditioned.
    let scales: Vec<f64> = (0..dimensions)
        .map(|d| {
            points
                .iter()
                .map(|p| (p[d] - target[d]).abs())
                .fold(0.0, f64::max)
        })
        .collect();
    let active: Vec<usize> = (0..dimensions).filter(|&d| scales[d] > 0.0).collect();
    let offset = |point: &[f64], d: usize| (point[d] - target[d]) / scales[d];
    if let [only] = active.as_slice() {
        if points.len() != degree + 1 {
            return None;
        }
        let x: Vec<f64> = points.iter().map(|p| offset(p, *only)).collect();
        // Lagrange weights at zero.
        return (0..x.len())
            .map(|i| {
                let mut weight = 1.0;
                for j in (0..x.len()).filter(|&j| j != i) {
                    let gap = x[j] - x[i];
                    if gap.abs() < 1e-9 {
                        return None;
                    }
                    weight *= x[j] / gap;
                }
                Some(weight)
            })
            .collect();
    }
    let mut powers: Vec<Vec<usize>> = vec![vec![]];
    for _ in &active {
        powers = powers
            .into_iter()
            .flat_map(|p| {
                let used: usize = p.iter().sum();
                (0..=degree - used).map(move |k| [p.clone(), vec![k]].concat())
            })
            .collect();
    }
    if powers.len() > points.len() {
        return None;
    }
    let table = DMatrix::from_fn(points.len(), powers.len(), |row, column| {
        active
            .iter()
            .zip(&powers[column])
            .map(|(&d, &k)| offset(points[row], d).powi(k as i32))
            .product()
    });
    // At the target only the constant term is left; w = Φ (ΦᵀΦ)⁻¹ e₀.
    let constant = powers.iter().position(|p| p.iter().all(|&k| k == 0))?;
    let normal = table.transpose() * &table;
    let mut right = DVector::zeros(powers.len());
    right[constant] = 1.0;
    let solution = normal.cholesky()?.solve(&right);
    let weights: Vec<f64> = (table * solution).iter().copied().collect();
    weights.iter().all(|w| w.is_finite()).then_some(weights)
}

/// Points (newest first) whose polynomial of the given degree is asked for: as many as it has terms in one
/// coordinate, all in more.
fn points_for(degree: usize, dimensions: usize, available: usize) -> usize {
    if dimensions == 1 {
        degree + 1
    } else {
        available
    }
}

/// Tangent at the newest point towards the target for one degree.
fn combination(
    coordinates: &[&[f64]],
    gammas: &[Vec<DMatrix<f64>>],
    target: &[f64],
    degree: usize,
    dimensions: usize,
) -> Option<Vec<DMatrix<f64>>> {
    let count = points_for(degree, dimensions, coordinates.len());
    if count > coordinates.len() {
        return None;
    }
    let weights = polynomial_weights(&coordinates[..count], target, degree)?;
    if weights.iter().map(|w| w.abs()).sum::<f64>() > LARGEST_WEIGHTS {
        return None;
    }
    let mut sum: Vec<DMatrix<f64>> = gammas[0].iter().map(|g| g * 0.0).collect();
    for (weight, gamma) in weights.iter().zip(gammas) {
        for (s, g) in sum.iter_mut().zip(gamma) {
            *s += g * *weight;
        }
    }
    Some(sum)
}

/// Orthonormal tangents at the occupied space of a point along which the energy is soft, and whether it is flat.
///
/// A gradient that counts as converged leaves the place along such a direction open, the more the smaller the
/// curvature is, and a polynomial of high order would magnify that by its weights.
fn soft_directions(state: &SeedState) -> Vec<(Vec<DMatrix<f64>>, bool)> {
    let mut directions: Vec<(Vec<DMatrix<f64>>, bool)> = Vec::new();
    let Some(vectors) = &state.internal else {
        return directions;
    };
    let fits = vectors.occupied.len() == state.occupied.len()
        && vectors
            .occupied
            .iter()
            .zip(&state.occupied)
            .all(|(a, b)| a.shape() == b.shape());
    if !fits {
        return directions;
    }
    for (value, tangents) in vectors.values.iter().zip(&vectors.tangents) {
        if value.abs() > SOFT {
            continue;
        }
        let mut direction: Vec<DMatrix<f64>> = tangents
            .iter()
            .zip(&vectors.occupied)
            .zip(&state.occupied)
            .map(|((gamma, from), y)| tangent_part(y, &(gamma * (from.transpose() * y))))
            .collect();
        for (known, _) in &directions {
            let share = inner(known, &direction);
            for (d, k) in direction.iter_mut().zip(known) {
                *d -= k * share;
            }
        }
        let size = inner(&direction, &direction).sqrt();
        if size > 0.5 {
            direction.iter_mut().for_each(|d| *d /= size);
            directions.push((direction, value.abs() < FLAT));
        }
    }
    directions
}

fn distance(a: &[DMatrix<f64>], b: &[DMatrix<f64>]) -> f64 {
    a.iter()
        .zip(b)
        .map(|(x, y)| (x - y).norm_squared())
        .sum::<f64>()
        .sqrt()
}

/// The occupied space expected at `target` from points given oldest first, nearest last.
///
/// Of the orders that the points allow the one is taken that differs least from the order below it: where the
/// solution is not smooth this falls back, in the end to the newest point alone. Returns nothing without points.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn predict(points: &[(&[f64], &Seed)], target: &[f64]) -> Result<Option<Prediction>, ScfError> {
    let Some(((newest_at, newest), older)) = points.split_last() else {
        return Ok(None);
    };
    let base = &newest.state().occupied;
    let polarised = newest.is_polarised();
    let mut coordinates: Vec<&[f64]> = vec![newest_at];
    let mut gammas: Vec<Vec<DMatrix<f64>>> = vec![base.iter().map(|y| y * 0.0).collect()];
    let mut differences = newest.state().differences.clone();
    for (at, seed) in older.iter().rev() {
        let state = seed.state();
        let fits = at.len() == target.len()
            && state.kept == newest.state().kept
            && state.occupied.len() == base.len()
            && state
                .occupied
                .iter()
                .zip(base)
                .all(|(a, b)| a.shape() == b.shape());
        // Across the onset of spin polarisation nothing is smooth.
        if !fits || seed.is_polarised() != polarised {
            break;
        }
        if coordinates.iter().any(|known| known == at) {
            continue;
        }
        let swapped = is_swapped(&state.occupied, base)?;
        let mut tangent = Vec::with_capacity(base.len());
        for (block, y) in base.iter().enumerate() {
            let from = if swapped { 1 - block } else { block };
            match logarithm(y, &state.occupied[from])? {
                Some(gamma) => tangent.push(gamma),
                None => break,
            }
        }
        if tangent.len() < base.len() {
            break;
        }
        coordinates.push(at);
        gammas.push(tangent);
        if !swapped {
            for difference in &state.differences {
                // Points along one chain hold what those behind them left.
                if !differences.iter().any(|d| Arc::ptr_eq(d, difference)) {
                    differences.push(Arc::clone(difference));
                }
            }
        }
    }
    differences.truncate(CARRIED);

    let dimensions = (0..target.len())
        .filter(|&d| coordinates.iter().any(|c| (c[d] - target[d]).abs() > 0.0))
        .count();
    let soft = soft_directions(newest.state());
    let mut below = gammas[0].clone();
    let mut linear = below.clone();
    let mut best = (0, f64::INFINITY, below.clone());
    if dimensions > 0 {
        for degree in 1..=ORDER {
            let Some(mut tangent) = combination(&coordinates, &gammas, target, degree, dimensions)
            else {
                break;
            };
            for (direction, is_flat) in &soft {
                let steady = if *is_flat { &gammas[0] } else { &linear };
                let excess = inner(direction, &tangent) - inner(direction, steady);
                if degree > 1 || *is_flat {
                    for (t, d) in tangent.iter_mut().zip(direction) {
                        *t -= d * excess;
                    }
                }
            }
            if degree == 1 {
                linear.clone_from(&tangent);
            }
            let estimate = distance(&tangent, &below);
            if estimate < best.1 {
                best = (degree, estimate, tangent.clone());
            }
            below = tangent;
        }
    }
    let (mut order, estimate, mut tangent) = best;
    if estimate > LARGEST_ERROR {
        order = 0;
        tangent = gammas[0].clone();
    }
    if let Some(near_onset) = onset::predict(points, target)?
        && near_onset.estimate < estimate
    {
        let alike = matches!(near_onset.occupied.as_slice(), [a, b] if a == b);
        return Ok(Some(Prediction {
            occupied: near_onset.occupied,
            differences: if alike {
                alike_in_both_spins(&differences)
            } else {
                differences
            },
            order: 1,
            estimate: near_onset.estimate,
        }));
    }
    let mut occupied: Vec<DMatrix<f64>> = base
        .iter()
        .zip(&tangent)
        .map(|(y, gamma)| exponential(y, gamma))
        .collect::<Result<_, _>>()?;
    if let ([alpha, beta], false) = (occupied.as_mut_slice(), polarised)
        && alpha.shape() == beta.shape()
    {
        // What little the spins differ is noise along a soft mode, and would be extrapolated. Where the symmetric
        // solution is no longer the lowest, only a test of stability tells.
        beta.copy_from(alpha);
        differences = alike_in_both_spins(&differences);
    }
    Ok(Some(Prediction {
        occupied,
        differences,
        order,
        estimate,
    }))
}

fn alike_in_both_spins(differences: &[Arc<Difference>]) -> Vec<Arc<Difference>> {
    differences
        .iter()
        .map(|d| Arc::new(d.alike_in_both_spins()))
        .collect()
}

/// A matrix as plain numbers, column after column.
#[derive(Serialize, Deserialize)]
struct StoredMatrix {
    rows: usize,
    columns: usize,
    values: Vec<f64>,
}

#[derive(Serialize, Deserialize)]
struct StoredVectors {
    occupied: Vec<StoredMatrix>,
    values: Vec<f64>,
    tangents: Vec<Vec<StoredMatrix>>,
}

#[derive(Serialize, Deserialize)]
struct StoredSeed {
    occupied: Vec<StoredMatrix>,
    kept: usize,
    differences: Vec<Difference>,
    internal: Option<StoredVectors>,
    triplet: Option<StoredVectors>,
    lowest_eigenvalue: Option<f64>,
}

fn store(matrices: &[DMatrix<f64>]) -> Vec<StoredMatrix> {
    matrices
        .iter()
        .map(|m| StoredMatrix {
            rows: m.nrows(),
            columns: m.ncols(),
            values: m.as_slice().to_vec(),
        })
        .collect()
}

fn restore(stored: Vec<StoredMatrix>) -> Vec<DMatrix<f64>> {
    stored
        .into_iter()
        .map(|m| {
            // A truncated list is filled up: a damaged file must not bring the program down.
            let values = m.values.into_iter().chain(std::iter::repeat(0.0));
            DMatrix::from_iterator(m.rows, m.columns, values.take(m.rows * m.columns))
        })
        .collect()
}

impl From<&CarriedVectors> for StoredVectors {
    fn from(vectors: &CarriedVectors) -> Self {
        Self {
            occupied: store(&vectors.occupied),
            values: vectors.values.clone(),
            tangents: vectors.tangents.iter().map(|t| store(t)).collect(),
        }
    }
}

impl From<StoredVectors> for CarriedVectors {
    fn from(stored: StoredVectors) -> Self {
        Self {
            occupied: restore(stored.occupied),
            values: stored.values,
            tangents: stored.tangents.into_iter().map(restore).collect(),
        }
    }
}

impl From<Seed> for StoredSeed {
    fn from(seed: Seed) -> Self {
        let state = seed.state();
        Self {
            occupied: store(&state.occupied),
            kept: state.kept,
            differences: state.differences.iter().map(|d| (**d).clone()).collect(),
            internal: state.internal.as_ref().map(Into::into),
            triplet: state.triplet.as_ref().map(Into::into),
            lowest_eigenvalue: state.lowest_eigenvalue,
        }
    }
}

impl From<StoredSeed> for Seed {
    fn from(stored: StoredSeed) -> Self {
        Self::new(SeedState {
            occupied: restore(stored.occupied),
            kept: stored.kept,
            differences: stored.differences.into_iter().map(Arc::new).collect(),
            internal: stored.internal.map(Into::into),
            triplet: stored.triplet.map(Into::into),
            lowest_eigenvalue: stored.lowest_eigenvalue,
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::scf::grassmann::orthonormalised;

    fn seed(x: f64) -> Seed {
        let raw = DMatrix::from_fn(6, 2, |i, j| {
            (0.3 * x * (i as f64 - 2.0 * j as f64)).sin() + if i == j { 2.0 } else { 0.0 }
        });
        Seed::new(SeedState {
            occupied: vec![orthonormalised(&raw).expect("two columns")],
            kept: 6,
            differences: Vec::new(),
            internal: None,
            triplet: None,
            lowest_eigenvalue: None,
        })
    }

    #[test]
    fn extrapolation_error_falls_with_the_number_of_points() {
        let seeds: Vec<Seed> = (0..6).map(|i| seed(1.0 + 0.05 * f64::from(i))).collect();
        let at: Vec<[f64; 1]> = (0..6).map(|i| [1.0 + 0.05 * f64::from(i)]).collect();
        let truth = &seeds[5].state().occupied[0];
        let mut last = f64::INFINITY;
        for count in 1..=5 {
            let points: Vec<(&[f64], &Seed)> =
                (5 - count..5).map(|i| (&at[i][..], &seeds[i])).collect();
            let prediction = predict(&points, &at[5]).expect("small").expect("points");
            let y = &prediction.occupied[0];
            let error = (y * y.transpose() - truth * truth.transpose()).norm();
            assert!(error < 0.5 * last, "{count} points: {error} after {last}");
            last = error;
        }
        assert!(last < 1e-5);
    }

    #[test]
    fn two_coordinates_are_fitted_together() {
        let value = |x: f64, y: f64| x + 0.5 * y + 0.1 * x * y;
        let mut at = Vec::new();
        for i in 0..4 {
            for j in 0..4 {
                at.push([0.02 * f64::from(i), 2.0 * f64::from(j)]);
            }
        }
        let target = at.pop().expect("sixteen");
        let seeds: Vec<Seed> = at.iter().map(|p| seed(value(p[0], 0.02 * p[1]))).collect();
        let points: Vec<(&[f64], &Seed)> =
            at.iter().zip(&seeds).map(|(a, s)| (&a[..], s)).collect();
        let truth = seed(value(target[0], 0.02 * target[1]));
        let truth = &truth.state().occupied[0];
        let prediction = predict(&points, &target).expect("small").expect("points");
        let y = &prediction.occupied[0];
        let error = (y * y.transpose() - truth * truth.transpose()).norm();
        let nearest = &seeds[14].state().occupied[0];
        let carried = (nearest * nearest.transpose() - truth * truth.transpose()).norm();
        assert!(prediction.order >= 2);
        assert!(error < 0.01 * carried, "{error} against {carried}");
    }

    #[test]
    fn a_kink_is_not_extrapolated_across() {
        // The oldest points belong to another state; the newest two differ little.
        let seeds = [seed(5.0), seed(9.0), seed(1.0), seed(1.02)];
        let at = [[0.0], [0.1], [0.2], [0.3]];
        let points: Vec<(&[f64], &Seed)> =
            at.iter().zip(&seeds).map(|(a, s)| (&a[..], s)).collect();
        let prediction = predict(&points, &[0.4]).expect("small").expect("points");
        assert!(prediction.order <= 1);
    }

    #[test]
    fn seeds_survive_storage_bit_for_bit() {
        let original = seed(0.7);
        let text = serde_json::to_string(&original).expect("numbers");
        let back: Seed = serde_json::from_str(&text).expect("as written");
        assert_eq!(back.state(), original.state());
    }
}
