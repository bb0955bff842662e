//! The next supercell worth computing: which axis to lengthen, how many atoms it takes, and whether it samples the wave
//! vectors of the clusters that are still open.

use nalgebra::Vector3;
use tarehouse_physics::Supercell;

use crate::workup::Workup;

/// A candidate with what it costs and how near it comes to the open wave vectors.
struct Candidate {
    axes: Vec<usize>,
    supercell: Supercell,
    /// Largest distance of an open wave vector from the nearest sampled one, Å⁻¹.
    miss_per_ang: f64,
}

/// Words that name the axis, the matrix and the atom count. `open` are wave vectors in fractional reciprocal coordinates.
pub(crate) fn advice(workup: &Workup<'_>, open: &[[f64; 3]]) -> String {
    let candidates = candidates(workup, open);
    let Some(best) = best(workup, candidates, open) else {
        return "use a larger supercell".to_owned();
    };
    let atoms = best.supercell.cell_count() * workup.crystal.atom_count();
    let axes: Vec<&str> = best
        .axes
        .iter()
        .map(|axis| ["first", "second", "third"][*axis])
        .collect();
    let vectors = if axes.len() == 1 { "vector" } else { "vectors" };
    let mut words = format!(
        "double the supercell along its {} {vectors}: {:?}, {atoms} atoms",
        axes.join(" and "),
        best.supercell.matrix()
    );
    if !open.is_empty() {
        let spacing = workup.limits.mesh.spacing_per_angstrom;
        if best.miss_per_ang < 1e-6 {
            words.push_str("; it samples the open clusters themselves and decides them");
        } else if best.miss_per_ang < spacing {
            words.push_str("; it samples wave vectors beside the open clusters");
        } else {
            words.push_str("; it narrows the open clusters without sampling them");
        }
    }
    words
}

/// The present supercell with one, two or three of its vectors doubled.
fn candidates(workup: &Workup<'_>, open: &[[f64; 3]]) -> Vec<Candidate> {
    let present = workup.projected.supercell();
    (1..8_usize)
        .filter_map(|subset| {
            let axes: Vec<usize> = (0..3).filter(|axis| subset >> axis & 1 == 1).collect();
            let mut matrix = *present.matrix();
            for axis in &axes {
                matrix[*axis] = matrix[*axis].map(|x| 2 * x);
            }
            let supercell = Supercell::with_default_translations(matrix).ok()?;
            let miss_per_ang = open
                .iter()
                .map(|q| distance_to_sampled(workup, &supercell, q))
                .fold(0.0, f64::max);
            Some(Candidate {
                axes,
                supercell,
                miss_per_ang,
            })
        })
        .collect()
}

/// Without open clusters the one that lengthens the shortest vector; else the smallest that samples them all, and failing
/// that the one that comes nearest for its size.
fn best(workup: &Workup<'_>, candidates: Vec<Candidate>, open: &[[f64; 3]]) -> Option<Candidate> {
    let vectors = workup.projected.supercell().vectors(workup.crystal.cell());
    let length = |axis: &usize| vectors.row(*axis).norm();
    let shortest = |c: &Candidate| c.axes.iter().map(length).fold(0.0, f64::max);
    let key = |c: &Candidate| {
        let size = c.supercell.cell_count() as f64;
        if open.is_empty() {
            (size, shortest(c))
        } else {
            (c.miss_per_ang, size)
        }
    };
    candidates.into_iter().min_by(|a, b| {
        let (a, b) = (key(a), key(b));
        a.0.total_cmp(&b.0).then(a.1.total_cmp(&b.1))
    })
}

/// Distance of a wave vector from the nearest commensurate one, Å⁻¹.
fn distance_to_sampled(workup: &Workup<'_>, supercell: &Supercell, q: &[f64; 3]) -> f64 {
    let reciprocal = workup.crystal.reciprocal();
    let q = Vector3::from(*q);
    supercell
        .commensurate_points()
        .iter()
        .map(|point| {
            let difference = (q - point).map(|x| x - x.round());
            reciprocal.tr_mul(&difference).norm()
        })
        .fold(f64::INFINITY, f64::min)
}
