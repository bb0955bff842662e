//! The array reader against files by another hand, and against broken ones.

use std::io::Write as _;

use npyz::WriterBuilder as _;
use proptest::prelude::*;
use tarehouse_proto::package::npy::{self, NpyError};

/// A file with any header text.
fn with_header(version: u8, header: &str, data: &[u8]) -> Vec<u8> {
    let mut bytes = b"\x93NUMPY".to_vec();
    bytes.extend([version, 0]);
    if version == 1 {
        bytes.extend(u16::try_from(header.len()).unwrap().to_le_bytes());
    } else {
        bytes.extend(u32::try_from(header.len()).unwrap().to_le_bytes());
    }
    bytes.extend(header.as_bytes());
    bytes.write_all(data).unwrap();
    bytes
}

fn header(descr: &str, order: &str, shape: &str) -> String {
    format!("{{'descr': {descr}, 'fortran_order': {order}, 'shape': {shape}, }}\n")
}

#[test]
fn files_of_another_writer_are_read() {
    // The npyz crate is the other hand.
    let mut bytes = Vec::new();
    let mut writer = npyz::WriteOptions::new()
        .default_dtype()
        .shape(&[2, 1, 3])
        .writer(&mut bytes)
        .begin_nd()
        .unwrap();
    writer
        .extend([1.5_f64, -2.0, 1e-300, 4.0, 5.0, -0.0])
        .unwrap();
    writer.finish().unwrap();
    let array = npy::read(&bytes, Some(&[2, 1, 3])).unwrap();
    assert_eq!(array.values, [1.5, -2.0, 1e-300, 4.0, 5.0, -0.0]);
}

#[test]
fn another_reader_reads_our_files() {
    for shape in [vec![], vec![3], vec![2, 3], vec![1, 2, 3, 1, 2]] {
        let count: u64 = shape.iter().product();
        let values: Vec<f64> = (0..count).map(|k| k as f64 / 3.0).collect();
        let bytes = npy::write(&shape, &values);
        assert_eq!((bytes.len() - values.len() * 8) % 64, 0);
        let file = npyz::NpyFile::new(bytes.as_slice()).unwrap();
        assert_eq!(file.shape(), shape);
        assert_eq!(file.into_vec::<f64>().unwrap(), values);
    }
}

#[test]
fn all_three_versions_are_read() {
    let data = 2.5_f64.to_le_bytes();
    for version in 1..=3 {
        let bytes = with_header(version, &header("'<f8'", "False", "(1,)"), &data);
        assert_eq!(npy::read(&bytes, None).unwrap().values, [2.5]);
    }
    let spaced = "{ \"shape\":(1 , ) ,'fortran_order' :False,\"descr\":'<f8'}   \n";
    assert_eq!(
        npy::read(&with_header(1, spaced, &data), None)
            .unwrap()
            .shape,
        [1]
    );
}

#[test]
fn what_is_not_taken_is_named() {
    let data = 2.5_f64.to_le_bytes();
    let read = |descr: &str, order: &str, shape: &str| {
        npy::read(&with_header(1, &header(descr, order, shape), &data), None).unwrap_err()
    };
    assert_eq!(
        read("'>f8'", "False", "(1,)"),
        NpyError::BigEndian(">f8".to_owned())
    );
    assert_eq!(
        read("'|O'", "False", "(1,)"),
        NpyError::Objects("|O".to_owned())
    );
    assert_eq!(
        read("'<f4'", "False", "(1,)"),
        NpyError::Type("<f4".to_owned())
    );
    assert_eq!(
        read("'<c16'", "False", "(1,)"),
        NpyError::Type("<c16".to_owned())
    );
    assert_eq!(
        read("[('a', '<f8')]", "False", "(1,)"),
        NpyError::Structured
    );
    assert_eq!(read("'<f8'", "True", "(1,)"), NpyError::FortranOrder);
    assert_eq!(
        read("'<f8'", "False", "(2,)"),
        NpyError::Truncated {
            found: 8,
            expected: 16
        }
    );
    assert_eq!(read("'<f8'", "False", "(0,)"), NpyError::Trailing(8));
    let absurd = [u64::MAX, u64::MAX];
    let text = format!("({}, {})", absurd[0], absurd[1]);
    assert_eq!(
        read("'<f8'", "False", &text),
        NpyError::ShapeAbsurd(absurd.to_vec())
    );
    let huge = "(1000000000000,)";
    let expected = 8_000_000_000_000;
    assert_eq!(
        read("'<f8'", "False", huge),
        NpyError::Truncated { found: 8, expected }
    );
    for (order, shape) in [
        ("False", "(-1,)"),
        ("False", "[1]"),
        ("False", "(1.0,)"),
        ("None", "(1,)"),
        ("False", "((1,),)"),
        ("False", "(1,1,1,1,1,1,1,1,1)"),
    ] {
        assert!(
            matches!(read("'<f8'", order, shape), NpyError::Header(_)),
            "{order} {shape}"
        );
    }
}

#[test]
fn broken_headers_are_named() {
    assert_eq!(npy::read(b"PK\x03\x04", None), Err(NpyError::Magic));
    assert_eq!(npy::read(b"", None), Err(NpyError::Magic));
    assert_eq!(
        npy::read(b"\x93NUMPY\x04\x00\x00\x00", None),
        Err(NpyError::Version(4, 0))
    );
    // A header that announces 4 GiB is refused before anything is allocated.
    let announced = b"\x93NUMPY\x02\x00\xff\xff\xff\xff";
    assert_eq!(
        npy::read(announced, None),
        Err(NpyError::HeaderSize(u64::from(u32::MAX)))
    );
    let deep = format!("{{'shape': {}", "(".repeat(4000));
    assert!(matches!(
        npy::read(&with_header(1, &deep, b""), None),
        Err(NpyError::Header(_))
    ));
    let twice = "{'descr': '<f8', 'descr': '<f8', 'fortran_order': False, 'shape': ()}";
    assert!(matches!(
        npy::read(&with_header(1, twice, b""), None),
        Err(NpyError::Header(_))
    ));
    let whole = npy::write(&[2], &[1.0, 2.0]);
    for length in 0..whole.len() {
        assert!(npy::read(&whole[..length], None).is_err(), "{length}");
    }
}

proptest! {
    #[test]
    fn bytes_never_break_the_reader(bytes in proptest::collection::vec(any::<u8>(), 0..200)) {
        let mut framed = b"\x93NUMPY\x01\x00".to_vec();
        framed.extend(&bytes);
        prop_assert!(npy::read(&bytes, None).is_err());
        if let Ok(array) = npy::read(&framed, None) {
            prop_assert_eq!(npy::data_bytes(&array.shape), Some(8 * array.values.len() as u64));
        }
    }

    #[test]
    fn a_changed_byte_never_breaks_the_reader(at in 0_usize..144, byte in any::<u8>()) {
        let mut bytes = npy::write(&[2], &[1.0, 2.0]);
        bytes[at] = byte;
        if let Ok(array) = npy::read(&bytes, None) {
            prop_assert_eq!(npy::data_bytes(&array.shape), Some(8 * array.values.len() as u64));
        }
    }
}
