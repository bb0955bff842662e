//! Energy, forces and relaxation.

use nalgebra::{Matrix3, Rotation3, Vector3};
use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use tarehouse_demo_data::forms::{self, Form, Substance};
use tarehouse_demo_data::molecular_crystal::STRAIN_AXES;
use tarehouse_demo_data::packing::random_packing;
use tarehouse_demo_data::potential::{Contact, PairValue, Spring};
use tarehouse_demo_data::relax::{TIGHT, largest_force};
use tarehouse_demo_data::{MolecularCrystal, SpaceGroup, relax};

/// A crystal that is far from rest and has no symmetry, so that nothing vanishes by accident.
pub(crate) fn strained() -> MolecularCrystal {
    let crystal = forms::DROSMELIDE_IV.crystal().unwrap();
    let shifts: Vec<Vector3<f64>> = (0..crystal.atom_count())
        .map(|k| {
            let x = k as f64;
            Vector3::new((1.3 * x).sin(), (2.1 * x).cos(), (0.7 * x).sin()) * 0.05
        })
        .collect();
    let shear = Matrix3::new(1.01, 0.02, -0.01, 0.0, 0.99, 0.015, 0.01, 0.0, 1.02);
    crystal
        .displaced(&shifts)
        .unwrap()
        .deformed(&shear)
        .unwrap()
}

fn assert_derivatives(of: impl Fn(f64) -> PairValue, at: f64) {
    let h = 1e-5;
    let (below, here, above) = (of(at - h), of(at), of(at + h));
    let slope = (above.energy - below.energy) / (2.0 * h);
    let curvature = (above.slope - below.slope) / (2.0 * h);
    assert!(
        (slope - here.slope).abs() < 1e-8 * (1.0 + here.curvature.abs()),
        "slope at {at}"
    );
    assert!(
        (curvature - here.curvature).abs() < 1e-6 * (1.0 + here.curvature.abs()),
        "at {at}"
    );
}

#[test]
fn pair_terms_have_the_derivatives_they_state() {
    let spring = Spring {
        stiffness: 30.0,
        rest: 1.1,
        softening: 1.8,
    };
    let contact = Contact {
        repulsion: 5000.0,
        attraction: 40.0,
        charge_product: -0.5,
        cutoff: 6.0,
    };
    for at in [0.9, 1.1, 1.4] {
        assert_derivatives(|r| spring.at(r), at);
    }
    for at in [2.4, 3.1, 4.0, 5.2, 5.9] {
        assert_derivatives(|r| contact.at(r), at);
    }
    assert!((spring.at(1.1).curvature - 30.0).abs() < 1e-12);
}

#[test]
fn contacts_end_smoothly() {
    let contact = Contact {
        repulsion: 5000.0,
        attraction: 40.0,
        charge_product: -0.5,
        cutoff: 6.0,
    };
    // Near the cutoff V falls as the fourth power of the gap, so that V'' falls as its square.
    let (near, nearer) = (contact.at(6.0 - 2e-3), contact.at(6.0 - 1e-3));
    let ratio = near.curvature / nearer.curvature;
    assert!((ratio - 4.0).abs() < 0.05, "ratio {ratio}");
    assert!((near.energy / nearer.energy - 16.0).abs() < 0.2);
    assert!(contact.at(6.0).curvature.abs() < f64::MIN_POSITIVE);
    assert!(contact.at(7.0).energy.abs() < f64::MIN_POSITIVE);
}

#[test]
fn energy_is_blind_to_rotation_translation_and_reflection() {
    let crystal = strained();
    let energy = crystal.energy_ev();
    assert!(energy.abs() > 0.1);
    let turn = Rotation3::from_euler_angles(0.3, -1.1, 2.4).into_inner();
    for motion in [turn, -turn, -Matrix3::identity()] {
        let moved = crystal.deformed(&motion).unwrap();
        assert!((moved.energy_ev() - energy).abs() < 1e-11);
        for (force, turned) in crystal.forces().iter().zip(moved.forces()) {
            assert!((motion * force - turned).amax() < 1e-10);
        }
    }
    let shift = vec![Vector3::new(3.7, -12.1, 0.4); crystal.atom_count()];
    assert!((crystal.displaced(&shift).unwrap().energy_ev() - energy).abs() < 1e-11);
    // A whole molecule may stand in another cell.
    let size = crystal.compound().sites().len();
    let mut hop = vec![Vector3::zeros(); crystal.atom_count()];
    hop[..size].fill(crystal.lattice_vector(&[1, -2, 1]));
    assert!((crystal.displaced(&hop).unwrap().energy_ev() - energy).abs() < 1e-11);
}

#[test]
fn forces_are_minus_the_slope_of_the_energy() {
    let crystal = strained();
    let forces = crystal.forces();
    let gradient = crystal.derivatives().gradient;
    let h = 1e-5;
    for atom in 0..crystal.atom_count() {
        for axis in 0..3 {
            let at = |step: f64| {
                let mut shift = vec![Vector3::zeros(); crystal.atom_count()];
                shift[atom][axis] = step;
                crystal.displaced(&shift).unwrap().energy_ev()
            };
            let slope = (at(h) - at(-h)) / (2.0 * h);
            assert!((slope + forces[atom][axis]).abs() < 1e-7);
            assert!((gradient[3 * atom + axis] + forces[atom][axis]).abs() < 1e-12);
        }
    }
    assert!(forces.iter().map(Vector3::amax).fold(0.0, f64::max) > 0.1);
}

#[test]
fn strain_derivatives_agree_with_differences() {
    let crystal = strained();
    let derivatives = crystal.derivatives();
    let (offset, h) = (3 * crystal.atom_count(), 1e-5);
    let volume = crystal.cell().determinant();
    let stress = crystal.stress_ev_per_ang3();
    for (k, &(a, b)) in STRAIN_AXES.iter().enumerate() {
        let at = |step: f64| {
            let mut deformation = Matrix3::identity();
            deformation[(a, b)] += step;
            if a != b {
                deformation[(b, a)] += step;
            }
            crystal.deformed(&deformation).unwrap().derivatives()
        };
        let (above, below) = (at(h), at(-h));
        let slope = (above.energy_ev - below.energy_ev) / (2.0 * h);
        let stated = derivatives.gradient[offset + k];
        assert!((slope - stated).abs() < 1e-6 * (1.0 + stated.abs()));
        let share = if a == b { 1.0 } else { 2.0 };
        assert!((share * stress[(a, b)] * volume - stated).abs() < 1e-9);
        let curvature = (above.energy_ev - 2.0 * derivatives.energy_ev + below.energy_ev) / (h * h);
        let stated = derivatives.hessian[(offset + k, offset + k)];
        assert!(
            (curvature - stated).abs() < 1e-3 * (1.0 + stated.abs()),
            "{curvature} {stated}"
        );
    }
}

#[test]
fn every_form_is_at_rest() {
    for form in forms::ALL {
        let crystal = form.crystal().unwrap();
        assert!(largest_force(&crystal) < 1e-10, "form {}", form.label);
        assert!(
            crystal.stress_ev_per_ang3().amax() < 1e-10,
            "form {}",
            form.label
        );
        let derivatives = crystal.derivatives();
        assert!(derivatives.gradient.amax() < 1e-8);
        assert_eq!(crystal.molecule_count(), form.group.operations().len());
    }
}

#[test]
fn stored_geometry_is_used_to_the_last_bit() {
    for form in forms::ALL {
        let crystal = form.crystal().unwrap();
        let cell = Matrix3::from_fn(|r, c| form.cell[r][c]);
        assert_eq!(*crystal.cell(), cell);
    }
}

fn shaken(form: &Form) -> MolecularCrystal {
    let cell = Matrix3::from_fn(|r, c| form.cell[r][c] * 1.01);
    let molecule: Vec<Vector3<f64>> = form
        .molecule
        .iter()
        .enumerate()
        .map(|(k, x)| Vector3::from(*x) + Vector3::new(1.0, -1.0, 0.5) * 0.004 * (k as f64).cos())
        .collect();
    let compound = form.substance.compound().unwrap();
    MolecularCrystal::from_group(compound, form.group, cell, &molecule).unwrap()
}

#[test]
fn relaxation_finds_a_shaken_form_again() {
    for form in forms::ALL {
        let start = shaken(&form);
        assert!(largest_force(&start) > 1e-2);
        let found = relax(&start, form.group, TIGHT).unwrap();
        let wanted = form.crystal().unwrap().energy_ev();
        assert!(
            (found.energy_ev() - wanted).abs() < 1e-9,
            "form {}",
            form.label
        );
        assert!(largest_force(&found) < 1e-10);
    }
}

#[test]
fn random_packings_have_the_symmetry_of_their_group() {
    for group in SpaceGroup::ALL {
        let compound = Substance::Pelquonol.compound().unwrap();
        let mut rng = ChaCha8Rng::seed_from_u64(5);
        let crystal = random_packing(&compound, group, &mut rng).unwrap().unwrap();
        let forces = crystal.forces();
        for (copy, operation) in group.operations().iter().enumerate() {
            let turn = operation.cartesian(crystal.cell());
            assert!((turn * turn.transpose() - Matrix3::identity()).amax() < 1e-12);
            for site in 0..compound.sites().len() {
                let image = forces[copy * compound.sites().len() + site];
                assert!(
                    (turn * forces[site] - image).amax() < 1e-10,
                    "{}",
                    group.symbol()
                );
            }
        }
        assert!(forces.iter().any(|f| f.amax() > 1e-4));
    }
}
