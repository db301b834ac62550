//! Numerical analysis that no law or rule owns: integrals, roots. Numbers in, numbers out.
//!
//! Each routine states its tolerance and its budget, and what it returns when the budget ends.

mod quadrature;
mod root;

pub use quadrature::integrate;
pub use root::{RootError, root};
