//! Reference values beside the truth: how deep an instability is for one upload, and how large aliasing is.

use serde::Serialize;
use tarehouse_demo_data::noise::Disturbance;
use tarehouse_physics::dynamics::{Dynamics, Sharing};
use tarehouse_physics::gamma_point::GammaCorrection;
use tarehouse_physics::images::PairImages;
use tarehouse_physics::long_wave::AcousticMatrix;
use tarehouse_physics::projection::projected;
use tarehouse_physics::qmesh::QMesh;
use tarehouse_physics::units::{EV_TO_KJ_PER_MOL, wavenumber_per_cm};
use tarehouse_physics::{ForceConstants, vibrations};

use crate::judgement::BenchError;
use crate::judgement::exact::{Exact, TIE_ANG, diagonal, group_of};
use crate::judgement::uploads::Case;

/// Spacing of the service's own mesh, Å⁻¹: wave vectors that every examination looks at.
const SERVICE_SPACING_PER_ANG: f64 = 0.20;
/// Up to this many inequivalent points the mesh of an instability is twice as fine as the service's.
const DOUBLED_POINTS_MAX: usize = 700;
/// Draws of noise for σ_λ.
const DRAWS: u64 = 8;
/// A genuine instability is decidable from this many σ_λ on.
const DECIDABLE: f64 = 5.0;
/// Wave vectors between sampled ones that are looked at, the softest first.
const BETWEEN: usize = 6;
/// Temperature of the widths that are compared, K.
const WIDTH_TEMPERATURE_K: f64 = 300.0;
/// What a soft mode is lifted to where two interpolations are compared, eV/Å²/u.
const LIFTED: f64 = 1e-6;

/// A genuine instability at its most decidable wave vector.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Depth {
    /// Fractional wave vector.
    pub q: [f64; 3],
    /// Exact eigenvalue, eV/Å²/u.
    pub eigenvalue: f64,
    /// Its standard deviation under the noise of the upload.
    pub sigma: f64,
    /// Its alias scale; zero at commensurate wave vectors.
    pub alias: f64,
    /// Whether it fits the supercell.
    pub commensurate: bool,
    /// Whether the service's own mesh holds it.
    pub on_service_mesh: bool,
    /// Eigenvalue interpolated from the folded constants without noise: where it is positive, folding has left no trace.
    pub interpolated: f64,
}

/// Errors of the free energy of noise-free constants at 300 K, kJ/mol per molecule.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Aliasing {
    /// |F(other sharing) − F(nearest images)|.
    pub sharing: f64,
    /// F of the folded constants less F of the unfolded ones, both on the service's mesh.
    pub folding: f64,
    /// F of the unfolded constants on the service's mesh less the truth; the long-wave limit is that of the folded ones.
    pub mesh: f64,
}

/// Place of 300 K among the temperatures.
const AT_300_K: usize = 2;

/// How far the free energy of the exact constants depends on the way images share them.
///
/// # Errors
/// [`BenchError`].
pub fn alias(case: &Case<'_>) -> Result<Aliasing, BenchError> {
    let (crystal, exact) = (case.member.exact.crystal(), &case.member.exact);
    let supercell = diagonal(case.multiples)?;
    let group = group_of(crystal)?;
    let images = PairImages::find(crystal, &supercell, TIE_ANG);
    let folded = exact.folded(&supercell)?;
    let dynamics = match group.inversion() {
        Some(inversion) => Dynamics::with_inversion(crystal, &folded, &images, inversion),
        None => Dynamics::new(crystal, &folded, &images),
    };
    let eigen = |error: tarehouse_physics::EigenError| BenchError::Eigen(error.to_string());
    let mesh = QMesh::standard(crystal, &supercell, &group, SERVICE_SPACING_PER_ANG);
    let acoustic = AcousticMatrix::new(&dynamics).map_err(eigen)?;
    let gamma = GammaCorrection::new(&acoustic, crystal, mesh.divisions(), 0.03);
    let term = vibrations::gamma_term(&gamma, WIDTH_TEMPERATURE_K);
    let mut energies = [0.0; 2];
    for (slot, sharing) in energies
        .iter_mut()
        .zip([Sharing::Nearest, Sharing::InversePower])
    {
        let mut spectrum = Vec::with_capacity(mesh.points().len());
        for (index, point) in mesh.points().iter().enumerate() {
            let values = if index == 0 {
                acoustic.optical_modes().eigenvalues
            } else {
                let form = dynamics.form(&point.q, sharing);
                form.eigenvalues(dynamics.branch_count()).map_err(eigen)?
            };
            spectrum.push(values.into_iter().map(|x| x.max(LIFTED)).collect());
        }
        *slot = vibrations::of_mesh(&mesh, &spectrum, term, WIDTH_TEMPERATURE_K).free_energy;
    }
    let mut unfolded = Vec::with_capacity(mesh.points().len());
    for (index, point) in mesh.points().iter().enumerate() {
        unfolded.push(if index == 0 {
            acoustic.optical_modes().eigenvalues
        } else {
            exact.eigenvalues(&point.q)?
        });
    }
    let unfolded = vibrations::of_mesh(&mesh, &unfolded, term, WIDTH_TEMPERATURE_K).free_energy;
    let to_kj = EV_TO_KJ_PER_MOL / case.member.model.molecule_count() as f64;
    let truth = case.member.truth.as_ref();
    let truth = truth.map_or(f64::NAN, |t| t.free_energy_kj_per_mol[AT_300_K]);
    Ok(Aliasing {
        sharing: (energies[1] - energies[0]).abs() * to_kj,
        folding: (energies[0] - unfolded) * to_kj,
        mesh: unfolded * to_kj - truth,
    })
}

fn margin(depth: &Depth) -> f64 {
    depth.eigenvalue + DECIDABLE * depth.sigma + depth.alias
}

/// Whether one upload can show it: deeper than five σ_λ, and than its alias scale where nothing is sampled.
pub fn is_decidable(depth: &Depth) -> bool {
    margin(depth) < 0.0
}

/// The most decidable soft mode of an unstable crystal, seen through a supercell with noise.
///
/// # Errors
/// [`BenchError`].
pub fn deepest(
    exact: &Exact,
    multiples: [i64; 3],
    noise: &Disturbance,
    key: u64,
) -> Result<Option<Depth>, BenchError> {
    let crystal = exact.crystal();
    let supercell = diagonal(multiples)?;
    let group = group_of(crystal)?;
    let coarse = QMesh::standard(crystal, &supercell, &group, SERVICE_SPACING_PER_ANG);
    let divisions = coarse.divisions();
    let doubled = QMesh::with_divisions(divisions.map(|n| 2 * n), &supercell, &group);
    let mesh = if doubled.points().len() <= DOUBLED_POINTS_MAX {
        doubled
    } else {
        coarse
    };
    let mut soft = Vec::new();
    for (index, point) in mesh.points().iter().enumerate() {
        let values = exact.eigenvalues(&point.q)?;
        // At Γ three values are zero: what lies clearly below is optical.
        let value = values.first().copied().unwrap_or_default();
        let limit = if index == 0 { -1e-7 } else { 0.0 };
        if value < limit {
            soft.push((value, *point));
        }
    }
    soft.sort_by(|a, b| a.0.total_cmp(&b.0));
    let sampled = soft.iter().find(|(_, point)| point.commensurate);
    let between = soft.iter().filter(|(_, point)| !point.commensurate);
    let images = PairImages::find(crystal, &supercell, TIE_ANG);
    let folded = exact.folded(&supercell)?;
    let dynamics = Dynamics::new(crystal, &folded, &images);
    let mut draws = Vec::new();
    for k in 0..DRAWS {
        let noisy = noise.apply(crystal, &folded, key.wrapping_add(k))?;
        let error = difference(&noisy, &folded);
        draws.push(Dynamics::new(crystal, &projected(&error, &group), &images));
    }
    let mut best: Option<Depth> = None;
    for (eigenvalue, point) in sampled.into_iter().chain(between.take(BETWEEN)) {
        let modes = dynamics
            .modes(&point.q)
            .map_err(|error| BenchError::Eigen(error.to_string()))?;
        let vector = modes.vector(0);
        let shift = |d: &Dynamics, sharing| d.form(&point.q, sharing).expectation(vector);
        let squares: f64 = draws
            .iter()
            .map(|draw| shift(draw, Sharing::Nearest).powi(2))
            .sum();
        let alias = if point.commensurate {
            0.0
        } else {
            (shift(&dynamics, Sharing::Nearest) - shift(&dynamics, Sharing::InversePower)).abs()
        };
        let on_coarse = (0..3).all(|c| {
            let scaled = point.q[c] * f64::from(divisions[c]);
            (scaled - scaled.round()).abs() < 1e-9
        });
        let depth = Depth {
            q: point.q.into(),
            eigenvalue: *eigenvalue,
            sigma: (squares / draws.len() as f64).sqrt(),
            alias,
            commensurate: point.commensurate,
            on_service_mesh: on_coarse,
            interpolated: modes.eigenvalues.first().copied().unwrap_or_default(),
        };
        if best.as_ref().is_none_or(|b| margin(&depth) < margin(b)) {
            best = Some(depth);
        }
    }
    Ok(best)
}

fn difference(left: &ForceConstants, right: &ForceConstants) -> ForceConstants {
    left.map_blocks(|k, block| block - right.blocks()[k])
}

/// A depth in words.
pub fn depth_words(depth: &Depth) -> String {
    format!(
        "exact {:.1} cm⁻¹ at {:.3?} ({}{}): λ {:.2e}, interpolated {:.2e}, σ_λ {:.1e}, a {:.1e} eV/Å²/u",
        wavenumber_per_cm(depth.eigenvalue),
        depth.q,
        if depth.commensurate {
            "sampled"
        } else {
            "between"
        },
        if depth.on_service_mesh {
            ""
        } else {
            ", beside the service's mesh"
        },
        depth.eigenvalue,
        depth.interpolated,
        depth.sigma,
        depth.alias
    )
}
