//! Two packages from their folders to the ranking and back, through one restart of the server.

use std::fs;

use serde_json::Value;
use tarehouse_client::arguments::{
    Command, FetchArgs, ListArgs, Listed, PrecheckArgs, RankArgs, ReportArgs, SubmitArgs, WatchArgs,
};
use tarehouse_client::exit::Exit;
use tarehouse_physics::ForceConstants;
use tarehouse_physics::force_constants::{FirstIndex, ForceConstantUnit};
use tarehouse_proto::package::{decode, npy};

use crate::house::{Ended, House, as_json, demo_package, tarehouse, unfinished};

const PACKAGES: [&str; 2] = ["pelquonol-alpha", "pelquonol-beta"];
/// On the grid of the policy, and between its points, K.
const TEMPERATURES_K: [f64; 4] = [0.0, 300.0, 153.5, 298.15];

async fn submit(house: &House) -> Vec<Value> {
    let ended = tarehouse(Command::Submit(SubmitArgs {
        packages: PACKAGES.map(demo_package).to_vec(),
        no_wait: false,
        timeout: None,
        connect: house.connect(),
        format: as_json(),
    }))
    .await;
    assert_eq!(ended.exit, Exit::Done, "{}{}", ended.out, ended.err);
    let lines = ended.out.lines().map(serde_json::from_str);
    lines.map(Result::unwrap).collect()
}

async fn report(house: &House, id: &str) -> Ended {
    tarehouse(Command::Report(ReportArgs {
        id: id.to_owned(),
        all: false,
        connect: house.connect(),
        format: as_json(),
    }))
    .await
}

async fn rank(house: &House) -> Ended {
    tarehouse(Command::Rank(RankArgs {
        pressure: None,
        compound: "pelquonol".to_owned(),
        temperature: TEMPERATURES_K.to_vec(),
        sort_at: None,
        level: None,
        connect: house.connect(),
        format: as_json(),
    }))
    .await
}

async fn list(house: &House, what: Listed) -> Ended {
    tarehouse(Command::List(ListArgs {
        what,
        compound: None,
        form: None,
        state: None,
        contributor_key: None,
        retired: false,
        limit: None,
        connect: house.connect(),
        format: as_json(),
    }))
    .await
}

async fn fetch(house: &House, id: &str, array: Option<&str>, projected: bool) -> Vec<u8> {
    let folder = tempfile::tempdir().unwrap();
    let out = folder.path().join("fetched");
    let ended = tarehouse(Command::Fetch(FetchArgs {
        id: id.to_owned(),
        array: array.map(str::to_owned),
        projected,
        out: out.clone(),
        force: false,
        connect: house.connect(),
        format: as_json(),
    }))
    .await;
    assert_eq!(ended.exit, Exit::Done, "{}", ended.err);
    fs::read(out).unwrap()
}

fn text(value: &Value) -> &str {
    value
        .as_str()
        .unwrap_or_else(|| panic!("{value} is no text"))
}

fn number(value: &Value) -> f64 {
    value
        .as_f64()
        .unwrap_or_else(|| panic!("{value} is no number"))
}

#[tokio::test(flavor = "multi_thread")]
async fn from_the_folder_to_the_ranking_and_back_through_a_restart() {
    let folder = tempfile::tempdir().unwrap();
    let store = folder.path().join("store");
    let house = House::open(&store).await;

    let first = submit(&house).await;
    let names: Vec<&str> = first
        .iter()
        .map(|line| text(&line["submission"]["name"]))
        .collect();
    let records: Vec<&str> = first
        .iter()
        .map(|line| text(&line["submission"]["record"]))
        .collect();
    let again = submit(&house).await;
    assert_eq!(again, first, "the same folders are the same submissions");

    let mut reports = Vec::new();
    for (package, name) in PACKAGES.iter().zip(&names) {
        watched(&house, name).await;
        let of_service = report(&house, name).await;
        let here = tarehouse(Command::Precheck(PrecheckArgs {
            package: demo_package(package),
            policy: None,
            server: None,
            all: false,
            format: as_json(),
        }))
        .await;
        assert_eq!(here.exit, Exit::Done, "{}", here.err);
        assert!(here.out == of_service.out, "precheck and service differ");
        reports.push(of_service);
    }

    let ranked = rank(&house).await;
    let ranking = ranked.json();
    assert_eq!(ranking["tables"].as_array().unwrap().len(), 1);
    ranking_follows_from_reports(&ranking["tables"][0], &records, &reports);

    for (package, record) in PACKAGES.iter().zip(&records) {
        let sent = fs::read(demo_package(package).join("constants.npy")).unwrap();
        let manifest = fs::read(demo_package(package).join("package.toml")).unwrap();
        assert!(fetch(&house, record, None, false).await == sent);
        assert!(fetch(&house, record, Some("package.toml"), false).await == manifest);
        let projected = fetch(&house, record, None, true).await;
        sum_rules_vanish(&manifest, &sent, &projected);
    }

    let records_before = list(&house, Listed::Records).await.out;
    let submissions_before = list(&house, Listed::Submissions).await.out;
    house.close().await;
    assert_eq!(unfinished(&store), Vec::<std::path::PathBuf>::new());

    let house = House::open(&store).await;
    assert_eq!(list(&house, Listed::Records).await.out, records_before);
    assert_eq!(
        list(&house, Listed::Submissions).await.out,
        submissions_before
    );
    for (name, before) in names.iter().zip(&reports) {
        assert!(report(&house, name).await.out == before.out);
    }
    assert_eq!(rank(&house).await.out, ranked.out);
    assert_eq!(submit(&house).await, first, "known after a restart, too");
    let sent = fs::read(demo_package(PACKAGES[0]).join("constants.npy")).unwrap();
    assert!(fetch(&house, records[0], None, false).await == sent);
    house.close().await;
}

async fn watched(house: &House, name: &str) {
    let ended = tarehouse(Command::Watch(WatchArgs {
        id: name.to_owned(),
        timeout: Some(60),
        connect: house.connect(),
        format: as_json(),
    }))
    .await;
    assert_eq!(ended.exit, Exit::Done, "{}", ended.err);
    assert_eq!(ended.json()["state"], "STATE_ACCEPTED");
    assert_eq!(ended.json()["name"], name);
}

/// Every number of the ranking, from the reports: on the grid exactly, between its points by the Taylor series
/// F(T₀ + d) = F − S d − C_V d²/(2 T₀) of the nearest point, whose next term is below 1e-4 kJ/mol for d < 10 K.
fn ranking_follows_from_reports(table: &Value, records: &[&str], reports: &[Ended]) {
    const SERIES_KJ_PER_MOL: f64 = 1e-4;
    for (k, &temperature_k) in TEMPERATURES_K.iter().enumerate() {
        let expected: Vec<f64> = reports
            .iter()
            .map(|report| {
                let report = report.json();
                number(&report["crystal"]["lattice_energy_kj_per_mol"])
                    + vibrational(&report, temperature_k)
            })
            .collect();
        let lowest = expected.iter().copied().fold(f64::INFINITY, f64::min);
        for (record, energy) in records.iter().zip(&expected) {
            let rows = table["rows"].as_array().unwrap();
            let row = rows.iter().find(|row| row["record"] == *record).unwrap();
            let point = &row["points"][k];
            assert!((number(&point["temperature_k"]) - temperature_k).abs() < 1e-9);
            assert_eq!(point["defined"], true);
            let parts = ["static", "zero_point", "thermal"]
                .map(|part| number(&point[format!("{part}_kj_per_mol").as_str()]));
            let whole: f64 = parts.iter().sum();
            assert!(
                (whole - energy).abs() < SERIES_KJ_PER_MOL,
                "{whole} {energy} at {temperature_k}"
            );
            let above = number(&point["relative_kj_per_mol"]);
            assert!((above - (energy - lowest)).abs() < 2.0 * SERIES_KJ_PER_MOL);
            assert_eq!(point["rank"] == 1, above.abs() < 1e-9, "{point}");
            let inside = number(&point["lower_kj_per_mol"])..=number(&point["upper_kj_per_mol"]);
            assert!(inside.contains(&above), "{point}");
        }
    }
}

fn vibrational(report: &Value, temperature_k: f64) -> f64 {
    let points = report["free_energy"].as_array().unwrap();
    let away = |point: &&Value| (number(&point["temperature_k"]) - temperature_k).abs();
    let nearest = points
        .iter()
        .min_by(|a, b| away(a).total_cmp(&away(b)))
        .unwrap();
    let from_k = number(&nearest["temperature_k"]);
    let step_k = temperature_k - from_k;
    assert!(step_k.abs() < 10.0, "too far for the series");
    let slope = number(&nearest["entropy_j_per_mol_k"]) * 1e-3;
    let bend = number(&nearest["heat_capacity_j_per_mol_k"]) * 1e-3;
    let bending = if from_k > 0.0 {
        bend * step_k * step_k / (2.0 * from_k)
    } else {
        0.0
    };
    number(&nearest["central_kj_per_mol"]) - slope * step_k - bending
}

/// Pair symmetry and both translation sums of the projected constants are zero to 1e-10 of the largest self constant;
/// those of the contributed ones are not, so that the projection is seen to do something.
fn sum_rules_vanish(manifest: &[u8], sent: &[u8], projected: &[u8]) {
    let contributed = decode(manifest, &[("constants.npy", sent)])
        .unwrap()
        .constants;
    let array = npy::read(projected, None).unwrap();
    let projected = ForceConstants::from_array(
        contributed.supercell().clone(),
        contributed.atom_count(),
        &array.values,
        ForceConstantUnit::EvPerAngstrom2,
        FirstIndex::Displaced,
    )
    .unwrap();
    let raw = residuals(&contributed);
    let left = residuals(&projected);
    assert!(raw.iter().all(|residual| *residual > 1e-8), "{raw:?}");
    assert!(left.iter().all(|residual| *residual < 1e-10), "{left:?}");
    let change = contributed
        .blocks()
        .iter()
        .zip(projected.blocks())
        .map(|(a, b)| (a - b).amax())
        .fold(0.0, f64::max);
    assert!(change < 0.01 * contributed.largest_self_constant());
}

/// Largest violations of Φ(l,i,j) = Φ(−l,j,i)ᵀ, Σ_{l,j} Φ = 0 and Σ_{l,i} Φ = 0, relative to the largest self constant.
fn residuals(of: &ForceConstants) -> [f64; 3] {
    let (cells, atoms) = (of.supercell().cell_count(), of.atom_count());
    let (mut pairs, mut rows, mut columns) = (0.0_f64, 0.0_f64, 0.0_f64);
    for i in 0..atoms {
        let mut row = of.block(0, i, i) * 0.0;
        let mut column = row;
        for l in 0..cells {
            for j in 0..atoms {
                row += of.block(l, i, j);
                column += of.block(l, j, i);
                let mirror = of.block(of.supercell().negative(l), j, i).transpose();
                pairs = pairs.max((of.block(l, i, j) - mirror).amax());
            }
        }
        rows = rows.max(row.amax());
        columns = columns.max(column.amax());
    }
    [pairs, rows, columns].map(|largest| largest / of.largest_self_constant())
}
