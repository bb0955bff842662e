//! The benchmark of judgement: invented crystals and uploads whose truth is known, examined and scored.
//!
//! A [`pool`] of relaxed crystals is made from a seed; each [`uploads::Class`] turns one of them into a submission with
//! something known to be true of it; [`scoring`] examines the submission and compares; [`table`] adds up. Everything
//! follows from the seeds, and nothing here knows a threshold of the policy.

pub mod compounds;
pub mod exact;
pub mod instability;
pub mod pool;

pub mod blunders;
pub mod geometry;
pub mod uploads;

pub mod depth;
pub mod lean;
pub mod scoring;
pub mod table;

#[cfg(test)]
mod checks;

/// Temperatures at which brackets are judged, K.
pub const TEMPERATURES_K: [f64; 4] = [10.0, 100.0, 300.0, 500.0];

/// Why a case could not be made or examined.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum BenchError {
    /// A model failed.
    #[error("model: {0}")]
    Model(#[from] tarehouse_demo_data::ModelError),
    /// An eigenproblem failed.
    #[error("eigenproblem: {0}")]
    Eigen(String),
    /// The examination failed.
    #[error("examination: {0}")]
    Examination(#[from] tarehouse_assay::ExamineError),
    /// A case does not exist for the crystal drawn.
    #[error("no such case: {0}")]
    NoCase(&'static str),
    /// A crystal, supercell or array was refused.
    #[error("not well formed: {0}")]
    Malformed(String),
}

/// A seed from words and numbers, so that cases are independent of one another and of their order.
pub fn seed_of(word: &str, numbers: &[u64]) -> u64 {
    let mut hasher = blake3::Hasher::new();
    hasher.update(word.as_bytes());
    for number in numbers {
        hasher.update(&number.to_le_bytes());
    }
    let mut bytes = [0; 8];
    hasher.finalize_xof().fill(&mut bytes);
    u64::from_le_bytes(bytes)
}

/// A generator of the case that the words and numbers name.
pub fn generator(word: &str, numbers: &[u64]) -> rand_chacha::ChaCha8Rng {
    use rand::SeedableRng;
    rand_chacha::ChaCha8Rng::seed_from_u64(seed_of(word, numbers))
}
