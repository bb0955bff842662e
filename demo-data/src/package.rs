//! A package with the name of its folder.

use std::path::Path;

use tarehouse_assay::Submission;
use tarehouse_proto::package::{self, MANIFEST_FILE};

/// The files of one package and the name of their folder.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Package {
    /// Name of its folder.
    pub name: String,
    /// Manifest and arrays.
    pub contents: package::Package,
}

impl Package {
    /// The package that decodes to `submission`, whose digest is set to that of the package. Constants are written in the
    /// unit and index order that the submission declares.
    pub fn seal(name: &str, submission: &mut Submission) -> Self {
        let contents = package::encode(submission);
        submission.package_digest = contents.digest();
        Self {
            name: name.to_owned(),
            contents,
        }
    }

    /// File names with their bytes, the manifest first.
    pub fn files(&self) -> Vec<(&str, &[u8])> {
        let manifest = (MANIFEST_FILE, self.contents.manifest.as_bytes());
        std::iter::once(manifest)
            .chain(self.contents.array_refs())
            .collect()
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
