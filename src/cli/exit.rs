//! Exit statuses.

/// How the program ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Status {
    /// Done.
    Done,
    /// Could not finish: the file system or the program itself failed.
    Failed,
    /// The spec or the command line is wrong, or the folder holds another spec's run.
    WrongInput,
    /// Finished, but some point did not converge.
    Unconverged,
    /// Interrupted; the journal is intact.
    Interrupted,
}

impl Status {
    /// The number returned to the system: 0, 1, 2, 3 or 130.
    #[must_use]
    pub fn code(self) -> u8 {
        match self {
            Self::Done => 0,
            Self::Failed => 1,
            Self::WrongInput => 2,
            Self::Unconverged => 3,
            Self::Interrupted => 130,
        }
    }
}
