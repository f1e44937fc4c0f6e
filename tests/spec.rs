//! Specs from outside: sound ones and their resolved text, broken ones and every message, and any bytes at all.

use proptest::prelude::*;
use std::ffi::OsStr;
use std::fs;
use std::path::{Path, PathBuf};
use thalweg::spec::{MAX_SPEC_BYTES, Spec, load, parse};

/// The spec files of a folder under `tests/data/specs`, in order.
fn specs(folder: &str) -> Vec<PathBuf> {
    let mut found: Vec<PathBuf> = fs::read_dir(Path::new("tests/data/specs").join(folder))
        .expect("the folder is part of the source")
        .map(|entry| entry.expect("readable").path())
        .filter(|path| path.extension() == Some(OsStr::new("toml")))
        .collect();
    found.sort();
    assert!(!found.is_empty());
    found
}

fn sound(name: &str) -> Spec {
    load(&Path::new("tests/data/specs/sound").join(name)).unwrap_or_else(|e| panic!("{e}"))
}

/// The messages of a text, features that are not built left out.
fn messages(text: &str) -> String {
    match parse(text, Path::new("spec.toml")) {
        Ok(_) => String::new(),
        Err(errors) => errors.to_string(),
    }
}

/// Every message is compared whole with the file beside its spec. `THALWEG_WRITE_EXPECTED=1` writes those files anew,
/// for review in the difference of the commit. What a version cannot do yet is tested where it is listed.
#[test]
fn regress_broken_specs_give_the_expected_messages() {
    let write = std::env::var_os("THALWEG_WRITE_EXPECTED").is_some();
    let mut wrong = Vec::new();
    for path in specs("broken") {
        let mut errors = load(&path).expect_err(&path.display().to_string());
        errors
            .0
            .retain(|d| !d.message.starts_with("this version cannot do"));
        assert!(!errors.0.is_empty(), "{}", path.display());
        let folder = format!("{}/", path.parent().expect("a folder").display());
        let found = errors.to_string().replace(&folder, "") + "\n";
        let file = path.with_extension("txt");
        if write {
            fs::write(&file, &found).expect("writable");
        }
        let expected = fs::read_to_string(&file).unwrap_or_default();
        if found != expected {
            wrong.push(format!("{}:\n{found}", path.display()));
        }
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n\n"));
}

#[test]
fn every_message_names_file_line_and_column() {
    for path in specs("broken") {
        let errors = load(&path).expect_err("broken");
        for diagnostic in &errors.0 {
            let text = diagnostic.to_string();
            assert!(!text.contains('\u{1b}'), "no colour unless asked: {text}");
            let (Some(line), Some(column)) = (diagnostic.line, diagnostic.column) else {
                assert!(path.ends_with("empty.toml"), "{text}");
                continue;
            };
            let start = format!("{}:{line}:{column}: ", diagnostic.file.display());
            assert!(text.starts_with(&start), "{text}");
            assert!(text.lines().any(|l| l.contains('^')), "a caret: {text}");
        }
    }
}

#[test]
fn a_resolved_spec_gives_the_same_run_bit_by_bit() {
    for path in specs("sound") {
        let spec = load(&path).unwrap_or_else(|e| panic!("{e}"));
        let mut again = parse(&spec.text, Path::new("elsewhere/spec.toml"))
            .unwrap_or_else(|e| panic!("{}\n{e}", spec.text));
        assert_eq!(again.text, spec.text);
        assert_eq!(again.fingerprint(), spec.fingerprint());
        // Notes carry the place in a file, which differs.
        again.notes.clone_from(&spec.notes);
        assert_eq!(again, spec, "{}", path.display());
    }
}

#[test]
fn the_fingerprint_follows_what_decides_a_point() {
    let path = Path::new("tests/data/specs/sound/water-stretch.toml");
    let text = fs::read_to_string(path).expect("part of the source");
    let of = |text: &str| {
        let spec = parse(text, path).unwrap_or_else(|e| panic!("{e}"));
        spec.fingerprint().to_owned()
    };
    let own = of(&text);
    assert_eq!(own.len(), 16);
    for same in [
        text.replace("one O–H stretched", "a title"),
        text.clone() + "\n[output]\nfolder = \"x\"\nfigures = []\nenergy = \"eV\"\n",
        // The same values, however they are written.
        text.replace("step = 0.05", "points = 47"),
    ] {
        assert_eq!(of(&same), own, "{same}");
    }
    for other in [
        text.replace("0.958 H1", "0.9580000000000001 H1"),
        text.replace("6-31g*", "6-31g**"),
        text.replace("to = 3.00", "to = 2.95"),
        text.replace("[molecule]", "[molecule]\nisotopes = { H2 = 2.014 }"),
        text.replace("[molecule]", "[molecule]\nisotopes = { H = 2.014 }"),
        text.clone() + "moves = [\"O\", \"H2\"]\n",
        text.clone() + "\n[scf]\nenergy = 1e-8\n",
        text.clone() + "\n[walk]\nstart = \"first\"\n",
    ] {
        assert_ne!(of(&other), own, "{other}");
    }
}

#[test]
fn a_mass_by_symbol_is_for_all_atoms_without_one_of_their_own() {
    let path = Path::new("tests/data/specs/sound/water-stretch.toml");
    let text = fs::read_to_string(path).expect("part of the source");
    let text = text.replace(
        "[molecule]",
        "[molecule]\nisotopes = { H = 2.014, H1 = 3.016 }",
    );
    let spec = parse(&text, path).unwrap_or_else(|e| panic!("{e}"));
    assert_eq!(spec.masses_u[1..], [3.016, 2.014]);
    assert!(spec.masses_u[0] > 15.9);
}

#[test]
fn the_smallest_spec_needs_only_a_geometry_and_a_level() {
    let spec = sound("single-point.toml");
    assert!(spec.sweeps.is_empty());
    assert_eq!(spec.title, "single-point");
    assert_eq!(spec.output.folder, Path::new("runs/single-point"));
    let labels: Vec<&str> = spec
        .molecule
        .atoms
        .iter()
        .map(|a| a.label.as_str())
        .collect();
    assert_eq!(labels, ["O", "H1", "H2"]);
    assert_eq!(
        spec.positions_at(&[]).expect("as it is"),
        spec.molecule.positions
    );
    assert_eq!(spec.levels[0].name, "UHF/STO-3G");
    assert_eq!(spec.levels[0].basis(&spec.molecule).len(), 7);
}

#[test]
fn lengths_in_bohr_are_swept_in_angstrom() {
    let spec = sound("bohr-surface.toml");
    assert_eq!(spec.shape(), [9, 4]);
    let first = &spec.sweeps[0];
    assert!((first.values[0] - 1.5 * 0.529_177_210_903).abs() < 1e-12);
    assert!((first.values[8] - 2.3 * 0.529_177_210_903).abs() < 1e-12);
    assert_eq!(first.also.len(), 1);
    assert_eq!(first.column_name(&spec.molecule), "bond_O_H1_angstrom");
    assert_eq!(first.axis_label(&spec.molecule), "O–H1 = O–H2 / Å");
    assert_eq!(
        spec.sweeps[1].column_name(&spec.molecule),
        "angle_H1_O_H2_degree"
    );
    let at = spec
        .positions_at(&[first.values[3], 104.5])
        .expect("on the grid");
    let bond = 1.5 + 3.0 * 0.1;
    for hydrogen in [1, 2] {
        assert!(((at[hydrogen] - at[0]).norm() - bond).abs() < 1e-12);
    }
    assert!((spec.masses_u[1] - 2.014_101_778).abs() < 1e-12);
    let names: Vec<&str> = spec.levels.iter().map(|l| l.name.as_str()).collect();
    assert_eq!(
        names,
        [
            "RHF/6-31G*",
            "UHF/cc-pVDZ (Cartesian), charge +1, doublet",
            "triplet"
        ]
    );
    let states: Vec<(i32, u32)> = spec
        .levels
        .iter()
        .map(|l| (l.charge, l.multiplicity))
        .collect();
    assert_eq!(states, [(0, 1), (1, 2), (0, 3)]);
}

#[test]
fn a_step_that_does_not_reach_the_end_is_noted() {
    let spec = sound("xyz-file.toml");
    assert_eq!(spec.sweeps[0].values, [1.0, 1.25, 1.5, 1.75, 2.0]);
    assert_eq!(spec.notes.len(), 1);
    let note = spec.notes[0].to_string();
    assert!(note.contains("step does not reach to = 2.1"), "{note}");
    assert!(sound("water-stretch.toml").notes.is_empty());
}

#[test]
fn unreadable_files_are_named() {
    let folder = tempfile::tempdir().expect("a folder");
    let file = |name: &str, bytes: &[u8]| {
        let path = folder.path().join(name);
        fs::write(&path, bytes).expect("writable");
        path
    };
    let missing = folder.path().join("missing.toml");
    let garbage = vec![b'['; 10 << 20];
    for (path, expected) in [
        (missing, "there is no such file"),
        (folder.path().to_path_buf(), "this is a folder"),
        (file("empty.toml", b""), "the file is empty"),
        (
            file("blank.toml", b"\xef\xbb\xbf \n\t\n"),
            "the file is empty",
        ),
        (
            file("latin.toml", b"# ok\ntitle = \"\xe9t\xe9\"\n"),
            "byte 15 (line 2)",
        ),
        (file("large.toml", &garbage), "larger than 4 MiB"),
        (file("nul.toml", &[0; 100]), "not TOML"),
    ] {
        let errors = load(&path).expect_err(expected);
        let text = errors.to_string();
        assert!(text.starts_with(&path.display().to_string()), "{text}");
        assert!(text.contains(expected), "{text}");
    }
}

#[test]
fn megabytes_of_mistakes_are_reported_in_time() {
    let most = usize::try_from(MAX_SPEC_BYTES).expect("a small number");
    let fill = |head: &str, row: &str, tail: &str| {
        let rows = (most - head.len() - tail.len()) / row.len();
        head.to_owned() + &row.repeat(rows) + tail
    };
    let head = "[[level]]\nmethod = \"rhf\"\nbasis = \"sto-3g\"\n\n[molecule]\n";
    let numbered: String = (0..200_000).map(|i| format!("k{i} = 1\n")).collect();
    for text in [
        fill("", "[", ""),
        fill("", "[[level]]\n", ""),
        fill("x = \"", "\\u0041", "\""),
        fill(
            &format!("{head}cartesian = \"\"\"\n"),
            "H 0 0 0\n",
            "\"\"\"\n",
        ),
        fill(
            &format!("{head}zmatrix = \"\"\"\n"),
            "H 0 0 0\n",
            "\"\"\"\n",
        ),
        fill(
            &format!("{head}zmatrix = \"H\"\n[[sweep]]\nbond = ["),
            "\"H\",",
            "]\n",
        ),
        fill(
            &format!("{head}zmatrix = \"H\"\n[[sweep]]\nvalues = ["),
            "1,",
            "]\n",
        ),
        fill("a = ", "[", ""),
        fill("a = ", "{a=", ""),
        fill("a", ".a", " = 1"),
        fill("", "\n", "="),
        fill("", "x\n", ""),
        numbered,
    ] {
        let errors = parse(&text, Path::new("spec.toml")).expect_err("nonsense");
        assert!(errors.0.len() <= 500 && errors.to_string().len() < 200_000);
    }
}

#[test]
fn line_breaks_of_either_kind_and_a_byte_order_mark_are_read() {
    let path = Path::new("tests/data/specs/sound/water-stretch.toml");
    let text = fs::read_to_string(path).expect("part of the source");
    let plain = parse(&text, path).expect("sound");
    let dos = text.replace('\n', "\r\n");
    assert_eq!(parse(&dos, path).expect("sound").text, plain.text);
    let marked = format!("\u{feff}{text}");
    assert_eq!(parse(&marked, path).expect("sound").text, plain.text);
    let broken = dos.replace("H2 O 0.958", "H2 Q 0.958");
    assert!(
        messages(&broken).starts_with("spec.toml:7:4: `Q` is not"),
        "{}",
        messages(&broken)
    );
}

/// Pieces of specs, sound and not, from which the fuzz test builds texts.
const PIECES: &[&str] = &[
    "[molecule]\n",
    "zmatrix = \"\"\"\nO\nH1 O 0.958\nH2 O 0.958 H1 104.5\n\"\"\"\n",
    "cartesian = \"H 0 0 0\\nF 0 0 0.9\"\n",
    "charge = -3\n",
    "multiplicity = 3\n",
    "unit = \"bohr\"\n",
    "isotopes = { H1 = 2.0, H9 = nan }\n",
    "[[level]]\nmethod = \"uhf\"\nbasis = \"sto-3g\"\n",
    "functions = \"cartesian\"\ncharge = 1\n",
    "[[sweep]]\n",
    "bond = [\"O\", \"H1\"]\n",
    "bond = [\"H1\", \"H2\"]\n",
    "angle = [\"H1\", \"O\", \"H2\"]\n",
    "dihedral = [\"H1\", \"O\", \"H2\", \"O\"]\n",
    "from = 0.5\nto = 180\n",
    "from = 1\nto = 1e-300\n",
    "step = 1e-9\n",
    "step = 0.3\n",
    "points = 7\n",
    "values = [0, 60, 179.9999, 180]\n",
    "moves = [\"H2\", \"O\"]\n",
    "also = [{ bond = [\"O\", \"H2\"] }, { angle = [] }]\n",
    "[walk]\nstart = \"last\"\n",
    "[scf]\nenergy = 1e999\n",
    "[dissociation]\nparts = [{ atoms = [\"O\"], charge = 8 }, { atoms = [\"H1\", \"H2\"] }]\n",
    "[[fit]]\nform = \"fourier\"\norders = [1, 4]\nwindow = { within = 0.1 }\n",
    "[vibration]\nstates = 9999\n",
    "[output]\nfigures = []\ngradients = true\n",
    "# é ü 中\n",
    "\"\"\"",
    "]",
    "{",
    "\u{0}",
    "\r",
];

proptest! {
    #![proptest_config(ProptestConfig { cases: 300, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn any_bytes_are_read_or_refused(bytes in prop::collection::vec(any::<u8>(), 0..400)) {
        let text = String::from_utf8_lossy(&bytes);
        prop_assert!(parse(&text, Path::new("a.toml")).is_err());
    }

    #[test]
    fn any_pieces_are_read_or_refused(pieces in prop::collection::vec(prop::sample::select(PIECES), 0..14)) {
        let text = pieces.concat();
        match parse(&text, Path::new("a.toml")) {
            Ok(spec) => {
                let again = parse(&spec.text, Path::new("b.toml"));
                prop_assert!(again.is_ok_and(|again| again.text == spec.text));
            }
            Err(errors) => prop_assert!(!errors.to_string().is_empty()),
        }
    }

    #[test]
    fn a_sound_spec_with_any_change_is_read_or_refused(
        which in any::<prop::sample::Index>(),
        changes in prop::collection::vec(
            (any::<prop::sample::Index>(), 0usize..12, prop::sample::select(
                &["", "0", "-", "e9", ".", "\"", "[", "}", "=", "nan", "H1", "\n", "é"][..],
            )),
            1..5,
        ),
    ) {
        let specs = specs("sound");
        let path = which.get(&specs);
        let mut text: Vec<char> = fs::read_to_string(path).expect("readable").chars().collect();
        for (place, length, insert) in changes {
            let start = place.index(text.len());
            let end = (start + length).min(text.len());
            text.splice(start..end, insert.chars());
        }
        let text: String = text.into_iter().collect();
        if let Err(errors) = parse(&text, path) {
            prop_assert!(!errors.to_string().is_empty());
        }
    }
}
