//! Tests of the benchmark itself: its truth must be true before it judges anything.

use nalgebra::{Matrix3, Vector3};
use tarehouse_demo_data::harmonic::{Mesh, Spectrum};
use tarehouse_demo_data::noise::Disturbance;
use tarehouse_demo_data::{Contribution, RealSpaceConstants, forms};
use tarehouse_physics::dynamics::Dynamics;
use tarehouse_physics::images::PairImages;
use tarehouse_physics::projection::projected;
use tarehouse_physics::units::{EV_TO_KJ_PER_MOL, eigenvalue_of_wavenumber};

use super::blunders::{Blunder, commit};
use super::exact::{Exact, TIE_ANG, diagonal, group_of, mesh_of, multiples_reaching, stable_truth};
use super::geometry::{forward, unrelaxed};
use super::instability::{Kind, softened};
use super::pool::{Member, Pool};
use super::{TEMPERATURES_K, generator, lean};

fn member(form: &forms::Form) -> Member {
    let model = form.crystal().unwrap();
    let exact = Exact::of(&RealSpaceConstants::of(&model).unwrap());
    Member {
        label: form.label.to_owned(),
        group: form.group,
        truth: None,
        model,
        exact,
    }
}

fn assert_close(left: &[f64], right: &[f64], tolerance: f64) {
    assert_eq!(left.len(), right.len());
    for (a, b) in left.iter().zip(right) {
        assert!((a - b).abs() < tolerance, "{a} {b}");
    }
}

/// A supercell that holds every contact interpolates exactly, whichever way the atoms are written.
#[test]
fn exact_matrix_is_that_of_a_large_supercell() {
    let member = member(&forms::DROSMELIDE_IV);
    let large = diagonal(multiples_reaching(&member.model.cell_heights(), 12.1)).unwrap();
    for exact in [member.exact.clone(), member.exact.wrapped().unwrap()] {
        let images = PairImages::find(exact.crystal(), &large, TIE_ANG);
        let folded = exact.folded(&large).unwrap();
        let dynamics = Dynamics::new(exact.crystal(), &folded, &images);
        for q in [Vector3::new(0.13, 0.41, 0.29), Vector3::new(0.5, 0.0, 0.07)] {
            let here = exact.eigenvalues(&q).unwrap();
            assert_close(&here, &dynamics.eigenvalues(&q).unwrap(), 1e-9);
            assert_close(&here, &member.exact.eigenvalues(&q).unwrap(), 1e-9);
        }
    }
}

/// The Γ-corrected sum against a plain sum over a denser mesh that misses Γ.
#[test]
fn true_free_energy_agrees_with_a_shifted_mesh() {
    let member = member(&forms::DROSMELIDE_IV);
    let count = member.model.molecule_count();
    let truth = stable_truth(&member.exact, &member.model.cell_heights(), count)
        .unwrap()
        .unwrap();
    assert!(truth.lowest > 0.0);
    let constants = RealSpaceConstants::of(&member.model).unwrap();
    let reciprocal = constants.crystal().reciprocal();
    let mesh = Mesh::with_spacing(&reciprocal, 0.09, [1; 3], true);
    let spectrum = Spectrum::exact(&constants, &mesh).unwrap();
    let plain =
        TEMPERATURES_K.map(|t| spectrum.free_energy_ev(t) * EV_TO_KJ_PER_MOL / count as f64);
    // A half-shifted mesh of 0.20 Å⁻¹ is off by 0.008 kJ/mol; the error falls with the volume of a mesh cell.
    assert_close(&truth.free_energy_kj_per_mol, &plain, 2e-3);
}

#[test]
fn saddle_of_the_demonstration_has_no_free_energy() {
    let member = member(&forms::DROSMELIDE_V);
    let heights = member.model.cell_heights();
    assert_eq!(stable_truth(&member.exact, &heights, 4).unwrap(), None);
}

#[test]
fn softened_crystals_are_soft_and_keep_every_condition() {
    let member = member(&forms::DROSMELIDE_IV);
    let group = group_of(member.exact.crystal()).unwrap();
    let supercell = diagonal([2, 2, 2]).unwrap();
    let mesh = mesh_of(member.exact.crystal(), 0.45).unwrap();
    for kind in [Kind::ZoneBoundary, Kind::Gamma, Kind::Elastic, Kind::Rotor] {
        let soft = softened(&member, kind, &mut generator("check", &[7])).unwrap();
        let folded = soft.folded(&supercell).unwrap();
        let change = projected(&folded, &group)
            .blocks()
            .iter()
            .zip(folded.blocks())
            .map(|(a, b)| (a - b).amax())
            .fold(0.0, f64::max);
        assert!(change < 1e-8, "{kind:?} {change}");
        let (lowest, q) = soft.lowest(&mesh).unwrap();
        let [shallow, deep] = [-6.0, -85.0].map(eigenvalue_of_wavenumber);
        assert!(lowest < shallow && lowest > deep, "{kind:?} {lowest}");
        match kind {
            Kind::Gamma => assert!(q.norm() < 1e-9, "{q}"),
            Kind::ZoneBoundary => assert!(q.amax() > 0.4, "{q}"),
            Kind::Elastic | Kind::Rotor => {}
        }
    }
}

/// The lean is negative for arrays read rightly and positive for the two blunders that it is there for.
#[test]
fn lean_tells_rearranged_arrays() {
    let member = member(&forms::DROSMELIDE_IV);
    let crystal = member.exact.crystal();
    let folded = member.exact.folded(&diagonal([3, 1, 2]).unwrap()).unwrap();
    let white = Disturbance::White { sigma: 5e-4 };
    let noisy = white.apply(crystal, &folded, 3).unwrap();
    let sealed = |constants| {
        let model = member.model.clone();
        let contribution = Contribution::new("check", "check", model, constants);
        contribution.seal().unwrap().0
    };
    let sound = sealed(noisy.clone());
    assert!(lean::towards_negated(&sound).unwrap() < -0.5);
    assert!(lean::towards_exchanged(&sound).unwrap() < -0.2);
    for blunder in [Blunder::IndexOrder, Blunder::NegatedTranslations] {
        let mut rng = generator("check", &[1]);
        let altered = commit(blunder, crystal, &noisy, 0, &mut rng).unwrap();
        let wrong = sealed(altered.constants.unwrap());
        assert!(lean::towards_negated(&wrong).unwrap() > 0.5);
    }
    let mut rng = generator("check", &[2]);
    let altered = commit(Blunder::Supercell, crystal, &noisy, 0, &mut rng).unwrap();
    let wrong = sealed(altered.constants.unwrap());
    assert!(lean::towards_exchanged(&wrong).unwrap() > 0.2);
}

/// A forward quotient is off by a term of first order in the displacement.
#[test]
fn forward_differences_err_in_proportion_to_the_displacement() {
    let member = member(&forms::DROSMELIDE_IV);
    let supercell = diagonal([2, 1, 2]).unwrap();
    let exact = member.exact.folded(&supercell).unwrap();
    let error = |displacement: f64| {
        let found = forward(&member.model, &supercell, displacement).unwrap();
        let pairs = found.blocks().iter().zip(exact.blocks());
        pairs
            .map(|(a, b): (&Matrix3<f64>, _)| (a - b).norm_squared())
            .sum::<f64>()
            .sqrt()
    };
    let ratio = error(2e-3) / error(1e-3);
    assert!((ratio - 2.0).abs() < 0.05, "{ratio}");
}

#[test]
fn unrelaxed_geometry_has_the_residual_force_asked_for() {
    let member = member(&forms::DROSMELIDE_IV);
    let (model, _) = unrelaxed(&member, 5e-3, &mut generator("check", &[4])).unwrap();
    let forces = model.forces();
    let square: f64 = forces.iter().map(Vector3::norm_squared).sum();
    let rms = (square / forces.len() as f64).sqrt();
    assert!((rms - 5e-3).abs() < 1e-4, "{rms}");
    group_of(&model.to_crystal().unwrap()).unwrap();
}

#[test]
fn pool_is_the_same_for_the_same_seed() {
    let first = Pool::new(5, 2, 2).unwrap();
    let second = Pool::new(5, 2, 1).unwrap();
    let places = |pool: &Pool| -> Vec<Vec<Vector3<f64>>> {
        let all = pool.stable.iter();
        all.map(|member| member.model.positions().to_vec())
            .collect()
    };
    assert_eq!(places(&first), places(&second));
    assert!(first.stable.iter().all(|m| m.truth.is_some()));
    let other = Pool::new(6, 2, 1).unwrap();
    assert_ne!(places(&first), places(&other));
}
