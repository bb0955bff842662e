//! Forms of one compound in the order of their free energies, one table per level. Pure.
//!
//! Energies per formula unit. A form without a harmonic free energy at a temperature is listed with the reason and
//! never ranked there; energies of different levels never meet in one table.

use std::cmp::Ordering;
use std::collections::BTreeMap;

use tarehouse_assay::pressure::{Compression, PressureError, PressureTerm};
use tarehouse_physics::thermodynamics::FreeEnergyCurve;
use tarehouse_proto::v1;

use crate::failure::{Breach, Failure, reason};

/// What makes energies comparable.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord)]
pub(crate) struct LevelKey {
    /// Level of the static energy.
    pub(crate) energy: String,
    /// Level of the constants.
    pub(crate) constants: String,
    /// How the cell was chosen, as on the wire.
    pub(crate) cell_protocol: i32,
}

/// A record that may be ranked.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Candidate {
    /// Name of the record.
    pub(crate) record: String,
    /// Label of the polymorph.
    pub(crate) form: String,
    /// When it was accepted, ms since 1970.
    pub(crate) accepted_ms: u64,
    /// Its level.
    pub(crate) level: LevelKey,
    /// Static lattice energy, kJ/mol.
    pub(crate) lattice_energy_kj_per_mol: f64,
    /// Zero-point energy, kJ/mol.
    pub(crate) zero_point_energy_kj_per_mol: f64,
    /// Vibrational free energy on the grid of its examination, ascending.
    pub(crate) free_energy: Vec<v1::FreeEnergy>,
    /// Volume and compressibility.
    pub(crate) compression: Compression,
    /// What pressure adds; nothing at no pressure; else why it cannot be told.
    pub(crate) pressure: Result<Option<PressureTerm>, String>,
}

/// Puts all forms under pressure. A form whose compressibility is not known will be listed with the reason.
///
/// # Errors
/// Where a form would be pressed farther than one volume answers for: leaving it out would change who is lowest.
pub(crate) fn press(
    mut candidates: Vec<Candidate>,
    pressure_gpa: f64,
    compression_max: f64,
) -> Result<Vec<Candidate>, Failure> {
    if pressure_gpa <= 0.0 {
        return Ok(candidates);
    }
    let mut breaches = Vec::new();
    for candidate in &mut candidates {
        match candidate.compression.term(pressure_gpa, compression_max) {
            Ok(term) => candidate.pressure = Ok(Some(term)),
            Err(error @ PressureError::BeyondRange { .. }) => breaches.push(Breach {
                field: "pressure_gpa".to_owned(),
                message: format!("{}: {error}", candidate.record),
            }),
            Err(error @ (PressureError::NotElastic | PressureError::NotAPressure { .. })) => {
                candidate.pressure = Err(format!("not ranked under pressure: {error}"));
            }
        }
    }
    if breaches.is_empty() {
        return Ok(candidates);
    }
    Err(Failure::Forbidden {
        reason: reason::VOLUME_SERIES_NEEDED,
        message: format!(
            "{pressure_gpa} GPa is too much for one volume per form; submit each form at four volumes or more and ask \
             for its volume series"
        ),
        breaches,
    })
}

/// Free energy of one form at one temperature, kJ/mol.
#[derive(Debug, Clone, Copy, PartialEq)]
struct Energy {
    vibrational: f64,
    below: f64,
    above: f64,
    pressure: Option<f64>,
}

impl Energy {
    fn under(self, term: Option<PressureTerm>) -> Self {
        let Some(term) = term else {
            return self;
        };
        Self {
            below: self.below + term.uncertainty_kj_per_mol,
            above: self.above + term.uncertainty_kj_per_mol,
            pressure: Some(term.sum_kj_per_mol()),
            ..self
        }
    }
}

/// One table per level, the newest record per form in each, rows lowest at the first temperature first.
pub(crate) fn rank(candidates: Vec<Candidate>, temperatures_k: &[f64]) -> Vec<v1::RankTable> {
    let mut tables: BTreeMap<LevelKey, BTreeMap<String, Candidate>> = BTreeMap::new();
    for candidate in candidates {
        let forms = tables.entry(candidate.level.clone()).or_default();
        match forms.get(&candidate.form) {
            Some(known) if age(known) >= age(&candidate) => {}
            _ => {
                forms.insert(candidate.form.clone(), candidate);
            }
        }
    }
    tables
        .into_iter()
        .map(|(level, forms)| table(level, forms.into_values().collect(), temperatures_k))
        .collect()
}

/// Later is greater; the name decides between records of the same millisecond.
fn age(candidate: &Candidate) -> (u64, &str) {
    (candidate.accepted_ms, &candidate.record)
}

fn table(level: LevelKey, forms: Vec<Candidate>, temperatures_k: &[f64]) -> v1::RankTable {
    let mut points: Vec<Vec<v1::RankPoint>> = vec![Vec::new(); forms.len()];
    for &temperature_k in temperatures_k {
        let column = column(&forms, temperature_k);
        for (row, point) in points.iter_mut().zip(column) {
            row.push(point);
        }
    }
    let mut rows: Vec<v1::RankRow> = forms
        .into_iter()
        .zip(points)
        .map(|(form, points)| v1::RankRow {
            record: form.record,
            form: form.form,
            points,
        })
        .collect();
    // The sort is stable, so that equal and undefined forms keep the order of their labels.
    rows.sort_by(|a, b| first_energy(a).total_cmp(&first_energy(b)));
    v1::RankTable {
        energy_level: level.energy,
        constants_level: level.constants,
        cell_protocol: level.cell_protocol,
        rows,
    }
}

/// What a row is sorted by; forms without a free energy come last.
fn first_energy(row: &v1::RankRow) -> f64 {
    row.points
        .first()
        .and_then(|point| point.relative_kj_per_mol)
        .unwrap_or(f64::INFINITY)
}

/// All forms at one temperature.
fn column(forms: &[Candidate], temperature_k: f64) -> Vec<v1::RankPoint> {
    let energies: Vec<Result<Energy, String>> = forms
        .iter()
        .map(|form| {
            let energy = energy_at(&form.free_energy, temperature_k)?;
            Ok(energy.under(form.pressure.clone()?))
        })
        .collect();
    let totals: Vec<Option<f64>> = forms
        .iter()
        .zip(&energies)
        .map(|(form, energy)| {
            let energy = energy.as_ref().ok()?;
            Some(
                form.lattice_energy_kj_per_mol
                    + energy.vibrational
                    + energy.pressure.unwrap_or_default(),
            )
        })
        .collect();
    let lowest = totals
        .iter()
        .flatten()
        .copied()
        .fold(f64::INFINITY, f64::min);
    forms
        .iter()
        .zip(energies)
        .zip(&totals)
        .map(|((form, energy), total)| match (energy, total) {
            (Ok(energy), Some(total)) => {
                let lower_count = totals
                    .iter()
                    .flatten()
                    .filter(|other| *other < total)
                    .count();
                v1::RankPoint {
                    rank: u32::try_from(lower_count + 1).unwrap_or(u32::MAX),
                    ..ranked(form, energy, total - lowest, temperature_k)
                }
            }
            (energy, _) => v1::RankPoint {
                temperature_k,
                exclusion_reason: energy.err().unwrap_or_default(),
                ..v1::RankPoint::default()
            },
        })
        .collect()
}

fn ranked(form: &Candidate, energy: Energy, relative: f64, temperature_k: f64) -> v1::RankPoint {
    v1::RankPoint {
        temperature_k,
        defined: true,
        exclusion_reason: String::new(),
        rank: 0,
        relative_kj_per_mol: Some(relative),
        lower_kj_per_mol: Some(relative - energy.below),
        upper_kj_per_mol: Some(relative + energy.above),
        static_kj_per_mol: Some(form.lattice_energy_kj_per_mol),
        zero_point_kj_per_mol: Some(form.zero_point_energy_kj_per_mol),
        thermal_kj_per_mol: Some(energy.vibrational - form.zero_point_energy_kj_per_mol),
        pressure_kj_per_mol: energy.pressure,
    }
}

/// The free energy on or between the grid points, or why there is none.
///
/// Between them F is the cubic Hermite polynomial of (F, −S) and the bracket's two arms are linear, which keeps them
/// from crossing F.
fn energy_at(grid: &[v1::FreeEnergy], temperature_k: f64) -> Result<Energy, String> {
    let above = grid.partition_point(|point| point.temperature_k < temperature_k);
    let outside = || format!("examined on a grid that does not reach {temperature_k} K");
    let high = grid.get(above).ok_or_else(outside)?;
    if high.temperature_k.total_cmp(&temperature_k) == Ordering::Equal {
        return defined(high).map(at_node);
    }
    let low = above
        .checked_sub(1)
        .and_then(|below| grid.get(below))
        .ok_or_else(outside)?;
    let (low, high) = (defined(low)?, defined(high)?);
    let both = |of: fn(&v1::FreeEnergy) -> f64| vec![of(low), of(high)];
    let curve = FreeEnergyCurve::new(
        both(|point| point.temperature_k),
        both(|point| point.central_kj_per_mol),
        both(|point| point.entropy_j_per_mol_k / 1000.0),
    )
    .map_err(|_| "its stored free energies are no curve".to_owned())?;
    let vibrational = curve
        .free_energy(temperature_k)
        .map_err(|error| error.to_string())?;
    let share = (temperature_k - low.temperature_k) / (high.temperature_k - low.temperature_k);
    let between = |a: f64, b: f64| a + share * (b - a);
    let (first, last) = (at_node(low), at_node(high));
    Ok(Energy {
        vibrational,
        below: between(first.below, last.below),
        above: between(first.above, last.above),
        pressure: None,
    })
}

/// Half the width of the bracket at a temperature, kJ/mol; none where there is no free energy.
pub(crate) fn bracket_half_width(grid: &[v1::FreeEnergy], temperature_k: f64) -> Option<f64> {
    let energy = energy_at(grid, temperature_k).ok()?;
    Some(0.5 * (energy.below + energy.above))
}

fn defined(point: &v1::FreeEnergy) -> Result<&v1::FreeEnergy, String> {
    if point.defined {
        Ok(point)
    } else {
        Err(format!(
            "no harmonic free energy at {} K: soft modes that may be physical",
            point.temperature_k
        ))
    }
}

fn at_node(point: &v1::FreeEnergy) -> Energy {
    Energy {
        vibrational: point.central_kj_per_mol,
        below: point.central_kj_per_mol - point.lower_kj_per_mol,
        above: point.upper_kj_per_mol - point.central_kj_per_mol,
        pressure: None,
    }
}

#[cfg(test)]
mod tests;
