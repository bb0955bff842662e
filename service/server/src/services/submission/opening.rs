//! What a creation asks for, held against its manifest: everything that disagrees, at once. Pure.

use tarehouse_proto::convert::{digest_from_hex, digest_to_hex};
use tarehouse_proto::package::{self, ArrayIdentity, ManifestSummary};
use tarehouse_proto::{limits as package_limits, v1};
use tarehouse_store::{DeclaredArray, NewSubmission};

use crate::failure::{Breach, Failure, reason};
use crate::layers::Principal;
use crate::limits;

/// The request id in its one spelling; may be missing where nothing is created.
pub(super) fn request_id(text: &str, validate_only: bool) -> Result<String, Failure> {
    if text.is_empty() && validate_only {
        return Ok(String::new());
    }
    let uuid = uuid::Uuid::parse_str(text)
        .map_err(|_| Failure::field("request_id", "a UUID is wanted"))?;
    Ok(uuid.simple().to_string())
}

/// The violations of a package as a failure.
pub(super) fn invalid_package(violations: &package::Violations) -> Failure {
    let breaches = violations
        .listed()
        .iter()
        .map(|violation| Breach {
            field: match violation.key.as_str() {
                "" => violation.file.clone(),
                key => format!("{}: {key}", violation.file),
            },
            message: match violation.line {
                Some(line) => format!("{} (line {line})", violation.message),
                None => violation.message.clone(),
            },
        })
        .collect();
    Failure::Invalid {
        reason: reason::PACKAGE_INVALID,
        message: "the package breaks the package format".to_owned(),
        breaches,
        unlisted_count: violations.unlisted_count(),
    }
}

/// Holds the declarations against the arrays that the manifest names; everything that disagrees, at once.
pub(super) fn declared_arrays(
    declared: &[v1::ArrayDeclaration],
    summary: &ManifestSummary,
) -> Result<Vec<DeclaredArray>, Failure> {
    let (mut arrays, mut breaches) = (Vec::new(), Vec::new());
    for (k, array) in declared.iter().take(limits::ARRAYS_MAX + 1).enumerate() {
        let mut breach = |field: &str, message: String| {
            let field = format!("arrays[{k}]{field}");
            breaches.push(Breach { field, message });
        };
        let expected = summary
            .arrays
            .iter()
            .find(|expected| expected.name == array.name);
        let digest = digest_from_hex(&array.digest);
        match expected {
            None => breach(".name", "the manifest names no such array".to_owned()),
            Some(expected) if !expected.accepts_size(array.size_bytes) => breach(
                ".size_bytes",
                format!(
                    "{} bytes cannot hold a header and the {} bytes of shape {:?}, at most {} in all",
                    array.size_bytes,
                    expected.data_bytes,
                    expected.shape,
                    package_limits::ARRAY_BYTES.max
                ),
            ),
            Some(_) => {}
        }
        if digest.is_none() {
            breach(
                ".digest",
                "64 lower-case hexadecimal digits are wanted".to_owned(),
            );
        }
        if declared
            .iter()
            .take(k)
            .any(|earlier| earlier.name == array.name)
        {
            breach(".name", "declared twice".to_owned());
        }
        arrays.extend(digest.map(|digest| DeclaredArray {
            name: array.name.clone(),
            size: array.size_bytes,
            digest,
        }));
    }
    for expected in &summary.arrays {
        if !declared.iter().any(|array| array.name == expected.name) {
            let message = format!(
                "{} is named in the manifest but not declared",
                expected.name
            );
            breaches.push(Breach {
                field: "arrays".to_owned(),
                message,
            });
        }
    }
    if breaches.is_empty() {
        return Ok(arrays);
    }
    Err(Failure::Invalid {
        reason: reason::ARRAYS_DISAGREE,
        message: "the declared arrays do not agree with the manifest".to_owned(),
        breaches,
        unlisted_count: declared.len().saturating_sub(limits::ARRAYS_MAX + 1),
    })
}

/// What the store is asked to open.
pub(super) fn new_submission(
    request: &v1::CreateSubmissionRequest,
    request_id: String,
    summary: ManifestSummary,
    arrays: Vec<DeclaredArray>,
) -> NewSubmission {
    let identities: Vec<ArrayIdentity<'_>> = arrays
        .iter()
        .map(|array| ArrayIdentity {
            name: &array.name,
            size_bytes: array.size,
            digest: array.digest,
        })
        .collect();
    let package_digest = package::package_digest(&request.manifest, &identities);
    let identity = summary.manifest.identity;
    NewSubmission {
        request_id,
        package_digest,
        manifest: request.manifest.to_vec(),
        arrays,
        compound: identity.compound,
        form: identity.form,
        formula: identity.formula.to_string(),
        contributor_key: identity.contributor_key,
    }
}

/// What creating would have answered, without a name.
pub(super) fn unnamed(new: &NewSubmission, principal: &Principal) -> v1::Submission {
    v1::Submission {
        state: v1::State::Draft.into(),
        package_digest: digest_to_hex(&new.package_digest),
        compound: new.compound.clone(),
        form: new.form.clone(),
        formula: new.formula.clone(),
        contributor: principal.0.clone(),
        contributor_key: new.contributor_key.clone().unwrap_or_default(),
        arrays: new
            .arrays
            .iter()
            .map(|array| v1::Array {
                name: array.name.clone(),
                size_bytes: array.size,
                digest: digest_to_hex(&array.digest),
                committed_bytes: 0,
            })
            .collect(),
        ..v1::Submission::default()
    }
}
