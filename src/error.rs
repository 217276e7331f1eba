//! What can go wrong, sorted by whose fault it is.
//!
//! Every message names the file (or option), the place and the mend. The command line turns an error into an exit
//! code with [`Error::exit_code`]; the library never prints and never exits.

use std::path::{Path, PathBuf};

/// The result of anything here that can fail.
pub type Result<T, E = Error> = std::result::Result<T, E>;

/// An error that names what is at fault, where, and what mends it.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum Error {
    /// The system refused to read or write.
    #[error("{path}: {doing}: {source}", path = path.display())]
    Io {
        /// The file or folder.
        path: PathBuf,
        /// What was being done, such as "reading the header".
        doing: String,
        /// The system's own words.
        source: std::io::Error,
    },
    /// A file contradicts its own format.
    #[error("{path}: {place}: {problem}", path = path.display())]
    Malformed {
        /// The file.
        path: PathBuf,
        /// The place in the file: a tag, a chunk, a line.
        place: String,
        /// What is wrong there.
        problem: String,
    },
    /// A well-formed file that uses something Regauge does not read or write.
    #[error("{path}: {what}", path = path.display())]
    Unsupported {
        /// The file.
        path: PathBuf,
        /// What is not supported.
        what: String,
        /// How the user can get there all the same.
        mend: String,
    },
    /// More memory or more samples than the limit allows.
    #[error("{what} needs {needed}, more than the limit of {limit}")]
    Limit {
        /// What would not fit.
        what: String,
        /// The need, with its unit.
        needed: String,
        /// The limit, with its unit.
        limit: String,
        /// The option or change that helps.
        mend: String,
    },
    /// The call itself is wrong: an option, a combination, a shape.
    #[error("{problem}")]
    Usage {
        /// What is wrong.
        problem: String,
        /// What to write instead; may be empty.
        mend: String,
    },
    /// The inputs cannot be brought together: no common region, different CRS, a map without inverse.
    #[error("{problem}")]
    Unfit {
        /// What does not fit.
        problem: String,
        /// What to do about it; may be empty.
        mend: String,
    },
    /// The user stopped the run; nothing was left behind.
    #[error("stopped; nothing was written")]
    Stopped,
}

impl Error {
    /// An I/O error on `path` while `doing` something.
    pub fn io(path: &Path, doing: &str, source: std::io::Error) -> Self {
        Error::Io { path: path.to_owned(), doing: doing.to_owned(), source }
    }

    /// A malformed file.
    pub fn malformed(path: &Path, place: impl Into<String>, problem: impl Into<String>) -> Self {
        Error::Malformed { path: path.to_owned(), place: place.into(), problem: problem.into() }
    }

    /// A file that needs something not supported.
    pub fn unsupported(path: &Path, what: impl Into<String>, mend: impl Into<String>) -> Self {
        Error::Unsupported { path: path.to_owned(), what: what.into(), mend: mend.into() }
    }

    /// Wrong usage.
    pub fn usage(problem: impl Into<String>, mend: impl Into<String>) -> Self {
        Error::Usage { problem: problem.into(), mend: mend.into() }
    }

    /// Inputs that do not fit together.
    pub fn unfit(problem: impl Into<String>, mend: impl Into<String>) -> Self {
        Error::Unfit { problem: problem.into(), mend: mend.into() }
    }

    /// What the user can do about it; empty if the message says it all.
    pub fn mend(&self) -> String {
        match self {
            Error::Unsupported { mend, .. }
            | Error::Limit { mend, .. }
            | Error::Usage { mend, .. }
            | Error::Unfit { mend, .. } => mend.clone(),
            Error::Io { source, .. } if source.kind() == std::io::ErrorKind::StorageFull => {
                "free some space or write to another disk; nothing was left under the output's name".into()
            }
            Error::Malformed { .. } => "the file is damaged or cut short: get or write it again".into(),
            _ => String::new(),
        }
    }

    /// 1 for a failure, 2 for wrong usage.
    pub fn exit_code(&self) -> u8 {
        match self {
            Error::Usage { .. } => 2,
            _ => 1,
        }
    }
}
