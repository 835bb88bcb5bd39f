//! How large a model file may be. The limits are far beyond any model that a person can answer for;
//! they are there so that a file from elsewhere costs bounded time and memory.

/// Largest model file in bytes. Whoever reads a file from disk or network should stop here (see
/// [`crate::ModelFile::from_json`]).
pub const LARGEST_FILE: usize = 256 * 1024 * 1024;
/// Most values (numbers, texts, lists, objects) in a model file.
pub const LARGEST_VALUES: usize = 16_000_000;
/// Most terms of a model, the intercept included.
pub const LARGEST_TERMS: usize = 100_000;
/// Up to this many coefficients [`crate::check()`] factors a covariance; a larger one is held
/// against its diagonal only, because the factors take time with the cube of the size.
pub const LARGEST_FACTORED: usize = 1_000;
