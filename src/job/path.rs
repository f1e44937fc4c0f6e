//! The path through configuration space that a scan goes along, in atomic units.

use crate::scan::Sweep;
use crate::scan::sweep::positions_at;
use nalgebra::Vector3;
use std::f64::consts::PI;

/// How near to a straight angle a place counts as one, radian.
const STRAIGHT: f64 = 1e-6;

/// The path through configuration space that a scan goes along.
#[derive(Debug, Clone, Copy)]
pub(crate) struct ScanPath<'a> {
    /// The sweeps.
    pub sweeps: &'a [Sweep],
    /// Positions that they start from, bohr.
    pub input: &'a [Vector3<f64>],
}

impl ScanPath<'_> {
    /// Values in ångström or degree.
    pub(super) fn reported(&self, place: &[f64]) -> Vec<f64> {
        self.sweeps
            .iter()
            .zip(place)
            .map(|(s, &q)| s.motion.coordinate.to_reported(q))
            .collect()
    }

    /// Values of one sweep in bohr or radian.
    pub(super) fn axis(&self, sweep: usize) -> Vec<f64> {
        let sweep = &self.sweeps[sweep];
        sweep
            .values
            .iter()
            .map(|&v| sweep.motion.coordinate.from_reported(v))
            .collect()
    }

    /// Whether the one sweep bends a molecule that is straight at 180°: a bend beyond is the bend before it turned about
    /// the axis, so energies are even about 180°.
    pub(super) fn bends_straight_molecule(&self) -> bool {
        let [sweep] = self.sweeps else {
            return false;
        };
        if sweep.kind() != "angle" {
            return false;
        }
        let Ok(places) = positions_at(self.input, self.sweeps, &[180.0]) else {
            return false;
        };
        let &[first, .., last] = &places[..] else {
            return false;
        };
        let axis = (last - first).normalize();
        places.iter().all(|p| {
            let off = p - first;
            (off - axis * off.dot(&axis)).norm() < STRAIGHT
        })
    }

    /// Continues a curve that ends at the straight angle of a straight molecule by its mirror image; says whether it did.
    pub(super) fn continue_straight(&self, x: &mut Vec<f64>, energies: &mut Vec<f64>) -> bool {
        let ends = x.last().is_some_and(|last| (last - PI).abs() < STRAIGHT);
        if !(ends && self.bends_straight_molecule()) {
            return false;
        }
        let before = x.len() - 1;
        x.extend_from_within(..before);
        energies.extend_from_within(..before);
        for q in &mut x[before + 1..] {
            *q = 2.0 * PI - *q;
        }
        x[before + 1..].reverse();
        energies[before + 1..].reverse();
        true
    }

    /// Values (ångström or degree) at a place, and the sign that slopes have there: beyond the straight angle of a straight
    /// molecule stands the mirror image of what is before it.
    pub(super) fn unfolded(&self, place: &[f64]) -> (Vec<f64>, f64) {
        match place {
            [q] if *q > PI && self.bends_straight_molecule() => {
                (self.reported(&[2.0 * PI - q]), -1.0)
            }
            _ => (self.reported(place), 1.0),
        }
    }
}

/// Whether a place (bohr or radian) on a curve continued past 180° belongs to the curve itself.
pub(super) fn is_before_straight(x: f64) -> bool {
    x < PI + STRAIGHT
}
