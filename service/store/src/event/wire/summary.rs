//! Encoded form of a record's numbers.

use prost::Message;

use crate::view::RecordSummary;

/// Encoded [`RecordSummary`].
#[derive(Clone, PartialEq, Message)]
pub(crate) struct SummaryWire {
    #[prost(string, tag = "1")]
    level: String,
    #[prost(string, tag = "2")]
    energy_level: String,
    #[prost(double, tag = "3")]
    lattice_energy_kj_per_mol: f64,
    #[prost(double, tag = "4")]
    zero_point_energy_kj_per_mol: f64,
    #[prost(bool, tag = "5")]
    defined: bool,
    #[prost(double, repeated, tag = "6")]
    temperature_k: Vec<f64>,
    #[prost(double, repeated, tag = "7")]
    central_kj_per_mol: Vec<f64>,
    #[prost(double, repeated, tag = "8")]
    lower_kj_per_mol: Vec<f64>,
    #[prost(double, repeated, tag = "9")]
    upper_kj_per_mol: Vec<f64>,
    #[prost(double, repeated, tag = "10")]
    entropy_j_per_mol_k: Vec<f64>,
    #[prost(double, optional, tag = "11")]
    density_g_per_cm3: Option<f64>,
    #[prost(uint32, optional, tag = "12")]
    space_group_number: Option<u32>,
}

impl From<&RecordSummary> for SummaryWire {
    fn from(summary: &RecordSummary) -> Self {
        let summary = summary.clone();
        Self {
            level: summary.level,
            energy_level: summary.energy_level,
            lattice_energy_kj_per_mol: summary.lattice_energy_kj_per_mol,
            zero_point_energy_kj_per_mol: summary.zero_point_energy_kj_per_mol,
            defined: summary.defined,
            temperature_k: summary.temperature_k,
            central_kj_per_mol: summary.central_kj_per_mol,
            lower_kj_per_mol: summary.lower_kj_per_mol,
            upper_kj_per_mol: summary.upper_kj_per_mol,
            entropy_j_per_mol_k: summary.entropy_j_per_mol_k,
            density_g_per_cm3: summary.density_g_per_cm3,
            space_group_number: summary.space_group_number,
        }
    }
}

impl From<SummaryWire> for RecordSummary {
    fn from(wire: SummaryWire) -> Self {
        Self {
            level: wire.level,
            energy_level: wire.energy_level,
            lattice_energy_kj_per_mol: wire.lattice_energy_kj_per_mol,
            zero_point_energy_kj_per_mol: wire.zero_point_energy_kj_per_mol,
            defined: wire.defined,
            temperature_k: wire.temperature_k,
            central_kj_per_mol: wire.central_kj_per_mol,
            lower_kj_per_mol: wire.lower_kj_per_mol,
            upper_kj_per_mol: wire.upper_kj_per_mol,
            entropy_j_per_mol_k: wire.entropy_j_per_mol_k,
            density_g_per_cm3: wire.density_g_per_cm3,
            space_group_number: wire.space_group_number,
        }
    }
}
