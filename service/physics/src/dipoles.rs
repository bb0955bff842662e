//! The dipole–dipole part of a polar crystal's dynamical matrix.
//!
//! Displacing atom i by u makes a dipole Z_i u, and dipoles interact through the medium of electronic permittivity ε:
//!
//!   C_ij(q) = Z_iᵀ F_ij(q) Z_j + δ_ij S_i,  F_ij(q) = Σ_R f(x) exp(iq·x), x = R + r_j − r_i,
//!
//! f the dipole tensor of [`crate::ewald`], S_i = −½(M_i + M_iᵀ) with M_i = Σ_j Z_iᵀ F_ij(0) Z_j the self term of the
//! translation sum (Gonze & Lee, Phys. Rev. B 55, 10355 (1997)). In the atom-phase form C(q + G) differs from C(q) by the
//! phases of the atoms only. At q → 0 the term K = q depends on the direction (Cochran & Cowley, J. Phys. Chem. Solids 23,
//! 447 (1962)); at q = 0 itself it is left out.
//!
//! What is folded into a supercell is the part with S_i symmetric; where M_i is not symmetric, the rest of the
//! translation sum is left to the short-range constants.

mod charges;
mod moments;

use std::f64::consts::TAU;

use nalgebra::{Matrix3, Vector3};
use rayon::prelude::*;
use tarehouse_eigensolver::c64;

use crate::crystal::Crystal;
use crate::ewald::{Ewald, PermittivityError};
use crate::force_constants::ForceConstants;
use crate::supercell::Supercell;

pub use charges::{EffectiveCharges, neutrality_residual};
pub use moments::DipoleMoments;

/// The dipole–dipole part of one crystal; see the module documentation.
#[derive(Debug, Clone, PartialEq)]
pub struct Dipoles {
    ewald: Ewald,
    /// Rows are the reciprocal vectors of the crystal's own cell, Å⁻¹.
    reciprocal: Matrix3<f64>,
    /// As in the crystal, fractional.
    positions: Vec<Vector3<f64>>,
    /// Cartesian, in the reduced cell.
    wrapped: Vec<Vector3<f64>>,
    charges: Vec<Matrix3<f64>>,
    lattice: Vec<Vector3<f64>>,
    /// For pairs i ≤ j in lexical order: entries first..next of `entries`.
    first: Vec<usize>,
    entries: Vec<Entry>,
    self_terms: Vec<Matrix3<f64>>,
}

/// A place in the list of lattice vectors, and the short-range tensor there.
type Entry = (u32, Matrix3<f64>);

/// Real-space tensors kept, at most about this many: memory, bounded by a wider reciprocal sum.
const ENTRIES_MAX: f64 = 1e6;
/// Real-space tensors of one pair at width factor one.
const ENTRIES_PER_PAIR: f64 = 180.0;

impl Dipoles {
    /// The dipole–dipole part for charges that were made for this crystal.
    ///
    /// # Errors
    /// [`PermittivityError`].
    pub fn new(crystal: &Crystal, charges: &EffectiveCharges) -> Result<Self, PermittivityError> {
        let n = crystal.atom_count() as f64;
        let crowded = (ENTRIES_PER_PAIR * 0.5 * n * n / ENTRIES_MAX).cbrt();
        Self::with_width(crystal, charges, crowded.max(1.5))
    }

    /// The same with a width factor of the Ewald sum; results do not depend on it.
    ///
    /// # Errors
    /// [`PermittivityError`].
    pub fn with_width(
        crystal: &Crystal,
        charges: &EffectiveCharges,
        width_factor: f64,
    ) -> Result<Self, PermittivityError> {
        let ewald = Ewald::new(crystal, &charges.permittivity, width_factor)?;
        let cartesian = |x: &Vector3<f64>| ewald.wrapped(&crystal.cartesian(x));
        let wrapped: Vec<Vector3<f64>> = crystal.positions().iter().map(cartesian).collect();
        let widest = wrapped.iter().map(Vector3::norm).fold(0.0, f64::max);
        let lattice = ewald.lattice_vectors(2.0 * widest);
        let n = wrapped.len();
        let rows: Vec<Vec<Vec<Entry>>> = (0..n)
            .into_par_iter()
            .map(|i| {
                let pair = |j: usize| tensors(&ewald, &lattice, &(wrapped[j] - wrapped[i]));
                (i..n).map(pair).collect()
            })
            .collect();
        let mut first = vec![0];
        let mut entries = Vec::new();
        for pair in rows.into_iter().flatten() {
            entries.extend(pair);
            first.push(entries.len());
        }
        let mut dipoles = Self {
            ewald,
            reciprocal: crystal.reciprocal(),
            positions: crystal.positions().to_vec(),
            wrapped,
            charges: charges.charges.clone(),
            lattice,
            first,
            entries,
            self_terms: vec![Matrix3::zeros(); n],
        };
        dipoles.self_terms = dipoles.translation_self_terms();
        Ok(dipoles)
    }

    /// Number of atoms.
    pub fn atom_count(&self) -> usize {
        self.charges.len()
    }

    /// Permittivity used.
    pub fn permittivity(&self) -> &Matrix3<f64> {
        self.ewald.permittivity()
    }

    /// Charges used, by atom.
    pub fn charges(&self) -> &[Matrix3<f64>] {
        &self.charges
    }

    /// 4πk/V, eV/Å² for unit charges: the term of the direction is this times (Z_iᵀq)(Z_jᵀq)ᵀ/(qεq).
    pub fn field_factor(&self) -> f64 {
        self.ewald.reciprocal_factor()
    }

    /// Rows of C(q) of some atoms, row-major, 3·rows × 3n, eV/Å², without masses; q in fractional reciprocal
    /// coordinates. Cost O(K·rows·n).
    pub fn rows(&self, q: &Vector3<f64>, rows: &[usize]) -> Vec<c64> {
        let n = self.atom_count();
        let q = self.reciprocal.tr_mul(q);
        let mut matrix = self.reciprocal_rows(&q, rows);
        let phases: Vec<c64> = self.lattice.iter().map(|r| phase(q.dot(r))).collect();
        for (row, &i) in rows.iter().enumerate() {
            for j in 0..n {
                let tensor = self.real_tensor(&phases, &q, i, j);
                let (left, right) = (&self.charges[i], &self.charges[j]);
                let part = |f: fn(&c64) -> f64| left.tr_mul(&(tensor.map(|x| f(&x)) * right));
                let (re, im) = (part(|x| x.re), part(|x| x.im));
                for a in 0..3 {
                    for b in 0..3 {
                        let mut value = c64::new(re[(a, b)], im[(a, b)]);
                        if i == j {
                            value += self.self_terms[i][(a, b)];
                        }
                        matrix[((3 * row + a) * n + j) * 3 + b] += value;
                    }
                }
            }
        }
        matrix
    }

    /// The part folded into a supercell: constants whose D(q) at every commensurate q is that of C(q),
    /// Φ[l,i,j] = (1/L) Σ_q C_ij(q) exp(−iq·(R_l + r_j − r_i)). Cost O(L·K·n² + L²n²).
    pub fn folded(&self, supercell: &Supercell) -> ForceConstants {
        let n = self.atom_count();
        let all: Vec<usize> = (0..n).collect();
        let waves = half_of(supercell);
        let matrices: Vec<Vec<c64>> = waves
            .par_iter()
            .map(|(q, _)| {
                let mut matrix = self.rows(q, &all);
                for (index, value) in matrix.iter_mut().enumerate() {
                    let (i, j) = (index / (9 * n), index % (3 * n) / 3);
                    *value *= phase(-TAU * q.dot(&(self.positions[j] - self.positions[i])));
                }
                matrix
            })
            .collect();
        let cells = supercell.cell_count() as f64;
        let blocks: Vec<Matrix3<f64>> = supercell
            .translations()
            .par_iter()
            .flat_map_iter(|translation| {
                let r = Vector3::from(translation.map(|x| x as f64));
                let mut sum = vec![0.0; 9 * n * n];
                for ((q, weight), matrix) in waves.iter().zip(&matrices) {
                    let factor = phase(-TAU * q.dot(&r)) * (weight / cells);
                    for (target, value) in sum.iter_mut().zip(matrix) {
                        *target += (factor * value).re;
                    }
                }
                (0..n * n).map(move |pair| {
                    let (i, j) = (pair / n, pair % n);
                    Matrix3::from_fn(|a, b| sum[((3 * i + a) * n + j) * 3 + b])
                })
            })
            .collect();
        ForceConstants::of_blocks(supercell, n, blocks)
    }

    fn reciprocal_rows(&self, q: &Vector3<f64>, rows: &[usize]) -> Vec<c64> {
        let n = self.atom_count();
        let mut matrix = vec![c64::new(0.0, 0.0); 9 * rows.len() * n];
        let mut waves = vec![c64::new(0.0, 0.0); 3 * n];
        for term in self.ewald.reciprocal_terms(q) {
            let lattice_part = term.vector - q;
            for (i, charge) in self.charges.iter().enumerate() {
                let amplitude = charge.tr_mul(&term.vector);
                let turn = phase(lattice_part.dot(&self.wrapped[i]));
                for a in 0..3 {
                    waves[3 * i + a] = turn * amplitude[a];
                }
            }
            let weight = self.field_factor() * term.value;
            for (row, &i) in rows.iter().enumerate() {
                for a in 0..3 {
                    let left = waves[3 * i + a] * weight;
                    let start = (3 * row + a) * 3 * n;
                    let targets = &mut matrix[start..start + 3 * n];
                    for (target, wave) in targets.iter_mut().zip(&waves) {
                        *target += left * wave.conj();
                    }
                }
            }
        }
        matrix
    }

    /// Real-space part of F_ij(q), with the correction for an atom with itself; `phases` those of the lattice.
    fn real_tensor(&self, phases: &[c64], q: &Vector3<f64>, i: usize, j: usize) -> Matrix3<c64> {
        let (low, high) = (i.min(j), i.max(j));
        let mut sum = Matrix3::from_element(c64::new(0.0, 0.0));
        for (index, tensor) in self.pair(low, high) {
            let factor = phases[*index as usize];
            sum += tensor.map(|x| factor * x);
        }
        let common = phase(q.dot(&(self.wrapped[high] - self.wrapped[low])));
        sum = sum.map(|x| x * common);
        if i > j {
            sum = sum.map(|x| x.conj());
        }
        if i == j {
            sum -= self.ewald.self_tensor().map(|x| c64::new(x, 0.0));
        }
        sum
    }

    /// Real-space entries of a pair i ≤ j.
    fn pair(&self, i: usize, j: usize) -> &[Entry] {
        let n = self.atom_count();
        let index = i * (2 * n + 1 - i) / 2 + j - i;
        &self.entries[self.first[index]..self.first[index + 1]]
    }

    fn translation_self_terms(&self) -> Vec<Matrix3<f64>> {
        let n = self.atom_count();
        let all: Vec<usize> = (0..n).collect();
        let gamma = self.rows(&Vector3::zeros(), &all);
        let sum = |i: usize, a: usize, b: usize| -> f64 {
            let row = (3 * i + a) * 3 * n;
            (0..n).map(|j| gamma[row + 3 * j + b].re).sum()
        };
        (0..n)
            .map(|i| Matrix3::from_fn(|a, b| -0.5 * (sum(i, a, b) + sum(i, b, a))))
            .collect()
    }
}

fn tensors(ewald: &Ewald, lattice: &[Vector3<f64>], separation: &Vector3<f64>) -> Vec<Entry> {
    (0_u32..)
        .zip(lattice)
        .filter_map(|(index, r)| Some((index, ewald.short_range(&(separation + r))?)))
        .collect()
}

/// One of each pair ±q of commensurate wave vectors, with how many it stands for.
fn half_of(supercell: &Supercell) -> Vec<(Vector3<f64>, f64)> {
    /// Wave vectors are fractions with denominators far below the inverse of this.
    const SAME: f64 = 1e-9;
    let points = supercell.commensurate_points();
    let key = |q: &Vector3<f64>| q.map(|x| (x - (x + SAME).floor()).max(0.0));
    let mut half = Vec::new();
    for q in points {
        let (own, opposite) = (key(&q), key(&-q));
        let difference = own - opposite;
        let sign = difference.iter().find(|x| x.abs() > SAME);
        match sign {
            None => half.push((q, 1.0)),
            Some(x) if *x > 0.0 => half.push((q, 2.0)),
            Some(_) => {}
        }
    }
    half
}

fn phase(angle: f64) -> c64 {
    c64::new(angle.cos(), angle.sin())
}
