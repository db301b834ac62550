//! How long to wait before giving up, learnt from completion times that are partly cut off.
//!
//! Read first: [`wait::Wait`] (one observation), [`tally::Cells`] (waits, counted), [`outlook::Outlook`] (what
//! the future of a wait looks like), [`stopping::Worth`] (what time is worth).

pub mod advice;
pub mod advise;
pub mod audit;
pub mod chart;
pub mod cli;
pub mod client;
pub mod curve;
pub mod demo;
pub mod diary;
pub mod export;
pub mod gate;
pub mod glob;
pub mod intake;
pub mod ledger;
pub mod numeric;
pub mod outlook;
pub mod policy;
pub mod replay;
pub mod report;
pub mod running;
pub mod say;
pub mod serve;
pub mod settle;
pub mod stopping;
pub mod tail;
pub mod tally;
pub mod wait;
pub mod whole;
