//! Is a solution a minimum? Lowest eigenvalues of the orbital Hessians, and the way down where one is negative.
//!
//! R. Seeger, J. A. Pople, J. Chem. Phys. 66, 3045 (1977): RHF against RHF (singlet) and against UHF (triplet), UHF against
//! UHF, all with real orbitals. Eigenpairs by a block Davidson method (E. R. Davidson, J. Comput. Phys. 17, 87 (1975))
//! that only needs Hessian products.

use super::ScfError;
use super::canonical::{
    Canonical, Kappa, combined, hessian_products, inner, rotated, scaled, tangents,
};
use super::fock::{Evaluation, Field, Rotation};
use super::grassmann::tangent_part;
use super::orthogonal::{symmetric_eigen, symmetrise};
use nalgebra::DMatrix;

/// Eigenvectors that are sought: one alone misses crossings of symmetries.
const VECTORS: usize = 6;
/// Residual norm of the lowest eigenvector, hartree; its eigenvalue is then good to the square of this over the gap.
const RESIDUAL: f64 = 5e-4;
/// Residual norm of the others, hartree: they only have to be there when they become the lowest.
const OTHER_RESIDUAL: f64 = 3e-2;
/// Passes over the integrals.
const PASSES: usize = 24;
/// The trial space is collapsed to the best vectors at this size.
const LARGEST_SPACE: usize = 60;
/// A trial vector is left out if less than this fraction of it is new.
const NOVELTY: f64 = 1e-4;
/// Share of a deterministic noise in fresh trial vectors, so that no symmetry is shut out.
const NOISE: f64 = 0.02;

/// Eigenvalues below this count as unstable, hartree. Rotations of a symmetry-broken state as a whole have
/// eigenvalue zero up to the convergence of the orbitals.
pub const UNSTABLE: f64 = -1e-5;

/// Lowest eigenpairs of an orbital Hessian.
#[derive(Debug, Clone)]
pub struct Eigenpairs {
    /// Eigenvalues in hartree, ascending.
    pub values: Vec<f64>,
    /// Eigenvectors as rotations of the canonical orbitals.
    pub vectors: Vec<Kappa>,
}

/// Eigenvectors that can be carried to a neighbouring geometry.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct CarriedVectors {
    /// Occupied orbitals the tangents refer to, one matrix per spin block.
    pub occupied: Vec<DMatrix<f64>>,
    /// Eigenvalues, hartree.
    pub values: Vec<f64>,
    /// Tangents, one set per eigenvector.
    pub tangents: Vec<Vec<DMatrix<f64>>>,
}

impl CarriedVectors {
    /// Eigenvectors in a form that does not depend on the choice of empty orbitals.
    #[must_use]
    pub fn of(orbitals: &[Canonical], pairs: &Eigenpairs) -> Self {
        Self {
            occupied: orbitals.iter().map(|o| o.occupied.clone()).collect(),
            values: pairs.values.clone(),
            tangents: pairs
                .vectors
                .iter()
                .map(|k| tangents(orbitals, k))
                .collect(),
        }
    }

    /// The same vectors as rotations of the orbitals of a neighbouring solution.
    #[must_use]
    pub fn carried_to(&self, orbitals: &[Canonical]) -> Vec<Kappa> {
        let fits = self.occupied.len() == orbitals.len()
            && self
                .occupied
                .iter()
                .zip(orbitals)
                .all(|(y, o)| y.shape() == o.occupied.shape());
        if !fits {
            return Vec::new();
        }
        self.tangents
            .iter()
            .map(|set| {
                set.iter()
                    .zip(&self.occupied)
                    .zip(orbitals)
                    .map(|((gamma, y), o)| {
                        let turned = gamma * (y.transpose() * &o.occupied);
                        o.empty.transpose() * tangent_part(&o.occupied, &turned)
                    })
                    .collect()
            })
            .collect()
    }
}

/// Fixed numbers between −1 and 1 that follow no symmetry.
fn noise(seed: usize) -> f64 {
    let mut x = (seed as u64).wrapping_add(0x9E37_79B9_7F4A_7C15);
    x = (x ^ (x >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
    x = (x ^ (x >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
    x ^= x >> 31;
    (x >> 11) as f64 / (1u64 << 52) as f64 - 1.0
}

/// Single excitations of lowest orbital-energy difference, slightly perturbed.
fn fresh_vectors(gaps: &[DMatrix<f64>], count: usize) -> Vec<Kappa> {
    let mut places: Vec<(f64, usize, usize)> = gaps
        .iter()
        .enumerate()
        .flat_map(|(block, g)| g.iter().enumerate().map(move |(at, &gap)| (gap, at, block)))
        .collect();
    places.sort_by(|a, b| a.0.total_cmp(&b.0));
    // Pairs of α and β excitations stand together, α first. Nearness is no order: it must not enter the sorting above.
    for alike in places.chunk_by_mut(|a, b| b.0 - a.0 < 1e-7) {
        alike.sort_unstable_by_key(|&(_, at, block)| (at, block));
    }
    places
        .iter()
        .take(count)
        .enumerate()
        .map(|(vector, &(_, place, block))| {
            gaps.iter()
                .enumerate()
                .map(|(b, g)| {
                    let mut kappa = g.clone();
                    for (at, x) in kappa.iter_mut().enumerate() {
                        let own = if b == block && at == place { 1.0 } else { 0.0 };
                        let index = (vector * gaps.len() + b) * g.len() + at;
                        // High excitations have no part in low eigenvectors.
                        *x = own + NOISE * noise(index) / (1.0 + g[at].abs().powi(2));
                    }
                    kappa
                })
                .collect()
        })
        .collect()
}

/// Lowest eigenpairs of the orbital Hessian for the given kind of rotation; nothing if there are no rotations.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn lowest_eigenpairs(
    field: &mut Field<'_>,
    orbitals: &[Canonical],
    kind: Rotation,
    carried: Option<&CarriedVectors>,
) -> Result<Option<Eigenpairs>, ScfError> {
    let gaps: Vec<_> = orbitals.iter().map(Canonical::gaps).collect();
    let dimension: usize = gaps.iter().map(DMatrix::len).sum();
    if dimension == 0 {
        return Ok(None);
    }
    let wanted = VECTORS.min(dimension);
    let mut proposals = carried.map_or_else(Vec::new, |c| c.carried_to(orbitals));
    if proposals.len() < wanted {
        proposals = fresh_vectors(&gaps, wanted + 2);
    }
    let mut space: Vec<Kappa> = Vec::new();
    let mut images: Vec<Kappa> = Vec::new();
    let mut pairs = Eigenpairs {
        values: Vec::new(),
        vectors: Vec::new(),
    };
    for _ in 0..PASSES {
        let known = space.len();
        for proposal in proposals.drain(..) {
            let size = inner(&proposal, &proposal).sqrt();
            if size <= 0.0 || !size.is_finite() {
                continue;
            }
            let mut vector = scaled(&proposal, 1.0 / size);
            for _ in 0..2 {
                for other in &space {
                    vector = combined(&vector, -inner(other, &vector), other);
                }
            }
            let rest = inner(&vector, &vector).sqrt();
            if rest > NOVELTY && space.len() < dimension {
                space.push(scaled(&vector, 1.0 / rest));
            }
        }
        if space.len() == known {
            break;
        }
        images.extend(hessian_products(field, orbitals, &space[known..], kind));
        let m = space.len();
        let mut projected = DMatrix::from_fn(m, m, |i, j| inner(&space[i], &images[j]));
        symmetrise(&mut projected);
        let (values, vectors) = symmetric_eigen(&projected)?;
        let combine = |from: &[Kappa], column: usize| -> Kappa {
            let mut sum = scaled(&from[0], vectors[(0, column)]);
            for (i, vector) in from.iter().enumerate().skip(1) {
                sum = combined(&sum, vectors[(i, column)], vector);
            }
            sum
        };
        let roots = wanted.min(m);
        pairs.values = values.iter().take(roots).copied().collect();
        pairs.vectors = (0..roots).map(|r| combine(&space, r)).collect();
        let mut converged = roots == wanted;
        for root in 0..roots {
            let value = values[root];
            let residual = combined(&combine(&images, root), -value, &pairs.vectors[root]);
            let size = inner(&residual, &residual).sqrt();
            let limit = if root == 0 { RESIDUAL } else { OTHER_RESIDUAL };
            if size > limit {
                converged = false;
                proposals.push(
                    residual
                        .iter()
                        .zip(&gaps)
                        .map(|(r, g)| r.zip_map(g, |r, gap| r / (gap - value).max(0.05)))
                        .collect(),
                );
            }
        }
        if converged || m == dimension {
            break;
        }
        if m + proposals.len() > LARGEST_SPACE {
            let keep = (2 * wanted).min(m);
            let (collapsed, collapsed_images) = (
                (0..keep).map(|r| combine(&space, r)).collect(),
                (0..keep).map(|r| combine(&images, r)).collect(),
            );
            space = collapsed;
            images = collapsed_images;
        }
    }
    Ok(Some(pairs))
}

/// A determinant lower in energy along an unstable direction, with the energy it has; nothing if none is found.
///
/// The energy is followed along ± the eigenvector from short to long rotations. Of two directions alike the
/// positive one is taken, so that the outcome does not hang on rounding.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn downhill(
    field: &mut Field<'_>,
    orbitals: &[Canonical],
    energy: f64,
    direction: &Kappa,
) -> Result<Option<Evaluation>, ScfError> {
    const FIRST: f64 = 0.3;
    const GROWTH: f64 = 1.7;
    const LONGEST: f64 = 1.6;
    let mut at = |length: f64| -> Result<Evaluation, ScfError> {
        field.refresh();
        Ok(field.evaluate(rotated(orbitals, &scaled(direction, length))?))
    };
    let largest = direction
        .iter()
        .flat_map(|k| k.iter().copied())
        .fold(
            0.0,
            |m: f64, x| if x.abs() > m.abs() + 1e-6 { x } else { m },
        );
    let sign = if largest < 0.0 { -1.0 } else { 1.0 };
    let mut length = FIRST;
    let (plus, minus) = (at(sign * length)?, at(-sign * length)?);
    let (mut best, sign) = if minus.energy < plus.energy - 1e-8 {
        (minus, -sign)
    } else {
        (plus, sign)
    };
    if best.energy < energy {
        while length * GROWTH < LONGEST {
            length *= GROWTH;
            let trial = at(sign * length)?;
            if trial.energy >= best.energy {
                break;
            }
            best = trial;
        }
    } else {
        // A shallow valley: closer in.
        while length > 1e-3 && best.energy >= energy {
            length *= 0.4;
            best = at(sign * length)?;
        }
    }
    Ok((best.energy < energy).then_some(best))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Gaps each nearer to the next than the distance that counts as rounding, in mixed order: a comparison that calls near
    /// ones equal contradicts itself here, and sorting by it may end the program.
    #[test]
    fn chains_of_near_gaps_are_sorted() {
        let gap = |i: usize| 0.5 + 0.6e-7 * ((i * 37) % 101) as f64;
        let gaps = vec![DMatrix::from_fn(101, 1, |i, _| gap(i)); 2];
        let vectors = fresh_vectors(&gaps, 8);
        for (number, vector) in vectors.iter().enumerate() {
            // Every excitation of one spin is followed by that of the other.
            let largest = vector[number % 2].amax();
            assert!((largest - 1.0).abs() < 2.0 * NOISE, "{number}: {largest}");
            assert!(vector[1 - number % 2].amax() < 0.5);
        }
    }
}
