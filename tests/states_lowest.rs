//! Every kept point of an unrestricted scan is the lowest of the solutions that twenty starts find, and the same
//! from either end.

mod common;

use common::jobs::{run, scan};
use common::starts::{STARTS, Starts};
use rayon::prelude::*;
use thalweg::job::LevelResult;
use thalweg::spec::Spec;

/// Energies that differ by less (hartree) belong to one solution.
const SAME: f64 = 1e-6;
/// Walks from the two ends agree to this, hartree.
const BOTH_ENDS: f64 = 1e-7;

/// A scan with default settings.
struct Case {
    name: &'static str,
    zmatrix: &'static str,
    level: &'static str,
    sweep: &'static str,
}

const ETHYLENE_ZMATRIX: &str = "C1\nC2 C1 1.32\nH1 C1 1.08 C2 121.5\nH2 C1 1.08 C2 121.5 H1 180\nH3 C2 1.08 C1 121.5 H1 0\nH4 C2 1.08 C1 121.5 H1 180";

/// The scans of which every kept point must be the lowest, in order of the table.
const CASES: [Case; 22] = [
    Case {
        name: "N2",
        zmatrix: "N1\nN2 N1 1.1",
        level: "basis = \"sto-3g\"",
        sweep: "bond = [\"N1\", \"N2\"]\nfrom = 0.9\nto = 2.7\nstep = 0.1",
    },
    Case {
        name: "F2",
        zmatrix: "F1\nF2 F1 1.4",
        level: "basis = \"6-31g\"",
        sweep: "bond = [\"F1\", \"F2\"]\nfrom = 1.1\nto = 2.9\nstep = 0.15",
    },
    Case {
        name: "HF",
        zmatrix: "F\nH F 0.92",
        level: "basis = \"6-31g\"",
        sweep: "bond = [\"F\", \"H\"]\nfrom = 0.7\nto = 3.1\nstep = 0.15",
    },
    Case {
        name: "LiH",
        zmatrix: "Li\nH Li 1.6",
        level: "basis = \"6-31g\"",
        sweep: "bond = [\"Li\", \"H\"]\nfrom = 1.2\nto = 4.4\nstep = 0.2",
    },
    Case {
        name: "O2 triplet",
        zmatrix: "O1\nO2 O1 1.2",
        level: "basis = \"sto-3g\"\nmultiplicity = 3",
        sweep: "bond = [\"O1\", \"O2\"]\nfrom = 1.0\nto = 2.8\nstep = 0.1",
    },
    Case {
        name: "CN",
        zmatrix: "C\nN C 1.17",
        level: "basis = \"sto-3g\"\nmultiplicity = 2",
        sweep: "bond = [\"C\", \"N\"]\nfrom = 0.9\nto = 2.7\nstep = 0.1",
    },
    Case {
        name: "water one",
        zmatrix: "O\nH1 O 0.96\nH2 O 0.96 H1 104.5",
        level: "basis = \"6-31g\"",
        sweep: "bond = [\"O\", \"H1\"]\nfrom = 0.8\nto = 2.9\nstep = 0.15",
    },
    Case {
        name: "water both",
        zmatrix: "O\nH1 O 0.96\nH2 O 0.96 H1 104.5",
        level: "basis = \"sto-3g\"",
        sweep: "bond = [\"O\", \"H1\"]\nfrom = 0.8\nto = 2.9\nstep = 0.15\nalso = [{ bond = [\"O\", \"H2\"] }]",
    },
    Case {
        name: "ethylene",
        zmatrix: ETHYLENE_ZMATRIX,
        level: "basis = \"sto-3g\"",
        sweep: "dihedral = [\"H1\", \"C1\", \"C2\", \"H3\"]\nfrom = 0\nto = 180\nstep = 15\nmoves = [\"H3\", \"H4\"]",
    },
    Case {
        name: "N2 6-31g",
        zmatrix: "N1\nN2 N1 1.1",
        level: "basis = \"6-31g\"",
        sweep: "bond = [\"N1\", \"N2\"]\nfrom = 1.0\nto = 3.0\nstep = 0.1",
    },
    Case {
        name: "N2 coarse",
        zmatrix: "N1\nN2 N1 1.1",
        level: "basis = \"6-31g\"",
        sweep: "bond = [\"N1\", \"N2\"]\nfrom = 1.0\nto = 5.0\nstep = 1.0",
    },
    Case {
        name: "BeH2 angle",
        zmatrix: "Be\nH1 Be 1.4\nH2 Be 1.4 H1 120",
        level: "basis = \"6-31g\"",
        sweep: "angle = [\"H1\", \"Be\", \"H2\"]\nfrom = 40\nto = 180\nstep = 10",
    },
    Case {
        name: "C2",
        zmatrix: "C1\nC2 C1 1.25",
        level: "basis = \"6-31g\"",
        sweep: "bond = [\"C1\", \"C2\"]\nfrom = 1.0\nto = 3.0\nstep = 0.1",
    },
    Case {
        name: "CO",
        zmatrix: "C\nO C 1.13",
        level: "basis = \"6-31g\"",
        sweep: "bond = [\"C\", \"O\"]\nfrom = 0.9\nto = 3.0\nstep = 0.1",
    },
    Case {
        name: "NO",
        zmatrix: "N\nO N 1.15",
        level: "basis = \"6-31g\"\nmultiplicity = 2",
        sweep: "bond = [\"N\", \"O\"]\nfrom = 0.95\nto = 2.75\nstep = 0.1",
    },
    Case {
        name: "OH",
        zmatrix: "O\nH O 0.97",
        level: "basis = \"6-31g*\"\nmultiplicity = 2",
        sweep: "bond = [\"O\", \"H\"]\nfrom = 0.7\nto = 3.0\nstep = 0.1",
    },
    Case {
        name: "HCN",
        zmatrix: "H\nC H 1.06\nN C 1.14 H 180",
        level: "basis = \"6-31g\"",
        sweep: "bond = [\"C\", \"N\"]\nfrom = 0.95\nto = 2.75\nstep = 0.1",
    },
    Case {
        name: "H2O2",
        zmatrix: "O1\nO2 O1 1.4\nH1 O1 0.95 O2 102\nH2 O2 0.95 O1 102 H1 115",
        level: "basis = \"6-31g\"",
        sweep: "bond = [\"O1\", \"O2\"]\nfrom = 1.2\nto = 3.0\nstep = 0.1",
    },
    Case {
        name: "CH2 singlet",
        zmatrix: "C\nH1 C 1.1\nH2 C 1.1 H1 105",
        level: "basis = \"6-31g\"",
        sweep: "angle = [\"H1\", \"C\", \"H2\"]\nfrom = 80\nto = 180\nstep = 10",
    },
    Case {
        name: "CH2 triplet",
        zmatrix: "C\nH1 C 1.08\nH2 C 1.08 H1 130",
        level: "basis = \"6-31g\"\nmultiplicity = 3",
        sweep: "angle = [\"H1\", \"C\", \"H2\"]\nfrom = 80\nto = 180\nstep = 10",
    },
    Case {
        name: "H2+",
        zmatrix: "H1\nH2 H1 1.06",
        level: "basis = \"6-31g**\"\ncharge = 1\nmultiplicity = 2",
        sweep: "bond = [\"H1\", \"H2\"]\nfrom = 0.6\nto = 5.0\nstep = 0.2",
    },
    Case {
        name: "LiF",
        zmatrix: "Li\nF Li 1.6",
        level: "basis = \"6-31g\"",
        sweep: "bond = [\"Li\", \"F\"]\nfrom = 1.4\nto = 5.0\nstep = 0.2",
    },
];

fn case(name: &str) -> &'static Case {
    CASES.iter().find(|c| c.name == name).expect("in the list")
}

impl Case {
    fn spec(&self, extra: &str) -> Spec {
        let level = format!("method = \"uhf\"\n{}", self.level);
        scan(self.zmatrix, &level, self.sweep, extra)
    }
}

fn level_of(spec: &Spec) -> LevelResult {
    run(spec).levels.remove(0)
}

/// A point of a scan beside what twenty starts find there.
#[derive(Debug)]
struct Compared {
    value: f64,
    /// Kept by the scan, hartree.
    kept: f64,
    /// Lowest of the starts, hartree.
    least: f64,
    /// Starts that converged, and starts that reached the lowest.
    converged: usize,
    reached: usize,
    /// Different energies among the starts.
    solutions: usize,
    /// Number of the first start that reached the lowest.
    by: usize,
    /// Kinds of findings that name the point.
    findings: Vec<&'static str>,
}

/// Compares every point of a scan with twenty starts.
fn compared(case: &Case) -> Vec<Compared> {
    let spec = case.spec("");
    let level = level_of(&spec);
    let mut starts = Starts::new(&spec);
    let values = &spec.sweeps[0].values;
    let ends = [values[0], values[values.len() - 1]];
    level
        .points
        .iter()
        .map(|point| {
            let value = point.values[0];
            let kept = point.record.energy.expect("converges");
            let found = starts.energies(value, ends);
            assert_eq!(found.len(), STARTS);
            let mut energies: Vec<f64> = found.iter().flatten().copied().collect();
            energies.sort_by(f64::total_cmp);
            let least = energies[0];
            let is_least = |e: f64| e < least + SAME;
            let converged = energies.len();
            let reached = energies.iter().filter(|&&e| is_least(e)).count();
            energies.dedup_by(|a, b| *a - *b < SAME);
            Compared {
                value,
                kept,
                least,
                converged,
                reached,
                solutions: energies.len(),
                by: found
                    .iter()
                    .position(|e| e.is_some_and(is_least))
                    .expect("the lowest is one of them"),
                findings: point.findings.iter().map(|f| f.word()).collect(),
            }
        })
        .collect()
}

/// Fails unless every compared point is the lowest, and the starts were worth the name.
fn assert_lowest(case: &Case, points: &[Compared]) {
    let too_high: Vec<&Compared> = points.iter().filter(|p| p.kept > p.least + SAME).collect();
    assert!(too_high.is_empty(), "{}: {too_high:#?}", case.name);
    // Starts that lead nowhere, or always elsewhere, would prove nothing.
    let lost: Vec<&Compared> = points
        .iter()
        .filter(|p| p.converged <= STARTS / 2)
        .collect();
    assert!(lost.is_empty(), "{}: {lost:#?}", case.name);
    let missed = points.iter().filter(|p| p.kept < p.least - SAME).count();
    assert!(2 * missed < points.len(), "{}: {points:#?}", case.name);
}

/// Walks a scan from its first and from its last point.
fn both_ends_give_one_curve(case: &Case) {
    let curve = |start: &str| -> Vec<f64> {
        let spec = case.spec(&format!("[walk]\nstart = \"{start}\""));
        let level = level_of(&spec);
        let energies = level.points.iter().map(|p| p.record.energy);
        energies.map(|e| e.expect("converges")).collect()
    };
    let (first, last) = (curve("first"), curve("last"));
    assert_eq!(first.len(), last.len());
    for (i, (a, b)) in first.iter().zip(&last).enumerate() {
        assert!((a - b).abs() < BOTH_ENDS, "point {i}: {:e}", a - b);
    }
}

macro_rules! both_ends {
    ($($test:ident: $name:expr;)*) => {$(
        #[test]
        fn $test() {
            both_ends_give_one_curve(case($name));
        }
    )*};
}

both_ends! {
    nitrogen_from_both_ends: "N2";
    fluorine_from_both_ends: "F2";
    hydrogen_fluoride_from_both_ends: "HF";
    lithium_hydride_from_both_ends: "LiH";
    oxygen_from_both_ends: "O2 triplet";
    cyanogen_radical_from_both_ends: "CN";
    water_one_bond_from_both_ends: "water one";
    water_both_bonds_from_both_ends: "water both";
    ethylene_from_both_ends: "ethylene";
}

const TABLE: &str = "tests/data/lowest_states.csv";
const HEAD: &str =
    "scan,value,kept_hartree,lowest_start_hartree,converged,reached,solutions,first_by,findings";

/// Every point of every scan against twenty starts, and against the table in the tree (with `THALWEG_WRITE_EXPECTED=1` it
/// is written).
#[test]
fn regress_every_point_of_every_scan_is_the_lowest() {
    let mut lines = vec![HEAD.to_owned()];
    let all: Vec<Vec<Compared>> = CASES.par_iter().map(compared).collect();
    for (case, points) in CASES.iter().zip(&all) {
        assert_lowest(case, points);
        lines.extend(points.iter().map(|p| {
            format!(
                "{},{:.3},{:.7},{:.7},{},{},{},{},{}",
                case.name,
                p.value,
                p.kept,
                p.least,
                p.converged,
                p.reached,
                p.solutions,
                p.by,
                p.findings.join(" ")
            )
        }));
    }
    if std::env::var_os("THALWEG_WRITE_EXPECTED").is_some() {
        std::fs::write(TABLE, lines.join("\n") + "\n").unwrap();
    }
    let table = std::fs::read_to_string(TABLE).unwrap();
    let energy = |line: &str| -> Option<f64> { line.split(',').nth(2)?.parse().ok() };
    assert_eq!(table.lines().count(), lines.len());
    for (known, now) in table.lines().zip(&lines).skip(1) {
        let (before, after) = (energy(known).unwrap(), energy(now).unwrap());
        assert!((before - after).abs() < SAME, "{known}\n{now}");
    }
}
