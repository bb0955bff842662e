//! An exactly quasi-harmonic toy: an Einstein crystal whose frequency goes as V^−γ on a Birch static energy.

use tarehouse_physics::thermodynamics::Harmonic;
use tarehouse_physics::units::EV_TO_KJ_PER_MOL;

use super::*;

const GAMMA: f64 = 2.4;
const MODES: f64 = 6.0;
const QUANTUM_EV: f64 = 0.010;
const V0: f64 = 150.0;
/// Bulk modulus of the static energy, kJ/mol/Å³, and its pressure derivative.
const STATIC: (f64, f64) = (8.0 * GPA_ANG3_TO_KJ_PER_MOL, 7.0);
const VOLUMES: [f64; 7] = [140.0, 144.0, 148.0, 152.0, 156.0, 160.0, 164.0];

fn static_energy(v: f64) -> f64 {
    let x = (V0 / v).powf(2.0 / 3.0);
    let (b, derivative) = STATIC;
    9.0 / 16.0 * b * V0 * ((x - 1.0).powi(3) * derivative + (x - 1.0).powi(2) * (6.0 - 4.0 * x))
}

fn vibrations(v: f64, t: f64) -> Harmonic {
    Harmonic::of_mode(QUANTUM_EV * (v / V0).powf(-GAMMA), t) * (MODES * EV_TO_KJ_PER_MOL)
}

fn point(v: f64, half_width: f64, shift: f64) -> VolumePoint {
    let grid = (0..=50).map(|k| 10.0 * f64::from(k));
    let free_energy = grid
        .map(|t| {
            let h = vibrations(v, t);
            FreeEnergy {
                temperature_k: t,
                defined: true,
                central_kj_per_mol: h.free_energy + shift,
                lower_kj_per_mol: h.free_energy + shift - half_width,
                upper_kj_per_mol: h.free_energy + shift + half_width,
                internal_energy_kj_per_mol: h.internal_energy,
                entropy_j_per_mol_k: 1e3 * h.entropy,
                heat_capacity_j_per_mol_k: 1e3 * h.heat_capacity,
            }
        })
        .collect();
    VolumePoint {
        volume_ang3: v,
        static_kj_per_mol: static_energy(v),
        free_energy,
    }
}

fn toy() -> VolumeSeries {
    VolumeSeries::new(&VOLUMES.map(|v| point(v, 0.0, 0.0))).unwrap()
}

/// dA/dV and V d²A/dV² of the toy itself: F_V = −γ U/V.
fn slope(v: f64, t: f64) -> f64 {
    let step = 1e-3;
    let e = (static_energy(v + step) - static_energy(v - step)) / (2.0 * step);
    e - GAMMA * vibrations(v, t).internal_energy / v
}

fn exact(t: f64, pressure_gpa: f64) -> (f64, f64) {
    let pressure = pressure_gpa * GPA_ANG3_TO_KJ_PER_MOL;
    let (mut low, mut high) = (V0 * 0.9, V0 * 1.12);
    for _ in 0..60 {
        let middle = 0.5 * (low + high);
        if slope(middle, t) + pressure < 0.0 {
            low = middle;
        } else {
            high = middle;
        }
    }
    let bulk = low * (slope(low + 0.01, t) - slope(low - 0.01, t)) / 0.02;
    (low, bulk)
}

fn close(found: f64, expected: f64, relative: f64) {
    assert!(
        (found - expected).abs() <= relative * expected.abs(),
        "{found} is not {expected}"
    );
}

#[test]
fn the_toy_expands_as_gruneisen_says() {
    // Grüneisen 1912: α V = γ C_V / B at constant γ.
    let series = toy();
    for (t, p) in [(100.0, 0.0), (300.0, 0.0), (300.0, 0.3), (400.0, 0.2)] {
        let found = series.at(t, p).unwrap();
        let (volume, bulk) = exact(t, p);
        close(found.volume_ang3.central, volume, 2e-5);
        close(
            found.bulk_modulus_gpa.central,
            bulk / GPA_ANG3_TO_KJ_PER_MOL,
            2e-3,
        );
        let heat_capacity = vibrations(volume, t).heat_capacity;
        close(found.heat_capacity_v_j_per_mol_k, 1e3 * heat_capacity, 1e-4);
        close(
            found.expansion_per_k.central,
            GAMMA * heat_capacity / (bulk * volume),
            3e-3,
        );
        let gibbs = static_energy(volume)
            + vibrations(volume, t).free_energy
            + p * GPA_ANG3_TO_KJ_PER_MOL * volume;
        assert!((found.gibbs_kj_per_mol.central - gibbs).abs() < 1e-4);
        assert!(
            (found.gibbs_kj_per_mol.central - gibbs).abs() <= found.gibbs_kj_per_mol.half_width
        );
        assert!((found.volume_ang3.central - volume).abs() <= found.volume_ang3.half_width);
        assert!(found.fit_residual_kj_per_mol < 1e-3);
    }
}

#[test]
fn entropy_heat_capacity_and_volume_are_derivatives_of_the_free_enthalpy() {
    let series = toy();
    let (t, p, step) = (300.0, 0.1, 10.0);
    let at = |t: f64, p: f64| series.at(t, p).unwrap();
    let here = at(t, p);
    let (colder, warmer) = (at(t - step, p), at(t + step, p));
    let slope = |of: fn(&Equilibrium) -> f64| (of(&warmer) - of(&colder)) / (2.0 * step);
    close(
        -1e3 * slope(|e| e.gibbs_kj_per_mol.central),
        here.entropy_j_per_mol_k,
        2e-4,
    );
    close(
        t * slope(|e| e.entropy_j_per_mol_k),
        here.heat_capacity_p_j_per_mol_k,
        1e-3,
    );
    let volume = here.volume_ang3.central;
    close(
        slope(|e| e.volume_ang3.central) / volume,
        here.expansion_per_k.central,
        2e-3,
    );
    let gap = here.heat_capacity_p_j_per_mol_k - here.heat_capacity_v_j_per_mol_k;
    let expected = here.expansion_per_k.central.powi(2)
        * here.bulk_modulus_gpa.central
        * GPA_ANG3_TO_KJ_PER_MOL
        * volume
        * t
        * 1e3;
    close(gap, expected, 1e-9);
    assert!(gap > 0.5, "{gap}");
    let (less, more) = (at(t, p - 0.01), at(t, p + 0.01));
    let by_pressure = |of: fn(&Equilibrium) -> f64| (of(&more) - of(&less)) / 0.02;
    close(
        by_pressure(|e| e.gibbs_kj_per_mol.central),
        volume * GPA_ANG3_TO_KJ_PER_MOL,
        1e-5,
    );
    close(
        -volume / by_pressure(|e| e.volume_ang3.central),
        here.bulk_modulus_gpa.central,
        1e-3,
    );
}

#[test]
fn brackets_of_the_members_are_carried_to_the_result() {
    let shifts = [0.04, -0.05, 0.05, -0.02, 0.05, -0.05, 0.03];
    let points: Vec<VolumePoint> = VOLUMES
        .iter()
        .zip(shifts)
        .map(|(v, shift)| point(*v, 0.05, shift))
        .collect();
    let found = VolumeSeries::new(&points).unwrap().at(300.0, 0.0).unwrap();
    let truth = toy().at(300.0, 0.0).unwrap();
    let pairs = [
        (found.gibbs_kj_per_mol, truth.gibbs_kj_per_mol),
        (found.volume_ang3, truth.volume_ang3),
        (found.bulk_modulus_gpa, truth.bulk_modulus_gpa),
        (found.expansion_per_k, truth.expansion_per_k),
    ];
    for (found, truth) in pairs {
        assert!(
            (found.central - truth.central).abs() <= found.half_width,
            "{found:?} {truth:?}"
        );
        assert!(found.half_width > truth.half_width);
    }
    assert!(found.fit_residual_kj_per_mol > 0.02);
    assert!(
        (0.05..0.5).contains(&found.gibbs_kj_per_mol.half_width),
        "{found:?}"
    );
}

#[test]
fn outside_what_was_examined_there_is_no_answer() {
    let series = toy();
    let refused = |t: f64, p: f64| series.at(t, p).unwrap_err();
    let VolumeSeriesError::VolumeOutside { where_, .. } = refused(300.0, 3.0) else {
        panic!()
    };
    assert_eq!(where_, "below");
    let VolumeSeriesError::VolumeOutside { where_, .. } = refused(300.0, -1.0) else {
        panic!()
    };
    assert_eq!(where_, "above");
    assert!(matches!(
        refused(500.1, 0.0),
        VolumeSeriesError::TemperatureOutside { .. }
    ));
    assert!(matches!(
        refused(f64::NAN, 0.0),
        VolumeSeriesError::TemperatureOutside { .. }
    ));
    assert!(matches!(
        refused(300.0, f64::NAN),
        VolumeSeriesError::NotAPressure { .. }
    ));
    // Brackets so wide that the volume may lie anywhere: a refusal, not a number.
    let wide = VolumeSeries::new(&VOLUMES.map(|v| point(v, 60.0, 0.0))).unwrap();
    assert!(matches!(
        wide.at(300.0, 0.0),
        Err(VolumeSeriesError::VolumeOutside { .. })
    ));
}

#[test]
fn everything_that_is_wrong_with_a_series_is_said_at_once() {
    let mut points: Vec<VolumePoint> = [140.0, 150.0, 150.0, 160.0]
        .map(|v| point(v, 0.0, 0.0))
        .into();
    points[3].free_energy[2].defined = false;
    let errors = VolumeSeries::new(&points).unwrap_err();
    assert_eq!(errors.len(), 3, "{errors:?}");
    assert!(matches!(
        errors[0],
        VolumeSeriesError::SameVolume {
            first: 1,
            second: 2,
            ..
        }
    ));
    assert_eq!(errors[1], VolumeSeriesError::TooFew { found: 3 });
    assert!(
        matches!(&errors[2], VolumeSeriesError::Member { member: 3, detail } if detail.contains("20 K"))
    );
    assert_eq!(
        VolumeSeries::new(&[]).unwrap_err(),
        [VolumeSeriesError::TooFew { found: 0 }]
    );
    let mut shuffled = VOLUMES.map(|v| point(v, 0.0, 0.0));
    shuffled.reverse();
    assert_eq!(VolumeSeries::new(&shuffled).unwrap(), toy());
}
