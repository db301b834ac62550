//! What the data say with no model: curves read off [`crate::tally::Cells`]. METHODS.md section 2.
//!
//! In: cells (exact ages, narrow bins, coarse buckets, overlapping ones), right-censored, left-truncated, two
//! endings. [`LifeTable::of`] is the one step that can fail; each estimator is then `Estimator::of(&table)`.
//! Out: plain curves with their variances and intervals, and [`Empirical`], the curve as an
//! [`crate::outlook::Outlook`]. Nothing here extrapolates: past [`LifeTable::sight`] the data are silent.
//!
//! Within an interval that holds endings the curve is unknown between its ends; it is drawn straight there.
//! `level` is the coverage of an interval, e.g. 0.95; levels outside `[0, 1)` are brought to its ends.

mod aalen_johansen;
mod drift;
mod empirical;
mod hazard;
mod hill;
mod interval;
mod kaplan_meier;
mod life_table;
mod log_rank;
mod nelson_aalen;
mod piecewise;
mod residual;
mod turnbull;

pub use aalen_johansen::{AalenJohansen, IncidencePoint};
pub use drift::Drift;
pub use empirical::Empirical;
pub use hazard::{HazardEstimate, SmoothedHazard};
pub use hill::{TailIndex, TopAges, TopError};
pub use interval::ConfidenceInterval;
pub use kaplan_meier::{KaplanMeier, Point};
pub use life_table::{CurveError, ENOUGH, LifeTable, Row};
pub use log_rank::{Emphasis, LogRank, ObservedExpected, log_rank};
pub use nelson_aalen::{HazardPoint, NelsonAalen};
pub use piecewise::PiecewiseHazard;
pub use residual::{MeanTime, RestrictedMean};
pub use turnbull::{Support, Turnbull, turnbull};
