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
/// Singlet eigenvectors that are carried: with the triplet ones beside them fewer are enough.
const SINGLET_VECTORS: usize = 4;
/// Residual norm of the lowest eigenvector, hartree; its eigenvalue is then good to the square of this over the gap.
const RESIDUAL: f64 = 5e-4;
/// Residual norm of the others, hartree: they only have to be there when they become the lowest.
const OTHER_RESIDUAL: f64 = 3e-2;
/// Relative error of an eigenvalue that is enough to tell its sign and to predict where it may reach zero.
const SUFFICIENT: f64 = 0.03;
/// The same for the eigenvectors above the lowest.
const OTHER_SUFFICIENT: f64 = 0.2;
/// An error of the lowest eigenvalue that is always small enough (hartree): well below [`UNSTABLE`].
const SMALL_ERROR: f64 = 2e-6;
/// An error of the others that is always small enough, hartree.
const OTHER_SMALL_ERROR: f64 = 5e-3;
/// Eigenvalues nearer to each other than this are one cluster where errors are estimated, hartree.
const CLUSTER: f64 = 0.02;
/// Distance to the next cluster where none is known yet, hartree.
const UNKNOWN_GAP: f64 = 0.1;
/// Passes over the integrals.
const PASSES: usize = 24;
/// The trial space is collapsed to the best vectors at this size.
const LARGEST_SPACE: usize = 60;
/// A trial vector is left out if less than this fraction of it is new.
const NOVELTY: f64 = 1e-4;
/// A carried vector is left out if less than this fraction of it is new: what little it adds comes with the
/// residuals if it is needed.
const CARRIED_NOVELTY: f64 = 0.25;
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

/// How well eigenpairs have to be known.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Precision {
    /// To all digits that are worth printing.
    Full,
    /// So well that the sign of the lowest eigenvalue is certain, and its size good to a few per cent.
    Sufficient,
}

impl Precision {
    /// Whether root `root` of the ascending Ritz values `values` is good enough with a residual of this norm.
    ///
    /// The error of a Ritz value is at most the residual norm, and at most its square over the distance to the rest
    /// of the spectrum (T. Kato, J. Phys. Soc. Jpn. 4, 334 (1949)), here taken from the Ritz values.
    fn is_reached(self, residual: f64, root: usize, values: &[f64]) -> bool {
        let lowest = root == 0;
        match self {
            Self::Full if lowest => residual <= RESIDUAL,
            Self::Full => residual <= OTHER_RESIDUAL,
            Self::Sufficient => {
                let value = values[root];
                let distances = values[root..].iter().map(|v| v - value);
                let gap = distances
                    .into_iter()
                    .find(|&d| d > CLUSTER)
                    .unwrap_or(UNKNOWN_GAP);
                let error = residual.min(residual * residual / gap);
                if lowest {
                    error <= (SUFFICIENT * value.abs()).max(SMALL_ERROR)
                } else {
                    error <= (OTHER_SUFFICIENT * value.abs()).max(OTHER_SMALL_ERROR)
                }
            }
        }
    }
}

/// One Hessian on the common trial space.
struct Projection {
    kind: Rotation,
    images: Vec<Kappa>,
    /// Ritz values, ascending.
    values: Vec<f64>,
    /// Coefficients of the Ritz vectors, one column each.
    coefficients: DMatrix<f64>,
}

impl Projection {
    fn new(kind: Rotation) -> Self {
        Self {
            kind,
            images: Vec::new(),
            values: Vec::new(),
            coefficients: DMatrix::zeros(0, 0),
        }
    }

    fn solve(&mut self, space: &[Kappa]) -> Result<(), ScfError> {
        let m = space.len();
        let mut projected = DMatrix::from_fn(m, m, |i, j| inner(&space[i], &self.images[j]));
        symmetrise(&mut projected);
        let (values, coefficients) = symmetric_eigen(&projected)?;
        self.values = values.iter().copied().collect();
        self.coefficients = coefficients;
        Ok(())
    }

    /// Eigenvectors that must be good before the search may end.
    fn wanted(&self, dimension: usize) -> usize {
        self.carried().min(dimension)
    }

    /// Eigenvectors that are handed on.
    fn carried(&self) -> usize {
        match self.kind {
            Rotation::Singlet => SINGLET_VECTORS,
            Rotation::Triplet | Rotation::Unrestricted => VECTORS,
        }
    }
}

/// Σ coefficientᵢ vectorᵢ.
fn combination<'c>(vectors: &[Kappa], coefficients: impl Iterator<Item = &'c f64>) -> Kappa {
    let mut sum = scaled(&vectors[0], 0.0);
    for (vector, &coefficient) in vectors.iter().zip(coefficients) {
        for (s, v) in sum.iter_mut().zip(vector) {
            s.zip_apply(v, |s, v| *s += coefficient * v);
        }
    }
    sum
}

/// Lowest eigenpairs of the orbital Hessians of the given kinds, one entry per kind; nothing if there are no rotations.
///
/// All kinds share one trial space and, in each step, one pass over the integrals. `carried` are eigenvectors of a
/// neighbouring geometry to start from.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn lowest_eigenpairs(
    field: &mut Field<'_>,
    orbitals: &[Canonical],
    kinds: &[Rotation],
    carried: &[&CarriedVectors],
    precision: Precision,
) -> Result<Vec<Eigenpairs>, ScfError> {
    let gaps: Vec<_> = orbitals.iter().map(Canonical::gaps).collect();
    let dimension: usize = gaps.iter().map(DMatrix::len).sum();
    if dimension == 0 {
        return Ok(Vec::new());
    }
    let mut novelty = CARRIED_NOVELTY;
    let mut proposals: Vec<Kappa> = carried
        .iter()
        .flat_map(|c| c.carried_to(orbitals))
        .collect();
    if proposals.len() < VECTORS.min(dimension) {
        proposals = fresh_vectors(&gaps, VECTORS.min(dimension) + 2);
        novelty = NOVELTY;
    }
    let mut space: Vec<Kappa> = Vec::new();
    let mut projections: Vec<Projection> = kinds.iter().map(|&k| Projection::new(k)).collect();
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
            if rest > novelty && space.len() < dimension {
                space.push(scaled(&vector, 1.0 / rest));
            }
        }
        novelty = NOVELTY;
        if space.len() == known {
            break;
        }
        let images = hessian_products(field, orbitals, &space[known..], kinds);
        let m = space.len();
        let mut converged = true;
        for (projection, images) in projections.iter_mut().zip(images) {
            projection.images.extend(images);
            projection.solve(&space)?;
            let wanted = projection.wanted(dimension);
            converged &= m >= wanted;
            for root in 0..wanted.min(m) {
                let value = projection.values[root];
                let column = projection.coefficients.column(root);
                let vector = combination(&space, column.iter());
                let image = combination(&projection.images, column.iter());
                let residual = combined(&image, -value, &vector);
                let size = inner(&residual, &residual).sqrt();
                if !precision.is_reached(size, root, &projection.values) {
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
        }
        if converged || m == dimension {
            break;
        }
        if m + proposals.len() > LARGEST_SPACE {
            collapse(&mut space, &mut projections);
        }
    }
    Ok(projections
        .iter()
        .map(|projection| {
            let roots = projection.carried().min(space.len());
            Eigenpairs {
                values: projection.values[..roots].to_vec(),
                vectors: (0..roots)
                    .map(|r| combination(&space, projection.coefficients.column(r).iter()))
                    .collect(),
            }
        })
        .collect())
}

/// Reduces the trial space to the best vectors of every kind.
fn collapse(space: &mut Vec<Kappa>, projections: &mut [Projection]) {
    let m = space.len();
    let best: Vec<_> = projections
        .iter()
        .flat_map(|p| (0..(2 * p.carried()).min(m)).map(|r| p.coefficients.column(r)))
        .collect();
    let basis = DMatrix::from_columns(&best).qr().q();
    let reduced = |from: &[Kappa]| -> Vec<Kappa> {
        basis
            .column_iter()
            .map(|column| combination(from, column.iter()))
            .collect()
    };
    for projection in projections {
        projection.images = reduced(&projection.images);
    }
    *space = reduced(space);
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
