//! Every limit of the package format and of the transfers, in one table. A limit is the largest value that is taken.

use tarehouse_physics::supercell;

/// A limit that was exceeded.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
#[error("{found} {what}; at most {max} are taken")]
pub struct Exceeded {
    /// What was counted, with its unit.
    pub what: &'static str,
    /// How much there was.
    pub found: u64,
    /// The largest number taken.
    pub max: u64,
}

/// One limit.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Limit {
    /// What is counted, with its unit, as it stands in messages.
    pub what: &'static str,
    /// The largest number taken.
    pub max: u64,
}

impl Limit {
    const fn new(what: &'static str, max: u64) -> Self {
        Self { what, max }
    }

    /// Whether a number is taken.
    pub fn allows(&self, found: u64) -> bool {
        found <= self.max
    }

    /// Holds a number against the limit.
    ///
    /// # Errors
    /// [`Exceeded`] where it is larger.
    pub fn check(&self, found: u64) -> Result<(), Exceeded> {
        if self.allows(found) {
            Ok(())
        } else {
            let Self { what, max } = *self;
            Err(Exceeded { what, found, max })
        }
    }

    /// Holds the length of a collection against the limit.
    ///
    /// # Errors
    /// [`Exceeded`] where it is longer.
    pub fn check_len(&self, found: usize) -> Result<(), Exceeded> {
        self.check(u64::try_from(found).unwrap_or(u64::MAX))
    }
}

/// Atoms in the primitive cell.
pub const ATOMS: Limit = Limit::new("atoms", 2048);
/// Primitive cells in the supercell.
pub const CELLS: Limit = Limit::new("cells in the supercell", supercell::CELLS_MAX);
/// Size of one array file, header included, bytes.
pub const ARRAY_BYTES: Limit = Limit::new("bytes in an array file", 2 * 1024 * 1024 * 1024);
/// Size of `package.toml`, bytes.
pub const MANIFEST_BYTES: Limit = Limit::new("bytes in the manifest", 1024 * 1024);
/// Length of the header text of an array file, bytes; the usual one has 118.
pub const NPY_HEADER_BYTES: Limit = Limit::new("bytes in the array's header", 4096);
/// Dimensions of an array.
pub const NPY_DIMENSIONS: Limit = Limit::new("dimensions of an array", 8);
/// Length of a name: compound, form, contributor's key, component, file; bytes.
pub const NAME_BYTES: Limit = Limit::new("bytes in a name", 128);
/// Length of any other one-line string, bytes.
pub const LINE_BYTES: Limit = Limit::new("bytes in a line of text", 1024);
/// Length of the free note, bytes.
pub const NOTE_BYTES: Limit = Limit::new("bytes in the note", 16 * 1024);
/// Components of a formula unit.
pub const COMPONENTS: Limit = Limit::new("components", 16);
/// Formula units in the cell, and components of one kind in a formula unit.
pub const FORMULA_UNITS: Limit = Limit::new("formula units", 2048);
/// Claimed temperatures, and temperatures of one ranking.
pub const TEMPERATURES: Limit = Limit::new("temperatures", 64);
/// Violations that are listed; the rest is counted.
pub const VIOLATIONS: Limit = Limit::new("violations listed", 200);
/// Data of one chunk on the wire, bytes.
pub const CHUNK_BYTES: Limit = Limit::new("bytes in a chunk", 512 * 1024);
/// Entries on one page of a list.
pub const PAGE_SIZE: Limit = Limit::new("entries on a page", 200);
/// Entries on one page where the caller names no number.
pub const PAGE_SIZE_DEFAULT: u32 = 50;

/// All limits.
pub const ALL: [Limit; 15] = [
    ATOMS,
    CELLS,
    ARRAY_BYTES,
    MANIFEST_BYTES,
    NPY_HEADER_BYTES,
    NPY_DIMENSIONS,
    NAME_BYTES,
    LINE_BYTES,
    NOTE_BYTES,
    COMPONENTS,
    FORMULA_UNITS,
    TEMPERATURES,
    VIOLATIONS,
    CHUNK_BYTES,
    PAGE_SIZE,
];

/// Largest absolute value of an element of the supercell matrix or of a translation.
pub const LATTICE_INTEGER_MAX: i64 = supercell::ELEMENT_MAX;
/// Longest cell vector, Å.
pub const CELL_VECTOR_MAX_ANG: f64 = 1000.0;
/// Smallest distance of the lattice planes that belong to one cell vector, Å: below it the cell is written in vectors so
/// skewed that neighbours cannot be found reliably.
pub const PLANE_SPACING_MIN_ANG: f64 = 0.3;
/// Largest absolute value of a fractional coordinate.
pub const POSITION_MAX: f64 = 100.0;
/// Distance below which two atoms are the same place, Å: less than half of the shortest bond (H–H, 0.74 Å).
pub const OVERLAP_ANG: f64 = 0.3;
/// Highest temperature, K.
pub const TEMPERATURE_MAX_K: f64 = 10_000.0;
/// Largest mass of an atom, u.
pub const MASS_MAX_U: f64 = 1000.0;
/// Largest absolute value of any other number of a manifest.
pub const NUMBER_MAX: f64 = 1e15;

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_limit_holds_at_below_and_above() {
        for limit in ALL {
            assert_eq!(limit.check(0), Ok(()));
            assert_eq!(limit.check(limit.max - 1), Ok(()));
            assert_eq!(limit.check(limit.max), Ok(()));
            let error = limit.check(limit.max + 1).unwrap_err();
            assert_eq!((error.found, error.max), (limit.max + 1, limit.max));
            assert!(error.to_string().contains(limit.what));
        }
    }
}
