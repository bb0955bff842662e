//! What lists and rankings need of manifests and reports, read once per content.
//!
//! Both are stored by content, so that what was learnt of a digest stays true.

use std::collections::HashMap;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};

use prost::Message as _;
use tarehouse_assay::submission::{CellProtocol, Digest, LevelParts};
use tarehouse_proto::package::{ArrayRole, ExpectedArray, ManifestSummary};
use tarehouse_proto::v1;

/// Contents that are remembered of each kind.
const REMEMBERED_MAX: usize = 4096;

/// What a manifest says.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct ManifestFacts {
    /// Formula units in the cell.
    pub(crate) formula_units: u32,
    /// Atoms in the cell.
    pub(crate) atom_count: u32,
    /// Primitive cells in the supercell.
    pub(crate) cell_count: u32,
    /// Level of the static energy.
    pub(crate) energy_level: String,
    /// Level of the constants.
    pub(crate) constants_level: String,
    /// File name of the force constants.
    pub(crate) constants_file: String,
    /// How the cell was chosen.
    pub(crate) cell_protocol: v1::CellProtocol,
    /// Temperature of the cell, K.
    pub(crate) cell_temperature_k: Option<f64>,
}

impl ManifestFacts {
    /// What is needed of a manifest.
    pub(crate) fn of(summary: &ManifestSummary) -> Self {
        let manifest = &summary.manifest;
        let constants = |array: &&ExpectedArray| array.role == ArrayRole::Constants;
        let count = |n: usize| u32::try_from(n).unwrap_or(u32::MAX);
        Self {
            formula_units: manifest.identity.formula_units,
            atom_count: count(manifest.crystal.atom_count()),
            cell_count: count(manifest.supercell.cell_count()),
            energy_level: energy_level(manifest.energy.level.as_ref(), &manifest.settings.level),
            constants_level: manifest.settings.level.key(),
            constants_file: summary
                .arrays
                .iter()
                .find(constants)
                .map(|array| array.name.clone())
                .unwrap_or_default(),
            cell_protocol: match manifest.cell_protocol {
                CellProtocol::Relaxed => v1::CellProtocol::Relaxed,
                CellProtocol::Experimental => v1::CellProtocol::Experimental,
                CellProtocol::Expanded => v1::CellProtocol::Expanded,
                CellProtocol::Other => v1::CellProtocol::Other,
            },
            cell_temperature_k: manifest.cell_temperature_k,
        }
    }
}

/// Level of the static energy: its own where declared, else that of the constants.
pub(crate) fn energy_level(own: Option<&LevelParts>, constants: &LevelParts) -> String {
    own.unwrap_or(constants).key()
}

/// What a report says.
#[derive(Debug, Clone, PartialEq, Default)]
pub(crate) struct ReportFacts {
    /// Why the verdict.
    pub(crate) verdict_reasons: Vec<String>,
    /// Facts about the crystal.
    pub(crate) crystal: v1::CrystalFacts,
    /// Zero-point energy, kJ/mol per formula unit.
    pub(crate) zero_point_energy_kj_per_mol: f64,
    /// Free energy on the grid.
    pub(crate) free_energy: Vec<v1::FreeEnergy>,
    /// Findings that ask for care.
    pub(crate) caution_count: u32,
    /// Clusters of soft modes.
    pub(crate) soft_mode_count: u32,
}

impl ReportFacts {
    /// What is needed of a report.
    pub(crate) fn of(report: v1::Report) -> Self {
        let count = |n: usize| u32::try_from(n).unwrap_or(u32::MAX);
        let caution = v1::Severity::Caution as i32;
        let cautions = report
            .findings
            .iter()
            .filter(|finding| finding.severity == caution);
        Self {
            caution_count: count(cautions.count()),
            soft_mode_count: count(report.soft_modes.len()),
            verdict_reasons: report.verdict_reasons,
            crystal: report.crystal.unwrap_or_default(),
            zero_point_energy_kj_per_mol: report.zero_point_energy_kj_per_mol,
            free_energy: report.free_energy,
        }
    }

    /// Reads a stored report.
    pub(crate) fn decode(bytes: &[u8]) -> Result<Self, prost::DecodeError> {
        v1::Report::decode(bytes).map(Self::of)
    }
}

/// Facts by the digest of what they were learnt from.
#[derive(Debug)]
pub(crate) struct Memory<T> {
    known: Mutex<HashMap<Digest, Arc<T>>>,
}

impl<T> Default for Memory<T> {
    fn default() -> Self {
        Self {
            known: Mutex::default(),
        }
    }
}

impl<T> Memory<T> {
    fn facts(&self) -> MutexGuard<'_, HashMap<Digest, Arc<T>>> {
        self.known.lock().unwrap_or_else(PoisonError::into_inner)
    }

    /// What is known of a digest.
    pub(crate) fn known(&self, digest: &Digest) -> Option<Arc<T>> {
        self.facts().get(digest).cloned()
    }

    /// Remembers what was learnt of a digest.
    pub(crate) fn keep(&self, digest: &Digest, fact: T) -> Arc<T> {
        let mut facts = self.facts();
        if facts.len() >= REMEMBERED_MAX {
            facts.clear();
        }
        let fact = Arc::new(fact);
        facts.insert(*digest, Arc::clone(&fact));
        fact
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_was_learnt_is_known_and_memory_is_bounded() {
        let memory = Memory::<usize>::default();
        assert_eq!(memory.known(&[1; 32]), None);
        memory.keep(&[1; 32], 5);
        assert_eq!(memory.known(&[1; 32]).as_deref(), Some(&5));
        for k in 0..=REMEMBERED_MAX {
            let mut digest = [0; 32];
            digest[..8].copy_from_slice(&(k as u64).to_le_bytes());
            memory.keep(&digest, k);
        }
        assert!(memory.facts().len() <= REMEMBERED_MAX);
    }

    #[test]
    fn an_energy_without_its_own_level_has_that_of_the_constants() {
        let constants = LevelParts {
            functional: Some("A".into()),
            ..LevelParts::default()
        };
        let own = LevelParts {
            functional: Some("B".into()),
            ..LevelParts::default()
        };
        assert!(energy_level(None, &constants).starts_with("a /"));
        assert!(energy_level(Some(&own), &constants).starts_with("b /"));
    }
}
