//! Array files whose bytes arrive whole and are not what a package may hold: found at sealing, each with its file.

use tonic::Code;

use crate::bare::{ARRAY, Bare, Pack, refused};

/// Spoils a `.npy` file.
type Spoil = fn(&mut Vec<u8>);

/// Replaces text of the header by text of the same length.
fn in_header(file: &mut [u8], from: &str, to: &str) {
    assert_eq!(from.len(), to.len());
    let head = file.windows(from.len()).position(|w| w == from.as_bytes());
    let head = head.unwrap_or_else(|| panic!("{from} is not in the header"));
    file[head..head + to.len()].copy_from_slice(to.as_bytes());
}

/// Writes a number over the one at `place` of the last eight.
fn at_end(file: &mut [u8], place: usize, value: f64) {
    let start = file.len() - 64 + 8 * place;
    file[start..start + 8].copy_from_slice(&value.to_le_bytes());
}

/// The ways to spoil, and what the violation must say.
const CASES: [(&str, Spoil, &str); 9] = [
    (
        "truncated",
        |file| file.truncate(file.len() - 24),
        "truncated",
    ),
    (
        "not a number",
        |file| at_end(file, 7, f64::NAN),
        "[17, 7, 2, 7, 2]",
    ),
    ("infinite", |file| at_end(file, 0, f64::INFINITY), "finite"),
    (
        "big-endian",
        |file| in_header(file, "<f8", ">f8"),
        "big-endian",
    ),
    (
        "Fortran order",
        |file| in_header(file, "False", "True "),
        "Fortran",
    ),
    (
        "objects",
        |file| in_header(file, "'<f8'", "'|O' "),
        "objects",
    ),
    (
        "another shape",
        |file| in_header(file, "(18, 8,", "(18, 9,"),
        "shape",
    ),
    (
        "absurd shape",
        |file| in_header(file, "(18, 8, 3, 8, 3)", "(9999999999,3,3)"),
        "shape",
    ),
    ("no .npy file", |file| file.fill(b'x'), ".npy"),
];

/// Creates, sends and tries to seal each; the number of drafts that this leaves.
pub(crate) async fn arrays(bare: &Bare) -> usize {
    for (number, (what, spoil, told)) in CASES.into_iter().enumerate() {
        let mut pack = Pack::demo("pelquonol-beta");
        spoil(&mut pack.constants);
        let name = bare.create(pack.request(400 + number)).await.unwrap().name;
        bare.send(pack.frames(&name)).await.unwrap();
        let status = bare.seal(&name).await.unwrap_err();
        let violations = refused(what, &status, Code::InvalidArgument, "PACKAGE_INVALID");
        assert_eq!(violations.len(), 1, "{what}: {violations:?}");
        assert!(
            violations[0].contains(ARRAY) && violations[0].contains(told),
            "{what}: {violations:?}"
        );
    }
    CASES.len()
}
