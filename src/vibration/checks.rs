//! States against closed forms, published tables and each other.

use super::elements::{Mesh, eigenvalues};
use super::potential::Domain;
use super::*;
use crate::units::{ELECTRON_MASSES_PER_U, PER_CM_PER_HARTREE};
use std::f64::consts::{PI, TAU};

fn wanted(count: usize) -> StatesSettings {
    StatesSettings {
        count,
        ..StatesSettings::default()
    }
}

fn energies(s: &States) -> Vec<f64> {
    s.states.iter().map(|s| s.energy).collect()
}

fn close(found: &[f64], exact: &[f64], relative: f64) {
    assert_eq!(found.len(), exact.len(), "{found:?} {exact:?}");
    for (f, e) in found.iter().zip(exact) {
        assert!((f - e).abs() <= relative * e.abs(), "{f} is not {e}");
    }
}

#[test]
fn val_harmonic_levels() {
    let (k, mu) = (0.5, 1800.0);
    let domain = Domain::Line {
        lower: -1.5,
        upper: 1.4,
    };
    let well = Potential::new(|q| 0.5 * k * q * q, domain).unwrap();
    let found = states(&well, 1.0 / mu, &wanted(8)).unwrap();
    let omega = (k / mu).sqrt();
    let exact: Vec<f64> = (0..8).map(|v| omega * (f64::from(v) + 0.5)).collect();
    close(&energies(&found), &exact, 1e-8);
    assert!(!found.cut_by_edge);
    for (v, s) in found.states.iter().enumerate() {
        assert!(
            s.convergence < 1e-10 && s.edge_uncertainty < 1e-9,
            "{} {}",
            s.convergence,
            s.edge_uncertainty
        );
        assert!(s.mean.abs() < 1e-8);
        // ⟨q²⟩ = (v + ½)/(μω)
        let square = (v as f64 + 0.5) / (mu * omega);
        assert!((s.mean_square - square).abs() < 1e-6 * square);
        // A node may fall on a grid point, where only rounding is left.
        let large: Vec<f64> = s
            .wavefunction
            .iter()
            .copied()
            .filter(|c| c.abs() > 1e-6)
            .collect();
        assert_eq!(large.windows(2).filter(|w| w[0] * w[1] < 0.0).count(), v);
        let norm: f64 = s.wavefunction.iter().map(|c| c * c).sum::<f64>() * found.step;
        assert!((norm - 1.0).abs() < 1e-12);
    }
}

#[test]
fn val_morse_levels_on_both_grids() {
    let (d, a, r0, mu) = (0.17, 1.03, 1.4, 918.0);
    let v = |r: f64| d * (1.0 - (-a * (r - r0)).exp()).powi(2) - 1.0;
    let omega = a * (2.0 * d / mu).sqrt();
    let x = a * a / (2.0 * mu);
    let exact: Vec<f64> = (0..8)
        .map(|n| f64::from(n) + 0.5)
        .map(|n| omega * n - x * n * n - 1.0)
        .collect();
    for domain in [
        Domain::Line {
            lower: 0.45,
            upper: 8.0,
        },
        Domain::HalfLine {
            lower: 0.45,
            upper: 8.0,
        },
    ] {
        let well = Potential::new(v, domain).unwrap();
        let found = states(&well, 1.0 / mu, &wanted(8)).unwrap();
        // relative to the energy above the minimum
        let above = |list: &[f64]| -> Vec<f64> { list.iter().map(|e| e + 1.0).collect() };
        close(&above(&energies(&found)), &above(&exact), 1e-6);
        assert!((found.states[0].energy - exact[0]).abs() < 1e-10);
    }
}

#[test]
fn the_spline_of_a_sweep_is_good_enough() {
    let (d, a, r0, mu) = (0.17, 1.03, 1.4, 918.0);
    let r: Vec<f64> = (0..60).map(|i| 0.6 + 0.0945 * f64::from(i)).collect();
    let e: Vec<f64> = r
        .iter()
        .map(|r| d * (1.0 - (-a * (r - r0)).exp()).powi(2))
        .collect();
    let well = Potential::of_length(&r, &e).unwrap();
    let found = states(&well, 1.0 / mu, &wanted(6)).unwrap();
    let omega = a * (2.0 * d / mu).sqrt();
    for (v, s) in found.states.iter().enumerate() {
        let n = v as f64 + 0.5;
        let exact = omega * n - a * a / (2.0 * mu) * n * n;
        let error = (s.energy - exact) * PER_CM_PER_HARTREE;
        assert!(error.abs() < 0.05, "v = {v}: {error} cm⁻¹");
    }
}

#[test]
fn the_radial_ground_state_knows_the_origin() {
    // V = ½μω²r² on the half line has the odd levels of the oscillator only: 3/2, 7/2, …
    let mu = 1.0;
    let domain = Domain::HalfLine {
        lower: 1e-6,
        upper: 8.0,
    };
    let well = Potential::new(|q: f64| 0.5 * q * q, domain).unwrap();
    // The lower end lies at the bottom of the well, so nothing is below both ends …
    assert_eq!(states(&well, 1.0 / mu, &wanted(3)).unwrap().states.len(), 0);
    // … unless a barrier of no width worth the name stands there.
    let well = Potential::new(
        |q: f64| 0.5 * q * q + if q < 2e-6 { 40.0 } else { 0.0 },
        domain,
    )
    .unwrap();
    let found = states(&well, 1.0 / mu, &wanted(3)).unwrap();
    close(&energies(&found), &[1.5, 3.5, 5.5], 1e-6);
}

#[test]
fn val_mathieu_characteristic_values() {
    // H = −g/2 d²/dφ² + A cos 2φ: E = g a/2 with q = A/g (DLMF 28.2). Values a_r, b_r from SciPy 1.17 special.mathieu_a
    // and mathieu_b; also Abramowitz and Stegun, table 20.1 (from memory).
    let tables = [
        (
            1.0,
            [
                -0.455_138_604_107_413_6,
                -0.110_248_816_992_095_2,
                1.859_108_072_514_363_4,
                3.917_024_772_998_471,
                4.371_300_982_735_086,
                9.047_739_259_809_374,
                9.078_368_847_203_102,
            ],
        ),
        (
            5.0,
            [
                -5.800_046_020_851_508,
                -5.790_080_598_637_771,
                1.858_187_541_547_750_5,
                2.099_460_445_486_665_4,
                7.449_109_739_529_178,
                9.236_327_713_693_7,
                11.548_832_036_343_402,
            ],
        ),
        (
            25.0,
            [
                -40.256_779_546_566_79,
                -40.256_778_984_684_16,
                -21.314_899_690_665_726,
                -21.314_860_622_249_853,
                -3.522_164_727_158_295_4,
                -3.520_941_526_621_369,
                12.964_079_444_326_467,
            ],
        ),
    ];
    for (q, exact) in tables {
        let g = 0.02;
        let domain = Domain::Circle {
            from: -1.0,
            period: TAU,
        };
        let well = Potential::new(|p: f64| q * g * (2.0 * p).cos(), domain).unwrap();
        let found = states(&well, g, &wanted(7)).unwrap();
        let a: Vec<f64> = found.states.iter().map(|s| 2.0 * s.energy / g).collect();
        for (x, y) in a.iter().zip(exact) {
            assert!((x - y).abs() < 1e-6 * y.abs().max(1.0), "{a:?} {exact:?}");
        }
        let mesh = Mesh {
            lower: -1.0,
            upper: -1.0 + TAU,
            periodic: true,
            elements: 12,
            order: 10,
        };
        let second = eigenvalues(|p| q * g * (2.0 * p).cos(), |_| g, &mesh, 7).unwrap();
        for (x, y) in second.iter().zip(exact) {
            assert!((2.0 * x / g - y).abs() < 1e-6 * y.abs().max(1.0));
        }
    }
}

#[test]
fn a_free_rotor_has_paired_levels() {
    let domain = Domain::Circle {
        from: 0.0,
        period: TAU,
    };
    let flat = Potential::new(|_| -3.0, domain).unwrap();
    let found = states(&flat, 0.01, &wanted(5)).unwrap();
    for (s, m) in found.states.iter().zip([0.0_f64, 1.0, 1.0, 2.0, 2.0]) {
        assert!((s.energy + 3.0 - 0.005 * m * m).abs() < 1e-12);
    }
}

/// Inversion of ammonia along the height of the pyramid: a quartic with a Gaussian barrier, made to
/// have a barrier of about 2020 cm⁻¹ and minima at ±0.7 bohr (invented numbers, ammonia-like).
fn inversion(q: f64) -> f64 {
    0.0497 * q * q + 0.0754 * (-1.2 * q * q).exp()
}

#[test]
fn two_solvers_agree_on_tunnelling_splittings() {
    let mu = 2.47 * ELECTRON_MASSES_PER_U;
    for mass in [mu, 1.7 * mu] {
        let domain = Domain::Line {
            lower: -2.2,
            upper: 2.2,
        };
        let well = Potential::new(inversion, domain).unwrap();
        let found = states(&well, 1.0 / mass, &wanted(6)).unwrap();
        let splittings = found.multiplets(2, inversion(0.0));
        assert!(splittings.len() >= 2, "{splittings:?}");
        let mesh = Mesh {
            lower: -2.6,
            upper: 2.6,
            periodic: false,
            elements: 24,
            order: 10,
        };
        let second = eigenvalues(inversion, |_| 1.0 / mass, &mesh, 6).unwrap();
        for m in &splittings {
            let other = second[m.lowest + 1] - second[m.lowest];
            assert!(
                (m.width - other).abs() < 1e-3 * other,
                "{} {} cm⁻¹",
                m.width * PER_CM_PER_HARTREE,
                other * PER_CM_PER_HARTREE
            );
        }
        assert!(splittings[0].width * PER_CM_PER_HARTREE > 1e-3);
        assert!(splittings[1].width > splittings[0].width);
    }
}

#[test]
fn a_sampled_double_well_keeps_its_splitting() {
    let mass = 2.47 * ELECTRON_MASSES_PER_U;
    let exact = {
        let domain = Domain::Line {
            lower: -2.2,
            upper: 2.2,
        };
        let well = Potential::new(inversion, domain).unwrap();
        states(&well, 1.0 / mass, &wanted(2)).unwrap()
    };
    let x: Vec<f64> = (0..45).map(|i| -2.2 + 0.1 * f64::from(i)).collect();
    let e: Vec<f64> = x.iter().map(|&q| inversion(q)).collect();
    let well = Potential::of_line(&x, &e).unwrap();
    let found = states(&well, 1.0 / mass, &wanted(2)).unwrap();
    let width = |s: &States| s.multiplets(2, inversion(0.0))[0].width;
    assert!((width(&found) - width(&exact)).abs() < 2e-3 * width(&exact));
}

#[test]
fn states_above_the_ends_are_not_listed() {
    let well = |from: f64, to: f64| {
        let domain = Domain::Line {
            lower: from,
            upper: to,
        };
        Potential::new(|q: f64| 0.5 * 0.5 * q * q, domain).unwrap()
    };
    let narrow = states(&well(-0.35, 0.6), 1.0 / 1800.0, &wanted(6)).unwrap();
    let wide = states(&well(-2.0, 2.0), 1.0 / 1800.0, &wanted(6)).unwrap();
    assert!(narrow.cut_by_edge && !wide.cut_by_edge);
    assert!(!narrow.states.is_empty());
    for (n, w) in narrow.states.iter().zip(&wide.states) {
        assert!(n.energy < narrow.lowest_edge);
        // What is said about the ends must cover what the ends did.
        let error = (n.energy - w.energy).abs();
        assert!(
            error <= n.edge_uncertainty + 1e-10,
            "{error} {}",
            n.edge_uncertainty
        );
    }
}

#[test]
fn repulsive_curves_and_bad_masses() {
    let r: Vec<f64> = (0..20).map(|i| 1.0 + 0.1 * f64::from(i)).collect();
    let e: Vec<f64> = r.iter().map(|r| 1.0 / r).collect();
    let curve = Potential::of_length(&r, &e).unwrap();
    let none = states(&curve, 1e-3, &wanted(4)).unwrap();
    assert!(none.states.is_empty() && none.cut_by_edge);
    assert!(states(&curve, 0.0, &wanted(4)).is_err());
    assert!(Potential::of_length(&[-1.0, 1.0], &[0.0, 0.0]).is_err());
}

#[test]
fn half_a_turn_mirrored_is_the_whole_turn() {
    let f = |a: f64| 0.004 * a.cos() + 0.003 * (2.0 * a).cos();
    let half: Vec<f64> = (0..=36).map(|i| PI * f64::from(i) / 36.0).collect();
    let whole: Vec<f64> = (0..=72).map(|i| PI * f64::from(i) / 36.0).collect();
    let e = |x: &[f64]| -> Vec<f64> { x.iter().map(|&a| f(a)).collect() };
    let one = Potential::of_even_torsion(&half, &e(&half)).unwrap();
    let other = Potential::of_torsion(&whole, &e(&whole)).unwrap();
    let g = 1e-4;
    let one = states(&one, g, &wanted(4)).unwrap();
    let other = states(&other, g, &wanted(4)).unwrap();
    close(&energies(&one), &energies(&other), 1e-10);
    assert!(Potential::of_even_torsion(&half[1..], &e(&half[1..])).is_err());
}

#[test]
fn a_varying_mass_is_a_change_of_coordinate() {
    // With g(q) = (dq/ds)² and the measure of q, −½ d/dq g d/dq equals an operator in s with another
    // weight; for g = (1 + c q)² and V = D ln²(1 + c q)/c² the levels in s = ln(1 + cq)/c are those of
    // −½(d²/ds² + c d/ds) + D s², that is ω(v + ½) + c²/8.
    let (c, mass, strength) = (0.3, 50.0_f64, 0.4);
    let s = |q: f64| (1.0 + c * q).ln() / c;
    let mesh = Mesh {
        lower: -2.2,
        upper: 5.0,
        periodic: false,
        elements: 30,
        order: 8,
    };
    let found = eigenvalues(
        |q| 0.5 * strength * s(q).powi(2),
        |q| (1.0 + c * q).powi(2) / mass,
        &mesh,
        4,
    )
    .unwrap();
    let omega = (strength / mass).sqrt();
    let exact: Vec<f64> = (0..4)
        .map(|v| omega * (f64::from(v) + 0.5) + c * c / (8.0 * mass))
        .collect();
    close(&found, &exact, 1e-7);
}

#[test]
fn val_torsional_levels_of_hydrogen_peroxide() {
    // R. H. Hunt, R. A. Leacock, C. W. Peters, K. T. Hecht, J. Chem. Phys. 42, 1931 (1965), from memory: V = 993 cos φ + 636
    // cos 2φ + 44 cos 3φ and 40.28 cm⁻¹ for the kinetic term; observed levels 11.4, 254.2, 370.7 cm⁻¹ above
    // the lowest. They let the kinetic term vary with the angle, hence 3 %.
    let cm = 1.0 / PER_CM_PER_HARTREE;
    let x: Vec<f64> = (0..72).map(|i| TAU * f64::from(i) / 72.0).collect();
    let v = |a: f64| (993.0 * a.cos() + 636.0 * (2.0 * a).cos() + 44.0 * (3.0 * a).cos()) * cm;
    let e: Vec<f64> = x.iter().map(|&a| v(a)).collect();
    let well = Potential::of_torsion(&x, &e).unwrap();
    let found = states(&well, 2.0 * 40.28 * cm, &wanted(4)).unwrap();
    for (s, level) in found.states[1..].iter().zip([11.44, 254.2, 370.7]) {
        let above = (s.energy - found.states[0].energy) / cm;
        assert!((above - level).abs() < 0.03 * level, "{above}");
    }
    let split = found.multiplets(2, v(PI));
    assert!((split[0].width / cm - 11.44).abs() < 0.35);
}
