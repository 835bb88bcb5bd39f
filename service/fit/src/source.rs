//! Where rows come from.

use std::convert::Infallible;
use std::ops::ControlFlow;

use kilter_model::Batch;

/// Rows that can be read again and again, batch by batch, in the same order.
pub trait RowSource {
    /// Why reading failed.
    type Error: std::error::Error + Send + Sync + 'static;

    /// Reads all rows once, in order, and hands each batch to `visit` until it breaks. Batches
    /// may be of any size; they hold the columns that [`Plan::column_specs`] asks for, in that
    /// order.
    ///
    /// # Errors
    /// Where the rows could not be read. A `visit` that breaks is no error.
    ///
    /// [`Plan::column_specs`]: crate::Plan::column_specs
    fn pass(&mut self, visit: &mut dyn FnMut(Batch) -> ControlFlow<()>) -> Result<(), Self::Error>;
}

/// Batches in memory.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Batches(pub Vec<Batch>);

impl RowSource for Batches {
    type Error = Infallible;

    fn pass(&mut self, visit: &mut dyn FnMut(Batch) -> ControlFlow<()>) -> Result<(), Infallible> {
        for batch in &self.0 {
            if visit(batch.clone()).is_break() {
                break;
            }
        }
        Ok(())
    }
}
