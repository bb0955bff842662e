//! The limits through the front door: at the limit taken, above it named.

use tarehouse_proto::limits;
use tarehouse_proto::package::{check_manifest, decode};

use crate::packages::{MANIFEST, constants, with};

/// `at` and `above` are manifests; the second has exactly one fault, at `key`, that names the limit.
fn holds(at: &str, above: &str, key: &str, limit: limits::Limit) {
    if let Err(violations) = check_manifest(at.as_bytes()) {
        panic!("{key}: {violations}");
    }
    let violations = check_manifest(above.as_bytes()).expect_err(key);
    let text = violations.to_string();
    assert_eq!(violations.listed()[0].key, key, "{text}");
    assert!(
        text.contains(&format!("at most {} are taken", limit.max)),
        "{text}"
    );
}

fn size(limit: limits::Limit) -> usize {
    usize::try_from(limit.max).unwrap()
}

/// Manifest of `n` atoms, 10 Å apart, in `cells` cells; two atoms a formula unit.
fn grid_of_atoms(n: usize, cells: usize) -> String {
    let list = |entries: Vec<String>| format!("[{}]", entries.join(","));
    let symbol = |k| if k % 2 == 0 { "\"N\"" } else { "\"F\"" };
    let elements = list((0..n).map(|k| symbol(k).to_owned()).collect());
    let place = |k: usize| {
        let (x, y, z) = (k % 16 * 5, k / 16 % 16 * 5, k / 256 * 5);
        format!("[0.{x:02},0.{y:02},0.{z:02}]")
    };
    let positions = list((0..n).map(place).collect());
    let (planes, rows) = (cells.div_ceil(1024), cells / cells.div_ceil(1024));
    let translation = |k: usize| format!("[0,{},{}]", k / rows, k % rows);
    let translations = list((0..cells).map(translation).collect());
    MANIFEST
        .lines()
        .map(|line| match line.split(' ').next() {
            Some("cell_vectors") => "cell_vectors = [[200,0,0],[0,200,0],[0,0,200]]".to_owned(),
            Some("elements") => format!("elements = {elements}"),
            Some("positions") => format!("positions = {positions}"),
            Some("formula_units") => format!("formula_units = {}", n / 2),
            Some("supercell") => format!("supercell = [[1,0,0],[0,{planes},0],[0,0,{rows}]]"),
            Some("translations") => format!("translations = {translations}"),
            _ => line.to_owned(),
        })
        .collect::<Vec<String>>()
        .join("\n")
}

#[test]
fn atoms() {
    let n = size(limits::ATOMS);
    holds(
        &grid_of_atoms(n, 1),
        &grid_of_atoms(n + 2, 1),
        "crystal.elements",
        limits::ATOMS,
    );
}

#[test]
fn cells() {
    let (at, above) = (grid_of_atoms(2, 4096), grid_of_atoms(2, 5120));
    holds(&at, &above, "constants.translations", limits::CELLS);
}

#[test]
fn array_bytes() {
    // 9·8·L·n² bytes: 2 113 929 216 for L = 7, 2 415 919 104 for L = 8.
    let n = size(limits::ATOMS);
    holds(
        &grid_of_atoms(n, 7),
        &grid_of_atoms(n, 8),
        "constants.file",
        limits::ARRAY_BYTES,
    );
    let arrays = check_manifest(grid_of_atoms(n, 7).as_bytes())
        .unwrap()
        .arrays;
    assert_eq!(arrays[0].data_bytes, 2_113_929_216);
}

#[test]
fn manifest_bytes() {
    let padded = |bytes: usize| format!("{MANIFEST}#{}", "x".repeat(bytes - MANIFEST.len() - 1));
    let max = size(limits::MANIFEST_BYTES);
    holds(&padded(max), &padded(max + 1), "", limits::MANIFEST_BYTES);
}

#[test]
fn text() {
    let name = |bytes: usize| {
        with(
            "\"II\"",
            &format!("\"{}\"", "é".repeat(bytes / 2) + &"e".repeat(bytes % 2)),
        )
    };
    let max = size(limits::NAME_BYTES);
    holds(
        &name(max),
        &name(max + 1),
        "identity.form",
        limits::NAME_BYTES,
    );
    let line = |bytes: usize| {
        format!(
            "{MANIFEST}\n[settings]\nprogram = \"{}\"\n",
            "x".repeat(bytes)
        )
    };
    let max = size(limits::LINE_BYTES);
    holds(
        &line(max),
        &line(max + 1),
        "settings.program",
        limits::LINE_BYTES,
    );
    let note = |bytes: usize| {
        with(
            "form = \"II\"",
            &format!("form = \"II\"\nnote = \"{}\"", "x".repeat(bytes)),
        )
    };
    let max = size(limits::NOTE_BYTES);
    holds(
        &note(max),
        &note(max + 1),
        "identity.note",
        limits::NOTE_BYTES,
    );
}

#[test]
fn lists() {
    let max = size(limits::TEMPERATURES);
    let claims = |count: usize| {
        format!(
            "{MANIFEST}\n[claims]\nfree_energy = [{}]\n",
            "[300.0, 0.5],".repeat(count)
        )
    };
    holds(
        &claims(max),
        &claims(max + 1),
        "claims.free_energy",
        limits::TEMPERATURES,
    );
    // As many components of one atom as the limit has room for.
    let max = size(limits::COMPONENTS);
    let component = "\n[[component]]\nname = \"x\"\nformula = \"N\"\ncount = 1\n";
    let parts = |count: usize| {
        let n = count;
        let text = grid_of_atoms(2, 1)
            .replace("[\"N\",\"F\"]", &format!("[{}]", "\"N\",".repeat(n)))
            .replace("formula = \"F N\"", &format!("formula = \"N{n}\""));
        let positions: Vec<String> = (0..n).map(|k| format!("[0.{k:02},0,0]")).collect();
        let lines: Vec<String> = text
            .lines()
            .map(|line| {
                if line.starts_with("positions") {
                    format!("positions = [{}]", positions.join(","))
                } else {
                    line.to_owned()
                }
            })
            .collect();
        format!("{}{}", lines.join("\n"), component.repeat(count))
    };
    holds(
        &parts(max),
        &parts(max + 1),
        "component",
        limits::COMPONENTS,
    );
}

#[test]
fn formula_units() {
    let text = |n: u64| with("formula_units = 2", &format!("formula_units = {n}"));
    let at = check_manifest(text(limits::FORMULA_UNITS.max).as_bytes())
        .unwrap_err()
        .to_string();
    assert!(
        at.contains("holds 2 units") && !at.contains("not between"),
        "{at}"
    );
    let above = check_manifest(text(limits::FORMULA_UNITS.max + 1).as_bytes())
        .unwrap_err()
        .to_string();
    assert!(above.contains("2049 is not between 1 and 2048"), "{above}");
}

#[test]
fn npy_header_bytes() {
    let file = |length: usize| {
        let dictionary = "{'descr': '<f8', 'fortran_order': False, 'shape': (2, 4, 3, 4, 3), }";
        let mut bytes = b"\x93NUMPY\x01\x00".to_vec();
        bytes.extend(u16::try_from(length).unwrap().to_le_bytes());
        bytes.extend(format!("{dictionary:length$}").as_bytes());
        let whole = constants();
        bytes.extend(&whole[whole.len() - 288 * 8..]);
        bytes
    };
    let max = size(limits::NPY_HEADER_BYTES);
    let array = &check_manifest(MANIFEST.as_bytes()).unwrap().arrays[0];
    let (at, above) = (file(max), file(max + 1));
    assert!(array.accepts_size(at.len() as u64));
    assert!(decode(MANIFEST.as_bytes(), &[("constants.npy", &at)]).is_ok());
    let text = decode(MANIFEST.as_bytes(), &[("constants.npy", &above)])
        .unwrap_err()
        .to_string();
    assert!(
        text.contains("announces 4097 bytes; at most 4096 are taken"),
        "{text}"
    );
}

#[test]
fn the_announced_limits_are_those_that_hold() {
    let announced = tarehouse_proto::convert::limits_message(7);
    assert_eq!(announced.upload_streams_max, 7);
    assert_eq!(announced.atoms_max, limits::ATOMS.max);
    assert_eq!(announced.array_bytes_max, 2_147_483_648);
    assert_eq!(announced.chunk_bytes_max, 524_288);
    assert_eq!(u64::from(announced.page_size_max), limits::PAGE_SIZE.max);
    assert!(announced.page_size_default <= announced.page_size_max);
}
