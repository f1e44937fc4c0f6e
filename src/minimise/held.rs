//! Coordinates held at their values exactly.

use super::coordinates::{rows, shift};
use super::primitive::Primitive;
use super::{Held, MinimiseError};
use crate::molecule::frame::fixed_perpendicular;
use crate::molecule::internal::Coordinate;
use nalgebra::{DVector, Vector3};
use std::f64::consts::PI;

/// An angle held this near to 180° (radian) is held straight by two linear bends: the angle itself has no derivative
/// there.
const STRAIGHT: f64 = 1e-4;

/// A held coordinate as conditions on positions.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Condition {
    pub(super) primitive: Primitive,
    pub(super) value: f64,
}

/// The conditions that hold coordinates, at positions near to where they hold.
pub(super) fn conditions(
    held: &[Held],
    positions: &[Vector3<f64>],
) -> Result<Vec<Condition>, MinimiseError> {
    let mut conditions = Vec::with_capacity(held.len());
    for &Held { coordinate, value } in held {
        coordinate.validate(positions.len())?;
        coordinate.check(positions)?;
        match coordinate {
            Coordinate::Angle(atoms @ [a, _, c]) if PI - value < STRAIGHT => {
                let along = positions[c] - positions[a];
                let first = fixed_perpendicular(&along);
                for direction in [first, along.normalize().cross(&first)] {
                    conditions.push(Condition {
                        primitive: Primitive::LinearBend { atoms, direction },
                        value: 0.0,
                    });
                }
            }
            _ => conditions.push(Condition {
                primitive: Primitive::Internal(coordinate),
                value,
            }),
        }
    }
    Ok(conditions)
}

/// How far each condition is from being met.
pub(super) fn rest(conditions: &[Condition], positions: &[Vector3<f64>]) -> DVector<f64> {
    DVector::from_iterator(
        conditions.len(),
        conditions.iter().map(|c| {
            c.primitive
                .difference(c.value, c.primitive.value(positions))
        }),
    )
}

/// Moves all atoms as little as possible so that every condition is met: Newton's method with the pseudo-inverse of the
/// conditions' B matrix.
pub(super) fn impose(
    conditions: &[Condition],
    positions: &mut [Vector3<f64>],
) -> Result<(), MinimiseError> {
    const MOST_ITERATIONS: usize = 60;
    /// bohr or radian; rounding leaves 1e-14.
    const MET: f64 = 1e-11;
    if conditions.is_empty() {
        return Ok(());
    }
    let primitives: Vec<Primitive> = conditions.iter().map(|c| c.primitive).collect();
    for _ in 0..MOST_ITERATIONS {
        let rest = rest(conditions, positions);
        if rest.amax() < MET {
            return Ok(());
        }
        let b = rows(&primitives, positions);
        let inverse = b
            .pseudo_inverse(1e-9)
            .map_err(|_| MinimiseError::NotFinite)?;
        let step = inverse * rest;
        // A long way is gone in pieces: the rows change on the way.
        let scale = (0.5 / step.amax().max(1e-300)).min(1.0);
        if !step.amax().is_finite() {
            return Err(MinimiseError::NotFinite);
        }
        shift(positions, &step, scale);
    }
    let rest = rest(conditions, positions);
    let worst = rest.iamax();
    let (kind, off, unit) = match conditions[worst].primitive {
        Primitive::Internal(c) => (c.kind_word(), c.to_reported(rest[worst]), c.unit_word()),
        _ => ("angle", rest[worst].to_degrees(), "degree"),
    };
    Err(MinimiseError::Contradiction { kind, off, unit })
}

/// The gradient (3N) without its components along the held coordinates.
pub(super) fn free_gradient(
    conditions: &[Condition],
    positions: &[Vector3<f64>],
    gradient: &DVector<f64>,
) -> Result<DVector<f64>, MinimiseError> {
    if conditions.is_empty() {
        return Ok(gradient.clone());
    }
    let primitives: Vec<Primitive> = conditions.iter().map(|c| c.primitive).collect();
    let b = rows(&primitives, positions);
    let inverse = b
        .clone()
        .pseudo_inverse(1e-9)
        .map_err(|_| MinimiseError::NotFinite)?;
    Ok(gradient - inverse * (b * gradient))
}
