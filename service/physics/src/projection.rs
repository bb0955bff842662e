//! Projection of force constants onto the conditions that exact constants obey.
//!
//! With A[l,i,j] the 3×3 blocks and l' = −l modulo the supercell:
//!
//! - T, pair symmetry: A[l,i,j] ← ½(A[l,i,j] + A[l',j,i]ᵀ).
//! - Q, translation sum over both indices: F = Σ_l A[l], A[l] ← A[l] − (row mean + column mean − mean of F)/L.
//! - G, space group: the average of C A Cᵀ over the operations that keep the supercell lattice.
//! - B, rotation sum (Born & Huang, Dynamical Theory of Crystal Lattices, 1954):
//!   ρ[i,a,k] = Σ_{l,j,b,c} A[l,i,j]_ab ε_kbc x_c(l,i,j) = 0, x the mean separation of the nearest images.
//!
//! T, Q and G are commuting orthogonal projectors, so that one pass of each is the joint minimal-norm projection; cost
//! O(L n² |G|). B is enforced inside their range by conjugate gradients on the multipliers of ρ.

use nalgebra::{Matrix3, Vector3};

use crate::crystal::Crystal;
use crate::force_constants::ForceConstants;
use crate::images::PairImages;
use crate::symmetry::SpaceGroup;

/// T: symmetric under exchange of the two atoms.
pub fn pair_symmetric(constants: &ForceConstants) -> ForceConstants {
    let (supercell, n) = (constants.supercell(), constants.atom_count());
    let mut blocks = Vec::with_capacity(constants.blocks().len());
    for cell in 0..supercell.cell_count() {
        let opposite = supercell.negative(cell);
        for i in 0..n {
            for j in 0..n {
                let partner = constants.block(opposite, j, i);
                blocks.push((constants.block(cell, i, j) + partner.transpose()) * 0.5);
            }
        }
    }
    constants.with_blocks(blocks)
}

/// Q: vanishing sums over the displaced and over the response atom.
pub fn translation_free(constants: &ForceConstants) -> ForceConstants {
    let (cells, n) = (constants.supercell().cell_count(), constants.atom_count());
    let mut folded = vec![Matrix3::zeros(); n * n];
    for (flat, block) in constants.blocks().iter().enumerate() {
        folded[flat % (n * n)] += block;
    }
    let scale = 1.0 / n as f64;
    let rows: Vec<Matrix3<f64>> = (0..n)
        .map(|i| (0..n).map(|j| folded[i * n + j]).sum::<Matrix3<f64>>() * scale)
        .collect();
    let columns: Vec<Matrix3<f64>> = (0..n)
        .map(|j| (0..n).map(|i| folded[i * n + j]).sum::<Matrix3<f64>>() * scale)
        .collect();
    let mean = rows.iter().sum::<Matrix3<f64>>() * scale;
    let blocks = constants
        .blocks()
        .iter()
        .enumerate()
        .map(|(flat, block)| {
            let (i, j) = (flat / n % n, flat % n);
            block - (rows[i] + columns[j] - mean) / cells as f64
        })
        .collect();
    constants.with_blocks(blocks)
}

/// G: invariant under the operations of `group` that keep the supercell lattice.
pub fn space_group_symmetric(constants: &ForceConstants, group: &SpaceGroup) -> ForceConstants {
    let (supercell, n) = (constants.supercell(), constants.atom_count());
    let group = group.keeping(supercell);
    let mut sums = vec![Matrix3::zeros(); constants.blocks().len()];
    for op in &group.operations {
        let transpose = op.cartesian.transpose();
        for cell in 0..supercell.cell_count() {
            let rotated = op.rotate(&supercell.translations()[cell]);
            for i in 0..n {
                for j in 0..n {
                    let (from, to) = (&op.shifts[i], &op.shifts[j]);
                    let image = std::array::from_fn(|c| rotated[c] + to[c] - from[c]);
                    let target = (supercell.index_of(&image) * n + op.permutation[i]) * n
                        + op.permutation[j];
                    sums[target] += op.cartesian * constants.block(cell, i, j) * transpose;
                }
            }
        }
    }
    let order = group.operations.len().max(1) as f64;
    constants.with_blocks(sums.into_iter().map(|sum| sum / order).collect())
}

/// T, Q and G together: the nearest constants (Frobenius norm) that obey all three.
pub fn projected(constants: &ForceConstants, group: &SpaceGroup) -> ForceConstants {
    translation_free(&space_group_symmetric(&pair_symmetric(constants), group))
}

/// Result of the rotation projection.
#[derive(Debug, Clone, PartialEq)]
pub struct RotationProjection {
    /// The nearest constants that obey T, Q, G and B.
    pub constants: ForceConstants,
    /// Conjugate-gradient steps taken.
    pub steps: usize,
    /// Norm of ρ left over the norm of ρ found.
    pub relative_residual: f64,
}

/// B inside the range of T, Q and G: solves (ρ P ρᵀ) μ = ρ A for the multipliers μ and returns A − P ρᵀ μ, with P the
/// joint projector of T, Q and G and A already projected by it.
///
/// Stops when ρ has fallen to `relative_tolerance` of its size or to its own rounding, or after `steps_max` steps. Cost
/// per step as `projected`.
pub fn rotation_free(
    constants: &ForceConstants,
    group: &SpaceGroup,
    crystal: &Crystal,
    images: &PairImages,
    relative_tolerance: f64,
    steps_max: usize,
) -> RotationProjection {
    let rotation = RotationSum::new(constants, crystal, images);
    let start = projected(constants, group);
    let target = rotation.apply(&start);
    let scale = norm(&target);
    let least = (relative_tolerance * scale).max(rotation.rounding(&start));
    let mut multipliers = vec![Vector3::zeros(); target.len()];
    let (mut residual, mut steps) = (target.clone(), 0);
    let mut preconditioned = rotation.precondition(&residual);
    let mut direction = preconditioned.clone();
    let mut product = dot(&residual, &preconditioned);
    while norm(&residual) > least && steps < steps_max && product > 0.0 {
        let spread = projected(&rotation.transposed(&direction, constants), group);
        let image = rotation.apply(&spread);
        let curvature = dot(&direction, &image);
        if curvature <= 0.0 {
            break;
        }
        let step = product / curvature;
        for k in 0..residual.len() {
            multipliers[k] += direction[k] * step;
            residual[k] -= image[k] * step;
        }
        preconditioned = rotation.precondition(&residual);
        let next = dot(&residual, &preconditioned);
        let ratio = next / product;
        for k in 0..direction.len() {
            direction[k] = preconditioned[k] + direction[k] * ratio;
        }
        product = next;
        steps += 1;
    }
    let change = projected(&rotation.transposed(&multipliers, constants), group);
    let blocks = start
        .blocks()
        .iter()
        .zip(change.blocks())
        .map(|(a, d)| a - d)
        .collect();
    let constants = start.with_blocks(blocks);
    let left = norm(&rotation.apply(&constants));
    let relative_residual = if scale > 0.0 { left / scale } else { 0.0 };
    RotationProjection {
        constants,
        steps,
        relative_residual,
    }
}

/// The linear map ρ from constants to rotation sums, and its transpose.
#[derive(Debug, Clone)]
pub struct RotationSum {
    atom_count: usize,
    /// Mean separations x, in the order of the blocks.
    separations: Vec<Vector3<f64>>,
    /// Inverse of Σ_{l,j} (|x|² 1 − x xᵀ) for each displaced atom: the diagonal blocks of ρρᵀ.
    inverse_inertia: Vec<Matrix3<f64>>,
}

impl RotationSum {
    /// Prepares the map for constants of this shape.
    pub fn new(constants: &ForceConstants, crystal: &Crystal, images: &PairImages) -> Self {
        let (cells, n) = (constants.supercell().cell_count(), constants.atom_count());
        let mut separations = Vec::with_capacity(cells * n * n);
        let mut inertia = vec![Matrix3::zeros(); n];
        for cell in 0..cells {
            for (i, sum) in inertia.iter_mut().enumerate() {
                for j in 0..n {
                    let x = images.mean_separation(crystal, cell, i, j);
                    *sum += Matrix3::identity() * x.norm_squared() - x * x.transpose();
                    separations.push(x);
                }
            }
        }
        let inverse_inertia = inertia
            .into_iter()
            .map(|sum| {
                // Below this share of the largest eigenvalue a direction carries no rotation (a lone line of atoms).
                let cutoff = 1e-10 * sum.norm();
                sum.pseudo_inverse(cutoff)
                    .unwrap_or_else(|_| Matrix3::zeros())
            })
            .collect();
        Self {
            atom_count: n,
            separations,
            inverse_inertia,
        }
    }

    /// ρ[i,a,·] as a vector over k, index 3i + a; eV/Å.
    pub fn apply(&self, constants: &ForceConstants) -> Vec<Vector3<f64>> {
        let n = self.atom_count;
        let mut sums = vec![Vector3::zeros(); 3 * n];
        for (flat, (block, x)) in constants.blocks().iter().zip(&self.separations).enumerate() {
            let i = flat / n % n;
            for a in 0..3 {
                // Σ_bc A_ab ε_kbc x_c = (A_a· × x)_k
                sums[3 * i + a] += block.row(a).transpose().cross(x);
            }
        }
        sums
    }

    /// Size of the rounding errors in ρ: below it lies nothing to be removed, and the equations have no solution.
    fn rounding(&self, constants: &ForceConstants) -> f64 {
        /// Rounding errors of a sum of products, in units of the root of the sum of their squares.
        const MULTIPLE: f64 = 8.0;
        let pairs = constants.blocks().iter().zip(&self.separations);
        let squares: f64 = pairs
            .map(|(block, x)| block.norm_squared() * x.norm_squared())
            .sum();
        MULTIPLE * f64::EPSILON * squares.sqrt()
    }

    fn transposed(&self, sums: &[Vector3<f64>], like: &ForceConstants) -> ForceConstants {
        let n = self.atom_count;
        let blocks = self
            .separations
            .iter()
            .enumerate()
            .map(|(flat, x)| {
                let i = flat / n % n;
                // Σ_kc μ_k ε_kbc x_c = (x × μ)_b
                Matrix3::from_rows(&std::array::from_fn::<_, 3, _>(|a| {
                    x.cross(&sums[3 * i + a]).transpose()
                }))
            })
            .collect();
        like.with_blocks(blocks)
    }

    fn precondition(&self, sums: &[Vector3<f64>]) -> Vec<Vector3<f64>> {
        sums.iter()
            .enumerate()
            .map(|(k, sum)| self.inverse_inertia[k / 3] * sum)
            .collect()
    }
}

fn dot(a: &[Vector3<f64>], b: &[Vector3<f64>]) -> f64 {
    a.iter().zip(b).map(|(x, y)| x.dot(y)).sum()
}

fn norm(a: &[Vector3<f64>]) -> f64 {
    dot(a, a).sqrt()
}
