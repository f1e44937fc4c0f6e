//! The folder of a run: whose it is, and files written whole or not at all.

use std::io::Write;
use std::path::{Path, PathBuf};

/// Why a run folder cannot be used.
#[derive(Debug, thiserror::Error)]
pub enum FolderError {
    /// It holds the run of another spec.
    #[error(
        "{}: holds the run of another spec; give another folder with --out or [output] folder, or move this one aside \
         with --fresh",
        path.display()
    )]
    OtherRun {
        /// the folder
        path: PathBuf,
    },
    /// It holds something that is not a run.
    #[error(
        "{}: exists and is not a run folder; give another folder with --out or [output] folder, or move this one aside \
         with --fresh",
        path.display()
    )]
    NotARun {
        /// the folder
        path: PathBuf,
    },
    /// The file system said no.
    #[error("{}: {source}", path.display())]
    Io {
        /// file or folder concerned
        path: PathBuf,
        /// what it said
        source: std::io::Error,
    },
}

impl FolderError {
    /// Whether the user must choose another folder (rather than the disk failing).
    #[must_use]
    pub fn is_refusal(&self) -> bool {
        matches!(self, Self::OtherRun { .. } | Self::NotARun { .. })
    }
}

/// What stands in the place where a run is to go.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Occupant {
    /// Nothing, or an empty folder.
    Nothing,
    /// A run; whether it is the same spec's is for the journal to say.
    Run,
    /// Something else.
    Other,
}

/// A run folder.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct RunFolder {
    path: PathBuf,
}

impl RunFolder {
    /// Name of the journal inside.
    pub const JOURNAL: &'static str = "journal.jsonl";

    /// A folder that may or may not exist yet; nothing is touched.
    #[must_use]
    pub fn at(path: &Path) -> Self {
        Self {
            path: path.to_path_buf(),
        }
    }

    /// Where it is.
    #[must_use]
    pub fn path(&self) -> &Path {
        &self.path
    }

    /// Path of the journal.
    #[must_use]
    pub fn journal(&self) -> PathBuf {
        self.path.join(Self::JOURNAL)
    }

    /// What is there now.
    ///
    /// # Errors
    /// If it cannot be looked at.
    pub fn occupant(&self) -> Result<Occupant, FolderError> {
        if self.journal().is_file() {
            return Ok(Occupant::Run);
        }
        if !self.path.exists() {
            return Ok(Occupant::Nothing);
        }
        if !self.path.is_dir() {
            return Ok(Occupant::Other);
        }
        let mut inside = std::fs::read_dir(&self.path).map_err(|e| self.io(&self.path, e))?;
        Ok(if inside.next().is_none() {
            Occupant::Nothing
        } else {
            Occupant::Other
        })
    }

    /// Creates the folder and those above it.
    ///
    /// # Errors
    /// If the file system refuses.
    pub fn create(&self) -> Result<(), FolderError> {
        std::fs::create_dir_all(&self.path).map_err(|e| self.io(&self.path, e))
    }

    /// Renames what is there to the first free name `NAME.1`, `NAME.2`, … and tells it.
    ///
    /// # Errors
    /// If the file system refuses.
    pub fn move_aside(&self) -> Result<Option<PathBuf>, FolderError> {
        if !self.path.exists() {
            return Ok(None);
        }
        let name = self
            .path
            .file_name()
            .unwrap_or_default()
            .to_string_lossy()
            .into_owned();
        let mut number = 1_u32;
        let aside = loop {
            let candidate = self.path.with_file_name(format!("{name}.{number}"));
            if !candidate.exists() {
                break candidate;
            }
            number += 1;
        };
        std::fs::rename(&self.path, &aside).map_err(|e| self.io(&self.path, e))?;
        Ok(Some(aside))
    }

    /// Writes a file whole: to a temporary one beside it, which then takes its name.
    ///
    /// # Errors
    /// If the file system refuses; the old file, if any, is then still there.
    pub fn write(&self, name: &str, bytes: &[u8]) -> Result<(), FolderError> {
        let target = self.path.join(name);
        let write = || -> std::io::Result<()> {
            let mut file = tempfile::Builder::new()
                .prefix(".")
                .suffix(".part")
                .permissions(readable_by_all())
                .tempfile_in(&self.path)?;
            file.write_all(bytes)?;
            file.as_file().sync_all()?;
            file.persist(&target).map_err(|e| e.error)?;
            Ok(())
        };
        write().map_err(|e| self.io(&target, e))
    }

    fn io(&self, path: &Path, source: std::io::Error) -> FolderError {
        FolderError::Io {
            path: path.to_path_buf(),
            source,
        }
    }
}

/// Temporary files are private by default; results are for colleagues, as far as the umask allows.
#[cfg(unix)]
fn readable_by_all() -> std::fs::Permissions {
    std::os::unix::fs::PermissionsExt::from_mode(0o666)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_stands_in_the_way_is_moved_aside_and_never_deleted() {
        let place = tempfile::tempdir().unwrap();
        let folder = RunFolder::at(&place.path().join("run"));
        assert_eq!(folder.occupant().unwrap(), Occupant::Nothing);
        assert_eq!(folder.move_aside().unwrap(), None);
        for number in 1..=2 {
            folder.create().unwrap();
            folder
                .write("points.csv", format!("{number}").as_bytes())
                .unwrap();
            assert_eq!(folder.occupant().unwrap(), Occupant::Other);
            let aside = folder.move_aside().unwrap().unwrap();
            assert_eq!(aside, place.path().join(format!("run.{number}")));
            let kept = std::fs::read_to_string(aside.join("points.csv")).unwrap();
            assert_eq!(kept, format!("{number}"));
        }
    }

    #[test]
    fn a_file_is_replaced_whole_and_nothing_else_is_left() {
        let place = tempfile::tempdir().unwrap();
        let folder = RunFolder::at(place.path());
        folder.write("a.txt", b"long first text").unwrap();
        folder.write("a.txt", b"short").unwrap();
        assert_eq!(std::fs::read(place.path().join("a.txt")).unwrap(), b"short");
        assert_eq!(std::fs::read_dir(place.path()).unwrap().count(), 1);
    }
}
