//! What all checks look at, computed once: space group, projected constants, mesh, modes, noise.

use nalgebra::Vector3;
use tarehouse_physics::dynamics::Dynamics;
use tarehouse_physics::gamma_point::GammaCorrection;
use tarehouse_physics::images::{PairImages, shortest_supercell_vector_ang};
use tarehouse_physics::long_wave::AcousticMatrix;
use tarehouse_physics::molecules::{Molecules, acoustic_overlap};
use tarehouse_physics::projection::projected;
use tarehouse_physics::qmesh::QMesh;
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_physics::units::{eigenvalue_of_wavenumber, wavenumber_per_cm};
use tarehouse_physics::{Crystal, ForceConstants};

use crate::ExamineError;
use crate::noise::NoiseModel;
use crate::polar::{Polar, with_dipoles};
use crate::policy::Limits;
use crate::submission::Submission;

/// Everything derived from a submission before it is judged.
pub(crate) struct Workup<'a> {
    pub(crate) submission: &'a Submission,
    pub(crate) limits: &'a Limits,
    /// The whole group, as found; the identity where none was found.
    pub(crate) group: SpaceGroup,
    /// Why no group was found.
    pub(crate) group_error: Option<String>,
    /// With positions symmetrised.
    pub(crate) crystal: Crystal,
    pub(crate) images: PairImages,
    pub(crate) molecules: Molecules,
    /// After T, Q and G.
    pub(crate) projected: ForceConstants,
    /// Where effective charges are given.
    pub(crate) polar: Option<Polar>,
    pub(crate) dynamics: Dynamics,
    pub(crate) raw_dynamics: Dynamics,
    pub(crate) acoustic: AcousticMatrix,
    pub(crate) gamma: GammaCorrection,
    pub(crate) mesh: QMesh,
    pub(crate) noise: NoiseModel,
    pub(crate) raw_gamma: RawGamma,
}

/// Modes of the raw constants at Γ, told apart by overlap with the rigid translations.
pub(crate) struct RawGamma {
    /// The three of largest overlap, eV/Å²/u, ascending.
    pub(crate) acoustic: [f64; 3],
    /// All others, ascending.
    pub(crate) optical: Vec<f64>,
}

impl RawGamma {
    fn new(crystal: &Crystal, raw: &Dynamics) -> Result<Self, ExamineError> {
        let modes = raw
            .modes(&Vector3::zeros())
            .map_err(eigen_error("raw modes at Γ"))?;
        let overlap = |b: usize| acoustic_overlap(crystal.masses_u(), modes.vector(b));
        let mut ranked: Vec<(f64, usize)> = (0..modes.eigenvalues.len())
            .map(|b| (overlap(b), b))
            .collect();
        ranked.sort_by(|a, b| b.0.total_cmp(&a.0));
        let rigid: Vec<usize> = ranked.iter().take(3).map(|pair| pair.1).collect();
        let (mut acoustic, mut optical) = (Vec::new(), Vec::new());
        for (branch, value) in modes.eigenvalues.iter().enumerate() {
            if rigid.contains(&branch) {
                acoustic.push(*value);
            } else {
                optical.push(*value);
            }
        }
        let acoustic = std::array::from_fn(|k| acoustic.get(k).copied().unwrap_or_default());
        Ok(Self { acoustic, optical })
    }
}

/// The constants that frequencies are made from: those of the upload after pair symmetry, translation sums and space
/// group, with the crystal they belong to.
pub fn projected_constants(submission: &Submission, policy: &crate::Policy) -> ForceConstants {
    let (group, _) = find_group(submission, &policy.limits);
    projected(&submission.constants, &group)
}

fn find_group(submission: &Submission, limits: &Limits) -> (SpaceGroup, Option<String>) {
    let tolerance = limits.structure.symmetry_tolerance_angstrom;
    match SpaceGroup::find(&submission.crystal, tolerance) {
        Ok(group) => (group, None),
        Err(error) => (
            SpaceGroup::trivial(&submission.crystal),
            Some(error.to_string()),
        ),
    }
}

impl<'a> Workup<'a> {
    pub(crate) fn new(
        submission: &'a Submission,
        limits: &'a Limits,
    ) -> Result<Self, ExamineError> {
        let (group, group_error) = find_group(submission, limits);
        let crystal = group.symmetrised(&submission.crystal);
        let constants = &submission.constants;
        let supercell = constants.supercell();
        let tie_tolerance = limits.structure.tie_tolerance_angstrom;
        let images = PairImages::find(&crystal, supercell, tie_tolerance);
        let molecules = Molecules::find(&crystal, limits.structure.bond_tolerance_angstrom);
        let projected = projected(constants, &group);
        let polar = Polar::new(submission, &crystal, &group);
        let dynamics = dynamics_of(&crystal, &projected, &images, &group);
        let dynamics = with_dipoles(polar.as_ref(), dynamics);
        let raw_dynamics = Dynamics::new(&crystal, constants, &images);
        let raw_dynamics = with_dipoles(polar.as_ref(), raw_dynamics);
        let acoustic = AcousticMatrix::new(&dynamics).map_err(eigen_error("long-wave limit"))?;
        let mesh = QMesh::standard(
            &crystal,
            supercell,
            &group,
            limits.mesh.spacing_per_angstrom,
        );
        let floor = limits.acoustic.stiffness_floor;
        let gamma = GammaCorrection::new(&acoustic, &crystal, mesh.divisions(), floor);
        let raw_gamma = RawGamma::new(&crystal, &raw_dynamics)?;
        let noise = NoiseModel::measure(submission, &group, &crystal, &images, limits);
        Ok(Self {
            submission,
            limits,
            group,
            group_error,
            crystal,
            images,
            molecules,
            projected,
            polar,
            dynamics,
            raw_dynamics,
            acoustic,
            gamma,
            mesh,
            noise,
            raw_gamma,
        })
    }

    /// Noise draws as dynamics of the same crystal.
    pub(crate) fn draw_dynamics(&self) -> Vec<Dynamics> {
        let draws = u64::try_from(self.limits.soft_modes.noise_draws).unwrap_or(u64::MAX);
        (0..draws)
            .map(|index| {
                let draw = self.noise.draw(index, &self.projected, &self.group);
                dynamics_of(&self.crystal, &draw, &self.images, &self.group)
            })
            .collect()
    }

    /// Eigenvalues below this are soft, eV/Å²/u.
    pub(crate) fn soft_below(&self) -> f64 {
        eigenvalue_of_wavenumber(self.limits.soft_modes.wavenumber_per_cm)
    }

    /// Whether the supercell is one molecule wide in some direction: half its shortest vector is below the shortest
    /// distance between molecular centres, so that an acoustic branch along it is never sampled.
    pub(crate) fn is_narrow(&self) -> bool {
        0.5 * self.shortest_supercell_vector_ang() < self.molecules.nearest_centre_distance_ang()
    }

    pub(crate) fn shortest_supercell_vector_ang(&self) -> f64 {
        shortest_supercell_vector_ang(&self.crystal, self.projected.supercell())
    }

    /// Dynamics of other constants of the same crystal, in real form where the projected ones have one.
    pub(crate) fn dynamics_of(&self, constants: &ForceConstants) -> Dynamics {
        let dynamics = dynamics_of(&self.crystal, constants, &self.images, &self.group);
        with_dipoles(self.polar.as_ref(), dynamics)
    }
}

fn dynamics_of(
    crystal: &Crystal,
    constants: &ForceConstants,
    images: &PairImages,
    group: &SpaceGroup,
) -> Dynamics {
    // The inversion keeps every supercell lattice.
    match group.inversion() {
        Some(inversion) => Dynamics::with_inversion(crystal, constants, images, inversion),
        None => Dynamics::new(crystal, constants, images),
    }
}

pub(crate) fn eigen_error(
    during: &'static str,
) -> impl Fn(tarehouse_physics::EigenError) -> ExamineError {
    move |error| ExamineError::Eigenproblem {
        during,
        detail: error.to_string(),
    }
}

/// Signed wavenumber of the lowest mode of a spectrum, cm⁻¹.
pub(crate) fn lowest_wavenumber(eigenvalues: &[f64]) -> f64 {
    wavenumber_per_cm(eigenvalues.iter().copied().fold(f64::INFINITY, f64::min))
}

/// A wave vector for people.
pub(crate) fn show_q(q: &Vector3<f64>) -> String {
    format!(
        "q = ({})",
        q.iter()
            .map(|x| show_fraction(*x))
            .collect::<Vec<_>>()
            .join(", ")
    )
}

fn show_fraction(x: f64) -> String {
    const LARGEST_DENOMINATOR: u32 = 24;
    for denominator in 1..=LARGEST_DENOMINATOR {
        let scaled = x * f64::from(denominator);
        if (scaled - scaled.round()).abs() < 1e-9 {
            let numerator = scaled.round();
            return match denominator {
                1 => format!("{}", numerator + 0.0),
                _ => format!("{numerator}/{denominator}"),
            };
        }
    }
    format!("{x:.4}")
}
