//! Harmonic vibrations of a molecule: Hessian to wavenumbers, normal modes and intensities.
//!
//! E. B. Wilson, J. C. Decius, P. C. Cross, Molecular Vibrations, McGraw-Hill 1955, chapter 2 and section 11-6.

use super::frequency::signed_root;
use super::states::sorted_eigen;
use super::{VibrationError, check_mass};
use crate::units::{
    ANGSTROM_PER_BOHR, AVOGADRO_PER_MOL, ELECTRON_MASSES_PER_U, PER_CM_PER_HARTREE,
    SPEED_OF_LIGHT_AU,
};
use nalgebra::{DMatrix, DVector, Matrix3, SymmetricEigen, Vector3};
use std::f64::consts::PI;

/// Infrared intensity in km/mol of a mode whose dipole derivative along the mass-weighted normal coordinate is one
/// atomic unit (e per √mₑ).
///
/// A = N_A/(12 ε₀c²) (∂μ/∂Q)², that is N_A (π/3) α² a₀ in atomic units (Wilson, Decius, Cross, section
/// 7-9, integrated over wavenumber; no degeneracy). One D²/(Å² u) is 42.256 km/mol by the same formula.
pub const KM_PER_MOL_PER_AU: f64 =
    AVOGADRO_PER_MOL * PI / 3.0 / (SPEED_OF_LIGHT_AU * SPEED_OF_LIGHT_AU)
        * ANGSTROM_PER_BOHR
        * 1e-13;

/// A molecule is taken to be linear when its smallest moment of inertia is below this share of its
/// largest: atoms within about 0.05 degree of a line.
const LINEAR: f64 = 1e-6;

/// One normal mode.
#[derive(Debug, Clone, PartialEq)]
pub struct NormalMode {
    /// Harmonic wavenumber in cm⁻¹; an imaginary frequency is a negative number.
    pub wavenumber_cm1: f64,
    /// Reduced mass in u: 1/Σx² over the Cartesian displacements x of a unit step in the
    /// mass-weighted normal coordinate (a common convention; others scale it).
    pub reduced_mass_u: f64,
    /// Force constant μω² that belongs to that reduced mass, hartree/bohr²; negative for an imaginary mode.
    pub force_constant: f64,
    /// Cartesian displacements, 3 per atom in the order of the atoms, of unit length.
    pub displacements: DVector<f64>,
    /// Infrared intensity in km/mol, when dipole derivatives were given.
    pub intensity_km_per_mol: Option<f64>,
}

/// Normal modes of a molecule.
#[derive(Debug, Clone, PartialEq)]
pub struct HarmonicAnalysis {
    /// 3N − 6 modes (3N − 5 for a linear molecule, none for an atom), in the order of the wavenumber, imaginary
    /// ones first.
    pub modes: Vec<NormalMode>,
    /// Number of imaginary modes: 0 at a minimum, 1 at a saddle point.
    pub imaginary: usize,
    /// ½Σω over the real modes, hartree.
    pub zero_point_hartree: f64,
    /// True for a linear molecule.
    pub linear: bool,
    /// The wavenumber (cm⁻¹, largest in size) that translations and rotations had before they were projected out:
    /// what the Hessian, or a geometry that is not stationary, leaves of them.
    pub external_cm1: f64,
}

/// Wavenumbers, normal modes and zero-point energy from a Cartesian Hessian.
///
/// `hessian` 3N × 3N in hartree/bohr², ordered x, y, z of the first atom and so on; the symmetric part is
/// used. `positions` in bohr, `masses_u` in u. `dipole_derivatives` 3 × 3N in e (rows x, y, z of the
/// dipole; columns as the Hessian's) for intensities. Translations and rotations are projected out, so the modes
/// are clean also when the geometry is not quite stationary.
///
/// # Errors
/// Sizes that do not belong together, masses that are not positive, numbers that are not finite, atoms that coincide.
pub fn harmonic_analysis(
    hessian: &DMatrix<f64>,
    positions: &[Vector3<f64>],
    masses_u: &[f64],
    dipole_derivatives: Option<&DMatrix<f64>>,
) -> Result<HarmonicAnalysis, VibrationError> {
    let size = 3 * positions.len();
    let expect = |what, found, expected| {
        if found == expected {
            Ok(())
        } else {
            Err(VibrationError::Size {
                what,
                found,
                expected,
            })
        }
    };
    expect("rows of the Hessian", hessian.nrows(), size)?;
    expect("columns of the Hessian", hessian.ncols(), size)?;
    expect("masses", masses_u.len(), positions.len())?;
    if let Some(d) = dipole_derivatives {
        expect("rows of dipole derivatives", d.nrows(), 3)?;
        expect("columns of dipole derivatives", d.ncols(), size)?;
        if d.iter().any(|v| !v.is_finite()) {
            return Err(VibrationError::NotFinite {
                what: "the dipole derivatives",
            });
        }
    }
    masses_u.iter().try_for_each(|&m| check_mass(m))?;
    let places = positions.iter().flat_map(|p| p.iter());
    if hessian.iter().chain(places).any(|v| !v.is_finite()) {
        return Err(VibrationError::NotFinite {
            what: "the Hessian or the geometry",
        });
    }
    let roots = DVector::from_fn(size, |i, _| {
        (masses_u[i / 3] * ELECTRON_MASSES_PER_U).sqrt()
    });
    let weighted = DMatrix::from_fn(size, size, |i, j| {
        0.5 * (hessian[(i, j)] + hessian[(j, i)]) / (roots[i] * roots[j])
    });
    let (external, linear) = external_motions(positions, masses_u, &roots)?;
    let external_cm1 = (external.transpose() * &weighted * &external)
        .diagonal()
        .iter()
        .map(|&l| signed_root(l) * PER_CM_PER_HARTREE)
        .max_by(|a, b| a.abs().total_cmp(&b.abs()))
        .unwrap_or(0.0);

    // Columns of `inner` span all motions that are neither translation nor rotation: the
    // eigenvectors of the projector with eigenvalue 1, which come last.
    let count = size - external.ncols();
    let projector = DMatrix::identity(size, size) - &external * external.transpose();
    let (_, vectors) = sorted_eigen(projector)?;
    let inner = vectors.columns(size - count, count).into_owned();
    let (values, small) = sorted_eigen(inner.transpose() * weighted * &inner)?;
    let vectors = inner * small;

    let mut modes = Vec::with_capacity(count);
    for (n, &value) in values.iter().enumerate() {
        let cartesian = vectors.column(n).component_div(&roots);
        let square = cartesian.norm_squared();
        let intensity =
            dipole_derivatives.map(|d| (d * &cartesian).norm_squared() * KM_PER_MOL_PER_AU);
        modes.push(NormalMode {
            wavenumber_cm1: signed_root(value) * PER_CM_PER_HARTREE,
            reduced_mass_u: 1.0 / (square * ELECTRON_MASSES_PER_U),
            force_constant: value / square,
            displacements: cartesian / square.sqrt(),
            intensity_km_per_mol: intensity,
        });
    }
    Ok(HarmonicAnalysis {
        imaginary: values.iter().filter(|&&v| v < 0.0).count(),
        zero_point_hartree: values
            .iter()
            .filter(|&&v| v > 0.0)
            .map(|v| 0.5 * v.sqrt())
            .sum(),
        modes,
        linear,
        external_cm1,
    })
}

/// Orthonormal mass-weighted translations and rotations as columns (3 for an atom, 5 for a linear molecule, 6
/// otherwise), and whether the molecule is linear.
///
/// Rotations about principal axes through the centre of mass are orthogonal to each other and to the translations.
fn external_motions(
    positions: &[Vector3<f64>],
    masses_u: &[f64],
    roots: &DVector<f64>,
) -> Result<(DMatrix<f64>, bool), VibrationError> {
    let total: f64 = masses_u.iter().sum();
    let centre = positions
        .iter()
        .zip(masses_u)
        .fold(Vector3::zeros(), |sum, (p, m)| sum + p * (m / total));
    let arms: Vec<Vector3<f64>> = positions.iter().map(|p| p - centre).collect();
    let inertia = arms
        .iter()
        .zip(masses_u)
        .fold(Matrix3::zeros(), |sum, (r, m)| {
            sum + (Matrix3::identity() * r.norm_squared() - r * r.transpose()) * *m
        });
    let principal = SymmetricEigen::try_new(inertia, f64::EPSILON, 1000)
        .ok_or(VibrationError::Eigenvalues { size: 3 })?;
    let largest = principal.eigenvalues.max();
    let size = 3 * positions.len();
    let mut columns: Vec<DVector<f64>> = (0..3)
        .map(|c| DVector::from_fn(size, |i, _| if i % 3 == c { roots[i] } else { 0.0 }))
        .collect();
    if positions.len() > 1 {
        if largest <= 0.0 {
            return Err(VibrationError::Range {
                lower: 0.0,
                upper: 0.0,
            });
        }
        for (moment, axis) in principal
            .eigenvalues
            .iter()
            .zip(principal.eigenvectors.column_iter())
        {
            if *moment > LINEAR * largest {
                let axis = axis.into_owned();
                columns.push(DVector::from_fn(size, |i, _| {
                    axis.cross(&arms[i / 3])[i % 3] * roots[i]
                }));
            }
        }
    }
    let linear = columns.len() == 5;
    for i in 0..columns.len() {
        // Orthogonal but for rounding and the neglect of a nearly linear molecule's third axis.
        let (done, rest) = columns.split_at_mut(i);
        for other in done.iter() {
            let overlap = other.dot(&rest[0]);
            rest[0].axpy(-overlap, other, 1.0);
        }
        rest[0].normalize_mut();
    }
    Ok((DMatrix::from_columns(&columns), linear))
}

#[cfg(test)]
mod tests {
    use super::*;

    const H: f64 = 1.007_825_032;
    const O: f64 = 15.994_914_619;
    /// hartree/bohr² of one mdyn/Å (100 N/m).
    const MDYNE_PER_ANGSTROM: f64 =
        1e2 * 1e-20 * ANGSTROM_PER_BOHR * ANGSTROM_PER_BOHR / crate::units::JOULE_PER_HARTREE;

    /// Hessian BᵀFB of a force field in internal coordinates at its minimum.
    fn hessian(
        positions: &[Vector3<f64>],
        internals: &dyn Fn(&[Vector3<f64>]) -> Vec<f64>,
        field: &DMatrix<f64>,
    ) -> DMatrix<f64> {
        let n = 3 * positions.len();
        let mut b = DMatrix::zeros(field.nrows(), n);
        for i in 0..n {
            let at = |h: f64| {
                let mut p = positions.to_vec();
                p[i / 3][i % 3] += h;
                DVector::from_vec(internals(&p))
            };
            let h = 1e-3;
            let column = ((at(h) - at(-h)) * 8.0 - (at(2.0 * h) - at(-2.0 * h))) / (12.0 * h);
            b.set_column(i, &column);
        }
        b.transpose() * field * b
    }

    fn water() -> (Vec<Vector3<f64>>, DMatrix<f64>, f64, f64) {
        let r = 0.9572 / ANGSTROM_PER_BOHR;
        let angle = 104.52_f64.to_radians();
        let positions = vec![
            Vector3::new(0.3, -0.2, 0.5),
            Vector3::new(
                0.3 + r * (0.5 * angle).sin(),
                -0.2 + r * (0.5 * angle).cos(),
                0.5,
            ),
            Vector3::new(
                0.3 - r * (0.5 * angle).sin(),
                -0.2 + r * (0.5 * angle).cos(),
                0.5,
            ),
        ];
        // A. R. Hoy, I. M. Mills, G. Strey, Mol. Phys. 24, 1265 (1972): f_rr 8.454, f_rr′ −0.101, f_aa/r² 0.761,
        // f_ra/r 0.228 mdyn/Å.
        let f = [8.454, -0.101, 0.761 * r * r, 0.228 * r].map(|v| v * MDYNE_PER_ANGSTROM);
        let field = DMatrix::from_row_slice(
            3,
            3,
            &[f[0], f[1], f[3], f[1], f[0], f[3], f[3], f[3], f[2]],
        );
        (positions, field, r, angle)
    }

    fn internals(p: &[Vector3<f64>]) -> Vec<f64> {
        let (a, b) = (p[1] - p[0], p[2] - p[0]);
        vec![a.norm(), b.norm(), a.angle(&b)]
    }

    #[test]
    fn val_water_against_the_gf_method_and_experiment() {
        let (positions, field, r, angle) = water();
        let masses = [O, H, H];
        let found = harmonic_analysis(
            &hessian(&positions, &internals, &field),
            &positions,
            &masses,
            None,
        )
        .unwrap();
        assert_eq!(
            (found.modes.len(), found.imaginary, found.linear),
            (3, 0, false)
        );
        assert!(found.external_cm1.abs() < 0.1, "{}", found.external_cm1);
        // Wilson, Decius, Cross, table 4-1 and appendix VI: symmetric block and antisymmetric root.
        let (mo, mh) = (
            1.0 / (O * ELECTRON_MASSES_PER_U),
            1.0 / (H * ELECTRON_MASSES_PER_U),
        );
        let (sin, cos) = angle.sin_cos();
        let g12 = -(2.0_f64.sqrt()) * mo * sin / r;
        let g = nalgebra::Matrix2::new(
            mo * (1.0 + cos) + mh,
            g12,
            g12,
            2.0 * (mh + mo * (1.0 - cos)) / (r * r),
        );
        let f12 = 2.0_f64.sqrt() * field[(0, 2)];
        let f = nalgebra::Matrix2::new(field[(0, 0)] + field[(0, 1)], f12, f12, field[(2, 2)]);
        let gf = g * f;
        let (trace, det) = (gf.trace(), gf.determinant());
        let root = (0.25 * trace * trace - det).sqrt();
        let anti = (field[(0, 0)] - field[(0, 1)]) * (mo * (1.0 - cos) + mh);
        let exact =
            [0.5 * trace - root, 0.5 * trace + root, anti].map(|l| l.sqrt() * PER_CM_PER_HARTREE);
        // ω: W. S. Benedict, N. Gailar, E. K. Plyler, J. Chem. Phys. 24, 1139 (1956), from memory.
        for ((mode, exact), measured) in found.modes.iter().zip(exact).zip([1648.5, 3832.2, 3942.5])
        {
            assert!((mode.wavenumber_cm1 - exact).abs() < 1e-5 * exact);
            assert!(
                (mode.wavenumber_cm1 - measured).abs() < 2.0,
                "{}",
                mode.wavenumber_cm1
            );
        }
        let sum: f64 = found.modes.iter().map(|m| 0.5 * m.wavenumber_cm1).sum();
        assert!((found.zero_point_hartree * PER_CM_PER_HARTREE - sum).abs() < 1e-8);
    }

    #[test]
    fn deuterium_obeys_the_product_rule() {
        // Teller–Redlich: Π(ω/ω′) of B₂, one mode, and of A₁, two modes, together follow from G alone:
        // det over all = Π ω²/ω′² = det G/det G′, independent of F.
        let (positions, field, r, angle) = water();
        let h = hessian(&positions, &internals, &field);
        let product = |masses: &[f64; 3]| -> f64 {
            let found = harmonic_analysis(&h, &positions, masses, None).unwrap();
            found
                .modes
                .iter()
                .map(|m| m.wavenumber_cm1.powi(2))
                .product()
        };
        let determinant = |m: f64| {
            let (mo, mh) = (1.0 / O, 1.0 / m);
            let (sin, cos) = angle.sin_cos();
            let (a, d) = (
                mo * (1.0 + cos) + mh,
                2.0 * (mh + mo * (1.0 - cos)) / (r * r),
            );
            let b = 2.0 * (mo * sin / r).powi(2);
            (a * d - b) * (mo * (1.0 - cos) + mh)
        };
        let d = 2.014_101_778;
        let found = product(&[O, H, H]) / product(&[O, d, d]);
        let exact = determinant(H) / determinant(d);
        assert!((found - exact).abs() < 1e-6 * exact);
    }

    #[test]
    fn a_linear_molecule_has_four_modes_of_three_atoms() {
        // CO2 along a skew axis, I. Suzuki, J. Mol. Spectrosc. 25, 479 (1968): 16.022, 1.261 mdyn/Å, 0.785 mdyn Å.
        let r = 1.160 / ANGSTROM_PER_BOHR;
        let axis = Vector3::new(1.0, 2.0, -0.5).normalize();
        let positions = vec![Vector3::zeros(), axis * r, axis * -r];
        let side = axis.cross(&Vector3::x()).normalize();
        let other = axis.cross(&side);
        // The two bends are the displacements of the bonds across the axis.
        let internal = |p: &[Vector3<f64>]| -> Vec<f64> {
            let (a, b) = (p[1] - p[0], p[2] - p[0]);
            let across = |e: &Vector3<f64>| (a.dot(e) + b.dot(e)) / r;
            vec![a.norm(), b.norm(), across(&side), across(&other)]
        };
        let (f, f1) = (16.022 * MDYNE_PER_ANGSTROM, 1.261 * MDYNE_PER_ANGSTROM);
        let bend = 0.785 * MDYNE_PER_ANGSTROM / (ANGSTROM_PER_BOHR * ANGSTROM_PER_BOHR);
        let mut field = DMatrix::from_diagonal(&DVector::from_vec(vec![f, f, bend, bend]));
        field[(0, 1)] = f1;
        field[(1, 0)] = f1;
        let h = hessian(&positions, &internal, &field);
        let found = harmonic_analysis(&h, &positions, &[12.0, O, O], None).unwrap();
        assert!(found.linear);
        let w: Vec<f64> = found.modes.iter().map(|m| m.wavenumber_cm1).collect();
        assert_eq!(w.len(), 4);
        assert!((w[0] - w[1]).abs() < 1e-6 * w[0]);
        // ω₂, ω₁, ω₃ ≈ 673, 1354, 2397 cm⁻¹ (common practice for this field).
        for (w, expected) in w.iter().zip([673.0, 673.0, 1354.0, 2397.0]) {
            assert!((w - expected).abs() < 4.0, "{w}");
        }
    }

    #[test]
    fn modes_do_not_depend_on_place_or_orientation_and_carry_no_translation() {
        let (positions, field, ..) = water();
        let masses = [O, H, 2.014_101_778];
        let h = hessian(&positions, &internals, &field);
        let found = harmonic_analysis(&h, &positions, &masses, None).unwrap();
        let turn = nalgebra::Rotation3::from_euler_angles(0.3, -1.1, 2.0);
        let moved: Vec<_> = positions
            .iter()
            .map(|p| turn * p + Vector3::new(5.0, 1.0, -2.0))
            .collect();
        let other =
            harmonic_analysis(&hessian(&moved, &internals, &field), &moved, &masses, None).unwrap();
        for (a, b) in found.modes.iter().zip(&other.modes) {
            assert!((a.wavenumber_cm1 - b.wavenumber_cm1).abs() < 1e-5);
            assert!((a.reduced_mass_u - b.reduced_mass_u).abs() < 1e-7);
            let drift = (0..3).fold(Vector3::zeros(), |sum, n| {
                sum + masses[n] * a.displacements.fixed_rows::<3>(3 * n).into_owned()
            });
            assert!(drift.norm() < 1e-10);
            // ω² = k/μ
            let omega = (a.force_constant / (a.reduced_mass_u * ELECTRON_MASSES_PER_U)).sqrt();
            assert!((omega * PER_CM_PER_HARTREE - a.wavenumber_cm1).abs() < 1e-8);
        }
    }

    #[test]
    fn val_diatomic_wavenumber_and_intensity() {
        // A diatomic with k = 0.3 and dipole derivative 0.4 e along the bond: A = 974.88 (dμ/dr)²/μ km/mol with
        // μ in u and dμ/dr in e (N_A e²/(12 ε₀c² u), from memory 974.88).
        let positions = [Vector3::zeros(), Vector3::new(0.0, 0.0, 2.4)];
        let mut h = DMatrix::zeros(6, 6);
        for (i, j, s) in [(2, 2, 1.0), (5, 5, 1.0), (2, 5, -1.0), (5, 2, -1.0)] {
            h[(i, j)] = 0.3 * s;
        }
        let mut d = DMatrix::zeros(3, 6);
        d[(2, 2)] = -0.4;
        d[(2, 5)] = 0.4;
        let (m1, m2) = (H, 34.968_852_69);
        let found = harmonic_analysis(&h, &positions, &[m1, m2], Some(&d)).unwrap();
        assert_eq!(found.modes.len(), 1);
        let mode = &found.modes[0];
        let mu = m1 * m2 / (m1 + m2);
        let omega = (0.3 / (mu * ELECTRON_MASSES_PER_U)).sqrt() * PER_CM_PER_HARTREE;
        assert!((mode.wavenumber_cm1 - omega).abs() < 1e-8 * omega);
        let intensity = 974.88 * 0.16 / mu;
        let found = mode.intensity_km_per_mol.unwrap();
        assert!(
            (found - intensity).abs() < 1e-5 * intensity,
            "{found} {intensity}"
        );
    }

    #[test]
    fn saddle_points_and_bad_input() {
        let (positions, field, ..) = water();
        let mut turned = field.clone();
        turned[(2, 2)] = -turned[(2, 2)];
        let h = hessian(&positions, &internals, &turned);
        let found = harmonic_analysis(&h, &positions, &[O, H, H], None).unwrap();
        assert_eq!(found.imaginary, 1);
        assert!(found.modes[0].wavenumber_cm1 < 0.0 && found.modes[0].force_constant < 0.0);
        assert!(harmonic_analysis(&h, &positions, &[O, H], None).is_err());
        assert!(harmonic_analysis(&h, &positions, &[O, H, 0.0], None).is_err());
        assert!(harmonic_analysis(&h, &[Vector3::zeros(); 3], &[O, H, H], None).is_err());
        let atom = harmonic_analysis(&DMatrix::zeros(3, 3), &positions[..1], &[O], None).unwrap();
        assert!(atom.modes.is_empty());
    }
}
