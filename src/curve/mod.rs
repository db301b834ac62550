//! Tally -> nonparametric curves. METHODS.md section 2.

mod piecewise;

pub use piecewise::PiecewiseHazard;
