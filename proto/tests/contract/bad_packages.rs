//! Bad packages: each fault is named with its place, and all are named at once.

use tarehouse_assay::submission::{CellProtocol, LongRange, Settings};
use tarehouse_physics::units::{BOHR_ANGSTROM, EV_TO_KJ_PER_MOL, HARTREE_EV};
use tarehouse_proto::package::{Violations, check_manifest, decode, npy};

use crate::packages::{ATOMS, MANIFEST, SHAPE, constants, values, with};

fn faults(manifest: &str) -> Violations {
    decode(manifest.as_bytes(), &[("constants.npy", &constants())]).expect_err("the package is bad")
}

/// Asserts that the manifest has exactly one fault, with this key and these words in its message.
pub(crate) fn one(manifest: &str, key: &str, words: &str) {
    let violations = faults(manifest);
    let text = violations.to_string();
    assert_eq!(violations.count(), 1, "{text}");
    let violation = &violations.listed()[0];
    assert_eq!(violation.file, "package.toml", "{text}");
    assert_eq!(violation.key, key, "{text}");
    assert!(violation.message.contains(words), "{text}");
}

#[test]
fn the_good_package_is_taken() {
    let submission = decode(MANIFEST.as_bytes(), &[("constants.npy", &constants())]).unwrap();
    assert_eq!(submission.crystal.atom_count(), ATOMS);
    assert_eq!(submission.constants.to_array(), values());
    let summary = check_manifest(MANIFEST.as_bytes()).unwrap();
    assert_eq!(summary.arrays.len(), 1);
    assert_eq!(summary.arrays[0].shape, SHAPE);
    assert_eq!(summary.arrays[0].data_bytes, 288 * 8);
    assert_eq!(summary.manifest.identity, submission.identity);
    let size = constants().len() as u64;
    assert!(summary.arrays[0].accepts_size(size));
    assert!(!summary.arrays[0].accepts_size(288 * 8));
    assert!(!summary.arrays[0].accepts_size(288 * 8 + npy::PREAMBLE_BYTES_MAX + 1));
    assert!(!summary.arrays[0].accepts_size(0));
}

#[test]
fn what_is_left_out_has_its_default() {
    let manifest = check_manifest(MANIFEST.as_bytes()).unwrap().manifest;
    assert_eq!(manifest.cell_protocol, CellProtocol::Relaxed);
    assert_eq!(manifest.cell_temperature_k, None);
    assert_eq!(manifest.declaration.long_range, LongRange::Included);
    assert_eq!(manifest.declaration.enforced, []);
    assert!(!manifest.masses_declared);
    assert_eq!(manifest.identity.contributor_key, None);
    assert_eq!(manifest.energy.level, None);
    assert_eq!(manifest.settings, Settings::default());
    // An empty text counts as none.
    let empty = with("form = \"II\"", "form = \"II\"\ncontributor_key = \"\"");
    let manifest = check_manifest(empty.as_bytes()).unwrap().manifest;
    assert_eq!(manifest.identity.contributor_key, None);
}

#[test]
fn unknown_keys_name_the_nearest() {
    let near = with("raw = true", "raw = true\nlong_rnage = \"included\"");
    one(&near, "constants.long_rnage", "did you mean \"long_range\"");
    let far = with("raw = true", "raw = true\nxyzzy = 1");
    one(&far, "constants.xyzzy", "unknown key");
    assert!(!faults(&far).to_string().contains("did you mean"));
    one(
        &format!("{MANIFEST}\n[setings]\n"),
        "setings",
        "did you mean \"settings\"",
    );
    let level = with(
        "unit = \"eV\"\n",
        "unit = \"eV\"\nlevel = { bases = \"x\" }\n",
    );
    one(&level, "energy.level.bases", "did you mean \"basis\"");
}

#[test]
fn lines_are_named() {
    let text = with("form = \"II\"", "form = 2");
    let violations = faults(&text);
    assert_eq!(
        violations.to_string(),
        "package.toml: identity.form: a string is wanted, not a value of type integer (line 6)"
    );
}

#[test]
fn every_required_key_is_missed() {
    for (line, key) in [
        ("format = \"tarehouse-package/1\"", "format"),
        ("compound = \"fluoric nitride\"", "identity.compound"),
        ("formula = \"F N\"", "identity.formula"),
        ("form = \"II\"", "identity.form"),
        ("formula_units = 2", "identity.formula_units"),
        ("length_unit = \"angstrom\"", "crystal.length_unit"),
        ("file = \"constants.npy\"\n", "constants.file"),
        ("unit = \"eV/angstrom^2\"", "constants.unit"),
        ("first_index = \"displaced\"", "constants.first_index"),
        ("displaced = \"all\"", "constants.displaced"),
        ("raw = true", "constants.raw"),
        (
            "translations = [[0, 0, 0], [1, 0, 0]]",
            "constants.translations",
        ),
        (
            "supercell = [[1, 1, 0], [-1, 1, 0], [0, 0, 1]]",
            "constants.supercell",
        ),
        ("lattice_energy = -40.5", "energy.lattice_energy"),
        ("unit = \"eV\"\n", "energy.unit"),
    ] {
        let violations = check_manifest(with(line, "").as_bytes()).expect_err(key);
        let text = violations.to_string();
        assert_eq!(violations.count(), 1, "{text}");
        assert_eq!(text, format!("package.toml: {key}: the key is missing"));
    }
    for table in ["identity", "crystal", "constants", "energy"] {
        let renamed = with(&format!("[{table}]"), &format!("[claims.{table}]"));
        let text = check_manifest(renamed.as_bytes()).unwrap_err().to_string();
        assert!(
            text.contains(&format!("package.toml: {table}: the key is missing")),
            "{text}"
        );
    }
}

#[test]
fn the_dielectric_table_is_whole() {
    let only_file = format!("{MANIFEST}\n[dielectric]\neffective_charges = \"z.npy\"\n");
    let text = check_manifest(only_file.as_bytes())
        .unwrap_err()
        .to_string();
    assert!(
        text.contains("dielectric.permittivity: missing beside effective_charges"),
        "{text}"
    );
    let shared = format!(
        "{MANIFEST}\n[dielectric]\neffective_charges = \"constants.npy\"\npermittivity = [[1,0,0],[0,1,0],[0,0,1]]\n"
    );
    let text = check_manifest(shared.as_bytes()).unwrap_err().to_string();
    assert!(
        text.contains("constants.npy is named for two arrays"),
        "{text}"
    );
}

#[test]
fn masses_must_fit() {
    let masses = |text: &str| with("length_unit", &format!("masses = {text}\nlength_unit"));
    one(
        &masses("[14.0, 19.0, 14.0]"),
        "crystal.masses",
        "4 elements, but 3 masses",
    );
    one(
        &masses("[14.0, 19.0, 14.0, -1.0]"),
        "crystal.masses[3]",
        "not between",
    );
    let good = decode(
        masses("[14, 19.0, 14.0, 19.5]").as_bytes(),
        &[("constants.npy", &constants())],
    )
    .unwrap();
    assert!(good.masses_declared);
    assert_eq!(good.crystal.masses_u(), [14.0, 19.0, 14.0, 19.5]);
}

#[test]
fn stoichiometry_must_fit() {
    one(
        &with("formula_units = 2", "formula_units = 4"),
        "identity.formula_units",
        "holds 2 units of F N",
    );
    for formula in ["F2 N", "F N O", "F", "F3 N3"] {
        let text = with("formula = \"F N\"", &format!("formula = \"{formula}\""));
        one(
            &text,
            "identity.formula",
            "does not divide the cell, which holds F2 N2",
        );
    }
    // The whole cell as one formula unit is a formula too.
    let whole = with(
        "formula = \"F N\"\nform = \"II\"\nformula_units = 2",
        "formula = \"F2 N2\"\nform = \"II\"\nformula_units = 1",
    );
    assert!(check_manifest(whole.as_bytes()).is_ok());
}

#[test]
fn atoms_must_not_overlap_under_periodicity() {
    // 0.29 Å and 0.31 Å along the first vector of 5 Å, the image on the other side of the cell included.
    for (x, overlaps) in [
        (0.058, true),
        (0.062, false),
        (-0.942, true),
        (0.938, false),
        (2.942, true),
    ] {
        let text = with("[0.25, 0.0, 0.0]", &format!("[{x}, 0.0, 0.0]"));
        match check_manifest(text.as_bytes()) {
            Ok(_) => assert!(!overlaps, "{x}"),
            Err(violations) => {
                assert!(overlaps, "{x}: {violations}");
                one(&text, "crystal.positions[1]", "0.290 Å from atom 0");
            }
        }
    }
    one(
        &with("[0.25, 0.0, 0.0]", "[1.0, -2.0, 3.0]"),
        "crystal.positions[1]",
        "the same place as atom 0",
    );
}

#[test]
fn absurd_cells_are_named() {
    let text = with("[5.0, 0.0, 0.0]", "[0.0, 0.0, 0.0]");
    one(&text, "crystal.cell_vectors", "span no volume");
    let text = with("[0.5, 6.0, 0.0]", "[500.0, 6.0, 0.0]");
    one(&text, "crystal.cell_vectors[0]", "less skewed");
}

#[test]
fn raw_forces_are_refused_in_one_sentence() {
    let forces = "[forces]\nfile = \"forces.npy\"\nunit = \"eV/angstrom\"\ndisplacements = []\n";
    let text = with("file = \"constants.npy\"\n", "") + "\n" + forces;
    let violations = check_manifest(text.as_bytes()).unwrap_err();
    assert_eq!(violations.count(), 1, "{violations}");
    assert!(
        violations
            .to_string()
            .contains("forces: raw forces are not taken by this version")
    );
}

#[test]
fn text_that_is_no_manifest_is_named() {
    for (bytes, words) in [
        (b"format = \"a\xff\"".to_vec(), "not UTF-8 at byte 11"),
        (b"format = ".to_vec(), "not TOML"),
        (b"a = 1\na = 2\n".to_vec(), "not TOML"),
        (vec![b'['; 500_000], "not TOML"),
        ([b"a = ".to_vec(), vec![b'['; 500_000]].concat(), "not TOML"),
        (
            [b"a = ".to_vec(), b"{a=".repeat(200_000)].concat(),
            "not TOML",
        ),
        (b"a.".repeat(500_000), "not TOML"),
        (vec![b' '; 1024 * 1024 + 1], "at most 1048576 are taken"),
        (Vec::new(), "format: the key is missing"),
    ] {
        let text = check_manifest(&bytes).unwrap_err().to_string();
        assert!(
            text.contains(words),
            "{words}: {}",
            &text[..text.len().min(300)]
        );
    }
}

#[test]
fn everything_is_reported_at_once() {
    let text = with("form = \"II\"", "form = \"\"")
        .replace("\"angstrom\"", "\"metre\"")
        .replace("raw = true", "raw = 1")
        .replace("[1, 0, 0]]\n", "[0, 0]]\n")
        .replace("-40.5", "\"low\"");
    let arrays: [(&str, &[u8]); 1] = [("other.npy", b"")];
    let violations = decode(text.as_bytes(), &arrays).unwrap_err();
    let keys: Vec<&str> = violations.listed().iter().map(|v| v.key.as_str()).collect();
    assert_eq!(
        keys,
        [
            "identity.form",
            "crystal.length_unit",
            "constants.translations[1]",
            "constants.raw",
            "energy.lattice_energy",
            "",
            ""
        ],
        "{violations}"
    );
    assert!(
        violations
            .to_string()
            .contains("other.npy: the manifest names no such array")
    );
    assert!(
        violations
            .to_string()
            .contains("constants.npy: the file is missing")
    );
}

#[test]
fn the_list_of_faults_is_bounded() {
    let many: String = (0..1000).fold(String::new(), |text, k| text + &format!("key{k} = 1\n"));
    let violations =
        check_manifest(format!("{MANIFEST}\n[settings]\n{many}").as_bytes()).unwrap_err();
    assert_eq!(violations.listed().len(), 200);
    assert_eq!(violations.count(), 1000);
    assert!(violations.to_string().ends_with("and 800 more"));
}

#[test]
fn arrays_must_fit() {
    let fault =
        |arrays: &[(&str, &[u8])]| decode(MANIFEST.as_bytes(), arrays).unwrap_err().to_string();
    let good = constants();
    assert_eq!(
        fault(&[("constants.npy", &good), ("constants.npy", &good)]),
        "constants.npy: the file stands twice"
    );
    let wrong = npy::write(&[2, 4, 3, 12], &values());
    assert_eq!(
        fault(&[("constants.npy", &wrong)]),
        "constants.npy: the shape is (2, 4, 3, 12), but the manifest asks for (2, 4, 3, 4, 3)"
    );
    let mut bad = values();
    bad[287] = f64::NEG_INFINITY;
    bad[((4 + 2) * 3 + 1) * 12 + 7] = f64::NAN;
    assert_eq!(
        fault(&[("constants.npy", &npy::write(&SHAPE, &bad))]),
        "constants.npy: [1, 2, 1, 2, 1]: 2 values are not finite, this is the first"
    );
}

#[test]
fn arrays_are_judged_beside_a_bad_manifest() {
    let text = with("form = \"II\"", "form = 2");
    let violations = decode(
        text.as_bytes(),
        &[("constants.npy", &npy::write(&[1], &[1.0]))],
    )
    .unwrap_err();
    assert_eq!(violations.count(), 2, "{violations}");
}

#[test]
fn units_are_converted() {
    let arrays = constants();
    let read = |text: String| decode(text.as_bytes(), &[("constants.npy", &arrays)]).unwrap();
    let bohr = read(with("\"angstrom\"", "\"bohr\""));
    assert!((bohr.crystal.cell()[(1, 1)] - 6.0 * BOHR_ANGSTROM).abs() < 1e-12);
    for (unit, ev) in [
        ("hartree", HARTREE_EV),
        ("rydberg", HARTREE_EV / 2.0),
        ("kJ/mol", 1.0 / EV_TO_KJ_PER_MOL),
        ("eV", 1.0),
    ] {
        let new = format!("unit = \"{unit}\"\nconformational_correction = 2\n");
        let energy = read(with("unit = \"eV\"\n", &new)).energy;
        assert!(
            (energy.lattice_energy_ev + 40.5 * ev).abs() < 1e-9,
            "{unit}"
        );
        assert!(
            (energy.conformational_correction_ev - 2.0 * ev).abs() < 1e-9,
            "{unit}"
        );
    }
    // CODATA 2022: 1 hartree/bohr² = 1556.893 N/m = 97.1736 eV/Å².
    for (unit, ev) in [
        ("hartree/bohr^2", 97.1736),
        ("rydberg/bohr^2", 48.5868),
        ("N/m", 0.062_415_09),
    ] {
        let values = read(with("eV/angstrom^2", unit)).constants.to_array();
        assert!(
            (values[0] + 7.0 * ev).abs() < 1e-4 * ev,
            "{unit} {}",
            values[0]
        );
    }
}

#[test]
fn the_first_index_is_turned() {
    let given = values();
    let read = decode(
        with("first_index = \"displaced\"", "first_index = \"response\"").as_bytes(),
        &[("constants.npy", &constants())],
    )
    .unwrap();
    // In this supercell both translations are their own negatives: Φ[l, i, a, j, b] = given[l, j, b, i, a].
    let at =
        |l: usize, i: usize, a: usize, j: usize, b: usize| (((l * 4 + i) * 3 + a) * 4 + j) * 3 + b;
    assert_eq!(
        read.constants.block(1, 2, 3)[(0, 2)].to_bits(),
        given[at(1, 3, 2, 2, 0)].to_bits()
    );
}
