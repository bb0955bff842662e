//! Names, digests and the enums that stand one to one.

use tarehouse_assay::report::{LikelyCause, Rule, Severity, Strength, Tag, Verdict};
use tarehouse_assay::submission::{CellProtocol, Digest};

use super::ConvertError;
use crate::{limits, v1};

/// Names of all rules, in the order of the contract.
pub fn rule_names() -> Vec<String> {
    Rule::ALL
        .iter()
        .map(|rule| rule.name().to_owned())
        .collect()
}

/// Names of all likely causes as in the contract's enum, in its order.
pub fn likely_cause_names() -> Vec<String> {
    LikelyCause::ALL
        .iter()
        .map(|cause| v1::LikelyCause::from(*cause).as_str_name().to_owned())
        .collect()
}

/// The limits of the package format and of the transfers, as the server announces them. `upload_streams_max` is the
/// server's own.
pub fn limits_message(upload_streams_max: u32) -> v1::Limits {
    let count = |limit: limits::Limit| u32::try_from(limit.max).unwrap_or(u32::MAX);
    v1::Limits {
        atoms_max: limits::ATOMS.max,
        cells_max: limits::CELLS.max,
        array_bytes_max: limits::ARRAY_BYTES.max,
        manifest_bytes_max: limits::MANIFEST_BYTES.max,
        chunk_bytes_max: limits::CHUNK_BYTES.max,
        page_size_max: count(limits::PAGE_SIZE),
        page_size_default: limits::PAGE_SIZE_DEFAULT,
        temperatures_max: count(limits::TEMPERATURES),
        upload_streams_max,
    }
}

/// The rule of a name.
pub fn rule_by_name(name: &str) -> Option<Rule> {
    Rule::ALL.iter().copied().find(|rule| rule.name() == name)
}

/// A digest as 64 lower-case hexadecimal digits.
pub fn digest_to_hex(digest: &Digest) -> String {
    const DIGITS: [char; 16] = [
        '0', '1', '2', '3', '4', '5', '6', '7', '8', '9', 'a', 'b', 'c', 'd', 'e', 'f',
    ];
    digest
        .iter()
        .flat_map(|byte| {
            [
                DIGITS[usize::from(byte >> 4)],
                DIGITS[usize::from(byte & 15)],
            ]
        })
        .collect()
}

/// The digest of 64 lower-case hexadecimal digits.
pub fn digest_from_hex(text: &str) -> Option<Digest> {
    let (pairs, rest) = text.as_bytes().as_chunks::<2>();
    let pairs: &[[u8; 2]; 32] = pairs.try_into().ok().filter(|_| rest.is_empty())?;
    let nibble = |digit: u8| match digit {
        b'0'..=b'9' => Some(digit - b'0'),
        b'a'..=b'f' => Some(digit - b'a' + 10),
        _ => None,
    };
    let mut digest = [0; 32];
    for (byte, [high, low]) in digest.iter_mut().zip(pairs) {
        *byte = nibble(*high)? << 4 | nibble(*low)?;
    }
    Some(digest)
}

/// Enums of the domain and of the wire that stand one to one. The wire's `Unspecified` has no partner.
macro_rules! paired {
    ($domain:ty, $wire:ty { $($here:ident => $there:ident,)+ }) => {
        impl From<$domain> for $wire {
            fn from(value: $domain) -> Self {
                match value { $(<$domain>::$here => <$wire>::$there,)+ }
            }
        }

        impl TryFrom<$wire> for $domain {
            type Error = ConvertError;

            fn try_from(value: $wire) -> Result<Self, ConvertError> {
                match value {
                    $(<$wire>::$there => Ok(<$domain>::$here),)+
                    <$wire>::Unspecified => Err(ConvertError::UnknownEnum {
                        field: stringify!($domain),
                        value: value as i32,
                    }),
                }
            }
        }
    };
}

paired! { Verdict, v1::Verdict { Accept => Accept, Hold => Hold, Reject => Reject, } }
paired! { Severity, v1::Severity { Pass => Pass, Caution => Caution, Fail => Fail, } }
paired! { Tag, v1::SoftModeTag { Numerical => Numerical, PossiblyPhysical => PossiblyPhysical, } }
paired! { Strength, v1::Strength { Strong => Strong, Weak => Weak, } }
paired! { CellProtocol, v1::CellProtocol {
    Relaxed => Relaxed, Experimental => Experimental, Expanded => Expanded, Other => Other,
} }
paired! { LikelyCause, v1::LikelyCause {
    None => None,
    WrongUnit => WrongUnit,
    SwappedIndexOrder => SwappedIndexOrder,
    PermutedAxes => PermutedAxes,
    PermutedAtoms => PermutedAtoms,
    WrongMasses => WrongMasses,
    SignError => SignError,
    ZeroedBlock => ZeroedBlock,
    DuplicatedBlock => DuplicatedBlock,
    WrongSupercell => WrongSupercell,
    WrongStructure => WrongStructure,
    ScfNoise => ScfNoise,
    RoundedForces => RoundedForces,
    DifferenceTruncation => DifferenceTruncation,
    SmallSupercell => SmallSupercell,
    UnrelaxedGeometry => UnrelaxedGeometry,
    EvidenceErased => EvidenceErased,
    MissingSetting => MissingSetting,
    LooseSetting => LooseSetting,
    Instability => Instability,
    DifferentTreatment => DifferentTreatment,
    Unknown => Unknown,
} }
