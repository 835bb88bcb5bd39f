//! Why a table could not be read or written.

use std::io;
use std::path::{Path, PathBuf};
use std::sync::Arc;

/// Why a table could not be read or written.
#[derive(Debug, Clone, thiserror::Error)]
#[non_exhaustive]
pub enum TableError {
    /// The extension of the file says no format.
    #[error("`{}`: {} is no known kind of table; known are .csv, .csv.gz, .csv.zst, .parquet, .ndjson, .arrow", path.display(), extension_in_words(path))]
    UnknownFormat {
        /// The file.
        path: PathBuf,
    },
    /// The file could not be opened, read or written.
    #[error("could not {action} `{}`: {source}", path.display())]
    File {
        /// `read` or `write`.
        action: &'static str,
        /// The file.
        path: PathBuf,
        /// The cause.
        source: Arc<io::Error>,
    },
    /// The file has no content at all.
    #[error("`{}` is empty", path.display())]
    Empty {
        /// The file.
        path: PathBuf,
    },
    /// A column that is needed is not there.
    #[error("no column `{column}` in `{}`{}; it has `{}`", path.display(), hint(near_miss.as_deref()), present.join("`, `"))]
    MissingColumn {
        /// The file.
        path: PathBuf,
        /// The column that is needed.
        column: String,
        /// The column that may be meant.
        near_miss: Option<String>,
        /// The columns that are there.
        present: Vec<String>,
    },
    /// A column stands twice.
    #[error("column `{column}` stands twice in `{}`", path.display())]
    DuplicateColumn {
        /// The file.
        path: PathBuf,
        /// The column.
        column: String,
    },
    /// A column to be added is there already.
    #[error("`{}` has a column `{column}` already; rename it, or score the table as it was before", path.display())]
    NameClash {
        /// The file that is read.
        path: PathBuf,
        /// The column.
        column: String,
    },
    /// The bytes are no UTF-8.
    #[error("`{}` is not UTF-8: see byte {position}", path.display())]
    Encoding {
        /// The file.
        path: PathBuf,
        /// Position of the first wrong byte, counted from 0.
        position: u64,
    },
    /// The content is not what the file's name says.
    #[error("`{}` is no readable {format} file: {reason}", path.display())]
    Malformed {
        /// The file.
        path: PathBuf,
        /// The format that its name says.
        format: &'static str,
        /// What is wrong.
        reason: String,
    },
    /// A table could not be written.
    #[error("could not write `{}`: {reason}", path.display())]
    Write {
        /// The file.
        path: PathBuf,
        /// The cause.
        reason: String,
    },
}

fn hint(near_miss: Option<&str>) -> String {
    near_miss.map_or_else(String::new, |name| format!("; did you mean `{name}`?"))
}

fn extension_in_words(path: &Path) -> String {
    path.extension()
        .map_or_else(|| "a name without extension".into(), |e| format!(".{}", e.to_string_lossy()))
}

impl TableError {
    pub(crate) fn read(path: &Path, source: io::Error) -> Self {
        Self::File { action: "read", path: path.to_owned(), source: Arc::new(source) }
    }

    pub(crate) fn write(path: &Path, source: io::Error) -> Self {
        Self::File { action: "write", path: path.to_owned(), source: Arc::new(source) }
    }

    pub(crate) fn malformed(path: &Path, format: &'static str, reason: impl std::fmt::Display) -> Self {
        Self::Malformed { path: path.to_owned(), format, reason: reason.to_string() }
    }

    /// Whether the table itself is to blame, and not the disk or what is to be written: another
    /// attempt would end the same way.
    pub fn is_about_input(&self) -> bool {
        match self {
            Self::UnknownFormat { .. }
            | Self::Empty { .. }
            | Self::MissingColumn { .. }
            | Self::DuplicateColumn { .. }
            | Self::NameClash { .. }
            | Self::Encoding { .. }
            | Self::Malformed { .. } => true,
            Self::File { .. } | Self::Write { .. } => false,
        }
    }
}
