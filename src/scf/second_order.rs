//! Minimisation of the energy by a trust-region Newton method with exact Hessian products: the last
//! rung of the ladder, which never goes uphill.
//!
//! The quadratic model is minimised within the trust region by preconditioned conjugate gradients (T. Steihaug, SIAM
//! J. Numer. Anal. 20, 626 (1983)); directions of negative curvature are followed to the boundary.

use super::ScfError;
use super::canonical::{Canonical, Kappa, combined, hessian_products, inner, rotated, scaled};
use super::fock::{Evaluation, Field, Rotation};
use super::iteration::{self, Thresholds};
use super::settings::Method;
use crate::scf::StopReason;
use nalgebra::DMatrix;

/// First trust radius, in the norm √(κ·Dκ) with D the orbital-energy differences.
const FIRST_RADIUS: f64 = 0.4;
/// Largest trust radius.
const LARGEST_RADIUS: f64 = 2.0;
/// Orbital-energy differences below this are raised to it in the preconditioner, hartree.
const LEAST_GAP: f64 = 0.1;
/// Conjugate-gradient steps for one Newton step.
const INNER_STEPS: usize = 14;
/// Energy differences below this are rounding, hartree.
const ENERGY_NOISE: f64 = 2e-11;

/// Points along the path of the conjugate gradients with their products.
struct Path {
    points: Vec<(Kappa, Kappa)>,
    /// Whether the last point lies on a direction of negative curvature, to be followed to any boundary.
    negative: Option<(Kappa, Kappa)>,
}

/// The rotation kind within the method itself.
#[must_use]
pub fn internal_rotation(method: Method) -> Rotation {
    match method {
        Method::Rhf => Rotation::Singlet,
        Method::Uhf => Rotation::Unrestricted,
    }
}

fn preconditioner(orbitals: &[Canonical]) -> Kappa {
    orbitals
        .iter()
        .map(|o| o.gaps().map(|gap| gap.max(LEAST_GAP)))
        .collect()
}

fn multiplied(a: &[DMatrix<f64>], b: &[DMatrix<f64>]) -> Kappa {
    a.iter().zip(b).map(|(x, y)| x.component_mul(y)).collect()
}

fn divided(a: &[DMatrix<f64>], b: &[DMatrix<f64>]) -> Kappa {
    a.iter().zip(b).map(|(x, y)| x.component_div(y)).collect()
}

/// Length from `from` along `direction` to the boundary of the region of `radius`, in the norm of `metric`.
fn to_boundary(
    from: &[DMatrix<f64>],
    direction: &[DMatrix<f64>],
    metric: &[DMatrix<f64>],
    radius: f64,
) -> f64 {
    let weighted = multiplied(direction, metric);
    let a = inner(direction, &weighted);
    let b = inner(from, &weighted);
    let c = inner(from, &multiplied(from, metric)) - radius * radius;
    let root = (b * b - a * c).max(0.0).sqrt();
    if a > 0.0 { (root - b) / a } else { 0.0 }
}

/// Conjugate-gradient path for (A+B) κ = −g, to the boundary of the region or until the residual is small.
fn path(
    field: &mut Field<'_>,
    orbitals: &[Canonical],
    gradient: &[DMatrix<f64>],
    metric: &[DMatrix<f64>],
    radius: f64,
    budget: usize,
    converged: f64,
) -> Path {
    let kind = internal_rotation(field.occupation().method);
    let zero = scaled(gradient, 0.0);
    let (mut kappa, mut product) = (zero.clone(), zero);
    let mut residual = scaled(gradient, -1.0);
    let start = inner(gradient, &divided(gradient, metric)).sqrt();
    // No use in solving far below what counts as converged.
    let target = (start * start.sqrt().min(0.1)).max(0.3 * converged);
    let mut conditioned = divided(&residual, metric);
    let mut direction = conditioned.clone();
    let mut rho = inner(&residual, &conditioned);
    let mut points = Vec::new();
    for _ in 0..INNER_STEPS.min(budget.max(1)) {
        let Some(image) =
            hessian_products(field, orbitals, std::slice::from_ref(&direction), &[kind])
                .pop()
                .and_then(|mut images| images.pop())
        else {
            break;
        };
        let curvature = inner(&direction, &image);
        if curvature <= 1e-12 * inner(&direction, &direction) {
            return Path {
                points,
                negative: Some((direction, image)),
            };
        }
        let length = rho / curvature;
        kappa = combined(&kappa, length, &direction);
        product = combined(&product, length, &image);
        residual = combined(&residual, -length, &image);
        points.push((kappa.clone(), product.clone()));
        conditioned = divided(&residual, metric);
        let next = inner(&residual, &conditioned);
        let outside = inner(&kappa, &multiplied(&kappa, metric)).sqrt() > radius;
        if outside || next.sqrt() < target {
            break;
        }
        direction = combined(&conditioned, next / rho, &direction);
        rho = next;
    }
    Path {
        points,
        negative: None,
    }
}

/// The last point of a path within the trust region, with its product; where the path leaves the region,
/// the point on the boundary.
fn cut(
    path: &Path,
    gradient: &[DMatrix<f64>],
    metric: &[DMatrix<f64>],
    radius: f64,
) -> (Kappa, Kappa) {
    let zero = scaled(gradient, 0.0);
    let mut here = (zero.clone(), zero);
    let ends = path.points.iter().cloned().map(|(k, p)| (k, p, false));
    for (kappa, product, _) in ends {
        if inner(&kappa, &multiplied(&kappa, metric)).sqrt() > radius {
            let direction = combined(&kappa, -1.0, &here.0);
            let image = combined(&product, -1.0, &here.1);
            let length = to_boundary(&here.0, &direction, metric, radius);
            return (
                combined(&here.0, length, &direction),
                combined(&here.1, length, &image),
            );
        }
        here = (kappa, product);
    }
    if let Some((direction, image)) = &path.negative {
        let length = to_boundary(&here.0, direction, metric, radius);
        here = (
            combined(&here.0, length, direction),
            combined(&here.1, length, image),
        );
    }
    here
}

/// Minimises the energy from a determinant until the thresholds are met or `limit` passes over the
/// integrals have been spent by `field` in all. Returns the lowest determinant found.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn minimise(
    field: &mut Field<'_>,
    start: Evaluation,
    thresholds: &Thresholds,
    limit: usize,
) -> Result<(Evaluation, StopReason), ScfError> {
    let weight = field.occupation().weight();
    let mut here = start;
    let mut radius = FIRST_RADIUS;
    let mut last_energy = None;
    loop {
        if iteration::is_converged(field, &here, last_energy, thresholds)? {
            return Ok((here, StopReason::Converged));
        }
        let orbitals = Canonical::of(field, &here)?;
        let gradient: Kappa = orbitals
            .iter()
            .zip(&here.focks)
            .map(|(o, f)| o.off_diagonal(f))
            .collect();
        let metric = preconditioner(&orbitals);
        let spent = field.passes();
        if spent >= limit {
            return Ok((here, StopReason::IterationLimit));
        }
        let path = path(
            field,
            &orbitals,
            &gradient,
            &metric,
            radius,
            limit - spent,
            thresholds.commutator,
        );
        loop {
            let (kappa, product) = cut(&path, &gradient, &metric, radius);
            let predicted = weight * (2.0 * inner(&gradient, &kappa) + inner(&kappa, &product));
            let trial = field.evaluate(rotated(&orbitals, &kappa)?);
            if !trial.energy.is_finite() {
                return Ok((here, StopReason::NotFinite));
            }
            let actual = trial.energy - here.energy;
            let length = inner(&kappa, &multiplied(&kappa, &metric)).sqrt();
            let rounding = predicted.abs() < ENERGY_NOISE
                && actual.abs() < ENERGY_NOISE
                && trial.commutator < here.commutator;
            let ratio = actual / predicted;
            if !rounding && ratio < 0.25 {
                radius = 0.3 * length;
            } else if ratio > 0.7 && length > 0.9 * radius {
                radius = (2.0 * radius).min(LARGEST_RADIUS);
            }
            if rounding || actual < 0.0 {
                last_energy = Some(here.energy);
                here = trial;
                break;
            }
            if field.passes() >= limit {
                return Ok((here, StopReason::IterationLimit));
            }
            if radius < 1e-7 {
                // No step lowers the energy any more: rounding has been reached.
                return Ok((here, StopReason::IterationLimit));
            }
        }
    }
}
