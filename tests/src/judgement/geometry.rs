//! Uploads that need the anharmonic potential: forward differences, and geometries with residual forces.

use nalgebra::{DVector, Matrix3, SymmetricEigen, Vector3};
use rand::Rng;
use rand_distr::{Distribution, StandardNormal};
use tarehouse_demo_data::runs::{Run, forces};
use tarehouse_demo_data::{MolecularCrystal, RealSpaceConstants};
use tarehouse_physics::{ForceConstants, Supercell};

use crate::judgement::BenchError;
use crate::judgement::exact::{Exact, constants_of};
use crate::judgement::pool::Member;

/// Φ[l,i,j]_ab = −(F⁺ − F⁰)_jb / h from the anharmonic forces; `displacement` h in Å.
///
/// # Errors
/// [`BenchError`].
pub fn forward(
    model: &MolecularCrystal,
    supercell: &Supercell,
    displacement: f64,
) -> Result<ForceConstants, BenchError> {
    let n = model.atom_count();
    let rest = Run {
        atom: 0,
        vector: Vector3::zeros(),
    };
    let displaced = (0..3 * n).map(|k| {
        let mut vector = Vector3::zeros();
        vector[k % 3] = displacement;
        Run {
            atom: k / 3,
            vector,
        }
    });
    let runs: Vec<Run> = std::iter::once(rest).chain(displaced).collect();
    let found = forces(model, supercell, &runs)?;
    let blocks = (0..supercell.cell_count() * n * n)
        .map(|k| {
            let (l, i, j) = (k / (n * n), k / n % n, k % n);
            Matrix3::from_fn(|a, b| {
                -(found[1 + 3 * i + a][l * n + j][b] - found[0][l * n + j][b]) / displacement
            })
        })
        .collect();
    constants_of(supercell, n, blocks)
}

/// Curvatures below this (eV/Å²) are rigid translations.
const RIGID_BELOW: f64 = 1e-6;

/// A geometry in which a white residual force of the space group, of this rms, is left: u = H⁺ f.
///
/// # Errors
/// [`BenchError`].
pub fn unrelaxed(
    member: &Member,
    target_ev_per_ang: f64,
    rng: &mut impl Rng,
) -> Result<(MolecularCrystal, Exact), BenchError> {
    let n = member.atom_count();
    let operations = member.group.operations();
    let size = n / operations.len();
    let mut force = DVector::zeros(3 * n);
    for atom in 0..size {
        let drawn = Vector3::from_fn(|_, _| -> f64 { StandardNormal.sample(rng) });
        for (copy, operation) in operations.iter().enumerate() {
            let turned = operation.cartesian(member.model.cell()) * drawn;
            force
                .rows_mut(3 * (copy * size + atom), 3)
                .copy_from(&turned);
        }
    }
    let hessian = member.model.derivatives().hessian;
    let hessian = hessian.view((0, 0), (3 * n, 3 * n)).into_owned();
    let eigen = SymmetricEigen::new(hessian);
    let mut step = DVector::<f64>::zeros(3 * n);
    for (column, value) in eigen.eigenvectors.column_iter().zip(&eigen.eigenvalues) {
        if *value > RIGID_BELOW {
            step += column * (column.dot(&force) / value);
        }
    }
    let moved = |scale: f64| {
        let shift: Vec<Vector3<f64>> = (0..n)
            .map(|i| Vector3::from_fn(|c, _| scale * step[3 * i + c]))
            .collect();
        member.model.displaced(&shift)
    };
    let residual = |model: &MolecularCrystal| {
        let all = model.forces();
        (all.iter().map(Vector3::norm_squared).sum::<f64>() / n as f64).sqrt()
    };
    let mut scale = 1e-3;
    // The force is not linear in so soft a displacement: damped, or the steps would swing.
    for _ in 0..24 {
        scale *= (target_ev_per_ang / residual(&moved(scale)?)).powf(0.6);
    }
    let model = moved(scale)?;
    let exact = Exact::of(&RealSpaceConstants::of(&model)?);
    Ok((model, exact))
}
