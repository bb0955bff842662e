//! A strict reader and a writer of the `.npy` format, versions 1.0 to 3.0, for little-endian float64 in C order.
//!
//! Source: "NEP 1 — A Simple File Format for NumPy Arrays" (numpy.org). Nothing is allocated by an announced size before
//! that size was held against the bytes at hand. The header is read by a parser without recursion that knows the three
//! keys of the format and nothing else of the language that they are written in.

use crate::limits;

const MAGIC: &[u8] = b"\x93NUMPY";
/// Bytes of magic, version and the longer form of the header's length.
const PREFIX_BYTES_MAX: u64 = 12;
/// The format aligns the data to this.
const ALIGNMENT: usize = 64;

/// Largest number of bytes before the data.
pub const PREAMBLE_BYTES_MAX: u64 = PREFIX_BYTES_MAX + limits::NPY_HEADER_BYTES.max;

/// Why an array file was not taken.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum NpyError {
    /// The first bytes are not those of the format.
    #[error("not a .npy file")]
    Magic,
    /// A version that is not known.
    #[error(".npy version {0}.{1} is not known; 1.0, 2.0 and 3.0 are")]
    Version(u8, u8),
    /// The file ends inside its header.
    #[error("the file ends inside its header")]
    HeaderTruncated,
    /// The announced header is longer than any honest one.
    #[error("the header announces {0} bytes; at most {max} are taken", max = limits::NPY_HEADER_BYTES.max)]
    HeaderSize(u64),
    /// The header cannot be read.
    #[error("the header cannot be read: {0}")]
    Header(&'static str),
    /// Big-endian numbers.
    #[error("the numbers are big-endian ('{0}'); write '<f8'")]
    BigEndian(String),
    /// Pickled objects.
    #[error("the array holds pickled objects ('{0}'), which are never read; write '<f8'")]
    Objects(String),
    /// A structured array.
    #[error("the array is structured; write plain '<f8'")]
    Structured,
    /// Another type of number.
    #[error("the numbers are of type '{0}'; write '<f8'")]
    Type(String),
    /// Fortran order.
    #[error("the array is in Fortran order; write it in C order")]
    FortranOrder,
    /// Not the shape that the manifest asks for.
    #[error("the shape is {}, but the manifest asks for {}", shape_text(.found), shape_text(.expected))]
    Shape {
        /// Shape in the file.
        found: Vec<u64>,
        /// Shape wanted.
        expected: Vec<u64>,
    },
    /// A shape whose product overflows.
    #[error("the shape {} is absurd", shape_text(.0))]
    ShapeAbsurd(Vec<u64>),
    /// Fewer bytes than the shape needs.
    #[error("the file is truncated: {found} bytes of data, the shape needs {expected}")]
    Truncated {
        /// Bytes there.
        found: u64,
        /// Bytes needed.
        expected: u64,
    },
    /// More bytes than the shape needs.
    #[error("{0} bytes follow the data")]
    Trailing(u64),
}

/// `(2, 3)`, as the format writes shapes.
fn shape_text(shape: &[u64]) -> String {
    let parts: Vec<String> = shape.iter().map(u64::to_string).collect();
    match parts.as_slice() {
        [only] => format!("({only},)"),
        _ => format!("({})", parts.join(", ")),
    }
}

/// Shape and values of an array file, in C order. Values may be not finite.
#[derive(Debug, Clone, PartialEq)]
pub struct Array {
    /// Lengths, slowest index first.
    pub shape: Vec<u64>,
    /// As many values as the product of the shape.
    pub values: Vec<f64>,
}

/// Reads an array file. With `expected`, the shape must be that one.
///
/// # Errors
/// [`NpyError`]; the header is judged before the data.
pub fn read(bytes: &[u8], expected: Option<&[u64]>) -> Result<Array, NpyError> {
    let (header, data) = split(bytes)?;
    let shape = judge(header, expected)?;
    let data_bytes = data_bytes(&shape).ok_or_else(|| NpyError::ShapeAbsurd(shape.clone()))?;
    let found = data.len() as u64;
    if found < data_bytes {
        let expected = data_bytes;
        return Err(NpyError::Truncated { found, expected });
    }
    if found > data_bytes {
        return Err(NpyError::Trailing(found - data_bytes));
    }
    let (numbers, _) = data.as_chunks::<8>();
    let values = numbers.iter().map(|b| f64::from_le_bytes(*b)).collect();
    Ok(Array { shape, values })
}

/// Bytes of the data of an array of this shape; none where the number overflows.
pub fn data_bytes(shape: &[u64]) -> Option<u64> {
    shape
        .iter()
        .try_fold(8_u64, |product, length| product.checked_mul(*length))
}

/// Writes an array file of version 1.0. `values` in C order, as many as the product of `shape`.
pub fn write(shape: &[u64], values: &[f64]) -> Vec<u8> {
    let dictionary = format!(
        "{{'descr': '<f8', 'fortran_order': False, 'shape': {}, }}",
        shape_text(shape)
    );
    let prefix = MAGIC.len() + 4;
    let padding = (ALIGNMENT - (prefix + dictionary.len() + 1) % ALIGNMENT) % ALIGNMENT;
    let header = format!("{dictionary}{}\n", " ".repeat(padding));
    let mut bytes = Vec::with_capacity(prefix + header.len() + 8 * values.len());
    bytes.extend_from_slice(MAGIC);
    bytes.extend_from_slice(&[1, 0]);
    // At most eight lengths of twenty digits: far below the 65535 bytes of version 1.0.
    bytes.extend_from_slice(
        &u16::try_from(header.len())
            .unwrap_or(u16::MAX)
            .to_le_bytes(),
    );
    bytes.extend_from_slice(header.as_bytes());
    for value in values {
        bytes.extend_from_slice(&value.to_le_bytes());
    }
    bytes
}

/// Header text and data.
fn split(bytes: &[u8]) -> Result<(&str, &[u8]), NpyError> {
    let rest = bytes.strip_prefix(MAGIC).ok_or(NpyError::Magic)?;
    let (version, rest) = rest
        .split_first_chunk::<2>()
        .ok_or(NpyError::HeaderTruncated)?;
    let (announced, rest) = match version {
        [1, 0] => rest
            .split_first_chunk::<2>()
            .map(|(n, rest)| (u64::from(u16::from_le_bytes(*n)), rest)),
        [2 | 3, 0] => rest
            .split_first_chunk::<4>()
            .map(|(n, rest)| (u64::from(u32::from_le_bytes(*n)), rest)),
        [major, minor] => return Err(NpyError::Version(*major, *minor)),
    }
    .ok_or(NpyError::HeaderTruncated)?;
    if !limits::NPY_HEADER_BYTES.allows(announced) {
        return Err(NpyError::HeaderSize(announced));
    }
    let length = usize::try_from(announced).map_err(|_| NpyError::HeaderSize(announced))?;
    let (header, data) = rest
        .split_at_checked(length)
        .ok_or(NpyError::HeaderTruncated)?;
    let header = std::str::from_utf8(header).map_err(|_| NpyError::Header("it is not text"))?;
    Ok((header, data))
}

/// Judges the header and returns the shape.
fn judge(header: &str, expected: Option<&[u64]>) -> Result<Vec<u64>, NpyError> {
    let dictionary = Dictionary::parse(header)?;
    let descr = super::reader::shortened(&dictionary.descr);
    match descr.chars().next() {
        _ if descr == "<f8" => {}
        _ if descr.contains('O') => return Err(NpyError::Objects(descr)),
        Some('>') => return Err(NpyError::BigEndian(descr)),
        _ => return Err(NpyError::Type(descr)),
    }
    if dictionary.fortran_order {
        return Err(NpyError::FortranOrder);
    }
    let found = dictionary.shape;
    match expected {
        Some(expected) if found != expected => {
            let expected = expected.to_vec();
            Err(NpyError::Shape { found, expected })
        }
        _ => Ok(found),
    }
}

/// The three entries of a header.
struct Dictionary {
    descr: String,
    fortran_order: bool,
    shape: Vec<u64>,
}

impl Dictionary {
    fn parse(text: &str) -> Result<Self, NpyError> {
        let mut cursor = Cursor(text.trim_end_matches(['\n', ' ']));
        let (mut descr, mut fortran_order, mut shape) = (None, None, None);
        cursor.expect('{', "it does not begin with a brace")?;
        while !cursor.take('}') {
            let key = cursor.string()?;
            cursor.expect(':', "a key without a value")?;
            let new = match key.as_str() {
                "descr" if cursor.peek('[') => return Err(NpyError::Structured),
                "descr" => descr.replace(cursor.string()?).is_none(),
                "fortran_order" => fortran_order.replace(cursor.boolean()?).is_none(),
                "shape" => shape.replace(cursor.shape()?).is_none(),
                _ => return Err(NpyError::Header("an unknown key")),
            };
            if !new {
                return Err(NpyError::Header("a key stands twice"));
            }
            if !cursor.take(',') {
                cursor.expect('}', "it does not end with a brace")?;
                break;
            }
        }
        if !cursor.0.is_empty() {
            return Err(NpyError::Header("text follows the closing brace"));
        }
        match (descr, fortran_order, shape) {
            (Some(descr), Some(fortran_order), Some(shape)) => Ok(Self {
                descr,
                fortran_order,
                shape,
            }),
            _ => Err(NpyError::Header("descr, fortran_order or shape is missing")),
        }
    }
}

/// What is left of the text.
struct Cursor<'a>(&'a str);

impl Cursor<'_> {
    fn peek(&mut self, wanted: char) -> bool {
        self.0 = self.0.trim_start_matches(' ');
        self.0.starts_with(wanted)
    }

    fn take(&mut self, wanted: char) -> bool {
        self.0 = self.0.trim_start_matches(' ');
        self.0
            .strip_prefix(wanted)
            .map(|rest| self.0 = rest)
            .is_some()
    }

    fn expect(&mut self, wanted: char, otherwise: &'static str) -> Result<(), NpyError> {
        if self.take(wanted) {
            Ok(())
        } else {
            Err(NpyError::Header(otherwise))
        }
    }

    fn string(&mut self) -> Result<String, NpyError> {
        let bad = NpyError::Header("a string is wanted");
        let quote = ['\'', '"'].into_iter().find(|quote| self.take(*quote));
        let (text, rest) = quote
            .and_then(|quote| self.0.split_once(quote))
            .ok_or(bad)?;
        self.0 = rest;
        Ok(text.to_owned())
    }

    fn boolean(&mut self) -> Result<bool, NpyError> {
        self.0 = self.0.trim_start_matches(' ');
        for (text, value) in [("True", true), ("False", false)] {
            if let Some(rest) = self.0.strip_prefix(text) {
                self.0 = rest;
                return Ok(value);
            }
        }
        Err(NpyError::Header("fortran_order is neither True nor False"))
    }

    fn shape(&mut self) -> Result<Vec<u64>, NpyError> {
        let bad = NpyError::Header("the shape is not a tuple of lengths");
        self.expect('(', "the shape is not a tuple of lengths")?;
        let mut shape = Vec::new();
        while !self.take(')') {
            let digits = self.0.trim_start_matches(|c: char| c.is_ascii_digit());
            let (number, rest) = self.0.split_at(self.0.len() - digits.len());
            shape.push(number.parse().map_err(|_| bad.clone())?);
            self.0 = rest;
            if limits::NPY_DIMENSIONS.check_len(shape.len()).is_err() {
                return Err(NpyError::Header("too many dimensions"));
            }
            if !self.take(',') {
                self.expect(')', "the shape is not a tuple of lengths")?;
                break;
            }
        }
        Ok(shape)
    }
}
