//! Tables of wrong values: one fault each, with its place and words.

use crate::bad_packages::one;
use crate::packages::{MANIFEST, with};

/// What stands in the manifest => what stands there instead => key of the fault => words of its message.
/// `\n` is a new line.
const REPLACED: &str = r#"
package/1 => package/2 => format => tarehouse-package/1
"fluoric nitride" => "" => identity.compound => must not be empty
"fluoric nitride" => "x " => identity.compound => end with a blank
"fluoric nitride" => "a\u001b[2J" => identity.compound => U+001B
"F N" => "F Xx" => identity.formula => Xx
formula_units = 2 => formula_units = 0 => identity.formula_units => between 1 and
formula_units = 2 => formula_units = 2.0 => identity.formula_units => an integer
"angstrom" => "angstroem" => crystal.length_unit => did you mean "angstrom"
[5.0, 0.0, 0.0] => [5.0, nan, 0.0] => crystal.cell_vectors[0][1] => not finite
[5.0, 0.0, 0.0] => [5.0, 0.0] => crystal.cell_vectors[0] => exactly 3
[5.0, 0.0, 0.0] => [1001.0, 0.0, 0.0] => crystal.cell_vectors[0] => at most 1000
"N", "F"] => "N", "Fo"] => crystal.elements[3] => "Fo" is not an element
[0.75, 0.5, 0.5] => [0.75, 0.5, true] => crystal.positions[3][2] => a number
[0.75, 0.5, 0.5] => [0.75, 0.5, inf] => crystal.positions[3][2] => not finite
[0.75, 0.5, 0.5] => [0.75, 0.5, 1e9] => crystal.positions[3][2] => between
, [0.75, 0.5, 0.5] =>  => crystal.positions => 4 elements, but 3 positions
constants.npy => ../constants.npy => constants.file => plain file name
constants.npy => constants.txt => constants.file => ending in .npy
eV/angstrom^2 => eV/A^2 => constants.unit => hartree/bohr^2
[-1, 1, 0] => [1, 1, 0] => constants.supercell => singular
[-1, 1, 0] => [-1, 1025, 0] => constants.supercell[1][1] => between
[1, 0, 0]]\n => [-9223372036854775808, 0, 0]]\n => constants.translations[1][0] => not between
[1, 0, 0]]\n => [1, 1, 0]]\n => constants.translations[1] => the same modulo
, [1, 0, 0]]\n => ]\n => constants.translations => determinant ±2
raw = true => raw = false => constants.raw => say in `enforced`
raw = true => raw = true\nenforced = ["space-group"] => constants.raw => names conditions
raw = true => raw = false\nenforced = ["sum"] => constants.enforced[0] => translation-sum
-40.5 => -inf => energy.lattice_energy => not finite
unit = "eV"\n => unit = "ev"\n => energy.unit => did you mean "eV"
"#;

/// What is appended to the manifest => key of the fault => words of its message.
const APPENDED: &str = r#"
[settings]\nkind = "dtf" => settings.kind => did you mean "dft"
[settings]\nstress_gpa = [[1,0,0],[0,1,0]] => settings.stress_gpa => exactly 3
[settings]\norbital_cutoff_ev = -1 => settings.orbital_cutoff_ev => between 0
[claims]\nfree_energy = [[300.0]] => claims.free_energy[0] => exactly 2
[claims]\nfree_energy = [[-1.0, 2.0]] => claims.free_energy[0][0] => between 0
[dielectric]\npermittivity = [[1,0,0],[0,1,0],[0,0,1]] => dielectric.effective_charges => both or neither
[[component]]\nname = "a"\nformula = "F2 N"\ncount = 1 => component => add up to F2 N, not to F N
[[component]]\nname = "a"\nformula = "F N" => component[0].count => missing
"#;

/// Rows of a table.
fn rows<const N: usize>(table: &str) -> Vec<[String; N]> {
    table
        .lines()
        .filter(|line| !line.is_empty())
        .map(|line| {
            let cells: Vec<String> = line.split(" => ").map(|c| c.replace("\\n", "\n")).collect();
            cells.try_into().expect(line)
        })
        .collect()
}

#[test]
fn replaced_values_are_named() {
    let rows = rows(REPLACED);
    assert_eq!(rows.len(), 29);
    for [old, new, key, words] in rows {
        one(&with(&old, &new), &key, &words);
    }
}

#[test]
fn appended_tables_are_read_strictly() {
    let rows = rows(APPENDED);
    assert_eq!(rows.len(), 8);
    for [more, key, words] in rows {
        one(&format!("{MANIFEST}\n{more}\n"), &key, &words);
    }
}
