//! Payloads as first written, and as read again.

use super::*;

fn reread(event: &Event) -> Event {
    let (kind, version, payload) = event.encode();
    Event::decode(kind, version, &payload).unwrap()
}

#[test]
fn a_withdrawal_without_a_reason_reads_as_it_was_written() {
    // Kind 6, version 1, as first written: the id alone under tag 1 with 16 bytes.
    let mut payload = vec![0x0a, 16];
    payload.extend(1..=16_u8);
    let bytes: [u8; 16] = std::array::from_fn(|k| u8::try_from(k + 1).unwrap());
    let withdrawn = |reason: &str| {
        Event::Withdrawn(Withdrawn {
            id: SubmissionId::from_bytes(bytes),
            reason: reason.to_owned(),
        })
    };
    assert_eq!(Event::decode(6, 1, &payload), Ok(withdrawn("")));
    assert_eq!(withdrawn("").encode(), (6, 1, payload));
    let event = withdrawn("a better one follows");
    assert_eq!(reread(&event), event);
}

#[test]
fn a_bound_request_is_read_again_and_later_kinds_are_refused() {
    let event = Event::RequestBound(RequestBound {
        id: SubmissionId::from_bytes([3; 16]),
        request_id: "r".to_owned(),
    });
    assert_eq!(event.encode().0, 8);
    assert_eq!(reread(&event), event);
    for (kind, version) in [(0, 1), (9, 1), (8, 0), (8, 2)] {
        let unknown = Event::decode(kind, version, &event.encode().2);
        assert_eq!(unknown, Err(EventError::Unknown { kind, version }));
    }
}
