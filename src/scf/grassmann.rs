//! Occupied spaces as points of a Grassmann manifold: steps along it, logarithms, angles.
//!
//! A space is given by orthonormal columns Y (n × k) in the orthonormal frame; a tangent Γ at Y is n × k with
//! YᵀΓ = 0. Formulas after A. Edelman, T. A. Arias, S. T. Smith, SIAM J. Matrix Anal. Appl. 20,
//! 303 (1998), eq. 2.65, and É. Polack, G. Dusson, B. Stamm, F. Lipparini, J. Chem. Theory Comput. 17, 6965
//! (2021), eqs. 8–11, written with functions of ΓᵀΓ so that no singular vectors are needed: these
//! would be noise for small singular values.

use super::ScfError;
use super::orthogonal::{symmetric_eigen, symmetrise};
use nalgebra::DMatrix;

/// Below this cosine of a principal angle two spaces are too far apart for a logarithm.
const LEAST_COSINE: f64 = 0.05;

/// f(√M) for a positive symmetric matrix M, `f` given as a function of the root.
fn root_function(gram: DMatrix<f64>, f: impl Fn(f64) -> f64) -> Result<DMatrix<f64>, ScfError> {
    let (values, vectors) = symmetric_eigen(&gram)?;
    let mut scaled = vectors.clone();
    for (value, mut column) in values.iter().zip(scaled.column_iter_mut()) {
        column *= f(value.max(0.0).sqrt());
    }
    let mut product = scaled * vectors.transpose();
    symmetrise(&mut product);
    Ok(product)
}

fn gram(y: &DMatrix<f64>) -> DMatrix<f64> {
    let mut product = y.transpose() * y;
    symmetrise(&mut product);
    product
}

/// Orthonormal columns nearest to those of `y`: Y (YᵀY)^-½.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn orthonormalised(y: &DMatrix<f64>) -> Result<DMatrix<f64>, ScfError> {
    let inverse_root = root_function(gram(y), |norm| 1.0 / norm.max(1e-150))?;
    Ok(y * inverse_root)
}

/// The part of `matrix` (n × k) that is tangent at `y`: (1 − Y Yᵀ) · matrix.
#[must_use]
pub fn tangent_part(y: &DMatrix<f64>, matrix: &DMatrix<f64>) -> DMatrix<f64> {
    matrix - y * (y.transpose() * matrix)
}

/// The space reached from `y` along the tangent `gamma`: Y cos√M + Γ sin√M/√M with M = ΓᵀΓ.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn exponential(y: &DMatrix<f64>, gamma: &DMatrix<f64>) -> Result<DMatrix<f64>, ScfError> {
    let cosine = root_function(gram(gamma), f64::cos)?;
    let sinc = root_function(gram(gamma), |x| {
        if x < 1e-4 {
            1.0 - x * x / 6.0
        } else {
            x.sin() / x
        }
    })?;
    // Rounding would leave the columns orthonormal to 1e-15 only; many steps would add up.
    orthonormalised(&(y * cosine + gamma * sinc))
}

/// The tangent at `from` that leads to the space `to`; nothing if the two are nearly orthogonal somewhere.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn logarithm(from: &DMatrix<f64>, to: &DMatrix<f64>) -> Result<Option<DMatrix<f64>>, ScfError> {
    if from.ncols() == 0 {
        return Ok(Some(DMatrix::zeros(from.nrows(), 0)));
    }
    if smallest_cosine(from, to)? < LEAST_COSINE {
        return Ok(None);
    }
    let Some(inverse) = (from.transpose() * to).try_inverse() else {
        return Ok(None);
    };
    let steep = tangent_part(from, &(to * inverse));
    let flatten = root_function(gram(&steep), |x| {
        if x < 1e-4 {
            1.0 - x * x / 3.0
        } else {
            x.atan() / x
        }
    })?;
    Ok(Some(steep * flatten))
}

/// Smallest cosine of the principal angles between two spaces: 1 for the same space (or none at all).
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn smallest_cosine(one: &DMatrix<f64>, other: &DMatrix<f64>) -> Result<f64, ScfError> {
    if one.ncols() == 0 || other.ncols() == 0 {
        return Ok(1.0);
    }
    // The smaller space decides: with different numbers of columns some of the larger have no partner.
    let overlap = if one.ncols() >= other.ncols() {
        one.transpose() * other
    } else {
        other.transpose() * one
    };
    let (values, _) = symmetric_eigen(&gram(&overlap))?;
    Ok(values[0].clamp(0.0, 1.0).sqrt())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn space(seed: f64) -> DMatrix<f64> {
        let raw = DMatrix::from_fn(7, 3, |i, j| {
            ((i * 3 + j) as f64 * 1.7 + seed).sin() + if i == j { 3.0 } else { 0.0 }
        });
        orthonormalised(&raw).expect("three columns")
    }

    #[test]
    fn exponential_undoes_the_logarithm() {
        let (a, b) = (space(0.1), space(0.4));
        let gamma = logarithm(&a, &b).expect("small").expect("near");
        assert!((a.transpose() * &gamma).amax() < 1e-13);
        let back = exponential(&a, &gamma).expect("small");
        assert!((&back * back.transpose() - &b * b.transpose()).amax() < 1e-13);
    }

    #[test]
    fn small_tangents_keep_their_relative_precision() {
        let a = space(0.1);
        let gamma = tangent_part(&a, &space(1.3)) * 1e-9;
        let b = exponential(&a, &gamma).expect("small");
        let again = logarithm(&a, &b).expect("small").expect("near");
        // Rounding of the space itself, of order one, is all that may be lost.
        assert!((again - &gamma).amax() < 1e-14);
    }

    #[test]
    fn cosine_of_orthogonal_spaces_is_zero_and_of_equal_ones_one() {
        let one = DMatrix::<f64>::identity(5, 2);
        let mut other = DMatrix::<f64>::zeros(5, 2);
        other[(0, 0)] = 1.0;
        other[(3, 1)] = 1.0;
        assert!(smallest_cosine(&one, &other).expect("small") < 1e-12);
        assert!(logarithm(&one, &other).expect("small").is_none());
        assert!((smallest_cosine(&one, &one).expect("small") - 1.0).abs() < 1e-14);
    }

    #[test]
    fn empty_spaces_are_alike() {
        let none = DMatrix::<f64>::zeros(4, 0);
        assert!((smallest_cosine(&none, &none).expect("empty") - 1.0).abs() < 1e-15);
        assert_eq!(exponential(&none, &none).expect("empty").ncols(), 0);
    }
}
