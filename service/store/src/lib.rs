//! The store: the only user of the embedded database and of the array files.
//!
//! Three parts. The *trail* holds every change of state, append-only and hash-chained; it is the truth. *Objects* hold
//! arrays, manifests and reports by content. The *index* answers lists and look-ups; it is a cache that can be built
//! from the other two at any time.
//!
//! Invariants: nothing is answered for before it is durable; decisions are made from the trail, never from the index;
//! after a failed sync nothing more is answered for; damage is reported, never repaired silently. What this crate never
//! does: judge physics, know the network, run async code.

pub mod disk;
pub mod limits;

mod error;
mod event;
mod id;
mod index;
mod keylock;
mod ledger;
mod object;
mod page;
mod state;
mod store;
mod trail;
mod upload;
mod view;

pub use error::{Health, OpenError, StoreError, TrailDamage, Violation};
pub use id::{IdError, SubmissionId};
pub use index::Observer;
pub use object::ObjectReader;
pub use state::{ForbiddenTransition, State, Verb};
pub use store::{ArrayStatus, Lease, Options, Store};
pub use view::{
    Actor, ArrayView, Completion, CompoundView, CrashOutcome, DeclaredArray, NewSubmission,
    ObjectRef, Outcome, Page, PageRequest, Receipt, RecordFilter, RecordOrder, RecordSummary,
    RecordView, SubmissionFilter, SubmissionView,
};
