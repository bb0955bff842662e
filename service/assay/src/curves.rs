//! Curves for drawing: density of states with its rigid-molecule part, and the decay of the constants.

use tarehouse_physics::density_of_states::{BranchMesh, DensityOfStates};
use tarehouse_physics::units::wavenumber_per_cm;

use crate::checks::reach::decay_curve;
use crate::report::Curves;
use crate::spectra::{GAMMA, PointSpectrum};
use crate::workup::Workup;

/// All curves of a report.
pub(crate) fn curves(workup: &Workup<'_>, spectra: &[PointSpectrum]) -> Curves {
    let mut curves = Curves::default();
    decay_curve(workup, &mut curves);
    density_of_states(workup, spectra, &mut curves);
    curves
}

fn density_of_states(workup: &Workup<'_>, spectra: &[PointSpectrum], curves: &mut Curves) {
    let by_point: Vec<Vec<(f64, f64)>> = spectra.iter().enumerate().map(branches).collect();
    let all = || by_point.iter().flatten().map(|pair| pair.0);
    let lowest = all().fold(0.0, f64::min);
    let highest = all().fold(0.0, f64::max);
    let width = workup.limits.curves.dos_bin_per_cm;
    let start = (lowest / width).floor() * width;
    let mut edges = vec![start];
    while edges.last().is_some_and(|edge| *edge <= highest) {
        edges.push(start + width * edges.len() as f64);
    }
    let mesh = &workup.mesh;
    let full: Vec<&(f64, f64)> = (0..mesh.point_count())
        .flat_map(|p| &by_point[mesh.representative(p)])
        .collect();
    let wavenumbers: Vec<f64> = full.iter().map(|pair| pair.0).collect();
    let external: Vec<f64> = full.iter().map(|pair| pair.1).collect();
    let reciprocal = workup.crystal.reciprocal();
    let density = |weights: Option<&[f64]>| {
        let branches = BranchMesh {
            divisions: mesh.divisions().map(|n| n as usize),
            branch_count: workup.dynamics.branch_count(),
            wavenumbers_per_cm: &wavenumbers,
            weights,
        };
        // Shapes and order are right by construction; a fault would leave the curve empty.
        DensityOfStates::of_mesh(&branches, &reciprocal, &edges)
            .map(|d| d.density_per_inverse_cm())
            .unwrap_or_default()
    };
    let per_unit = |values: Vec<f64>| {
        values
            .into_iter()
            .map(|x| x / workup.submission.formula_units())
            .collect()
    };
    curves.dos_total = per_unit(density(None));
    curves.dos_external = per_unit(density(Some(&external)));
    curves.dos_wavenumber_per_cm = edges.windows(2).map(|e| 0.5 * (e[0] + e[1])).collect();
}

/// (wavenumber, rigid-molecule share) of all branches, ascending; at Γ with the rigid translations.
fn branches((point, spectrum): (usize, &PointSpectrum)) -> Vec<(f64, f64)> {
    let pairs = spectrum.eigenvalues.iter().zip(&spectrum.external);
    let mut branches: Vec<(f64, f64)> = pairs.map(|(x, e)| (wavenumber_per_cm(*x), *e)).collect();
    if point == GAMMA {
        branches.extend([(0.0, 1.0); 3]);
        branches.sort_by(|a, b| a.0.total_cmp(&b.0));
    }
    branches
}
