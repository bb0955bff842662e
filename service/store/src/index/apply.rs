//! Applies durable changes to the database: all keys of a change and the applied number in one transaction.

use prost::Message;
use sled::transaction::{ConflictableTransactionError, TransactionError, TransactionalTree};

use super::keys;
use super::rows::{CompoundRow, RecordRow, SubmissionRow};
use crate::event::{Event, Examined};
use crate::id::SubmissionId;
use crate::state::State;
use crate::trail::anchor::Mark;
use crate::trail::writer::Committed;

type Step<T> = Result<T, ConflictableTransactionError<String>>;

fn abort(why: impl Into<String>) -> ConflictableTransactionError<String> {
    ConflictableTransactionError::Abort(why.into())
}

/// Where the database stands.
pub(crate) fn applied(db: &sled::Db) -> Result<Option<Mark>, String> {
    let Some(bytes) = db.get(keys::APPLIED).map_err(|error| error.to_string())? else {
        return Ok(None);
    };
    Ok(bytes.split_at_checked(8).and_then(|(seq, head)| {
        Some(Mark {
            seq: u64::from_be_bytes(seq.try_into().ok()?),
            head: head.try_into().ok()?,
        })
    }))
}

/// Applies changes in one transaction.
pub(crate) fn apply(db: &sled::Db, changes: &[Committed]) -> Result<(), String> {
    let done = db.transaction(|tx| {
        for change in changes {
            one(tx, change)?;
        }
        if let Some(last) = changes.last() {
            let mut value = last.seq.to_be_bytes().to_vec();
            value.extend_from_slice(&last.head);
            tx.insert(keys::APPLIED, value)?;
        }
        Ok(())
    });
    done.map_err(|error| match error {
        TransactionError::Abort(why) => why,
        TransactionError::Storage(error) => error.to_string(),
    })
}

fn one(tx: &TransactionalTree, change: &Committed) -> Step<()> {
    let id = change.event.id();
    match &change.event {
        Event::Created(event) => {
            let row = SubmissionRow::opened(event, change);
            let compound = keys::compound_key(&row.compound);
            for list in [
                keys::all_submissions(),
                keys::submissions_in(State::Draft),
                keys::submissions_of(&row.contributor),
                keys::submissions_about(&compound),
            ] {
                tx.insert(keys::numbered(list, change.seq), id.as_bytes())?;
            }
            put(tx, change, id, row)
        }
        Event::ArrayStored(event) => {
            let mut row = submission(tx, id)?;
            for array in &mut row.arrays {
                array.stored |= array.name == event.name;
            }
            put(tx, change, id, row)
        }
        Event::Sealed(_) => {
            let mut row = submission(tx, id)?;
            row.sealed_ms = Some(change.time_ms);
            move_to(tx, id, &mut row, State::Queued)?;
            put(tx, change, id, row)
        }
        Event::Crashed(event) => {
            let mut row = submission(tx, id)?;
            row.crashed_attempts = event.attempt;
            if let Some(report) = event.report {
                row.report = Some(report.into());
                row.examined_ms = Some(change.time_ms);
                row.policy_digest = change.policy_digest.map(|digest| digest.to_vec());
                row.program_version = Some(change.program_version.clone());
            }
            move_to(tx, id, &mut row, event.state)?;
            put(tx, change, id, row)
        }
        Event::Examined(event) => examined(tx, change, event),
        Event::Withdrawn(event) => {
            let mut row = submission(tx, id)?;
            row.withdrawal_reason = Some(event.reason.clone()).filter(|reason| !reason.is_empty());
            move_to(tx, id, &mut row, State::Withdrawn)?;
            put(tx, change, id, row)
        }
        Event::Retired(_) => retire(tx, change, id, None),
        // Request ids are for decisions only, which ask the ledger; a submission that is missing here shows damage.
        Event::RequestBound(_) => submission(tx, id).map(drop),
    }
}

fn examined(tx: &TransactionalTree, change: &Committed, event: &Examined) -> Step<()> {
    if let Some(old) = event.supersedes {
        retire(tx, change, old, Some(event.id))?;
    }
    let mut row = submission(tx, event.id)?;
    row.examined(event, change);
    move_to(tx, event.id, &mut row, event.state)?;
    let in_catalogue = matches!(event.state, State::Accepted | State::Retired);
    if in_catalogue && let Some(summary) = &event.summary {
        let compound = keys::compound_key(&row.compound);
        let energy = summary.lattice_energy_kj_per_mol;
        for key in [
            keys::numbered(keys::all_records(), change.seq),
            keys::numbered(keys::records_about(&compound), change.seq),
            keys::ranked(keys::records_by_energy(&compound), energy, change.seq),
        ] {
            tx.insert(key, event.id.as_bytes())?;
        }
        let record = RecordRow {
            compound: row.compound.clone(),
            form: row.form.clone(),
            formula: row.formula.clone(),
            contributor: row.contributor.clone(),
            package_digest: row.package_digest.clone(),
            accepted_ms: change.time_ms,
            policy_digest: row.policy_digest.clone(),
            retired: event.state == State::Retired,
            summary: summary.into(),
        };
        if !record.retired {
            count(tx, &record, true)?;
        }
        tx.insert(keys::record(event.id), record.encode_to_vec())?;
    }
    put(tx, change, event.id, row)
}

fn retire(
    tx: &TransactionalTree,
    change: &Committed,
    id: SubmissionId,
    by: Option<SubmissionId>,
) -> Step<()> {
    let mut row = submission(tx, id)?;
    row.superseded_by = by.map(|by| by.as_bytes().to_vec());
    move_to(tx, id, &mut row, State::Retired)?;
    if let Some(bytes) = tx.get(keys::record(id))? {
        let mut record = RecordRow::decode(bytes.as_ref()).map_err(|e| abort(e.to_string()))?;
        if !record.retired {
            record.retired = true;
            count(tx, &record, false)?;
            tx.insert(keys::record(id), record.encode_to_vec())?;
        }
    }
    put(tx, change, id, row)
}

/// Counts a record into its compound and form, or out of them.
fn count(tx: &TransactionalTree, record: &RecordRow, more: bool) -> Step<()> {
    let compound_key = keys::compound_key(&record.compound);
    let form_key = keys::form(&compound_key, &record.form);
    let forms = match tx.get(&form_key)? {
        Some(bytes) => u64::from_be_bytes(
            bytes
                .as_ref()
                .try_into()
                .map_err(|_| abort("a count has 8 bytes"))?,
        ),
        None => 0,
    };
    let compound_at = keys::compound(&compound_key);
    let mut compound = match tx.get(&compound_at)? {
        Some(bytes) => CompoundRow::decode(bytes.as_ref()).map_err(|e| abort(e.to_string()))?,
        None => CompoundRow {
            name: record.compound.clone(),
            formula: record.formula.clone(),
            record_count: 0,
            form_count: 0,
        },
    };
    let forms = if more {
        compound.record_count += 1;
        compound.form_count += u64::from(forms == 0);
        forms + 1
    } else {
        compound.record_count = compound.record_count.saturating_sub(1);
        compound.form_count = compound.form_count.saturating_sub(u64::from(forms == 1));
        forms.saturating_sub(1)
    };
    if forms == 0 {
        tx.remove(form_key)?;
    } else {
        tx.insert(form_key, &forms.to_be_bytes())?;
    }
    if compound.record_count == 0 {
        tx.remove(compound_at)?;
    } else {
        tx.insert(compound_at, compound.encode_to_vec())?;
    }
    Ok(())
}

fn submission(tx: &TransactionalTree, id: SubmissionId) -> Step<SubmissionRow> {
    let bytes = tx
        .get(keys::submission(id))?
        .ok_or_else(|| abort(format!("submission {id} is not in the index")))?;
    SubmissionRow::decode(bytes.as_ref()).map_err(|error| abort(error.to_string()))
}

fn put(
    tx: &TransactionalTree,
    change: &Committed,
    id: SubmissionId,
    mut row: SubmissionRow,
) -> Step<()> {
    row.updated_ms = change.time_ms;
    row.updated_by.clone_from(&change.principal);
    row.revision = change.seq;
    tx.insert(keys::submission(id), row.encode_to_vec())?;
    Ok(())
}

fn move_to(
    tx: &TransactionalTree,
    id: SubmissionId,
    row: &mut SubmissionRow,
    to: State,
) -> Step<()> {
    let from = row.state().map_err(abort)?;
    let seq = row.created_seq;
    tx.remove(keys::numbered(keys::submissions_in(from), seq))?;
    tx.insert(keys::numbered(keys::submissions_in(to), seq), id.as_bytes())?;
    row.state = u32::from(to.code());
    Ok(())
}
