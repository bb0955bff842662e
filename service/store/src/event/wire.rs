//! Encoded form of events. Tags are only ever appended; a changed meaning gets a new version.

mod summary;

use prost::Message;
use tarehouse_assay::report::Verdict;

use super::{ArrayStored, Crashed, Created, Event, EventError, Examined, RequestBound, Withdrawn};
use crate::id::SubmissionId;
use crate::state::State;
use crate::view::{DeclaredArray, ObjectRef};

pub(crate) use summary::SummaryWire;

const CREATED: u32 = 1;
const ARRAY_STORED: u32 = 2;
const SEALED: u32 = 3;
const CRASHED: u32 = 4;
const EXAMINED: u32 = 5;
const WITHDRAWN: u32 = 6;
const RETIRED: u32 = 7;
const REQUEST_BOUND: u32 = 8;
const VERSION: u32 = 1;

#[derive(Clone, PartialEq, Eq, Message)]
pub(crate) struct ObjectWire {
    #[prost(bytes = "vec", tag = "1")]
    pub(crate) digest: Vec<u8>,
    #[prost(uint64, tag = "2")]
    pub(crate) size: u64,
}

#[derive(Clone, PartialEq, Eq, Message)]
struct ArrayWire {
    #[prost(string, tag = "1")]
    name: String,
    #[prost(message, required, tag = "2")]
    object: ObjectWire,
}

#[derive(Clone, PartialEq, Eq, Message)]
struct CreatedWire {
    #[prost(bytes = "vec", tag = "1")]
    id: Vec<u8>,
    #[prost(string, tag = "2")]
    request_id: String,
    #[prost(bytes = "vec", tag = "3")]
    package_digest: Vec<u8>,
    #[prost(message, required, tag = "4")]
    manifest: ObjectWire,
    #[prost(message, repeated, tag = "5")]
    arrays: Vec<ArrayWire>,
    #[prost(string, tag = "6")]
    compound: String,
    #[prost(string, tag = "7")]
    form: String,
    #[prost(string, tag = "8")]
    formula: String,
    #[prost(string, optional, tag = "9")]
    contributor_key: Option<String>,
    #[prost(string, tag = "10")]
    contributor: String,
}

#[derive(Clone, PartialEq, Eq, Message)]
struct ArrayStoredWire {
    #[prost(bytes = "vec", tag = "1")]
    id: Vec<u8>,
    #[prost(message, required, tag = "2")]
    array: ArrayWire,
}

#[derive(Clone, PartialEq, Eq, Message)]
struct IdWire {
    #[prost(bytes = "vec", tag = "1")]
    id: Vec<u8>,
}

#[derive(Clone, PartialEq, Eq, Message)]
struct WithdrawnWire {
    #[prost(bytes = "vec", tag = "1")]
    id: Vec<u8>,
    /// Absent in the oldest payloads.
    #[prost(string, tag = "2")]
    reason: String,
}

#[derive(Clone, PartialEq, Eq, Message)]
struct RequestBoundWire {
    #[prost(bytes = "vec", tag = "1")]
    id: Vec<u8>,
    #[prost(string, tag = "2")]
    request_id: String,
}

#[derive(Clone, PartialEq, Eq, Message)]
struct CrashedWire {
    #[prost(bytes = "vec", tag = "1")]
    id: Vec<u8>,
    #[prost(uint32, tag = "2")]
    attempt: u32,
    #[prost(string, tag = "3")]
    detail: String,
    #[prost(uint32, tag = "4")]
    state: u32,
    #[prost(message, optional, tag = "5")]
    report: Option<ObjectWire>,
}

#[derive(Clone, PartialEq, Message)]
struct ExaminedWire {
    #[prost(bytes = "vec", tag = "1")]
    id: Vec<u8>,
    #[prost(message, required, tag = "2")]
    report: ObjectWire,
    #[prost(message, optional, tag = "3")]
    projected: Option<ObjectWire>,
    #[prost(uint32, tag = "4")]
    verdict: u32,
    #[prost(uint32, tag = "5")]
    state: u32,
    #[prost(message, optional, tag = "6")]
    summary: Option<SummaryWire>,
    #[prost(bytes = "vec", optional, tag = "7")]
    supersedes: Option<Vec<u8>>,
    #[prost(bytes = "vec", optional, tag = "8")]
    superseded_by: Option<Vec<u8>>,
}

impl From<ObjectRef> for ObjectWire {
    fn from(object: ObjectRef) -> Self {
        Self {
            digest: object.digest.to_vec(),
            size: object.size,
        }
    }
}

impl TryFrom<ObjectWire> for ObjectRef {
    type Error = &'static str;

    fn try_from(wire: ObjectWire) -> Result<Self, Self::Error> {
        Ok(Self {
            digest: wire
                .digest
                .try_into()
                .map_err(|_| "a digest has 32 bytes")?,
            size: wire.size,
        })
    }
}

/// Number stored for a verdict; only ever appended to.
pub(crate) fn verdict_code(verdict: Verdict) -> u32 {
    match verdict {
        Verdict::Accept => 1,
        Verdict::Hold => 2,
        Verdict::Reject => 3,
    }
}

/// Verdict of a stored number.
pub(crate) fn verdict_of(code: u32) -> Option<Verdict> {
    [Verdict::Accept, Verdict::Hold, Verdict::Reject]
        .into_iter()
        .find(|verdict| verdict_code(*verdict) == code)
}

/// Id from stored bytes.
pub(crate) fn id_of(bytes: Vec<u8>) -> Result<SubmissionId, &'static str> {
    let bytes = bytes.try_into().map_err(|_| "an id has 16 bytes")?;
    Ok(SubmissionId::from_bytes(bytes))
}

/// Stored bytes of an id.
pub(crate) fn id_wire(id: SubmissionId) -> Vec<u8> {
    id.as_bytes().to_vec()
}

fn state_of(code: u32) -> Result<State, &'static str> {
    State::from_code(code).ok_or("a state is not known")
}

impl Event {
    /// Kind, version and payload.
    pub(crate) fn encode(&self) -> (u32, u32, Vec<u8>) {
        let (kind, payload) = match self {
            Self::Created(event) => (CREATED, created_wire(event).encode_to_vec()),
            Self::ArrayStored(event) => {
                let wire = ArrayStoredWire {
                    id: id_wire(event.id),
                    array: ArrayWire {
                        name: event.name.clone(),
                        object: event.object.into(),
                    },
                };
                (ARRAY_STORED, wire.encode_to_vec())
            }
            Self::Sealed(id) => (SEALED, IdWire { id: id_wire(*id) }.encode_to_vec()),
            Self::Crashed(event) => {
                let wire = CrashedWire {
                    id: id_wire(event.id),
                    attempt: event.attempt,
                    detail: event.detail.clone(),
                    state: u32::from(event.state.code()),
                    report: event.report.map(Into::into),
                };
                (CRASHED, wire.encode_to_vec())
            }
            Self::Examined(event) => (EXAMINED, examined_wire(event).encode_to_vec()),
            Self::Withdrawn(event) => {
                let wire = WithdrawnWire {
                    id: id_wire(event.id),
                    reason: event.reason.clone(),
                };
                (WITHDRAWN, wire.encode_to_vec())
            }
            Self::Retired(id) => (RETIRED, IdWire { id: id_wire(*id) }.encode_to_vec()),
            Self::RequestBound(event) => {
                let wire = RequestBoundWire {
                    id: id_wire(event.id),
                    request_id: event.request_id.clone(),
                };
                (REQUEST_BOUND, wire.encode_to_vec())
            }
        };
        (kind, VERSION, payload)
    }

    /// Reads a payload by its kind and version.
    pub(crate) fn decode(kind: u32, version: u32, payload: &[u8]) -> Result<Self, EventError> {
        if version != VERSION || !(CREATED..=REQUEST_BOUND).contains(&kind) {
            return Err(EventError::Unknown { kind, version });
        }
        decode_first(kind, payload).map_err(|detail| EventError::Payload { kind, detail })
    }
}

fn decode_first(kind: u32, payload: &[u8]) -> Result<Event, String> {
    fn message<M: Message + Default>(payload: &[u8]) -> Result<M, String> {
        M::decode(payload).map_err(|error| error.to_string())
    }
    match kind {
        CREATED => Ok(Event::Created(Box::new(created_of(message(payload)?)?))),
        ARRAY_STORED => {
            let wire: ArrayStoredWire = message(payload)?;
            Ok(Event::ArrayStored(ArrayStored {
                id: id_of(wire.id)?,
                name: wire.array.name,
                object: wire.array.object.try_into()?,
            }))
        }
        CRASHED => {
            let wire: CrashedWire = message(payload)?;
            Ok(Event::Crashed(Crashed {
                id: id_of(wire.id)?,
                attempt: wire.attempt,
                detail: wire.detail,
                state: state_of(wire.state)?,
                report: wire.report.map(TryInto::try_into).transpose()?,
            }))
        }
        EXAMINED => Ok(Event::Examined(Box::new(examined_of(message(payload)?)?))),
        WITHDRAWN => {
            let wire: WithdrawnWire = message(payload)?;
            Ok(Event::Withdrawn(Withdrawn {
                id: id_of(wire.id)?,
                reason: wire.reason,
            }))
        }
        REQUEST_BOUND => {
            let wire: RequestBoundWire = message(payload)?;
            Ok(Event::RequestBound(RequestBound {
                id: id_of(wire.id)?,
                request_id: wire.request_id,
            }))
        }
        _ => {
            let id = id_of(message::<IdWire>(payload)?.id)?;
            Ok(match kind {
                SEALED => Event::Sealed(id),
                _ => Event::Retired(id),
            })
        }
    }
}

fn created_wire(event: &Created) -> CreatedWire {
    CreatedWire {
        id: id_wire(event.id),
        request_id: event.request_id.clone(),
        package_digest: event.package_digest.to_vec(),
        manifest: event.manifest.into(),
        arrays: event
            .arrays
            .iter()
            .map(|array| ArrayWire {
                name: array.name.clone(),
                object: ObjectWire {
                    digest: array.digest.to_vec(),
                    size: array.size,
                },
            })
            .collect(),
        compound: event.compound.clone(),
        form: event.form.clone(),
        formula: event.formula.clone(),
        contributor_key: event.contributor_key.clone(),
        contributor: event.contributor.clone(),
    }
}

fn created_of(wire: CreatedWire) -> Result<Created, &'static str> {
    let mut arrays = Vec::with_capacity(wire.arrays.len());
    for array in wire.arrays {
        let object: ObjectRef = array.object.try_into()?;
        arrays.push(DeclaredArray {
            name: array.name,
            size: object.size,
            digest: object.digest,
        });
    }
    Ok(Created {
        id: id_of(wire.id)?,
        request_id: wire.request_id,
        package_digest: wire
            .package_digest
            .try_into()
            .map_err(|_| "a digest has 32 bytes")?,
        manifest: wire.manifest.try_into()?,
        arrays,
        compound: wire.compound,
        form: wire.form,
        formula: wire.formula,
        contributor_key: wire.contributor_key,
        contributor: wire.contributor,
    })
}

fn examined_wire(event: &Examined) -> ExaminedWire {
    ExaminedWire {
        id: id_wire(event.id),
        report: event.report.into(),
        projected: event.projected.map(Into::into),
        verdict: verdict_code(event.verdict),
        state: u32::from(event.state.code()),
        summary: event.summary.as_ref().map(Into::into),
        supersedes: event.supersedes.map(id_wire),
        superseded_by: event.superseded_by.map(id_wire),
    }
}

fn examined_of(wire: ExaminedWire) -> Result<Examined, &'static str> {
    Ok(Examined {
        id: id_of(wire.id)?,
        report: wire.report.try_into()?,
        projected: wire.projected.map(TryInto::try_into).transpose()?,
        verdict: verdict_of(wire.verdict).ok_or("a verdict is not known")?,
        state: state_of(wire.state)?,
        summary: wire.summary.map(Into::into),
        supersedes: wire.supersedes.map(id_of).transpose()?,
        superseded_by: wire.superseded_by.map(id_of).transpose()?,
    })
}

#[cfg(test)]
mod tests;
