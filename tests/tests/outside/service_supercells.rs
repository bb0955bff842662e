//! Constants folded into any supercell are exact at the wave vectors that fit it (Parlinski, Li & Kawazoe, Phys. Rev.
//! Lett. 78, 4063 (1997)), and a supercell taken as the cell has the same modes.

use nalgebra::{Matrix3, Vector3};
use tarehouse_demo_data::RealSpaceConstants;
use tarehouse_demo_data::forms::{DROSMELIDE_II, PELQUONOL_ALPHA};
use tarehouse_demo_data::scenario::diagonal_supercell;
use tarehouse_physics::{Crystal, ForceConstants, Supercell};
use tarehouse_tests::models::metals::Metal;

use crate::reference::assert_near;
use crate::service::{dynamics, dynamics_of, thz};

/// Diagonal, conventional (not diagonal in the primitive basis), left-handed, and skew.
const SUPERCELLS: [[[i64; 3]; 3]; 7] = [
    [[2, 0, 0], [0, 2, 0], [0, 0, 2]],
    [[3, 0, 0], [0, 4, 0], [0, 0, 1]],
    [[-1, 1, 1], [1, -1, 1], [1, 1, -1]],
    [[-2, 2, 2], [2, -2, 2], [2, 2, -2]],
    [[0, 3, 0], [3, 0, 0], [0, 0, 3]],
    [[3, 1, 0], [0, 2, -1], [1, 0, 2]],
    [[1, 2, -3], [4, -1, 0], [0, 1, 3]],
];

#[test]
fn folded_aluminium_is_exact_where_the_wave_vector_fits() {
    // Eight shells reach farther than most of these supercells.
    let model = Metal::all()["Al_80K_axial8"].model();
    for matrix in SUPERCELLS {
        let dynamics = dynamics(&model, matrix);
        let supercell = dynamics.constants().supercell();
        let points = supercell.commensurate_points();
        assert_eq!(points.len(), supercell.cell_count());
        for q in points {
            let exact = model.dynamical_matrix(&q);
            let found = dynamics.matrix(&q);
            let scale = exact.norm().max(1.0);
            for (k, found) in found.iter().enumerate() {
                let error = (found - exact[(k / 3, k % 3)]).norm();
                assert!(error < 1e-12 * scale, "{matrix:?} at {q:?}: {error:e}");
            }
            let found = thz(&dynamics.eigenvalues(&q).unwrap());
            for (found, expected) in found.iter().zip(thz(&model.eigenvalues(&q))) {
                // Near zero a frequency is the root of rounding.
                let absolute = if expected.abs() < 1e-3 { 1e-6 } else { 0.0 };
                assert_near("THz", *found, expected, 1e-10, absolute);
            }
        }
    }
}

#[test]
fn folded_aluminium_is_aliased_in_between() {
    let model = Metal::all()["Al_80K_axial8"].model();
    let dynamics = dynamics(&model, SUPERCELLS[0]);
    let q = Vector3::new(0.25, 0.1, 0.4);
    let found = thz(&dynamics.eigenvalues(&q).unwrap());
    let exact = thz(&model.eigenvalues(&q));
    let largest = found.iter().zip(&exact).map(|(a, b)| (a - b).abs());
    assert!(largest.fold(0.0, f64::max) > 1e-2);
}

#[test]
fn folded_molecular_crystals_are_exact_where_the_wave_vector_fits() {
    for (form, matrices) in [
        (
            DROSMELIDE_II,
            [
                [[2, 0, 0], [0, 1, 0], [0, 0, 1]],
                [[1, 1, 0], [-1, 1, 0], [0, 0, 1]],
            ],
        ),
        (
            PELQUONOL_ALPHA,
            [
                [[1, 0, 0], [0, -2, 0], [0, 0, 1]],
                [[1, 0, 1], [0, 1, 0], [-1, 0, 2]],
            ],
        ),
    ] {
        let exact = RealSpaceConstants::of(&form.crystal().unwrap()).unwrap();
        for matrix in matrices {
            let supercell = Supercell::with_default_translations(matrix).unwrap();
            let points = supercell.commensurate_points();
            let folded = exact.folded(&supercell).unwrap();
            let dynamics = dynamics_of(exact.crystal(), &folded);
            for q in points {
                let found = dynamics.eigenvalues(&q).unwrap();
                let expected = exact.eigenvalues(&q).unwrap();
                let scale = expected.last().copied().unwrap();
                for (found, expected) in found.iter().zip(expected) {
                    assert_near("λ", *found, expected, 0.0, 1e-12 * scale);
                }
            }
        }
    }
}

/// A supercell taken as the cell: atom (l, i) becomes atom l·n + i, and constants with it, in a 1×1×1 supercell.
fn as_one_cell(crystal: &Crystal, constants: &ForceConstants) -> (Crystal, ForceConstants) {
    let (supercell, n) = (constants.supercell(), crystal.atom_count());
    let cells = supercell.cell_count();
    let to_large = supercell.matrix_f64().try_inverse().unwrap();
    let mut positions = Vec::new();
    for translation in supercell.translations() {
        let origin = Vector3::from(translation.map(|x| x as f64));
        positions.extend(
            crystal
                .positions()
                .iter()
                .map(|x| to_large.tr_mul(&(x + origin))),
        );
    }
    let elements = crystal.elements().repeat(cells);
    let masses = Some(crystal.masses_u().repeat(cells));
    let cell = supercell.vectors(crystal.cell());
    let large = Crystal::new(cell, elements, positions, masses).unwrap();
    let mut blocks = vec![Matrix3::zeros(); (cells * n).pow(2)];
    for first in 0..cells {
        for second in 0..cells {
            let apart = supercell.sum(supercell.negative(first), second);
            for i in 0..n {
                for j in 0..n {
                    let place = (first * n + i) * cells * n + second * n + j;
                    blocks[place] = *constants.block(apart, i, j);
                }
            }
        }
    }
    let one = diagonal_supercell([1, 1, 1]).unwrap();
    (
        large,
        ForceConstants::from_blocks(one, cells * n, blocks).unwrap(),
    )
}

#[test]
fn supercell_of_a_supercell_has_the_same_frequencies() {
    // Γ of the large cell holds every commensurate wave vector of the small one; other wave vectors Q of the large cell
    // hold q = Sᵀ⁻¹-images of it: Q = S q + integers.
    let pelquonol = RealSpaceConstants::of(&PELQUONOL_ALPHA.crystal().unwrap()).unwrap();
    let skew = Supercell::with_default_translations([[1, 1, 0], [-1, 1, 0], [0, 0, 1]]).unwrap();
    let aluminium = Metal::all()["Al_80K_axial8"].model();
    let metal = aluminium.constants([[2, 1, 0], [0, 2, 1], [-1, 0, 2]]);
    let molecular = pelquonol.folded(&skew).unwrap();
    let cases = [
        (aluminium.crystal().clone(), metal),
        (pelquonol.crystal().clone(), molecular),
    ];
    for (crystal, constants) in cases {
        let small = dynamics_of(&crystal, &constants);
        let (large_crystal, large_constants) = as_one_cell(&crystal, &constants);
        let large = dynamics_of(&large_crystal, &large_constants);
        let supercell = constants.supercell();
        let from_large = supercell.matrix_f64().try_inverse().unwrap();
        // In between wave vectors that fit, both interpolate from the same nearest images.
        for large_q in [
            Vector3::zeros(),
            Vector3::new(0.5, 0.0, 0.0),
            Vector3::new(0.13, -0.3, 0.41),
        ] {
            let mut expected: Vec<f64> = supercell
                .commensurate_points()
                .iter()
                .flat_map(|q| small.eigenvalues(&(from_large * large_q + q)).unwrap())
                .collect();
            expected.sort_by(f64::total_cmp);
            let found = large.eigenvalues(&large_q).unwrap();
            let scale = expected.last().copied().unwrap();
            assert_eq!(found.len(), expected.len());
            for (found, expected) in found.iter().zip(expected) {
                assert_near("λ", *found, expected, 0.0, 1e-12 * scale);
            }
        }
    }
}
