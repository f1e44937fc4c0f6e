//! The program from outside: outcomes, messages, exit statuses, files.

use assert_cmd::Command;
use std::path::{Path, PathBuf};

/// A folder to run in, with small files written into it.
struct Place {
    folder: tempfile::TempDir,
}

/// What a command gave.
struct Ran {
    status: i32,
    out: String,
    err: String,
}

impl Place {
    fn new() -> Self {
        Self {
            folder: tempfile::tempdir().unwrap(),
        }
    }

    fn path(&self, name: &str) -> PathBuf {
        self.folder.path().join(name)
    }

    fn with(self, name: &str, bytes: impl AsRef<[u8]>) -> Self {
        std::fs::write(self.path(name), bytes).unwrap();
        self
    }

    fn run(&self, args: &[&str]) -> Ran {
        let output = Command::cargo_bin("thalweg")
            .unwrap()
            .current_dir(self.folder.path())
            .args(args)
            .output()
            .unwrap();
        Ran {
            status: output.status.code().unwrap(),
            out: String::from_utf8(output.stdout).unwrap(),
            err: String::from_utf8(output.stderr).unwrap(),
        }
    }

    fn read(&self, name: &str) -> String {
        std::fs::read_to_string(self.path(name)).unwrap()
    }

    fn summary(&self, folder: &str) -> serde_json::Value {
        serde_json::from_str(&self.read(&format!("{folder}/summary.json"))).unwrap()
    }

    /// Names of everything in the folder.
    fn names(&self, folder: &str) -> Vec<String> {
        let mut names: Vec<String> = std::fs::read_dir(self.path(folder))
            .unwrap()
            .map(|entry| entry.unwrap().file_name().into_string().unwrap())
            .collect();
        names.sort();
        names
    }
}

const HYDROGEN: &str = r#"
title = "Hydrogen"
[molecule]
zmatrix = """
H1
H2 H1 0.74
"""
[[level]]
method = "rhf"
basis = "sto-3g"
[[sweep]]
bond = ["H1", "H2"]
from = 0.5
to = 1.5
step = 0.1
"#;

#[test]
fn a_scan_leaves_every_file_and_a_table() {
    let place = Place::new().with("h2.toml", HYDROGEN);
    let ran = place.run(&["scan", "h2.toml"]);
    assert_eq!(ran.status, 0, "{}", ran.err);
    for file in [
        "curve.png",
        "curve.svg",
        "geometries.xyz",
        "journal.jsonl",
        "points.csv",
        "spec.toml",
        "summary.json",
    ] {
        let names = place.names("runs/h2");
        assert!(
            names.iter().any(|n| n == file),
            "{file} is not among {names:?}"
        );
    }
    assert!(ran.out.contains("RHF/STO-3G"));
    let table = place.read("runs/h2/points.csv");
    assert!(table.starts_with(
        "level,bond_H1_H2_angstrom,energy_hartree,relative_kj_per_mol,converged,fock_builds,s_squared,\
         homo_hartree,lumo_hartree,dipole_debye,"
    ));
    assert_eq!(table.lines().count(), 12);
    let summary = place.summary("runs/h2");
    let points = summary["levels"][0]["points"].as_array().unwrap();
    assert_eq!(points.len(), 11);
    // The nuclei alone: every geometry has the distance its row says.
    for point in points {
        let atoms = point["geometry_angstrom"].as_array().unwrap();
        let z = |k: usize| -> Vec<f64> { (1..4).map(|c| atoms[k][c].as_f64().unwrap()).collect() };
        let distance = z(0)
            .iter()
            .zip(z(1))
            .map(|(a, b)| (a - b).powi(2))
            .sum::<f64>()
            .sqrt();
        assert!((distance - point["values"][0].as_f64().unwrap()).abs() < 1e-10);
    }
}

#[test]
fn json_on_stdout_is_the_summary() {
    let place = Place::new().with("h2.toml", HYDROGEN);
    let ran = place.run(&["scan", "h2.toml", "--json", "--quiet", "--out", "here"]);
    assert_eq!(ran.status, 0);
    assert_eq!(ran.err, "");
    assert_eq!(ran.out, place.read("here/summary.json"));
}

#[test]
fn the_same_run_again_reports_and_another_spec_is_refused() {
    let other = HYDROGEN.replace("to = 1.5", "to = 1.6");
    let place = Place::new()
        .with("h2.toml", HYDROGEN)
        .with("other.toml", other);
    assert_eq!(place.run(&["scan", "h2.toml", "--out", "run"]).status, 0);
    let table = place.read("run/points.csv");
    let again = place.run(&["scan", "h2.toml", "--out", "run"]);
    assert_eq!(
        (again.status, place.read("run/points.csv")),
        (0, table.clone())
    );
    let refused = place.run(&["scan", "other.toml", "--out", "run"]);
    assert_eq!(refused.status, 2);
    assert!(refused.err.contains("another spec") && refused.err.contains("--fresh"));
    assert_eq!(place.read("run/points.csv"), table);
    let fresh = place.run(&["scan", "other.toml", "--out", "run", "--fresh"]);
    assert_eq!(fresh.status, 0, "{}", fresh.err);
    assert_eq!(place.read("run.1/points.csv"), table);
    assert_eq!(place.read("run/points.csv").lines().count(), 13);
}

#[test]
fn the_resolved_spec_gives_the_same_run() {
    let place = Place::new().with("h2.toml", HYDROGEN);
    assert_eq!(place.run(&["scan", "h2.toml", "--out", "one"]).status, 0);
    assert_eq!(
        place.run(&["scan", "one/spec.toml", "--out", "two"]).status,
        0
    );
    assert_eq!(place.read("one/points.csv"), place.read("two/points.csv"));
    assert_eq!(
        place.read("one/geometries.xyz"),
        place.read("two/geometries.xyz")
    );
}

#[test]
fn a_folder_that_is_no_run_is_left_alone() {
    let place = Place::new().with("h2.toml", HYDROGEN);
    std::fs::create_dir(place.path("mine")).unwrap();
    std::fs::write(place.path("mine/notes.txt"), "precious").unwrap();
    let ran = place.run(&["scan", "h2.toml", "--out", "mine"]);
    assert_eq!(ran.status, 2);
    assert_eq!(place.names("mine"), ["notes.txt"]);
}

#[test]
fn a_point_that_does_not_converge_has_no_number_and_status_3() {
    let spec = HYDROGEN
        .replace("H1\nH2 H1 0.74", "F\nH F 0.92")
        .replace("[\"H1\", \"H2\"]", "[\"F\", \"H\"]")
        + "[scf]\niterations = 2\n";
    let place = Place::new().with("h2.toml", spec);
    let ran = place.run(&["scan", "h2.toml", "--out", "run"]);
    assert_eq!(ran.status, 3, "{}{}", ran.out, ran.err);
    let summary = place.summary("run");
    for point in summary["levels"][0]["points"].as_array().unwrap() {
        assert!(point["energy_hartree"].is_null());
        assert_eq!(point["converged"], false);
        assert_eq!(point["findings"][0], "not-converged");
    }
    assert!(ran.out.contains("not converged"));
    assert!(
        place
            .read("run/points.csv")
            .lines()
            .nth(1)
            .unwrap()
            .contains(",,,false,2,")
    );
}

#[test]
fn every_broken_spec_has_its_message_and_leaves_nothing() {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/specs/broken");
    let mut specs: Vec<PathBuf> = std::fs::read_dir(folder)
        .unwrap()
        .map(|entry| entry.unwrap().path())
        .filter(|p| p.extension().is_some_and(|e| e == "toml"))
        .collect();
    specs.sort();
    assert!(specs.len() >= 30);
    let mut messages = std::collections::BTreeSet::new();
    for spec in specs {
        let name = spec.file_name().unwrap().to_str().unwrap().to_owned();
        let place = Place::new().with(&name, std::fs::read(&spec).unwrap());
        let ran = place.run(&["scan", &name]);
        assert_eq!(ran.status, 2, "{name}: {}", ran.err);
        let place_in_file = ran.err.lines().any(|line| {
            let mut parts = line.split(':');
            parts.next().is_some_and(|p| p.ends_with(&name))
                && parts
                    .next()
                    .is_some_and(|p| p.trim().parse::<usize>().is_ok())
                && parts
                    .next()
                    .is_some_and(|p| p.trim().parse::<usize>().is_ok())
        });
        // An empty file has no line to point at.
        let place_in_file = place_in_file || name == "empty.toml";
        assert!(place_in_file, "{name}: no file:line:column in {}", ran.err);
        assert_eq!(place.names("."), [name.as_str()], "{name} left files");
        messages.insert(ran.err.replace(&name, ""));
    }
    assert!(
        messages.len() >= 30,
        "only {} different messages",
        messages.len()
    );
}

#[test]
fn input_that_is_no_spec_is_refused_in_words() {
    let garbage = vec![b'x'; 10 << 20];
    let place = Place::new()
        .with("empty.toml", "")
        .with("binary.toml", [0xff, 0xfe, 0x00, 0x80])
        .with("garbage.toml", garbage);
    for name in [
        "missing.toml",
        "empty.toml",
        "binary.toml",
        "garbage.toml",
        ".",
    ] {
        for command in ["scan", "check"] {
            let ran = place.run(&[command, name]);
            assert_eq!(ran.status, 2, "{command} {name}: {}", ran.err);
            assert!(ran.err.contains(name), "{}", ran.err);
            assert!(ran.err.len() < 2000 && ran.out.is_empty());
        }
    }
    assert!(!place.path("runs").exists());
}

#[test]
fn the_command_line_explains_itself() {
    let place = Place::new();
    let help = place.run(&["--help"]);
    assert_eq!(help.status, 0);
    for word in ["scan", "check", "basis", "schema", "completions", "130"] {
        assert!(help.out.contains(word), "{word}");
    }
    assert_eq!(place.run(&["scna", "x.toml"]).status, 2);
    assert_eq!(place.run(&[]).status, 2);
    assert_eq!(place.run(&["scan", "x.toml", "--threads", "0"]).status, 2);
}

#[test]
fn check_tells_sizes_and_writes_nothing() {
    let place = Place::new().with("h2.toml", HYDROGEN);
    let ran = place.run(&["check", "h2.toml"]);
    assert_eq!(ran.status, 0, "{}", ran.err);
    for word in ["11 points", "basis functions  2", "1 α, 1 β", "about"] {
        assert!(ran.out.contains(word), "{word} is not in\n{}", ran.out);
    }
    assert_eq!(place.names("."), ["h2.toml"]);
}

#[test]
fn basis_sets_are_listed_and_described() {
    let place = Place::new();
    let list = place.run(&["basis"]);
    assert_eq!(list.status, 0);
    for name in ["STO-3G", "6-31G*", "cc-pVQZ", "def2-TZVP"] {
        assert!(list.out.contains(name), "{name}");
    }
    let one = place.run(&["basis", "cc-pvdz"]);
    assert_eq!(one.status, 0);
    assert!(one.out.contains("Dunning"));
    let none = place.run(&["basis", "cc-pvdzz"]);
    assert_eq!(none.status, 2);
    assert!(none.err.contains("cc-pVDZ"));
}

#[test]
fn the_schema_is_json_and_completions_name_the_commands() {
    let place = Place::new();
    let schema = place.run(&["schema"]);
    let value: serde_json::Value = serde_json::from_str(&schema.out).unwrap();
    assert!(value["properties"]["molecule"].is_object());
    assert!(place.run(&["completions", "bash"]).out.contains("scan"));
}

#[test]
fn one_thread_and_two_give_the_same_table() {
    let spec = HYDROGEN
        .replace("\"rhf\"", "\"uhf\"")
        .replace("\"sto-3g\"", "\"6-31g**\"");
    let place = Place::new().with("h2.toml", spec);
    for threads in ["1", "2", "4"] {
        let ran = place.run(&["scan", "h2.toml", "--threads", threads, "--out", threads]);
        assert_eq!(ran.status, 0, "{}", ran.err);
    }
    assert_eq!(place.read("1/points.csv"), place.read("2/points.csv"));
    assert_eq!(place.read("1/points.csv"), place.read("4/points.csv"));
}

#[test]
fn report_makes_the_same_files_again() {
    let place = Place::new().with("h2.toml", HYDROGEN);
    assert_eq!(place.run(&["scan", "h2.toml", "--out", "run"]).status, 0);
    let (table, figure) = (place.read("run/points.csv"), place.read("run/curve.svg"));
    std::fs::remove_file(place.path("run/points.csv")).unwrap();
    std::fs::remove_file(place.path("run/curve.svg")).unwrap();
    let ran = place.run(&["report", "run"]);
    assert_eq!(ran.status, 0, "{}", ran.err);
    assert_eq!(place.read("run/points.csv"), table);
    assert_eq!(place.read("run/curve.svg"), figure);
}

#[test]
fn fits_minima_and_states_are_in_every_file() {
    let place = Place::new().with("h2.toml", HYDROGEN);
    let ran = place.run(&["scan", "h2.toml", "--out", "run"]);
    assert_eq!(ran.status, 0, "{}", ran.err);
    assert!(ran.out.contains("minimum H1–H2 0.71"), "{}", ran.out);
    assert!(ran.out.contains("polynomial of order"), "{}", ran.out);
    let summary = place.summary("run");
    let level = &summary["levels"][0];
    // RHF/STO-3G hydrogen: 0.712 Å, −1.1175 hartree (W. J. Hehre, L. Radom, P. v. R. Schleyer, J. A. Pople, Ab Initio
    // Molecular Orbital Theory, 1986).
    let minimum = &level["minima"][0];
    assert!((minimum["values"][0].as_f64().unwrap() - 0.712).abs() < 1e-3);
    assert!((minimum["energy_hartree"].as_f64().unwrap() + 1.1175).abs() < 1e-4);
    assert!(minimum["gradient_max_hartree_per_bohr"].as_f64().unwrap() < 1e-5);
    assert_eq!(minimum["frequencies_cm1"].as_array().unwrap().len(), 1);
    let fits = level["fits"].as_array().unwrap();
    assert_eq!(fits.len(), 2, "polynomial and Morse");
    for fit in fits {
        assert_eq!(fit["sweep"], 0);
        assert_eq!(fit["moves"], serde_json::json!(["H2"]));
        assert_eq!(fit["convention"], "E = E0 + k/2 (q-q0)^2");
        let k = |key: &str| fit["force_constant"][key].as_f64().unwrap();
        assert!((k("newton_per_metre") - 100.0 * k("mdyne_per_angstrom")).abs() < 1e-9);
        let half = fit["without_half"]["force_constant"]["mdyne_per_angstrom"]
            .as_f64()
            .unwrap();
        assert!((k("mdyne_per_angstrom") - 2.0 * half).abs() < 1e-12);
        assert!(fit["window"]["from"].as_f64().unwrap() >= 0.5);
    }
    let spectroscopy = &level["spectroscopy"];
    let omega = spectroscopy["omega_e_cm1"].as_f64().unwrap();
    assert!(omega > 5000.0 && omega < 6000.0, "{omega}");
    assert!(!spectroscopy["states_cm1"].as_array().unwrap().is_empty());
    let table = place.read("run/parameters.csv");
    assert!(table.starts_with("term,atoms,equilibrium,k,unit,convention,level,spread,"));
    assert!(
        table
            .lines()
            .any(|l| l.starts_with("bond,H1 H2,0.71") && l.contains("kcal_per_mol_angstrom2"))
    );
    assert!(
        table.lines().any(|l| l.contains("mdyne_per_angstrom")
            && l.contains(",second derivative from gradients,"))
    );
    for file in ["vibration.png", "vibration.svg"] {
        assert!(place.path(&format!("run/{file}")).exists());
    }
}

#[test]
fn a_report_needs_the_journal_alone_and_takes_other_fits() {
    let other = HYDROGEN.to_owned()
        + "[[fit]]\nform = \"morse\"\nwindow = { within = 0.35 }\n[vibration]\nstates = 2\n";
    let place = Place::new()
        .with("h2.toml", HYDROGEN)
        .with("other.toml", other);
    assert_eq!(place.run(&["scan", "h2.toml", "--out", "run"]).status, 0);
    let files = place.names("run");
    let before: Vec<Vec<u8>> = files
        .iter()
        .map(|f| std::fs::read(place.path(&format!("run/{f}"))).unwrap_or_default())
        .collect();
    assert_eq!(place.run(&["report", "run"]).status, 0);
    assert_eq!(place.names("run"), files);
    for (file, bytes) in files.iter().zip(&before) {
        let now = std::fs::read(place.path(&format!("run/{file}"))).unwrap_or_default();
        assert!(now == *bytes, "{file} has changed");
    }
    let ran = place.run(&["report", "run", "--spec", "other.toml", "--out", "again"]);
    assert_eq!(ran.status, 0, "{}", ran.err);
    let (first, again) = (place.summary("run"), place.summary("again"));
    let (first, again) = (&first["levels"][0], &again["levels"][0]);
    assert_eq!(first["points"], again["points"]);
    assert_eq!(first["minima"], again["minima"]);
    let fits = again["fits"].as_array().unwrap();
    assert_eq!(fits.len(), 1);
    assert_eq!(fits[0]["form"], "morse");
    let width =
        fits[0]["window"]["to"].as_f64().unwrap() - fits[0]["window"]["from"].as_f64().unwrap();
    assert!(width <= 0.71);
    assert_eq!(
        again["spectroscopy"]["states_cm1"]
            .as_array()
            .unwrap()
            .len(),
        2
    );
}

const WATER: &str = r#"
title = "Water"
[molecule]
zmatrix = """
O
H1 O 0.96
H2 O 0.96 H1 104
"""
[[level]]
method = "rhf"
basis = "sto-3g"
"#;

#[test]
fn a_molecule_is_settled_without_a_sweep() {
    let place = Place::new().with("water.toml", WATER);
    let ran = place.run(&["settle", "water.toml"]);
    assert_eq!(ran.status, 0, "{}", ran.err);
    assert!(
        ran.out.contains("a minimum: all vibrations are real"),
        "{}",
        ran.out
    );
    let folder = "runs/water-settled";
    let names = place.names(folder);
    for file in [
        "journal.jsonl",
        "parameters.csv",
        "settled.xyz",
        "spec.toml",
        "summary.json",
    ] {
        assert!(
            names.iter().any(|n| n == file),
            "{file} is not among {names:?}"
        );
    }
    let summary = place.summary(folder);
    let minimum = &summary["levels"][0]["minima"][0];
    // RHF/STO-3G: 0.9894 Å, 100.03°, −74.965 90 hartree (W. J. Hehre, L. Radom, P. v. R. Schleyer, J. A. Pople, Ab Initio
    // Molecular Orbital Theory, 1986).
    assert!((minimum["energy_hartree"].as_f64().unwrap() + 74.965_90).abs() < 2e-5);
    assert_eq!(minimum["frequencies_cm1"].as_array().unwrap().len(), 3);
    assert_eq!(minimum["converged"], true);
    let internal = summary["levels"][0]["internal"].as_array().unwrap();
    assert_eq!(internal.len(), 3);
    assert!((internal[0]["equilibrium"].as_f64().unwrap() - 0.9894).abs() < 2e-4);
    assert!((internal[2]["equilibrium"].as_f64().unwrap() - 100.03).abs() < 0.03);
    // Again: nothing is calculated, and a report says the same.
    let again = place.run(&["settle", "water.toml", "--json", "--quiet"]);
    assert_eq!(
        (again.status, again.out),
        (0, place.read("runs/water-settled/summary.json"))
    );
    let text = place.read("runs/water-settled/summary.json");
    assert_eq!(place.run(&["report", folder]).status, 0);
    assert_eq!(place.read("runs/water-settled/summary.json"), text);
    // A folder of settled molecules is no scan's.
    let refused = place.run(&["scan", "water.toml", "--out", folder]);
    assert_eq!(refused.status, 2);
}

#[test]
fn complete_levels_of_an_interrupted_run_are_taken_over() {
    let two = HYDROGEN.replace(
        "[[sweep]]",
        "[[level]]\nmethod = \"uhf\"\nbasis = \"sto-3g\"\n[[sweep]]",
    );
    let place = Place::new().with("h2.toml", two);
    assert_eq!(place.run(&["scan", "h2.toml", "--out", "run"]).status, 0);
    let whole = place.summary("run");
    let journal = place.read("run/journal.jsonl");
    let lines: Vec<&str> = journal.lines().collect();
    // The first level's end, and a few points of the second.
    let end = lines
        .iter()
        .position(|l| l.contains("wall_seconds"))
        .unwrap();
    let cut = lines[..end + 4].join("\n") + "\n";
    std::fs::write(place.path("run/journal.jsonl"), cut).unwrap();

    let ran = place.run(&["scan", "h2.toml", "--out", "run"]);
    assert_eq!(ran.status, 0, "{}", ran.err);
    assert!(
        ran.err.contains("1 of 2 levels are complete"),
        "{}",
        ran.err
    );
    let again = place.summary("run");
    for level in 0..2 {
        assert_eq!(
            whole["levels"][level]["points"],
            again["levels"][level]["points"]
        );
    }
    let rewritten = place.read("run/journal.jsonl");
    assert!(lines[1..=end].iter().all(|line| rewritten.contains(line)));
}

#[test]
fn a_report_takes_a_spec_of_reporting_tables_alone() {
    let place = Place::new()
        .with("h2.toml", HYDROGEN)
        .with("fits.toml", "[[fit]]\nform = \"morse\"\n")
        .with("wrong.toml", "# a comment\n[[fit]]\nform = \"moose\"\n")
        .with("other.toml", HYDROGEN.replace("0.74", "0.80"));
    assert_eq!(place.run(&["scan", "h2.toml", "--out", "run"]).status, 0);
    let ran = place.run(&["report", "run", "--spec", "fits.toml", "--out", "again"]);
    assert_eq!(ran.status, 0, "{}", ran.err);
    let fits = &place.summary("again")["levels"][0]["fits"];
    assert_eq!(fits.as_array().unwrap().len(), 1);
    assert_eq!(fits[0]["form"], "morse");
    let ran = place.run(&["report", "run", "--spec", "wrong.toml", "--out", "third"]);
    assert_eq!(ran.status, 2);
    assert!(ran.err.contains("wrong.toml:3:8"), "{}", ran.err);
    let ran = place.run(&["report", "run", "--spec", "other.toml", "--out", "fourth"]);
    assert_eq!(ran.status, 0);
    assert!(ran.err.contains("another calculation"), "{}", ran.err);
}

#[test]
fn settling_with_and_without_pushing_are_told_apart() {
    let place = Place::new().with("water.toml", WATER);
    assert_eq!(place.run(&["settle", "water.toml"]).status, 0);
    let ran = place.run(&["settle", "water.toml", "--push"]);
    assert_eq!(ran.status, 2);
    assert!(ran.err.contains("--push"), "{}", ran.err);
}
