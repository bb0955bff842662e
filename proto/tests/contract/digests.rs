//! The package digest, against its definition written out byte by byte.

use tarehouse_proto::convert::{digest_from_hex, digest_to_hex};
use tarehouse_proto::package::{ArrayIdentity, package_digest};

#[test]
fn the_digest_is_the_one_defined() {
    let (b, a) = (b"bbbb".as_slice(), b"a".as_slice());
    let mut expected = b"tarehouse-package/1\n".to_vec();
    expected.extend(b"x = 1\n");
    for (name, bytes) in [("a.npy", a), ("b.npy", b)] {
        expected.extend([5, 0, 0, 0, 0, 0, 0, 0]);
        expected.extend(name.as_bytes());
        expected.extend([u8::try_from(bytes.len()).unwrap(), 0, 0, 0, 0, 0, 0, 0]);
        expected.extend(blake3::hash(bytes).as_bytes());
    }
    let arrays = [ArrayIdentity::of("b.npy", b), ArrayIdentity::of("a.npy", a)];
    let digest = package_digest(b"x = 1\n", &arrays);
    assert_eq!(digest, *blake3::hash(&expected).as_bytes());
    let other = package_digest(b"x = 2\n", &arrays);
    assert_ne!(digest, other);
}

#[test]
fn hexadecimal_goes_both_ways() {
    let digest: [u8; 32] = std::array::from_fn(|k| u8::try_from(k * 8 + 3).unwrap());
    let text = digest_to_hex(&digest);
    assert!(text.starts_with("030b131b"), "{text}");
    assert_eq!(digest_from_hex(&text), Some(digest));
    for bad in [
        &text[1..],
        &text.to_uppercase(),
        &format!("{text}00"),
        "",
        &text.replace('0', "g"),
    ] {
        assert_eq!(digest_from_hex(bad), None, "{bad}");
    }
}
