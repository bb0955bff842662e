//! SubmissionService: what contributors do with a submission.

mod opening;

use std::sync::Arc;

use prost::Message as _;
use tarehouse_proto::package;
use tarehouse_proto::v1;
use tarehouse_store::{
    PageRequest, State, StoreError, SubmissionFilter, SubmissionId, SubmissionView,
};
use tokio_stream::wrappers::ReceiverStream;
use tonic::{Request, Response, Status};

use crate::core::Core;
use crate::failure::{Breach, Failure, reason};
use crate::judge::{self, Crash};
use crate::layers::Principal;
use crate::names::{self, Resource, token};
use crate::{watch, wire};
use opening::{declared_arrays, invalid_package, new_submission, request_id, unnamed};

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
            return Err(Failure::etag_mismatch());
        }
        // The store holds this against the revision once more, when nobody else can change it.
        let expected = Some(view.revision).filter(|_| !request.etag.is_empty());
        let actor = core.actor_of(&principal);
        core.depot
            .ask(move |store| store.withdraw(&actor, id, &reason, expected))
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

fn undecodable(crash: Crash) -> Failure {
    match crash {
        Crash::Decode(violations) => invalid_package(&violations),
        Crash::Read(error) => Failure::from(error),
        crash @ (Crash::Examine(_) | Crash::Panic(_)) => Failure::internal(crash),
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
