//! The journal of a run: one checksummed line per finished evaluation, appended and flushed as it happens.
//!
//! Every line is a JSON object `{"crc32": "…", "line": …}`; the checksum covers the text of `line`.
//! The first line holds the format version and the fingerprint of the spec. A last line that was cut off
//! (the machine went down while it was written) is dropped on reading; any other damage is an error.

use super::dissociation::Limit;
use super::onset::Onset;
use super::settle::SettledLevel;
use crate::scan::event::Stationary;
use crate::scan::{Entry, Likeness};
use serde::{Deserialize, Serialize};
use serde_json::value::RawValue;
use std::fs::{File, OpenOptions, TryLockError};
use std::io::Write;
use std::path::{Path, PathBuf};

/// Version of the format; readers refuse any other.
pub const FORMAT: u32 = 1;

/// One line of a journal.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Line {
    /// What the journal belongs to; always the first line.
    Header(Header),
    /// A finished evaluation.
    Point(LevelEntry),
    /// Energies of a level's separated parts.
    Limit(LevelLimit),
    /// Where a level's solution becomes unstable.
    Onset(LevelOnset),
    /// A stationary point located after a level's walk.
    Stationary(LevelStationary),
    /// A level is complete.
    Complete(LevelEnd),
    /// A level's molecule is settled.
    Settled(Box<SettledLevel>),
}

/// What a journal belongs to.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct Header {
    /// Version of the format.
    pub format: u32,
    /// Version of the program that wrote it.
    pub version: String,
    /// Fingerprint of the part of the spec that decides the numbers.
    pub fingerprint: String,
}

/// A finished evaluation and the level it belongs to.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct LevelEntry {
    /// Number of the level in the spec.
    pub level: usize,
    /// The evaluation.
    pub entry: Entry,
}

/// Energies of the separated parts and the level they belong to.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct LevelLimit {
    /// Number of the level in the spec.
    pub level: usize,
    /// The parts.
    pub limit: Limit,
}

/// The onset of an instability and the level it belongs to.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct LevelOnset {
    /// Number of the level in the spec.
    pub level: usize,
    /// The onset.
    pub onset: Onset,
}

/// A stationary point and the level it belongs to.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct LevelStationary {
    /// Number of the level in the spec.
    pub level: usize,
    /// The stationary point.
    pub stationary: Stationary,
}

/// The end of a level.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct LevelEnd {
    /// Number of the level in the spec.
    pub level: usize,
    /// Wall time of its walk, s.
    pub wall_seconds: f64,
    /// Threads it ran on.
    pub threads: usize,
    /// Largest resident memory of the process until then, MiB; none where the system does not say.
    pub peak_memory_mib: Option<f64>,
    /// How alike the kept solutions of neighbouring points are.
    pub likeness: Vec<Likeness>,
}

/// Why a journal cannot be written or read.
#[derive(Debug, thiserror::Error)]
pub enum JournalError {
    /// The file system said no.
    #[error("{}: {source}", path.display())]
    Io {
        /// file concerned
        path: PathBuf,
        /// what it said
        source: std::io::Error,
    },
    /// Another process is writing it.
    #[error("{}: another process is running this scan", path.display())]
    Locked {
        /// file concerned
        path: PathBuf,
    },
    /// A line that is not what was written.
    #[error("{}:{line}: {reason}; move the folder aside with --fresh to start again", path.display())]
    Damaged {
        /// file concerned
        path: PathBuf,
        /// number of the line, from 1
        line: usize,
        /// what is wrong
        reason: String,
    },
    /// Written by a version with another format.
    #[error("{}: journal format {found}, this version reads {FORMAT}; move the folder aside with --fresh to start again", path.display())]
    Format {
        /// file concerned
        path: PathBuf,
        /// its format
        found: u32,
    },
}

#[derive(Serialize, Deserialize)]
struct Envelope {
    crc32: String,
    line: Box<RawValue>,
}

/// A journal being written. The file is locked against other processes for as long as this lives.
#[derive(Debug)]
pub struct Journal {
    file: File,
    path: PathBuf,
}

impl Journal {
    /// Starts a new journal (an existing file is overwritten) with its header.
    ///
    /// # Errors
    /// If the file cannot be written or another process holds it.
    pub fn create(path: &Path, fingerprint: &str) -> Result<Self, JournalError> {
        let io = |source| JournalError::Io {
            path: path.to_path_buf(),
            source,
        };
        let file = OpenOptions::new()
            .create(true)
            .append(true)
            .truncate(false)
            .open(path)
            .map_err(io)?;
        match file.try_lock() {
            Ok(()) => {}
            Err(TryLockError::WouldBlock) => {
                return Err(JournalError::Locked {
                    path: path.to_path_buf(),
                });
            }
            Err(TryLockError::Error(source)) => return Err(io(source)),
        }
        file.set_len(0).map_err(io)?;
        let mut journal = Self {
            file,
            path: path.to_path_buf(),
        };
        journal.append(&Line::Header(Header {
            format: FORMAT,
            version: env!("CARGO_PKG_VERSION").to_owned(),
            fingerprint: fingerprint.to_owned(),
        }))?;
        Ok(journal)
    }

    /// Appends a line and hands it to the file system.
    ///
    /// # Errors
    /// If it cannot be written.
    pub fn append(&mut self, line: &Line) -> Result<(), JournalError> {
        let io = |source: std::io::Error| JournalError::Io {
            path: self.path.clone(),
            source,
        };
        let body = serde_json::value::to_raw_value(line).map_err(|e| io(e.into()))?;
        let crc32 = format!("{:08x}", crc32fast::hash(body.get().as_bytes()));
        let mut text =
            serde_json::to_string(&Envelope { crc32, line: body }).map_err(|e| io(e.into()))?;
        text.push('\n');
        self.file.write_all(text.as_bytes()).map_err(io)?;
        self.file.flush().map_err(io)
    }
}

/// Whether a journal has no complete line yet: the program was ended before it could write one.
#[must_use]
pub fn is_unwritten(path: &Path) -> bool {
    std::fs::read(path).is_ok_and(|bytes| !bytes.contains(&b'\n'))
}

/// Reads a journal whole.
///
/// # Errors
/// If it cannot be read, is of another format, or a line before the last is damaged.
pub fn read(path: &Path) -> Result<(Header, Vec<Line>), JournalError> {
    let text = std::fs::read_to_string(path).map_err(|source| JournalError::Io {
        path: path.to_path_buf(),
        source,
    })?;
    let damaged = |line: usize, reason: String| JournalError::Damaged {
        path: path.to_path_buf(),
        line,
        reason,
    };
    let rows: Vec<&str> = text.split_inclusive('\n').collect();
    let mut lines = Vec::with_capacity(rows.len());
    for (k, row) in rows.iter().enumerate() {
        match parse(row.trim_end_matches('\n')) {
            Ok(line) => lines.push(line),
            // Only the last line can have been cut off by a crash.
            Err(_) if k + 1 == rows.len() && !row.ends_with('\n') => break,
            Err(reason) => return Err(damaged(k + 1, reason)),
        }
    }
    let mut lines = lines.into_iter();
    match lines.next() {
        Some(Line::Header(header)) if header.format == FORMAT => Ok((header, lines.collect())),
        Some(Line::Header(header)) => Err(JournalError::Format {
            path: path.to_path_buf(),
            found: header.format,
        }),
        _ => Err(damaged(1, "the header is missing".to_owned())),
    }
}

fn parse(row: &str) -> Result<Line, String> {
    let envelope: Envelope = serde_json::from_str(row).map_err(|e| e.to_string())?;
    let crc32 = format!("{:08x}", crc32fast::hash(envelope.line.get().as_bytes()));
    if crc32 != envelope.crc32 {
        return Err(format!("checksum {crc32}, expected {}", envelope.crc32));
    }
    serde_json::from_str(envelope.line.get()).map_err(|e| e.to_string())
}
