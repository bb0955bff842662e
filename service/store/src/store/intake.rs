//! Opening, sealing, withdrawing and retiring submissions.

use std::collections::HashSet;

use tarehouse_assay::submission::Digest;

use super::{Inner, Store};
use crate::error::{StoreError, Violation};
use crate::event::{Created, Event, RequestBound, Withdrawn};
use crate::id::SubmissionId;
use crate::keylock;
use crate::limits::{
    ARRAY_BYTES_MAX, ARRAY_COUNT_MAX, ARRAY_NAME_BYTES_MAX, MANIFEST_BYTES_MAX, REASON_BYTES_MAX,
    TEXT_BYTES_MAX,
};
use crate::state::{State, Verb};
use crate::view::{Actor, NewSubmission, Receipt};

impl Store {
    /// Opens a submission, or finds the one that this request or this package opened before.
    ///
    /// Safe under any number of equal calls at once: one submission comes of them. The answer is given when the
    /// submission is durable. A request id that finds an existing package is bound to it, durably too: from then on it
    /// stands for that package alone.
    ///
    /// # Errors
    /// [`StoreError::Invalid`] with everything that is wrong; [`StoreError::RequestConflict`] if the request id was used
    /// with another package; what the disk or the state of the store says.
    pub fn create_submission(
        &self,
        actor: &Actor,
        new: NewSubmission,
    ) -> Result<Receipt, StoreError> {
        let inner = &self.inner;
        inner.writable()?;
        let violations = violations(actor, &new);
        if !violations.is_empty() {
            return Err(StoreError::Invalid(violations));
        }
        let contributor = actor.principal.as_str();
        let _held = inner.keys.take(vec![
            keylock::request(contributor, &new.request_id),
            keylock::package(contributor, &new.package_digest),
        ]);
        if let Some(known) =
            inner.known_before(contributor, &new.request_id, &new.package_digest)?
        {
            if !known.by_request {
                let event = RequestBound {
                    id: known.receipt.id,
                    request_id: new.request_id,
                };
                inner.commit(actor, Event::RequestBound(event))?;
            }
            return Ok(known.receipt);
        }
        let id = SubmissionId::random();
        let manifest = inner.put(&new.manifest)?;
        let event = Created {
            id,
            request_id: new.request_id,
            package_digest: new.package_digest,
            manifest,
            arrays: new.arrays,
            compound: new.compound,
            form: new.form,
            formula: new.formula,
            contributor_key: new.contributor_key,
            contributor: contributor.to_owned(),
        };
        inner.commit(actor, Event::Created(Box::new(event)))?;
        Ok(Receipt {
            id,
            created: true,
            state: State::Draft,
        })
    }

    /// The receipt that [`Store::create_submission`] would find for this request or this package; none where it would
    /// open a submission. Binds and changes nothing.
    ///
    /// # Errors
    /// [`StoreError::RequestConflict`] if the request id was used with another package.
    pub fn find_submission(
        &self,
        contributor: &str,
        request_id: &str,
        package_digest: &Digest,
    ) -> Result<Option<Receipt>, StoreError> {
        let known = self
            .inner
            .known_before(contributor, request_id, package_digest)?;
        Ok(known.map(|known| known.receipt))
    }

    /// Says that everything is there; the submission is queued.
    ///
    /// # Errors
    /// [`StoreError::ArraysMissing`], [`StoreError::Forbidden`], [`StoreError::NotFound`], and what the disk says.
    pub fn seal(&self, actor: &Actor, id: SubmissionId) -> Result<State, StoreError> {
        let inner = &self.inner;
        let _held = inner.keys.take(vec![keylock::submission(id)]);
        let entry = inner.entry(id)?;
        let state = forbid(id, entry.state, Verb::Seal)?;
        let missing: Vec<String> = entry
            .arrays
            .iter()
            .filter(|(_, stored)| !stored)
            .map(|(array, _)| array.name.clone())
            .collect();
        if !missing.is_empty() {
            return Err(StoreError::ArraysMissing { id, missing });
        }
        inner.commit(actor, Event::Sealed(id))?;
        Ok(state)
    }

    /// Takes a submission back; its partial uploads are dropped. The reason goes into the trail; it may be empty.
    ///
    /// With `expected_revision` nothing is done unless the submission still has that
    /// [`revision`](crate::SubmissionView::revision); nobody changes it between that check and the withdrawal.
    ///
    /// # Errors
    /// [`StoreError::Invalid`] for a reason that is too long or has control characters other than line breaks and tabs,
    /// [`StoreError::RevisionMismatch`], [`StoreError::Forbidden`], [`StoreError::NotFound`], and what the disk says.
    pub fn withdraw(
        &self,
        actor: &Actor,
        id: SubmissionId,
        reason: &str,
        expected_revision: Option<u64>,
    ) -> Result<State, StoreError> {
        let inner = &self.inner;
        check_reason(reason)?;
        let _held = inner.keys.take(vec![keylock::submission(id)]);
        let entry = inner.entry(id)?;
        if let Some(expected) = expected_revision.filter(|expected| *expected != entry.revision) {
            return Err(StoreError::RevisionMismatch {
                id,
                expected,
                present: entry.revision,
            });
        }
        let state = forbid(id, entry.state, Verb::Withdraw)?;
        // A withdrawal lets the same package be submitted anew: it must not run beside such a creation.
        let package = keylock::package(&entry.contributor, &entry.package_digest);
        let _held_package = inner.keys.take(vec![package]);
        let event = Withdrawn {
            id,
            reason: reason.to_owned(),
        };
        inner.commit(actor, Event::Withdrawn(event))?;
        for (array, stored) in &entry.arrays {
            if !stored {
                inner.drop_upload(id, &array.name);
            }
        }
        Ok(state)
    }

    /// Takes an accepted submission out of the catalogue.
    ///
    /// # Errors
    /// [`StoreError::Forbidden`], [`StoreError::NotFound`], and what the disk says.
    pub fn retire(&self, actor: &Actor, id: SubmissionId) -> Result<State, StoreError> {
        let inner = &self.inner;
        let _held = inner.keys.take(vec![keylock::submission(id)]);
        let state = forbid(id, inner.state(id)?, Verb::Retire)?;
        inner.commit(actor, Event::Retired(id))?;
        Ok(state)
    }
}

/// A submission that was there before.
struct Known {
    receipt: Receipt,
    /// The request id is bound to it already.
    by_request: bool,
}

impl Inner {
    fn known_before(
        &self,
        contributor: &str,
        request_id: &str,
        package_digest: &Digest,
    ) -> Result<Option<Known>, StoreError> {
        let core = self.shared.lock();
        let known = |id: SubmissionId, by_request: bool| {
            let entry = core.ledger.entry(id).ok_or(StoreError::NotFound(id))?;
            let receipt = Receipt {
                id,
                created: false,
                state: entry.state,
            };
            Ok(Known {
                receipt,
                by_request,
            })
        };
        if let Some(id) = core.ledger.by_request(contributor, request_id) {
            let same = core
                .ledger
                .entry(id)
                .is_some_and(|entry| entry.package_digest == *package_digest);
            if !same {
                return Err(StoreError::RequestConflict {
                    request_id: request_id.to_owned(),
                    id,
                });
            }
            return known(id, true).map(Some);
        }
        core.ledger
            .by_package(contributor, package_digest)
            .map(|id| known(id, false))
            .transpose()
    }
}

fn check_reason(reason: &str) -> Result<(), StoreError> {
    let mut found = Vec::new();
    let mut add = |message: String| {
        found.push(Violation {
            field: "reason".to_owned(),
            message,
        });
    };
    if reason.len() > REASON_BYTES_MAX {
        add(format!("is longer than {REASON_BYTES_MAX} bytes"));
    }
    if reason
        .chars()
        .any(|c| c.is_control() && !matches!(c, '\n' | '\t'))
    {
        add("has control characters other than line breaks and tabs".to_owned());
    }
    if found.is_empty() {
        return Ok(());
    }
    Err(StoreError::Invalid(found))
}

/// State after a verb, or that it is forbidden.
pub(super) fn forbid(id: SubmissionId, from: State, verb: Verb) -> Result<State, StoreError> {
    from.after(verb)
        .map_err(|source| StoreError::Forbidden { id, source })
}

/// Whether a text can be an array's file name here.
fn is_array_name(name: &str) -> bool {
    let allowed = |c: char| c.is_ascii_alphanumeric() || matches!(c, '.' | '_' | '-');
    !name.is_empty()
        && name.len() <= ARRAY_NAME_BYTES_MAX
        && name.chars().all(allowed)
        && !name.starts_with('.')
}

fn violations(actor: &Actor, new: &NewSubmission) -> Vec<Violation> {
    let mut found = Vec::new();
    let mut add = |field: &str, message: String| {
        found.push(Violation {
            field: field.to_owned(),
            message,
        });
    };
    let texts = [
        ("principal", Some(&actor.principal), true),
        ("request_id", Some(&new.request_id), true),
        ("compound", Some(&new.compound), true),
        ("form", Some(&new.form), false),
        ("formula", Some(&new.formula), true),
        ("contributor_key", new.contributor_key.as_ref(), true),
    ];
    for (field, text, needed) in texts {
        let Some(text) = text else { continue };
        if needed && text.trim().is_empty() {
            add(field, "is empty".to_owned());
        }
        if text.len() > TEXT_BYTES_MAX {
            add(field, format!("is longer than {TEXT_BYTES_MAX} bytes"));
        }
        if text.chars().any(char::is_control) {
            add(field, "has control characters".to_owned());
        }
    }
    if new.manifest.is_empty() {
        add("manifest", "is empty".to_owned());
    }
    if new.manifest.len() > MANIFEST_BYTES_MAX {
        add(
            "manifest",
            format!("is longer than {MANIFEST_BYTES_MAX} bytes"),
        );
    }
    if new.arrays.len() > ARRAY_COUNT_MAX {
        add("arrays", format!("are more than {ARRAY_COUNT_MAX}"));
    }
    let mut names = HashSet::new();
    for (index, array) in new.arrays.iter().enumerate() {
        let field = |part: &str| format!("arrays[{index}].{part}");
        if !is_array_name(&array.name) {
            let message = format!(
                "is not 1 to {ARRAY_NAME_BYTES_MAX} letters, digits, dots, dashes and underscores \
                 without a leading dot"
            );
            add(&field("name"), message);
        } else if !names.insert(array.name.as_str()) {
            add(&field("name"), format!("\"{}\" appears twice", array.name));
        }
        if array.size == 0 || array.size > ARRAY_BYTES_MAX {
            add(
                &field("size"),
                format!("is not 1 to {ARRAY_BYTES_MAX} bytes"),
            );
        }
    }
    found
}
