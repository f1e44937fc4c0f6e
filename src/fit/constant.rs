//! Force constants in every unit in use, in both conventions, and the check against a derivative.

use crate::units::{
    ANGSTROM_PER_BOHR, JOULE_PER_HARTREE, KCAL_PER_MOL_PER_HARTREE, KJ_PER_MOL_PER_HARTREE,
    RADIAN_PER_DEGREE,
};
use std::collections::BTreeMap;

/// What kind of number the fitted coordinate is.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Coordinate {
    /// a length in bohr (a bond)
    Length,
    /// an angle in radian (a bend or a dihedral)
    Angle,
}

impl Coordinate {
    /// The unit of the coordinate as it stands in parameter names: `bohr` or `rad`.
    #[must_use]
    pub fn unit(self) -> &'static str {
        match self {
            Self::Length => "bohr",
            Self::Angle => "rad",
        }
    }
}

/// What the number called the force constant multiplies: force fields differ by this factor of two.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, serde::Serialize)]
pub enum Convention {
    /// E = E0 + k/2 (q − q0)²: k is the second derivative.
    #[default]
    HalfK,
    /// E = E0 + K (q − q0)²: K is half the second derivative.
    FullK,
}

impl Convention {
    /// The convention as a formula in plain ASCII.
    #[must_use]
    pub fn formula(self) -> &'static str {
        match self {
            Self::HalfK => "E = E0 + k/2 (q-q0)^2",
            Self::FullK => "E = E0 + K (q-q0)^2",
        }
    }

    /// The convention's constant divided by the second derivative.
    #[must_use]
    pub fn factor(self) -> f64 {
        match self {
            Self::HalfK => 1.0,
            Self::FullK => 0.5,
        }
    }
}

/// A second derivative of the energy, in atomic units, with the units people write it in.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ForceConstant {
    /// d²E/dq² in hartree/bohr² or hartree/rad².
    pub second_derivative: f64,
    /// Length or angle.
    pub coordinate: Coordinate,
}

const METRE_PER_BOHR: f64 = ANGSTROM_PER_BOHR * 1e-10;

impl ForceConstant {
    /// In newton per metre (lengths; `None` for angles).
    #[must_use]
    pub fn newton_per_metre(self, convention: Convention) -> Option<f64> {
        let k = self.second_derivative * convention.factor();
        (self.coordinate == Coordinate::Length)
            .then(|| k * JOULE_PER_HARTREE / (METRE_PER_BOHR * METRE_PER_BOHR))
    }

    /// The constant in all units, keyed by unit. For lengths `hartree_per_bohr2`, `mdyne_per_angstrom`,
    /// `newton_per_metre`, `kj_per_mol_angstrom2`, `kcal_per_mol_angstrom2`; for angles
    /// `hartree_per_rad2`, `mdyne_angstrom_per_rad2`, `kj_per_mol_per_rad2`, `kcal_per_mol_per_rad2`
    /// and `kj_per_mol_per_degree2`.
    ///
    /// One millidyne per ångström is 100 N/m, and one mdyn·Å is 10⁻¹⁸ J (definitions of the dyne).
    #[must_use]
    pub fn in_units(self, convention: Convention) -> BTreeMap<&'static str, f64> {
        let k = self.second_derivative * convention.factor();
        let kj = k * KJ_PER_MOL_PER_HARTREE;
        let kcal = k * KCAL_PER_MOL_PER_HARTREE;
        match self.coordinate {
            Coordinate::Length => {
                let newton = k * JOULE_PER_HARTREE / (METRE_PER_BOHR * METRE_PER_BOHR);
                let square = ANGSTROM_PER_BOHR * ANGSTROM_PER_BOHR;
                BTreeMap::from([
                    ("hartree_per_bohr2", k),
                    ("mdyne_per_angstrom", newton / 100.0),
                    ("newton_per_metre", newton),
                    ("kj_per_mol_angstrom2", kj / square),
                    ("kcal_per_mol_angstrom2", kcal / square),
                ])
            }
            Coordinate::Angle => BTreeMap::from([
                ("hartree_per_rad2", k),
                ("mdyne_angstrom_per_rad2", k * JOULE_PER_HARTREE * 1e18),
                ("kj_per_mol_per_rad2", kj),
                ("kcal_per_mol_per_rad2", kcal),
                (
                    "kj_per_mol_per_degree2",
                    kj * RADIAN_PER_DEGREE * RADIAN_PER_DEGREE,
                ),
            ]),
        }
    }
}

/// Whether a fitted force constant and the second derivative from gradients say the same.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Verdict {
    /// True when they differ by no more than the spread, or by no more than 0.3 %.
    pub agrees: bool,
    /// The finding in words, with the numbers.
    pub text: String,
}

/// Differences below this are not worth a finding, however small the spread: 0.3 %, the accuracy
/// asked of a fitted force constant.
pub const TOLERATED_DIFFERENCE: f64 = 3e-3;

/// A spread above this confirms nothing: 3 %, ten times what is asked of a fitted force constant.
pub const WIDE_SPREAD: f64 = 10.0 * TOLERATED_DIFFERENCE;

/// A spread above this leaves the constant itself open.
pub const USELESS_SPREAD: f64 = 0.3;

/// Compares a fitted force constant with an independent second derivative at the minimum.
///
/// `fitted` and `derivative` in the same unit; `spread` relative to `fitted`, as a fit states it.
/// They disagree when they differ by more than the spread and by more than
/// [`TOLERATED_DIFFERENCE`].
#[must_use]
pub fn verdict(fitted: f64, spread: f64, derivative: f64) -> Verdict {
    let difference = (fitted - derivative) / derivative;
    let percent = format!("{:+.2} %", 100.0 * difference);
    let spread_percent = format!("{:.2} %", 100.0 * spread);
    if !difference.is_finite() {
        return Verdict {
            agrees: false,
            text: "the second derivative from gradients is zero or not a number, so the fit has no check"
                .to_owned(),
        };
    }
    if derivative < 0.0 {
        return Verdict {
            agrees: false,
            text: "the second derivative from gradients is negative: the fitted minimum is none along this path"
                .to_owned(),
        };
    }
    let agrees = difference.abs() <= spread.clamp(TOLERATED_DIFFERENCE, USELESS_SPREAD);
    let text = if spread > USELESS_SPREAD {
        format!(
            "tells nothing: the fit differs from the second derivative by {percent}, and its spread of {spread_percent} leaves the constant open; the points do not hold a fit of this minimum"
        )
    } else if difference.abs() <= spread && spread > WIDE_SPREAD {
        format!(
            "does not contradict: the fit differs from the second derivative by {percent}, but its spread of {spread_percent} is too wide to confirm anything"
        )
    } else if difference.abs() <= spread {
        format!(
            "agrees: the fit differs from the second derivative by {percent}, within its spread of {spread_percent}"
        )
    } else if agrees {
        format!(
            "agrees: the fit differs from the second derivative by {percent}, beyond its spread of {spread_percent} but below {:.1} %",
            100.0 * TOLERATED_DIFFERENCE
        )
    } else {
        format!(
            "disagrees: the fit differs from the second derivative by {percent}, more than its spread of {spread_percent}; a wider range of orders, a narrower window or a finer step is needed, or the points are not on one electronic state"
        )
    };
    Verdict { agrees, text }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn constant(second_derivative: f64, coordinate: Coordinate) -> ForceConstant {
        ForceConstant {
            second_derivative,
            coordinate,
        }
    }

    #[test]
    fn val_one_atomic_unit_in_common_units() {
        // 1 hartree/bohr² = 15.569 14 mdyn/Å = 1556.893 N/m (common practice, from memory 15.56893),
        // 1 mdyn/Å = 143.9326 kcal/mol/Å² (common practice).
        let u = constant(1.0, Coordinate::Length).in_units(Convention::HalfK);
        assert!((u["mdyne_per_angstrom"] - 15.568_93).abs() < 1e-4);
        assert!((u["newton_per_metre"] / u["mdyne_per_angstrom"] - 100.0).abs() < 1e-10);
        assert!((u["kcal_per_mol_angstrom2"] / u["mdyne_per_angstrom"] - 143.9326).abs() < 1e-3);
        assert!((u["kj_per_mol_angstrom2"] / u["kcal_per_mol_angstrom2"] - 4.184).abs() < 1e-12);
    }

    #[test]
    fn the_conventions_differ_by_two() {
        for coordinate in [Coordinate::Length, Coordinate::Angle] {
            let k = constant(0.37, coordinate);
            let half = k.in_units(Convention::HalfK);
            for (unit, value) in k.in_units(Convention::FullK) {
                assert!((2.0 * value - half[unit]).abs() < 1e-12 * half[unit]);
            }
        }
    }

    #[test]
    fn a_verdict_needs_both_limits_broken() {
        assert!(verdict(1.0, 0.01, 0.995).agrees);
        assert!(verdict(1.0, 0.0001, 0.998).agrees);
        assert!(!verdict(1.0, 0.001, 0.99).agrees);
        assert!(!verdict(1.0, 0.01, 0.0).agrees);
        assert!(verdict(1.0, 0.02, 0.99).text.starts_with("agrees"));
        assert!(!verdict(1.0, 4.0, 50.0).agrees);
        assert!(verdict(1.0, 4.0, 50.0).text.starts_with("tells nothing"));
        assert!(
            verdict(1.0, 0.2, 0.99)
                .text
                .starts_with("does not contradict")
        );
        assert!(!verdict(1.0, 0.01, -1.0).agrees);
        assert!(verdict(1.0, 0.001, 0.99).text.contains("+1.01 %"));
    }
}
