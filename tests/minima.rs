//! Equilibrium geometries, frequencies and relaxed paths at Hartree–Fock level.

mod common;

use common::{charged, diatomic, molecule, surface, surface_with, water};
use std::sync::atomic::AtomicBool;
use thalweg::minimise::path::{PathSettings, PathTask, Target, refine_on_path};
use thalweg::minimise::relaxed::Relaxed;
use thalweg::minimise::settle::{Character, SettleSettings, Settled, settle};
use thalweg::minimise::{Held, MinimiseSettings, Task, minimise};
use thalweg::molecule::connectivity::Connectivity;
use thalweg::molecule::internal::Coordinate;
use thalweg::molecule::motion::Motion;
use thalweg::molecule::{Molecule, zmatrix};
use thalweg::scan::{Grid, Scan, WalkSettings, runner};
use thalweg::scf::seed::Seed;
use thalweg::scf::{Method, ScfSettings};
use thalweg::surface::{PointRequest, SeedPoint, StabilityDemand, Start, Surface};
use thalweg::units::{ANGSTROM_PER_BOHR, KCAL_PER_MOL_PER_HARTREE, LengthUnit};

/// One line of `data/minima.toml`.
#[derive(Debug, Clone, serde::Deserialize)]
struct Listed {
    id: String,
    quantity: String,
    system: String,
    level: String,
    value: f64,
    unit: String,
    tolerance: f64,
}

#[derive(serde::Deserialize)]
struct List {
    value: Vec<Listed>,
}

fn listed(system: &str, level: &str) -> Vec<Listed> {
    let list: List = toml::from_str(include_str!("data/minima.toml")).expect("TOML");
    let mut values = list.value;
    values.retain(|v| v.system == system && v.level == format!("RHF/{level}"));
    assert!(!values.is_empty(), "{system} {level}");
    values
}

fn from_zmatrix(text: &str) -> Molecule {
    let rows = zmatrix::parse(text).expect("a valid z-matrix");
    Molecule {
        atoms: rows.atoms(),
        positions: rows
            .positions(LengthUnit::Angstrom)
            .expect("a defined geometry"),
        charge: 0,
        multiplicity: 1,
    }
}

fn masses(molecule: &Molecule) -> Vec<f64> {
    molecule.atoms.iter().map(|a| a.element.mass_u()).collect()
}

fn settled(molecule: &Molecule, basis: &str, settings: &SettleSettings) -> Settled<Seed> {
    let surface = surface(molecule, basis, Method::Rhf);
    let settled = settle(
        &surface,
        molecule,
        &masses(molecule),
        &[],
        settings,
        &mut surface.workspace(),
    )
    .expect("settles");
    assert!(settled.minimum.converged());
    settled
}

/// What a settled molecule says for a listed quantity, in the list's unit.
fn found(value: &Listed, settled: &Settled<Seed>) -> f64 {
    let positions = &settled.minimum.positions;
    let reported = |coordinate: Coordinate| coordinate.reported_value(positions);
    match (value.quantity.as_str(), value.unit.as_str()) {
        (_, "hartree") => settled.minimum.record.energy.expect("an energy"),
        (_, "angstrom") => reported(Coordinate::Bond([0, 1])),
        (_, "degree") => reported(Coordinate::Angle([1, 0, 2])),
        (quantity, "cm-1") => {
            let modes = &settled.analysis.modes;
            // The list does not number the modes: the nearest one, which must then be within the tolerance.
            let near = modes
                .iter()
                .map(|m| m.wavenumber_cm1)
                .min_by(|a, b| (a - value.value).abs().total_cmp(&(b - value.value).abs()));
            near.unwrap_or_else(|| panic!("a mode for {quantity}"))
        }
        other => panic!("no such quantity: {other:?}"),
    }
}

const BASES: [&str; 3] = ["STO-3G", "3-21G", "6-31G*"];

fn check_against_list(system: &str, start: &Molecule) {
    for basis in BASES {
        let settled = settled(start, basis, &SettleSettings::default());
        assert_eq!(settled.character, Character::Minimum, "{system} {basis}");
        assert!(settled.hessian.asymmetry < 1e-4, "{system} {basis}");
        for value in listed(system, basis) {
            let found = found(&value, &settled);
            assert!(
                (found - value.value).abs() <= value.tolerance,
                "{}: {found} instead of {} {}",
                value.id,
                value.value,
                value.unit
            );
        }
    }
}

#[test]
fn val_diatomics_settle_where_the_textbook_says() {
    check_against_list("H2", &diatomic("H", "H", 0.8));
    check_against_list("LiH", &diatomic("Li", "H", 1.5));
    check_against_list("FH", &diatomic("F", "H", 1.0));
    check_against_list("CO", &diatomic("C", "O", 1.2));
    check_against_list("F2", &diatomic("F", "F", 1.4));
}

#[test]
fn val_water_and_methane_settle_where_the_textbook_says() {
    check_against_list("H2O", &water(1.0, 0.9, 110.0));
    let methane = from_zmatrix(
        "C\nH1 C 1.0\nH2 C 1.2 H1 100\nH3 C 1.1 H1 115 H2 120\nH4 C 1.1 H1 109 H2 -120",
    );
    check_against_list("CH4", &methane);
}

fn peroxide(torsion_degree: f64) -> Molecule {
    from_zmatrix(&format!(
        "O1\nO2 O1 1.45\nH1 O1 0.97 O2 100\nH2 O2 0.97 O1 100 H1 {torsion_degree}"
    ))
}

const TORSION: Coordinate = Coordinate::Dihedral([2, 0, 1, 3]);

#[test]
fn val_peroxide_has_the_bond_and_the_barriers_of_the_textbook() {
    for basis in BASES {
        let start = peroxide(115.0);
        let surface = surface(&start, basis, Method::Rhf);
        let mut workspace = surface.workspace();
        let mut energy = |held: &[Held], start: &Molecule| {
            let task = Task {
                held,
                ..Task::of(start)
            };
            let minimum = minimise(&surface, task, &MinimiseSettings::tight(), &mut workspace)
                .expect("a geometry");
            assert!(minimum.converged(), "{basis}: {:?}", minimum.calls);
            (minimum.record.energy.expect("an energy"), minimum.positions)
        };
        let (lowest, positions) = energy(&[], &start);
        let mut barrier = |degree: f64| {
            let held = [Held {
                coordinate: TORSION,
                value: degree.to_radians(),
            }];
            let (top, _) = energy(&held, &peroxide(degree));
            (top - lowest) * KCAL_PER_MOL_PER_HARTREE
        };
        for value in listed("H2O2", basis) {
            let found = match value.quantity.as_str() {
                "equilibrium r(OO)" => (positions[1] - positions[0]).norm() * ANGSTROM_PER_BOHR,
                q if q.starts_with("trans") => barrier(180.0),
                q if q.starts_with("cis") => barrier(0.0),
                other => panic!("no such quantity: {other}"),
            };
            assert!(
                (found - value.value).abs() <= value.tolerance,
                "{}: {found} instead of {}",
                value.id,
                value.value
            );
        }
    }
}

/// Ethane, eclipsed against staggered, both relaxed: 3.0 kcal/mol in RHF/6-31G* (W. J. Hehre, L. Radom, P. v. R. Schleyer,
/// J. A. Pople, Ab Initio Molecular Orbital Theory, 1986, from memory).
#[test]
fn val_the_torsion_barrier_of_ethane() {
    let ethane = |degree: f64| {
        let rows: Vec<String> = (1..=3)
            .map(|k| format!("H{k} C1 1.086 C2 111.2{}", turned(k, 0.0)))
            .chain((4..=6).map(|k| {
                format!(
                    "H{k} C2 1.086 C1 111.2 H1 {}",
                    degree + 120.0 * f64::from(k - 4)
                )
            }))
            .collect();
        from_zmatrix(&format!("C1\nC2 C1 1.527\n{}", rows.join("\n")))
    };
    let start = ethane(60.0);
    let surface = surface(&start, "6-31G*", Method::Rhf);
    let mut workspace = surface.workspace();
    let mut energy = |degree: f64| {
        let molecule = ethane(degree);
        let held = [Held {
            coordinate: Coordinate::Dihedral([2, 0, 1, 5]),
            value: degree.to_radians(),
        }];
        let task = Task {
            held: &held,
            ..Task::of(&molecule)
        };
        let minimum = minimise(&surface, task, &MinimiseSettings::tight(), &mut workspace)
            .expect("a geometry");
        assert!(minimum.converged());
        minimum.record.energy.expect("an energy")
    };
    let barrier = (energy(0.0) - energy(60.0)) * KCAL_PER_MOL_PER_HARTREE;
    assert!((barrier - 3.0).abs() < 0.05, "{barrier}");
}

/// The dihedral of the k-th hydrogen of a methyl group against the first, as the rest of a z-matrix row.
fn turned(k: i32, degree: f64) -> String {
    if k == 1 {
        String::new()
    } else {
        format!(" H1 {}", degree + 120.0 * f64::from(k - 1))
    }
}

/// See the head of `data/minima.toml`: the remembered bond length is not where the energy is least.
#[test]
fn regress_the_bond_of_peroxide_in_a_polarised_basis() {
    let start = peroxide(115.0);
    let surface = surface(&start, "6-31G*", Method::Rhf);
    let mut workspace = surface.workspace();
    let bond = Coordinate::Bond([0, 1]);
    let mut energy_at = |length_angstrom: f64| {
        let held = [Held {
            coordinate: bond,
            value: length_angstrom / ANGSTROM_PER_BOHR,
        }];
        let task = Task {
            held: &held,
            ..Task::of(&start)
        };
        let minimum = minimise(&surface, task, &MinimiseSettings::tight(), &mut workspace);
        minimum
            .expect("a geometry")
            .record
            .energy
            .expect("an energy")
    };
    let [remembered, found, beyond] = [1.393, 1.3965, 1.400].map(&mut energy_at);
    assert!(remembered > found + 1e-6 && beyond > found + 1e-6);
    let settled = settled(&start, "6-31G*", &SettleSettings::default());
    let length = bond.reported_value(&settled.minimum.positions);
    assert!((length - 1.3965).abs() < 1e-4, "{length}");
}

#[test]
fn planar_peroxide_is_a_saddle_point_and_leads_to_the_minimum() {
    let trans = peroxide(180.0);
    let stayed = settled(&trans, "6-31G*", &SettleSettings::default());
    assert_eq!(stayed.character, Character::Saddle { imaginary: 1 });
    let pushed = SettleSettings {
        pushes: 2,
        ..SettleSettings::default()
    };
    let left = settled(&trans, "6-31G*", &pushed);
    assert_eq!((left.character, left.pushes), (Character::Minimum, 1));
    let direct = settled(&peroxide(115.0), "6-31G*", &SettleSettings::default());
    let energy = |s: &Settled<Seed>| s.minimum.record.energy.expect("an energy");
    assert!((energy(&left) - energy(&direct)).abs() < 1e-7);
    assert!(energy(&stayed) > energy(&direct) + 1e-3);
}

/// Numbers between −1 and 1 that are the same everywhere (Knuth's MMIX generator).
struct Random(u64);

impl Random {
    fn next(&mut self) -> f64 {
        self.0 = self
            .0
            .wrapping_mul(6_364_136_223_846_793_005)
            .wrapping_add(1_442_695_040_888_963_407);
        (self.0 >> 11) as f64 / (1_u64 << 52) as f64 - 1.0
    }

    fn between(&mut self, from: f64, to: f64) -> f64 {
        let x = self.next();
        x.signum() * (from + x.abs() * (to - from))
    }
}

/// The z-matrix with every bond off by 0.1–0.2 Å and every angle by 5–15°.
fn distorted(text: &str, random: &mut Random) -> Molecule {
    let rows = zmatrix::parse(text).expect("a valid z-matrix");
    let mut distorted = String::new();
    for row in rows.rows() {
        distorted.push_str(&row.label);
        for (place, reference) in row.references.iter().enumerate() {
            let value = match place {
                0 => reference.value + random.between(0.1, 0.2),
                1 => reference.value + random.between(5.0, 15.0),
                _ => reference.value,
            };
            let angle_too_wide = place == 1 && value > 180.0;
            let value = if angle_too_wide { 360.0 - value } else { value };
            let to = &rows.rows()[reference.row].label;
            distorted.push_str(&format!(" {to} {value}"));
        }
        distorted.push('\n');
    }
    from_zmatrix(&distorted)
}

#[test]
fn distorted_molecules_find_the_same_minimum_in_few_gradient_calls() {
    let mut random = Random(11);
    let mut calls = Vec::new();
    for entry in include_str!("data/molecules.txt").split("\n[").skip(1) {
        let (name, text) = entry.split_once("]\n").expect("a name in brackets");
        let start = from_zmatrix(text);
        let surface = surface_with(&start, "STO-3G", Method::Rhf, ScfSettings::default(), None);
        let mut workspace = surface.workspace();
        let mut run = |start: &Molecule| {
            let settings = MinimiseSettings::default();
            let minimum =
                minimise(&surface, Task::of(start), &settings, &mut workspace).expect("a geometry");
            assert!(minimum.converged(), "{name}: {:?}", minimum.calls);
            minimum
        };
        let plain = run(&start);
        let found = run(&distorted(text, &mut random));
        let energies = [&plain, &found].map(|m| m.record.energy.expect("an energy"));
        // Twice the fall that may remain at the default thresholds.
        assert!(
            (energies[0] - energies[1]).abs() < 2e-6,
            "{name}: {energies:?}"
        );
        calls.push(found.calls.len());
    }
    calls.sort_unstable();
    assert!(calls.len() >= 25);
    assert!(calls[calls.len() / 2] <= 8, "{calls:?}");
    assert!(calls[calls.len() - 1] <= 25, "{calls:?}");
}

#[test]
fn a_relaxed_torsion_costs_few_gradient_calls() {
    let start = peroxide(115.0);
    let motion = Motion::resolve(
        TORSION,
        &start,
        &Connectivity::of(&start),
        &[15, 15, 2, 2],
        None,
    )
    .expect("a motion");
    let inner = surface_with(&start, "6-31G*", Method::Rhf, ScfSettings::default(), None);
    let relaxed = Relaxed::new(inner, &start, vec![TORSION], MinimiseSettings::default());
    let mut workspace = relaxed.workspace();
    let mut seeds: Vec<(Vec<f64>, _)> = Vec::new();
    let mut calls = Vec::new();
    for i in 0..19 {
        let degree = 10.0 * f64::from(i);
        let mut positions = start.positions.clone();
        motion
            .set(&mut positions, degree.to_radians())
            .expect("a torsion");
        let behind = seeds[seeds.len().saturating_sub(6)..]
            .iter()
            .map(|(q, seed)| SeedPoint {
                coordinates: q,
                seed,
            })
            .collect();
        let start = if i == 0 {
            Start::Fresh
        } else {
            Start::Extrapolated(behind)
        };
        let request = PointRequest {
            positions: &positions,
            coordinates: &[degree],
            start,
            gradient: false,
            stability: StabilityDemand::None,
            follow: None,
        };
        let outcome = relaxed
            .evaluate(&request, &mut workspace)
            .expect("a geometry");
        let relaxation = outcome.record.relaxation.expect("relaxed");
        assert!(relaxation.converged);
        calls.push(relaxation.gradient_calls);
        seeds.push((vec![degree], outcome.seed.expect("a seed")));
    }
    let mean = calls.iter().sum::<usize>() as f64 / calls.len() as f64;
    assert!(
        mean <= 3.0 && calls[1..].iter().all(|&c| c <= 4),
        "{calls:?}"
    );
}

#[test]
fn the_runner_walks_a_relaxed_surface_like_any_other() {
    let start = water(0.96, 0.96, 104.5);
    let bond = Coordinate::Bond([0, 1]);
    let motion = Motion::resolve(bond, &start, &Connectivity::of(&start), &[5, 1, 1], None)
        .expect("a motion");
    let lengths: Vec<f64> = (0..7).map(|i| 0.85 + 0.05 * f64::from(i)).collect();
    let scan = Scan {
        grid: Grid::new(&[lengths.len()]),
        is_length: vec![true],
        coordinates: lengths.iter().map(|&l| vec![l]).collect(),
        positions: lengths
            .iter()
            .map(|&l| {
                let mut positions = start.positions.clone();
                motion
                    .set(&mut positions, l / ANGSTROM_PER_BOHR)
                    .expect("a length");
                positions
            })
            .collect(),
        start: 2,
        settings: WalkSettings::default(),
        gradients: false,
        memory_bytes: 1 << 30,
    };
    let walk = |threads: usize| {
        let inner = surface(&start, "STO-3G", Method::Rhf);
        let relaxed = Relaxed::new(inner, &start, vec![bond], MinimiseSettings::default());
        let pool = rayon::ThreadPoolBuilder::new()
            .num_threads(threads)
            .build()
            .expect("threads");
        let walked = runner::run(&relaxed, &scan, &pool, &AtomicBool::new(false), &mut |_| {})
            .expect("a walk");
        let mut entries = walked.entries;
        for entry in &mut entries {
            entry.record.seconds = 0.0;
            entry.record.scf_seconds = 0.0;
        }
        entries
    };
    let entries = walk(1);
    assert_eq!(entries, walk(2));
    let rigid = surface(&start, "STO-3G", Method::Rhf);
    for entry in &entries {
        let energy = entry.record.energy.expect("converged");
        let fixed = common::evaluate(&rigid, &scan.positions[entry.point], StabilityDemand::None);
        assert!(energy <= fixed.record.energy.expect("converged") + 1e-8);
    }
}

/// The second derivative along the rigid path of one O–H bond comes out alike from the Hessian and from slopes on the path,
/// and is stiffer than that of the relaxed path.
#[test]
fn the_constant_of_a_rigid_path_is_that_of_the_hessian() {
    let start = water(0.95, 0.95, 105.0);
    let surface = surface(&start, "6-31G*", Method::Rhf);
    let mut workspace = surface.workspace();
    let motion = Motion::resolve(
        Coordinate::Bond([0, 1]),
        &start,
        &Connectivity::of(&start),
        &[15, 2, 2],
        None,
    )
    .expect("a motion");
    let settled = settle(
        &surface,
        &start,
        &masses(&start),
        &[vec![motion.clone()]],
        &SettleSettings::default(),
        &mut workspace,
    )
    .expect("settles");
    let constant = &settled.swept[0];
    let rigid = constant.rigid.expect("a side that moves");
    assert!(constant.relaxed < rigid);
    let path = |q: &[f64]| {
        let mut positions = settled.minimum.positions.clone();
        motion.set(&mut positions, q[0])?;
        Ok(positions)
    };
    let task = PathTask {
        positions: &path,
        start: &[constant.equilibrium + 0.03],
        curvature: None,
        reach: &[0.1],
        reported: &[ANGSTROM_PER_BOHR],
        target: Target::Minimum,
        seed: None,
    };
    let found = refine_on_path(&surface, &task, &PathSettings::default(), &mut workspace)
        .expect("a minimum");
    assert!(found.converged);
    assert!((found.coordinates[0] - constant.equilibrium).abs() < 1e-4);
    let curvature = found.curvature.expect("second derivatives")[(0, 0)];
    assert!((curvature - rigid).abs() < 2e-4, "{curvature} {rigid}");
}

#[test]
fn ions_and_radicals_settle_in_uhf() {
    let hydroxyl = charged(diatomic("O", "H", 1.0), 0, 2);
    let oxonium = charged(
        molecule(
            &["O", "H", "H", "H"],
            &[
                [0.0, 0.0, 0.1],
                [1.8, 0.0, -0.3],
                [-0.9, 1.6, -0.3],
                [-0.9, -1.5, -0.3],
            ],
        ),
        1,
        1,
    );
    for (start, method) in [(hydroxyl, Method::Uhf), (oxonium, Method::Rhf)] {
        let surface = surface(&start, "6-31G*", method);
        let settings = SettleSettings {
            stability: StabilityDemand::Leave,
            ..SettleSettings::default()
        };
        let settled = settle(
            &surface,
            &start,
            &masses(&start),
            &[],
            &settings,
            &mut surface.workspace(),
        )
        .expect("settles");
        assert!(settled.minimum.converged());
        assert!(settled.minimum.record.stability.is_some());
        assert_eq!(settled.analysis.imaginary, 0);
        // Moving the whole molecule changes nothing: rows of the Hessian sum up to zero, dipole derivatives to the charge.
        let atoms = start.atoms.len();
        for axis in 0..3 {
            let sum: f64 = (0..atoms)
                .map(|a| settled.hessian.dipole_derivatives[(axis, 3 * a + axis)])
                .sum();
            assert!((sum - f64::from(start.charge)).abs() < 1e-4, "{sum}");
            for row in 0..3 * atoms {
                let sum: f64 = (0..atoms)
                    .map(|a| settled.hessian.matrix[(row, 3 * a + axis)])
                    .sum();
                assert!(sum.abs() < 1e-4, "{sum}");
            }
        }
    }
}
