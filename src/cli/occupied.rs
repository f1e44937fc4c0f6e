//! What a run's folder already holds when a command is given again.

use super::{Failure, Streams};
use crate::job::journal::{self, Header, JournalError, Line};
use crate::report::folder::{FolderError, Occupant, RunFolder};

impl From<JournalError> for Failure {
    fn from(error: JournalError) -> Self {
        Self::system(error)
    }
}

impl From<FolderError> for Failure {
    fn from(error: FolderError) -> Self {
        if error.is_refusal() {
            Self::usage(error)
        } else {
            Self::system(error)
        }
    }
}

/// The journal of the very run with this fingerprint; nothing where the folder is free to be written. A folder with
/// anything else is refused, or moved aside if `fresh`.
pub(super) fn own_journal(
    folder: &RunFolder,
    fingerprint: &str,
    fresh: bool,
    streams: &mut Streams<'_>,
) -> Result<Option<(Header, Vec<Line>)>, Failure> {
    let occupant = folder.occupant()?;
    if fresh && occupant != Occupant::Nothing {
        if let Some(aside) = folder.move_aside()? {
            writeln!(
                streams.err,
                "moved {} to {}",
                folder.path().display(),
                aside.display()
            )?;
        }
        return Ok(None);
    }
    let path = || folder.path().to_path_buf();
    match occupant {
        Occupant::Nothing => Ok(None),
        Occupant::Other => Err(FolderError::NotARun { path: path() }.into()),
        Occupant::Run if journal::is_unwritten(&folder.journal()) => Ok(None),
        Occupant::Run => {
            let (header, lines) = journal::read(&folder.journal())?;
            let spec = |fingerprint: &str| fingerprint.split('-').next().map(str::to_owned);
            if header.fingerprint == fingerprint {
                Ok(Some((header, lines)))
            } else if spec(&header.fingerprint) == spec(fingerprint) {
                Err(Failure::usage(format!(
                    "{}: holds this spec treated by another command or with another option (settle with or without \
                     --push); give another folder with --out, or move this one aside with --fresh",
                    folder.path().display()
                )))
            } else {
                Err(FolderError::OtherRun { path: path() }.into())
            }
        }
    }
}
