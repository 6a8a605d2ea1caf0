//! What can be wrong with a record, in words for people.

use std::path::PathBuf;

use thiserror::Error;

/// Why the record cannot be read or written.
#[derive(Debug, Error)]
pub enum RecordError {
    /// Another process writes it.
    #[error("{} is being written by another process: only one service may own a record", .0.display())]
    Owned(PathBuf),
    /// There is none.
    #[error("there is no record {}: has the service run with this site file?", .0.display())]
    Missing(PathBuf),
    /// A later version of the program wrote it. It was not touched.
    #[error(
        "{} was written by a later version of the program (its format is {found}, this version knows {known}); \
         it was not touched: take the later version",
        path.display()
    )]
    Newer {
        /// The file.
        path: PathBuf,
        /// Its format.
        found: i32,
        /// The format of this version.
        known: i32,
    },
    /// It is something else. It was not touched.
    #[error("{} is not a record of this program ({what}); it was not touched", path.display())]
    Foreign {
        /// The file.
        path: PathBuf,
        /// What it is instead.
        what: &'static str,
    },
    /// The file system says no.
    #[error("{}: {source}", path.display())]
    File {
        /// The file.
        path: PathBuf,
        /// What it says.
        source: std::io::Error,
    },
    /// SQLite says no.
    #[error("{}: {source}", path.display())]
    Database {
        /// The file.
        path: PathBuf,
        /// What it says.
        source: rusqlite::Error,
    },
    /// Something in the record cannot be understood.
    #[error("the record holds {what} that cannot be understood: {why}")]
    Content {
        /// What it is.
        what: &'static str,
        /// What is wrong with it.
        why: String,
    },
}
