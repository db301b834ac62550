//! Tally cells -> fitted families, their choice, the two verdicts. METHODS.md sections 3 and 4.

pub mod families;
mod law;

pub use law::{About, Coordinate, Family, Kind, Law, TailWeight, area_by_quadrature};
