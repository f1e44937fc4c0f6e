//! One-dimensional states by spectral elements: a second way, and one that takes a mass that varies.
//!
//! The range is cut into elements; in each the wavefunction is the polynomial through the
//! Gauss–Lobatto–Legendre nodes, and integrals are taken on these nodes, which makes the overlap matrix
//! diagonal (A. T. Patera, J. Comput. Phys. 54, 468 (1984)). Nothing is shared with the
//! discrete variable representation but the eigenvalue routine, so agreement of the two is a check of both.

use super::VibrationError;
use super::states::sorted_eigen;
use nalgebra::DMatrix;

/// Mesh of a spectral-element calculation.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Mesh {
    /// Lower end: the wavefunction vanishes here, unless `periodic`.
    pub lower: f64,
    /// Upper end.
    pub upper: f64,
    /// True when the two ends are one point.
    pub periodic: bool,
    /// Number of elements.
    pub elements: usize,
    /// Polynomial order in each element, at least 2.
    pub order: usize,
}

/// Legendre polynomial P_n(x) and P_{n−1}(x).
fn legendre(n: usize, x: f64) -> (f64, f64) {
    let (mut before, mut now) = (1.0, x);
    for k in 1..n {
        let k = k as f64;
        (before, now) = (now, ((2.0 * k + 1.0) * x * now - k * before) / (k + 1.0));
    }
    (now, before)
}

/// Gauss–Lobatto–Legendre nodes and weights on [−1, 1]: the ends and the zeros of P′_n
/// (C. Canuto et al., Spectral Methods, Springer 2006, section 2.3).
fn lobatto(order: usize) -> (Vec<f64>, Vec<f64>) {
    let n = order as f64;
    let nodes: Vec<f64> = (0..=order)
        .map(|j| {
            // Chebyshev–Lobatto points start Newton's method on (1 − x²)P′_n = n(P_{n−1} − xP_n).
            let mut x = -(std::f64::consts::PI * j as f64 / n).cos();
            if j == 0 || j == order {
                return x.signum();
            }
            for _ in 0..100 {
                let (p, q) = legendre(order, x);
                // d/dx of (1 − x²)P′_n is −n(n + 1)P_n.
                let step = n * (q - x * p) / (n * (n + 1.0) * p);
                x += step;
                if step.abs() < 1e-15 {
                    break;
                }
            }
            x
        })
        .collect();
    let weights = nodes
        .iter()
        .map(|&x| 2.0 / (n * (n + 1.0) * legendre(order, x).0.powi(2)))
        .collect();
    (nodes, weights)
}

/// Derivatives at node i of the polynomial that is 1 at node j.
fn differentiation(nodes: &[f64]) -> DMatrix<f64> {
    let size = nodes.len();
    let weight = |i: usize| -> f64 {
        (0..size)
            .filter(|&k| k != i)
            .map(|k| nodes[i] - nodes[k])
            .product()
    };
    let mut d = DMatrix::zeros(size, size);
    for i in 0..size {
        for j in 0..size {
            if i != j {
                d[(i, j)] = weight(i) / weight(j) / (nodes[i] - nodes[j]);
            }
        }
        d[(i, i)] = -(0..size).map(|j| d[(i, j)]).sum::<f64>();
    }
    d
}

/// The lowest `count` eigenvalues (hartree) of −½ d/dq g(q) d/dq + V(q).
///
/// `energy` V in hartree, `inverse_mass` g in 1/mₑ or 1/(mₑ bohr²), both functions of the coordinate in
/// bohr or radian. With a g that varies this is the part of the exact kinetic energy without its small
/// extra potential.
///
/// # Errors
/// A mesh with nothing in it, values that are not finite, or eigenvalues that do not converge.
pub fn eigenvalues(
    energy: impl Fn(f64) -> f64,
    inverse_mass: impl Fn(f64) -> f64,
    mesh: &Mesh,
    count: usize,
) -> Result<Vec<f64>, VibrationError> {
    let (lower, upper) = (mesh.lower, mesh.upper);
    let width = (upper - lower) / mesh.elements as f64;
    if mesh.elements == 0 || mesh.order < 2 || width.is_nan() || width <= 0.0 {
        return Err(VibrationError::Range { lower, upper });
    }
    let (nodes, weights) = lobatto(mesh.order);
    let d = differentiation(&nodes);
    let total = mesh.elements * mesh.order + 1;
    // Unknowns: all nodes of a circle, the inner ones of an interval.
    let unknown = |node: usize| match (mesh.periodic, node) {
        (true, n) => Some(n % (total - 1)),
        (false, 0) => None,
        (false, n) if n == total - 1 => None,
        (false, n) => Some(n - 1),
    };
    let size = if mesh.periodic { total - 1 } else { total - 2 };
    let mut stiffness: DMatrix<f64> = DMatrix::zeros(size, size);
    let mut mass = vec![0.0; size];
    let mut potential = vec![0.0; size];
    for e in 0..mesh.elements {
        let at = |k: usize| lower + width * (e as f64 + 0.5 * (nodes[k] + 1.0));
        for k in 0..=mesh.order {
            let Some(i) = unknown(e * mesh.order + k) else {
                continue;
            };
            mass[i] += 0.5 * width * weights[k];
            potential[i] = energy(at(k));
        }
        let g: Vec<f64> = (0..=mesh.order).map(|k| inverse_mass(at(k))).collect();
        for a in 0..=mesh.order {
            let Some(i) = unknown(e * mesh.order + a) else {
                continue;
            };
            for b in 0..=mesh.order {
                let Some(j) = unknown(e * mesh.order + b) else {
                    continue;
                };
                let sum: f64 = (0..=mesh.order)
                    .map(|k| weights[k] * g[k] * d[(k, a)] * d[(k, b)])
                    .sum();
                stiffness[(i, j)] += 0.5 * sum * 2.0 / width;
            }
        }
    }
    let floor = potential.iter().copied().fold(f64::INFINITY, f64::min);
    let mut h: DMatrix<f64> = DMatrix::from_fn(size, size, |i, j| {
        stiffness[(i, j)] / (mass[i] * mass[j]).sqrt()
    });
    for i in 0..size {
        h[(i, i)] += potential[i] - floor;
    }
    if !h.iter().all(|v| v.is_finite()) {
        return Err(VibrationError::NotFinite {
            what: "potential or inverse mass",
        });
    }
    let (values, _) = sorted_eigen(h)?;
    Ok(values.into_iter().take(count).map(|e| e + floor).collect())
}
