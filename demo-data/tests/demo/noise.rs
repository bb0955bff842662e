//! Noise classes and enforced conditions.

use nalgebra::Matrix3;
use tarehouse_demo_data::constants::RealSpaceConstants;
use tarehouse_demo_data::forms::{self, Form};
use tarehouse_demo_data::noise::Disturbance;
use tarehouse_demo_data::scenario::diagonal_supercell;
use tarehouse_demo_data::symmetry::AtomMap;
use tarehouse_physics::{Crystal, ForceConstants};

fn exact(form: &Form, cells: [i64; 3]) -> (Crystal, ForceConstants) {
    let exact = RealSpaceConstants::of(&form.crystal().unwrap()).unwrap();
    let folded = exact.folded(&diagonal_supercell(cells).unwrap()).unwrap();
    (exact.crystal().clone(), folded)
}

fn rms_gap(left: &ForceConstants, right: &ForceConstants) -> f64 {
    let pairs = left.blocks().iter().zip(right.blocks());
    let square: f64 = pairs.map(|(a, b)| (a - b).norm_squared()).sum();
    (square / (9.0 * left.blocks().len() as f64)).sqrt()
}

/// Largest pair asymmetry, and largest sum over translations and response or displaced atom.
fn residuals(constants: &ForceConstants) -> (f64, f64, f64) {
    let (n, cells) = (constants.atom_count(), constants.supercell().cell_count());
    let (mut pair, mut row_sum, mut column_sum): (f64, f64, f64) = (0.0, 0.0, 0.0);
    for i in 0..n {
        let (mut row, mut column) = (Matrix3::zeros(), Matrix3::zeros());
        for l in 0..cells {
            for j in 0..n {
                let mirrored = constants.block(constants.supercell().negative(l), j, i);
                pair = pair.max((constants.block(l, i, j) - mirrored.transpose()).amax());
                row += constants.block(l, i, j);
                column += constants.block(l, j, i);
            }
        }
        row_sum = row_sum.max(row.amax());
        column_sum = column_sum.max(column.amax());
    }
    (pair, row_sum, column_sum)
}

#[test]
fn white_noise_has_its_size_and_its_seed() {
    let (crystal, clean) = exact(&forms::PELQUONOL_BETA, [2, 3, 3]);
    let noise = Disturbance::White { sigma: 1e-3 };
    let first = noise.apply(&crystal, &clean, 1).unwrap();
    assert!((rms_gap(&first, &clean) / 1e-3 - 1.0).abs() < 0.02);
    assert_eq!(first, noise.apply(&crystal, &clean, 1).unwrap());
    let second = noise.apply(&crystal, &clean, 2).unwrap();
    // Independent draws are √2 apart.
    assert!((rms_gap(&first, &second) / 1e-3 - 2.0_f64.sqrt()).abs() < 0.03);
}

#[test]
fn self_fixed_noise_hides_from_one_sum_only() {
    let (crystal, clean) = exact(&forms::PELQUONOL_BETA, [2, 2, 2]);
    let noise = Disturbance::SelfFixed { sigma: 1e-3 };
    let (pair, row, column) = residuals(&noise.apply(&crystal, &clean, 3).unwrap());
    assert!(
        pair > 1e-3 && row < 1e-12 && column > 1e-3,
        "{pair} {row} {column}"
    );
}

#[test]
fn enforced_conditions_hold_and_enforcing_twice_changes_nothing() {
    let (crystal, clean) = exact(&forms::DROSMELIDE_IV, [2, 1, 3]);
    let noisy = Disturbance::White { sigma: 1e-3 }
        .apply(&crystal, &clean, 4)
        .unwrap();
    let pairs = Disturbance::PairSymmetryEnforced;
    let sums = Disturbance::TranslationSumEnforced;
    let once = sums
        .apply(&crystal, &pairs.apply(&crystal, &noisy, 0).unwrap(), 0)
        .unwrap();
    let (pair, row, column) = residuals(&once);
    assert!(
        pair < 1e-13 && row < 1e-12 && column < 1e-12,
        "{pair} {row} {column}"
    );
    let twice = pairs
        .apply(&crystal, &sums.apply(&crystal, &once, 0).unwrap(), 0)
        .unwrap();
    assert!(rms_gap(&once, &twice) < 1e-15);
    // A projection removes some of the noise and does not add any.
    let left = rms_gap(&once, &clean);
    assert!(left < 0.9e-3 && left > 0.5e-3, "{left}");
}

/// Largest |C Φ Cᵀ − Φ'| over the operations of the group that keep the supercell.
fn group_residual(form: &Form, crystal: &Crystal, constants: &ForceConstants) -> f64 {
    let (n, cells) = (crystal.atom_count(), constants.supercell());
    let mut largest: f64 = 0.0;
    for (index, operation) in form.group.operations().iter().enumerate() {
        assert!(cells.is_kept_by(&operation.rotation()));
        let map = AtomMap::new(operation, index, crystal.positions()).unwrap();
        let turn = operation.cartesian(crystal.cell());
        for (l, translation) in cells.translations().iter().enumerate() {
            for (i, j) in (0..n).flat_map(|i| (0..n).map(move |j| (i, j))) {
                let image = std::array::from_fn(|c| {
                    operation.signs[c] * translation[c] + map.shift[j][c] - map.shift[i][c]
                });
                let there = constants.block(cells.index_of(&image), map.atom[i], map.atom[j]);
                let carried = turn * constants.block(l, i, j) * turn.transpose();
                largest = largest.max((carried - there).amax());
            }
        }
    }
    largest
}

#[test]
fn inequivalent_noise_keeps_the_group_and_nothing_else() {
    for form in [
        forms::DROSMELIDE_I,
        forms::DROSMELIDE_II,
        forms::PELQUONOL_BETA,
    ] {
        let (crystal, clean) = exact(&form, [2, 1, 3]);
        assert!(group_residual(&form, &crystal, &clean) < 1e-9);
        let (sigma, group) = (1e-3, form.group);
        let white = Disturbance::White { sigma }
            .apply(&crystal, &clean, 5)
            .unwrap();
        assert!(group_residual(&form, &crystal, &white) > sigma);
        let noise = Disturbance::Inequivalent { sigma, group };
        let noisy = noise.apply(&crystal, &clean, 5).unwrap();
        assert!(group_residual(&form, &crystal, &noisy) < 1e-9);
        assert!((rms_gap(&noisy, &clean) / sigma - 1.0).abs() < 0.05);
        let (pair, row, _) = residuals(&noisy);
        assert!(pair > sigma && row > sigma);
    }
}

#[test]
fn rounding_and_truncation_do_what_they_say() {
    let (crystal, clean) = exact(&forms::PELQUONOL_ALPHA, [2, 2, 2]);
    let quantum = 1e-3;
    let rounded = Disturbance::Rounded { quantum }
        .apply(&crystal, &clean, 0)
        .unwrap();
    for value in rounded.blocks().iter().flat_map(|block| block.iter()) {
        assert!((value / quantum - (value / quantum).round()).abs() < 1e-9);
    }
    assert!(rms_gap(&rounded, &clean) < quantum);
    let cut = Disturbance::Truncated { range: 4.0 }
        .apply(&crystal, &clean, 0)
        .unwrap();
    let zeros = |c: &ForceConstants| c.blocks().iter().filter(|b| b.amax() < 1e-300).count();
    assert!(zeros(&cut) > zeros(&clean));
    assert!(rms_gap(&cut, &clean) > 1e-6);
    let home = cut.home_cell();
    assert_eq!(cut.block(home, 0, 1), clean.block(home, 0, 1));
}
