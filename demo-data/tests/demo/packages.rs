//! The committed packages.

use std::path::{Path, PathBuf};

use tarehouse_demo_data::scenario::{self, Entry};
use tarehouse_physics::force_constants::ForceConstantUnit;

fn folder() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("packages")
}

pub(crate) fn entry(name: &str) -> Entry {
    let found = scenario::entries()
        .into_iter()
        .find(|entry| entry.name == name);
    found.unwrap_or_else(|| panic!("no package {name}"))
}

#[test]
fn committed_packages_are_the_regenerated_ones() {
    let mut names = Vec::new();
    let mut total = 0;
    for entry in scenario::entries() {
        let (submission, package) = entry.build().unwrap();
        for (name, bytes) in package.files() {
            let committed = std::fs::read(folder().join(entry.name).join(name)).unwrap();
            assert!(committed == bytes, "{}/{name} differs", entry.name);
            total += bytes.len();
        }
        assert_eq!(submission.package_digest, package.digest());
        names.push(entry.name.to_owned());
    }
    let found = std::fs::read_dir(folder()).unwrap();
    let mut found: Vec<String> = found
        .map(|item| item.unwrap().file_name().into_string().unwrap())
        .collect();
    names.sort();
    found.sort();
    assert_eq!(names, found);
    assert!(names.len() >= 7);
    assert!(total < 4_000_000, "{total} bytes");
}

#[test]
fn packages_are_written_where_asked() {
    let package = entry("drosmelide-iv-thin").build().unwrap().1;
    let parent = Path::new(env!("CARGO_TARGET_TMPDIR")).join("written");
    package.write_below(&parent).unwrap();
    for (name, bytes) in package.files() {
        assert!(std::fs::read(parent.join(&package.name).join(name)).unwrap() == bytes);
    }
}

fn table<'a>(manifest: &'a toml::Table, name: &str) -> &'a toml::Table {
    manifest[name].as_table().unwrap()
}

fn numbers(value: &toml::Value) -> Vec<f64> {
    match value {
        toml::Value::Array(items) => items.iter().flat_map(numbers).collect(),
        toml::Value::Float(x) => vec![*x],
        #[allow(clippy::cast_precision_loss, reason = "small integers of a manifest")]
        toml::Value::Integer(x) => vec![*x as f64],
        other => panic!("{other} is not a number"),
    }
}

#[test]
fn manifests_say_what_the_submission_says() {
    for entry in scenario::entries() {
        let (submission, package) = entry.build().unwrap();
        let manifest: toml::Table = package.manifest.parse().unwrap();
        assert_eq!(manifest["format"].as_str(), Some("tarehouse-package/1"));
        let identity = table(&manifest, "identity");
        assert_eq!(
            identity["formula"].as_str(),
            Some(&*submission.identity.formula.to_string())
        );
        let crystal = table(&manifest, "crystal");
        let positions: Vec<f64> = submission
            .crystal
            .positions()
            .iter()
            .flat_map(|x| x.iter().copied())
            .collect();
        assert_eq!(numbers(&crystal["positions"]), positions);
        let cell = numbers(&crystal["cell_vectors"]);
        assert_eq!(
            cell[3].to_bits(),
            submission.crystal.cell()[(1, 0)].to_bits()
        );
        assert_eq!(
            crystal["elements"].as_array().unwrap().len(),
            submission.crystal.atom_count()
        );
        let constants = table(&manifest, "constants");
        let cells = submission.constants.supercell().cell_count();
        assert_eq!(numbers(&constants["translations"]).len(), 3 * cells);
        assert_eq!(constants["unit"].as_str(), Some(entry.declared_unit.name()));
        let energy = numbers(&table(&manifest, "energy")["lattice_energy"]);
        assert_eq!(energy, [submission.energy.lattice_energy_ev]);
        assert_eq!(manifest.contains_key("claims"), entry.claims);
    }
}

/// Values of a version 1.0 array file.
fn array(bytes: &[u8]) -> Vec<f64> {
    let length = usize::from(u16::from_le_bytes([bytes[8], bytes[9]]));
    let data = bytes[10 + length..].chunks_exact(8);
    data.map(|b| f64::from_le_bytes(b.try_into().unwrap()))
        .collect()
}

#[test]
fn arrays_hold_the_constants_in_the_declared_unit() {
    for entry in scenario::entries() {
        let (submission, package) = entry.build().unwrap();
        let scale = entry.declared_unit.in_ev_per_ang2();
        let values = array(&package.constants);
        let decoded = submission.constants.to_array();
        assert_eq!(values.len(), decoded.len());
        for (written, wanted) in values.iter().zip(&decoded) {
            assert!((written * scale - wanted).abs() <= 1e-14 * wanted.abs());
        }
    }
}

#[test]
fn the_wrong_unit_is_wrong_by_its_factor() {
    let honest = entry("pelquonol-alpha").build().unwrap().0;
    let wrong = entry("pelquonol-alpha-unit").build().unwrap().0;
    let ratio = wrong.constants.largest_self_constant() / honest.constants.largest_self_constant();
    let factor = ForceConstantUnit::HartreePerBohr2.in_ev_per_ang2();
    assert!((ratio / factor - 1.0).abs() < 1e-3, "{ratio}");
    assert_eq!(wrong.identity.compound, honest.identity.compound);
}

#[test]
fn erased_evidence_is_erased_and_undeclared() {
    let (submission, _) = entry("pelquonol-beta-erased").build().unwrap();
    assert!(submission.declaration.raw && submission.declaration.enforced.is_empty());
    let constants = &submission.constants;
    let n = constants.atom_count();
    for (k, block) in constants.blocks().iter().enumerate() {
        let (l, i, j) = (k / (n * n), k / n % n, k % n);
        let mirrored = constants.block(constants.supercell().negative(l), j, i);
        assert!((block - mirrored.transpose()).amax() < 1e-13);
    }
    // The noise itself is still there.
    let exact = entry("pelquonol-beta-erased").parts().unwrap().1;
    let clean = exact.folded(constants.supercell()).unwrap();
    let square: f64 = clean
        .blocks()
        .iter()
        .zip(constants.blocks())
        .map(|(a, b)| (a - b).norm_squared())
        .sum();
    assert!((square / (9.0 * clean.blocks().len() as f64)).sqrt() > 5e-4);
}
