//! Equations of lattice dynamics: no input or output, no async, and no opinion about what is good or bad.
//!
//! Units throughout: eV, Å, u, K; wavenumbers in cm⁻¹, negative for an imaginary mode. Thresholds are arguments: this
//! crate knows none.

pub mod crystal;
pub mod density_of_states;
pub mod dipoles;
pub mod dynamics;
pub mod elastic;
pub mod elements;
pub mod ewald;
pub mod force_constants;
pub mod gamma_point;
pub mod images;
pub mod long_wave;
pub mod molecules;
pub mod projection;
pub mod qmesh;
mod reduction;
pub mod supercell;
pub mod symmetry;
pub mod thermodynamics;
pub mod units;
pub mod vibrations;

pub use crystal::Crystal;
pub use elements::Element;
pub use force_constants::ForceConstants;
pub use supercell::Supercell;
pub use tarehouse_eigensolver::{EigenError, c64};
