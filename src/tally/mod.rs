//! How waits are counted: per stream and day, mergeable, in bounded memory; and the cells statistics read.
//!
//! In: [`crate::wait::Wait`]. Out: [`Cells`]. No files, no clock.

mod cells;

pub use cells::{Cause, Cells, EventCell, Interval, Mass, Sample};
