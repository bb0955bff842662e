//! Packages of an invented scenario, and the small library that makes them.
//!
//! The way through it: a [`Compound`] (one molecule and its invented potential) is packed into a [`MolecularCrystal`],
//! [`relax`]ed, differentiated into [`RealSpaceConstants`], folded into a supercell, perhaps disturbed by [`noise`],
//! described in a [`Contribution`], and sealed as a submission with its [`Package`].
//!
//! The potential is a sum of functions of interatomic distance, cut off smoothly. It is therefore exactly invariant
//! under translation and rotation, its derivatives are analytic, and its constants have a finite range, so that the
//! dynamical matrix is known exactly at every wave vector. Compounds, names and numbers are invented; no potential here
//! describes a real substance.

pub mod potential;

pub mod compound;

pub mod symmetry;

pub mod molecular_crystal;

pub mod relax;

pub mod packing;

pub mod constants;

pub mod folded;

pub mod harmonic;

pub mod runs;

pub mod noise;

pub mod contribution;

pub mod package;

mod manifest;

mod npy;

pub mod forms;

pub mod scenario;

pub use compound::Compound;
pub use constants::RealSpaceConstants;
pub use contribution::Contribution;
pub use molecular_crystal::MolecularCrystal;
pub use package::Package;
pub use relax::relax;
pub use symmetry::SpaceGroup;

/// Why a model could not be built, relaxed or written.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum ModelError {
    /// The relaxation did not arrive at a stationary point.
    #[error(
        "no stationary point after {iterations} iterations: largest force {force_ev_per_ang} eV/Å"
    )]
    NotRelaxed {
        /// Iterations made.
        iterations: usize,
        /// Largest force component left, eV/Å.
        force_ev_per_ang: f64,
    },
    /// The cell has collapsed or flown apart.
    #[error("the cell is not a crystal any more: {volume_ang3} Å³")]
    CellLost {
        /// Volume found, Å³.
        volume_ang3: f64,
    },
    /// An element symbol that is not in the table.
    #[error("{0} is not an element")]
    Element(String),
    /// The crystal is not well formed.
    #[error("the crystal is not well formed: {0}")]
    Crystal(String),
    /// The supercell or the constants are not well formed.
    #[error("the constants are not well formed: {0}")]
    Constants(String),
    /// An eigenproblem could not be solved.
    #[error("an eigenproblem could not be solved: {0}")]
    Eigenproblem(String),
    /// A symmetry operation does not map the crystal onto itself.
    #[error("operation {operation} does not map atom {atom} onto an atom")]
    NotSymmetric {
        /// Index of the operation.
        operation: usize,
        /// Index of the atom.
        atom: usize,
    },
}
