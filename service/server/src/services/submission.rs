//! SubmissionService: what contributors do with a submission.

use std::sync::Arc;

use prost::Message as _;
use tarehouse_proto::convert::{digest_from_hex, digest_to_hex};
use tarehouse_proto::package::{self, ArrayIdentity, ManifestSummary};
use tarehouse_proto::{limits as package_limits, v1};
use tarehouse_store::{
    DeclaredArray, NewSubmission, PageRequest, State, StoreError, SubmissionFilter, SubmissionId,
    SubmissionView,
};
use tokio_stream::wrappers::ReceiverStream;
use tonic::{Request, Response, Status};

use crate::core::Core;
use crate::failure::{Breach, Failure, reason};
use crate::judge::{self, Crash};
use crate::layers::Principal;
use crate::names::{self, Resource, token};
use crate::{limits, watch, wire};

/// Pages of the store that one filtered page may look through.
const FILTERED_PAGES_MAX: usize = 64;

/// SubmissionService on the shared parts.
#[derive(Debug)]
pub(crate) struct Service {
    pub(crate) core: Arc<Core>,
}

impl Service {
    async fn create(
        &self,
        principal: Principal,
        request: v1::CreateSubmissionRequest,
    ) -> Result<v1::Submission, Failure> {
        let core = &self.core;
        core.drain.admit()?;
        let request_id = request_id(&request.request_id, request.validate_only)?;
        let manifest = request.manifest.clone();
        let summary = core
            .compute(move || package::check_manifest(&manifest))
            .await?
            .map_err(|violations| invalid_package(&violations))?;
        let arrays = declared_arrays(&request.arrays, &summary)?;
        let new = new_submission(&request, request_id, summary, arrays);
        if request.validate_only {
            return Ok(unnamed(&new, &principal));
        }
        core.check_draft_quota(&principal, &new).await?;
        let actor = core.actor_of(&principal);
        let receipt = core
            .depot
            .ask(move |store| store.create_submission(&actor, new))
            .await?;
        core.submission_message(receipt.id).await
    }

    async fn seal(&self, principal: Principal, name: &str) -> Result<v1::Submission, Failure> {
        let core = &self.core;
        let id = names::parse_submission("name", name)?;
        let view = core.submission(id).await?;
        match view.state {
            State::Queued | State::Accepted | State::Held | State::Rejected | State::Retired => {
                return core.message_of(view).await;
            }
            State::Draft | State::Returned | State::Withdrawn => {}
        }
        core.drain.admit()?;
        core.check_queue_room()?;
        check_arrays_stored(&view)?;
        if view.state == State::Draft {
            let store = core.depot.store();
            core.compute(move || judge::decode(&store, id))
                .await?
                .map_err(undecodable)?;
        }
        core.seal(&principal, id).await?;
        core.submission_message(id).await
    }

    async fn withdraw(
        &self,
        principal: Principal,
        request: v1::WithdrawSubmissionRequest,
    ) -> Result<v1::Submission, Failure> {
        let core = &self.core;
        let id = names::parse_submission("name", &request.name)?;
        let reason = names::optional_text("reason", request.reason)?.unwrap_or_default();
        let view = core.submission(id).await?;
        if !request.etag.is_empty() && request.etag != wire::etag(&view) {
            return Err(etag_mismatch());
        }
        tracing::info!(%id, principal = %principal.0, %reason, "withdrawal");
        let actor = core.actor_of(&principal);
        core.depot
            .ask(move |store| store.withdraw(&actor, id))
            .await?;
        core.submission_message(id).await
    }

    async fn list(
        &self,
        request: v1::ListSubmissionsRequest,
    ) -> Result<v1::ListSubmissionsResponse, Failure> {
        let core = &self.core;
        let state = wire::state_filter(request.state)
            .map_err(|_| Failure::field("state", "not a known state"))?;
        let compound = names::optional_text("compound", request.compound)?;
        let key = names::optional_text("contributor_key", request.contributor_key)?;
        let mark = format!("submissions {state:?} {compound:?} {key:?}");
        let filter = SubmissionFilter {
            state,
            contributor: None,
            compound,
        };
        let size = names::page_size(request.page_size);
        let mut next = token::unwrap(&mark, &request.page_token)?;
        let mut submissions = Vec::new();
        for _ in 0..FILTERED_PAGES_MAX {
            let (filter, token) = (filter.clone(), std::mem::take(&mut next));
            let page = PageRequest {
                size: size - submissions.len(),
                token,
            };
            let page = core
                .depot
                .ask(move |store| store.list_submissions(&filter, &page))
                .await?;
            for view in page.entries {
                if key.is_none() || view.contributor_key == key {
                    submissions.push(core.message_of(view).await?);
                }
            }
            next = page.next_token;
            if next.is_empty() || submissions.len() >= size {
                break;
            }
        }
        let next_page_token = token::wrap(&mark, &next);
        Ok(v1::ListSubmissionsResponse {
            submissions,
            next_page_token,
        })
    }

    async fn report(&self, name: &str) -> Result<v1::Report, Failure> {
        let (id, of_record) = match Resource::parse("name", name)? {
            Resource::Submission(id) => (id, false),
            Resource::Record(id) => (id, true),
        };
        if of_record {
            self.core.record(id).await?;
        }
        let bytes = self
            .core
            .depot
            .ask_plainly(move |store| store.read_report(id))
            .await?
            .map_err(|error| match error {
                StoreError::NotThereYet { .. } => Failure::NotFound {
                    reason: reason::REPORT_NOT_FOUND,
                    message: format!("{name} has not been examined yet"),
                },
                other => Failure::from(other),
            })?;
        v1::Report::decode(bytes.as_slice()).map_err(Failure::internal)
    }
}

fn request_id(text: &str, validate_only: bool) -> Result<String, Failure> {
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

fn undecodable(crash: Crash) -> Failure {
    match crash {
        Crash::Decode(violations) => invalid_package(&violations),
        Crash::Read(error) => Failure::from(error),
        crash @ (Crash::Examine(_) | Crash::Panic(_)) => Failure::internal(crash),
    }
}

/// Holds the declarations against the arrays that the manifest names; everything that disagrees, at once.
fn declared_arrays(
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

fn new_submission(
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
fn unnamed(new: &NewSubmission, principal: &Principal) -> v1::Submission {
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

fn check_arrays_stored(view: &SubmissionView) -> Result<(), Failure> {
    let breaches: Vec<Breach> = view
        .arrays
        .iter()
        .filter(|array| !array.stored)
        .map(|array| Breach {
            field: array.declared.name.clone(),
            message: "has not arrived whole".to_owned(),
        })
        .collect();
    if breaches.is_empty() {
        return Ok(());
    }
    Err(Failure::Forbidden {
        reason: reason::ARRAYS_MISSING,
        message: "arrays are missing".to_owned(),
        breaches,
    })
}

fn etag_mismatch() -> Failure {
    Failure::Conflict {
        reason: reason::ETAG_MISMATCH,
        message: "the submission has changed since that etag; read it again".to_owned(),
        retry_after: None,
    }
}

#[tonic::async_trait]
impl v1::submission_service_server::SubmissionService for Service {
    async fn create_submission(
        &self,
        request: Request<v1::CreateSubmissionRequest>,
    ) -> Result<Response<v1::CreateSubmissionResponse>, Status> {
        let principal = Principal::of(&request);
        let submission = Some(self.create(principal, request.into_inner()).await?);
        Ok(Response::new(v1::CreateSubmissionResponse { submission }))
    }

    async fn get_submission(
        &self,
        request: Request<v1::GetSubmissionRequest>,
    ) -> Result<Response<v1::GetSubmissionResponse>, Status> {
        let id = names::parse_submission("name", &request.get_ref().name)?;
        let submission = Some(self.core.submission_message(id).await?);
        Ok(Response::new(v1::GetSubmissionResponse { submission }))
    }

    async fn list_submissions(
        &self,
        request: Request<v1::ListSubmissionsRequest>,
    ) -> Result<Response<v1::ListSubmissionsResponse>, Status> {
        Ok(Response::new(self.list(request.into_inner()).await?))
    }

    async fn seal_submission(
        &self,
        request: Request<v1::SealSubmissionRequest>,
    ) -> Result<Response<v1::SealSubmissionResponse>, Status> {
        let principal = Principal::of(&request);
        let submission = Some(self.seal(principal, &request.get_ref().name).await?);
        Ok(Response::new(v1::SealSubmissionResponse { submission }))
    }

    async fn withdraw_submission(
        &self,
        request: Request<v1::WithdrawSubmissionRequest>,
    ) -> Result<Response<v1::WithdrawSubmissionResponse>, Status> {
        let principal = Principal::of(&request);
        let submission = Some(self.withdraw(principal, request.into_inner()).await?);
        Ok(Response::new(v1::WithdrawSubmissionResponse { submission }))
    }

    type WatchSubmissionStream = ReceiverStream<Result<v1::WatchSubmissionResponse, Status>>;

    async fn watch_submission(
        &self,
        request: Request<v1::WatchSubmissionRequest>,
    ) -> Result<Response<Self::WatchSubmissionStream>, Status> {
        let id: SubmissionId = names::parse_submission("name", &request.get_ref().name)?;
        Ok(Response::new(watch::start(&self.core, id).await?))
    }

    async fn get_report(
        &self,
        request: Request<v1::GetReportRequest>,
    ) -> Result<Response<v1::GetReportResponse>, Status> {
        let report = Some(self.report(&request.get_ref().name).await?);
        Ok(Response::new(v1::GetReportResponse { report }))
    }
}
