//! Specs from outside: sound ones and their resolved text, broken ones and every message, and any bytes at all.

use std::ffi::OsStr;
use std::fs;
use std::path::{Path, PathBuf};
use thalweg::spec::{load, parse};

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

/// Every message is compared whole with the file beside its spec. `THALWEG_WRITE_EXPECTED=1` writes those files anew,
/// for review in the difference of the commit.
#[test]
fn regress_broken_specs_give_the_expected_messages() {
    let write = std::env::var_os("THALWEG_WRITE_EXPECTED").is_some();
    let mut wrong = Vec::new();
    for path in specs("broken") {
        let errors = load(&path).expect_err(&path.display().to_string());
        assert!(!errors.0.is_empty());
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
