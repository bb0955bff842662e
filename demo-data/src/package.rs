//! A package: the bytes of its manifest and of its array, made from a submission.

use std::path::Path;

use tarehouse_assay::Submission;
use tarehouse_assay::submission::Digest;
use tarehouse_physics::force_constants::FirstIndex;

use crate::{manifest, npy};

/// Name of the array of constants.
const CONSTANTS_FILE: &str = "constants.npy";
/// Name of the manifest.
const MANIFEST_FILE: &str = "package.toml";

/// The files of one package.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Package {
    /// Name of its folder.
    pub name: String,
    /// Text of `package.toml`.
    pub manifest: String,
    /// Bytes of `constants.npy`.
    pub constants: Vec<u8>,
}

impl Package {
    /// The package that decodes to `submission`, whose digest is set to that of the package. Constants are written in the
    /// unit and index order that the submission declares. Dielectric data are not written.
    pub fn seal(name: &str, submission: &mut Submission) -> Self {
        let scale = 1.0 / submission.declaration.unit.in_ev_per_ang2();
        let constants = &submission.constants;
        let (cells, n) = (constants.supercell().cell_count(), constants.atom_count());
        let mut values = Vec::with_capacity(9 * constants.blocks().len());
        for l in 0..cells {
            for (i, a) in (0..n).flat_map(|i| (0..3).map(move |a| (i, a))) {
                for j in 0..n {
                    let block = match submission.declaration.first_index {
                        FirstIndex::Displaced => *constants.block(l, i, j),
                        FirstIndex::Response => {
                            let back = constants.supercell().negative(l);
                            constants.block(back, j, i).transpose()
                        }
                    };
                    values.extend(block.row(a).iter().map(|x| x * scale));
                }
            }
        }
        let package = Self {
            name: name.to_owned(),
            manifest: manifest::text(submission, CONSTANTS_FILE),
            constants: npy::encode(&[cells, n, 3, n, 3], &values),
        };
        submission.package_digest = package.digest();
        package
    }

    /// File names with their bytes.
    pub fn files(&self) -> [(&'static str, &[u8]); 2] {
        [
            (MANIFEST_FILE, self.manifest.as_bytes()),
            (CONSTANTS_FILE, &self.constants),
        ]
    }

    /// BLAKE3 of the format line, the manifest, and name, length (little-endian, 64 bits) and BLAKE3 of the array.
    pub fn digest(&self) -> Digest {
        let mut hasher = blake3::Hasher::new();
        hasher.update(manifest::FORMAT.as_bytes());
        hasher.update(b"\n");
        hasher.update(self.manifest.as_bytes());
        hasher.update(CONSTANTS_FILE.as_bytes());
        hasher.update(&(self.constants.len() as u64).to_le_bytes());
        hasher.update(blake3::hash(&self.constants).as_bytes());
        *hasher.finalize().as_bytes()
    }

    /// Writes the files into the folder `name` below `parent`, which is made if it does not exist.
    ///
    /// # Errors
    /// Those of the file system.
    pub fn write_below(&self, parent: &Path) -> std::io::Result<()> {
        let folder = parent.join(&self.name);
        std::fs::create_dir_all(&folder)?;
        for (name, bytes) in self.files() {
            std::fs::write(folder.join(name), bytes)?;
        }
        Ok(())
    }
}
