//! Writing and reading of `.npy` arrays: version 1.0, `<f8`, C order (NumPy Enhancement Proposal 1).

/// Bytes of an array in C order. The header is padded with blanks so that the data begin at a multiple of 64.
pub(crate) fn encode(shape: &[usize], values: &[f64]) -> Vec<u8> {
    let lengths: Vec<String> = shape.iter().map(usize::to_string).collect();
    let comma = if shape.len() == 1 { "," } else { "" };
    let mut header = format!(
        "{{'descr': '<f8', 'fortran_order': False, 'shape': ({}{comma}), }}",
        lengths.join(", ")
    );
    // Magic, version and length take 10 bytes, the closing line feed one.
    let padded = (header.len() + 11).next_multiple_of(64);
    header.push_str(&" ".repeat(padded - header.len() - 11));
    header.push('\n');
    // At most eight axes of twenty digits: the length fits 16 bits.
    let length = u16::try_from(header.len()).unwrap_or(u16::MAX);
    let mut bytes = b"\x93NUMPY\x01\x00".to_vec();
    bytes.extend_from_slice(&length.to_le_bytes());
    bytes.extend_from_slice(header.as_bytes());
    for value in values {
        bytes.extend_from_slice(&value.to_le_bytes());
    }
    bytes
}

#[cfg(test)]
mod tests {
    use super::encode;

    #[test]
    fn header_is_aligned_and_data_follow() {
        let bytes = encode(&[2, 1], &[1.0, -2.5]);
        assert_eq!(bytes[..8], *b"\x93NUMPY\x01\x00");
        let length = usize::from(u16::from_le_bytes([bytes[8], bytes[9]]));
        assert_eq!((10 + length) % 64, 0);
        let header = std::str::from_utf8(&bytes[10..10 + length]).unwrap();
        assert!(header.starts_with("{'descr': '<f8', 'fortran_order': False, 'shape': (2, 1), }"));
        assert!(header.ends_with('\n'));
        let data: Vec<f64> = bytes[10 + length..]
            .chunks_exact(8)
            .map(|b| f64::from_le_bytes(b.try_into().unwrap()))
            .collect();
        assert_eq!(data, [1.0, -2.5]);
    }

    #[test]
    fn one_axis_keeps_its_comma() {
        let text = String::from_utf8_lossy(&encode(&[3], &[0.0; 3])).into_owned();
        assert!(text.contains("'shape': (3,), }"));
    }
}
