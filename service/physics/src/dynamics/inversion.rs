//! The basis in which the dynamical matrix of a centrosymmetric crystal is real.

use std::f64::consts::{FRAC_1_SQRT_2, SQRT_2};

use tarehouse_eigensolver::c64;

/// The basis in which a centrosymmetric dynamical matrix is real.
#[derive(Debug, Clone)]
pub(super) struct InversionBasis {
    /// Atoms on inversion centres.
    fixed: Vec<usize>,
    /// Pairs (i, i').
    pairs: Vec<(usize, usize)>,
}

impl InversionBasis {
    pub(super) fn new(permutation: &[usize]) -> Self {
        let images = permutation.iter().copied().enumerate();
        let fixed = images
            .clone()
            .filter(|(i, image)| i == image)
            .map(|(i, _)| i)
            .collect();
        let pairs = images.filter(|(i, image)| i < image).collect();
        Self { fixed, pairs }
    }

    /// Rows of D that the real form needs: fixed atoms, then the first of each pair.
    pub(super) fn representatives(&self) -> Vec<usize> {
        self.fixed
            .iter()
            .copied()
            .chain(self.pairs.iter().map(|pair| pair.0))
            .collect()
    }

    /// The real matrix, row-major, from the rows of [`Self::representatives`]. Basis order: fixed atoms, all u₊, all u₋.
    pub(super) fn real_form(&self, atom_count: usize, rows: &[c64]) -> Vec<f64> {
        let order = 3 * atom_count;
        let (fixed, pairs) = (self.fixed.len(), self.pairs.len());
        let d = |row: usize, j: usize| rows[row * order + j];
        let mut real = vec![0.0; order * order];
        for k in 0..3 * fixed {
            for (s, &atom) in self.fixed.iter().enumerate() {
                for b in 0..3 {
                    real[k * order + 3 * s + b] = d(k, 3 * atom + b).re;
                }
            }
            for (p, &(j, _)) in self.pairs.iter().enumerate() {
                for b in 0..3 {
                    let c = d(k, 3 * j + b);
                    real[k * order + 3 * (fixed + p) + b] = SQRT_2 * c.re;
                    real[k * order + 3 * (fixed + pairs + p) + b] = -SQRT_2 * c.im;
                }
            }
        }
        for k in 0..3 * pairs {
            let (plus, minus) = (3 * fixed + k, 3 * (fixed + pairs) + k);
            for (p, &(j, image)) in self.pairs.iter().enumerate() {
                for b in 0..3 {
                    let (a, partner) = (d(plus, 3 * j + b), d(plus, 3 * image + b));
                    let (plus_b, minus_b) = (3 * (fixed + p) + b, 3 * (fixed + pairs + p) + b);
                    real[plus * order + plus_b] = a.re + partner.re;
                    real[minus * order + minus_b] = a.re - partner.re;
                    real[plus * order + minus_b] = partner.im - a.im;
                    real[minus * order + plus_b] = a.im + partner.im;
                }
            }
        }
        mirror_upper(order, 3 * fixed, &mut real);
        real
    }

    /// Atomic amplitudes in the basis of the real form; complex unless their phase was chosen by it.
    pub(super) fn to_real(&self, atoms: &[c64]) -> Vec<c64> {
        let mut vector = vec![c64::new(0.0, 0.0); atoms.len()];
        let (fixed, pairs) = (self.fixed.len(), self.pairs.len());
        for (s, &atom) in self.fixed.iter().enumerate() {
            for a in 0..3 {
                vector[3 * s + a] = atoms[3 * atom + a];
            }
        }
        for (p, &(i, image)) in self.pairs.iter().enumerate() {
            for a in 0..3 {
                let (first, second) = (atoms[3 * i + a], atoms[3 * image + a]);
                vector[3 * (fixed + p) + a] = (first + second) * FRAC_1_SQRT_2;
                let minus = (first - second) * FRAC_1_SQRT_2;
                vector[3 * (fixed + pairs + p) + a] = minus * c64::new(0.0, -1.0);
            }
        }
        vector
    }

    /// An eigenvector of the real form as mass-weighted atomic amplitudes.
    pub(super) fn to_atoms(&self, vector: &[f64]) -> Vec<c64> {
        let mut atoms = vec![c64::new(0.0, 0.0); vector.len()];
        let (fixed, pairs) = (self.fixed.len(), self.pairs.len());
        for (s, &atom) in self.fixed.iter().enumerate() {
            for a in 0..3 {
                atoms[3 * atom + a] = c64::new(vector[3 * s + a], 0.0);
            }
        }
        for (p, &(i, image)) in self.pairs.iter().enumerate() {
            for a in 0..3 {
                let plus = vector[3 * (fixed + p) + a] * FRAC_1_SQRT_2;
                let minus = vector[3 * (fixed + pairs + p) + a] * FRAC_1_SQRT_2;
                atoms[3 * i + a] = c64::new(plus, minus);
                atoms[3 * image + a] = c64::new(plus, -minus);
            }
        }
        atoms
    }
}

/// Fills the columns below `fixed` from the rows above, then makes the matrix symmetric to the last bit.
fn mirror_upper(order: usize, fixed: usize, real: &mut [f64]) {
    for row in fixed..order {
        for column in 0..fixed {
            real[row * order + column] = real[column * order + row];
        }
    }
    for row in 0..order {
        for column in 0..row {
            let mean = 0.5 * (real[row * order + column] + real[column * order + row]);
            real[row * order + column] = mean;
            real[column * order + row] = mean;
        }
    }
}
