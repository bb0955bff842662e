//! Several examinations of one form: convergence series, volume series, and ranking under pressure.

use std::sync::Arc;

use tarehouse_assay::report::{LowestBranch, Verdict};
use tarehouse_proto::v1;
use tarehouse_server::Examiner;
use tonic::{Code, Status};

use crate::support::{Fake, House, Pack, assert_refused, report};

/// Volume per formula unit of the cell below, Å³, by its third vector.
fn volume(length: f64) -> f64 {
    5.0 * 6.0 * length / 2.0
}

/// Static energy, eV per cell of two formula units: a parabola about 7 Å.
fn lattice_energy(length: f64) -> f64 {
    -10.0 + 2.0 * (length - 7.0).powi(2)
}

/// Reports that know their volume, are soft as 8 GPa, and move with the declared displacement.
fn examiner() -> Arc<dyn Examiner> {
    Fake::judging(|submission, policy, _| {
        let mut report = report(submission, policy, Verdict::Accept);
        report.crystal.volume_per_formula_unit_ang3 =
            submission.crystal.volume_ang3() / submission.formula_units();
        report.crystal.lattice_energy_kj_per_mol = 48.2427 * submission.energy.lattice_energy_ev;
        report.crystal.compressibility_per_gpa = Some(0.125);
        let step = submission.settings.displacement_angstrom.unwrap_or(0.0);
        for point in &mut report.free_energy {
            point.central_kj_per_mol += step;
            point.lower_kj_per_mol += step;
            point.upper_kj_per_mol += step;
        }
        report.lowest_branches = vec![LowestBranch {
            q: [0.0; 3],
            wavenumber_per_cm: 40.0 + step,
            lower_per_cm: 39.5 + step,
            upper_per_cm: 40.5 + step,
        }];
        report
    })
}

/// A package with a cell of the given third length and lines of settings.
fn pack(form: &str, length: f64, settings: &str) -> Pack {
    let mut pack = Pack::new("velnaric acid", form, lattice_energy(length));
    let cell = "[[5.0, 0.0, 0.0], [0.5, 6.0, 0.0], [0.25, -0.5, 7.0]]";
    assert!(pack.manifest.contains(cell));
    let other = format!("[[5.0, 0.0, 0.0], [0.5, 6.0, 0.0], [0.25, -0.5, {length:?}]]");
    pack.manifest = pack.manifest.replace(cell, &other);
    pack.manifest.push_str("\n[settings]\n");
    pack.manifest.push_str(settings);
    pack
}

async fn submitted(house: &House, packs: &[Pack]) -> Vec<String> {
    let mut names = Vec::new();
    for pack in packs {
        let done = house.submit(pack).await;
        assert_eq!(done.state(), v1::State::Accepted);
        names.push(done.name);
    }
    names
}

async fn series(house: &House, names: &[String]) -> Result<v1::Series, Status> {
    let request = v1::GetSeriesRequest {
        names: names.to_vec(),
    };
    let answer = house.catalogue().get_series(request).await?;
    Ok(answer.into_inner().series.unwrap())
}

async fn volumes(
    house: &House,
    names: &[String],
    pressures: &[f64],
) -> Result<v1::QuasiHarmonic, Status> {
    let request = v1::GetQuasiHarmonicRequest {
        names: names.to_vec(),
        temperatures_k: vec![300.0],
        pressures_gpa: pressures.to_vec(),
    };
    let answer = house.catalogue().get_quasi_harmonic(request).await?;
    Ok(answer.into_inner().quasi_harmonic.unwrap())
}

#[tokio::test]
async fn a_displacement_series_is_ordered_and_judged() {
    let house = House::new(examiner()).await;
    let packs = [0.02, 0.04, 0.01].map(|step| {
        let line = format!("displacement_angstrom = {step}\n");
        pack("I", 7.0, &line)
    });
    let mut names = submitted(&house, &packs).await;
    names[1] = names[1].replace("submissions/", "records/");
    let found = series(&house, &names).await.unwrap();
    assert_eq!(
        found.members,
        [&names[1], &names[0], &names[2]].map(String::clone)
    );
    assert_eq!(
        (found.compound.as_str(), found.form.as_str()),
        ("velnaric acid", "I")
    );
    assert_eq!(found.settings.len(), 1);
    assert_eq!(found.settings[0].setting, "displacement_angstrom");
    assert_eq!(found.settings[0].values, ["0.04", "0.02", "0.01"]);
    assert_eq!(found.conclusion(), v1::SeriesConclusion::Stopped);
    let kinds: Vec<v1::SeriesQuantityKind> = found
        .quantities
        .iter()
        .map(v1::SeriesQuantity::kind)
        .collect();
    assert_eq!(
        kinds,
        [
            v1::SeriesQuantityKind::FreeEnergy,
            v1::SeriesQuantityKind::BracketHalfWidth,
            v1::SeriesQuantityKind::LowestBranch,
        ]
    );
    let change = found.quantities[0].changes[0].change.unwrap();
    assert!((change + 0.02).abs() < 1e-9, "{change}");
    let two = series(&house, &names[..2]).await.unwrap();
    assert_eq!(two.conclusion(), v1::SeriesConclusion::CannotBeTold);
}

#[tokio::test]
async fn what_is_no_series_is_refused_with_its_names() {
    let house = House::new(examiner()).await;
    let packs = [pack("I", 7.0, ""), pack("II", 7.0, ""), pack("I", 7.1, "")];
    let names = submitted(&house, &packs).await;
    let mixed = series(&house, &names[..2]).await.unwrap_err();
    assert_refused(&mixed, Code::InvalidArgument, "SERIES_MIXED");
    let moved = [names[0].clone(), names[2].clone()];
    let found = series(&house, &moved).await.unwrap();
    assert_eq!(found.settings[0].setting, "geometry");
    assert_eq!(found.conclusion(), v1::SeriesConclusion::CannotBeTold);
    for (members, code, reason) in [
        (
            vec![names[0].clone()],
            Code::InvalidArgument,
            "REQUEST_INVALID",
        ),
        (
            vec![names[0].clone(); 2],
            Code::InvalidArgument,
            "REQUEST_INVALID",
        ),
        (
            vec![names[0].clone(); 65],
            Code::InvalidArgument,
            "REQUEST_INVALID",
        ),
        (
            vec![names[0].clone(), "records/x".to_owned()],
            Code::InvalidArgument,
            "REQUEST_INVALID",
        ),
        (
            vec![names[0].clone(), format!("submissions/{}", "0".repeat(32))],
            Code::NotFound,
            "SUBMISSION_NOT_FOUND",
        ),
    ] {
        assert_refused(&series(&house, &members).await.unwrap_err(), code, reason);
    }
    let draft = house.create(&pack("I", 7.2, "")).await.name;
    let early = series(&house, &[names[0].clone(), draft])
        .await
        .unwrap_err();
    assert_refused(&early, Code::NotFound, "REPORT_NOT_FOUND");
}

#[tokio::test]
async fn a_volume_series_answers_inside_its_volumes_only() {
    let house = House::new(examiner()).await;
    let lengths = [7.3, 6.6, 6.8, 7.0, 7.2];
    let names = submitted(&house, &lengths.map(|length| pack("I", length, ""))).await;
    let found = volumes(&house, &names, &[0.0, 2.0, 90.0]).await.unwrap();
    assert!(found.settings.is_empty(), "only the geometry differs");
    let sorted: Vec<f64> = found
        .members
        .iter()
        .map(|m| m.volume_per_formula_unit_ang3)
        .collect();
    assert!(
        (sorted[0] - volume(6.6)).abs() < 1e-9 && sorted.is_sorted(),
        "{sorted:?}"
    );
    assert_eq!(found.members[4].name, names[0]);
    // F does not depend on the volume here: the minimum is that of the parabola, at 7 Å.
    let free = &found.points[0];
    assert!(free.defined && free.refusal.is_empty());
    let at = free.volume_ang3.unwrap();
    assert!(
        (at.central - volume(7.0)).abs() < 0.05 && at.half_width > 0.0,
        "{at:?}"
    );
    assert!(free.expansion_per_k.unwrap().central.abs() < 1e-9);
    // B = V E″/cell volume per unit: E″ = 4 eV/Å² per two units of 15 Å² each: 4/2/15² · 105 Å³ · 160.2 GPa.
    let bulk = 4.0 / 2.0 / 225.0 * 105.0 * 160.217_663_4;
    let stiff = free.bulk_modulus_gpa.unwrap();
    assert!(
        (stiff.central - bulk).abs() < 0.02 * bulk,
        "{stiff:?} {bulk}"
    );
    let pressed = found.points[1].volume_ang3.unwrap().central;
    assert!(found.points[1].defined && pressed < at.central);
    assert!(!found.points[2].defined && found.points[2].refusal.contains("below"));
    let nowhere = volumes(&house, &names, &[90.0]).await.unwrap_err();
    assert_refused(&nowhere, Code::FailedPrecondition, "VOLUMES_EXCEEDED");
    let few = volumes(&house, &names[..3], &[0.0]).await.unwrap_err();
    assert_refused(&few, Code::InvalidArgument, "REQUEST_INVALID");
    let negative = volumes(&house, &names, &[-1.0]).await.unwrap_err();
    assert_refused(&negative, Code::InvalidArgument, "REQUEST_INVALID");
    let again = submitted(&house, &[pack("I", 7.0, "displacement_angstrom = 0.01\n")]).await;
    let twice = [names.clone(), again].concat();
    let unfit = volumes(&house, &twice, &[0.0]).await.unwrap_err();
    assert_refused(&unfit, Code::FailedPrecondition, "VOLUME_SERIES_UNFIT");
    let other = submitted(&house, &[pack("I", 7.1, "functional = \"other\"\n")]).await;
    let mixed = volumes(&house, &[names, other].concat(), &[0.0])
        .await
        .unwrap_err();
    assert_refused(&mixed, Code::InvalidArgument, "SERIES_MIXED");
}

#[tokio::test]
async fn a_ranking_under_pressure_says_when_it_needs_more_volumes() {
    let house = House::new(examiner()).await;
    submitted(&house, &[pack("I", 7.0, "")]).await;
    let rank = async |pressure_gpa: Option<f64>| {
        let request = v1::RankFormsRequest {
            compound: "velnaric acid".to_owned(),
            temperatures_k: vec![300.0],
            pressure_gpa,
            ..v1::RankFormsRequest::default()
        };
        house.catalogue().rank_forms(request).await
    };
    let part =
        |answer: v1::RankFormsResponse| answer.tables[0].rows[0].points[0].pressure_kj_per_mol;
    assert_eq!(part(rank(None).await.unwrap().into_inner()), None);
    let pressed = part(rank(Some(0.2)).await.unwrap().into_inner()).unwrap();
    // p V (1 − p/2B), V = 105 Å³, B = 8 GPa.
    let expected = 0.2 * 105.0 * (1.0 - 0.0125) * 0.602_214_076;
    assert!((pressed - expected).abs() < 1e-6, "{pressed} {expected}");
    let far = rank(Some(0.3)).await.unwrap_err();
    assert_refused(&far, Code::FailedPrecondition, "VOLUME_SERIES_NEEDED");
    let wrong = rank(Some(f64::NAN)).await.unwrap_err();
    assert_refused(&wrong, Code::InvalidArgument, "REQUEST_INVALID");
}
