//! Arrays on their way in: what is refused, and how an upload goes on after a stop.

use tarehouse_store::{State, StoreError};

use crate::support::{ARRAY, content, mira, open, sample, send};

#[test]
fn uploads_tell_what_is_wrong() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let id = store.create_submission(&mira(), sample(1, "a")).unwrap().id;
    let bytes = content(1);
    let digest = *blake3::hash(&bytes).as_bytes();
    let size = bytes.len() as u64;
    assert_eq!(
        store.append_array_part(id, ARRAY, 0, &bytes[..50]).unwrap(),
        50
    );
    let wrong = store.append_array_part(id, ARRAY, 40, &bytes[40..]);
    assert!(matches!(
        wrong,
        Err(StoreError::WrongOffset {
            expected: 50,
            offset: 40,
            ..
        })
    ));
    let long = store.append_array_part(id, ARRAY, 50, &[0; 151]);
    assert!(matches!(
        long,
        Err(StoreError::TooLong {
            declared: 200,
            end: 201,
            ..
        })
    ));
    let short = store.finish_array(&mira(), id, ARRAY, size, &digest);
    assert!(matches!(
        short,
        Err(StoreError::TooShort { received: 50, .. })
    ));
    let none = store.append_array_part(id, "other.npy", 0, &bytes);
    assert!(matches!(none, Err(StoreError::NoSuchArray { .. })));
    assert!(matches!(
        store.seal(&mira(), id),
        Err(StoreError::ArraysMissing { .. })
    ));
    let lost = store.read_array(id, ARRAY);
    assert!(matches!(lost, Err(StoreError::NotThereYet { .. })));
    // The right length, another content: dropped, and sent again from the start.
    store.append_array_part(id, ARRAY, 50, &[0; 150]).unwrap();
    let other = store.finish_array(&mira(), id, ARRAY, size, &digest);
    assert!(matches!(other, Err(StoreError::DigestMismatch { .. })));
    assert_eq!(store.array_status(id, ARRAY).unwrap().committed_bytes, 0);
    store.append_array_part(id, ARRAY, 0, &bytes[..20]).unwrap();
    store.restart_array(id, ARRAY).unwrap();
    send(&store, id, 1).unwrap();
    store
        .finish_array(&mira(), id, ARRAY, size, &digest)
        .unwrap();
    let late = store.append_array_part(id, ARRAY, 200, &[]);
    assert!(matches!(late, Err(StoreError::AlreadyStored { .. })));
    store.seal(&mira(), id).unwrap();
    assert!(matches!(
        store.seal(&mira(), id),
        Err(StoreError::Forbidden { .. })
    ));
    let sealed = store.append_array_part(id, ARRAY, 200, &[]);
    assert!(matches!(
        sealed,
        Err(StoreError::NotADraft {
            state: State::Queued,
            ..
        })
    ));
}

#[test]
fn a_resumed_upload_is_hashed_from_its_file() {
    let folder = tempfile::tempdir().unwrap();
    let store = open(folder.path());
    let id = store.create_submission(&mira(), sample(1, "a")).unwrap().id;
    store
        .append_array_part(id, ARRAY, 0, &content(1)[..70])
        .unwrap();
    drop(store);
    let path = folder.path().join(format!("partial/{id}.{ARRAY}"));
    let mut bytes = std::fs::read(&path).unwrap();
    bytes[3] ^= 1;
    std::fs::write(&path, bytes).unwrap();
    let store = open(folder.path());
    assert!(matches!(
        send(&store, id, 1),
        Err(StoreError::DigestMismatch { .. })
    ));
    send(&store, id, 1).unwrap();
    assert_eq!(store.read_array(id, ARRAY).unwrap(), content(1));
}
