//! Molecules of the crystals in `fixtures/tight-binding/`, whose content is known
//! (`fixtures/README.md`).

use std::path::Path;

use nalgebra::{Matrix3, Vector3};
use serde::Deserialize;
use tarehouse_physics::molecules::{Extent, Molecules};
use tarehouse_physics::{Crystal, Element};

#[derive(Deserialize)]
struct Package {
    identity: Identity,
    crystal: Written,
}

#[derive(Deserialize)]
struct Identity {
    formula: String,
    formula_units: usize,
}

#[derive(Deserialize)]
struct Written {
    cell_vectors: [[f64; 3]; 3],
    elements: Vec<String>,
    positions: Vec<[f64; 3]>,
}

fn packages() -> Vec<(String, Package)> {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("fixtures/tight-binding");
    let mut packages = Vec::new();
    for entry in std::fs::read_dir(folder).unwrap() {
        let entry = entry.unwrap();
        let text = std::fs::read_to_string(entry.path().join("package.toml")).unwrap();
        let name = entry.file_name().into_string().unwrap();
        packages.push((name, toml::from_str(&text).unwrap()));
    }
    packages
}

fn crystal(written: &Written) -> Crystal {
    let cell = Matrix3::from_fn(|r, c| written.cell_vectors[r][c]);
    let elements = written
        .elements
        .iter()
        .map(|symbol| Element::from_symbol(symbol).unwrap())
        .collect();
    let positions = written
        .positions
        .iter()
        .map(|x| Vector3::from(*x))
        .collect();
    Crystal::new(cell, elements, positions, None).unwrap()
}

#[test]
fn molecules_of_real_crystals_are_those_of_their_formulas() {
    let packages = packages();
    assert_eq!(packages.len(), 19);
    for (name, package) in packages {
        let crystal = crystal(&package.crystal);
        let molecules = Molecules::find(&crystal, 0.35);
        assert_eq!(
            molecules.molecules().len(),
            package.identity.formula_units,
            "{name}"
        );
        for molecule in molecules.molecules() {
            assert_eq!(molecule.extent(), Extent::Finite, "{name}");
            assert_eq!(molecule.hill_formula(), package.identity.formula, "{name}");
        }
        // Open literature, from memory: neighbours in these crystals are 3 to 5 Å apart.
        let nearest = molecules.nearest_centre_distance_ang();
        assert!((3.0..5.0).contains(&nearest), "{name}: {nearest}");
    }
}
