//! Seeds near the onset of spin polarisation, where occupied spaces are no polynomials of the swept coordinate.
//!
//! Past the onset at x₀ the α and β spaces part like √(x − x₀): polynomials through them fail for several points. Their
//! midpoint M, the direction in which they part, and the *square* of how far they part are smooth through
//! the onset (a pitchfork bifurcation), and are extrapolated instead. Before the onset the square goes on below zero, in proportion to
//! the eigenvalue λ of the orbital Hessian: the broken solution just behind it has the eigenvalue −2λ of the symmetric one.

use super::ScfError;
use super::grassmann::{exponential, logarithm, orthonormalised, smallest_cosine, tangent_part};
use super::seed::{Seed, is_swapped, polynomial_weights};
use nalgebra::DMatrix;

/// Farther apart than this (smallest cosine) the spins have left the neighbourhood of the onset.
const LEAST_COSINE: f64 = 0.35;
/// Highest order for the midpoint and for the square of the distance.
const ORDER: usize = 3;

/// α and β spaces of one point, taken apart.
struct Parted {
    midpoint: DMatrix<f64>,
    /// Tangent at the midpoint towards β, unit norm; nothing for a symmetric point.
    direction: Option<DMatrix<f64>>,
    /// Square of the distance from the midpoint to either; below zero before the onset.
    square: Option<f64>,
}

/// Spaces expected near an onset.
#[derive(Debug, Clone)]
pub struct OnsetPrediction {
    /// Occupied orbitals of the frame, α and β.
    pub occupied: Vec<DMatrix<f64>>,
    /// Estimated error: distance between the highest order and the one below.
    pub estimate: f64,
}

fn part(seed: &Seed, reference: Option<&[DMatrix<f64>]>) -> Result<Option<Parted>, ScfError> {
    let [alpha, beta] = seed.state().occupied.as_slice() else {
        return Ok(None);
    };
    let swapped = match reference {
        Some(other) => is_swapped(&seed.state().occupied, other)?,
        None => false,
    };
    let (alpha, beta) = if swapped {
        (beta, alpha)
    } else {
        (alpha, beta)
    };
    if !seed.is_polarised() {
        return Ok(Some(Parted {
            midpoint: alpha.clone(),
            direction: None,
            square: None,
        }));
    }
    if smallest_cosine(alpha, beta)? < LEAST_COSINE {
        return Ok(None);
    }
    let Some(across) = logarithm(alpha, beta)? else {
        return Ok(None);
    };
    let midpoint = exponential(alpha, &(across * 0.5))?;
    let Some(outwards) = logarithm(&midpoint, beta)? else {
        return Ok(None);
    };
    let square = outwards.norm_squared();
    Ok(Some(Parted {
        direction: Some(outwards / square.sqrt()),
        square: Some(square),
        midpoint,
    }))
}

/// Value at `target` of the polynomial through the first `degree + 1` points.
fn extrapolated(at: &[&[f64]], values: &[f64], target: &[f64], degree: usize) -> Option<f64> {
    let count = degree + 1;
    if values.len() < count {
        return None;
    }
    let weights = polynomial_weights(&at[..count], target, degree)?;
    Some(weights.iter().zip(values).map(|(w, v)| w * v).sum())
}

/// The α and β spaces expected at `target` when the newest point is spin-polarised; points oldest first. Nothing where the
/// spins are far apart, the numbers of α and β electrons differ, or the points do not lie on one line.
///
/// # Errors
/// [`ScfError::Eigenproblem`].
pub fn predict(
    points: &[(&[f64], &Seed)],
    target: &[f64],
) -> Result<Option<OnsetPrediction>, ScfError> {
    let Some(((newest_at, newest), older)) = points.split_last() else {
        return Ok(None);
    };
    let base = &newest.state().occupied;
    let equal = matches!(base.as_slice(), [a, b] if a.shape() == b.shape());
    if !equal || !newest.is_polarised() {
        return Ok(None);
    }
    let Some(first) = part(newest, None)? else {
        return Ok(None);
    };
    let (Some(first_direction), Some(first_square)) = (&first.direction, first.square) else {
        return Ok(None);
    };
    let mut at: Vec<&[f64]> = vec![newest_at];
    let mut tangents = vec![&first.midpoint * 0.0];
    let mut directions = vec![first_direction.clone()];
    let mut squares = vec![first_square];
    // Square of the distance per eigenvalue, from the polarised point nearest to the onset.
    let mut per_eigenvalue = newest
        .state()
        .lowest_eigenvalue
        .filter(|&value| value > 0.0)
        .map(|value| 2.0 * first_square / value);
    let mut squares_end = false;
    for (place, seed) in older.iter().rev().take(ORDER + 1) {
        let fits = place.len() == target.len()
            && seed.state().kept == newest.state().kept
            && seed.state().occupied.len() == 2
            && seed.state().occupied[0].shape() == base[0].shape();
        if !fits || at.contains(place) {
            break;
        }
        let Some(parted) = part(seed, Some(base))? else {
            break;
        };
        // The columns of neighbouring midpoints are turned to match before directions are compared.
        let turn = orthonormalised(&(parted.midpoint.transpose() * &first.midpoint))?;
        let Some(tangent) = logarithm(&first.midpoint, &parted.midpoint)? else {
            break;
        };
        at.push(place);
        tangents.push(tangent);
        let eigenvalue = seed.state().lowest_eigenvalue;
        let square = match (parted.square, eigenvalue, per_eigenvalue) {
            (Some(square), _, _) => Some(square),
            (None, Some(value), Some(factor)) => Some(-value.abs() * factor),
            _ => None,
        };
        match square {
            Some(square) if !squares_end => squares.push(square),
            _ => squares_end = true,
        }
        if let (Some(direction), Some(square)) = (parted.direction, parted.square) {
            if directions.len() + 1 == at.len() {
                directions.push(tangent_part(&first.midpoint, &(direction * &turn)));
            }
            if let Some(value) = eigenvalue.filter(|&value| value > 0.0) {
                per_eigenvalue = Some(2.0 * square / value);
            }
        }
    }
    let spaces = |order: usize| -> Result<Option<Vec<DMatrix<f64>>>, ScfError> {
        let midpoint_order = order.min(at.len() - 1);
        let Some(weights) = polynomial_weights(&at[..=midpoint_order], target, midpoint_order)
        else {
            return Ok(None);
        };
        let mut towards = &tangents[0] * 0.0;
        for (weight, tangent) in weights.iter().zip(&tangents) {
            towards += tangent * *weight;
        }
        let midpoint = exponential(&first.midpoint, &towards)?;
        let Some(square) = extrapolated(&at, &squares, target, order.min(squares.len() - 1)) else {
            return Ok(None);
        };
        if square <= 0.0 {
            return Ok(Some(vec![midpoint.clone(), midpoint]));
        }
        let mut direction = directions[0].clone();
        if order > 0
            && directions.len() > 1
            && let Some(weights) = polynomial_weights(&at[..2], target, 1)
        {
            direction = &directions[0] * weights[0] + &directions[1] * weights[1];
        }
        // Carried along to the new midpoint.
        let turn = orthonormalised(&(first.midpoint.transpose() * &midpoint))?;
        let direction = tangent_part(&midpoint, &(direction * turn));
        let step = &direction * (square.sqrt() / direction.norm().max(1e-12));
        Ok(Some(vec![
            exponential(&midpoint, &-&step)?,
            exponential(&midpoint, &step)?,
        ]))
    };
    let mut best: Option<OnsetPrediction> = None;
    let mut below = spaces(0)?;
    for order in 1..=ORDER.min(at.len() - 1) {
        let here = spaces(order)?;
        if let (Some(here), Some(below)) = (&here, &below) {
            let estimate = here
                .iter()
                .zip(below)
                .map(|(y, z)| (y * y.transpose() - z * z.transpose()).norm_squared())
                .sum::<f64>()
                .sqrt()
                / std::f64::consts::SQRT_2;
            if best.as_ref().is_none_or(|b| estimate < b.estimate) {
                best = Some(OnsetPrediction {
                    occupied: here.clone(),
                    estimate,
                });
            }
        }
        below = here;
    }
    Ok(best)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::scf::seed::SeedState;

    /// Two electrons in six functions: spaces that part like √(x − 1) along a turning direction, around a moving midpoint.
    fn seed(x: f64) -> Seed {
        let raw = DMatrix::from_fn(6, 1, |i, _| {
            if i == 0 {
                1.0
            } else {
                0.1 * (x * i as f64).sin()
            }
        });
        let midpoint = orthonormalised(&raw).expect("one column");
        let aside = DMatrix::from_fn(6, 1, |i, _| if i == 3 { 1.0 } else { 0.05 * x * i as f64 });
        let direction = tangent_part(&midpoint, &aside);
        let square = 0.6 * (x - 1.0) + 0.2 * (x - 1.0).powi(2);
        let step = &direction * (square.max(0.0).sqrt() / direction.norm());
        let value = if square > 0.0 { 2.0 * square } else { -square };
        Seed::new(SeedState {
            occupied: vec![
                exponential(&midpoint, &-&step).expect("one column"),
                exponential(&midpoint, &step).expect("one column"),
            ],
            kept: 6,
            differences: Vec::new(),
            internal: None,
            triplet: None,
            lowest_eigenvalue: Some(value),
        })
    }

    fn error(at: &[f64], target: f64) -> (f64, f64) {
        let seeds: Vec<Seed> = at.iter().map(|&x| seed(x)).collect();
        let places: Vec<[f64; 1]> = at.iter().map(|&x| [x]).collect();
        let points: Vec<(&[f64], &Seed)> = places
            .iter()
            .zip(&seeds)
            .map(|(p, s)| (&p[..], s))
            .collect();
        let truth = seed(target);
        let distance = |occupied: &[DMatrix<f64>]| {
            occupied
                .iter()
                .zip(&truth.state().occupied)
                .map(|(y, z)| (y * y.transpose() - z * z.transpose()).norm())
                .sum::<f64>()
        };
        let found = predict(&points, &[target])
            .expect("small")
            .expect("near the onset");
        let last = seeds.last().expect("points");
        (distance(&found.occupied), distance(&last.state().occupied))
    }

    #[test]
    fn one_polarised_point_is_enough_with_eigenvalues_before_it() {
        let (found, carried) = error(&[0.85, 0.9, 0.95, 1.02], 1.07);
        assert!(found < 0.1 * carried, "{found} against {carried}");
    }

    #[test]
    fn spins_join_again_on_the_way_back() {
        let (found, carried) = error(&[1.22, 1.17, 1.12, 1.07, 1.02], 0.97);
        assert!(found < 0.05 * carried, "{found} against {carried}");
    }
}
