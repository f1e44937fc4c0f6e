//! Spectroscopic constants of a diatomic molecule, from derivatives at the minimum and from its states.
//!
//! Term values are G(v) = Y₀₀ + ω_e(v + ½) − ω_e x_e(v + ½)² + … and B_v = B_e − α_e(v + ½) + …,
//! the signs of Huber and Herzberg, Constants of Diatomic Molecules, 1979.

use super::states::States;
use super::{VibrationError, check_mass};
use crate::units::PER_CM_PER_HARTREE;

/// Taylor derivatives of a curve at its minimum, atomic units.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct MinimumDerivatives {
    /// Bond length r_e, bohr.
    pub equilibrium: f64,
    /// d²E/dr², hartree/bohr².
    pub second: f64,
    /// d³E/dr³, hartree/bohr³.
    pub third: f64,
    /// d⁴E/dr⁴, hartree/bohr⁴.
    pub fourth: f64,
}

/// Constants from derivatives at the minimum, in cm⁻¹.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct DunhamConstants {
    /// Harmonic wavenumber ω_e.
    pub omega_e_cm1: f64,
    /// Anharmonicity ω_e x_e.
    pub omega_e_x_e_cm1: f64,
    /// Rotational constant B_e.
    pub b_e_cm1: f64,
    /// Vibration–rotation coupling α_e.
    pub alpha_e_cm1: f64,
    /// Centrifugal distortion 4B_e³/ω_e² (Kratzer).
    pub centrifugal_cm1: f64,
    /// Dunham's Y₀₀, the shift of the lowest levels that is left from anharmonicity.
    pub y00_cm1: f64,
    /// Zero-point energy Y₀₀ + ω_e/2 − ω_e x_e/4.
    pub zero_point_cm1: f64,
}

/// Spectroscopic constants by Dunham's relations (J. L. Dunham, Phys. Rev. 41, 721 (1932), eq. 15, leading
/// terms): with V = a₀ξ²(1 + a₁ξ + a₂ξ²), ξ = (r − r_e)/r_e,
/// α_e = −(6B_e²/ω_e)(1 + a₁), ω_e x_e = (3/2)B_e(5a₁²/4 − a₂), Y₀₀ = (B_e/8)(3a₂ − 7a₁²/4).
///
/// `reduced_mass` in electron masses; another isotopologue is another mass with the same derivatives. Terms of
/// relative order (B_e/ω_e)² are left out: 0.1 % of ω_e for hydrides, less for others.
///
/// # Errors
/// A mass or bond length that is not positive, or a second derivative that is not that of a minimum.
pub fn dunham(
    at: &MinimumDerivatives,
    reduced_mass: f64,
) -> Result<DunhamConstants, VibrationError> {
    check_mass(reduced_mass)?;
    let r = at.equilibrium;
    if at.second.is_nan() || at.second <= 0.0 {
        return Err(VibrationError::NoMinimum { second: at.second });
    }
    if r.is_nan() || r <= 0.0 {
        return Err(VibrationError::Range { lower: r, upper: r });
    }
    let a1 = r * at.third / (3.0 * at.second);
    let a2 = r * r * at.fourth / (12.0 * at.second);
    let b = PER_CM_PER_HARTREE / (2.0 * reduced_mass * r * r);
    let omega = (at.second / reduced_mass).sqrt() * PER_CM_PER_HARTREE;
    let anharmonicity = 1.5 * b * (1.25 * a1 * a1 - a2);
    let y00 = b / 8.0 * (3.0 * a2 - 1.75 * a1 * a1);
    Ok(DunhamConstants {
        omega_e_cm1: omega,
        omega_e_x_e_cm1: anharmonicity,
        b_e_cm1: b,
        alpha_e_cm1: -6.0 * b * b / omega * (1.0 + a1),
        centrifugal_cm1: 4.0 * b.powi(3) / (omega * omega),
        y00_cm1: y00,
        zero_point_cm1: y00 + 0.5 * omega - 0.25 * anharmonicity,
    })
}

/// Constants from vibrational states, in cm⁻¹.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct StateConstants {
    /// ω_e from the lowest levels.
    pub omega_e_cm1: f64,
    /// ω_e x_e.
    pub omega_e_x_e_cm1: f64,
    /// ω_e y_e, where four levels are there.
    pub omega_e_y_e_cm1: Option<f64>,
    /// Fundamental G(1) − G(0).
    pub fundamental_cm1: f64,
    /// Energy of the lowest state above the minimum.
    pub zero_point_cm1: f64,
    /// B_v = ⟨1/(2μr²)⟩ of each state.
    pub b_v_cm1: Vec<f64>,
    /// B_e, extrapolated to v = −½.
    pub b_e_cm1: f64,
    /// α_e.
    pub alpha_e_cm1: f64,
}

/// Spectroscopic constants from computed states: the polynomial in v + ½ through the lowest levels
/// (cubic through four, quadratic through three) and the rotational constants ⟨1/r²⟩/(2μ) of the lowest
/// states (quadratic through three).
///
/// `states` of the stretch in bohr, `reduced_mass` in electron masses, `minimum` the energy of the
/// bottom of the curve in hartree. `None` when fewer than three states are known.
#[must_use]
pub fn from_states(states: &States, reduced_mass: f64, minimum: f64) -> Option<StateConstants> {
    let g: Vec<f64> = states
        .states
        .iter()
        .map(|s| (s.energy - minimum) * PER_CM_PER_HARTREE)
        .collect();
    if g.len() < 3 {
        return None;
    }
    // ΔG(v + ½) = ω − 2ωx(v + 1) + ωy(3v² + 6v + 13/4), solved by differences.
    let steps: Vec<f64> = g.windows(2).map(|w| w[1] - w[0]).collect();
    let cubic = steps
        .get(2)
        .map(|d2| (d2 - 2.0 * steps[1] + steps[0]) / 6.0);
    let y = cubic.unwrap_or(0.0);
    let x = 0.5 * (9.0 * y - (steps[1] - steps[0]));
    let omega = steps[0] + 2.0 * x - 3.25 * y;
    let b: Vec<f64> = (0..g.len())
        .filter_map(|v| states.expectation(v, |r| 1.0 / (r * r)))
        .map(|mean| mean / (2.0 * reduced_mass) * PER_CM_PER_HARTREE)
        .collect();
    let bend = 0.5 * (b[2] - 2.0 * b[1] + b[0]);
    let alpha = 2.0 * bend - (b[1] - b[0]);
    Some(StateConstants {
        omega_e_cm1: omega,
        omega_e_x_e_cm1: x,
        omega_e_y_e_cm1: cubic,
        fundamental_cm1: steps[0],
        zero_point_cm1: g[0],
        b_e_cm1: b[0] + 0.5 * alpha - 0.25 * bend,
        alpha_e_cm1: alpha,
        b_v_cm1: b,
    })
}

/// Dissociation energies from the limit, hartree.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Dissociation {
    /// D_e: limit minus minimum.
    pub de_hartree: f64,
    /// D_0: limit minus lowest vibrational state.
    pub d0_hartree: f64,
}

/// D_e and D_0 from the energy of the separated parts, of the minimum, and the zero-point energy, all in hartree.
#[must_use]
pub fn dissociation(limit: f64, minimum: f64, zero_point: f64) -> Dissociation {
    let de_hartree = limit - minimum;
    Dissociation {
        de_hartree,
        d0_hartree: de_hartree - zero_point,
    }
}

#[cfg(test)]
mod tests {
    use super::super::frequency::reduced_mass;
    use super::super::potential::{Domain, Potential};
    use super::super::states::{StatesSettings, states};
    use super::*;
    use crate::fit::{Coordinate, FitSettings, Form, Window, fit_curve};
    use crate::units::ANGSTROM_PER_BOHR;

    /// Name, masses in u (AME2020, digits from memory), r_e in Å, ω_e, ω_e x_e, B_e, α_e in cm⁻¹: K. P. Huber, G.
    /// Herzberg, Constants of Diatomic Molecules, 1979 (NIST Chemistry WebBook).
    const HANDBOOK: [(&str, [f64; 2], [f64; 4]); 4] = [
        (
            "CO",
            [12.0, 15.994_914_619],
            [2_169.813_58, 13.288_31, 1.931_280_87, 0.017_504_41],
        ),
        (
            "N2",
            [14.003_074_004, 14.003_074_004],
            [2_358.57, 14.324, 1.998_241, 0.017_318],
        ),
        (
            "HCl",
            [1.007_825_032, 34.968_852_69],
            [2_990.946_3, 52.818_6, 10.593_416, 0.307_181],
        ),
        (
            "LiH",
            [7.016_003_43, 1.007_825_032],
            [1_405.65, 23.2, 7.513_1, 0.213_2],
        ),
    ];

    /// Derivatives of the curve that has the constants, by Dunham's relations solved for a₁ and a₂.
    fn curve(mu: f64, [omega, anharmonicity, b, alpha]: [f64; 4]) -> MinimumDerivatives {
        let r = (PER_CM_PER_HARTREE / (2.0 * mu * b)).sqrt();
        let a0 = omega * omega / (4.0 * b) / PER_CM_PER_HARTREE;
        let a1 = -1.0 - alpha * omega / (6.0 * b * b);
        let a2 = 1.25 * a1 * a1 - 2.0 / 3.0 * anharmonicity / b;
        MinimumDerivatives {
            equilibrium: r,
            second: 2.0 * a0 / (r * r),
            third: 6.0 * a0 * a1 / r.powi(3),
            fourth: 24.0 * a0 * a2 / r.powi(4),
        }
    }

    fn energy(d: &MinimumDerivatives, r: f64) -> f64 {
        let s = r - d.equilibrium;
        s * s * (d.second / 2.0 + s * (d.third / 6.0 + s * d.fourth / 24.0))
    }

    #[test]
    fn val_handbook_constants_come_back_through_points_and_fit() {
        for (name, [m1, m2], constants) in HANDBOOK {
            let mu = reduced_mass(m1, m2);
            let made = curve(mu, constants);
            let step = 0.02 / ANGSTROM_PER_BOHR;
            let r: Vec<f64> = (-10..=14)
                .map(|i| made.equilibrium + (f64::from(i) + 0.37) * step)
                .collect();
            let e: Vec<f64> = r.iter().map(|&r| energy(&made, r)).collect();
            let settings = FitSettings {
                window: Window::Within { half_width: 0.6 },
                ..FitSettings::default()
            };
            let fits = fit_curve(&r, &e, Form::Polynomial, Coordinate::Length, &settings).unwrap();
            let fit = &fits.fits[0];
            let at = MinimumDerivatives {
                equilibrium: fit.equilibrium,
                second: fit.force_constant,
                third: fit.third_derivative.unwrap(),
                fourth: fit.fourth_derivative.unwrap(),
            };
            let d = dunham(&at, mu).unwrap();
            let found = [d.omega_e_cm1, d.omega_e_x_e_cm1, d.b_e_cm1, d.alpha_e_cm1];
            for (f, c) in found.iter().zip(constants) {
                assert!(
                    (f - c).abs() < 1e-5 * c,
                    "{name}: {found:?} from {constants:?}"
                );
            }
        }
    }

    #[test]
    fn val_worked_example_of_hydrogen_chloride() {
        // Arithmetic on the handbook values: a₁ = −2.3645, a₂ = 3.6647, Y₀₀ = 1.602 cm⁻¹, Kratzer
        // constant 5.3156e-4 cm⁻¹.
        let (_, [m1, m2], constants) = HANDBOOK[2];
        let mu = reduced_mass(m1, m2);
        let made = curve(mu, constants);
        let a1 = made.equilibrium * made.third / (3.0 * made.second);
        assert!((a1 + 2.364_5).abs() < 1e-4);
        let d = dunham(&made, mu).unwrap();
        assert!((d.y00_cm1 - 1.602).abs() < 1e-3);
        assert!((d.centrifugal_cm1 - 5.315_6e-4).abs() < 1e-8);
        assert!((d.zero_point_cm1 - 1_482.269 - d.y00_cm1).abs() < 1e-3);
        assert!((made.equilibrium * ANGSTROM_PER_BOHR - 1.274_552).abs() < 2e-5);
    }

    #[test]
    fn val_isotopic_ratios() {
        // ρ = √(μ/μᵢ): ω ∝ ρ, ωx and B ∝ ρ², α ∝ ρ³, centrifugal constant ∝ ρ⁴ (G. Herzberg, Spectra of Diatomic Molecules, 1950).
        let (_, [m1, m2], constants) = HANDBOOK[2];
        let (light, heavy) = (reduced_mass(m1, m2), reduced_mass(2.014_101_778, m2));
        let made = curve(light, constants);
        let (a, b) = (dunham(&made, light).unwrap(), dunham(&made, heavy).unwrap());
        let rho = (light / heavy).sqrt();
        for (l, h, power) in [
            (a.omega_e_cm1, b.omega_e_cm1, 1),
            (a.omega_e_x_e_cm1, b.omega_e_x_e_cm1, 2),
            (a.b_e_cm1, b.b_e_cm1, 2),
            (a.alpha_e_cm1, b.alpha_e_cm1, 3),
            (a.centrifugal_cm1, b.centrifugal_cm1, 4),
        ] {
            assert!((h - l * rho.powi(power)).abs() < 1e-12 * l);
        }
        // DCl: ω_e = 2145.163 cm⁻¹ (Huber and Herzberg); the ratio holds but for the electrons' inertia.
        assert!((b.omega_e_cm1 - 2_145.163).abs() < 0.5);
    }

    #[test]
    fn states_and_derivatives_give_the_same_constants() {
        // A Morse curve with hydride-like numbers: G(v) is quadratic, α_e from Pekeris' relation.
        let (d, a, r0, mu) = (0.17, 1.0, 2.4, 1_785.0);
        let v = |r: f64| d * (1.0 - (-a * (r - r0)).exp()).powi(2);
        let domain = Domain::HalfLine {
            lower: 1.0,
            upper: 8.0,
        };
        let found = states(
            &Potential::new(v, domain).unwrap(),
            1.0 / mu,
            &StatesSettings::default(),
        );
        let by_states = from_states(&found.unwrap(), mu, 0.0).unwrap();
        let k = 2.0 * d * a * a;
        let at = MinimumDerivatives {
            equilibrium: r0,
            second: k,
            third: -3.0 * a * k,
            fourth: 7.0 * a * a * k,
        };
        let by_derivatives = dunham(&at, mu).unwrap();
        let close = |x: f64, y: f64, part: f64| assert!((x - y).abs() < part * y.abs(), "{x} {y}");
        close(by_states.omega_e_cm1, by_derivatives.omega_e_cm1, 1e-6);
        close(
            by_states.omega_e_x_e_cm1,
            by_derivatives.omega_e_x_e_cm1,
            1e-5,
        );
        assert!(by_states.omega_e_y_e_cm1.unwrap().abs() < 1e-4);
        close(by_states.b_e_cm1, by_derivatives.b_e_cm1, 1e-3);
        close(by_states.alpha_e_cm1, by_derivatives.alpha_e_cm1, 0.02);
        close(
            by_states.zero_point_cm1,
            by_derivatives.zero_point_cm1,
            1e-6,
        );
        let (b, w, x) = (
            by_derivatives.b_e_cm1,
            by_derivatives.omega_e_cm1,
            by_derivatives.omega_e_x_e_cm1,
        );
        let pekeris = 6.0 * (x * b.powi(3)).sqrt() / w - 6.0 * b * b / w;
        close(by_derivatives.alpha_e_cm1, pekeris, 1e-10);
    }

    #[test]
    fn maxima_and_bad_masses_are_refused() {
        let mut at = curve(2_000.0, HANDBOOK[0].2);
        assert!(dunham(&at, -1.0).is_err());
        at.second = -0.1;
        assert!(dunham(&at, 2_000.0).is_err());
        let d = dissociation(-1.0, -1.17, 0.01);
        assert!((d.de_hartree - 0.17).abs() < 1e-15 && (d.d0_hartree - 0.16).abs() < 1e-15);
    }
}
