//! How the dipole–dipole part changes along q near Γ, without the term of the direction.

use nalgebra::{DMatrix, Matrix3, Vector3};
use tarehouse_eigensolver::c64;

use super::{Dipoles, phase};
use crate::ewald::ReciprocalTerm;

/// Moments of the analytic part acting on rigid translations: with D(q) = D(0) + i q_c D1_c + q_c q_d D2_cd,
/// q Cartesian and U the mass-weighted rigid translations.
#[derive(Debug, Clone, PartialEq)]
pub struct DipoleMoments {
    /// D1_c U, 3n × 3, eV/Å/u.
    pub first: [DMatrix<f64>; 3],
    /// Uᵀ D2_cd U, eV/u.
    pub second: [[Matrix3<f64>; 3]; 3],
}

impl Dipoles {
    /// The moments of the analytic part for the masses of the crystal, u. Cost O(K·n + n²).
    ///
    /// By neutrality the term K = q does not act on rigid translations.
    pub fn moments(&self, masses_u: &[f64]) -> DipoleMoments {
        let total: f64 = masses_u.iter().sum();
        let mut moments = DipoleMoments {
            first: std::array::from_fn(|_| DMatrix::zeros(3 * self.atom_count(), 3)),
            second: [[Matrix3::zeros(); 3]; 3],
        };
        for term in self.ewald.reciprocal_terms(&Vector3::zeros()) {
            self.add_reciprocal(&term, &mut moments);
        }
        self.add_real(&mut moments);
        for c in 0..3 {
            for (i, mass) in masses_u.iter().enumerate() {
                let mut rows = moments.first[c].fixed_view_mut::<3, 3>(3 * i, 0);
                rows /= (mass * total).sqrt();
            }
            for second in &mut moments.second[c] {
                *second /= total;
            }
        }
        moments
    }

    fn add_reciprocal(&self, term: &ReciprocalTerm, moments: &mut DipoleMoments) {
        let weight = self.field_factor();
        let zero = || Matrix3::from_element(c64::new(0.0, 0.0));
        let structure: Matrix3<c64> =
            self.charges
                .iter()
                .zip(&self.wrapped)
                .fold(zero(), |sum, (charge, position)| {
                    let turn = phase(-term.vector.dot(position));
                    sum + charge.map(|z| turn * z)
                });
        let (re, im) = (structure.map(|x| x.re), structure.map(|x| x.im));
        for c in 0..3 {
            let slope = self.slope(term, c);
            for (i, charge) in self.charges.iter().enumerate() {
                // −i e^(iK·r) S is real after the sum over ±K.
                let turn = phase(term.vector.dot(&self.wrapped[i]));
                let real = re * turn.im + im * turn.re;
                let mut rows = moments.first[c].fixed_view_mut::<3, 3>(3 * i, 0);
                rows += charge.tr_mul(&(slope * real)) * weight;
            }
            for d in 0..3 {
                let bend = self.bend(term, c, d);
                moments.second[c][d] +=
                    (re.tr_mul(&(bend * re)) + im.tr_mul(&(bend * im))) * (0.5 * weight);
            }
        }
    }

    /// ∂/∂K_c of K Kᵀ s(KεK).
    fn slope(&self, term: &ReciprocalTerm, c: usize) -> Matrix3<f64> {
        let k = &term.vector;
        let rate = 2.0 * (self.permittivity() * k)[c] * term.slope;
        edge(k, c) * term.value + k * k.transpose() * rate
    }

    /// ∂²/∂K_c∂K_d of K Kᵀ s(KεK).
    fn bend(&self, term: &ReciprocalTerm, c: usize, d: usize) -> Matrix3<f64> {
        let k = &term.vector;
        let gradient = self.permittivity() * k * 2.0;
        let second = term.curvature * gradient[c] * gradient[d]
            + 2.0 * term.slope * self.permittivity()[(c, d)];
        let mut unit = Matrix3::zeros();
        unit[(c, d)] += 1.0;
        unit[(d, c)] += 1.0;
        unit * term.value
            + (edge(k, c) * gradient[d] + edge(k, d) * gradient[c]) * term.slope
            + k * k.transpose() * second
    }

    fn add_real(&self, moments: &mut DipoleMoments) {
        let n = self.atom_count();
        for i in 0..n {
            for j in 0..n {
                let (low, high) = (i.min(j), i.max(j));
                let sign = if i > j { -1.0 } else { 1.0 };
                for (index, tensor) in self.pair(low, high) {
                    let x = (self.wrapped[high] - self.wrapped[low]
                        + self.lattice[*index as usize])
                        * sign;
                    let block = self.charges[i].tr_mul(&(tensor * self.charges[j]));
                    for c in 0..3 {
                        let mut rows = moments.first[c].fixed_view_mut::<3, 3>(3 * i, 0);
                        rows += block * x[c];
                        for d in 0..3 {
                            moments.second[c][d] += block * (-0.5 * x[c] * x[d]);
                        }
                    }
                }
            }
        }
    }
}

/// ∂(K Kᵀ)/∂K_c.
fn edge(k: &Vector3<f64>, c: usize) -> Matrix3<f64> {
    let mut matrix = Matrix3::zeros();
    for a in 0..3 {
        matrix[(a, c)] += k[a];
        matrix[(c, a)] += k[a];
    }
    matrix
}
