//! Files → text → [`Spec`]: what is read from disk, and how much of it.

use super::diagnostic::{Diagnostic, Problems, SpecErrors};
use super::raw::RawSpec;
use super::read::Read;
use super::{Spec, resolved, validate};
use std::fs::File;
use std::io::Read as _;
use std::path::Path;
use toml::de::{DeTable, DeValue};

/// Largest spec or geometry file, bytes (4 MiB).
pub const MAX_SPEC_BYTES: u64 = 4 << 20;
/// Largest basis file, bytes (64 MiB).
pub const MAX_BASIS_BYTES: u64 = 64 << 20;

const SMALLEST: &str =
    "the smallest spec has a [molecule] with its geometry and one [[level]] with method and basis";

/// Reads and validates a spec file.
///
/// # Errors
/// Everything that is wrong with it, or that it cannot be read: missing, a folder, more than
/// [`MAX_SPEC_BYTES`], not UTF-8.
pub fn load(path: &Path) -> Result<Spec, SpecErrors> {
    let text = read_text(path, MAX_SPEC_BYTES).map_err(|d| SpecErrors(vec![*d]))?;
    parse(&text, path)
}

/// Tables and keys of a spec that change a report and no calculation.
const REPORTING: [&str; 4] = ["title", "fit", "vibration", "output"];

/// Reads a spec for its reporting tables. Where it has neither a molecule nor levels, all else comes from `run`, the text of
/// the spec of a run.
///
/// # Errors
/// As [`load`].
pub fn load_reporting(path: &Path, run: &str) -> Result<Spec, SpecErrors> {
    let mut text = read_text(path, MAX_SPEC_BYTES).map_err(|d| SpecErrors(vec![*d]))?;
    let is_whole =
        |table: toml::Table| table.contains_key("molecule") || table.contains_key("level");
    if !text.parse().is_ok_and(is_whole)
        && let Ok(mut rest) = run.parse::<toml::Table>()
    {
        rest.retain(|key, _| !REPORTING.contains(&key));
        // After the user's own lines, whose numbers so stay what they are in messages.
        text = format!("{text}\n{rest}");
    }
    parse(&text, path)
}

/// Validates the text of a spec; `path` names it in messages, gives the default folder and title, and is where
/// relative paths start.
///
/// # Errors
/// Everything that is wrong with it.
pub fn parse(text: &str, path: &Path) -> Result<Spec, SpecErrors> {
    if text.len() as u64 > MAX_SPEC_BYTES {
        return Err(SpecErrors(vec![too_large(path, MAX_SPEC_BYTES)]));
    }
    let mut problems = Problems::new(path, text);
    if text.trim_start_matches('\u{feff}').trim().is_empty() {
        let mut empty = Diagnostic::of_file(path, "the file is empty");
        empty.hint(SMALLEST);
        return Err(SpecErrors(vec![empty]));
    }
    let (root, errors) = DeTable::parse_recoverable(text);
    for error in errors {
        // An error without a place (nesting too deep) stands at the start.
        let span = error.span().unwrap_or(0..0);
        let (message, expected) = match error.message().split_once(", expected ") {
            Some((message, expected)) => (message, Some(expected)),
            None => (error.message(), None),
        };
        let diagnostic = problems.at(&span, format!("this is not TOML: {message}"));
        if let Some(expected) = expected {
            diagnostic.expected(format!("expected {expected}"));
        }
    }
    // What is recovered from broken TOML would give false follow-ups.
    if !problems.found.is_empty() {
        return Err(SpecErrors(problems.into_sorted()));
    }
    let root = DeValue::Table(root.into_inner());
    let raw = RawSpec::read(&root, &(0..0), &mut problems);
    let spec = raw.and_then(|raw| validate::validate(&raw, &mut problems));
    match spec {
        Some(spec) if problems.found.is_empty() => Ok(resolved::resolve(spec)),
        _ => Err(SpecErrors(problems.into_sorted())),
    }
}

fn too_large(path: &Path, limit: u64) -> Diagnostic {
    Diagnostic::of_file(
        path,
        format!(
            "the file is larger than {} MiB, the most that is read",
            limit >> 20
        ),
    )
}

/// Reads a text file of at most `limit` bytes.
///
/// # Errors
/// A file that is missing, unreadable, no ordinary file, too large or not UTF-8.
pub(super) fn read_text(path: &Path, limit: u64) -> Result<String, Box<Diagnostic>> {
    let unreadable = |error: &std::io::Error| {
        let reason = match error.kind() {
            std::io::ErrorKind::NotFound => "there is no such file".to_owned(),
            std::io::ErrorKind::PermissionDenied => "the file may not be read".to_owned(),
            _ => format!("the file cannot be read: {error}"),
        };
        Box::new(Diagnostic::of_file(path, reason))
    };
    let about = std::fs::metadata(path).map_err(|e| unreadable(&e))?;
    if about.is_dir() {
        return Err(Box::new(Diagnostic::of_file(
            path,
            "this is a folder, not a file",
        )));
    }
    // A device or pipe may never end; a size that is not there cannot be checked.
    if !about.is_file() {
        return Err(Box::new(Diagnostic::of_file(
            path,
            "this is not an ordinary file",
        )));
    }
    let mut bytes = Vec::new();
    File::open(path)
        .and_then(|file| file.take(limit + 1).read_to_end(&mut bytes))
        .map_err(|e| unreadable(&e))?;
    if bytes.len() as u64 > limit {
        return Err(Box::new(too_large(path, limit)));
    }
    String::from_utf8(bytes).map_err(|error| {
        let place = error.utf8_error().valid_up_to();
        let line = error.as_bytes()[..place]
            .iter()
            .filter(|b| **b == b'\n')
            .count()
            + 1;
        let mut diagnostic = Diagnostic::of_file(
            path,
            format!(
                "the file is not UTF-8 text: byte {} (line {line}) is part of no character",
                place + 1
            ),
        );
        diagnostic.hint("save it as UTF-8");
        Box::new(diagnostic)
    })
}
