//! The macroscopic field of long waves in a polar crystal: how it splits optical modes and stiffens acoustic ones.
//!
//! Near Γ the dipole–dipole part holds N_A(q̂) = κ n nᵀ, κ = (4πk/V)/(q̂εq̂), n_i = Z_iᵀq̂/√m_i (Cochran & Cowley, J. Phys.
//! Chem. Solids 23, 447 (1962)). By neutrality it acts on optical modes only, and being of rank one it needs no new
//! eigenproblem: with the optical eigenvalues d and n in their basis the eigenvalues of D_o + N_A are the roots of
//! 1 + κ Σ n_k²/(d_k − λ) = 0, and with P_c = Uᵀ D1_cᵀ D_o⁺ z (z the mode charges) and χ = zᵀ D_o⁺ z
//!
//!   M(q) = M(q)|_(N = 0) + (4πk/V) w wᵀ/(q ε₀ q),  w = Σ_c q_c P_c q,  ε₀ = ε + (4πk/V) χ,
//!
//! by the formula of Sherman & Morrison (Ann. Math. Stat. 21, 124 (1950)): the piezoelectric stiffening (Born & Huang
//! 1954, § 32), with the static permittivity ε₀ of the clamped cell.

use nalgebra::{DMatrix, Matrix3, Vector3};

use crate::dipoles::Dipoles;

/// The field's coupling to the modes at Γ; see the module documentation.
#[derive(Debug, Clone, PartialEq)]
pub struct FieldCoupling {
    /// 4πk/V, eV/Å².
    factor: f64,
    permittivity: Matrix3<f64>,
    static_permittivity: Matrix3<f64>,
    /// z, by optical mode, e/√u.
    mode_charges: DMatrix<f64>,
    /// P_c, Å·e/√u.
    coupling: [Matrix3<f64>; 3],
}

/// Z_iᵀ/√m_i stacked, 3n × 3: column b is what a field along b pulls on.
pub(super) fn mass_weighted(dipoles: &Dipoles, masses_u: &[f64]) -> DMatrix<f64> {
    DMatrix::from_fn(3 * masses_u.len(), 3, |row, column| {
        let (atom, axis) = (row / 3, row % 3);
        dipoles.charges()[atom][(column, axis)] / masses_u[atom].sqrt()
    })
}

impl FieldCoupling {
    pub(super) fn new(
        dipoles: &Dipoles,
        mode_charges: DMatrix<f64>,
        coupling: [Matrix3<f64>; 3],
        susceptibility: &Matrix3<f64>,
    ) -> Self {
        let factor = dipoles.field_factor();
        Self {
            factor,
            permittivity: *dipoles.permittivity(),
            static_permittivity: dipoles.permittivity() + susceptibility * factor,
            mode_charges,
            coupling,
        }
    }

    /// Electronic permittivity ε, relative.
    pub fn permittivity(&self) -> &Matrix3<f64> {
        &self.permittivity
    }

    /// Static permittivity ε₀ of the clamped cell, relative: with the displacement of the ions. Meaningful where no
    /// optical mode at Γ is soft.
    pub fn static_permittivity(&self) -> &Matrix3<f64> {
        &self.static_permittivity
    }

    /// What the field adds to M(q) for a Cartesian wave vector (Å⁻¹), eV/Å²/u; zero where ε₀ is not positive along q, as
    /// with a soft polar mode.
    pub(super) fn stiffening(&self, q: &Vector3<f64>) -> Matrix3<f64> {
        let screening = q.dot(&(self.static_permittivity * q));
        if screening <= 0.0 {
            return Matrix3::zeros();
        }
        let mut w = Vector3::zeros();
        for c in 0..3 {
            w += self.coupling[c] * q * q[c];
        }
        w * w.transpose() * (self.factor / screening)
    }

    /// Eigenvalues of diag(`optical`) + N_A along a Cartesian direction, ascending; `optical` ascending.
    pub(super) fn optical_along(&self, optical: &[f64], direction: &Vector3<f64>) -> Vec<f64> {
        let kappa = self.factor / direction.dot(&(self.permittivity * direction));
        let strengths: Vec<f64> = (&self.mode_charges * direction)
            .iter()
            .map(|n| kappa * n * n)
            .collect();
        rank_one_update(optical, &strengths)
    }
}

/// Eigenvalues of diag(d) + v vᵀ, ascending, for ascending d and squares v_k² ≥ 0 (Golub, SIAM Rev. 15, 318 (1973)): one
/// root of 1 + Σ v_k²/(d_k − λ) between each two poles and one above the last, found by bisection. Cost O(n²).
fn rank_one_update(d: &[f64], squares: &[f64]) -> Vec<f64> {
    /// Shares of the matrix's scale: weaker couplings, and nearer poles, are none.
    const WEAK: f64 = 1e-15;
    const SAME_POLE: f64 = 1e-13;
    let scale = d.iter().chain(squares).fold(0.0_f64, |m, x| m.max(x.abs()));
    let mut eigenvalues = Vec::with_capacity(d.len());
    let mut poles: Vec<(f64, f64)> = Vec::new();
    for (value, square) in d.iter().zip(squares) {
        match poles.last_mut() {
            _ if *square <= WEAK * scale => eigenvalues.push(*value),
            Some((pole, weight)) if value - *pole <= SAME_POLE * scale => {
                *weight += square;
                eigenvalues.push(*value);
            }
            _ => poles.push((*value, *square)),
        }
    }
    let total: f64 = poles.iter().map(|pair| pair.1).sum();
    for (k, (pole, _)) in poles.iter().enumerate() {
        let width = poles.get(k + 1).map_or(total, |next| next.0 - pole);
        eigenvalues.push(pole + root_above(&poles, *pole, width));
    }
    eigenvalues.sort_by(f64::total_cmp);
    eigenvalues
}

/// The root of 1 + Σ v²/(d − λ) in (pole, pole + width], as distance from the pole. The function rises all the way.
fn root_above(poles: &[(f64, f64)], pole: f64, width: f64) -> f64 {
    /// Halvings: what is left is below rounding.
    const STEPS: usize = 52;
    let (mut low, mut high) = (0.0, width);
    for _ in 0..STEPS {
        let middle = 0.5 * (low + high);
        let sum: f64 = poles
            .iter()
            .map(|(d, square)| square / (d - pole - middle))
            .sum();
        if 1.0 + sum < 0.0 {
            low = middle;
        } else {
            high = middle;
        }
    }
    0.5 * (low + high)
}

#[cfg(test)]
mod tests {
    use super::rank_one_update;
    use nalgebra::{DMatrix, DVector};

    #[test]
    fn roots_are_the_eigenvalues() {
        let d = [-0.3, 0.1, 0.1, 0.1, 0.5, 0.9, 0.9 + 1e-9, 2.0];
        let v = DVector::from_vec(vec![0.2, 0.0, 0.4, -0.3, 0.7, 0.1, 1e-9, -0.6]);
        let matrix = DMatrix::from_diagonal(&DVector::from_row_slice(&d)) + &v * v.transpose();
        let mut expected: Vec<f64> = matrix.symmetric_eigenvalues().iter().copied().collect();
        expected.sort_by(f64::total_cmp);
        let squares: Vec<f64> = v.iter().map(|x| x * x).collect();
        let found = rank_one_update(&d, &squares);
        assert_eq!(found.len(), expected.len());
        for (found, expected) in found.iter().zip(&expected) {
            assert!((found - expected).abs() < 1e-13, "{found} {expected}");
        }
        assert_eq!(rank_one_update(&d, &[0.0; 8]), d);
    }
}
