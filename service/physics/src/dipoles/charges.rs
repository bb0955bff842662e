//! Effective charges and permittivity brought onto the conditions that exact ones obey.

use nalgebra::Matrix3;

use crate::symmetry::SpaceGroup;

/// Effective charges, neutral and symmetric, with the permittivity.
#[derive(Debug, Clone, PartialEq)]
pub struct EffectiveCharges {
    /// Z[i,a,b] = ∂P_a/∂u_ib, e, by atom.
    pub charges: Vec<Matrix3<f64>>,
    /// Relative electronic permittivity, symmetric.
    pub permittivity: Matrix3<f64>,
}

impl EffectiveCharges {
    /// The nearest charges (Frobenius norm) that obey the space group, Z_i' = C Z_i Cᵀ, and sum to zero (Pick, Cohen &
    /// Martin, Phys. Rev. B 1, 910 (1970)), and the permittivity averaged over the group. Both projections commute.
    ///
    /// `charges` by atom of the crystal that the group acts on.
    pub fn projected(
        charges: &[Matrix3<f64>],
        permittivity: &Matrix3<f64>,
        group: &SpaceGroup,
    ) -> Self {
        let order = group.operations.len().max(1) as f64;
        let mut sums = vec![Matrix3::zeros(); charges.len()];
        let mut medium = Matrix3::zeros();
        for op in &group.operations {
            let rotated = |tensor: &Matrix3<f64>| op.cartesian * tensor * op.cartesian.transpose();
            for (charge, &image) in charges.iter().zip(&op.permutation) {
                sums[image] += rotated(charge) / order;
            }
            medium += rotated(&((permittivity + permittivity.transpose()) * 0.5)) / order;
        }
        let mean = sums.iter().sum::<Matrix3<f64>>() / charges.len().max(1) as f64;
        Self {
            charges: sums.into_iter().map(|charge| charge - mean).collect(),
            permittivity: medium,
        }
    }
}

/// |Σ_i Z_i| over Σ_i |Z_i| (Frobenius norms), from 0 to 1: how far charges are from neutral; zero where there are none.
pub fn neutrality_residual(charges: &[Matrix3<f64>]) -> f64 {
    let total: f64 = charges.iter().map(Matrix3::norm).sum();
    if total > 0.0 {
        charges.iter().sum::<Matrix3<f64>>().norm() / total
    } else {
        0.0
    }
}
