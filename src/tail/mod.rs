//! Tally cells -> fitted families, their choice, the two verdicts. METHODS.md sections 3 and 4.

mod condense;
pub mod families;
mod fit;
mod law;
mod likelihood;
mod maximise;
mod symmetric;

pub use fit::{Fit, FitError, Gap, Parameter, fit};
pub use law::{About, Coordinate, Family, Kind, Law, TailWeight, area_by_quadrature};
pub use likelihood::{log_likelihood, log_likelihood_gradient};
pub use maximise::Stop;
