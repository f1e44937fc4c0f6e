//! The Hartree–Fock surface as a whole: textbook values, invariances, edge cases, effort.

mod common;

use common::{charged, diatomic, energy, evaluate, molecule, surface, surface_with, tight, water};
use nalgebra::{Rotation3, Vector3};
use thalweg::basis::{Basis, Contraction, FunctionKind, Shell, library};
use thalweg::integrals::basis_values;
use thalweg::molecule::Molecule;
use thalweg::scf::{FirstDensity, Method, ScfSettings};
use thalweg::surface::{
    HartreeFock, PointRequest, SeedPoint, StabilityDemand, Start, StopReason, Surface, SurfaceError,
};

/// Energies that must not depend on where, how turned or in which order the atoms stand, hartree.
const INVARIANCE: f64 = 1e-9;

/// A. Szabo, N. S. Ostlund, Modern Quantum Chemistry, tables 3.11–3.14 (SCF total energies) and sections 3.5.2, 3.8; from memory,
/// three or four decimals; the tolerance is half a unit of the last digit and a margin for the book's rounding.
#[test]
fn val_textbook_energies() {
    let h2 = molecule(&["H", "H"], &[[0.0; 3], [0.0, 0.0, 1.4]]);
    let n2 = molecule(&["N", "N"], &[[0.0; 3], [0.0, 0.0, 2.074]]);
    let co = molecule(&["C", "O"], &[[0.0; 3], [0.0, 0.0, 2.132]]);
    let fh = molecule(&["F", "H"], &[[0.0; 3], [0.0, 0.0, 1.733]]);
    let side = 2.05 / 3f64.sqrt();
    let ch4 = molecule(
        &["C", "H", "H", "H", "H"],
        &[
            [0.0; 3],
            [side, side, side],
            [side, -side, -side],
            [-side, side, -side],
            [-side, -side, side],
        ],
    );
    let half = 52.25f64.to_radians();
    let h2o = molecule(
        &["O", "H", "H"],
        &[
            [0.0; 3],
            [0.0, 1.809 * half.sin(), 1.809 * half.cos()],
            [0.0, -1.809 * half.sin(), 1.809 * half.cos()],
        ],
    );
    for (molecule, basis, expected, tolerance) in [
        (&h2, "STO-3G", -1.1167, 6e-5),
        (&h2, "6-31G**", -1.131, 6e-4),
        (&n2, "STO-3G", -107.496, 6e-4),
        (&n2, "6-31G*", -108.942, 1.2e-3),
        (&co, "STO-3G", -111.225, 6e-4),
        (&co, "6-31G*", -112.737, 6e-4),
        (&ch4, "STO-3G", -39.727, 6e-4),
        (&ch4, "6-31G*", -40.195, 6e-4),
        (&ch4, "6-31G**", -40.202, 6e-4),
        (&h2o, "STO-3G", -74.963, 6e-4),
        (&h2o, "6-31G*", -76.011, 6e-4),
        (&h2o, "6-31G**", -76.023, 6e-4),
        (&fh, "STO-3G", -98.571, 6e-4),
        (&fh, "6-31G**", -100.011, 6e-4),
    ] {
        let found = energy(molecule, basis, Method::Rhf);
        assert!(
            (found - expected).abs() < tolerance,
            "{basis} {found} against {expected}"
        );
    }
}

/// The book's minimal basis: three Gaussians fitted to a Slater function of exponent 1, scaled.
fn scaled_slater(zeta: f64) -> Shell {
    let exponents: Vec<f64> = [0.109_818, 0.405_771, 2.227_66]
        .map(|a| a * zeta * zeta)
        .to_vec();
    let contraction = Contraction::normalised(0, &exponents, &[0.444_635, 0.535_328, 0.154_329]);
    Shell {
        atom: 0,
        exponents,
        contractions: vec![contraction],
        kind: FunctionKind::Spherical,
    }
}

/// A. Szabo, N. S. Ostlund, Modern Quantum Chemistry, section 3.5.3 and appendix B: HeH⁺ at 1.4632 bohr (from memory; recomputed
/// with normalised contractions: −2.860659), and section 3.8: the hydrogen atom with ζ = 1.24.
#[test]
fn val_textbook_helium_hydride_and_hydrogen() {
    let ion = charged(
        molecule(&["He", "H"], &[[0.0; 3], [0.0, 0.0, 1.4632]]),
        1,
        1,
    );
    let shells = vec![vec![scaled_slater(2.0925)], vec![scaled_slater(1.24)]];
    let surface = HartreeFock::new(&ion, shells, Method::Rhf, tight()).expect("fits");
    let found = evaluate(&surface, &ion.positions, StabilityDemand::None).record;
    assert!((found.energy.expect("converges") + 2.860_662).abs() < 1e-5);
    let atom = charged(molecule(&["H"], &[[0.0; 3]]), 0, 2);
    let surface = HartreeFock::new(&atom, vec![vec![scaled_slater(1.24)]], Method::Uhf, tight())
        .expect("fits");
    let found = evaluate(&surface, &atom.positions, StabilityDemand::Leave).record;
    assert!((found.energy.expect("converges") + 0.4666).abs() < 6e-5);
}

/// Even-tempered s functions reach the exact hydrogen atom (−½) and the Hartree–Fock limit of helium,
/// −2.861679996 hartree (T. Koga, K. Kanayama, S. Watanabe, A. J. Thakkar, Int. J. Quantum Chem. 71, 491 (1999), from memory).
#[test]
fn val_even_tempered_atoms_reach_their_limits() {
    let shells: Vec<Shell> = (0..20)
        .map(|k| {
            let exponents = vec![0.03 * 2.1f64.powi(k)];
            Shell {
                atom: 0,
                contractions: vec![Contraction::normalised(0, &exponents, &[1.0])],
                exponents,
                kind: FunctionKind::Spherical,
            }
        })
        .collect();
    for (symbol, multiplicity, method, exact) in [
        ("H", 2, Method::Uhf, -0.5),
        ("He", 1, Method::Rhf, -2.861_679_996),
    ] {
        let atom = charged(molecule(&[symbol], &[[0.0; 3]]), 0, multiplicity);
        let surface = HartreeFock::new(&atom, vec![shells.clone()], method, tight()).expect("fits");
        let found = evaluate(&surface, &atom.positions, StabilityDemand::None).record;
        let energy = found.energy.expect("converges");
        assert!(
            energy > exact - 1e-8 && energy < exact + 2e-6,
            "{symbol}: {energy}"
        );
        // Virial theorem: the basis is nearly complete, so that T = −E.
        assert!((found.kinetic + energy).abs() < 1e-4);
    }
}

/// Large correlation-consistent sets stay above the numerical limits (L. Laaksonen, P. Pyykkö, D. Sundholm, Comput. Phys. Rep. 4, 313
/// (1986), from memory) by what an independent calculation finds in the same basis.
#[test]
fn val_large_bases_approach_numerical_limits() {
    let h2 = molecule(&["H", "H"], &[[0.0; 3], [0.0, 0.0, 1.4]]);
    let n2 = molecule(&["N", "N"], &[[0.0; 3], [0.0, 0.0, 2.068]]);
    for (molecule, basis, limit, expected) in [
        (&h2, "cc-pVQZ", -1.133_629_6, -1.133_459),
        (&n2, "cc-pVTZ", -108.993_826, -108.984_093),
    ] {
        let found = energy(molecule, basis, Method::Rhf);
        assert!(found > limit);
        assert!((found - expected).abs() < 1e-6, "{basis}: {found}");
    }
}

fn peroxide() -> Molecule {
    molecule(
        &["O", "O", "H", "H"],
        &[
            [0.1, -0.2, 0.3],
            [0.1, -0.2, 3.1],
            [0.1, 1.6, -0.1],
            [1.77, -0.8, 3.4],
        ],
    )
}

#[test]
fn energy_does_not_depend_on_place_orientation_or_order() {
    let here = peroxide();
    let turn = Rotation3::from_euler_angles(0.3, -1.1, 2.2);
    let turned: Vec<Vector3<f64>> = here.positions.iter().map(|r| turn * r).collect();
    let shifted: Vec<Vector3<f64>> = here
        .positions
        .iter()
        .map(|r| r + Vector3::new(11.0, -7.0, 3.0))
        .collect();
    let order = [3, 1, 0, 2];
    let shuffled = Molecule {
        atoms: order.iter().map(|&i| here.atoms[i].clone()).collect(),
        positions: order.iter().map(|&i| here.positions[i]).collect(),
        ..here.clone()
    };
    let reference = energy(&here, "6-31G*", Method::Rhf);
    for other in [here.at(&turned), here.at(&shifted), shuffled] {
        let found = energy(&other, "6-31G*", Method::Rhf);
        assert!(
            (found - reference).abs() < INVARIANCE,
            "{found} {reference}"
        );
    }
    // The dipole moment turns along and is taken about the centre of nuclear charge.
    let surface = surface(&here, "6-31G*", Method::Rhf);
    let original = evaluate(&surface, &here.positions, StabilityDemand::None).record;
    let moved = evaluate(&surface, &turned, StabilityDemand::None).record;
    let expected = turn * Vector3::from(original.dipole);
    assert!((Vector3::from(moved.dipole) - expected).norm() < 1e-6);
}

#[test]
fn a_charged_dipole_does_not_depend_on_the_origin() {
    let ion = charged(diatomic("O", "H", 0.97), -1, 1);
    let surface = surface(&ion, "6-31G*", Method::Rhf);
    let here = evaluate(&surface, &ion.positions, StabilityDemand::None).record;
    let far: Vec<_> = ion
        .positions
        .iter()
        .map(|r| r + Vector3::new(0.0, 0.0, 20.0))
        .collect();
    let there = evaluate(&surface, &far, StabilityDemand::None).record;
    assert!((here.dipole[2] - there.dipole[2]).abs() < 1e-6);
}

/// The density, put on a grid of points, holds all electrons. Each atom has a product grid
/// (Gauss–Chebyshev in the radius, a Lebedev-free product of Gauss points in the angles), shared out by smoothed Voronoi cells (A. D. Becke,
/// J. Chem. Phys. 88, 2547 (1988)).
#[test]
fn density_on_a_grid_holds_all_electrons() {
    let water = water(0.96, 0.96, 104.5);
    let surface = surface(&water, "6-31G*", Method::Rhf);
    let outcome = evaluate(&surface, &water.positions, StabilityDemand::None);
    let seed = outcome.seed.expect("converges");
    let shells = library::find("6-31G*")
        .expect("built in")
        .shells_of(&water, None)
        .expect("covered");
    let basis = Basis::of_molecule(&shells, &water);
    let frame =
        thalweg::scf::orthogonal::Orthogonal::new(&thalweg::integrals::overlap(&basis), 1e-7, None)
            .expect("small");
    let density = frame.density(&seed.state().occupied[0]) * 2.0;
    let mut electrons = 0.0;
    let (radial, polar, azimuthal) = (60, 24, 24);
    for (a, centre) in water.positions.iter().enumerate() {
        for i in 1..=radial {
            // Second-kind Chebyshev points, mapped to the radius by r = (1 + x)/(1 − x).
            let angle = std::f64::consts::PI * f64::from(i) / f64::from(radial + 1);
            let (x, s) = (angle.cos(), angle.sin());
            let r = (1.0 + x) / (1.0 - x);
            let weight =
                std::f64::consts::PI / f64::from(radial + 1) * s * 2.0 / (1.0 - x).powi(2) * r * r;
            for j in 0..polar {
                // Equidistant polar angles with the weights that integrate cosines exactly (Fejér's first rule).
                let theta = std::f64::consts::PI * (f64::from(j) + 0.5) / f64::from(polar);
                let mut share = 1.0;
                for k in 1..=polar / 2 {
                    let k = f64::from(k);
                    share -= 2.0 * (2.0 * k * theta).cos() / (4.0 * k * k - 1.0);
                }
                let polar_weight = 2.0 / f64::from(polar) * share;
                for m in 0..azimuthal {
                    let phi = std::f64::consts::TAU * f64::from(m) / f64::from(azimuthal);
                    let point = centre
                        + Vector3::new(
                            theta.sin() * phi.cos(),
                            theta.sin() * phi.sin(),
                            theta.cos(),
                        ) * r;
                    let cell = |b: usize| -> f64 {
                        (0..3)
                            .filter(|&c| c != b)
                            .map(|c| {
                                let (rb, rc) = (
                                    (point - water.positions[b]).norm(),
                                    (point - water.positions[c]).norm(),
                                );
                                let mut mu =
                                    (rb - rc) / (water.positions[b] - water.positions[c]).norm();
                                for _ in 0..3 {
                                    mu = 1.5 * mu - 0.5 * mu.powi(3);
                                }
                                0.5 * (1.0 - mu)
                            })
                            .product()
                    };
                    let total: f64 = (0..3).map(cell).sum();
                    let values = basis_values(&basis, &point);
                    let here = values.dot(&(&density * &values));
                    electrons += weight * polar_weight * std::f64::consts::TAU
                        / f64::from(azimuthal)
                        * here
                        * cell(a)
                        / total;
                }
            }
        }
    }
    // The grid, not the density, sets the error.
    assert!((electrons - 10.0).abs() < 2e-4, "{electrons}");
}

#[test]
fn mixing_occupied_orbitals_changes_nothing() {
    use thalweg::scf::fock::{Field, Occupation, Repulsion};
    let water = water(0.96, 0.96, 104.5);
    let shells = library::find("6-31G")
        .expect("built in")
        .shells_of(&water, None)
        .expect("covered");
    let basis = Basis::of_molecule(&shells, &water);
    let charges: Vec<_> = water
        .atoms
        .iter()
        .zip(&water.positions)
        .map(|(a, r)| (a.charge(), *r))
        .collect();
    let core =
        thalweg::integrals::kinetic(&basis) + thalweg::integrals::attraction(&basis, &charges);
    let frame =
        thalweg::scf::orthogonal::Orthogonal::new(&thalweg::integrals::overlap(&basis), 1e-7, None)
            .expect("small");
    let list = thalweg::integrals::repulsion::RepulsionList::compute(&basis, &Default::default());
    let occupation = Occupation {
        method: Method::Rhf,
        alpha: 5,
        beta: 5,
    };
    let mut field = Field::new(core, &frame, Repulsion::Stored(&list), 9.0, occupation);
    let orbitals = field.diagonalise(&field.core_in_frame()).expect("small");
    let occupied = orbitals[0].lowest(5);
    let mix = Rotation3::from_euler_angles(0.4, 0.9, -0.3);
    let mut turned = occupied.clone();
    let block = occupied.columns(1, 3) * mix.matrix();
    turned.columns_mut(1, 3).copy_from(&block);
    let (one, other) = (field.evaluate(vec![occupied]), field.evaluate(vec![turned]));
    assert!((one.energy - other.energy).abs() < 1e-11);
    assert!((&one.focks[0] - &other.focks[0]).amax() < 1e-12);
    assert!((one.commutator - other.commutator).abs() < 1e-11);
}

#[test]
fn edge_cases_are_energies_or_errors() {
    // A bare proton: no electrons, no interaction.
    let proton = charged(molecule(&["H"], &[[0.0; 3]]), 1, 1);
    for method in [Method::Rhf, Method::Uhf] {
        let found = evaluate(
            &surface(&proton, "6-31G*", method),
            &proton.positions,
            StabilityDemand::Leave,
        )
        .record;
        assert!(found.energy.expect("none to converge").abs() < 1e-15);
        assert_eq!((found.homo, found.stop), (None, StopReason::Converged));
    }
    // Two protons: their repulsion.
    let protons = charged(diatomic("H", "H", 1.0), 2, 1);
    let found = energy(&protons, "6-31G", Method::Rhf);
    assert!((found - 1.0 / (protons.positions[1].z)).abs() < 1e-12);
    // One electron, no β electrons: H₂⁺ in a large basis near its exact energy at 2 bohr, −0.6026342 hartree
    // (M. M. Madsen, J. M. Peek, At. Data 2, 171 (1971), from memory).
    let ion = charged(molecule(&["H", "H"], &[[0.0; 3], [0.0, 0.0, 2.0]]), 1, 2);
    let found = energy(&ion, "cc-pVQZ", Method::Uhf);
    assert!(found > -0.602_634_3 && found < -0.6020, "{found}");
    // Hydride: a closed shell that needs diffuse functions, above its limit −0.487930 hartree (C. C. J. Roothaan, P. S. Bagus,
    // Methods Comput. Phys. 2, 47 (1963), from memory).
    let hydride = charged(molecule(&["H"], &[[0.0; 3]]), -1, 1);
    let found = energy(&hydride, "aug-cc-pVDZ", Method::Rhf);
    assert!(found > -0.487_93 && found < -0.47, "{found}");
    // All orbitals full: helium with one function.
    let helium = molecule(&["He"], &[[0.0; 3]]);
    let found = evaluate(
        &surface(&helium, "STO-3G", Method::Uhf),
        &helium.positions,
        StabilityDemand::Leave,
    )
    .record;
    assert_eq!((found.lumo, found.stability), (None, None));
    assert!((found.energy.expect("converges") + 2.807_784).abs() < 1e-5);
}

#[test]
fn what_cannot_be_treated_is_an_error() {
    let helium = charged(molecule(&["He"], &[[0.0; 3]]), -1, 2);
    let shells = library::find("STO-3G")
        .expect("built in")
        .shells_of(&helium, None)
        .expect("covered");
    let error = HartreeFock::new(&helium, shells, Method::Uhf, tight())
        .map(|_| ())
        .expect_err("three electrons");
    assert_eq!(
        error,
        SurfaceError::TooFewFunctions {
            functions: 1,
            occupied: 2
        }
    );
    let triplet = charged(diatomic("O", "O", 1.2), 0, 3);
    let shells = library::find("STO-3G")
        .expect("built in")
        .shells_of(&triplet, None)
        .expect("covered");
    let error = HartreeFock::new(&triplet, shells, Method::Rhf, tight())
        .map(|_| ())
        .expect_err("open shell");
    assert_eq!(error, SurfaceError::OpenShell { multiplicity: 3 });
    let h2 = diatomic("H", "H", 0.74);
    let surface = surface(&h2, "STO-3G", Method::Rhf);
    for z in [0.0, f64::NAN] {
        let positions = [Vector3::zeros(), Vector3::new(0.0, 0.0, z)];
        let request = PointRequest {
            positions: &positions,
            coordinates: &[],
            start: Start::Fresh,
            gradient: false,
            stability: StabilityDemand::None,
            follow: None,
        };
        let error = surface
            .evaluate(&request, &mut surface.workspace())
            .map(|_| ())
            .expect_err("no molecule");
        assert!(matches!(error, SurfaceError::Coincident { .. }));
    }
}

#[test]
fn ghost_atoms_lend_functions_only() {
    let mut pair = diatomic("He", "He", 2.0);
    pair.atoms[1].ghost = true;
    let alone = energy(&molecule(&["He"], &[[0.0; 3]]), "6-31G**", Method::Rhf);
    let found = evaluate(
        &surface(&pair, "6-31G**", Method::Rhf),
        &pair.positions,
        StabilityDemand::None,
    )
    .record;
    let lowered = alone - found.energy.expect("converges");
    assert!(lowered > 1e-6 && lowered < 1e-2, "{lowered}");
    assert!((found.electrons - 2.0).abs() < 1e-10);
}

#[test]
fn near_dependent_functions_are_dropped_and_counted() {
    // Two atoms' functions almost on one spot.
    let mut close = diatomic("He", "He", 1e-4);
    close.atoms[1].ghost = true;
    let found = evaluate(
        &surface(&close, "6-31G", Method::Rhf),
        &close.positions,
        StabilityDemand::Leave,
    )
    .record;
    assert_eq!(found.functions_kept, 2);
    assert!(found.overlap_smallest < 1e-7);
    let alone = energy(&molecule(&["He"], &[[0.0; 3]]), "6-31G", Method::Rhf);
    assert!((found.energy.expect("converges") - alone).abs() < 1e-6);
}

#[test]
fn first_densities_lead_to_one_energy() {
    let water = water(0.96, 0.96, 104.5);
    let atoms = energy(&water, "6-31G*", Method::Rhf);
    let settings = ScfSettings {
        first_density: FirstDensity::CoreHamiltonian,
        ..tight()
    };
    let other = surface_with(&water, "6-31G*", Method::Rhf, settings, None);
    let core = evaluate(&other, &water.positions, StabilityDemand::Leave).record;
    assert!((core.energy.expect("converges") - atoms).abs() < 1e-9);
}

#[test]
fn regress_fresh_calculations_take_few_builds() {
    for (molecule, basis, most) in [
        (water(0.96, 0.96, 104.5), "6-31G*", 11),
        (diatomic("N", "N", 1.1), "cc-pVDZ", 10),
        (diatomic("Li", "H", 1.6), "6-31G*", 11),
    ] {
        let surface = surface_with(&molecule, basis, Method::Rhf, ScfSettings::default(), None);
        let found = evaluate(&surface, &molecule.positions, StabilityDemand::None).record;
        assert!(
            found.fock_builds <= most,
            "{} builds, at most {most} before",
            found.fock_builds
        );
    }
}

#[test]
fn direct_calculations_agree_with_stored_integrals() {
    let water = water(0.96, 1.3, 100.0);
    for method in [Method::Rhf, Method::Uhf] {
        let stored = energy(&water, "cc-pVDZ", method);
        let settings = ScfSettings {
            memory_mib: 0,
            ..tight()
        };
        let surface = surface_with(&water, "cc-pVDZ", method, settings, None);
        assert_eq!(surface.workspace_bytes(), 0);
        let direct = evaluate(&surface, &water.positions, StabilityDemand::Leave).record;
        assert!((direct.energy.expect("converges") - stored).abs() < 1e-9);
        assert!(direct.integrals.computed > 0);
    }
}

#[test]
fn a_workspace_never_changes_a_bit() {
    let start = water(0.96, 0.96, 104.5);
    let surface = surface(&start, "6-31G*", Method::Uhf);
    let mut used = surface.workspace();
    let geometries = [
        water(0.9, 0.96, 104.5),
        water(1.4, 0.96, 104.5),
        water(1.4, 1.1, 99.0),
    ];
    let mut last = None;
    for molecule in &geometries {
        let request = |start| PointRequest {
            positions: &molecule.positions,
            coordinates: &[0.0],
            start,
            gradient: true,
            stability: StabilityDemand::Leave,
            follow: None,
        };
        let from = || match &last {
            None => Start::Fresh,
            Some(seed) => Start::Previous(SeedPoint {
                coordinates: &[0.0],
                seed,
            }),
        };
        let one = surface
            .evaluate(&request(from()), &mut used)
            .expect("sound");
        let other = surface
            .evaluate(&request(from()), &mut surface.workspace())
            .expect("sound");
        assert_eq!(
            one.record.energy.map(f64::to_bits),
            other.record.energy.map(f64::to_bits)
        );
        assert_eq!(one.record.gradient, other.record.gradient);
        assert_eq!(
            one.record.dipole.map(f64::to_bits),
            other.record.dipole.map(f64::to_bits)
        );
        assert_eq!(one.record.fock_builds, other.record.fock_builds);
        last = one.seed;
    }
}

#[test]
fn populations_and_bond_orders_add_up() {
    let peroxide = peroxide();
    let found = evaluate(
        &surface(&peroxide, "6-31G*", Method::Rhf),
        &peroxide.positions,
        StabilityDemand::None,
    )
    .record;
    assert!(found.charges_mulliken.iter().sum::<f64>().abs() < 1e-9);
    assert!(found.charges_loewdin.iter().sum::<f64>().abs() < 1e-9);
    let order = |i, j| {
        found
            .bond_orders
            .iter()
            .find(|b| (b.0, b.1) == (i, j))
            .expect("a pair")
            .2
    };
    assert!(order(0, 1) > 0.7 && order(0, 2) > 0.7 && order(2, 3) < 0.1);
    // An oxygen molecule: two unpaired electrons, shared evenly; spins add up to 2.
    let oxygen = charged(diatomic("O", "O", 1.2), 0, 3);
    let found = evaluate(
        &surface(&oxygen, "6-31G*", Method::Uhf),
        &oxygen.positions,
        StabilityDemand::Leave,
    )
    .record;
    assert!(
        (found.spins_loewdin[0] - 1.0).abs() < 1e-6 && (found.spins_loewdin[1] - 1.0).abs() < 1e-6
    );
    // Stretched to atoms, the broken-symmetry solution has no bond left.
    let apart = diatomic("H", "H", 8.0);
    let found = evaluate(
        &surface(&apart, "6-31G", Method::Uhf),
        &apart.positions,
        StabilityDemand::Leave,
    )
    .record;
    assert!(found.bond_orders[0].2.abs() < 1e-3);
    assert!((found.s_squared - 1.0).abs() < 1e-3);
}

#[test]
fn a_state_can_be_followed() {
    // The second closed-shell state of stretched N₂ is the continuation of the ground state; following it keeps it.
    let near = diatomic("N", "N", 1.5);
    let far = diatomic("N", "N", 1.9);
    let surface = surface(&near, "6-31G*", Method::Rhf);
    let ground = evaluate(&surface, &near.positions, StabilityDemand::None);
    let seed = ground.seed.expect("converges");
    let request = |follow| PointRequest {
        positions: &far.positions,
        coordinates: &[1.9],
        start: Start::Previous(SeedPoint {
            coordinates: &[1.5],
            seed: &seed,
        }),
        gradient: false,
        stability: StabilityDemand::Leave,
        follow,
    };
    let followed = surface
        .evaluate(&request(Some(&seed)), &mut surface.workspace())
        .expect("sound");
    let lowest = surface
        .evaluate(&request(None), &mut surface.workspace())
        .expect("sound");
    let (followed_energy, lowest_energy) = (
        followed.record.energy.expect("converges"),
        lowest.record.energy.expect("converges"),
    );
    assert!(
        lowest_energy < followed_energy - 0.01,
        "{lowest_energy} {followed_energy}"
    );
    let kept = surface.likeness(&seed, followed.seed.as_ref().expect("converges"));
    assert!(kept[0] > 0.8, "{kept:?}");
    let left = surface.likeness(&seed, lowest.seed.as_ref().expect("converges"));
    assert!(left[0] < kept[0] - 0.05, "{left:?} {kept:?}");
}
