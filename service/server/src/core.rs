//! What all services share: configuration, store, queue, news, and how far stopping has come.

use std::sync::Arc;
use std::time::Duration;

use tarehouse_proto::{package, v1};
use tarehouse_store::{
    Actor, NewSubmission, Options, PageRequest, State, Store, StoreError, SubmissionFilter,
    SubmissionId, SubmissionView,
};
use tokio::sync::{Mutex, Notify, OwnedSemaphorePermit, Semaphore};

use crate::config::Config;
use crate::depot::Depot;
use crate::drain::Drain;
use crate::examiner::Examiner;
use crate::facts::{ManifestFacts, Memory, ReportFacts};
use crate::failure::{Failure, reason};
use crate::hub::Hub;
use crate::layers::Principal;
use crate::uploads::Uploads;
use crate::{limits, wire, workers};

/// Who acts where the service itself does.
const SERVICE: &str = "service";
/// When to come back to a full queue or to too many streams.
const RETRY_AFTER: Duration = Duration::from_secs(5);
/// When to come back with too many drafts.
const QUOTA_RETRY_AFTER: Duration = Duration::from_mins(1);

/// Why the service could not be opened.
#[derive(Debug, thiserror::Error)]
pub enum OpenError {
    /// The folder of the store cannot be made.
    #[error("{folder}: the folder cannot be made")]
    Folder {
        /// Its path.
        folder: String,
        /// What the system said.
        #[source]
        source: std::io::Error,
    },
    /// The store refused.
    #[error("the store refused")]
    Store(#[from] tarehouse_store::OpenError),
    /// The thread that opened the store has ended without an answer.
    #[error("opening was broken off")]
    Thread(#[from] tokio::task::JoinError),
}

/// The shared parts.
pub(crate) struct Core {
    /// Values the service runs with.
    pub(crate) config: Config,
    /// The store.
    pub(crate) depot: Depot,
    /// News of submissions.
    pub(crate) hub: Arc<Hub>,
    /// Rings when a submission is queued.
    pub(crate) queued: Arc<Notify>,
    /// How far stopping has come.
    pub(crate) drain: Drain,
    /// Who judges.
    pub(crate) examiner: Arc<dyn Examiner>,
    /// Uploads under way.
    pub(crate) uploads: Uploads,
    fetches: Arc<Semaphore>,
    watches: Arc<Semaphore>,
    computing: Arc<Semaphore>,
    sealing: Mutex<()>,
    manifests: Memory<ManifestFacts>,
    reports: Memory<ReportFacts>,
}

impl std::fmt::Debug for Core {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Core")
            .field("config", &self.config)
            .finish_non_exhaustive()
    }
}

impl Core {
    /// Opens the store of the configuration.
    pub(crate) async fn open(
        config: Config,
        examiner: Arc<dyn Examiner>,
    ) -> Result<Arc<Self>, OpenError> {
        let folder = config.store.clone();
        let store = tokio::task::spawn_blocking(move || {
            std::fs::create_dir_all(&folder).map_err(|source| OpenError::Folder {
                folder: folder.display().to_string(),
                source,
            })?;
            let options = Options {
                program_version: tarehouse_assay::PROGRAM_VERSION.to_owned(),
                ..Options::default()
            };
            Ok::<_, OpenError>(Store::open(folder, options)?)
        })
        .await??;
        let (hub, queued) = (Arc::new(Hub::default()), Arc::new(Notify::new()));
        let (news, bell) = (Arc::clone(&hub), Arc::clone(&queued));
        store.on_change(Box::new(move |id, state| {
            news.changed(*id);
            if state == State::Queued {
                bell.notify_waiters();
            }
        }));
        Ok(Arc::new(Self {
            depot: Depot::new(store),
            hub,
            queued,
            drain: Drain::default(),
            examiner,
            uploads: Uploads::new(config.upload_streams_max),
            fetches: Arc::new(Semaphore::new(config.upload_streams_max)),
            watches: Arc::new(Semaphore::new(limits::WATCHES_MAX)),
            computing: Arc::new(Semaphore::new(config.workers)),
            sealing: Mutex::new(()),
            manifests: Memory::default(),
            reports: Memory::default(),
            config,
        }))
    }

    /// Starts the workers; the future ends when all have stopped.
    pub(crate) fn start_workers(self: &Arc<Self>) -> impl Future<Output = ()> + Send + use<> {
        workers::start(self)
    }

    /// Closes the store; what is acknowledged is durable with or without it.
    pub(crate) async fn close(&self) {
        if let Err(failure) = self.depot.ask(Store::close).await {
            tracing::warn!(
                ?failure,
                "the store was not closed cleanly; its index is built anew"
            );
        }
    }

    /// The service itself under its policy.
    pub(crate) fn actor(&self) -> Actor {
        Actor::new(SERVICE).under(self.config.policy.digest)
    }

    /// A caller under the policy of the service.
    pub(crate) fn actor_of(&self, principal: &Principal) -> Actor {
        Actor::new(principal.0.clone()).under(self.config.policy.digest)
    }

    /// Computes for a caller on a blocking thread when there is a place. Examinations have their own places, so that
    /// a long one keeps nobody from creating or sealing.
    pub(crate) async fn compute<T: Send + 'static>(
        &self,
        work: impl FnOnce() -> T + Send + 'static,
    ) -> Result<T, Failure> {
        let place = Arc::clone(&self.computing).acquire_owned().await;
        let place = place.map_err(Failure::internal)?;
        tokio::task::spawn_blocking(move || {
            let result = work();
            drop(place);
            result
        })
        .await
        .map_err(Failure::internal)
    }

    /// A place among the watches.
    pub(crate) fn watch_permit(&self) -> Result<OwnedSemaphorePermit, Failure> {
        permit(
            &self.watches,
            reason::WATCHES_FULL,
            "too many watches are open; ask for the state instead",
        )
    }

    /// A place among the downloads.
    pub(crate) fn fetch_permit(&self) -> Result<OwnedSemaphorePermit, Failure> {
        permit(
            &self.fetches,
            reason::FETCHES_FULL,
            "too many arrays are being fetched",
        )
    }

    /// A submission.
    pub(crate) async fn submission(&self, id: SubmissionId) -> Result<SubmissionView, Failure> {
        self.depot.ask(move |store| store.get_submission(id)).await
    }

    /// A submission as the contract tells it.
    pub(crate) async fn submission_message(
        &self,
        id: SubmissionId,
    ) -> Result<v1::Submission, Failure> {
        let view = self.submission(id).await?;
        self.message_of(view).await
    }

    /// A submission that was read before, as the contract tells it.
    pub(crate) async fn message_of(&self, view: SubmissionView) -> Result<v1::Submission, Failure> {
        let report = match view.report {
            Some(_) => Some(self.report_facts(&view).await?),
            None => None,
        };
        let committed = self.committed(&view).await?;
        Ok(wire::submission(&view, &committed, report.as_deref()))
    }

    /// Durable bytes of each array, in the order of the view.
    pub(crate) async fn committed(&self, view: &SubmissionView) -> Result<Vec<u64>, Failure> {
        let (id, state) = (view.id, view.state);
        let arrays = view.arrays.clone();
        self.depot
            .ask(move |store| {
                let of = |array: &tarehouse_store::ArrayView| {
                    if array.stored {
                        return Ok(array.declared.size);
                    }
                    if state != State::Draft {
                        return Ok(0);
                    }
                    store
                        .array_status(id, &array.declared.name)
                        .map(|status| status.committed_bytes)
                };
                arrays.iter().map(of).collect()
            })
            .await
    }

    /// What the manifest of a submission says.
    pub(crate) async fn manifest_facts(
        &self,
        view: &SubmissionView,
    ) -> Result<Arc<ManifestFacts>, Failure> {
        if let Some(known) = self.manifests.known(&view.manifest.digest) {
            return Ok(known);
        }
        let id = view.id;
        let bytes = self.depot.ask(move |store| store.read_manifest(id)).await?;
        let summary = self
            .compute(move || package::check_manifest(&bytes))
            .await?
            .map_err(|violations| {
                Failure::internal(format!("stored manifest {id}: {violations}"))
            })?;
        Ok(self
            .manifests
            .keep(&view.manifest.digest, ManifestFacts::of(&summary)))
    }

    /// What the report of a submission says; nothing where there is none.
    pub(crate) async fn report_facts(
        &self,
        view: &SubmissionView,
    ) -> Result<Arc<ReportFacts>, Failure> {
        let Some(report) = view.report else {
            return Ok(Arc::default());
        };
        if let Some(known) = self.reports.known(&report.digest) {
            return Ok(known);
        }
        let id = view.id;
        let bytes = self.depot.ask(move |store| store.read_report(id)).await?;
        let facts = ReportFacts::decode(&bytes).map_err(Failure::internal)?;
        Ok(self.reports.keep(&report.digest, facts))
    }

    /// A record; another reason than for a missing submission.
    pub(crate) async fn record(
        &self,
        id: SubmissionId,
    ) -> Result<tarehouse_store::RecordView, Failure> {
        self.depot
            .ask_plainly(move |store| store.get_record(id))
            .await?
            .map_err(|error| match error {
                StoreError::NotFound(_) => Failure::NotFound {
                    reason: reason::RECORD_NOT_FOUND,
                    message: format!("there is no record {id}"),
                },
                other => Failure::from(other),
            })
    }

    /// Refuses to queue more than the configuration allows.
    pub(crate) fn check_queue_room(&self) -> Result<(), Failure> {
        if self.depot.store().queue_length() < self.config.queue_length_max {
            return Ok(());
        }
        Err(Failure::Unavailable {
            reason: reason::QUEUE_FULL,
            message: "too many submissions wait for their examination".to_owned(),
            retry_after: RETRY_AFTER,
        })
    }

    /// Queues a submission whose package has been decoded. One at a time, so that the queue keeps its limit.
    pub(crate) async fn seal(
        &self,
        principal: &Principal,
        id: SubmissionId,
    ) -> Result<(), Failure> {
        let _one_at_a_time = self.sealing.lock().await;
        self.check_queue_room()?;
        let actor = self.actor_of(principal);
        self.depot
            .ask(move |store| store.seal(&actor, id))
            .await
            .map(drop)
    }

    /// Refuses a draft beyond the principal's quota; a package or request that is known already opens none and is let
    /// through.
    pub(crate) async fn check_draft_quota(
        &self,
        principal: &Principal,
        new: &NewSubmission,
    ) -> Result<(), Failure> {
        let (who, request_id, digest) = (
            principal.0.clone(),
            new.request_id.clone(),
            new.package_digest,
        );
        let known = self
            .depot
            .ask(move |store| store.find_submission(&who, &request_id, &digest))
            .await?;
        if known.is_some() {
            return Ok(());
        }
        let quota = self.config.drafts_per_principal_max;
        let filter = SubmissionFilter {
            state: Some(State::Draft),
            contributor: Some(principal.0.clone()),
            compound: None,
        };
        let (mut count, mut page) = (
            0,
            PageRequest {
                size: quota,
                token: String::new(),
            },
        );
        loop {
            let (filter, request) = (filter.clone(), page.clone());
            let drafts = self
                .depot
                .ask(move |store| store.list_submissions(&filter, &request))
                .await?;
            count += drafts.entries.len();
            if count >= quota {
                break;
            }
            if drafts.next_token.is_empty() {
                return Ok(());
            }
            page.token = drafts.next_token;
        }
        Err(Failure::Quota {
            reason: reason::DRAFT_QUOTA,
            subject: format!("principal:{}", principal.0),
            message: format!("at most {quota} drafts may be open; seal or withdraw some"),
            retry_after: QUOTA_RETRY_AFTER,
        })
    }
}

/// A permit, or that there is none.
pub(crate) fn permit(
    of: &Arc<Semaphore>,
    reason: &'static str,
    message: &str,
) -> Result<OwnedSemaphorePermit, Failure> {
    Arc::clone(of)
        .try_acquire_owned()
        .map_err(|_| Failure::Unavailable {
            reason,
            message: message.to_owned(),
            retry_after: RETRY_AFTER,
        })
}
