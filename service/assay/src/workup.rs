//! What all checks look at, computed once: space group, projected constants, mesh, modes, noise.

use nalgebra::Vector3;
use rayon::prelude::*;
use tarehouse_physics::dynamics::{Dynamics, MatrixForm, Modes, Sharing};
use tarehouse_physics::gamma_point::GammaCorrection;
use tarehouse_physics::images::{PairImages, shortest_supercell_vector_ang};
use tarehouse_physics::long_wave::AcousticMatrix;
use tarehouse_physics::molecules::{Molecules, acoustic_overlap};
use tarehouse_physics::projection::projected;
use tarehouse_physics::qmesh::QMesh;
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_physics::units::{eigenvalue_of_wavenumber, wavenumber_per_cm};
use tarehouse_physics::{Crystal, ForceConstants};

use crate::effective::effective_eigenvalue;
use crate::noise::NoiseModel;
use crate::policy::Limits;
use crate::submission::Submission;
use crate::{ExamineError, Progress};

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
        let modes = raw.modes(&Vector3::zeros()).map_err(eigen_error("raw modes at Γ"))?;
        let overlap = |b: usize| acoustic_overlap(crystal.masses_u(), modes.vector(b));
        let mut ranked: Vec<(f64, usize)> =
            (0..modes.eigenvalues.len()).map(|b| (overlap(b), b)).collect();
        ranked.sort_by(|a, b| b.0.total_cmp(&a.0));
        let rigid: Vec<usize> = ranked.iter().take(3).map(|pair| pair.1).collect();
        let (mut acoustic, mut optical) = (Vec::new(), Vec::new());
        for (branch, value) in modes.eigenvalues.iter().enumerate() {
            if rigid.contains(&branch) { acoustic.push(*value) } else { optical.push(*value) }
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
        Err(error) => (SpaceGroup::trivial(&submission.crystal), Some(error.to_string())),
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
        let dynamics = dynamics_of(&crystal, &projected, &images, &group);
        let raw_dynamics = Dynamics::new(&crystal, constants, &images);
        let acoustic = AcousticMatrix::new(&dynamics).map_err(eigen_error("long-wave limit"))?;
        let mesh =
            QMesh::standard(&crystal, supercell, &group, limits.mesh.spacing_per_angstrom);
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
        dynamics_of(&self.crystal, constants, &self.images, &self.group)
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
    move |error| ExamineError::Eigenproblem { during, detail: error.to_string() }
}

/// The modes of one inequivalent point, and what the noise says about them.
pub(crate) struct PointSpectrum {
    /// Eigenvalues of the projected constants, ascending; at Γ without the rigid translations.
    pub(crate) eigenvalues: Vec<f64>,
    /// Share of rigid-molecule motion, by branch.
    pub(crate) external: Vec<f64>,
    /// Eigenvalues of the raw constants, ascending; at Γ without the rigid translations.
    pub(crate) raw: Vec<f64>,
    /// Branches below the soft limit, ascending.
    pub(crate) soft: Vec<SoftBranch>,
    /// Eigenvalues with the soft ones replaced by what they contribute with; ascending order is not kept.
    pub(crate) effective: Vec<f64>,
    /// The same for each draw around the null.
    pub(crate) drawn: Vec<Vec<f64>>,
    /// The same for the other sharing of the images.
    pub(crate) other_sharing: Vec<f64>,
}

/// One soft mode with its evidence.
pub(crate) struct SoftBranch {
    pub(crate) branch: usize,
    pub(crate) vector: Vec<tarehouse_physics::c64>,
    /// First-order standard deviation of λ under projected noise.
    pub(crate) sigma: f64,
    /// Standard deviation used: the larger of the first-order one and the spread of the null draws.
    pub(crate) spread: f64,
    /// Mean of λ under the null.
    pub(crate) null_mean: f64,
    /// |e†(D_strict − D_soft)e|: zero at commensurate wave vectors.
    pub(crate) alias: f64,
}

impl SoftBranch {
    /// Scale in which λ is uncertain: noise and aliasing together.
    fn uncertainty(&self, smallest: f64) -> f64 {
        self.spread.hypot(self.alias).max(smallest)
    }
}

/// Spectra of all inequivalent points, in the order of the mesh.
pub(crate) fn spectra(
    workup: &Workup<'_>,
    draws: &[Dynamics],
    progress: &dyn Progress,
) -> Result<Vec<PointSpectrum>, ExamineError> {
    let total = workup.mesh.points().len();
    let done = std::sync::atomic::AtomicUsize::new(0);
    progress.advance("modes", 0, total);
    (0..total)
        .into_par_iter()
        .map(|point| {
            let spectrum = point_spectrum(workup, draws, point)?;
            let finished = done.fetch_add(1, std::sync::atomic::Ordering::Relaxed) + 1;
            progress.advance("modes", finished, total);
            Ok(spectrum)
        })
        .collect()
}

/// The point Γ is first on every mesh.
pub(crate) const GAMMA: usize = 0;

fn point_spectrum(
    workup: &Workup<'_>,
    draws: &[Dynamics],
    point: usize,
) -> Result<PointSpectrum, ExamineError> {
    let q = workup.mesh.points()[point].q;
    let failed = eigen_error("modes");
    let order = workup.dynamics.branch_count();
    let form = workup.dynamics.form(&q, Sharing::Nearest);
    let modes = if point == GAMMA {
        workup.acoustic.optical_modes()
    } else {
        workup.dynamics.modes_of(&form).map_err(&failed)?
    };
    let external = (0..modes.eigenvalues.len())
        .map(|b| workup.molecules.external_fraction(&workup.crystal, &q, modes.vector(b)))
        .collect();
    let raw = if point == GAMMA {
        workup.raw_gamma.optical.clone()
    } else {
        workup.raw_dynamics.eigenvalues(&q).map_err(&failed)?
    };
    let noise: Vec<MatrixForm> = draws.iter().map(|d| d.form(&q, Sharing::Nearest)).collect();
    let other = workup.dynamics.form(&q, Sharing::InversePower);
    let smallest = rounding_of(&modes);
    let mut soft = soft_branches(workup, &modes, &form, &noise, &other, smallest);
    let null = null_form(workup, &form, &modes, &soft, smallest);
    let mut shifted: Vec<Vec<f64>> = Vec::with_capacity(noise.len());
    for draw in &noise {
        let mut values = null.clone().plus(draw, 1.0).eigenvalues(order).map_err(&failed)?;
        drop_rigid(point, &mut values);
        shifted.push(values);
    }
    for branch in &mut soft {
        refine(branch, &shifted);
    }
    let effective = effective_of(&modes.eigenvalues, &soft, smallest);
    // Draws may turn the lowest mode soft even where it is not soft itself.
    let lowest = branch_evidence(workup, &modes, 0, &form, &noise, &other, smallest);
    let scale =
        soft.iter().chain([&lowest]).map(|b| b.uncertainty(smallest)).fold(smallest, f64::max);
    let mut other_sharing = other.eigenvalues(order).map_err(&failed)?;
    drop_rigid(point, &mut other_sharing);
    let drawn = shifted.into_iter().map(|values| lifted(values, scale)).collect();
    let other_sharing = lifted(other_sharing, scale);
    let eigenvalues = modes.eigenvalues;
    Ok(PointSpectrum { eigenvalues, external, raw, soft, effective, drawn, other_sharing })
}

/// Size of rounding errors in the eigenvalues of a matrix with this spectrum.
fn rounding_of(modes: &Modes) -> f64 {
    let largest = modes.eigenvalues.iter().fold(0.0_f64, |m, x| m.max(x.abs()));
    largest * modes.eigenvalues.len() as f64 * f64::EPSILON
}

fn soft_branches(
    workup: &Workup<'_>,
    modes: &Modes,
    form: &MatrixForm,
    noise: &[MatrixForm],
    other: &MatrixForm,
    smallest: f64,
) -> Vec<SoftBranch> {
    let below = workup.soft_below();
    (0..modes.eigenvalues.len())
        .take_while(|branch| modes.eigenvalues[*branch] < below)
        .map(|branch| branch_evidence(workup, modes, branch, form, noise, other, smallest))
        .collect()
}

fn branch_evidence(
    workup: &Workup<'_>,
    modes: &Modes,
    branch: usize,
    form: &MatrixForm,
    noise: &[MatrixForm],
    other: &MatrixForm,
    smallest: f64,
) -> SoftBranch {
    let vector = modes.vector(branch);
    let inner = workup.dynamics.to_form_basis(vector);
    let squares: f64 = noise.iter().map(|draw| draw.expectation(&inner).powi(2)).sum();
    let sigma = (squares / noise.len() as f64).sqrt().max(smallest);
    let alias = (form.expectation(&inner) - other.expectation(&inner)).abs();
    SoftBranch {
        branch,
        vector: vector.to_vec(),
        sigma,
        spread: sigma,
        null_mean: 0.0,
        alias: if alias > 4.0 * smallest { alias } else { 0.0 },
    }
}

/// The null: the same matrix with every soft eigenvalue lifted to what it contributes with.
fn null_form(
    workup: &Workup<'_>,
    form: &MatrixForm,
    modes: &Modes,
    soft: &[SoftBranch],
    smallest: f64,
) -> MatrixForm {
    soft.iter().fold(form.clone(), |null, branch| {
        let value = modes.eigenvalues[branch.branch];
        let lift = effective_eigenvalue(value, branch.uncertainty(smallest)) - value;
        null.plus_outer(&workup.dynamics.to_form_basis(&branch.vector), lift)
    })
}

/// At Γ, takes the three rigid translations out of a list of eigenvalues: those nearest to zero in a matrix that is free
/// of them by projection.
fn drop_rigid(point: usize, values: &mut Vec<f64>) {
    if point != GAMMA {
        return;
    }
    for _ in 0..3 {
        let nearest = (0..values.len()).min_by(|a, b| values[*a].abs().total_cmp(&values[*b].abs()));
        if let Some(index) = nearest {
            values.remove(index);
        }
    }
}

/// Mean and spread of the branch under the null draws.
fn refine(branch: &mut SoftBranch, shifted: &[Vec<f64>]) {
    let values: Vec<f64> = shifted.iter().filter_map(|v| v.get(branch.branch).copied()).collect();
    let (mean, deviation) = mean_and_deviation(&values);
    branch.null_mean = mean;
    branch.spread = branch.sigma.max(deviation);
}

/// Mean and standard deviation (n − 1) of a list; zeros for fewer than two values.
pub(crate) fn mean_and_deviation(values: &[f64]) -> (f64, f64) {
    if values.len() < 2 {
        return (values.first().copied().unwrap_or_default(), 0.0);
    }
    let count = values.len() as f64;
    let mean = values.iter().sum::<f64>() / count;
    let variance = values.iter().map(|x| (x - mean).powi(2)).sum::<f64>() / (count - 1.0);
    (mean, variance.sqrt())
}

fn effective_of(eigenvalues: &[f64], soft: &[SoftBranch], smallest: f64) -> Vec<f64> {
    let mut effective: Vec<f64> = eigenvalues.iter().map(|x| x.max(smallest)).collect();
    for branch in soft {
        let value = eigenvalues[branch.branch];
        effective[branch.branch] = effective_eigenvalue(value, branch.uncertainty(smallest));
    }
    effective
}

/// Eigenvalues with negative ones lifted to what they contribute with at this uncertainty.
fn lifted(values: Vec<f64>, scale: f64) -> Vec<f64> {
    values
        .into_iter()
        .map(|x| if x < scale { effective_eigenvalue(x, scale) } else { x })
        .collect()
}

/// Signed wavenumber of the lowest mode of a spectrum, cm⁻¹.
pub(crate) fn lowest_wavenumber(eigenvalues: &[f64]) -> f64 {
    wavenumber_per_cm(eigenvalues.iter().copied().fold(f64::INFINITY, f64::min))
}

/// A wave vector for people.
pub(crate) fn show_q(q: &Vector3<f64>) -> String {
    format!("q = ({})", q.iter().map(|x| show_fraction(*x)).collect::<Vec<_>>().join(", "))
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
