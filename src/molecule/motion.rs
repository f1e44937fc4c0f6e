//! Rigid motions: one side of a bond, vertex or axis moves so that one internal coordinate takes a value.

use super::Molecule;
use super::connectivity::Connectivity;
use super::frame::{COLLINEAR_SINE, sine_between, turn};
use super::internal::{Coordinate, CoordinateError, angle_axis};
pub use super::motion_error::MotionError;
use super::side::{default_side, requested_side};
use nalgebra::Vector3;
use std::f64::consts::PI;

/// A coordinate and the atoms that move rigidly when it is set; all other atoms keep their positions bit for bit.
///
/// - bond [a, b]: the side of b (or of a) is shifted along the bond;
/// - angle [a, b, c]: the side of c (or of a) is turned about b in the plane of the three atoms; where they are on one
///   line, in the plane that [`Coordinate::derivative`] names;
/// - dihedral [a, b, c, d]: the side of d (or of a) is turned about the axis through b and c. Atoms on the axis stay.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Motion {
    /// The coordinate that is set.
    pub coordinate: Coordinate,
    /// Indices of the atoms that move, ascending: exactly one end of the coordinate is among them.
    pub moves: Vec<usize>,
}

impl Motion {
    /// Finds the atoms that move. Without `requested`: taking out the bond [a, b], the vertex b of an angle or the bond
    /// b–c of a dihedral leaves the sides of the two ends (whole fragments where nothing joined them), and the side
    /// with fewer basis functions moves, of equals the side of the end written last.
    /// `functions_per_atom` holds the number of basis functions of each atom. A dihedral axis whose ends are joined
    /// through atoms on the axis itself (an allene, an alkyne) is cut at the first bond of that way.
    ///
    /// # Errors
    /// A meaningless coordinate; ends that are still joined (a ring) without `requested`; a `requested` list that does
    /// not hold exactly one end, or holds the vertex, or the axis atom next to the end that stays.
    pub fn resolve(
        coordinate: Coordinate,
        molecule: &Molecule,
        connectivity: &Connectivity,
        functions_per_atom: &[usize],
        requested: Option<&[usize]>,
    ) -> Result<Self, MotionError> {
        coordinate.validate(molecule.atoms.len())?;
        coordinate.check(&molecule.positions)?;
        let moves = match requested {
            Some(atoms) => requested_side(coordinate, molecule, atoms)?,
            None => default_side(coordinate, molecule, connectivity, functions_per_atom)?,
        };
        Ok(Self { coordinate, moves })
    }

    /// Whether the end written last is the one that moves.
    fn moves_last(&self) -> bool {
        self.coordinate
            .atoms()
            .last()
            .is_some_and(|end| self.moves.contains(end))
    }

    /// Moves the atoms so that the coordinate has `value` (bohr or radian; any dihedral, which is set the short way
    /// round). Positions in bohr.
    ///
    /// # Errors
    /// A bond that is not positive, an angle outside [0, π], a value that is not finite; atoms on one spot; a dihedral
    /// of three atoms on one line. The positions are then untouched.
    pub fn set(&self, positions: &mut [Vector3<f64>], value: f64) -> Result<(), MotionError> {
        let value = self.checked_value(value)?;
        self.coordinate.check(positions)?;
        let change = self
            .coordinate
            .difference(value, self.coordinate.value(positions));
        let sign = if self.moves_last() { 1.0 } else { -1.0 };
        match self.coordinate {
            Coordinate::Bond([a, b]) => {
                let step = (positions[b] - positions[a]).normalize() * (sign * change);
                for &i in &self.moves {
                    positions[i] += step;
                }
            }
            Coordinate::Angle([a, b, c]) => {
                let (moving, staying) = if self.moves_last() { (c, a) } else { (a, c) };
                let centre = positions[b];
                let arm = (positions[staying] - centre).normalize();
                let axis = angle_axis(positions, [a, b, c]);
                let axis = (axis - arm * arm.dot(&axis)).normalize();
                self.turn_all(positions, &centre, &axis, sign * change);
                // Where the angle was straight only to rounding, the arm was not exactly in the plane of the bend.
                let goal = arm * value.cos() + axis.cross(&arm) * (sign * value.sin());
                let reached = (positions[moving] - centre).normalize();
                let rest = reached.cross(&goal);
                let sine = rest.norm();
                if sine > 4.0 * f64::EPSILON {
                    self.turn_all(positions, &centre, &(rest / sine), sine.min(1.0).asin());
                }
            }
            Coordinate::Dihedral([_, b, c, _]) => {
                let axis = (positions[c] - positions[b]).normalize();
                let centre = if self.moves_last() {
                    positions[c]
                } else {
                    positions[b]
                };
                self.turn_all(positions, &centre, &axis, sign * change);
            }
        }
        Ok(())
    }

    /// Displacements of all atoms (bohr) per unit of the coordinate (bohr or radian) in this motion, zero for those
    /// that stay: dE/dq is their scalar product with the Cartesian gradient. Where the coordinate is undefined
    /// (atoms on one spot) all are zero.
    #[must_use]
    pub fn displacement(&self, positions: &[Vector3<f64>]) -> Vec<Vector3<f64>> {
        let mut displacement = vec![Vector3::zeros(); positions.len()];
        let coincident = matches!(
            self.coordinate.check(positions),
            Err(CoordinateError::Coincident { .. })
        );
        if coincident {
            return displacement;
        }
        let sign = if self.moves_last() { 1.0 } else { -1.0 };
        let (axis, centre) = match self.coordinate {
            Coordinate::Bond([a, b]) => {
                let along = (positions[b] - positions[a]).normalize() * sign;
                for &i in &self.moves {
                    displacement[i] = along;
                }
                return displacement;
            }
            Coordinate::Angle([a, b, c]) => (angle_axis(positions, [a, b, c]), positions[b]),
            Coordinate::Dihedral([_, b, c, _]) => {
                let centre = if self.moves_last() {
                    positions[c]
                } else {
                    positions[b]
                };
                ((positions[c] - positions[b]).normalize(), centre)
            }
        };
        for &i in &self.moves {
            displacement[i] = axis.cross(&(positions[i] - centre)) * sign;
        }
        displacement
    }

    fn turn_all(
        &self,
        positions: &mut [Vector3<f64>],
        centre: &Vector3<f64>,
        axis: &Vector3<f64>,
        angle: f64,
    ) {
        for &i in &self.moves {
            let arm = positions[i] - centre;
            positions[i] += turn(axis, angle, &arm);
        }
    }

    /// The value itself, or why it cannot be set. An angle outside its range by no more than the rounding of a grid
    /// (start + i · step) is taken for the end of the range.
    fn checked_value(&self, value: f64) -> Result<f64, MotionError> {
        const ROUNDING: f64 = 1e-13;
        let value_degree = value.to_degrees();
        match self.coordinate {
            Coordinate::Bond(_) if !(value.is_finite() && value > 0.0) => {
                Err(MotionError::BondRange { value })
            }
            Coordinate::Angle(_) if !(-ROUNDING..=PI + ROUNDING).contains(&value) => {
                Err(MotionError::AngleRange { value_degree })
            }
            Coordinate::Angle(_) => Ok(value.clamp(0.0, PI)),
            Coordinate::Dihedral(_) if !value.is_finite() => {
                Err(MotionError::DihedralRange { value_degree })
            }
            _ => Ok(value),
        }
    }

    /// How far from `value` the coordinate may be and still count as set: 1e-12 of the value (of one radian for
    /// angles), and what rounding of the positions leaves in a dihedral whose atoms are nearly on one line.
    fn tolerance(&self, positions: &[Vector3<f64>], value: f64) -> f64 {
        const RELATIVE: f64 = 1e-12;
        match self.coordinate {
            Coordinate::Bond(_) => RELATIVE * value.abs(),
            Coordinate::Angle(_) => RELATIVE,
            Coordinate::Dihedral([a, b, c, d]) => {
                let axis = positions[c] - positions[b];
                let sine = sine_between(&(positions[a] - positions[b]), &axis)
                    .min(sine_between(&(positions[d] - positions[c]), &axis))
                    .max(COLLINEAR_SINE);
                RELATIVE + 16.0 * f64::EPSILON / sine
            }
        }
    }
}

/// Rounds of [`set_all`] before giving up: coordinates that influence each other settle by a constant factor per
/// round, and one that needs more than this is practically one that never settles.
const MOST_ROUNDS: usize = 1000;

/// Sets several coordinates (bohr or radian) at once: each in turn, all over again until every one holds to 1e-12
/// relative (angles: radian). Positions in bohr.
///
/// # Errors
/// Those of [`Motion::set`], and coordinates that cannot hold together. The positions are then untouched.
pub fn set_all(
    motions: &[(Motion, f64)],
    positions: &mut [Vector3<f64>],
) -> Result<(), MotionError> {
    let mut moved = positions.to_vec();
    for (motion, value) in motions {
        motion.set(&mut moved, *value)?;
    }
    let mut rounds = 1;
    loop {
        let mut worst: Option<(usize, f64, f64)> = None;
        for (place, (motion, value)) in motions.iter().enumerate() {
            motion.coordinate.check(&moved)?;
            let off = motion
                .coordinate
                .difference(*value, motion.coordinate.value(&moved))
                .abs();
            let excess = off / motion.tolerance(&moved, *value);
            if excess > 1.0 && worst.is_none_or(|(_, _, most)| excess > most) {
                worst = Some((place, off, excess));
            }
        }
        let Some((place, off, _)) = worst else {
            positions.copy_from_slice(&moved);
            return Ok(());
        };
        if rounds == MOST_ROUNDS {
            let coordinate = motions[place].0.coordinate;
            return Err(MotionError::Contradiction {
                place,
                kind: coordinate.kind_word(),
                off: coordinate.to_reported(off),
                unit: coordinate.unit_word(),
                rounds,
            });
        }
        for (motion, value) in motions {
            motion.set(&mut moved, *value)?;
        }
        rounds += 1;
    }
}

#[cfg(test)]
mod tests;
