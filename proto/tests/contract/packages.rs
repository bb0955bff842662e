//! Small packages that the tests share: invented crystals, no physics in them.

use tarehouse_proto::package::npy;

/// Manifest of a crystal of two invented diatomic molecules in a skewed cell, in a non-diagonal supercell of two cells.
pub(crate) const MANIFEST: &str = r#"format = "tarehouse-package/1"

[identity]
compound = "fluoric nitride"
formula = "F N"
form = "II"
formula_units = 2

[crystal]
cell_vectors = [[5.0, 0.0, 0.0], [0.5, 6.0, 0.0], [0.25, -0.5, 7.0]]
length_unit = "angstrom"
elements = ["N", "F", "N", "F"]
positions = [[0.0, 0.0, 0.0], [0.25, 0.0, 0.0], [0.5, 0.5, 0.5], [0.75, 0.5, 0.5]]

[constants]
file = "constants.npy"
unit = "eV/angstrom^2"
supercell = [[1, 1, 0], [-1, 1, 0], [0, 0, 1]]
translations = [[0, 0, 0], [1, 0, 0]]
first_index = "displaced"
displaced = "all"
raw = true

[energy]
lattice_energy = -40.5
unit = "eV"
"#;

/// Atoms in the cell of [`MANIFEST`].
pub(crate) const ATOMS: usize = 4;
/// Shape of its constants.
pub(crate) const SHAPE: [u64; 5] = [2, 4, 3, 4, 3];

/// Distinct values, so that every mix-up shows.
pub(crate) fn values() -> Vec<f64> {
    (0..288).map(|k| f64::from(k) * 0.125 - 7.0).collect()
}

/// The constants file of [`MANIFEST`].
pub(crate) fn constants() -> Vec<u8> {
    npy::write(&SHAPE, &values())
}

/// The manifest with one piece of its text replaced; the piece must be there exactly once.
pub(crate) fn with(old: &str, new: &str) -> String {
    assert_eq!(MANIFEST.matches(old).count(), 1, "{old}");
    MANIFEST.replace(old, new)
}
