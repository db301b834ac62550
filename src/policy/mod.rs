//! What an operator may ask for.

mod glob;

pub use glob::{Glob, GlobError};
