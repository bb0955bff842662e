//! Packages on disk, and packages built into this program.
//!
//! Sizes are looked at before a file is read, and nothing but plain files inside the folder is opened: a package cannot
//! point elsewhere. Every violation is reported, of files and of what is in them, at once.

use std::collections::BTreeMap;
use std::fs::{self, File};
use std::io::Read as _;
use std::path::{Component, Path};

use include_dir::Dir;
use prost::bytes::Bytes;
use tarehouse_assay::Submission;
use tarehouse_proto::limits::{ARRAY_BYTES, Limit, MANIFEST_BYTES};
use tarehouse_proto::package::{MANIFEST_FILE, decode};

use crate::failure::Failure;

/// The bytes of a package.
#[derive(Debug, Clone)]
pub struct PackageFiles {
    /// The folder, as given.
    pub folder: String,
    /// `package.toml`.
    pub manifest: Bytes,
    /// Array files by name.
    pub arrays: BTreeMap<String, Bytes>,
}

/// A package in which nothing is wrong.
#[derive(Debug)]
pub struct CheckedPackage {
    /// Its bytes.
    pub files: PackageFiles,
    /// What they mean.
    pub submission: Submission,
}

/// Reads and checks a package.
///
/// # Errors
/// [`Failure::InvalidPackage`] with every violation; [`Failure::File`] where the folder cannot be looked at.
pub fn read(folder: &Path) -> Result<CheckedPackage, Failure> {
    let label = folder.display().to_string();
    let metadata = fs::metadata(folder).map_err(|error| Failure::file("look at", folder, error))?;
    if !metadata.is_dir() {
        return Err(invalid(
            label,
            vec!["this is a file; a package is a folder with a package.toml".to_owned()],
        ));
    }
    let manifest = match read_file(folder, MANIFEST_FILE, MANIFEST_BYTES) {
        Ok(manifest) => manifest,
        Err(violation) => {
            let violations = std::iter::once(violation).chain(packages_inside(folder));
            return Err(invalid(label, violations.collect()));
        }
    };
    let mut unreadable = BTreeMap::new();
    let mut arrays = BTreeMap::new();
    for name in named_arrays(&manifest) {
        match read_file(folder, &name, ARRAY_BYTES) {
            Ok(bytes) => {
                arrays.insert(name, bytes);
            }
            Err(violation) => {
                unreadable.insert(name, violation);
            }
        }
    }
    let files = PackageFiles {
        folder: label,
        manifest,
        arrays,
    };
    check_with(files, unreadable)
}

/// Takes a package from the folders that are built into this program.
///
/// # Errors
/// [`Failure::InvalidPackage`] with every violation.
pub fn read_built_in(folder: &Dir<'static>) -> Result<CheckedPackage, Failure> {
    let mut manifest = Bytes::new();
    let mut arrays = BTreeMap::new();
    for file in folder.files() {
        let name = file
            .path()
            .file_name()
            .unwrap_or_default()
            .to_string_lossy();
        let contents = Bytes::from_static(file.contents());
        if name == MANIFEST_FILE {
            manifest = contents;
        } else if file
            .path()
            .extension()
            .is_some_and(|extension| extension == "npy")
        {
            arrays.insert(name.into_owned(), contents);
        }
    }
    let files = PackageFiles {
        folder: folder
            .path()
            .file_name()
            .unwrap_or_default()
            .to_string_lossy()
            .into_owned(),
        manifest,
        arrays,
    };
    check_with(files, BTreeMap::new())
}

/// Decodes the package; `unreadable` holds the violation of each array file that could not be read.
fn check_with(
    files: PackageFiles,
    mut unreadable: BTreeMap<String, String>,
) -> Result<CheckedPackage, Failure> {
    let arrays: Vec<(&str, &[u8])> = files
        .arrays
        .iter()
        .map(|(name, bytes)| (name.as_str(), &bytes[..]))
        .collect();
    match decode(&files.manifest, &arrays) {
        Ok(submission) => Ok(CheckedPackage { files, submission }),
        Err(found) => {
            let mut all: Vec<String> = found
                .listed()
                .iter()
                .map(|violation| {
                    unreadable
                        .remove(&violation.file)
                        .unwrap_or_else(|| violation.to_string())
                })
                .collect();
            all.extend(unreadable.into_values());
            if found.unlisted_count() > 0 {
                all.push(format!("and {} more", found.unlisted_count()));
            }
            Err(invalid(files.folder, all))
        }
    }
}

/// What to say of a folder that holds packages and is none.
fn packages_inside(folder: &Path) -> Option<String> {
    let mut inside: Vec<String> = fs::read_dir(folder)
        .ok()?
        .filter_map(Result::ok)
        .filter(|entry| entry.path().join(MANIFEST_FILE).is_file())
        .map(|entry| entry.path().display().to_string())
        .collect();
    inside.sort();
    let first = inside.first()?;
    let count = inside.len();
    Some(format!(
        "but there is one in {count} of its own folders; a package is one of those, such as {first}"
    ))
}

fn invalid(folder: String, violations: Vec<String>) -> Failure {
    Failure::InvalidPackage { folder, violations }
}

/// The array files that a manifest names, whatever else is wrong with it: decoding without any array reports each as
/// missing, under its own name.
fn named_arrays(manifest: &[u8]) -> Vec<String> {
    match decode(manifest, &[]) {
        Ok(_) => Vec::new(),
        Err(violations) => {
            let mut names: Vec<String> = violations
                .listed()
                .iter()
                .map(|violation| violation.file.clone())
                .filter(|file| file != MANIFEST_FILE)
                .collect();
            names.sort();
            names.dedup();
            names
        }
    }
}

/// Reads one file of the folder, or says why not.
fn read_file(folder: &Path, name: &str, limit: Limit) -> Result<Bytes, String> {
    if !is_plain_name(name) {
        return Err(format!(
            "{name}: not a plain file name; arrays lie beside the manifest"
        ));
    }
    let path = folder.join(name);
    let said = |error: std::io::Error| match error.kind() {
        std::io::ErrorKind::NotFound => format!("{name}: the file is missing"),
        _ => format!("{name}: the file cannot be read: {error}"),
    };
    let metadata = fs::metadata(&path).map_err(said)?;
    if !metadata.is_file() {
        return Err(format!("{name}: not a regular file"));
    }
    limit
        .check(metadata.len())
        .map_err(|exceeded| format!("{name}: {exceeded}"))?;
    let mut bytes = Vec::with_capacity(usize::try_from(metadata.len()).unwrap_or(0));
    File::open(&path)
        .and_then(|file| file.take(limit.max + 1).read_to_end(&mut bytes))
        .map_err(said)?;
    limit
        .check_len(bytes.len())
        .map_err(|exceeded| format!("{name}: {exceeded}"))?;
    Ok(Bytes::from(bytes))
}

/// Whether a name stays inside its folder.
fn is_plain_name(name: &str) -> bool {
    let mut components = Path::new(name).components();
    matches!(
        (components.next(), components.next()),
        (Some(Component::Normal(_)), None)
    ) && !name.contains(['/', '\\', '\0'])
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_that_leave_the_folder_are_not_opened() {
        for name in ["constants.npy", "a b.npy", "..npy"] {
            assert!(is_plain_name(name), "{name}");
        }
        for name in [
            "",
            ".",
            "..",
            "../x",
            "/etc/passwd",
            "a/b",
            "a\\b",
            "a/",
            "x\0",
        ] {
            assert!(!is_plain_name(name), "{name:?}");
        }
    }

    #[test]
    fn a_file_is_measured_before_it_is_read() {
        let folder = tempfile::tempdir().unwrap();
        let limit = Limit {
            what: "bytes",
            max: 4,
        };
        for (size, is_taken) in [(3, true), (4, true), (5, false)] {
            fs::write(folder.path().join("x"), vec![7; size]).unwrap();
            let read = read_file(folder.path(), "x", limit);
            assert_eq!(read.is_ok(), is_taken, "{size}");
        }
        fs::create_dir(folder.path().join("d")).unwrap();
        assert!(
            read_file(folder.path(), "d", limit)
                .unwrap_err()
                .contains("regular")
        );
        assert!(
            read_file(folder.path(), "none", limit)
                .unwrap_err()
                .contains("missing")
        );
    }

    #[test]
    fn a_folder_without_a_manifest_and_a_file_instead_of_a_folder_are_invalid() {
        let folder = tempfile::tempdir().unwrap();
        let Err(Failure::InvalidPackage { violations, .. }) = read(folder.path()) else {
            panic!("an empty folder was taken");
        };
        assert_eq!(violations, ["package.toml: the file is missing"]);
        let inner = folder.path().join("form-i");
        fs::create_dir(&inner).unwrap();
        fs::write(inner.join("package.toml"), "").unwrap();
        let Err(Failure::InvalidPackage { violations, .. }) = read(folder.path()) else {
            panic!("a folder of packages was taken");
        };
        assert!(violations[1].ends_with("form-i"), "{violations:?}");
        let file = folder.path().join("package.toml");
        fs::write(&file, "").unwrap();
        assert!(matches!(read(&file), Err(Failure::InvalidPackage { .. })));
        assert!(matches!(
            read(&folder.path().join("nowhere")),
            Err(Failure::File { .. })
        ));
    }
}
