//! Constants and unit conversions; atomic units are used everywhere inside.
//!
//! All values are CODATA 2018: E. Tiesinga, P. J. Mohr, D. B. Newell, B. N. Taylor,
//! "CODATA recommended values of the fundamental physical constants: 2018",
//! Rev. Mod. Phys. 93, 025010 (2021), unless a line says otherwise.

use std::f64::consts::PI;

/// One bohr in ångström (CODATA 2018: a₀ = 0.529 177 210 903(80) × 10⁻¹⁰ m).
pub const ANGSTROM_PER_BOHR: f64 = 0.529_177_210_903;
/// One hartree in joule (CODATA 2018: 4.359 744 722 2071(85) × 10⁻¹⁸ J).
pub const JOULE_PER_HARTREE: f64 = 4.359_744_722_207_1e-18;
/// One hartree in electronvolt (CODATA 2018: 27.211 386 245 988(53) eV).
pub const EV_PER_HARTREE: f64 = 27.211_386_245_988;
/// One hartree divided by hc, in cm⁻¹ (CODATA 2018: 2.194 746 313 6320(43) × 10⁷ m⁻¹).
pub const PER_CM_PER_HARTREE: f64 = 219_474.631_363_20;
/// Avogadro constant in mol⁻¹ (SI 2019, exact).
pub const AVOGADRO_PER_MOL: f64 = 6.022_140_76e23;
/// One hartree per particle in kJ/mol.
pub const KJ_PER_MOL_PER_HARTREE: f64 = JOULE_PER_HARTREE * AVOGADRO_PER_MOL / 1e3;
/// One thermochemical kilocalorie in kilojoule (exact by definition, ISO 31-4).
pub const KJ_PER_KCAL: f64 = 4.184;
/// One hartree per particle in kcal/mol.
pub const KCAL_PER_MOL_PER_HARTREE: f64 = KJ_PER_MOL_PER_HARTREE / KJ_PER_KCAL;
/// One unified atomic mass unit in electron masses (CODATA 2018: 1/5.485 799 090 65(16) × 10⁻⁴).
pub const ELECTRON_MASSES_PER_U: f64 = 1_822.888_486_209;
/// One atomic unit of electric dipole moment (e·a₀) in debye: e·a₀ = 8.478 353 6255 × 10⁻³⁰ C·m
/// (CODATA 2018), 1 D = 10⁻²¹/c C·m (exact by definition).
pub const DEBYE_PER_AU: f64 = 8.478_353_625_5e-30 * 299_792_458.0 * 1e21;
/// Speed of light in atomic units: the inverse fine-structure constant
/// (CODATA 2018: 137.035 999 084(21)).
pub const SPEED_OF_LIGHT_AU: f64 = 137.035_999_084;
/// Radians in one degree.
pub const RADIAN_PER_DEGREE: f64 = PI / 180.0;

/// A unit for the lengths of an input; bohr inside.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum LengthUnit {
    /// ångström
    #[default]
    Angstrom,
    /// bohr, the atomic unit
    Bohr,
}

impl LengthUnit {
    /// All units, in the order of the spec's documentation.
    pub const ALL: [Self; 2] = [Self::Angstrom, Self::Bohr];

    /// How many of this unit make one bohr.
    #[must_use]
    pub fn per_bohr(self) -> f64 {
        match self {
            Self::Angstrom => ANGSTROM_PER_BOHR,
            Self::Bohr => 1.0,
        }
    }

    /// A length given in this unit, in bohr.
    #[must_use]
    pub fn to_bohr(self, length: f64) -> f64 {
        length / self.per_bohr()
    }

    /// A length given in bohr, in this unit.
    #[must_use]
    pub fn from_bohr(self, length_bohr: f64) -> f64 {
        length_bohr * self.per_bohr()
    }

    /// The word used in the spec: `angstrom` or `bohr`.
    #[must_use]
    pub fn word(self) -> &'static str {
        match self {
            Self::Angstrom => "angstrom",
            Self::Bohr => "bohr",
        }
    }
}

/// A swept value as people read it: at most six decimals, none that say nothing.
#[must_use]
pub fn short(value: f64) -> String {
    let text = format!("{value:.6}");
    text.trim_end_matches('0').trim_end_matches('.').to_owned()
}

/// A unit for energies that people read; hartree inside.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, serde::Serialize, serde::Deserialize)]
pub enum EnergyUnit {
    /// hartree, the atomic unit
    #[serde(rename = "hartree")]
    Hartree,
    /// electronvolt
    #[serde(rename = "eV")]
    ElectronVolt,
    /// kilojoule per mole
    #[default]
    #[serde(rename = "kJ/mol")]
    KiloJoulePerMol,
    /// kilocalorie (thermochemical) per mole
    #[serde(rename = "kcal/mol")]
    KiloCaloriePerMol,
    /// wavenumber
    #[serde(rename = "cm-1")]
    PerCm,
}

impl EnergyUnit {
    /// All units, in the order of the spec's documentation.
    pub const ALL: [Self; 5] = [
        Self::Hartree,
        Self::ElectronVolt,
        Self::KiloJoulePerMol,
        Self::KiloCaloriePerMol,
        Self::PerCm,
    ];

    /// How many of this unit make one hartree.
    #[must_use]
    pub fn per_hartree(self) -> f64 {
        match self {
            Self::Hartree => 1.0,
            Self::ElectronVolt => EV_PER_HARTREE,
            Self::KiloJoulePerMol => KJ_PER_MOL_PER_HARTREE,
            Self::KiloCaloriePerMol => KCAL_PER_MOL_PER_HARTREE,
            Self::PerCm => PER_CM_PER_HARTREE,
        }
    }

    /// The word used in the spec: `hartree`, `eV`, `kJ/mol`, `kcal/mol`, `cm-1`.
    #[must_use]
    pub fn word(self) -> &'static str {
        match self {
            Self::Hartree => "hartree",
            Self::ElectronVolt => "eV",
            Self::KiloJoulePerMol => "kJ/mol",
            Self::KiloCaloriePerMol => "kcal/mol",
            Self::PerCm => "cm-1",
        }
    }

    /// The form used in column names: `hartree`, `ev`, `kj_per_mol`, `kcal_per_mol`, `per_cm`.
    #[must_use]
    pub fn column(self) -> &'static str {
        match self {
            Self::Hartree => "hartree",
            Self::ElectronVolt => "ev",
            Self::KiloJoulePerMol => "kj_per_mol",
            Self::KiloCaloriePerMol => "kcal_per_mol",
            Self::PerCm => "per_cm",
        }
    }

    /// The form used on figures and in printed tables, with typographic exponents.
    #[must_use]
    pub fn symbol(self) -> &'static str {
        match self {
            Self::PerCm => "cm⁻¹",
            other => other.word(),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn derived_constants_agree_with_their_published_values() {
        // CODATA 2018 gives E_h N_A = 2625.499 639 48 kJ/mol (from memory, consistent with the product).
        assert!((KJ_PER_MOL_PER_HARTREE - 2_625.499_639_48).abs() < 1e-8);
        // 1 a.u. of dipole = 2.541 746 473 D (common practice).
        assert!((DEBYE_PER_AU - 2.541_746_473).abs() < 1e-8);
    }
}
