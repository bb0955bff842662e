//! The lowest branch at the wave vectors that the supercell samples exactly, each with its bracket.
//!
//! These are what members of a convergence series have in common: nothing is interpolated, so that a change along a series
//! is a change of the constants.

use tarehouse_physics::units::wavenumber_per_cm;

use crate::report::LowestBranch;
use crate::spectra::{PointSpectrum, mean_and_deviation};
use crate::workup::Workup;

/// Most points that a report lists, in the order of the mesh.
const POINTS_MAX: usize = 64;

/// The lowest branch at every inequivalent commensurate point, the rigid translations at Γ left out.
pub(crate) fn lowest(workup: &Workup<'_>, spectra: &[PointSpectrum]) -> Vec<LowestBranch> {
    let points = workup.mesh.points().iter().zip(spectra);
    points
        .filter(|(point, _)| point.commensurate)
        .filter_map(|(point, spectrum)| {
            let eigenvalue = *spectrum.eigenvalues.first()?;
            let q = [point.q.x, point.q.y, point.q.z];
            let half_width = workup.limits.bracket.draw_multiple * spread(spectrum);
            Some(LowestBranch {
                q,
                wavenumber_per_cm: wavenumber_per_cm(eigenvalue),
                lower_per_cm: wavenumber_per_cm(eigenvalue - half_width),
                upper_per_cm: wavenumber_per_cm(eigenvalue + half_width),
            })
        })
        .take(POINTS_MAX)
        .collect()
}

/// Standard deviation of the lowest eigenvalue under the noise of the upload, eV/Å²/u.
fn spread(spectrum: &PointSpectrum) -> f64 {
    if let Some(branch) = spectrum.soft.iter().find(|branch| branch.branch == 0) {
        return branch.spread;
    }
    let drawn: Vec<f64> = spectrum
        .drawn
        .iter()
        .filter_map(|draw| draw.first().copied())
        .collect();
    mean_and_deviation(&drawn).1
}
