//! Several examinations of one form together: convergence series and volume series.

use prost::Message as _;
use tarehouse_assay::quasi_harmonic::{VOLUMES_MIN, VolumePoint, VolumeSeries, VolumeSeriesError};
use tarehouse_assay::report::Report;
use tarehouse_assay::series::{self, Member, Resolution, Setup};
use tarehouse_proto::package::{self, Manifest};
use tarehouse_proto::v1;
use tarehouse_store::{StoreError, SubmissionView};

use super::catalog::{Service, normalised, temperatures};
use crate::facts::energy_level;
use crate::failure::{Breach, Failure, reason};
use crate::names::Resource;
use crate::{limits, series_wire};

/// What is stored of one member.
struct Examined {
    name: String,
    view: SubmissionView,
    manifest: Manifest,
    report: Report,
}

impl Examined {
    fn setup(&self) -> Setup {
        let manifest = &self.manifest;
        Setup::new(
            &manifest.settings,
            &manifest.declaration,
            &manifest.supercell,
            &manifest.crystal,
            manifest.permittivity.is_some(),
        )
    }

    /// What must agree before two examinations are of one form.
    fn subject(&self) -> (String, String, &str) {
        let view = &self.view;
        (
            normalised(&view.compound),
            normalised(&view.form),
            &view.formula,
        )
    }

    fn energy_level(&self) -> String {
        energy_level(
            self.manifest.energy.level.as_ref(),
            &self.manifest.settings.level,
        )
    }
}

impl Service {
    /// A convergence series.
    pub(super) async fn series(&self, names: Vec<String>) -> Result<v1::Series, Failure> {
        let members = self.examined(names, 2).await?;
        let resolution = Resolution::of(&self.core.config.policy.limits);
        let judged: Vec<Member> = members
            .iter()
            .map(|member| Member {
                name: member.name.clone(),
                setup: member.setup(),
                free_energy: member.report.free_energy.clone(),
                lowest_branches: member.report.lowest_branches.clone(),
            })
            .collect();
        let found = series::judge(&judged, &resolution);
        let first = members.first().map(|member| &member.view);
        Ok(v1::Series {
            compound: first.map(|view| view.compound.clone()).unwrap_or_default(),
            form: first.map(|view| view.form.clone()).unwrap_or_default(),
            members: found
                .order
                .iter()
                .filter_map(|k| members.get(*k))
                .map(|member| member.name.clone())
                .collect(),
            settings: found
                .differing
                .into_iter()
                .map(series_wire::setting)
                .collect(),
            quantities: found
                .quantities
                .into_iter()
                .map(series_wire::quantity)
                .collect(),
            conclusion: series_wire::conclusion(Some(found.conclusion)).into(),
            reason: found.reason,
        })
    }

    /// Quasi-harmonic free enthalpies.
    pub(super) async fn quasi_harmonic(
        &self,
        request: v1::GetQuasiHarmonicRequest,
    ) -> Result<v1::QuasiHarmonic, Failure> {
        let grid = &self.core.config.policy.limits.temperature_grid_k;
        let temperatures = temperatures(request.temperatures_k, grid)?;
        let pressures = pressures(request.pressures_gpa)?;
        let mut members = self.examined(request.names, VOLUMES_MIN).await?;
        let volume = |member: &Examined| member.report.crystal.volume_per_formula_unit_ang3;
        members.sort_by(|a, b| volume(a).total_cmp(&volume(b)));
        one_level(&members)?;
        let points: Vec<VolumePoint> = members
            .iter()
            .map(|member| VolumePoint {
                volume_ang3: volume(member),
                static_kj_per_mol: member.report.crystal.lattice_energy_kj_per_mol,
                free_energy: member.report.free_energy.clone(),
            })
            .collect();
        let fitted = VolumeSeries::new(&points).map_err(|errors| unfit(&errors, &members))?;
        let mut answers = Vec::new();
        for &temperature in &temperatures {
            for &pressure in &pressures {
                answers.push((temperature, pressure, fitted.at(temperature, pressure)));
            }
        }
        let nowhere = answers.iter().all(|(_, _, answer)| answer.is_err());
        if let (true, Some((_, _, Err(error)))) = (nowhere, answers.first()) {
            return Err(Failure::forbidden(
                reason::VOLUMES_EXCEEDED,
                error.to_string(),
            ));
        }
        let setups: Vec<Setup> = members.iter().map(Examined::setup).collect();
        let others = series::differing_besides_geometry(&setups);
        let Some(first) = members.first() else {
            return Err(Failure::internal("a volume series without members"));
        };
        Ok(v1::QuasiHarmonic {
            compound: first.view.compound.clone(),
            form: first.view.form.clone(),
            energy_level: first.energy_level(),
            constants_level: first.manifest.settings.level.key(),
            members: members
                .iter()
                .zip(&points)
                .map(|(member, point)| v1::VolumeMember {
                    name: member.name.clone(),
                    volume_per_formula_unit_ang3: point.volume_ang3,
                    static_kj_per_mol: point.static_kj_per_mol,
                })
                .collect(),
            settings: others.into_iter().map(series_wire::setting).collect(),
            points: answers
                .into_iter()
                .map(|(t, p, answer)| series_wire::point(t, p, answer))
                .collect(),
        })
    }

    /// Reports and manifests of the members, all of one form.
    async fn examined(
        &self,
        names: Vec<String>,
        at_least: usize,
    ) -> Result<Vec<Examined>, Failure> {
        if !(at_least..=limits::SERIES_MEMBERS_MAX).contains(&names.len()) {
            let most = limits::SERIES_MEMBERS_MAX;
            let message = format!("{at_least} to {most} names are wanted, not {}", names.len());
            return Err(Failure::field("names", message));
        }
        let mut members: Vec<Examined> = Vec::with_capacity(names.len());
        for (k, name) in names.into_iter().enumerate() {
            let field = format!("names[{k}]");
            let member = self.one_examined(&field, name).await?;
            if let Some(known) = members.iter().find(|known| known.view.id == member.view.id) {
                let message = format!("the same submission as {}", known.name);
                return Err(Failure::field(&field, message));
            }
            members.push(member);
        }
        let Some(first) = members.first() else {
            return Ok(members);
        };
        let breaches = breaches(&members, |member| {
            (member.subject() != first.subject()).then(|| {
                let view = &member.view;
                format!("form {} of {} ({})", view.form, view.compound, view.formula)
            })
        });
        if breaches.is_empty() {
            return Ok(members);
        }
        let view = &first.view;
        let message = format!(
            "a series is of one form; {} is form {} of {} ({})",
            first.name, view.form, view.compound, view.formula
        );
        Err(Failure::Invalid {
            reason: reason::SERIES_MIXED,
            message,
            breaches,
            unlisted_count: 0,
        })
    }

    async fn one_examined(&self, field: &str, name: String) -> Result<Examined, Failure> {
        let id = match Resource::parse(field, &name)? {
            Resource::Submission(id) => id,
            Resource::Record(id) => {
                self.core.record(id).await?;
                id
            }
        };
        let view = self.core.submission(id).await?;
        let stored = self
            .core
            .depot
            .ask_plainly(move |store| Ok((store.read_report(id)?, store.read_manifest(id)?)))
            .await?;
        let (report, manifest) = stored.map_err(|error| match error {
            StoreError::NotThereYet { .. } => Failure::NotFound {
                reason: reason::REPORT_NOT_FOUND,
                message: format!("{name} has not been examined yet"),
            },
            other => Failure::from(other),
        })?;
        let decoded = self
            .core
            .compute(move || {
                let report = v1::Report::decode(report.as_slice()).map_err(|e| e.to_string())?;
                let report = Report::try_from(report).map_err(|e| e.to_string())?;
                let summary = package::check_manifest(&manifest).map_err(|e| e.to_string())?;
                Ok::<_, String>((report, summary.manifest))
            })
            .await?;
        let (report, manifest) = decoded.map_err(Failure::internal)?;
        Ok(Examined {
            name,
            view,
            manifest,
            report,
        })
    }
}

/// One violation for each member that `fault` finds fault with. Members may be in another order than asked for, so that
/// names, not places, point at them.
fn breaches(members: &[Examined], fault: impl Fn(&Examined) -> Option<String>) -> Vec<Breach> {
    members
        .iter()
        .filter_map(|member| {
            let message = format!("{}: {}", member.name, fault(member)?);
            Some(Breach {
                field: "names".to_owned(),
                message,
            })
        })
        .collect()
}

fn one_level(members: &[Examined]) -> Result<(), Failure> {
    let Some(first) = members.first() else {
        return Ok(());
    };
    let level = |member: &Examined| (member.energy_level(), member.manifest.settings.level.key());
    let wanted = level(first);
    let breaches = breaches(members, |member| {
        let (energy, constants) = level(member);
        let other = (energy != wanted.0) || (constants != wanted.1);
        other.then(|| format!("energy of \"{energy}\", constants of \"{constants}\""))
    });
    if breaches.is_empty() {
        return Ok(());
    }
    let message = format!(
        "energies of different levels are never compared; {} has an energy of \"{}\" and constants of \"{}\"",
        first.name, wanted.0, wanted.1
    );
    Err(Failure::Invalid {
        reason: reason::SERIES_MIXED,
        message,
        breaches,
        unlisted_count: 0,
    })
}

fn unfit(errors: &[VolumeSeriesError], members: &[Examined]) -> Failure {
    let name = |k: usize| members.get(k).map_or("", |member| member.name.as_str());
    let breaches = errors
        .iter()
        .map(|error| {
            let message = match error {
                VolumeSeriesError::Member { member, detail } => {
                    format!("{} {detail}", name(*member))
                }
                VolumeSeriesError::SameVolume {
                    first,
                    second,
                    volume_ang3,
                } => format!(
                    "{} and {} have the same volume, {volume_ang3:.3} Å³",
                    name(*first),
                    name(*second)
                ),
                other => other.to_string(),
            };
            Breach {
                field: "names".to_owned(),
                message,
            }
        })
        .collect();
    Failure::Forbidden {
        reason: reason::VOLUME_SERIES_UNFIT,
        message: "the members make no volume series".to_owned(),
        breaches,
    }
}

/// The pressures of a request.
fn pressures(wanted: Vec<f64>) -> Result<Vec<f64>, Failure> {
    if wanted.is_empty() {
        return Ok(vec![0.0]);
    }
    if wanted.len() > limits::PRESSURES_MAX {
        let message = format!("at most {} are taken", limits::PRESSURES_MAX);
        return Err(Failure::field("pressures_gpa", message));
    }
    for (k, pressure_gpa) in wanted.iter().enumerate() {
        pressure(&format!("pressures_gpa[{k}]"), *pressure_gpa)?;
    }
    Ok(wanted)
}

/// A pressure from 0 to the largest taken, GPa.
pub(super) fn pressure(field: &str, pressure_gpa: f64) -> Result<f64, Failure> {
    if (0.0..=limits::PRESSURE_MAX_GPA).contains(&pressure_gpa) {
        return Ok(pressure_gpa);
    }
    let message = format!(
        "{pressure_gpa} GPa is not within 0 to {} GPa",
        limits::PRESSURE_MAX_GPA
    );
    Err(Failure::field(field, message))
}
