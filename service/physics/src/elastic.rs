//! Elastic constants from the long waves, internal strain relaxed, and the compressibility that follows from them.
//!
//! Long waves measure A_ab,cd = ρ K_cd,ab = ½ (C_acbd + C_adbc). Without initial stress A_ab,cd = A_cd,ab (Huang 1950),
//! and then C_acbd = A_ab,cd + A_cb,ad − A_ac,bd (Born & Huang 1954, § 27). Constants that break Huang's relation are
//! symmetrised over the two pairs first, and the largest part removed is told.

use nalgebra::{Matrix3, Matrix6, Vector6};

use crate::crystal::Crystal;
use crate::long_wave::AcousticMatrix;
use crate::units::EV_PER_ANG3_TO_GPA;

/// Index pairs of the six components of a strain (Voigt 1910): xx, yy, zz, yz, zx, xy.
const PAIRS: [(usize, usize); 6] = [(0, 0), (1, 1), (2, 2), (1, 2), (2, 0), (0, 1)];

/// Elastic constants of a crystal at fixed temperature zero, internal strain relaxed.
#[derive(Debug, Clone, PartialEq)]
pub struct ElasticConstants {
    voigt_gpa: Matrix6<f64>,
    /// Largest |A_ab,cd − A_cd,ab| over the largest |A|, a pure number: zero without initial stress.
    pub huang_residual: f64,
}

impl ElasticConstants {
    /// Elastic constants from the acoustic matrix: see the module documentation.
    pub fn of(acoustic: &AcousticMatrix, crystal: &Crystal) -> Self {
        let density = crystal.masses_u().iter().sum::<f64>() / crystal.volume_ang3();
        Self::from_stiffness(acoustic.stiffness(), density)
    }

    /// Elastic constants from K_cd,ab by [c][d], eV/u, and the density, u/Å³.
    pub fn from_stiffness(stiffness: &[[Matrix3<f64>; 3]; 3], density_u_per_ang3: f64) -> Self {
        let to_gpa = density_u_per_ang3 * EV_PER_ANG3_TO_GPA;
        let bracket = |a: usize, b: usize, c: usize, d: usize| stiffness[c][d][(a, b)] * to_gpa;
        let balanced = |a: usize, b: usize, c: usize, d: usize| {
            0.5 * (bracket(a, b, c, d) + bracket(c, d, a, b))
        };
        let voigt_gpa = Matrix6::from_fn(|row, column| {
            let ((a, c), (b, d)) = (PAIRS[row], PAIRS[column]);
            balanced(a, b, c, d) + balanced(c, b, a, d) - balanced(a, c, b, d)
        });
        let (mut broken, mut largest) = (0.0_f64, 0.0_f64);
        for (a, b) in PAIRS {
            for (c, d) in PAIRS {
                broken = broken.max((bracket(a, b, c, d) - bracket(c, d, a, b)).abs());
                largest = largest.max(bracket(a, b, c, d).abs());
            }
        }
        Self {
            voigt_gpa,
            huang_residual: broken / largest.max(f64::MIN_POSITIVE),
        }
    }

    /// C in GPa, components xx, yy, zz, yz, zx, xy (Voigt 1910).
    pub fn voigt_gpa(&self) -> &Matrix6<f64> {
        &self.voigt_gpa
    }

    /// −(1/V) dV/dp under hydrostatic pressure, 1/GPa: the sum of S_ij over i, j = xx, yy, zz (Reuss 1929). `None` where
    /// the constants are not positive definite: such a crystal has no equilibrium under pressure.
    pub fn compressibility_per_gpa(&self) -> Option<f64> {
        let factor = self.voigt_gpa.cholesky()?;
        let hydrostatic = Vector6::new(1.0, 1.0, 1.0, 0.0, 0.0, 0.0);
        let value = hydrostatic.dot(&factor.solve(&hydrostatic));
        (value.is_finite() && value > 0.0).then_some(value)
    }
}

#[cfg(test)]
mod tests {
    use std::collections::BTreeSet;

    use nalgebra::Vector3;

    use super::*;
    use crate::dynamics::Dynamics;
    use crate::images::PairImages;
    use crate::supercell::Translation;
    use crate::{Element, ForceConstants, Supercell};

    const EDGE_ANG: f64 = 4.0;

    /// Ties (from, to, translation, K in eV/Å²), each at both ends, self blocks included.
    type Ties = Vec<(usize, usize, Translation, Matrix3<f64>)>;

    fn elastic(
        cell: Matrix3<f64>,
        atoms: &[[f64; 3]],
        cells: i64,
        ties: &Ties,
    ) -> ElasticConstants {
        let n = atoms.len();
        let argon = Element::from_symbol("Ar").unwrap();
        let positions = atoms.iter().map(|x| Vector3::from(*x)).collect();
        let masses = (0..n).map(|k| 20.0 + 7.0 * k as f64).collect();
        let crystal = Crystal::new(cell, vec![argon; n], positions, Some(masses)).unwrap();
        let rows = [[cells, 0, 0], [0, cells, 0], [0, 0, cells]];
        let supercell = Supercell::with_default_translations(rows).unwrap();
        let mut blocks = vec![Matrix3::zeros(); supercell.cell_count() * n * n];
        for (i, j, translation, k) in ties {
            let mut add = |t: Translation, i: usize, j: usize, block: Matrix3<f64>| {
                blocks[(supercell.index_of(&t) * n + i) * n + j] += block;
            };
            add(*translation, *i, *j, -k);
            add(translation.map(|x| -x), *j, *i, -k);
            add([0; 3], *i, *i, *k);
            add([0; 3], *j, *j, *k);
        }
        let images = PairImages::find(&crystal, &supercell, 1e-3);
        let constants = ForceConstants::from_blocks(supercell, n, blocks).unwrap();
        let dynamics = Dynamics::new(&crystal, &constants, &images);
        ElasticConstants::of(&AcousticMatrix::new(&dynamics).unwrap(), &crystal)
    }

    /// Half of a star of vectors in half edges: all permutations and signs, one of R and −R.
    fn half_star([x, y, z]: [i64; 3]) -> Vec<[i64; 3]> {
        let mut star = BTreeSet::new();
        for order in [
            [x, y, z],
            [y, z, x],
            [z, x, y],
            [x, z, y],
            [z, y, x],
            [y, x, z],
        ] {
            for bits in 0..8_usize {
                let image: [i64; 3] = std::array::from_fn(|a| {
                    if bits >> a & 1 == 0 {
                        order[a]
                    } else {
                        -order[a]
                    }
                });
                star.insert(image);
            }
        }
        star.into_iter().filter(|image| *image > [0; 3]).collect()
    }

    /// A monatomic cubic crystal with central springs; `primitive` rows and vectors in half edges.
    fn cubic(primitive: [[i64; 3]; 3], shells: &[([i64; 3], f64)]) -> ElasticConstants {
        let cell = Matrix3::from_fn(|r, c| 0.5 * EDGE_ANG * primitive[r][c] as f64);
        let inverse = cell.transpose().try_inverse().unwrap();
        let mut ties = Ties::new();
        for (shell, stiffness) in shells {
            for image in half_star(*shell) {
                let r = Vector3::from(image.map(|x| 0.5 * EDGE_ANG * x as f64));
                let fractional = inverse * r;
                #[allow(clippy::cast_possible_truncation, reason = "small whole numbers")]
                let translation = [0, 1, 2].map(|a| fractional[a].round() as i64);
                let direction = r.normalize();
                ties.push((
                    0,
                    0,
                    translation,
                    direction * direction.transpose() * *stiffness,
                ));
            }
        }
        elastic(cell, &[[0.0; 3]], 5, &ties)
    }

    fn close(found: f64, ev_per_ang3: f64) {
        let expected = ev_per_ang3 * EV_PER_ANG3_TO_GPA;
        assert!(
            (found - expected).abs() < 1e-9 * expected.abs().max(1.0),
            "{found} {expected}"
        );
    }

    #[test]
    fn face_centred_cubic_springs_reach_the_closed_form() {
        // a C11 = 2 K, a C12 = a C44 = K, from the long-wave limit of D_xx = 2[2 − c_x(c_y + c_z)] (Born & Huang 1954).
        let k = 1.7;
        let found = cubic([[0, 1, 1], [1, 0, 1], [1, 1, 0]], &[([1, 1, 0], k)]);
        let c = found.voigt_gpa();
        for (row, column, times) in [
            (0, 0, 2.0),
            (2, 2, 2.0),
            (0, 1, 1.0),
            (1, 2, 1.0),
            (3, 3, 1.0),
            (5, 5, 1.0),
        ] {
            close(c[(row, column)], times * k / EDGE_ANG);
        }
        assert!(c[(0, 3)].abs() + c[(3, 4)].abs() < 1e-9);
        assert!(found.huang_residual < 1e-12);
        // 3 B = C11 + 2 C12.
        close(
            1.0 / found.compressibility_per_gpa().unwrap(),
            4.0 * k / (3.0 * EDGE_ANG),
        );
    }

    #[test]
    fn body_centred_cubic_springs_reach_the_closed_form() {
        // a C11 = ⅔ K₁ + 2 K₂, a C12 = a C44 = ⅔ K₁.
        let (k1, k2) = (1.5, 0.4);
        let rows = [[-1, 1, 1], [1, -1, 1], [1, 1, -1]];
        let found = cubic(rows, &[([1, 1, 1], k1), ([2, 0, 0], k2)]);
        let c = found.voigt_gpa();
        close(c[(0, 0)], (2.0 / 3.0 * k1 + 2.0 * k2) / EDGE_ANG);
        close(c[(1, 0)], 2.0 / 3.0 * k1 / EDGE_ANG);
        close(c[(4, 4)], 2.0 / 3.0 * k1 / EDGE_ANG);
        let bulk = (2.0 * k1 + 2.0 * k2) / (3.0 * EDGE_ANG);
        close(1.0 / found.compressibility_per_gpa().unwrap(), bulk);
    }

    #[test]
    fn internal_strain_is_relaxed_and_broken_rotation_is_told() {
        // Two springs K, G in a row stretch as one of K G/(K + G): C_xxxx = K G/((K + G) a).
        let (k, g, across) = (3.0, 1.0, 0.7);
        let spring = |along| Matrix3::from_diagonal(&Vector3::new(along, across, across));
        let net = Matrix3::identity() * across;
        let mut ties = vec![(0, 1, [0, 0, 0], spring(k)), (1, 0, [1, 0, 0], spring(g))];
        for atom in 0..2 {
            ties.push((atom, atom, [0, 1, 0], net));
            ties.push((atom, atom, [0, 0, 1], net));
        }
        let cell = Matrix3::identity() * EDGE_ANG;
        let found = elastic(cell, &[[0.0; 3], [0.5, 0.0, 0.0]], 3, &ties);
        close(found.voigt_gpa()[(0, 0)], k * g / (k + g) / EDGE_ANG);
        assert!(found.huang_residual > 0.1, "{}", found.huang_residual);
    }

    #[test]
    fn any_elastic_constants_come_back_from_their_long_waves() {
        // A triclinic set, positive definite by its diagonal.
        let c = Matrix6::from_fn(|i, j| {
            let (low, high) = (i.min(j) as f64, i.max(j) as f64);
            if i == j {
                20.0 + 3.0 * low
            } else {
                1.0 + 0.7 * low - 0.4 * high
            }
        });
        let voigt = |a: usize, b: usize| {
            PAIRS
                .iter()
                .position(|p| *p == (a, b) || *p == (b, a))
                .unwrap()
        };
        let full = |a, b, c_, d| -> f64 { c[(voigt(a, b), voigt(c_, d))] };
        let stiffness = std::array::from_fn(|c_| {
            std::array::from_fn(|d| {
                Matrix3::from_fn(|a, b| {
                    0.5 * (full(a, c_, b, d) + full(a, d, b, c_)) / EV_PER_ANG3_TO_GPA
                })
            })
        });
        let found = ElasticConstants::from_stiffness(&stiffness, 1.0);
        assert!(
            (found.voigt_gpa() - c).amax() < 1e-11,
            "{}",
            found.voigt_gpa() - c
        );
        assert!(found.huang_residual < 1e-12);
        let inverse = c.try_inverse().unwrap();
        let sum: f64 = (0..3)
            .map(|i| (0..3).map(|j| inverse[(i, j)]).sum::<f64>())
            .sum();
        assert!((found.compressibility_per_gpa().unwrap() - sum).abs() < 1e-12);
    }

    #[test]
    fn a_crystal_that_shears_by_itself_has_no_compressibility() {
        let found = cubic(
            [[0, 1, 1], [1, 0, 1], [1, 1, 0]],
            &[([1, 1, 0], 1.0), ([2, 0, 0], -0.6)],
        );
        assert_eq!(found.compressibility_per_gpa(), None);
    }
}
