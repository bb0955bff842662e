//! What the tests share: model crystals whose vibrations are known in closed form, and the tools to
//! compare with them.
//!
//! Nothing here asks the service's own lattice dynamics for an answer: matrices are summed over the
//! unfolded constants of each model, and integrals are done by quadrature, so that both can stand
//! as references.

pub mod closed_forms;
pub mod judgement;
pub mod large_package;
pub mod models;
pub mod quadrature;
