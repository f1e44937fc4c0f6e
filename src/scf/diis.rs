//! Extrapolation of Fock matrices: history in, new matrix out; knows no chemistry.
//!
//! Direct inversion in the iterative subspace (P. Pulay, Chem. Phys. Lett. 73, 393 (1980); J.
//! Comput. Chem. 3, 556 (1982)) minimises the norm of a combination of error vectors whose coefficients add to
//! one. Written with differences of successive iterates, F − Σ γⱼ δFⱼ where γ minimises ‖e − Σ γⱼ δeⱼ‖, it
//! is the same method, but differences of earlier geometries can be used as well: what they say about the response
//! of the error to the Fock matrix changes little from one geometry to the next.
//!
//! Far from convergence the energy itself is minimised over convex combinations of iterates (K. N. Kudin, G.
//! E. Scuseria, E. Cancès, J. Chem. Phys. 116, 8255 (2002), eq. 8).

use nalgebra::{DMatrix, DVector};
use serde::{Deserialize, Serialize};
use std::sync::Arc;

/// An own difference is left out if less than this fraction of it is new.
const OWN_NOVELTY: f64 = 1e-5;
/// A carried difference is left out if less than this fraction of it is new: it holds only to first order in
/// the step between geometries, and dividing by a small rest would blow that error up.
const CARRIED_NOVELTY: f64 = 0.02;
/// Own differences that are kept.
const OWN_LIMIT: usize = 12;
/// Iterates among which the energy is minimised; all subsets are tried, so the cost doubles with each.
const ENERGY_LIMIT: usize = 6;

/// Change of the Fock matrix and of its error from one iterate to the next, all spins in one list each.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Difference {
    fock: Vec<f64>,
    error: Vec<f64>,
}

impl Difference {
    /// The part that is alike in both spins, of a difference with two spin blocks of one size: near a solution with
    /// α = β changes that are alike cause errors that are alike.
    #[must_use]
    pub fn alike_in_both_spins(&self) -> Self {
        let mean = |values: &[f64]| {
            let (alpha, beta) = values.split_at(values.len() / 2);
            let half: Vec<f64> = alpha.iter().zip(beta).map(|(a, b)| 0.5 * (a + b)).collect();
            half.repeat(2)
        };
        Self {
            fock: mean(&self.fock),
            error: mean(&self.error),
        }
    }
}

/// Lower triangles with the diagonal of all blocks, one after another.
fn pack_symmetric(blocks: &[DMatrix<f64>]) -> Vec<f64> {
    pack(blocks, 0)
}

/// Strict lower triangles of all blocks: all there is of an antisymmetric matrix.
fn pack_antisymmetric(blocks: &[DMatrix<f64>]) -> Vec<f64> {
    pack(blocks, 1)
}

fn pack(blocks: &[DMatrix<f64>], first_below: usize) -> Vec<f64> {
    let mut packed = Vec::new();
    for block in blocks {
        for j in 0..block.ncols() {
            packed.extend((j + first_below..block.nrows()).map(|i| block[(i, j)]));
        }
    }
    packed
}

fn unpack_symmetric(packed: &[f64], shape: &[DMatrix<f64>]) -> Vec<DMatrix<f64>> {
    let mut rest = packed.iter();
    shape
        .iter()
        .map(|block| {
            let n = block.nrows();
            let mut matrix = DMatrix::zeros(n, n);
            for j in 0..n {
                for i in j..n {
                    let value = rest.next().copied().unwrap_or(0.0);
                    matrix[(i, j)] = value;
                    matrix[(j, i)] = value;
                }
            }
            matrix
        })
        .collect()
}

/// Sum of products in eight accumulators, a fixed order whatever the machine.
pub(crate) fn dot(a: &[f64], b: &[f64]) -> f64 {
    let mut sums = [0.0; 8];
    let (a_blocks, b_blocks) = (a.chunks_exact(8), b.chunks_exact(8));
    let tail: f64 = a_blocks
        .remainder()
        .iter()
        .zip(b_blocks.remainder())
        .map(|(x, y)| x * y)
        .sum();
    for (x, y) in a_blocks.zip(b_blocks) {
        for k in 0..8 {
            sums[k] += x[k] * y[k];
        }
    }
    sums.iter().sum::<f64>() + tail
}

fn subtract_multiple(from: &mut [f64], factor: f64, what: &[f64]) {
    for (x, y) in from.iter_mut().zip(what) {
        *x -= factor * y;
    }
}

/// History of one calculation, with differences carried over from earlier ones.
#[derive(Debug, Clone, Default)]
pub struct Extrapolation {
    last: Option<(Vec<f64>, Vec<f64>)>,
    /// Own differences, newest first, then the carried ones, the most trusted first.
    differences: Vec<Arc<Difference>>,
    own: usize,
    /// Inner products of the errors of all differences.
    gram: DMatrix<f64>,
}

impl Extrapolation {
    /// Starts with differences of earlier geometries, the most trusted first.
    #[must_use]
    pub fn with_carried(carried: Vec<Arc<Difference>>) -> Self {
        Self {
            gram: gram(&carried),
            differences: carried,
            ..Self::default()
        }
    }

    /// The differences made by this calculation, newest first.
    #[must_use]
    pub fn own(&self) -> &[Arc<Difference>] {
        &self.differences[..self.own]
    }

    /// All differences in use: those of this calculation, then those taken over.
    #[must_use]
    pub fn differences(&self) -> &[Arc<Difference>] {
        &self.differences
    }

    /// Whether differences of earlier geometries are still in use.
    #[must_use]
    pub fn has_carried(&self) -> bool {
        self.differences.len() > self.own
    }

    /// Forgets what earlier geometries left.
    pub fn drop_carried(&mut self) {
        self.differences.truncate(self.own);
        self.gram = self.gram.view((0, 0), (self.own, self.own)).into_owned();
    }

    /// Forgets everything, own differences too.
    pub fn restart(&mut self) {
        *self = Self::default();
    }

    /// Takes in an iterate: symmetric Fock matrices and antisymmetric errors, one per spin block.
    pub fn record(&mut self, focks: &[DMatrix<f64>], errors: &[DMatrix<f64>]) {
        let (fock, error) = (pack_symmetric(focks), pack_antisymmetric(errors));
        match &self.last {
            None => {
                // Differences of another size are of no use.
                let fits = |d: &Arc<Difference>| {
                    d.error.len() == error.len() && d.fock.len() == fock.len()
                };
                if !self.differences.iter().all(fits) {
                    self.differences.retain(fits);
                    self.gram = gram(&self.differences);
                }
            }
            Some((last_fock, last_error)) => {
                let mut difference = Difference {
                    fock: fock.clone(),
                    error: error.clone(),
                };
                subtract_multiple(&mut difference.fock, 1.0, last_fock);
                subtract_multiple(&mut difference.error, 1.0, last_error);
                self.insert(difference);
            }
        }
        self.last = Some((fock, error));
    }

    fn insert(&mut self, difference: Difference) {
        if self.own == OWN_LIMIT {
            self.own -= 1;
            self.differences.remove(self.own);
            self.gram = std::mem::take(&mut self.gram)
                .remove_row(self.own)
                .remove_column(self.own);
        }
        let mut products = vec![dot(&difference.error, &difference.error)];
        let with_others = |d: &Arc<Difference>| dot(&difference.error, &d.error);
        products.extend(self.differences.iter().map(with_others));
        let old = &self.gram;
        self.gram = DMatrix::from_fn(products.len(), products.len(), |i, j| match (i, j) {
            (0, k) | (k, 0) => products[k],
            _ => old[(i - 1, j - 1)],
        });
        self.differences.insert(0, Arc::new(difference));
        self.own += 1;
    }

    /// The Fock matrices (one per spin block, shaped like `focks`) that the history suggests for the
    /// iterate recorded last.
    #[must_use]
    pub fn suggest(&self, focks: &[DMatrix<f64>]) -> Vec<DMatrix<f64>> {
        let Some((fock, error)) = &self.last else {
            return focks.to_vec();
        };
        let mut best = fock.clone();
        for (place, factor) in self.factors(error) {
            subtract_multiple(&mut best, factor, &self.differences[place].fock);
        }
        unpack_symmetric(&best, focks)
    }

    /// Differences to subtract, with their factors: ‖error − Σ factor · δe‖ is least over the differences that add something
    /// new to those trusted more.
    ///
    /// Cholesky's decomposition of the normalised inner products, row by row; a row whose diagonal is too small is
    /// left out.
    fn factors(&self, error: &[f64]) -> Vec<(usize, f64)> {
        let mut used: Vec<usize> = Vec::new();
        let mut rows: Vec<Vec<f64>> = Vec::new();
        let mut shares: Vec<f64> = Vec::new();
        let size = |k: usize| self.gram[(k, k)].sqrt();
        for (k, difference) in self.differences.iter().enumerate() {
            let norm = size(k);
            if norm <= 0.0 || !norm.is_finite() {
                continue;
            }
            let mut row: Vec<f64> = Vec::with_capacity(used.len() + 1);
            for (j, &other) in used.iter().enumerate() {
                let known = dot(&row, &rows[j][..j]);
                row.push((self.gram[(k, other)] / (norm * size(other)) - known) / rows[j][j]);
            }
            let new = (1.0 - dot(&row, &row)).max(0.0).sqrt();
            let novelty = if k < self.own {
                OWN_NOVELTY
            } else {
                CARRIED_NOVELTY
            };
            if new < novelty {
                continue;
            }
            let share = (dot(&difference.error, error) / norm - dot(&row, &shares)) / new;
            row.push(new);
            used.push(k);
            rows.push(row);
            shares.push(share);
        }
        // Back substitution with the transposed triangle.
        for i in (0..used.len()).rev() {
            let known: f64 = (i + 1..used.len()).map(|j| rows[j][i] * shares[j]).sum();
            shares[i] = (shares[i] - known) / rows[i][i];
        }
        used.into_iter()
            .zip(shares)
            .map(|(k, share)| (k, share / size(k)))
            .collect()
    }
}

/// Inner products of the errors of differences of one size; those of another size count as zero.
fn gram(differences: &[Arc<Difference>]) -> DMatrix<f64> {
    let m = differences.len();
    let mut products = DMatrix::zeros(m, m);
    for i in 0..m {
        for j in 0..=i {
            let (one, other) = (&differences[i].error, &differences[j].error);
            if one.len() == other.len() {
                products[(i, j)] = dot(one, other);
                products[(j, i)] = products[(i, j)];
            }
        }
    }
    products
}

/// One iterate as the energy sees it.
#[derive(Debug, Clone)]
struct EnergyIterate {
    energy: f64,
    focks: Vec<DMatrix<f64>>,
    densities: Vec<DMatrix<f64>>,
}

/// Minimisation of the energy over convex combinations of iterates.
#[derive(Debug, Clone, Default)]
pub struct EnergyInterpolation {
    iterates: Vec<EnergyIterate>,
}

impl EnergyInterpolation {
    /// Takes in an iterate: its energy, Fock and density matrices of the orthonormal frame, one per spin block.
    pub fn record(&mut self, energy: f64, focks: &[DMatrix<f64>], densities: Vec<DMatrix<f64>>) {
        self.iterates.push(EnergyIterate {
            energy,
            focks: focks.to_vec(),
            densities,
        });
        if self.iterates.len() > ENERGY_LIMIT {
            // The highest goes; the newest stays, it is where the search stands.
            let highest = (0..self.iterates.len() - 1)
                .max_by(|&i, &j| self.iterates[i].energy.total_cmp(&self.iterates[j].energy))
                .unwrap_or(0);
            self.iterates.remove(highest);
        }
    }

    /// The combination of Fock matrices whose density has the lowest energy; `weight` is 2 for
    /// doubly occupied orbitals, 1 for spin orbitals. Nothing without iterates.
    ///
    /// For Hartree–Fock the energy of a combination is exactly
    /// Σ cᵢEᵢ − ¼ Σ cᵢcⱼ w tr(Fᵢ−Fⱼ)(Pᵢ−Pⱼ).
    #[must_use]
    pub fn suggest(&self, weight: f64) -> Option<Vec<DMatrix<f64>>> {
        let m = self.iterates.len();
        let mut coupling = DMatrix::zeros(m, m);
        for i in 0..m {
            for j in 0..i {
                let (a, b) = (&self.iterates[i], &self.iterates[j]);
                let mut sum = 0.0;
                for s in 0..a.focks.len() {
                    let fock = &a.focks[s] - &b.focks[s];
                    let density = &a.densities[s] - &b.densities[s];
                    sum += weight * dot(fock.as_slice(), density.as_slice());
                }
                coupling[(i, j)] = -0.5 * sum;
                coupling[(j, i)] = -0.5 * sum;
            }
        }
        let lowest = self
            .iterates
            .iter()
            .map(|it| it.energy)
            .fold(f64::INFINITY, f64::min);
        let linear = DVector::from_iterator(m, self.iterates.iter().map(|it| it.energy - lowest));
        let coefficients = simplex_minimum(&linear, &coupling)?;
        let mut combined: Vec<DMatrix<f64>> = self
            .iterates
            .first()?
            .focks
            .iter()
            .map(|f| DMatrix::zeros(f.nrows(), f.ncols()))
            .collect();
        for (iterate, c) in self.iterates.iter().zip(coefficients.iter()) {
            for (sum, fock) in combined.iter_mut().zip(&iterate.focks) {
                *sum += fock * *c;
            }
        }
        Some(combined)
    }
}

/// Smallest value of aᵀc + ½ cᵀBc over c ≥ 0, Σc = 1, by trying the stationary point of every face:
/// the minimum is one of them, whether or not B is positive.
fn simplex_minimum(linear: &DVector<f64>, quadratic: &DMatrix<f64>) -> Option<DVector<f64>> {
    let m = linear.len();
    let mut best: Option<(f64, DVector<f64>)> = None;
    for face in 1..(1usize << m) {
        let members: Vec<usize> = (0..m).filter(|i| face >> i & 1 == 1).collect();
        let k = members.len();
        let mut system = DMatrix::zeros(k + 1, k + 1);
        let mut right = DVector::zeros(k + 1);
        for (row, &i) in members.iter().enumerate() {
            for (column, &j) in members.iter().enumerate() {
                system[(row, column)] = quadratic[(i, j)];
            }
            system[(row, k)] = 1.0;
            system[(k, row)] = 1.0;
            right[row] = -linear[i];
        }
        right[k] = 1.0;
        let Some(solution) = system.lu().solve(&right) else {
            continue;
        };
        let mut point = DVector::zeros(m);
        for (row, &i) in members.iter().enumerate() {
            point[i] = solution[row];
        }
        if point.iter().any(|c| !c.is_finite() || *c < 0.0) {
            continue;
        }
        let value = linear.dot(&point) + 0.5 * point.dot(&(quadratic * &point));
        if best.as_ref().is_none_or(|(lowest, _)| value < *lowest) {
            best = Some((value, point));
        }
    }
    best.map(|(_, point)| point)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// A linear problem: errors respond linearly to the Fock matrix, so that a full set of differences
    /// gives the answer at once.
    fn linear_error(fock: &DMatrix<f64>, target: &DMatrix<f64>) -> DMatrix<f64> {
        let d = fock - target;
        let mut error = DMatrix::zeros(2, 2);
        error[(1, 0)] = 2.0 * d[(1, 0)];
        error[(0, 1)] = -error[(1, 0)];
        error
    }

    #[test]
    fn a_linear_error_is_removed_in_one_step() {
        let target = DMatrix::from_row_slice(2, 2, &[1.0, 0.3, 0.3, -1.0]);
        let mut history = Extrapolation::default();
        let mut last = target.clone();
        for shift in [0.5, 0.2] {
            last = target.clone();
            last[(0, 1)] += shift;
            last[(1, 0)] += shift;
            history.record(&[last.clone()], &[linear_error(&last, &target)]);
        }
        let suggested = history.suggest(&[last]);
        assert!((&suggested[0] - &target).amax() < 1e-14);
        assert_eq!(history.own().len(), 1);
        // The same difference serves another problem with the same response.
        let elsewhere = &target * 2.0;
        let mut next = Extrapolation::with_carried(history.own().to_vec());
        let mut start = elsewhere.clone();
        start[(0, 1)] -= 0.7;
        start[(1, 0)] -= 0.7;
        next.record(&[start.clone()], &[linear_error(&start, &elsewhere)]);
        assert!((&next.suggest(&[start])[0] - &elsewhere).amax() < 1e-14);
    }

    #[test]
    fn simplex_minimum_finds_interior_edge_and_vertex() {
        let interior =
            simplex_minimum(&DVector::from_vec(vec![0.0, 0.0]), &DMatrix::identity(2, 2));
        assert!((interior.expect("one")[0] - 0.5).abs() < 1e-14);
        let vertex = simplex_minimum(&DVector::from_vec(vec![0.0, 9.0]), &DMatrix::identity(2, 2));
        assert!((vertex.expect("one")[0] - 1.0).abs() < 1e-14);
        let concave = simplex_minimum(
            &DVector::from_vec(vec![0.1, 0.0, 0.3]),
            &(-DMatrix::<f64>::identity(3, 3)),
        );
        assert!((concave.expect("one")[1] - 1.0).abs() < 1e-14);
    }

    #[test]
    fn packing_keeps_symmetric_matrices() {
        let a = DMatrix::from_row_slice(3, 3, &[1.0, 2.0, 3.0, 2.0, 4.0, 5.0, 3.0, 5.0, 6.0]);
        let b = DMatrix::from_row_slice(2, 2, &[7.0, 8.0, 8.0, 9.0]);
        let packed = pack_symmetric(&[a.clone(), b.clone()]);
        assert_eq!(packed.len(), 9);
        assert_eq!(
            unpack_symmetric(&packed, &[a.clone(), b.clone()]),
            vec![a, b]
        );
    }
}
