//! Force constants: against differences of forces, sum rules, folding and interpolation.

use nalgebra::{Matrix3, Vector3};
use tarehouse_demo_data::constants::RealSpaceConstants;
use tarehouse_demo_data::folded::Interpolation;
use tarehouse_demo_data::forms;
use tarehouse_demo_data::runs::{central_differences, central_runs, forces};
use tarehouse_eigensolver::c64;
use tarehouse_physics::Supercell;

use crate::model::strained;

fn supercell(matrix: [[i64; 3]; 3]) -> Supercell {
    Supercell::with_default_translations(matrix).unwrap()
}

const SKEW: [[i64; 3]; 3] = [[1, 1, 0], [-1, 1, 0], [0, 1, 3]];

#[test]
fn folded_constants_are_differences_of_forces_in_the_supercell() {
    // Far from rest, in a supercell that is smaller than the range: every image counts.
    let crystal = strained();
    let n = crystal.atom_count();
    let cells = supercell(SKEW);
    let constants = RealSpaceConstants::of(&crystal)
        .unwrap()
        .folded(&cells)
        .unwrap();
    let large = crystal.replicated(&cells).unwrap();
    assert!((large.energy_ev() - crystal.energy_ev() * cells.cell_count() as f64).abs() < 1e-9);
    let home = cells.index_of(&[0, 0, 0]);
    let h = 1e-4;
    for atom in [0, 3, 7] {
        for axis in 0..3 {
            let at = |step: f64| {
                let mut shift = vec![Vector3::zeros(); large.atom_count()];
                shift[home * n + atom][axis] = step;
                large.displaced(&shift).unwrap().forces()
            };
            let (above, below) = (at(h), at(-h));
            for l in 0..cells.cell_count() {
                for j in 0..n {
                    let slope = (above[l * n + j] - below[l * n + j]) / (2.0 * h);
                    let row = constants.block(l, atom, j).row(axis).transpose();
                    assert!((slope + row).amax() < 2e-5, "{atom} {axis} {l} {j}");
                }
            }
        }
    }
}

#[test]
fn finite_displacements_err_by_the_square_of_their_length() {
    let crystal = forms::PELQUONOL_BETA.crystal().unwrap();
    let n = crystal.atom_count();
    let cells = supercell([[1, 0, 0], [0, 2, 0], [0, 0, 1]]);
    let exact = RealSpaceConstants::of(&crystal)
        .unwrap()
        .folded(&cells)
        .unwrap();
    let error = |h: f64| {
        let runs = forces(&crystal, &cells, &central_runs(n, h)).unwrap();
        let found = central_differences(&cells, n, h, &runs).unwrap();
        let pairs = found.blocks().iter().zip(exact.blocks());
        pairs.map(|(a, b)| (a - b).amax()).fold(0.0, f64::max)
    };
    let (coarse, fine) = (error(0.02), error(0.01));
    assert!((coarse / fine - 4.0).abs() < 0.1, "{coarse} {fine}");
    assert!(fine < 0.05 && fine > 1e-4);
    let rest = forces(&crystal, &cells, &central_runs(n, 0.0)[..1]).unwrap();
    assert!(rest[0].iter().all(|f| f.amax() < 1e-10));
    assert!(central_differences(&cells, n, 0.01, &rest).is_err());
}

#[test]
fn sums_over_translations_and_pairs_vanish() {
    for form in forms::ALL {
        let exact = RealSpaceConstants::of(&form.crystal().unwrap()).unwrap();
        let constants = exact.folded(&supercell(SKEW)).unwrap();
        let (n, cells) = (constants.atom_count(), constants.supercell().cell_count());
        for i in 0..n {
            let mut displaced = Matrix3::zeros();
            let mut response = Matrix3::zeros();
            for l in 0..cells {
                for j in 0..n {
                    displaced += constants.block(l, i, j);
                    response += constants.block(l, j, i);
                    let back = constants.supercell().negative(l);
                    let mirrored = constants.block(back, j, i).transpose();
                    assert!((constants.block(l, i, j) - mirrored).amax() < 1e-12);
                }
            }
            assert!(displaced.amax() < 1e-10 && response.amax() < 1e-10);
        }
    }
}

#[test]
fn a_rigid_rotation_costs_nothing() {
    // Σ Φ_ab x_c antisymmetrised in b and c vanishes at rest (Born & Huang 1954).
    for form in forms::ALL {
        let exact = RealSpaceConstants::of(&form.crystal().unwrap()).unwrap();
        let crystal = exact.crystal();
        let n = crystal.atom_count();
        let mut moments = vec![[Matrix3::<f64>::zeros(); 3]; n];
        let mut scale: f64 = 0.0;
        for coupling in exact.couplings() {
            let cell = Vector3::from(coupling.translation.map(|x| x as f64));
            let gap = cell + crystal.positions()[coupling.response]
                - crystal.positions()[coupling.displaced];
            let gap = crystal.cartesian(&gap);
            for (c, moment) in moments[coupling.displaced].iter_mut().enumerate() {
                *moment += coupling.block * gap[c];
                scale = scale.max((coupling.block * gap[c]).amax());
            }
        }
        assert!(scale > 1.0);
        for moment in &moments {
            for (b, c) in [(0, 1), (1, 2), (0, 2)] {
                let twist = moment[c].column(b) - moment[b].column(c);
                assert!(twist.amax() < 1e-9, "form {}: {}", form.label, twist.amax());
            }
        }
    }
}

fn distance(left: &[c64], right: &[c64]) -> f64 {
    left.iter()
        .zip(right)
        .map(|(a, b)| (a - b).norm())
        .fold(0.0, f64::max)
}

#[test]
fn interpolation_is_exact_at_commensurate_wave_vectors() {
    for (form, matrix) in [
        (forms::DROSMELIDE_I, [[2, 0, 0], [0, 1, 0], [0, 0, 2]]),
        (forms::DROSMELIDE_V, SKEW),
        (forms::PELQUONOL_BETA, [[1, 2, 0], [0, 3, 0], [1, 0, -1]]),
    ] {
        let exact = RealSpaceConstants::of(&form.crystal().unwrap()).unwrap();
        let constants = exact.folded(&supercell(matrix)).unwrap();
        let interpolation = Interpolation::new(exact.crystal(), &constants);
        let points = constants.supercell().commensurate_points();
        assert_eq!(points.len(), constants.supercell().cell_count());
        for q in &points {
            let gap = distance(
                &interpolation.dynamical_matrix(q),
                &exact.dynamical_matrix(q),
            );
            assert!(gap < 1e-11, "{gap}");
        }
        let between = Vector3::new(0.31, 0.17, -0.23);
        let matrices = (
            interpolation.dynamical_matrix(&between),
            exact.dynamical_matrix(&between),
        );
        assert!(
            distance(&matrices.0, &matrices.1) > 1e-6,
            "a small supercell aliases"
        );
    }
}

#[test]
fn interpolation_is_exact_everywhere_once_the_range_fits() {
    let exact = RealSpaceConstants::of(&forms::PELQUONOL_BETA.crystal().unwrap()).unwrap();
    let cells = supercell([[3, 0, 0], [0, 5, 0], [0, 0, 4]]);
    let constants = exact.folded(&cells).unwrap();
    let interpolation = Interpolation::new(exact.crystal(), &constants);
    for q in [
        Vector3::new(0.31, 0.17, -0.23),
        Vector3::new(0.05, 0.0, 0.44),
    ] {
        let gap = distance(
            &interpolation.dynamical_matrix(&q),
            &exact.dynamical_matrix(&q),
        );
        assert!(gap < 1e-11, "{gap}");
    }
}

#[test]
fn dynamical_matrices_are_hermitian_periodic_and_translation_free() {
    let exact = RealSpaceConstants::of(&forms::DROSMELIDE_II.crystal().unwrap()).unwrap();
    let at_gamma = exact.eigenvalues(&Vector3::zeros()).unwrap();
    assert!(at_gamma[..3].iter().all(|x| x.abs() < 1e-12));
    assert!(at_gamma[3] > 1e-4);
    let q = Vector3::new(0.2, 0.3, -0.1);
    let here = exact.eigenvalues(&q).unwrap();
    for image in [-q, q + Vector3::new(1.0, 0.0, -2.0)] {
        let there = exact.eigenvalues(&image).unwrap();
        assert!(here.iter().zip(&there).all(|(a, b)| (a - b).abs() < 1e-11));
    }
}
