//! The long-wave limit: acoustic matrix M(q), sound velocities, and the Γ correction of mesh sums.
//!
//! For small q the three acoustic eigenvalues ω² are those of M(q)_ab = Σ_cd q_c q_d K_cd,ab with
//! K_cd = Uᵀ D2_cd U − sym_cd(Uᵀ D1_cᵀ D_o⁺ D1_d U),
//! U the three mass-weighted rigid translations, D1_c = Σ Φ x_c, D2_cd = −½ Σ Φ x_c x_d (mass-weighted, x the separation
//! vectors of the atom-phase form) and D_o⁺ the pseudo-inverse of D(Γ) on the optical space (second-order
//! perturbation theory; Born & Huang 1954, § 26). K is complete where Uᵀ D1_c U = 0, which T, Q and an inversion, or the
//! rotation sum, ensure; otherwise λ has a term linear in q, whose size is reported.
//!
//! In a polar crystal D1 and D2 hold the analytic dipole–dipole part, and D_o becomes D_o + N_A(q̂), which depends on the
//! direction; see [`crate::long_wave::field`].

pub mod field;

use nalgebra::{DMatrix, Matrix3, SymmetricEigen, Vector3};
use tarehouse_eigensolver::{EigenError, c64, symmetric_eigen};

use crate::dynamics::{Dynamics, Modes};
use field::FieldCoupling;

/// The acoustic matrix as a quadratic form in q.
#[derive(Debug, Clone, PartialEq)]
pub struct AcousticMatrix {
    /// K_cd,ab by [c][d]; Cartesian, eV/u.
    stiffness: [[Matrix3<f64>; 3]; 3],
    /// Largest |Uᵀ D1_c U|, eV/Å/u: zero where K is complete.
    pub linear_term: f64,
    optical: OpticalSpace,
    field: Option<FieldCoupling>,
}

/// Optical eigenvalues below this share of the largest are left out of the pseudo-inverse, eV/Å²/u relative: a free
/// internal motion does not stiffen the lattice.
const PSEUDO_INVERSE_CUTOFF: f64 = 1e-12;

impl AcousticMatrix {
    /// The acoustic matrix of a crystal with constants that obey the translation sum. Cost O(L n²) + one eigenproblem.
    ///
    /// # Errors
    /// Those of the eigensolver.
    pub fn new(dynamics: &Dynamics) -> Result<Self, EigenError> {
        let rigid = rigid_translations(dynamics.crystal().masses_u());
        let moments = Moments::new(dynamics, &rigid);
        let optical = OpticalSpace::new(dynamics, &rigid)?;
        let mut linear_term = 0.0_f64;
        for first in &moments.first {
            linear_term = linear_term.max((rigid.transpose() * first).amax());
        }
        let reduced: Vec<DMatrix<f64>> = moments
            .first
            .iter()
            .map(|first| optical.coordinates(first))
            .collect();
        let stiffness = std::array::from_fn(|c| {
            std::array::from_fn(|d| {
                let coupling = |c: usize, d: usize| -> Matrix3<f64> {
                    optical.weighted_product(&reduced[c], &reduced[d])
                };
                let relaxation = (coupling(c, d) + coupling(d, c)) * 0.5;
                let rigid_part = (moments.second[c][d] + moments.second[c][d].transpose()) * 0.5;
                let k = rigid_part - relaxation;
                (k + k.transpose()) * 0.5
            })
        });
        let field = dynamics.dipoles().map(|dipoles| {
            let charges = field::mass_weighted(dipoles, dynamics.crystal().masses_u());
            let mode_charges = optical.coordinates(&charges);
            let coupling =
                std::array::from_fn(|c| optical.weighted_product(&reduced[c], &mode_charges));
            let susceptibility = optical.weighted_product(&mode_charges, &mode_charges);
            FieldCoupling::new(dipoles, mode_charges, coupling, &susceptibility)
        });
        Ok(Self {
            stiffness,
            linear_term,
            optical,
            field,
        })
    }

    /// M(q) for a Cartesian wave vector (Å⁻¹), eV/Å²/u.
    pub fn at(&self, q: &Vector3<f64>) -> Matrix3<f64> {
        let mut sum = Matrix3::zeros();
        for c in 0..3 {
            for d in 0..3 {
                sum += self.stiffness[c][d] * (q[c] * q[d]);
            }
        }
        match &self.field {
            Some(field) => sum + field.stiffening(q),
            None => sum,
        }
    }

    /// The three acoustic eigenvalues ω² at a small Cartesian wave vector, ascending, eV/Å²/u.
    pub fn eigenvalues(&self, q: &Vector3<f64>) -> [f64; 3] {
        let mut values: [f64; 3] = SymmetricEigen::new(self.at(q)).eigenvalues.into();
        values.sort_by(f64::total_cmp);
        values
    }

    /// Eigenvalues with negative ones, and ones below `floor` times their mean, lifted to that floor; and whether
    /// any was negative. Where the mean itself is small or negative, `floor` times the stiffness of a typical direction
    /// takes its place, so that what is returned is positive.
    pub fn floored_eigenvalues(&self, q: &Vector3<f64>, floor: f64) -> ([f64; 3], bool) {
        let values = self.eigenvalues(q);
        let mean = values.iter().sum::<f64>() / 3.0;
        let typical = self.typical_stiffness() * q.norm_squared();
        let least = floor * mean.max(floor * typical);
        (
            values.map(|x| x.max(least)),
            values.iter().any(|x| *x < 0.0),
        )
    }

    /// Mean size of the stiffness over directions and polarisations, eV/u; positive.
    fn typical_stiffness(&self) -> f64 {
        let traces = (0..3).map(|c| self.stiffness[c][c].iter().map(|x| x.abs()).sum::<f64>());
        (traces.sum::<f64>() / 9.0).max(f64::MIN_POSITIVE)
    }

    /// What the macroscopic field does in a polar crystal; `None` where no dipoles are set apart.
    pub fn field(&self) -> Option<&FieldCoupling> {
        self.field.as_ref()
    }

    /// Eigenvalues of the optical modes at Γ reached along a Cartesian direction, ascending, eV/Å²/u: those of
    /// D_o + N_A(q̂) where dipoles are set apart.
    pub fn optical_along(&self, direction: &Vector3<f64>) -> Vec<f64> {
        match &self.field {
            Some(field) => field.optical_along(&self.optical.values, direction),
            None => self.optical.values.clone(),
        }
    }

    /// The 3n − 3 optical modes at Γ, without the term of the direction: those orthogonal to the rigid translations.
    pub fn optical_modes(&self) -> Modes {
        let vectors = self
            .optical
            .vectors
            .iter()
            .map(|x| c64::new(*x, 0.0))
            .collect();
        Modes {
            eigenvalues: self.optical.values.clone(),
            vectors,
        }
    }

    /// K_cd,ab for elastic constants: mass density times K is the stiffness of long waves at zero macroscopic field; eV/u.
    pub fn stiffness(&self) -> &[[Matrix3<f64>; 3]; 3] {
        &self.stiffness
    }
}

/// The three mass-weighted rigid translations as columns: U_(ia),b = sqrt(m_i/M) δ_ab.
pub fn rigid_translations(masses_u: &[f64]) -> DMatrix<f64> {
    let total: f64 = masses_u.iter().sum();
    DMatrix::from_fn(3 * masses_u.len(), 3, |row, column| {
        if row % 3 == column {
            (masses_u[row / 3] / total).sqrt()
        } else {
            0.0
        }
    })
}

/// D1_c U and Uᵀ D2_cd U.
struct Moments {
    first: [DMatrix<f64>; 3],
    second: [[Matrix3<f64>; 3]; 3],
}

impl Moments {
    fn new(dynamics: &Dynamics, rigid: &DMatrix<f64>) -> Self {
        let (crystal, constants) = (dynamics.crystal(), dynamics.constants());
        let n = crystal.atom_count();
        let masses = crystal.masses_u();
        let (mut first, mut second) = match dynamics.dipoles() {
            Some(dipoles) => {
                let moments = dipoles.moments(masses);
                (moments.first, moments.second)
            }
            None => (
                std::array::from_fn(|_| DMatrix::zeros(3 * n, 3)),
                [[Matrix3::zeros(); 3]; 3],
            ),
        };
        for cell in 0..constants.supercell().cell_count() {
            for i in 0..n {
                for j in 0..n {
                    let block = constants.block(cell, i, j) / (masses[i] * masses[j]).sqrt();
                    let (u_i, u_j) = (rigid[(3 * i, 0)], rigid[(3 * j, 0)]);
                    let vectors = dynamics.images().separations(crystal, cell, i, j);
                    let share = (vectors.len() as f64).recip();
                    for x in vectors {
                        for c in 0..3 {
                            let mut target = first[c].fixed_view_mut::<3, 3>(3 * i, 0);
                            target += block * (x[c] * share * u_j);
                            for (d, sum) in second[c].iter_mut().enumerate() {
                                *sum += block * (-0.5 * x[c] * x[d] * share * u_i * u_j);
                            }
                        }
                    }
                }
            }
        }
        Self { first, second }
    }
}

/// Eigenvectors of D(Γ) orthogonal to the rigid translations.
#[derive(Debug, Clone, PartialEq)]
struct OpticalSpace {
    values: Vec<f64>,
    vectors: DMatrix<f64>,
}

impl OpticalSpace {
    /// Deflates the rigid translations to one eigenvalue below all others, and drops these three.
    fn new(dynamics: &Dynamics, rigid: &DMatrix<f64>) -> Result<Self, EigenError> {
        let order = dynamics.branch_count();
        let gamma = dynamics.matrix(&Vector3::zeros());
        let matrix = DMatrix::from_fn(order, order, |r, c| gamma[r * order + c].re);
        let image = &matrix * rigid;
        let inner = rigid.transpose() * &image;
        let cross = &image * rigid.transpose();
        let shift = -4.0 * matrix.norm() - 1.0;
        let deflated = &matrix - &cross - cross.transpose()
            + rigid * inner * rigid.transpose()
            + rigid * rigid.transpose() * shift;
        let eigen = symmetric_eigen(order, deflated.transpose().as_slice())?;
        let values = eigen.values.iter().skip(3).copied().collect::<Vec<_>>();
        let vectors = DMatrix::from_column_slice(order, order - 3, &eigen.vectors[3 * order..]);
        Ok(Self { values, vectors })
    }

    fn coordinates(&self, columns: &DMatrix<f64>) -> DMatrix<f64> {
        self.vectors.tr_mul(columns)
    }

    /// Aᵀ D_o⁺ B for A, B in optical coordinates.
    fn weighted_product(&self, a: &DMatrix<f64>, b: &DMatrix<f64>) -> Matrix3<f64> {
        let largest = self.values.iter().fold(0.0_f64, |m, x| m.max(x.abs()));
        let mut sum = Matrix3::zeros();
        for (k, value) in self.values.iter().enumerate() {
            if value.abs() > PSEUDO_INVERSE_CUTOFF * largest {
                let left = a.fixed_view::<1, 3>(k, 0).transpose();
                sum += left * b.fixed_view::<1, 3>(k, 0) / *value;
            }
        }
        sum
    }
}

/// Slowest and fastest sound velocity over the directions given, m/s; `None` where a direction is unstable.
pub fn sound_velocity_range(
    acoustic: &AcousticMatrix,
    directions: &[Vector3<f64>],
) -> Option<(f64, f64)> {
    let mut range = (f64::INFINITY, 0.0_f64);
    for direction in directions {
        for value in acoustic.eigenvalues(direction) {
            if value < 0.0 {
                return None;
            }
            let velocity = value.sqrt() * crate::units::velocity_unit_m_per_s();
            range = (range.0.min(velocity), range.1.max(velocity));
        }
    }
    Some(range)
}
