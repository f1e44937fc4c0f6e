//! Directions and rigid rotations shared by internal coordinates, rigid motions and z-matrices.

use nalgebra::Vector3;

/// Below this sine of an angle (about 0.2 seconds of arc from a straight line) three atoms count as collinear.
///
/// The direction perpendicular to the line then comes from differences that lost six or more of their
/// sixteen digits, and input written with ordinary precision is straight to about this much anyway.
pub const COLLINEAR_SINE: f64 = 1e-6;

/// A unit vector perpendicular to `direction` (any non-zero length) that depends on nothing else: the
/// Cartesian axis least along it, the first of (nearly) equals, made orthogonal.
#[must_use]
pub fn fixed_perpendicular(direction: &Vector3<f64>) -> Vector3<f64> {
    let unit = direction.normalize();
    let mut least = 0;
    for axis in 1..3 {
        // The margin keeps the choice where it is when the direction tilts a little, as it does while a molecule
        // along z begins to bend.
        if unit[axis].abs() < unit[least].abs() - 0.01 {
            least = axis;
        }
    }
    let mut perpendicular = Vector3::zeros();
    perpendicular[least] = 1.0;
    perpendicular -= unit * unit[least];
    perpendicular.normalize()
}

/// A unit vector perpendicular to the line through `centre` along `direction`, for bending something that
/// is straight: it points away from the first atom that is off the line, so that the bend keeps that atom's
/// plane; where every atom is on the line, [`fixed_perpendicular`].
#[must_use]
pub fn bending_direction(
    centre: &Vector3<f64>,
    direction: &Vector3<f64>,
    positions: &[Vector3<f64>],
) -> Vector3<f64> {
    // An atom nearer to the line than this says nothing reliable about a plane: hundred times what already
    // counts as straight.
    const OFF_LINE_SINE: f64 = 100.0 * COLLINEAR_SINE;
    let unit = direction.normalize();
    positions
        .iter()
        .map(|position| {
            let arm = position - centre;
            (arm.norm(), arm - unit * unit.dot(&arm))
        })
        .find(|(length, off)| off.norm() > OFF_LINE_SINE * length.max(1.0))
        .map_or_else(
            || fixed_perpendicular(direction),
            |(_, off)| {
                let away = -off.normalize();
                (away - unit * unit.dot(&away)).normalize()
            },
        )
}

/// Sine of the angle between two vectors; 0 if one of them has no length.
#[must_use]
pub fn sine_between(one: &Vector3<f64>, other: &Vector3<f64>) -> f64 {
    let scale = one.norm() * other.norm();
    if scale > 0.0 {
        one.cross(other).norm() / scale
    } else {
        0.0
    }
}

/// How far `arm` (from a point on the axis) moves when turned by `angle` radian about the unit vector `axis`,
/// right-handed: (R − 1)·arm, which is exactly zero for an arm of no length and for no turn.
#[must_use]
pub fn turn(axis: &Vector3<f64>, angle: f64, arm: &Vector3<f64>) -> Vector3<f64> {
    let across = axis.cross(arm);
    let half = (0.5 * angle).sin();
    across * angle.sin() + axis.cross(&across) * (2.0 * half * half)
}

/// Sine and cosine of an angle in degree, exact at whole multiples of 90°.
#[must_use]
pub fn sine_cosine_of_degrees(degrees: f64) -> (f64, f64) {
    let quarters = (degrees / 90.0).round();
    let (sine, cosine) = (degrees - 90.0 * quarters).to_radians().sin_cos();
    match quarters.rem_euclid(4.0) {
        q if q < 0.5 => (sine, cosine),
        q if q < 1.5 => (cosine, -sine),
        q if q < 2.5 => (-sine, -cosine),
        _ => (-cosine, sine),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn right_angles_are_exact() {
        let exact = |degrees: f64| {
            let (s, c) = sine_cosine_of_degrees(degrees);
            [s.to_bits() << 1, c.to_bits() << 1]
        };
        let zero = 0.0_f64.to_bits() << 1;
        let one = 1.0_f64.to_bits() << 1;
        for turns in [-720.0, 0.0, 360.0] {
            assert_eq!(exact(turns), [zero, one]);
            assert_eq!(exact(turns + 90.0), [one, zero]);
            assert_eq!(exact(turns + 180.0), [zero, one]);
            assert_eq!(exact(turns - 90.0), [one, zero]);
        }
    }

    #[test]
    fn sines_of_degrees_agree_with_those_of_radians() {
        for step in -800..800 {
            let degrees = f64::from(step) * 0.9173;
            let (s, c) = sine_cosine_of_degrees(degrees);
            let radians = degrees.to_radians();
            assert!((s - radians.sin()).abs() < 1e-14, "sine of {degrees}");
            assert!((c - radians.cos()).abs() < 1e-14, "cosine of {degrees}");
        }
    }

    #[test]
    fn a_bend_of_a_straight_line_keeps_the_plane_of_the_first_atom_off_it() {
        let positions = [
            Vector3::new(0.0, 0.0, -2.0),
            Vector3::zeros(),
            Vector3::new(0.0, 0.0, 2.0),
            Vector3::new(0.6, 0.8, 5.0),
        ];
        let bend = bending_direction(&positions[1], &Vector3::new(0.0, 0.0, 3.0), &positions);
        assert!((bend - Vector3::new(-0.6, -0.8, 0.0)).norm() < 1e-15);
        let alone = bending_direction(&positions[1], &Vector3::z(), &positions[..3]);
        assert!((alone - Vector3::x()).norm() < 1e-15);
    }
}
