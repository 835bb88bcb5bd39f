//! Tests of the statistics against figures that were computed independently.

mod frames;
mod properties;
mod reference_data;
mod reports;
mod worked_example;
