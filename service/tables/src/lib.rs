//! Tables in files: into typed column batches with bad cells, and back with columns appended.
//!
//! CSV (also gzip and zstd), NDJSON, Parquet and Arrow IPC are read in bounded batches. Every
//! reader delivers the same [`kilter_model::Batch`], whatever the format; the original rows can be
//! carried along and are written back untouched. Written files appear whole or not at all.
//!
//! This is the only crate that names polars.

mod carried;
mod columnar;
mod csv_reader;
mod csv_writer;
mod error;
mod format;
mod ndjson;
mod reader;
mod rows;
#[cfg(test)]
mod tests;
mod writer;

pub use error::TableError;
pub use format::Format;
pub use reader::{ReadOptions, TableReader};
pub use rows::TableBatch;
pub use writer::{Appended, AppendedKind, TableWriter};
