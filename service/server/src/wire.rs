//! From what the store says to the messages of the contract.

use prost_types::Timestamp;
use tarehouse_assay::report::Verdict;
use tarehouse_proto::convert::digest_to_hex;
use tarehouse_proto::v1;
use tarehouse_store::{ArrayView, RecordView, State, SubmissionView};

use crate::facts::{ManifestFacts, ReportFacts};
use crate::{names, ranking};

/// Temperature at which a record shows the width of its bracket, K.
const BRACKET_TEMPERATURE_K: f64 = 300.0;

/// A moment of the trail.
pub(crate) fn timestamp(ms: u64) -> Timestamp {
    Timestamp {
        seconds: i64::try_from(ms / 1000).unwrap_or(i64::MAX),
        nanos: i32::try_from(ms % 1000).unwrap_or(0) * 1_000_000,
    }
}

/// A state.
pub(crate) fn state(state: State) -> v1::State {
    match state {
        State::Draft => v1::State::Draft,
        State::Queued => v1::State::Queued,
        State::Accepted => v1::State::Accepted,
        State::Held => v1::State::Held,
        State::Rejected => v1::State::Rejected,
        State::Returned => v1::State::Returned,
        State::Withdrawn => v1::State::Withdrawn,
        State::Retired => v1::State::Retired,
    }
}

/// A state of a filter; unspecified is any, and a number that nobody knows is an error.
pub(crate) fn state_filter(number: i32) -> Result<Option<State>, prost::UnknownEnumValue> {
    Ok(match v1::State::try_from(number)? {
        v1::State::Unspecified => None,
        v1::State::Draft => Some(State::Draft),
        v1::State::Queued => Some(State::Queued),
        v1::State::Accepted => Some(State::Accepted),
        v1::State::Held => Some(State::Held),
        v1::State::Rejected => Some(State::Rejected),
        v1::State::Returned => Some(State::Returned),
        v1::State::Retired => Some(State::Retired),
        v1::State::Withdrawn => Some(State::Withdrawn),
    })
}

fn verdict(verdict: Option<Verdict>) -> v1::Verdict {
    match verdict {
        None => v1::Verdict::Unspecified,
        Some(Verdict::Accept) => v1::Verdict::Accept,
        Some(Verdict::Hold) => v1::Verdict::Hold,
        Some(Verdict::Reject) => v1::Verdict::Reject,
    }
}

/// The etag of a revision.
pub(crate) fn etag(view: &SubmissionView) -> String {
    format!("{:x}", view.revision)
}

/// An array with what has arrived of it.
pub(crate) fn array(view: &ArrayView, committed_bytes: u64) -> v1::Array {
    v1::Array {
        name: view.declared.name.clone(),
        size_bytes: view.declared.size,
        digest: digest_to_hex(&view.declared.digest),
        committed_bytes,
    }
}

/// A submission; `committed` has the bytes of each array in the order of the view.
pub(crate) fn submission(
    view: &SubmissionView,
    committed: &[u64],
    report: Option<&ReportFacts>,
) -> v1::Submission {
    let in_catalogue = matches!(view.state, State::Accepted | State::Retired);
    let mut arrays: Vec<v1::Array> = view
        .arrays
        .iter()
        .zip(committed)
        .map(|(view, committed)| array(view, *committed))
        .collect();
    arrays.sort_by(|a, b| a.name.cmp(&b.name));
    v1::Submission {
        name: names::submission(view.id),
        state: state(view.state).into(),
        package_digest: digest_to_hex(&view.package_digest),
        compound: view.compound.clone(),
        form: view.form.clone(),
        formula: view.formula.clone(),
        contributor: view.contributor.clone(),
        contributor_key: view.contributor_key.clone().unwrap_or_default(),
        create_time: Some(timestamp(view.created_ms)),
        update_time: Some(timestamp(view.updated_ms)),
        arrays,
        verdict: verdict(view.verdict).into(),
        verdict_reasons: report
            .map(|report| report.verdict_reasons.clone())
            .unwrap_or_default(),
        record: if in_catalogue {
            names::record(view.id)
        } else {
            String::new()
        },
        etag: etag(view),
    }
}

/// A record.
pub(crate) fn record(
    view: &RecordView,
    submission: &SubmissionView,
    manifest: &ManifestFacts,
    report: &ReportFacts,
) -> v1::Record {
    let crystal = &report.crystal;
    v1::Record {
        name: names::record(view.id),
        submission: names::submission(view.id),
        compound: view.compound.clone(),
        formula: view.formula.clone(),
        form: view.form.clone(),
        formula_units: manifest.formula_units,
        atom_count: manifest.atom_count,
        cell_count: manifest.cell_count,
        contributor: view.contributor.clone(),
        contributor_key: submission.contributor_key.clone().unwrap_or_default(),
        package_digest: digest_to_hex(&view.package_digest),
        energy_level: manifest.energy_level.clone(),
        constants_level: manifest.constants_level.clone(),
        cell_protocol: manifest.cell_protocol.into(),
        cell_temperature_k: manifest.cell_temperature_k,
        space_group_number: crystal.space_group_number,
        space_group_symbol: crystal.space_group_symbol.clone(),
        volume_per_formula_unit_ang3: crystal.volume_per_formula_unit_ang3,
        density_g_per_cm3: crystal.density_g_per_cm3,
        lattice_energy_kj_per_mol: crystal.lattice_energy_kj_per_mol,
        zero_point_energy_kj_per_mol: report.zero_point_energy_kj_per_mol,
        bracket_half_width_kj_per_mol: ranking::bracket_half_width(
            &report.free_energy,
            BRACKET_TEMPERATURE_K,
        ),
        caution_count: report.caution_count,
        soft_mode_count: report.soft_mode_count,
        retired: view.retired,
        accept_time: Some(timestamp(view.accepted_ms)),
        etag: etag(submission),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_state_goes_over_the_wire_and_back() {
        for known in State::ALL {
            assert_eq!(state_filter(state(*known).into()), Ok(Some(*known)));
        }
        assert_eq!(state_filter(0), Ok(None));
        assert!(state_filter(99).is_err());
    }

    #[test]
    fn moments_keep_their_milliseconds() {
        let moment = timestamp(1_700_000_000_123);
        assert_eq!((moment.seconds, moment.nanos), (1_700_000_000, 123_000_000));
    }
}
