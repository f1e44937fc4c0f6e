//! The right electronic state at every point: clean scans stay silent, forced failures do not.

mod common;

use common::jobs::{run, scan};
use thalweg::job::LevelResult;
use thalweg::scan::FindingKind;
use thalweg::scf::{FirstDensity, ScfSettings};
use thalweg::spec::Spec;
use thalweg::surface::{HartreeFock, PointRequest, StabilityDemand, Start, Surface};

/// Energies that differ by less (hartree) belong to one solution.
const SAME: f64 = 1e-6;

/// Energy of a start without a seed, if it converges.
fn fresh(
    spec: &Spec,
    values: &[f64],
    first_density: FirstDensity,
    stability: StabilityDemand,
) -> Option<f64> {
    let level = &spec.levels[0];
    let settings = ScfSettings {
        first_density,
        ..ScfSettings::default()
    };
    let molecule = level.molecule(&spec.molecule);
    let shells = level.shells_of_atom.clone();
    let surface = HartreeFock::new(&molecule, shells, level.method, settings).unwrap();
    let request = PointRequest {
        positions: &spec.positions_at(values).unwrap(),
        coordinates: values,
        start: Start::Fresh,
        gradient: false,
        stability,
        follow: None,
    };
    let outcome = surface.evaluate(&request, &mut surface.workspace());
    outcome.unwrap().record.energy
}

/// The lowest energy that starts without a seed find at a point: atoms and core Hamiltonian, each made stable.
fn lowest_fresh(spec: &Spec, values: &[f64]) -> f64 {
    [FirstDensity::Atoms, FirstDensity::CoreHamiltonian]
        .into_iter()
        .filter_map(|first| fresh(spec, values, first, StabilityDemand::Leave))
        .fold(f64::INFINITY, f64::min)
}

fn kinds(level: &LevelResult) -> Vec<FindingKind> {
    level.findings.iter().map(|f| f.kind).collect()
}

/// Twenty scans through ordinary chemistry, closed and open shells, bonds, angles and torsions.
const CLEAN: [(&str, &str, &str); 20] = [
    (
        "H1\nH2 H1 0.74",
        "method = \"rhf\"\nbasis = \"6-31g**\"",
        "bond = [\"H1\", \"H2\"]\nfrom = 0.5\nto = 2.5\nstep = 0.1",
    ),
    (
        "H1\nH2 H1 0.74",
        "method = \"uhf\"\nbasis = \"6-31g**\"",
        "bond = [\"H1\", \"H2\"]\nfrom = 0.5\nto = 3.0\nstep = 0.1",
    ),
    (
        "F\nH F 0.91",
        "method = \"rhf\"\nbasis = \"6-31g\"",
        "bond = [\"F\", \"H\"]\nfrom = 0.7\nto = 2.0\nstep = 0.1",
    ),
    (
        "F\nH F 0.91",
        "method = \"uhf\"\nbasis = \"6-31g\"",
        "bond = [\"F\", \"H\"]\nfrom = 0.7\nto = 2.7\nstep = 0.1",
    ),
    (
        "Cl\nH Cl 1.27",
        "method = \"uhf\"\nbasis = \"sto-3g\"",
        "bond = [\"Cl\", \"H\"]\nfrom = 1.0\nto = 2.5\nstep = 0.1",
    ),
    (
        "Li\nH Li 1.6",
        "method = \"rhf\"\nbasis = \"6-31g\"",
        "bond = [\"Li\", \"H\"]\nfrom = 1.2\nto = 2.6\nstep = 0.1",
    ),
    (
        "N1\nN2 N1 1.08",
        "method = \"rhf\"\nbasis = \"6-31g\"",
        "bond = [\"N1\", \"N2\"]\nfrom = 0.9\nto = 1.4\nstep = 0.05",
    ),
    (
        "N1\nN2 N1 1.08",
        "method = \"uhf\"\nbasis = \"sto-3g\"",
        "bond = [\"N1\", \"N2\"]\nfrom = 0.9\nto = 2.4\nstep = 0.1",
    ),
    (
        "C\nO C 1.11",
        "method = \"rhf\"\nbasis = \"6-31g\"",
        "bond = [\"C\", \"O\"]\nfrom = 0.9\nto = 1.5\nstep = 0.05",
    ),
    (
        "O\nH O 0.96",
        "method = \"uhf\"\nbasis = \"6-31g\"\nmultiplicity = 2",
        "bond = [\"O\", \"H\"]\nfrom = 0.7\nto = 2.0\nstep = 0.1",
    ),
    (
        "O1\nO2 O1 1.2",
        "method = \"uhf\"\nbasis = \"6-31g\"\nmultiplicity = 3",
        "bond = [\"O1\", \"O2\"]\nfrom = 1.0\nto = 1.6\nstep = 0.05",
    ),
    (
        "O\nH1 O 0.95\nH2 O 0.95 H1 105",
        "method = \"rhf\"\nbasis = \"6-31g\"",
        "bond = [\"O\", \"H1\"]\nfrom = 0.75\nto = 1.6\nstep = 0.05",
    ),
    (
        "O\nH1 O 0.95\nH2 O 0.95 H1 105",
        "method = \"rhf\"\nbasis = \"6-31g\"",
        "angle = [\"H1\", \"O\", \"H2\"]\nfrom = 75\nto = 180\nstep = 7.5",
    ),
    (
        "O\nH1 O 0.95\nH2 O 0.95 H1 105",
        "method = \"uhf\"\nbasis = \"sto-3g\"",
        "bond = [\"O\", \"H1\"]\nfrom = 0.8\nto = 2.6\nstep = 0.1\nalso = [{ bond = [\"O\", \"H2\"] }]",
    ),
    (
        "N\nH1 N 1.0\nH2 N 1.0 H1 107\nH3 N 1.0 H1 107 H2 114",
        "method = \"rhf\"\nbasis = \"sto-3g\"",
        "bond = [\"N\", \"H1\"]\nfrom = 0.8\nto = 1.6\nstep = 0.1",
    ),
    (
        "C\nH1 C 1.09\nH2 C 1.09 H1 109.5\nH3 C 1.09 H1 109.5 H2 120\nH4 C 1.09 H1 109.5 H2 240",
        "method = \"rhf\"\nbasis = \"sto-3g\"",
        "bond = [\"C\", \"H1\"]\nfrom = 0.8\nto = 1.6\nstep = 0.1",
    ),
    (
        "C\nH1 C 1.08\nH2 C 1.08 H1 120\nH3 C 1.08 H1 120 H2 180",
        "method = \"uhf\"\nbasis = \"sto-3g\"\nmultiplicity = 2",
        "bond = [\"C\", \"H1\"]\nfrom = 0.9\nto = 1.6\nstep = 0.1",
    ),
    (
        "O1\nO2 O1 1.4\nH1 O1 0.95 O2 102\nH2 O2 0.95 O1 102 H1 115",
        "method = \"rhf\"\nbasis = \"sto-3g\"",
        "dihedral = [\"H1\", \"O1\", \"O2\", \"H2\"]\nfrom = 0\nto = 180\nstep = 15",
    ),
    (
        "H1\nC H1 1.06\nN C 1.14 H1 180",
        "method = \"rhf\"\nbasis = \"sto-3g\"",
        "bond = [\"C\", \"N\"]\nfrom = 1.0\nto = 1.5\nstep = 0.05",
    ),
    (
        "F\nH1 F 1.2\nH2 F 1.2 H1 180",
        "method = \"rhf\"\nbasis = \"sto-3g\"\ncharge = -1",
        "bond = [\"F\", \"H1\"]\nfrom = 1.0\nto = 1.6\nstep = 0.1",
    ),
];

#[test]
fn clean_scans_report_neither_jump_nor_hysteresis() {
    let mut wrong = Vec::new();
    for (number, (zmatrix, level, sweep)) in CLEAN.iter().enumerate() {
        let result = run(&scan(zmatrix, level, sweep, ""));
        let found = kinds(&result.levels[0]);
        let silent = [
            FindingKind::StateJump,
            FindingKind::Hysteresis,
            FindingKind::NotConverged,
        ]
        .iter()
        .all(|kind| !found.contains(kind));
        if !silent {
            let texts: Vec<String> = result.levels[0]
                .findings
                .iter()
                .map(|f| f.text.clone())
                .collect();
            wrong.push((number, zmatrix, texts));
        }
    }
    assert!(wrong.is_empty(), "{wrong:#?}");
}

/// Scans that start on a wrong solution, cross another state, or are told to trust their seeds.
const FORCED: [(&str, &str, &str, &str); 11] = [
    // The core Hamiltonian of stretched F₂ fills the wrong orbitals.
    (
        "F1\nF2 F1 1.4",
        "method = \"uhf\"\nbasis = \"sto-3g\"",
        "bond = [\"F1\", \"F2\"]\nfrom = 1.2\nto = 2.4\nstep = 0.1",
        "[walk]\nstart = \"last\"\n[scf]\nfirst_density = \"core-hamiltonian\"",
    ),
    // Ionic and neutral states of LiF cross far out.
    (
        "Li\nF Li 1.6",
        "method = \"uhf\"\nbasis = \"sto-3g\"",
        "bond = [\"Li\", \"F\"]\nfrom = 1.3\nto = 5.1\nstep = 0.2",
        "",
    ),
    // The same walked inwards, from the neutral atoms.
    (
        "Li\nF Li 1.6",
        "method = \"uhf\"\nbasis = \"sto-3g\"",
        "bond = [\"Li\", \"F\"]\nfrom = 1.3\nto = 5.1\nstep = 0.2",
        "[walk]\nstart = \"last\"",
    ),
    // A radical whose core Hamiltonian puts the hole into the lone pair in the plane instead of the one across it: stable
    // at 1.8 Å, where the walk begins.
    (
        "N\nH1 N 1.02\nH2 N 1.02 H1 103",
        "method = \"uhf\"\nbasis = \"6-31g\"\nmultiplicity = 2",
        "bond = [\"N\", \"H1\"]\nfrom = 0.9\nto = 1.8\nstep = 0.1",
        "[walk]\nstart = \"last\"\n[scf]\nfirst_density = \"core-hamiltonian\"",
    ),
    // Restricted N₂ has two solutions beyond 1.5 Å.
    (
        "N1\nN2 N1 1.1",
        "method = \"rhf\"\nbasis = \"sto-3g\"",
        "bond = [\"N1\", \"N2\"]\nfrom = 1.0\nto = 2.6\nstep = 0.1",
        "",
    ),
    // N₂ from broken spin symmetry inwards.
    (
        "N1\nN2 N1 1.1",
        "method = \"uhf\"\nbasis = \"sto-3g\"",
        "bond = [\"N1\", \"N2\"]\nfrom = 0.9\nto = 2.5\nstep = 0.1",
        "[walk]\nstart = \"last\"",
    ),
    // Ethylene turned: bonding and antibonding π orbitals change places at 90°.
    (
        "C1\nC2 C1 1.32\nH1 C1 1.08 C2 121.5\nH2 C1 1.08 C2 121.5 H1 180\nH3 C2 1.08 C1 121.5 H1 0\nH4 C2 1.08 C1 121.5 H1 180",
        "method = \"rhf\"\nbasis = \"sto-3g\"",
        "dihedral = [\"H1\", \"C1\", \"C2\", \"H3\"]\nfrom = 0\nto = 180\nstep = 15",
        "",
    ),
    // Two hydrogen molecules pulled through a square: the occupied orbitals change symmetry there.
    (
        "H1\nH2 H1 1.0\nH3 H2 1.2 H1 90\nH4 H1 1.2 H2 90 H3 0",
        "method = \"rhf\"\nbasis = \"6-31g\"",
        "bond = [\"H1\", \"H4\"]\nfrom = 0.7\nto = 1.4\nstep = 0.1\nmoves = [\"H3\", \"H4\"]",
        "",
    ),
    // Only one pass: tests of stability alone must leave the ionic curve.
    (
        "Li\nF Li 1.6",
        "method = \"uhf\"\nbasis = \"sto-3g\"",
        "bond = [\"Li\", \"F\"]\nfrom = 1.3\nto = 5.1\nstep = 0.2",
        "[walk]\npasses = \"one\"\nseed = \"previous\"",
    ),
    // A step far too large for its seeds.
    (
        "C1\nC2 C1 1.25",
        "method = \"rhf\"\nbasis = \"sto-3g\"",
        "bond = [\"C1\", \"C2\"]\nfrom = 1.0\nto = 2.6\nstep = 0.2",
        "",
    ),
    // NO from a stable solution too high by 0.06 hartree, which no test of stability leaves.
    (
        "N\nO N 1.15",
        "method = \"uhf\"\nbasis = \"sto-3g\"\nmultiplicity = 2",
        "bond = [\"N\", \"O\"]\nfrom = 1.0\nto = 1.6\nstep = 0.05",
        "[walk]\nstart = \"last\"\n[scf]\nfirst_density = \"core-hamiltonian\"",
    ),
];

#[test]
fn forced_failures_end_on_the_lower_curve_or_in_a_finding() {
    let mut unreported = Vec::new();
    for (number, (zmatrix, level, sweep, extra)) in FORCED.iter().enumerate() {
        let spec = scan(zmatrix, level, sweep, extra);
        let result = run(&spec);
        let level = &result.levels[0];
        for point in &level.points {
            let named = level.findings.iter().any(|f| {
                f.points.contains(&point.point)
                    && f.kind != FindingKind::SpinContaminated
                    && f.kind != FindingKind::SmallGap
                    && f.kind != FindingKind::SoftMode
            });
            let Some(energy) = point.record.energy else {
                assert!(named);
                continue;
            };
            let fresh = lowest_fresh(&spec, &point.values);
            if energy > fresh + SAME && !named {
                unreported.push((number, point.values.clone(), energy - fresh));
            }
        }
    }
    assert!(unreported.is_empty(), "{unreported:#?}");
}

/// The forced starts really are wrong: where they begin, the core Hamiltonian's solution lies far above the kept one,
/// in two of three cases even after it was made stable.
#[test]
fn forced_starts_begin_on_wrong_solutions() {
    let cases = [
        (0, 2.4, StabilityDemand::None),
        (3, 1.8, StabilityDemand::Leave),
        (10, 1.6, StabilityDemand::Leave),
    ];
    for (number, at, stability) in cases {
        let (zmatrix, level, sweep, extra) = FORCED[number];
        let spec = scan(zmatrix, level, sweep, extra);
        let first = FirstDensity::CoreHamiltonian;
        let wrong = fresh(&spec, &[at], first, stability).expect("converges");
        let result = run(&spec);
        let points = &result.levels[0].points;
        let point = points.iter().find(|p| (p.values[0] - at).abs() < 1e-9);
        let point = point.expect("on the grid");
        let kept = point.record.energy.expect("converges");
        assert!(kept < wrong - 1e-2, "{number}: {kept} {wrong}");
        if stability == StabilityDemand::Leave {
            assert!(point.findings.contains(&FindingKind::Hysteresis));
        }
    }
}

/// The ionic and the neutral curve of LiF, one from each end: `state = "follow"` keeps the state of its start past the place
/// where the lowest state changes. The start itself is left downhill: were it not, the walk from the far end would begin
/// on the symmetric saddle point there and be the ionic curve again.
#[test]
fn followed_curves_of_lithium_fluoride_cross() {
    let curve = |method: &str, walk: &str| {
        let spec = scan(
            "Li\nF Li 1.6",
            &format!("method = \"{method}\"\nbasis = \"6-31g\""),
            "bond = [\"Li\", \"F\"]\nfrom = 1.6\nto = 5.0\nstep = 0.2",
            &format!("[walk]\n{walk}"),
        );
        run(&spec).levels.remove(0)
    };
    let energies = |level: &LevelResult| -> Vec<f64> {
        let energies = level.points.iter().map(|p| p.record.energy);
        energies.map(|e| e.expect("converges")).collect()
    };
    let ionic = curve("uhf", "state = \"follow\"");
    let neutral = curve("uhf", "start = \"last\"\nstate = \"follow\"");
    let lowest = curve("uhf", "");
    // Closed shells are one determinant whose spins may as well be tied.
    let tied = curve("rhf", "");
    for (i, (a, b)) in energies(&ionic).iter().zip(energies(&tied)).enumerate() {
        assert!((a - b).abs() < 1e-8, "point {i}: {a} {b}");
        assert!(ionic.points[i].record.charges_loewdin[0] > 0.4);
    }
    for point in &neutral.points {
        assert!(point.record.s_squared > 0.8, "{:?}", point.values);
        assert!(point.record.charges_loewdin[0] < 0.4, "{:?}", point.values);
    }
    let first_neutral = energies(&ionic)
        .iter()
        .zip(energies(&neutral))
        .map(|(ionic, neutral)| neutral < *ionic)
        .collect::<Vec<_>>();
    let changes = first_neutral.windows(2).filter(|w| w[0] != w[1]).count();
    assert_eq!((first_neutral[0], changes), (false, 1));
    for ((ionic, neutral), lowest) in energies(&ionic)
        .iter()
        .zip(energies(&neutral))
        .zip(energies(&lowest))
    {
        assert!(lowest < ionic.min(neutral) + SAME);
    }
    assert!(!kinds(&neutral).contains(&FindingKind::StateJump));
    assert!(!kinds(&ionic).contains(&FindingKind::StateJump));
}
