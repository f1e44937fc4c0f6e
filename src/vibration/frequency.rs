//! Harmonic wavenumbers from force constants and masses.

use super::{VibrationError, check_mass};
use crate::units::{ELECTRON_MASSES_PER_U, PER_CM_PER_HARTREE};

/// Reduced mass of two atoms in electron masses, m₁m₂/(m₁ + m₂); masses in u.
#[must_use]
pub fn reduced_mass(first_u: f64, second_u: f64) -> f64 {
    first_u * second_u / (first_u + second_u) * ELECTRON_MASSES_PER_U
}

/// Harmonic wavenumber in cm⁻¹ of ω = √(k g).
///
/// `force_constant` in hartree/bohr² (or hartree/rad²), `inverse_mass` g in 1/mₑ (or 1/(mₑ bohr²), the
/// G element of an angle: E. B. Wilson, J. C. Decius, P. C. Cross, Molecular Vibrations, 1955, chapter 4).
/// A negative constant gives an imaginary frequency, returned as a negative wavenumber.
///
/// # Errors
/// An inverse mass that is not positive and finite.
pub fn wavenumber_per_cm(force_constant: f64, inverse_mass: f64) -> Result<f64, VibrationError> {
    check_mass(inverse_mass)?;
    Ok(signed_root(force_constant * inverse_mass) * PER_CM_PER_HARTREE)
}

/// √x, with −√|x| for negative x: the way imaginary frequencies are written.
pub(super) fn signed_root(x: f64) -> f64 {
    x.signum() * x.abs().sqrt()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn val_millidyne_and_atomic_mass_unit() {
        // ω/cm⁻¹ = 1302.79 √(k/(mdyn/Å) / (μ/u)) (common practice; published as 1302.79139).
        let k = 100.0 / 1_556.893_098; // 1 mdyn/Å in hartree/bohr²
        let omega = wavenumber_per_cm(k, 1.0 / ELECTRON_MASSES_PER_U).unwrap();
        assert!((omega - 1_302.791_39).abs() < 2e-3, "{omega}");
    }

    #[test]
    fn isotopes_scale_with_the_root_of_the_mass() {
        let light = wavenumber_per_cm(0.5, 1.0 / reduced_mass(1.0, 35.0)).unwrap();
        let heavy = wavenumber_per_cm(0.5, 1.0 / reduced_mass(2.0, 35.0)).unwrap();
        let expected = (reduced_mass(2.0, 35.0) / reduced_mass(1.0, 35.0)).sqrt();
        assert!((light / heavy - expected).abs() < 1e-14);
    }

    #[test]
    fn negative_constants_give_negative_wavenumbers() {
        assert!(wavenumber_per_cm(-0.1, 1e-3).unwrap() < 0.0);
        assert!(wavenumber_per_cm(0.1, 0.0).is_err());
    }
}
