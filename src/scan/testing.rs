//! Where solutions are tested for stability, and where a test nearby vouches for them.
//!
//! The lowest eigenvalue of an orbital Hessian changes smoothly along a sweep. Between tests it is predicted by a
//! straight line through the last two; a point is tested when the prediction, its change doubled, changes sign, and
//! at the latest every 0.2 Å or 10° (distances that a numerical trial on N₂ found to miss no onset).

use crate::scf::stability::UNSTABLE;
use crate::surface::StabilityRecord;

/// Longest distance from the last test, Å.
const LONGEST_ANGSTROM: f64 = 0.2;
/// Longest distance from the last test, degree.
const LONGEST_DEGREE: f64 = 10.0;
/// Eigenvalue (hartree) below which every solution is tested.
const SOFT: f64 = 5e-4;
/// Factor by which the change of an eigenvalue may exceed its prediction.
const CAUTION: f64 = 2.0;
/// A change over the longest distance (hartree) assumed where only one test is known: large enough to ask for a second
/// soon.
const UNKNOWN_CHANGE: f64 = 0.1;

/// Place of the eigenvalue within the method itself in [`Test::values`].
const INTERNAL: usize = 0;

/// A test that was made: where, and its lowest eigenvalue over all kinds of instability, hartree.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Test {
    /// Swept coordinates, ångström or degree.
    pub(super) at: Vec<f64>,
    /// Lowest eigenvalue of each kind that may change its sign: internal, triplet.
    pub(super) values: [f64; 2],
    /// Lowest eigenvalue within the method itself, zero or not.
    pub(super) lowest: f64,
}

impl Test {
    pub(super) fn new(at: &[f64], record: &StabilityRecord) -> Self {
        Self {
            at: at.to_vec(),
            values: [
                record.internal_next.unwrap_or(f64::INFINITY),
                record.triplet.unwrap_or(f64::INFINITY),
            ],
            lowest: record.internal,
        }
    }
}

/// How sweeps are measured: the longest distance between tests along each.
#[must_use]
pub(super) fn longest(is_length: &[bool]) -> Vec<f64> {
    is_length
        .iter()
        .map(|&l| if l { LONGEST_ANGSTROM } else { LONGEST_DEGREE })
        .collect()
}

/// Whether the solution at `here` must be tested, given the tests behind it, the nearest last.
#[must_use]
pub(super) fn is_due(here: &[f64], tests: &[Test], longest: &[f64]) -> bool {
    let Some(last) = tests.last() else {
        return true;
    };
    // The distance in units of the longest one, so that one test serves both sweeps of a surface.
    let apart = |a: &[f64], b: &[f64]| -> f64 {
        a.iter()
            .zip(b)
            .zip(longest)
            .map(|((x, y), l)| ((x - y) / l).powi(2))
            .sum::<f64>()
            .sqrt()
    };
    let ahead = apart(here, &last.at);
    // A step that just fills the longest distance must not depend on rounding.
    if ahead > 1.0 - 1e-9 {
        return true;
    }
    if last.lowest < SOFT {
        // Where several solutions lie side by side straight lines say little.
        return true;
    }
    let behind = tests.len().checked_sub(2).map(|k| &tests[k]);
    (0..2).any(|kind| {
        let value = last.values[kind];
        if !value.is_finite() {
            return false;
        }
        let unstable = value < UNSTABLE;
        if unstable && kind == INTERNAL {
            // Such a solution is to be left wherever it is met.
            return true;
        }
        // Towards zero and beyond.
        let sign = if unstable { 1.0 } else { -1.0 };
        let change = match behind {
            Some(before) if apart(&last.at, &before.at) > 1e-9 => {
                sign * (value - before.values[kind]) / apart(&last.at, &before.at)
            }
            _ => UNKNOWN_CHANGE,
        };
        let expected = value + sign * CAUTION * change.max(0.0) * ahead;
        (expected < UNSTABLE) != unstable
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn test(at: f64, value: f64) -> Test {
        Test {
            at: vec![at],
            values: [value, f64::INFINITY],
            lowest: value,
        }
    }

    #[test]
    fn a_first_point_is_tested_and_a_safe_neighbour_is_not() {
        assert!(is_due(&[1.0], &[], &[0.2]));
        assert!(!is_due(&[1.05], &[test(1.0, 0.4)], &[0.2]));
        assert!(is_due(&[1.2], &[test(1.0, 0.4)], &[0.2]));
    }

    #[test]
    fn a_falling_eigenvalue_is_watched_before_it_crosses() {
        let tests = [test(1.0, 0.10), test(1.1, 0.05)];
        assert!(is_due(&[1.16], &tests, &[0.2]));
        assert!(!is_due(&[1.12], &tests, &[0.2]));
    }

    #[test]
    fn a_negative_eigenvalue_is_tested_everywhere() {
        assert!(is_due(&[1.01], &[test(1.0, -0.01)], &[0.2]));
    }

    #[test]
    fn an_instability_that_is_only_reported_is_tested_where_it_may_end() {
        let triplet = |at: f64, value: f64| Test {
            at: vec![at],
            values: [0.3, value],
            lowest: 0.3,
        };
        let growing = [triplet(1.0, -0.05), triplet(1.1, -0.10)];
        assert!(!is_due(&[1.25], &growing, &[0.2]));
        let ending = [triplet(1.0, -0.10), triplet(1.1, -0.05)];
        assert!(!is_due(&[1.12], &ending, &[0.2]));
        assert!(is_due(&[1.16], &ending, &[0.2]));
    }

    #[test]
    fn a_slowly_vanishing_eigenvalue_asks_for_few_tests() {
        // Parts drift apart: λ falls to zero exponentially and never crosses it.
        let mut known: Vec<Test> = Vec::new();
        for i in 0..80 {
            let q = 0.05 * f64::from(i);
            if is_due(&[q], &known, &[0.2]) {
                known.push(test(q, 0.1 * (-1.2 * q).exp()));
            }
        }
        assert!(known.len() < 35, "{} tests", known.len());
    }

    #[test]
    fn no_crossing_of_a_smooth_eigenvalue_is_passed_unseen() {
        // λ(q) = a − b q² crosses zero once; walking outwards, the first point beyond is always tested.
        for step in [0.01, 0.02, 0.05, 0.1] {
            for b in [0.05, 0.2, 1.0] {
                let value = |q: f64| 0.2 - b * q * q;
                let mut known: Vec<Test> = Vec::new();
                let crossing = (0.2_f64 / b).sqrt();
                for i in 0..400 {
                    let q = step * f64::from(i);
                    let due = is_due(&[q], &known, &[0.2]);
                    if q > crossing {
                        assert!(due, "step {step}, b {b}, q {q}");
                        break;
                    }
                    if due {
                        known.push(test(q, value(q)));
                    }
                }
            }
        }
    }
}
