//! How bonds end, where restricted solutions become unstable, and what the tests of stability cost.

mod common;

use common::jobs::{run, scan};
use common::{charged, diatomic, evaluate, surface, surface_with};
use thalweg::job::{LevelResult, PointResult, pieces};
use thalweg::molecule::Molecule;
use thalweg::scan::FindingKind;
use thalweg::scf::seed::Seed;
use thalweg::scf::{FirstDensity, Method, ScfSettings};
use thalweg::surface::{StabilityDemand, StopReason, Surface};
use thalweg::units::ANGSTROM_PER_BOHR;

fn level_of(zmatrix: &str, level: &str, sweep: &str, extra: &str) -> (LevelResult, Vec<String>) {
    let mut result = run(&scan(zmatrix, level, sweep, extra));
    (result.levels.remove(0), result.labels)
}

const N2: &str = "N1\nN2 N1 1.1";
const F2: &str = "F1\nF2 F1 1.4";
const HF: &str = "F\nH F 0.92";
const LIH: &str = "Li\nH Li 1.6";
const O2: &str = "O1\nO2 O1 1.2";
const WATER: &str = "O\nH1 O 0.96\nH2 O 0.96 H1 104.5";
const ETHYLENE: &str = "C1\nC2 C1 1.32\nH1 C1 1.08 C2 121.5\nH2 C1 1.08 C2 121.5 H1 180\nH3 C2 1.08 C1 121.5 H1 0\nH4 C2 1.08 C1 121.5 H1 180";

#[test]
fn far_apart_energies_are_those_of_the_parts() {
    for (zmatrix, one, other) in [
        (N2, "N1", "N2"),
        (F2, "F1", "F2"),
        (HF, "F", "H"),
        (LIH, "Li", "H"),
    ] {
        let (level, labels) = level_of(
            zmatrix,
            "method = \"uhf\"\nbasis = \"6-31g\"",
            &format!(
                "bond = [\"{one}\", \"{other}\"]\nvalues = [1.4, 1.8, 2.4, 3.2, 5.0, 10.0, 50.0]"
            ),
            "",
        );
        let far = level.points.last().and_then(|p| p.record.energy);
        let far = far.expect("converges");
        let limit = level.limit.as_ref().expect("the swept bond cuts");
        let parts = limit.energy.expect("converges");
        assert!(
            (far - parts).abs() < 1e-7,
            "{zmatrix}: {far} against {parts}"
        );
        assert_eq!(limit.unreachable, None);
        assert_eq!(pieces::unreachable(&level, &labels), None);
    }
}

#[test]
fn two_triplet_atoms_are_out_of_reach_of_triplet_oxygen_and_a_finding_says_so() {
    let (level, labels) = level_of(
        O2,
        "method = \"uhf\"\nbasis = \"sto-3g\"\nmultiplicity = 3",
        "bond = [\"O1\", \"O2\"]\nvalues = [1.2, 1.4, 1.7, 2.0, 2.5, 3.0, 5.0]",
        "",
    );
    let limit = level.limit.as_ref().expect("the swept bond cuts");
    let (energy, lower) = (limit.energy.unwrap(), limit.unreachable.unwrap());
    assert!(lower < energy - 1e-3);
    let finding = level
        .findings
        .iter()
        .find(|f| f.kind == FindingKind::UnreachableParts)
        .expect("a finding");
    assert_eq!(finding.points, [6]);
    assert!(
        level.points[6]
            .findings
            .contains(&FindingKind::UnreachableParts)
    );
    assert!(finding.text.contains("multiplicity"), "{}", finding.text);
    let sentence = pieces::sentence(&level, &labels).expect("far enough");
    assert!(sentence.contains("cannot be reached"), "{sentence}");
}

/// Ionic and neutral NaCl cross near 5.5 Å, and either curve is stable far beyond: walks from both ends and fresh starts stay on
/// the ionic one. Without the starts from free atoms 8 Å was 99 kJ/mol too high (−621.2518 hartree), and no finding said so.
#[test]
fn sodium_chloride_leaves_as_atoms() {
    for start in ["geometry", "last"] {
        let (level, _) = level_of(
            "Na\nCl Na 2.4",
            "method = \"uhf\"\nbasis = \"6-31g*\"",
            "bond = [\"Na\", \"Cl\"]\nfrom = 2.4\nto = 8.0\nstep = 0.4",
            &format!("[walk]\nstart = \"{start}\""),
        );
        let limit = level.limit.as_ref().and_then(|l| l.energy).unwrap();
        let (near, far) = (level.points.first().unwrap(), level.points.last().unwrap());
        let apart = far.record.energy.unwrap() - limit;
        assert!(apart.abs() < 1e-3, "{start}: {apart}");
        assert!(far.record.charges_loewdin[0].abs() < 0.05);
        assert!(near.record.charges_mulliken[0] > 0.5);
        // The curve is the lower of two smooth ones: it never falls again.
        let energies = level.points.iter().map(|p| p.record.energy.unwrap());
        let energies: Vec<f64> = energies.collect();
        assert!(energies.windows(2).all(|w| w[1] > w[0] - 1e-4), "{start}");
    }
}

#[test]
fn only_what_has_fallen_apart_starts_from_its_atoms() {
    let start = |molecule: Molecule, method: Method| {
        let surface = surface(&molecule, "6-31g", method);
        surface.apart(&molecule.positions)
    };
    let salt = |length: f64| diatomic("Na", "Cl", length);
    assert!(start(salt(2.4), Method::Uhf).is_empty());
    assert!(start(salt(8.0), Method::Rhf).is_empty());
    let electrons = |molecule: Molecule| -> Vec<usize> {
        let seeds = start(molecule, Method::Uhf);
        // Open p shells along the line between the atoms, and across.
        assert_eq!(seeds.len(), 2);
        for seed in &seeds {
            for block in &seed.state().occupied {
                let unit = block.transpose() * block;
                let off = &unit - nalgebra::DMatrix::identity(unit.nrows(), unit.ncols());
                assert!(off.amax() < 1e-10);
            }
        }
        let columns = |seed: &Seed| seed.state().occupied.iter().map(|y| y.ncols()).collect();
        columns(&seeds[0])
    };
    assert_eq!(electrons(salt(8.0)), [14, 14]);
    assert_eq!(electrons(charged(diatomic("N", "N", 4.0), 1, 2)), [7, 6]);
    assert_eq!(electrons(charged(diatomic("H", "H", 4.0), 1, 2)), [1, 0]);
    assert_eq!(electrons(charged(diatomic("O", "O", 4.0), 0, 3)), [9, 7]);
}

/// Where RHF H₂ becomes unstable towards UHF, bohr: zero of the lowest eigenvalue of ε_a − ε_i − (ii|ab) − (ia|ib)
/// (`derived_cf_h2_…` in the project's reference values: computed there from the definition, independent of this code;
/// quoted to three decimals, tolerance 0.002).
const ONSETS_BOHR: [(&str, f64); 5] = [
    ("sto-3g", 2.18),
    ("6-31g", 2.251),
    ("6-31g**", 2.28),
    ("cc-pvtz", 2.295),
    ("cc-pvqz", 2.298),
];

#[test]
fn val_onset_of_instability_of_hydrogen() {
    for (basis, published) in ONSETS_BOHR {
        let (level, _) = level_of(
            "H1\nH2 H1 0.74",
            &format!("method = \"rhf\"\nbasis = \"{basis}\""),
            "bond = [\"H1\", \"H2\"]\nfrom = 0.9\nto = 1.5\nstep = 0.2",
            "",
        );
        let onset = level.onset.expect("the eigenvalue changes sign").value;
        let bohr = onset / ANGSTROM_PER_BOHR;
        assert!((bohr - published).abs() < 0.002, "{basis}: {bohr} bohr");
        // To 1e-4 Å: the eigenvalue has one sign before and another after.
        let eigenvalue = |at: f64| {
            let molecule = diatomic("H", "H", at);
            let surface = surface(&molecule, basis, Method::Rhf);
            evaluate(&surface, &molecule.positions, StabilityDemand::Report)
                .record
                .stability
                .and_then(|s| s.triplet)
                .expect("a test")
        };
        if basis != "cc-pvqz" {
            assert!(
                eigenvalue(onset - 1e-4) > 0.0 && eigenvalue(onset + 1e-4) < 0.0,
                "{basis}"
            );
        }
    }
}

#[test]
fn restricted_and_unrestricted_energies_merge_below_the_onset() {
    let sweep = "bond = [\"H1\", \"H2\"]\nfrom = 0.6\nto = 2.0\nstep = 0.1";
    let curve = |method: &str| {
        let level = format!("method = \"{method}\"\nbasis = \"6-31g**\"");
        level_of("H1\nH2 H1 0.74", &level, sweep, "").0
    };
    let (rhf, uhf) = (curve("rhf"), curve("uhf"));
    let onset = rhf.onset.expect("the eigenvalue changes sign").value;
    let mut below = 0;
    for (r, u) in rhf.points.iter().zip(&uhf.points) {
        let apart = r.record.energy.unwrap() - u.record.energy.unwrap();
        if r.values[0] < onset {
            assert!(apart.abs() < 1e-9, "{:?}: {apart:e}", r.values);
            below += 1;
        } else {
            assert!(apart > 1e-6, "{:?}: {apart:e}", r.values);
        }
    }
    assert!(below > 3 && below < rhf.points.len() - 3);
}

/// Restricted H–F leaves with a charge that the free atoms do not have; unrestricted H–F does not, and the sentence tells
/// which (common practice: 0.3–0.4 e at 3 Å).
#[test]
fn restricted_hydrogen_fluoride_keeps_a_spurious_charge() {
    let sweep = "bond = [\"F\", \"H\"]\nvalues = [0.92, 1.2, 1.5, 1.8, 2.1, 2.4, 2.7, 3.0]";
    let end = |method: &str| {
        let level = format!("method = \"{method}\"\nbasis = \"6-31g\"");
        let (level, labels) = level_of(HF, &level, sweep, "");
        let sentence = pieces::sentence(&level, &labels).expect("far enough");
        let record = level.points.last().unwrap().record.clone();
        (
            record.charges_mulliken[1],
            record.charges_loewdin[1],
            sentence,
        )
    };
    let (mulliken, loewdin, sentence) = end("rhf");
    assert!((0.3..0.4).contains(&mulliken), "{mulliken}");
    assert!((0.3..0.4).contains(&loewdin), "{loewdin}");
    assert!(sentence.contains("charges are spurious"), "{sentence}");
    assert!(sentence.contains(&format!("{loewdin:+.2}")), "{sentence}");
    assert!(sentence.contains("(Löwdin populations)"), "{sentence}");
    let (mulliken, loewdin, sentence) = end("uhf");
    assert!(mulliken.abs() < 0.01 && loewdin.abs() < 0.01);
    assert!(!sentence.contains("spurious"), "{sentence}");
}

/// Mayer's bond order between the atoms of the swept bond.
fn order(point: &PointResult, one: usize, other: usize) -> f64 {
    let orders = &point.record.bond_orders;
    let found = orders.iter().find(|&&(i, j, _)| (i, j) == (one, other));
    found.expect("every pair").2
}

/// Bond orders count electron pairs at equilibrium (common practice: near 3, 2 and 1), and vanish in UHF far out.
/// The count is that of RHF: UHF ethylene is spin-polarised at 1.32 Å already (RHF is unstable towards it in this basis), which
/// takes part of the π bond away; N₂ at 1.1 Å and water at 0.96 Å are not.
#[test]
fn bond_orders_count_bonds_and_vanish() {
    let cases = [
        (N2, "\"N1\", \"N2\"", 1.1, "", 3.0),
        (
            ETHYLENE,
            "\"C1\", \"C2\"",
            1.32,
            "\nmoves = [\"C2\", \"H3\", \"H4\"]",
            2.0,
        ),
        (WATER, "\"O\", \"H1\"", 0.96, "", 1.0),
    ];
    for (zmatrix, bond, equilibrium, moves, bonds) in cases {
        let along = |method: &str, values: &str| {
            level_of(
                zmatrix,
                &format!("method = \"{method}\"\nbasis = \"sto-3g\""),
                &format!("bond = [{bond}]\nvalues = [{equilibrium}{values}]{moves}"),
                "",
            )
            .0
        };
        let restricted = along("rhf", ", 1.4");
        let near = order(&restricted.points[0], 0, 1);
        assert!((near - bonds).abs() < 0.06 * bonds, "{bond}: {near}");
        let unrestricted = along("uhf", ", 1.5, 1.8, 2.2, 3.0, 4.5, 8.0");
        let far = order(unrestricted.points.last().unwrap(), 0, 1);
        assert!(far.abs() < 1e-3, "{bond}: {far}");
        let start = &unrestricted.points[0];
        let polarised = start.record.s_squared > 1e-3;
        assert_eq!(polarised, zmatrix == ETHYLENE, "{bond}");
        let lowered = near - order(start, 0, 1);
        if polarised {
            assert!((0.05..0.6).contains(&lowered), "{bond}: {lowered}");
        } else {
            assert!(lowered.abs() < 1e-5, "{bond}: {lowered}");
        }
    }
}

/// Charges add up to the molecule's and spin populations to twice its spin at every point, through an onset, for ions and
/// radicals and several parts.
#[test]
fn charges_and_spins_of_every_point_add_up() {
    let scans = [
        ("O\nH O 0.96", "\"O\", \"H\"", "uhf", 0, 2),
        ("O\nH O 0.96", "\"O\", \"H\"", "rhf", -1, 1),
        (O2, "\"O1\", \"O2\"", "uhf", 0, 3),
        (N2, "\"N1\", \"N2\"", "uhf", 1, 2),
        (F2, "\"F1\", \"F2\"", "uhf", 0, 1),
        (WATER, "\"O\", \"H1\"", "uhf", 0, 1),
    ];
    for (zmatrix, bond, method, charge, multiplicity) in scans {
        let (level, _) = level_of(
            zmatrix,
            &format!(
                "method = \"{method}\"\nbasis = \"6-31g\"\ncharge = {charge}\nmultiplicity = {multiplicity}"
            ),
            &format!("bond = [{bond}]\nfrom = 0.9\nto = 2.7\nstep = 0.2"),
            "",
        );
        let sum = |values: &[f64]| values.iter().sum::<f64>();
        let unpaired = f64::from(multiplicity - 1);
        for point in &level.points {
            let record = &point.record;
            let at = format!("{zmatrix} {charge} {multiplicity}: {:?}", point.values);
            assert!(record.energy.is_some(), "{at}");
            let (mulliken, loewdin) = (sum(&record.charges_mulliken), sum(&record.charges_loewdin));
            assert!((mulliken - f64::from(charge)).abs() < 1e-9, "{at}");
            assert!((loewdin - f64::from(charge)).abs() < 1e-9, "{at}");
            assert!((sum(&record.spins_loewdin) - unpaired).abs() < 1e-9, "{at}");
        }
    }
}

/// Far out the hole of a fluorine atom turns almost freely: what ends on a plateau is named, and nothing else.
#[test]
fn energies_along_a_soft_mode_are_named() {
    let (level, _) = level_of(
        "O\nF O 1.40\nH O 0.96 F 98",
        "method = \"uhf\"\nbasis = \"6-31g*\"",
        "bond = [\"O\", \"F\"]\nfrom = 1.2\nto = 2.6\nstep = 0.1",
        "[walk]\npasses = \"one\"",
    );
    let soft: Vec<usize> = level
        .points
        .iter()
        .filter(|p| p.record.stop == StopReason::SoftMode)
        .map(|p| p.point)
        .collect();
    assert!(!soft.is_empty() && soft.len() < level.points.len());
    let named = level
        .findings
        .iter()
        .find(|f| f.kind == FindingKind::SoftMode);
    assert_eq!(named.expect("a finding").points, soft);
}

/// RHF N₂ has several solutions beyond 1.5 Å; the two lowest have −108.3190 and −108.4562 hartree at 2.0 Å in 6-31G* (a numerical
/// trial with other code, to the digits given). Orbitals of the core Hamiltonian lead to one at −108.3125, and only a test of
/// stability leaves it; walks outwards reach the lowest with every seed.
#[test]
fn val_restricted_nitrogen_needs_its_guard_beyond_1_5_angstrom() {
    const LOWEST: f64 = -108.4562;
    let molecule = diatomic("N", "N", 2.0);
    let settings = ScfSettings {
        first_density: FirstDensity::CoreHamiltonian,
        ..ScfSettings::default()
    };
    let core = surface_with(&molecule, "6-31G*", Method::Rhf, settings, None);
    let energy = |stability: StabilityDemand| {
        let record = evaluate(&core, &molecule.positions, stability).record;
        record.energy.expect("converges")
    };
    let (bare, guarded) = (
        energy(StabilityDemand::None),
        energy(StabilityDemand::Leave),
    );
    assert!(bare > LOWEST + 0.1, "{bare}");
    assert!((guarded - LOWEST).abs() < 1e-4, "{guarded}");

    for walk in [
        "",
        "seed = \"previous\"\npasses = \"one\"",
        "start = \"last\"",
    ] {
        let (level, _) = level_of(
            N2,
            "method = \"rhf\"\nbasis = \"6-31g*\"",
            "bond = [\"N1\", \"N2\"]\nfrom = 1.1\nto = 2.1\nstep = 0.1",
            &format!("[walk]\n{walk}"),
        );
        let found = level.points[9].record.energy.expect("converges");
        assert!((found - LOWEST).abs() < 1e-4, "{walk}: {found}");
        assert!((found - guarded).abs() < 1e-7, "{walk}: {found} {guarded}");
    }
}

/// The onset of spin polarisation crossed outwards and inwards: without tests of stability a walk outwards never
/// leaves the symmetric solution (at 1.55 Å −108.5873 instead of −108.7563 hartree); with them both directions give one
/// curve, symmetric before the onset.
#[test]
fn the_onset_is_crossed_in_both_directions() {
    let sweep = "bond = [\"N1\", \"N2\"]\nfrom = 0.95\nto = 1.55\nstep = 0.05";
    let curve = |walk: &str| -> Vec<(f64, f64)> {
        let (level, _) = level_of(
            N2,
            "method = \"uhf\"\nbasis = \"6-31g\"",
            sweep,
            &format!("[walk]\n{walk}"),
        );
        let records = level.points.iter().map(|p| &p.record);
        records
            .map(|r| (r.energy.expect("converges"), r.s_squared))
            .collect()
    };
    let outwards = curve("start = \"first\"\npasses = \"one\"");
    let inwards = curve("start = \"last\"\npasses = \"one\"");
    let bare = curve("start = \"first\"\npasses = \"one\"\nstability = false");
    for (i, (o, n)) in outwards.iter().zip(&inwards).enumerate() {
        assert!((o.0 - n.0).abs() < 1e-7, "point {i}: {:e}", o.0 - n.0);
        assert!((o.1 - n.1).abs() < 1e-2, "point {i}: {} {}", o.1, n.1);
    }
    assert!(inwards[0].1.abs() < 1e-6 && outwards[12].1 > 0.5);
    assert!(bare[12].0 > outwards[12].0 + 0.1);
}
