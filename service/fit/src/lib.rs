//! Plans, maximum likelihood and inference for the baseline-category logit: multinomial logistic
//! regression.
//!
//! The crate is handed batches of typed columns ([`RowSource`]) and hands back a model file. It
//! reads its rows in passes: one that surveys them, then one for each Newton step. As long as the
//! coded rows fit an allowance they are kept, and the source is read only once; beyond it every
//! pass reads the source again in bounded memory. Rows are gathered into chunks of a fixed size
//! whose sums are merged in a fixed order, so a fit is the same to the last bit however the
//! source cuts its batches and however many threads work on it.

pub mod analysis;
pub mod inference;
pub mod plan;

mod alias;
mod bias_reduction;
mod chunk;
mod covariance;
mod cross;
mod cross_validation;
mod error;
mod estimate;
mod fitted;
mod layout;
mod likelihood;
mod linear;
mod model;
mod moments;
mod newton;
mod objective;
mod raw;
mod reader;
mod reduce;
mod resolve;
mod ridge;
mod separation;
mod session;
mod source;
mod split;
mod start;
mod survey;
mod table;
mod trouble;
mod vector;
#[cfg(test)]
mod worked;

pub use analysis::Analysis;
pub use cross_validation::{Candidate, CrossValidation};
pub use error::FitError;
pub use fitted::{Fitted, RefusedRow, RidgeFigures};
pub use plan::{ColumnPlaces, Plan, PlanError, plan_schema};
pub use separation::{Drift, SeparationReport};
pub use session::{FitSettings, Progress, Session, fit};
pub use source::{Batches, RowSource};
pub use split::Split;
