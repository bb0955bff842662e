use super::*;

const GRID_K: [f64; 3] = [0.0, 100.0, 300.0];

/// F = z − a T², S = 2 a T: a cubic Hermite polynomial reproduces it exactly.
fn candidate(form: &str, lattice: f64, zero_point: f64, a: f64) -> Candidate {
    let free_energy = GRID_K
        .iter()
        .map(|&t| {
            let central = zero_point - a * t * t;
            v1::FreeEnergy {
                temperature_k: t,
                defined: true,
                central_kj_per_mol: central,
                lower_kj_per_mol: central - 0.1 - t / 1000.0,
                upper_kj_per_mol: central + 0.2,
                entropy_j_per_mol_k: 2000.0 * a * t,
                ..v1::FreeEnergy::default()
            }
        })
        .collect();
    Candidate {
        record: format!("records/{form}"),
        form: form.to_owned(),
        accepted_ms: 10,
        level: LevelKey {
            energy: "e".into(),
            constants: "c".into(),
            cell_protocol: 1,
        },
        lattice_energy_kj_per_mol: lattice,
        zero_point_energy_kj_per_mol: zero_point,
        free_energy,
        compression: Compression {
            volume_ang3: 150.0,
            compressibility_per_gpa: Some(0.125),
        },
        pressure: Ok(None),
    }
}

fn close(found: Option<f64>, expected: f64) {
    let found = found.unwrap();
    assert!((found - expected).abs() < 1e-9, "{found} is not {expected}");
}

#[test]
fn order_changes_where_the_free_energies_cross() {
    // I: −10 + 2 − 1e−5 T², II: −9 + 1.5 − 4e−5 T²; they cross at T² = 0.5/3e−5, T = 129.1 K.
    let forms = vec![
        candidate("I", -10.0, 2.0, 1e-5),
        candidate("II", -9.0, 1.5, 4e-5),
    ];
    let tables = rank(forms, &[0.0, 50.0, 129.0, 130.0, 300.0]);
    assert_eq!(tables.len(), 1);
    let rows = &tables[0].rows;
    assert_eq!(rows[0].form, "I");
    let ranks: Vec<u32> = rows[0].points.iter().map(|p| p.rank).collect();
    assert_eq!(ranks, [1, 1, 1, 2, 2]);
    close(rows[1].points[0].relative_kj_per_mol, 0.5);
    close(rows[1].points[1].relative_kj_per_mol, 0.5 - 3e-5 * 2500.0);
    close(rows[0].points[4].relative_kj_per_mol, 3e-5 * 90000.0 - 0.5);
    close(rows[0].points[1].thermal_kj_per_mol, -1e-5 * 2500.0);
    close(rows[0].points[1].static_kj_per_mol, -10.0);
    close(rows[0].points[1].zero_point_kj_per_mol, 2.0);
}

#[test]
fn brackets_travel_with_the_number() {
    let tables = rank(vec![candidate("I", -10.0, 2.0, 1e-5)], &[200.0]);
    let point = &tables[0].rows[0].points[0];
    close(point.relative_kj_per_mol, 0.0);
    close(point.lower_kj_per_mol, -0.3);
    close(point.upper_kj_per_mol, 0.2);
}

#[test]
fn undefined_forms_are_listed_last_with_a_reason_and_no_number() {
    let mut soft = candidate("0", -50.0, 2.0, 1e-5);
    for point in &mut soft.free_energy {
        point.defined = false;
    }
    let tables = rank(vec![soft, candidate("I", -10.0, 2.0, 1e-5)], &[50.0, 300.0]);
    let rows = &tables[0].rows;
    assert_eq!([rows[0].form.as_str(), rows[1].form.as_str()], ["I", "0"]);
    for point in &rows[1].points {
        assert!(!point.defined && point.rank == 0 && point.relative_kj_per_mol.is_none());
        assert!(
            point.exclusion_reason.contains("soft modes"),
            "{}",
            point.exclusion_reason
        );
    }
    close(rows[0].points[0].relative_kj_per_mol, 0.0);
}

#[test]
fn levels_never_meet_and_the_newest_record_speaks_for_its_form() {
    let mut other = candidate("I", -99.0, 2.0, 1e-5);
    other.level.constants = "d".to_owned();
    let mut newer = candidate("I", -11.0, 2.0, 1e-5);
    newer.record = "records/newer".to_owned();
    newer.accepted_ms = 11;
    for forms in [
        vec![
            candidate("I", -10.0, 2.0, 1e-5),
            other.clone(),
            newer.clone(),
        ],
        vec![newer, other, candidate("I", -10.0, 2.0, 1e-5)],
    ] {
        let tables = rank(forms, &[0.0]);
        assert_eq!(tables.len(), 2);
        assert_eq!(tables[0].rows.len(), 1);
        assert_eq!(tables[0].rows[0].record, "records/newer");
        assert_eq!(tables[1].constants_level, "d");
    }
}

#[test]
fn a_grid_that_ends_too_early_leaves_the_form_out() {
    let tables = rank(vec![candidate("I", -10.0, 2.0, 1e-5)], &[300.0, 301.0]);
    let points = &tables[0].rows[0].points;
    assert!(points[0].defined);
    assert!(!points[1].defined && points[1].exclusion_reason.contains("grid"));
}

#[test]
fn pressure_favours_the_denser_form_and_widens_the_brackets() {
    let mut dense = candidate("I", -9.0, 2.0, 1e-5);
    dense.compression.volume_ang3 = 140.0;
    let loose = candidate("II", -9.5, 2.0, 1e-5);
    let forms = vec![dense, loose];
    let rows = |pressure_gpa: f64| {
        let pressed = press(forms.clone(), pressure_gpa, 0.03).unwrap();
        rank(pressed, &[0.0]).remove(0).rows
    };
    let free = rows(0.0);
    assert_eq!(free[0].form, "II");
    assert_eq!(free[0].points[0].pressure_kj_per_mol, None);
    let pressed = rows(0.1);
    assert_eq!(pressed[0].form, "I");
    // By hand: p (1 - p/2B) = 0.1 · 0.99375 GPa; 0.60221408 kJ/mol/GPa/Å³.
    let unit = 0.1 * 0.993_75 * 0.602_214_076;
    close(pressed[0].points[0].pressure_kj_per_mol, 140.0 * unit);
    close(pressed[1].points[0].relative_kj_per_mol, 10.0 * unit - 0.5);
    let width = |point: &v1::RankPoint| {
        point.upper_kj_per_mol.unwrap() - point.relative_kj_per_mol.unwrap()
    };
    assert!(width(&pressed[0].points[0]) > width(&free[0].points[0]));
}

#[test]
fn too_much_pressure_is_refused_and_an_unknown_stiffness_is_listed() {
    let mut unknown = candidate("0", -50.0, 2.0, 1e-5);
    unknown.compression.compressibility_per_gpa = None;
    let forms = vec![unknown, candidate("I", -9.0, 2.0, 1e-5)];
    let rows = rank(press(forms.clone(), 0.2, 0.03).unwrap(), &[0.0])
        .remove(0)
        .rows;
    assert_eq!([rows[0].form.as_str(), rows[1].form.as_str()], ["I", "0"]);
    assert!(
        rows[1].points[0]
            .exclusion_reason
            .contains("compressibility")
    );
    let Err(Failure::Forbidden {
        reason, breaches, ..
    }) = press(forms, 0.25, 0.03)
    else {
        panic!("must be refused");
    };
    assert_eq!(reason, "VOLUME_SERIES_NEEDED");
    assert_eq!(breaches.len(), 1);
    assert!(breaches[0].message.starts_with("records/I"), "{breaches:?}");
}
