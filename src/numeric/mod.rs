//! Numerical analysis that no law or rule owns: integrals, roots, special functions. Numbers in, numbers out.
//!
//! Each routine states its tolerance and its budget, and what it returns when the budget ends.

mod incomplete_gamma;
mod quadrature;
mod root;
pub mod special;

pub use incomplete_gamma::{UpperGamma, rising_series};
pub use quadrature::integrate;
pub use root::{RootError, root};
