//! Tally cells -> fitted families, their choice, the two verdicts. METHODS.md sections 3 and 4.

mod law;

pub use law::{About, Family, Law, TailWeight, area_by_quadrature};
