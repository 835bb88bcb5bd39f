//! The kilter model file and the one scorer.
//!
//! This crate is the bottom of kilter: the types of the model file with their JSON Schema, checks
//! and fingerprint; column batches; the coding of records into terms; and the arithmetic that
//! turns a record into probabilities. It knows no files, no clock and no network.

pub mod batch;
pub mod cells;
pub mod check;
pub mod coding;
pub mod design;
mod explanation;
pub mod file;
pub mod fingerprint;
mod form;
mod kernel;
pub mod limits;
pub mod records;
pub mod scorer;
pub mod signature;
pub mod sql;
mod unique_keys;

pub use batch::*;
pub use check::{Fault, check};
pub use coding::{Coded, Coder, Note, UNSEEN, near_miss};
pub use design::{DenseColumn, Design, DesignError, Term};
pub use explanation::{Explanation, ExplanationError};
pub use file::*;
pub use fingerprint::{ModelFileError, read_limited, schema};
pub use limits::{LARGEST_FACTORED, LARGEST_FILE, LARGEST_TERMS, LARGEST_VALUES};
pub use records::RecordReader;
pub use scorer::{Scored, Scorer, log_probabilities_from_log_odds, probabilities_from_log_odds};
pub use signature::{Signature, SignatureError, key_from_hexadecimal, public_key, sign, verify_signature};
pub use sql::{SqlError, sql, sql_query};
