//! What must not change when a crystal is described in another way: turned axes, another order of the atoms, another
//! primitive cell, atoms in other cells.

use std::sync::LazyLock;

use nalgebra::{Matrix3, Rotation3, Vector3};
use proptest::prelude::*;
use rand::seq::SliceRandom;
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use tarehouse_demo_data::RealSpaceConstants;
use tarehouse_demo_data::forms::{PELQUONOL_ALPHA, PELQUONOL_BETA};
use tarehouse_demo_data::scenario::diagonal_supercell;
use tarehouse_physics::dynamics::Dynamics;
use tarehouse_physics::supercell::Translation;
use tarehouse_physics::symmetry::SpaceGroup;
use tarehouse_physics::units::EV_TO_KJ_PER_MOL;
use tarehouse_physics::{Crystal, ForceConstants, Supercell};

use crate::reference::assert_near;
use crate::service::{MeshModes, dynamics_of};

/// A crystal with its constants.
pub(crate) type Described = (Crystal, ForceConstants);

fn rebuilt(
    crystal: &Crystal,
    cell: Matrix3<f64>,
    order: &[usize],
    positions: &[Vector3<f64>],
) -> Crystal {
    let elements = order.iter().map(|&i| crystal.elements()[i]).collect();
    let masses = order.iter().map(|&i| crystal.masses_u()[i]).collect();
    Crystal::new(cell, elements, positions.to_vec(), Some(masses)).unwrap()
}

fn identity_order(crystal: &Crystal) -> Vec<usize> {
    (0..crystal.atom_count()).collect()
}

/// The crystal with everything turned by R: rows of the cell A Rᵀ, blocks R Φ Rᵀ.
pub(crate) fn turned((crystal, constants): &Described, turn: &Matrix3<f64>) -> Described {
    let cell = crystal.cell() * turn.transpose();
    let order = identity_order(crystal);
    let crystal = rebuilt(crystal, cell, &order, crystal.positions());
    let constants = constants.map_blocks(|_, block| turn * block * turn.transpose());
    (crystal, constants)
}

/// The crystal with its atoms in another order: atom k of the new list is atom `order[k]` of the old.
pub(crate) fn permuted((crystal, constants): &Described, order: &[usize]) -> Described {
    let positions: Vec<_> = order.iter().map(|&i| crystal.positions()[i]).collect();
    let n = order.len();
    let moved = constants.map_blocks(|flat, _| {
        let (cell, i, j) = (flat / (n * n), flat / n % n, flat % n);
        *constants.block(cell, order[i], order[j])
    });
    (rebuilt(crystal, *crystal.cell(), order, &positions), moved)
}

/// The crystal with atom i written `shifts[i]` cells away: R becomes R + sᵢ − sⱼ.
pub(crate) fn wrapped((crystal, constants): &Described, shifts: &[Translation]) -> Described {
    let as_vector = |s: &Translation| Vector3::from(s.map(|x| x as f64));
    let pairs = crystal.positions().iter().zip(shifts);
    let positions: Vec<_> = pairs.map(|(x, s)| x + as_vector(s)).collect();
    let (supercell, n) = (constants.supercell(), crystal.atom_count());
    let moved = constants.map_blocks(|flat, _| {
        let (cell, i, j) = (flat / (n * n), flat / n % n, flat % n);
        let there = supercell.translations()[cell];
        let before: Translation = std::array::from_fn(|c| there[c] - shifts[i][c] + shifts[j][c]);
        *constants.block(supercell.index_of(&before), i, j)
    });
    let order = identity_order(crystal);
    (rebuilt(crystal, *crystal.cell(), &order, &positions), moved)
}

/// The crystal in the primitive cell U A, U unimodular: fractional columns become U⁻ᵀ x, S becomes S U⁻¹.
pub(crate) fn recelled((crystal, constants): &Described, change: &[[i64; 3]; 3]) -> Described {
    let u = Matrix3::from_fn(|r, c| change[r][c] as f64);
    let inverse = integer_inverse(change);
    let to_new = |x: &Translation| -> Translation {
        std::array::from_fn(|r| (0..3).map(|c| inverse[c][r] * x[c]).sum())
    };
    let old = constants.supercell();
    let matrix = std::array::from_fn(|r| {
        std::array::from_fn(|c| (0..3).map(|k| old.matrix()[r][k] * inverse[k][c]).sum())
    });
    let translations = old.translations().iter().map(to_new).collect();
    let supercell = Supercell::new(matrix, translations).unwrap();
    let float_inverse = Matrix3::from_fn(|r, c| inverse[r][c] as f64);
    let positions: Vec<_> = crystal
        .positions()
        .iter()
        .map(|x| float_inverse.tr_mul(x))
        .collect();
    let order = identity_order(crystal);
    let n = crystal.atom_count();
    let blocks = constants.blocks().to_vec();
    (
        rebuilt(crystal, u * crystal.cell(), &order, &positions),
        ForceConstants::from_blocks(supercell, n, blocks).unwrap(),
    )
}

fn integer_inverse(matrix: &[[i64; 3]; 3]) -> [[i64; 3]; 3] {
    let m = |r: usize, c: usize| matrix[r % 3][c % 3];
    let cofactor =
        |r: usize, c: usize| m(r + 1, c + 1) * m(r + 2, c + 2) - m(r + 1, c + 2) * m(r + 2, c + 1);
    let determinant: i64 = (0..3).map(|c| matrix[0][c] * cofactor(0, c)).sum();
    assert_eq!(determinant.abs(), 1);
    std::array::from_fn(|r| std::array::from_fn(|c| determinant * cofactor(c, r)))
}

/// A random rotation; not uniform, but of every kind.
pub(crate) fn rotation(rng: &mut ChaCha8Rng) -> Matrix3<f64> {
    let mut angle = || rng.random_range(-3.0..3.0);
    Rotation3::from_euler_angles(angle(), angle(), angle()).into_inner()
}

/// A random order of n atoms.
pub(crate) fn order(rng: &mut ChaCha8Rng, n: usize) -> Vec<usize> {
    let mut order: Vec<usize> = (0..n).collect();
    order.shuffle(rng);
    order
}

/// Random shifts by a few cells.
pub(crate) fn shifts(rng: &mut ChaCha8Rng, n: usize) -> Vec<Translation> {
    (0..n)
        .map(|_| std::array::from_fn(|_| rng.random_range(-2..3)))
        .collect()
}

/// A product of a few shears and exchanges of axes: unimodular, of either hand.
pub(crate) fn unimodular(rng: &mut ChaCha8Rng) -> [[i64; 3]; 3] {
    let mut matrix = [[1, 0, 0], [0, 1, 0], [0, 0, 1]];
    for _ in 0..2 {
        let (row, other) = (rng.random_range(0..3_usize), rng.random_range(1..3_usize));
        let added = matrix[(row + other) % 3];
        for (entry, term) in matrix[row].iter_mut().zip(added) {
            *entry += term;
        }
    }
    if rng.random_range(0..2) == 0 {
        matrix.swap(0, 2);
    }
    matrix
}

static CRYSTALS: LazyLock<Vec<Described>> = LazyLock::new(|| {
    // Every constant is unaliased in a cell large enough; ties are exact by symmetry in neither.
    [(PELQUONOL_BETA, [2, 2, 2]), (PELQUONOL_ALPHA, [2, 1, 1])]
        .into_iter()
        .map(|(form, counts)| {
            let exact = RealSpaceConstants::of(&form.crystal().unwrap()).unwrap();
            let folded = exact.folded(&diagonal_supercell(counts).unwrap()).unwrap();
            (exact.crystal().clone(), folded)
        })
        .collect()
});

fn dynamics((crystal, constants): &Described) -> Dynamics {
    dynamics_of(crystal, constants)
}

#[track_caller]
fn assert_spectrum(found: &Dynamics, at: &Vector3<f64>, expected: &Dynamics, q: &Vector3<f64>) {
    let (found, expected) = (
        found.eigenvalues(at).unwrap(),
        expected.eigenvalues(q).unwrap(),
    );
    let scale = expected.last().copied().unwrap();
    for (found, expected) in found.iter().zip(expected) {
        assert_near("λ", *found, expected, 0.0, 1e-11 * scale);
    }
}

/// Divisions of the meshes that stand for themselves.
const MESH: u32 = 3;
/// Divisions where two meshes are compared that treat Γ differently.
const FINE_MESH: u32 = 6;

/// F(300 K) on an n×n×n mesh, kJ/mol per cell.
fn free_energy(described: &Described, n: u32) -> f64 {
    let dynamics = dynamics(described);
    let group = SpaceGroup::find(&described.0, 1e-3).unwrap();
    MeshModes::on(&dynamics, [n; 3], &group)
        .state(300.0)
        .free_energy
        * EV_TO_KJ_PER_MOL
}

fn wave_vector() -> impl Strategy<Value = Vector3<f64>> {
    prop::array::uniform3(-0.5..0.5_f64).prop_map(Vector3::from)
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(12))]

    #[test]
    fn turning_the_crystal_changes_nothing(seed: u64, q in wave_vector()) {
        let mut rng = ChaCha8Rng::seed_from_u64(seed);
        for crystal in CRYSTALS.iter() {
            let turned = turned(crystal, &rotation(&mut rng));
            assert_spectrum(&dynamics(&turned), &q, &dynamics(crystal), &q);
            // The window of the Γ correction is bound to the mesh, and turns with it.
            assert_near("F", free_energy(&turned, MESH), free_energy(crystal, MESH), 0.0, 1e-6);
        }
    }

    #[test]
    fn order_of_atoms_changes_nothing(seed: u64, q in wave_vector()) {
        let mut rng = ChaCha8Rng::seed_from_u64(seed);
        for crystal in CRYSTALS.iter() {
            let permuted = permuted(crystal, &order(&mut rng, crystal.0.atom_count()));
            assert_spectrum(&dynamics(&permuted), &q, &dynamics(crystal), &q);
            assert_near("F", free_energy(&permuted, MESH), free_energy(crystal, MESH), 0.0, 1e-7);
        }
    }

    #[test]
    fn cells_in_which_atoms_are_written_change_nothing(seed: u64, q in wave_vector()) {
        let mut rng = ChaCha8Rng::seed_from_u64(seed);
        for crystal in CRYSTALS.iter() {
            let wrapped = wrapped(crystal, &shifts(&mut rng, crystal.0.atom_count()));
            assert_spectrum(&dynamics(&wrapped), &q, &dynamics(crystal), &q);
            assert_near("F", free_energy(&wrapped, MESH), free_energy(crystal, MESH), 0.0, 1e-7);
        }
    }

    #[test]
    fn another_primitive_cell_changes_nothing(seed: u64, q in wave_vector()) {
        let mut rng = ChaCha8Rng::seed_from_u64(seed);
        for crystal in CRYSTALS.iter() {
            let change = unimodular(&mut rng);
            let recelled = recelled(crystal, &change);
            // Fractional reciprocal coordinates become U q.
            let u = Matrix3::from_fn(|r, c| change[r][c] as f64);
            assert_spectrum(&dynamics(&recelled), &(u * q), &dynamics(crystal), &q);
            // Both meshes are the same set of points, but the window of the Γ correction is round in mesh indices: F moves
            // by what the correction leaves.
            assert_near("F", free_energy(&recelled, FINE_MESH), free_energy(crystal, FINE_MESH), 0.0, 0.01);
        }
    }

    #[test]
    fn matrices_are_conjugate_at_opposite_and_periodic_in_equivalent_wave_vectors(
        q in wave_vector(),
        shift in prop::array::uniform3(-3..4_i32),
    ) {
        for crystal in CRYSTALS.iter() {
            let dynamics = dynamics(crystal);
            let (there, back) = (dynamics.matrix(&q), dynamics.matrix(&-q));
            let scale = there.iter().map(|z| z.norm()).fold(0.0, f64::max);
            for (there, back) in there.iter().zip(&back) {
                assert!((there - back.conj()).norm() < 1e-14 * scale);
            }
            let order = dynamics.branch_count();
            for (place, entry) in there.iter().enumerate() {
                let mirrored = there[place % order * order + place / order];
                assert!((entry - mirrored.conj()).norm() < 1e-15 * scale);
            }
            let equivalent = q + Vector3::from(shift.map(f64::from));
            assert_spectrum(&dynamics, &equivalent, &dynamics, &q);
            assert_spectrum(&dynamics, &-q, &dynamics, &q);
        }
    }
}
