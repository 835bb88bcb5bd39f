//! Formats, known by the extension of a file.

use std::path::Path;

use crate::error::TableError;

/// A format of tables.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Format {
    /// Comma-separated values with a head.
    Csv,
    /// The same, compressed with gzip.
    CsvGz,
    /// The same, compressed with zstd.
    CsvZst,
    /// Apache Parquet.
    Parquet,
    /// One JSON object per line.
    Ndjson,
    /// Apache Arrow IPC file.
    Arrow,
}

impl Format {
    /// The format that a file's name says.
    ///
    /// # Errors
    /// [`TableError::UnknownFormat`], which lists the known ones.
    pub fn of_path(path: &Path) -> Result<Self, TableError> {
        let name = path.file_name().unwrap_or_default().to_string_lossy().to_ascii_lowercase();
        let endings = [
            (".csv", Self::Csv),
            (".csv.gz", Self::CsvGz),
            (".csv.zst", Self::CsvZst),
            (".parquet", Self::Parquet),
            (".ndjson", Self::Ndjson),
            (".arrow", Self::Arrow),
        ];
        let found = endings.into_iter().find(|(ending, _)| name.ends_with(ending));
        found.map(|(_, format)| format).ok_or_else(|| TableError::UnknownFormat { path: path.to_owned() })
    }

    /// The format in words, for messages.
    pub(crate) fn name(self) -> &'static str {
        match self {
            Self::Csv | Self::CsvGz | Self::CsvZst => "CSV",
            Self::Parquet => "Parquet",
            Self::Ndjson => "NDJSON",
            Self::Arrow => "Arrow",
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn extensions() {
        for (name, format) in [
            ("a.csv", Format::Csv),
            ("a.b.CSV.GZ", Format::CsvGz),
            ("a.parquet", Format::Parquet),
            ("x/a.ndjson", Format::Ndjson),
        ] {
            assert_eq!(Format::of_path(Path::new(name)).unwrap(), format, "{name}");
        }
        for (name, part) in [("a.docx", ".docx"), ("table", "without extension")] {
            let error = Format::of_path(Path::new(name)).unwrap_err().to_string();
            assert!(error.contains(part) && error.contains(".parquet"), "{error}");
        }
    }
}
