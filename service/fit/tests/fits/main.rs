//! Fits from plan and table to model file, against reference values and facts that hold for any
//! correct fit.

#![expect(clippy::unwrap_used, reason = "in tests, helpers included, a missing value is a failure")]

mod bias_reduction;
mod invariants;
mod reference;
mod ridge;
mod rows;
mod separation;
mod support;
mod worked;
