//! Lattice sums of Coulomb and dipole–dipole interactions in an anisotropic medium, by Ewald's method.
//!
//! In a medium of permittivity ε a unit charge has the potential k/(√det ε · D), D = √(x·ε⁻¹x), k = e²/4πε₀. It is split
//! into erfc(ΛD), summed over lattice vectors, and erf(ΛD), summed over reciprocal vectors K with
//! exp(−KεK/4Λ²) (Ewald, Ann. Phys. 369, 253 (1921); for dipoles in an anisotropic medium Gonze & Lee, Phys. Rev. B 55,
//! 10355 (1997)). Results do not depend on Λ. The macroscopic field, K = 0, is left out.
//!
//! Units: e, Å, eV. Vectors are Cartesian. Sums run over a Minkowski-reduced basis in a fixed order.

mod error_function;

use std::f64::consts::PI;

use nalgebra::{Matrix3, SymmetricEigen, Vector3};

use crate::crystal::Crystal;
use crate::units::COULOMB_EV_ANGSTROM;
use error_function::erfc;

/// Both sums end where their terms have fallen to exp(−CUT²), 2e-17.
const CUT: f64 = 6.2;
/// K nearer to zero than this, as a share of the shortest reciprocal vectors squared, is zero.
const ZERO_SHARE: f64 = 1e-18;
/// Most times that one principal permittivity may exceed another: beyond it the sums run out of bounds, and no
/// crystal is known to come near.
const ANISOTROPY_MAX: f64 = 50.0;

/// Why a permittivity cannot be used.
#[derive(Debug, Clone, Copy, PartialEq, thiserror::Error)]
#[error(
    "principal permittivities from {least} to {largest}: they must be positive and within a factor of {ANISOTROPY_MAX}"
)]
pub struct PermittivityError {
    /// Least principal value.
    pub least: f64,
    /// Largest principal value.
    pub largest: f64,
}

/// The sums of one lattice and medium.
#[derive(Debug, Clone, PartialEq)]
pub struct Ewald {
    /// Rows: a Minkowski-reduced basis, Å.
    cell: Matrix3<f64>,
    /// Rows: its reciprocal vectors with 2π, Å⁻¹.
    reciprocal: Matrix3<f64>,
    permittivity: Matrix3<f64>,
    inverse_permittivity: Matrix3<f64>,
    root_determinant: f64,
    largest_permittivity: f64,
    least_permittivity: f64,
    volume_ang3: f64,
    /// Λ, 1/Å in the metric of ε⁻¹.
    width: f64,
}

/// K-dependent part of one reciprocal term: s(t) = e^(−βt)/t, t = KεK, β = 1/4Λ², with its first two derivatives.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ReciprocalTerm {
    /// K, Å⁻¹.
    pub vector: Vector3<f64>,
    /// s, Å².
    pub value: f64,
    /// ds/dt, Å⁴.
    pub slope: f64,
    /// d²s/dt², Å⁶.
    pub curvature: f64,
}

impl Ewald {
    /// Sums for the lattice of a crystal in a medium of permittivity `permittivity` (relative; its symmetric part is
    /// used). `width_factor` one balances both sums (Λ = √π over the cube root of the cell volume in the metric of ε⁻¹);
    /// larger ones shift work to the reciprocal sum. Results do not depend on it.
    ///
    /// # Errors
    /// [`PermittivityError`].
    pub fn new(
        crystal: &Crystal,
        permittivity: &Matrix3<f64>,
        width_factor: f64,
    ) -> Result<Self, PermittivityError> {
        let permittivity = (permittivity + permittivity.transpose()) * 0.5;
        let principal = SymmetricEigen::new(permittivity).eigenvalues;
        let (least, largest) = (principal.min(), principal.max());
        if !(least > 0.0 && largest <= ANISOTROPY_MAX * least) {
            return Err(PermittivityError { least, largest });
        }
        let cell = moyo::base::Lattice::new(*crystal.cell())
            .minkowski_reduce()
            .map_or(*crystal.cell(), |(_, transform)| {
                transform.map(f64::from).transpose() * crystal.cell()
            });
        let inverse = |m: &Matrix3<f64>| m.try_inverse().unwrap_or_else(Matrix3::zeros);
        let root_determinant = principal.product().sqrt();
        let volume_ang3 = cell.determinant().abs();
        let scaled_edge = (volume_ang3 / root_determinant).cbrt();
        Ok(Self {
            cell,
            reciprocal: inverse(&cell).transpose() * (2.0 * PI),
            permittivity,
            inverse_permittivity: inverse(&permittivity),
            root_determinant,
            largest_permittivity: largest,
            least_permittivity: least,
            volume_ang3,
            width: width_factor * PI.sqrt() / scaled_edge,
        })
    }

    /// Relative permittivity, symmetric.
    pub fn permittivity(&self) -> &Matrix3<f64> {
        &self.permittivity
    }

    /// 4πk/V, the factor of all reciprocal sums, eV/Å².
    pub fn reciprocal_factor(&self) -> f64 {
        4.0 * PI * COULOMB_EV_ANGSTROM / self.volume_ang3
    }

    /// The vector moved by a lattice vector into the reduced cell around the origin, Å.
    pub fn wrapped(&self, vector: &Vector3<f64>) -> Vector3<f64> {
        let fractional = self.reciprocal * vector / (2.0 * PI);
        vector - self.cell.tr_mul(&fractional.map(f64::round))
    }

    /// Lattice vectors R with |R + d| in reach of the real-space sum for any d of at most `offset_ang`, Å.
    pub fn lattice_vectors(&self, offset_ang: f64) -> Vec<Vector3<f64>> {
        let reach = CUT / self.width * self.largest_permittivity.sqrt() + offset_ang;
        ball(&self.cell, &Vector3::zeros(), reach)
    }

    /// The short-range dipole tensor −k ∂∂ erfc(ΛD)/(√det ε · D) at x, eV/Å² for unit charges; `None` beyond its reach and
    /// at the origin.
    pub fn short_range(&self, x: &Vector3<f64>) -> Option<Matrix3<f64>> {
        let scaled = self.inverse_permittivity * x;
        let square = x.dot(&scaled);
        let y = self.width * square.sqrt();
        if y > CUT || square < f64::EPSILON {
            return None;
        }
        let distance = square.sqrt();
        let gauss = 2.0 * self.width / PI.sqrt() * (-y * y).exp();
        let radial = erfc(y) / (square * distance) + gauss / square;
        let angular = (3.0 * radial + 2.0 * self.width * self.width * gauss) / square;
        let factor = COULOMB_EV_ANGSTROM / self.root_determinant;
        let tensor = self.inverse_permittivity * radial - scaled * scaled.transpose() * angular;
        Some(tensor * factor)
    }

    /// The long-range dipole tensor at the origin, which the reciprocal sum counts for an atom with itself, eV/Å².
    pub fn self_tensor(&self) -> Matrix3<f64> {
        let factor = 4.0 * self.width.powi(3) / (3.0 * PI.sqrt() * self.root_determinant);
        self.inverse_permittivity * (COULOMB_EV_ANGSTROM * factor)
    }

    /// Terms of the reciprocal sum for a Cartesian wave vector, K = G + q; K = 0 is left out.
    pub fn reciprocal_terms(&self, q: &Vector3<f64>) -> Vec<ReciprocalTerm> {
        let beta = 0.25 / (self.width * self.width);
        let limit = CUT * CUT / beta;
        let reach = (limit / self.least_permittivity).sqrt();
        let zero = ZERO_SHARE * limit;
        ball(&self.reciprocal, q, reach)
            .into_iter()
            .filter_map(|vector| {
                let t = vector.dot(&(self.permittivity * vector));
                (t > zero && t < limit).then(|| {
                    let value = (-beta * t).exp() / t;
                    let rate = beta + t.recip();
                    ReciprocalTerm {
                        vector,
                        value,
                        slope: -value * rate,
                        curvature: value * (rate * rate + (t * t).recip()),
                    }
                })
            })
            .collect()
    }

    /// Energy of one cell of point charges that sum to zero, eV; charges in e, Cartesian positions in Å. For a rigid-ion
    /// lattice in vacuum it is −kM q²/d per pair of ions, with M its Madelung constant.
    pub fn charge_energy_ev(&self, charges: &[f64], positions: &[Vector3<f64>]) -> f64 {
        let wrapped: Vec<Vector3<f64>> = positions.iter().map(|x| self.wrapped(x)).collect();
        let widest = wrapped.iter().map(Vector3::norm).fold(0.0, f64::max);
        let lattice = self.lattice_vectors(2.0 * widest);
        let mut real = 0.0;
        for (charge, x) in charges.iter().zip(&wrapped) {
            for (other, y) in charges.iter().zip(&wrapped) {
                for translation in &lattice {
                    let separation = y - x + translation;
                    let square = separation.dot(&(self.inverse_permittivity * separation));
                    if square > f64::EPSILON {
                        real += charge * other * erfc(self.width * square.sqrt()) / square.sqrt();
                    }
                }
            }
        }
        let own: f64 = charges.iter().map(|z| z * z).sum();
        real -= own * 2.0 * self.width / PI.sqrt();
        let mut long = 0.0;
        for term in self.reciprocal_terms(&Vector3::zeros()) {
            let (mut cosine, mut sine) = (0.0, 0.0);
            for (charge, x) in charges.iter().zip(&wrapped) {
                let angle = term.vector.dot(x);
                cosine += charge * angle.cos();
                sine += charge * angle.sin();
            }
            long += term.value * (cosine * cosine + sine * sine);
        }
        let real = real * COULOMB_EV_ANGSTROM / self.root_determinant;
        0.5 * (real + self.reciprocal_factor() * long)
    }
}

/// All vectors origin + m·basis (rows) no longer than `reach`, in the lexical order of m.
fn ball(basis: &Matrix3<f64>, origin: &Vector3<f64>, reach: f64) -> Vec<Vector3<f64>> {
    let dual = basis.try_inverse().unwrap_or_else(Matrix3::zeros);
    let offset = dual.tr_mul(origin);
    // |m_i + offset_i| = |dual_i · v| ≤ |dual_i| reach.
    let range = |axis: usize| {
        let half = dual.column(axis).norm() * reach;
        let least = (-offset[axis] - half).floor();
        let steps = (2.0 * half).ceil() + 2.0;
        (least, steps)
    };
    let ranges: [(f64, f64); 3] = std::array::from_fn(range);
    let axis = |k: usize| {
        let (least, steps) = ranges[k];
        std::iter::successors(Some(0.0), |step| Some(step + 1.0))
            .take_while(move |step| *step <= steps)
            .map(move |step| least + step)
    };
    let mut vectors = Vec::new();
    for x in axis(0) {
        for y in axis(1) {
            for z in axis(2) {
                let vector = origin + basis.tr_mul(&Vector3::new(x, y, z));
                if vector.norm() <= reach {
                    vectors.push(vector);
                }
            }
        }
    }
    vectors
}
