//! Equations of lattice dynamics: no input or output, no async, and no opinion about what is good or bad.
//!
//! Units throughout: eV, Å, u, K; wavenumbers in cm⁻¹, negative for an imaginary mode. Thresholds are arguments: this
//! crate knows none.

pub mod crystal;
pub mod density_of_states;
pub mod elements;
pub mod force_constants;
pub mod molecules;
pub mod supercell;
pub mod thermodynamics;
pub mod units;

pub use crystal::Crystal;
pub use elements::Element;
pub use force_constants::ForceConstants;
pub use supercell::Supercell;
