//! Tally cells -> fitted families, their choice, the two verdicts. METHODS.md sections 3 and 4.

mod choice;
mod condense;
mod ensemble;
pub mod families;
mod fit;
mod law;
mod likelihood;
mod maximise;
mod profile;
mod splice;
mod symmetric;
mod verdict;

pub use choice::{
    Agreement, LikelihoodRatio, Residual, Vuong, akaike_weights, cox_snell, criterion_weights,
    likelihood_ratio, vuong,
};
pub use ensemble::{DRAWS, Draw, Ensemble, LEAST_WEIGHT, Member, ensemble};
pub use fit::{Fit, FitError, Gap, Parameter, fit};
pub use law::{About, Coordinate, Family, Kind, Law, TailWeight, area_by_quadrature};
pub use likelihood::{log_likelihood, log_likelihood_gradient};
pub use maximise::Stop;
pub use profile::profile_interval;
pub use splice::{Estimate, INTERVAL_LEVEL, Splice, SpliceError, Tried, splice, tail_above};
pub use verdict::{RemainingWait, TailClass, Trends, Verdict, verdict};
