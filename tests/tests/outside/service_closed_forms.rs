//! The service's dynamics of model crystals against closed forms (`reference/lattice_exact.toml`), at wave vectors that
//! fit the supercell, and a crystal that is soft only where even meshes look.

use nalgebra::Vector3;
use tarehouse_physics::dynamics::Dynamics;
use tarehouse_physics::qmesh::QMesh;
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_tests::closed_forms;
use tarehouse_tests::models::{
    CUBE_EDGE_ANG, SpringCrystal, bcc, chain, diatomic_chain, fcc, soft_boundary_chain,
};

use crate::reference::assert_near;
use crate::service::{cubic_elastic_gpa, diagonal, dynamics};

#[track_caller]
fn assert_modes(dynamics: &Dynamics, q: &Vector3<f64>, expected: &[f64]) {
    let supercell = dynamics.constants().supercell();
    assert!(supercell.is_commensurate(q, 1e-12), "{q:?}");
    let found = dynamics.eigenvalues(q).unwrap();
    assert_eq!(found.len(), expected.len());
    let scale = expected.iter().fold(0.0_f64, |m, x| m.max(x.abs()));
    for (found, expected) in found.iter().zip(expected) {
        assert_near("λ", *found, *expected, 0.0, 1e-12 * scale);
    }
}

#[test]
fn chains_in_supercells_have_their_textbook_dispersion() {
    // Springs to the third neighbour, supercells down to two cells along the chain: folded constants alias, and are
    // exact all the same wherever S·q is integer.
    let along = [2.0, 0.3, -0.1];
    let model = chain(&along, 0.7, 5.0);
    for supercell in [
        [[2, 0, 0], [0, 1, 0], [0, 0, 1]],
        [[6, 0, 0], [0, 2, 0], [0, 0, 3]],
        [[7, 0, 0], [0, -4, 0], [0, 0, 1]],
        [[4, 1, 0], [0, 3, -1], [1, 0, 2]],
    ] {
        let dynamics = dynamics(&model, supercell);
        let points = dynamics.constants().supercell().commensurate_points();
        assert_eq!(points.len(), dynamics.constants().supercell().cell_count());
        for q in points.iter().skip(1) {
            let expected = closed_forms::chain_in_net(&along, 0.7, 5.0, (*q).into());
            assert_modes(&dynamics, q, &expected);
        }
    }
}

#[test]
fn diatomic_chains_in_supercells_have_their_textbook_dispersion() {
    for (springs, masses) in [([2.0, 2.0], [1.0, 3.0]), ([1.5, 0.4], [7.0, 7.0])] {
        let model = diatomic_chain(springs, 9.0, masses);
        for cells in [1, 3, 8] {
            let dynamics = dynamics(&model, [[cells, 0, 0], [0, 1, 0], [0, 0, 1]]);
            for index in 0..cells {
                let x = index as f64 / cells as f64;
                let theta = std::f64::consts::TAU * x;
                let along = closed_forms::diatomic_chain(springs, masses, theta);
                let across = closed_forms::diatomic_chain([9.0, 9.0], masses, theta);
                let mut expected = along.to_vec();
                expected.extend([across[0], across[0], across[1], across[1]]);
                expected.sort_by(f64::total_cmp);
                assert_modes(&dynamics, &Vector3::new(x, 0.0, 0.0), &expected);
            }
        }
    }
}

#[test]
fn cubic_crystals_in_supercells_have_their_zone_boundary_values() {
    let scale = 1.7 / 3.0;
    let model = fcc(1.7, 3.0);
    // W = (1, ½, 0) and K = (¾, ¾, 0) fit four, respectively eight, primitive cells along each axis.
    let folded = dynamics(&model, diagonal(8));
    for (reduced, squares) in closed_forms::fcc_zone_boundary() {
        let q = model.fractional_q(CUBE_EDGE_ANG, reduced);
        assert_modes(&folded, &q, &squares.map(|x| x * scale));
    }
    for eighths in 1..8 {
        let zeta = f64::from(eighths) / 4.0;
        let q = model.fractional_q(CUBE_EDGE_ANG, [zeta, 0.0, 0.0]);
        let squares = closed_forms::fcc_along_cube_axis(zeta);
        let mut expected = squares.map(|x| x * scale);
        expected.sort_by(f64::total_cmp);
        assert_modes(&folded, &q, &expected);
    }
    for second in [0.3, 0.0, -0.2] {
        let model = bcc(1.2, second, 2.0);
        let folded = dynamics(&model, diagonal(4));
        for (reduced, squares) in closed_forms::bcc_zone_boundary(1.2, second) {
            let q = model.fractional_q(CUBE_EDGE_ANG, reduced);
            assert_modes(&folded, &q, &squares.map(|x| x / 2.0));
        }
    }
}

#[test]
fn cubic_crystals_have_their_elastic_constants() {
    // a C₁₁, a C₁₂, a C₄₄ = 2K, K, K in fcc and 2K₁/3 + 2K₂, 2K₁/3, 2K₁/3 in bcc (reference/lattice_exact.toml).
    let edge = CUBE_EDGE_ANG;
    let gpa = tarehouse_physics::units::EV_PER_ANG3_TO_GPA;
    let check = |name: &str, model: &SpringCrystal, expected: [f64; 3]| {
        let found = cubic_elastic_gpa(&dynamics(model, diagonal(4)));
        for (found, expected) in found.iter().zip(expected) {
            assert_near(name, *found, expected * gpa / edge, 1e-11, 0.0);
        }
    };
    check("fcc", &fcc(1.7, 3.0), [3.4, 1.7, 1.7]);
    check("bcc", &bcc(1.2, 0.3, 2.0), [1.4, 0.8, 0.8]);
}

/// Lowest eigenvalue on the Γ-centred mesh with `n` divisions along the chain.
fn lowest_on_mesh(dynamics: &Dynamics, n: u32) -> f64 {
    let supercell = dynamics.constants().supercell();
    let group = SpaceGroup::find(dynamics.crystal(), 1e-3).unwrap();
    let mesh = QMesh::with_divisions([n, 1, 1], supercell, &group);
    let points = mesh.points().iter();
    let lowest = points.map(|point| dynamics.eigenvalues(&point.q).unwrap()[0]);
    lowest.fold(f64::INFINITY, f64::min)
}

#[test]
fn even_meshes_see_a_soft_zone_boundary_and_odd_ones_do_not() {
    // Eight cells along the chain hold springs to the third neighbour without aliasing.
    let model = soft_boundary_chain(1.0, 1.0);
    let folded = dynamics(&model, [[8, 0, 0], [0, 2, 0], [0, 0, 2]]);
    for n in [2, 4, 6, 8, 10] {
        assert_near("even", lowest_on_mesh(&folded, n), -0.8, 1e-12, 0.0);
    }
    for n in [3, 5, 7, 9] {
        // Γ itself is the lowest point there.
        assert_near("odd", lowest_on_mesh(&folded, n), 0.0, 0.0, 1e-12);
    }
    // Odd supercells fold the constants as well, and their commensurate points are all stable; even ones show it.
    for cells in 2..8 {
        let folded = dynamics(&model, [[cells, 0, 0], [0, 1, 0], [0, 0, 1]]);
        let points = folded.constants().supercell().commensurate_points();
        let lowest = points.iter().map(|q| folded.eigenvalues(q).unwrap()[0]);
        let lowest = lowest.fold(f64::INFINITY, f64::min);
        let expected = if cells % 2 == 0 { -0.8 } else { 0.0 };
        assert_near("commensurate", lowest, expected, 0.0, 1e-12);
    }
}
