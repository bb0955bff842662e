//! CatalogService: the shared list of accepted crystals.

use std::sync::Arc;

use tarehouse_assay::pressure::Compression;
use tarehouse_proto::v1;
use tarehouse_store::{PageRequest, RecordFilter, RecordView};
use tonic::{Request, Response, Status};

use crate::core::Core;
use crate::failure::{Breach, Failure, reason};
use crate::names::{self, token};
use crate::ranking::{self, Candidate, LevelKey};
use crate::services::series::pressure;
use crate::{limits, wire};

/// Temperatures of a ranking where the request names none, K.
const STANDARD_TEMPERATURES_K: [f64; 2] = [0.0, 300.0];
/// Records read from the store at a time.
const GATHER_PAGE: usize = 500;

/// CatalogService on the shared parts.
#[derive(Debug)]
pub(crate) struct Service {
    pub(crate) core: Arc<Core>,
}

impl Service {
    async fn message_of(&self, view: &RecordView) -> Result<v1::Record, Failure> {
        let submission = self.core.submission(view.id).await?;
        let manifest = self.core.manifest_facts(&submission).await?;
        let report = self.core.report_facts(&submission).await?;
        Ok(wire::record(view, &submission, &manifest, &report))
    }

    /// All records of a filter, by compound, then form, then name. The store lists them in other orders.
    async fn gather(&self, filter: RecordFilter) -> Result<Vec<RecordView>, Failure> {
        let mut records = self.gather_until(filter, usize::MAX).await?;
        records.sort_by_cached_key(place);
        Ok(records)
    }

    /// Records of a filter, newest first; reads on until there are more than `count_max` or no more.
    async fn gather_until(
        &self,
        filter: RecordFilter,
        count_max: usize,
    ) -> Result<Vec<RecordView>, Failure> {
        let mut records = Vec::new();
        let mut page = PageRequest {
            size: GATHER_PAGE,
            token: String::new(),
        };
        loop {
            let (filter, request) = (filter.clone(), page.clone());
            let found = self
                .core
                .depot
                .ask(move |store| store.list_records(&filter, &request))
                .await?;
            records.extend(found.entries);
            if found.next_token.is_empty() || records.len() > count_max {
                return Ok(records);
            }
            page.token = found.next_token;
        }
    }

    async fn list(
        &self,
        request: v1::ListRecordsRequest,
    ) -> Result<v1::ListRecordsResponse, Failure> {
        let compound = names::optional_text("compound", request.compound)?;
        let form = names::optional_text("form", request.form)?;
        let mark = format!("records {compound:?} {form:?} {}", request.include_retired);
        let after = token::unwrap(&mark, &request.page_token)?;
        let size = names::page_size(request.page_size);
        let records = self
            .gather(RecordFilter {
                compound,
                form,
                include_retired: request.include_retired,
                ..RecordFilter::default()
            })
            .await?;
        let start = records.partition_point(|record| !after.is_empty() && place(record) <= after);
        let rest = records.get(start..).unwrap_or_default();
        let page = rest.get(..size).unwrap_or(rest);
        let mut messages = Vec::with_capacity(page.len());
        for view in page {
            messages.push(self.message_of(view).await?);
        }
        let more = rest.len() > page.len();
        let last = page.last().filter(|_| more).map(place).unwrap_or_default();
        Ok(v1::ListRecordsResponse {
            records: messages,
            next_page_token: token::wrap(&mark, &last),
        })
    }

    async fn compounds(
        &self,
        request: v1::ListCompoundsRequest,
    ) -> Result<v1::ListCompoundsResponse, Failure> {
        let mark = "compounds";
        let page = PageRequest {
            size: names::page_size(request.page_size),
            token: token::unwrap(mark, &request.page_token)?,
        };
        let page = self
            .core
            .depot
            .ask(move |store| store.list_compounds(&page))
            .await?;
        let count = |n: u64| u32::try_from(n).unwrap_or(u32::MAX);
        let compounds = page
            .entries
            .into_iter()
            .map(|compound| v1::Compound {
                compound: compound.name,
                formula: compound.formula,
                form_count: count(compound.form_count),
                record_count: count(compound.record_count),
            })
            .collect();
        let next_page_token = token::wrap(mark, &page.next_token);
        Ok(v1::ListCompoundsResponse {
            compounds,
            next_page_token,
        })
    }

    async fn rank(&self, request: v1::RankFormsRequest) -> Result<Vec<v1::RankTable>, Failure> {
        let compound = names::optional_text("compound", request.compound)?
            .ok_or_else(|| Failure::field("compound", "the name of a compound is wanted"))?;
        let protocol = v1::CellProtocol::try_from(request.cell_protocol)
            .map_err(|_| Failure::field("cell_protocol", "not a known cell protocol"))?;
        let grid = &self.core.config.policy.limits.temperature_grid_k;
        let temperatures = temperatures(request.temperatures_k, grid)?;
        let filter = RecordFilter {
            compound: Some(compound),
            level: request.constants_level.as_deref().map(normalised),
            energy_level: request.energy_level.as_deref().map(normalised),
            ..RecordFilter::default()
        };
        let pressure_gpa = pressure("pressure_gpa", request.pressure_gpa.unwrap_or_default())?;
        let mut candidates = Vec::new();
        for record in &self.ranked_records(filter).await? {
            let candidate = self.candidate(record).await?;
            if protocol == v1::CellProtocol::Unspecified
                || candidate.level.cell_protocol == i32::from(protocol)
            {
                candidates.push(candidate);
            }
        }
        let limit = self.core.config.policy.limits.comparison.compression_max;
        let candidates = ranking::press(candidates, pressure_gpa, limit)?;
        Ok(ranking::rank(candidates, &temperatures))
    }

    /// The records of a ranking. Too many are refused: a table that lacks some would look like one that has them all.
    async fn ranked_records(&self, filter: RecordFilter) -> Result<Vec<RecordView>, Failure> {
        let count_max = self.core.config.ranked_records_max;
        let records = self.gather_until(filter.clone(), count_max).await?;
        let compound = filter.compound.unwrap_or_default();
        if records.len() > count_max {
            return Err(Failure::Exhausted {
                reason: reason::RANKING_TOO_LARGE,
                message: format!(
                    "\"{compound}\" has more than the {count_max} records that one ranking reads; \
                     name an energy level or a constants level"
                ),
            });
        }
        if records.is_empty() {
            let of_compound = RecordFilter {
                compound: Some(compound.clone()),
                ..RecordFilter::default()
            };
            if self.gather_until(of_compound, 0).await?.is_empty() {
                return Err(Failure::NotFound {
                    reason: reason::COMPOUND_NOT_FOUND,
                    message: format!("no record of \"{compound}\"; ListCompounds tells the names"),
                });
            }
        }
        Ok(records)
    }

    async fn candidate(&self, record: &RecordView) -> Result<Candidate, Failure> {
        let submission = self.core.submission(record.id).await?;
        let manifest = self.core.manifest_facts(&submission).await?;
        let report = self.core.report_facts(&submission).await?;
        Ok(Candidate {
            record: names::record(record.id),
            form: record.form.clone(),
            accepted_ms: record.accepted_ms,
            level: LevelKey {
                energy: manifest.energy_level.clone(),
                constants: manifest.constants_level.clone(),
                cell_protocol: manifest.cell_protocol.into(),
            },
            lattice_energy_kj_per_mol: record.summary.lattice_energy_kj_per_mol,
            zero_point_energy_kj_per_mol: report.zero_point_energy_kj_per_mol,
            free_energy: report.free_energy.clone(),
            compression: Compression {
                volume_ang3: report.crystal.volume_per_formula_unit_ang3,
                compressibility_per_gpa: report.crystal.compressibility_per_gpa,
            },
            pressure: Ok(None),
        })
    }
}

/// Sorts records, and marks where a page ended. Control characters stand in no name.
fn place(record: &RecordView) -> String {
    format!(
        "{}\u{1}{}\u{1}{}",
        normalised(&record.compound),
        record.form,
        record.id
    )
}

/// Lower case, single blanks.
pub(super) fn normalised(text: &str) -> String {
    let words: Vec<String> = text.split_whitespace().map(str::to_lowercase).collect();
    words.join(" ")
}

/// The temperatures of a ranking, all on or between those of the grid.
pub(super) fn temperatures(wanted: Vec<f64>, grid: &[f64]) -> Result<Vec<f64>, Failure> {
    if wanted.is_empty() {
        return Ok(STANDARD_TEMPERATURES_K.to_vec());
    }
    if wanted.len() > limits::TEMPERATURES_MAX {
        let message = format!("at most {} are taken", limits::TEMPERATURES_MAX);
        return Err(Failure::field("temperatures_k", message));
    }
    let (first, last) = match (grid.first(), grid.last()) {
        (Some(first), Some(last)) => (*first, *last),
        _ => return Err(Failure::internal("the policy has no temperatures")),
    };
    let breaches: Vec<Breach> = wanted
        .iter()
        .enumerate()
        .filter(|(_, temperature)| !(first..=last).contains(*temperature))
        .map(|(k, temperature)| Breach {
            field: format!("temperatures_k[{k}]"),
            message: format!(
                "{temperature} K is not within {first} K to {last} K; nothing is extrapolated"
            ),
        })
        .collect();
    if breaches.is_empty() {
        return Ok(wanted);
    }
    Err(Failure::Invalid {
        reason: reason::TEMPERATURE_OUTSIDE,
        message: "temperatures outside the grid of the policy".to_owned(),
        breaches,
        unlisted_count: 0,
    })
}

#[tonic::async_trait]
impl v1::catalog_service_server::CatalogService for Service {
    async fn get_record(
        &self,
        request: Request<v1::GetRecordRequest>,
    ) -> Result<Response<v1::GetRecordResponse>, Status> {
        let id = names::parse_record("name", &request.get_ref().name)?;
        let view = self.core.record(id).await?;
        let record = Some(self.message_of(&view).await?);
        Ok(Response::new(v1::GetRecordResponse { record }))
    }

    async fn list_records(
        &self,
        request: Request<v1::ListRecordsRequest>,
    ) -> Result<Response<v1::ListRecordsResponse>, Status> {
        Ok(Response::new(self.list(request.into_inner()).await?))
    }

    async fn list_compounds(
        &self,
        request: Request<v1::ListCompoundsRequest>,
    ) -> Result<Response<v1::ListCompoundsResponse>, Status> {
        Ok(Response::new(self.compounds(request.into_inner()).await?))
    }

    async fn rank_forms(
        &self,
        request: Request<v1::RankFormsRequest>,
    ) -> Result<Response<v1::RankFormsResponse>, Status> {
        let tables = self.rank(request.into_inner()).await?;
        Ok(Response::new(v1::RankFormsResponse { tables }))
    }

    async fn get_series(
        &self,
        request: Request<v1::GetSeriesRequest>,
    ) -> Result<Response<v1::GetSeriesResponse>, Status> {
        let series = Some(self.series(request.into_inner().names).await?);
        Ok(Response::new(v1::GetSeriesResponse { series }))
    }

    async fn get_quasi_harmonic(
        &self,
        request: Request<v1::GetQuasiHarmonicRequest>,
    ) -> Result<Response<v1::GetQuasiHarmonicResponse>, Status> {
        let quasi_harmonic = Some(self.quasi_harmonic(request.into_inner()).await?);
        Ok(Response::new(v1::GetQuasiHarmonicResponse {
            quasi_harmonic,
        }))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn temperatures_keep_to_the_grid() {
        let grid = [0.0, 300.0];
        assert_eq!(temperatures(vec![], &grid), Ok(vec![0.0, 300.0]));
        assert_eq!(
            temperatures(vec![300.0, 0.0, 12.5], &grid),
            Ok(vec![300.0, 0.0, 12.5])
        );
        let Err(Failure::Invalid { breaches, .. }) =
            temperatures(vec![-1.0, 5.0, 300.1, f64::NAN], &grid)
        else {
            panic!("must be refused");
        };
        let fields: Vec<&str> = breaches
            .iter()
            .map(|breach| breach.field.as_str())
            .collect();
        assert_eq!(
            fields,
            [
                "temperatures_k[0]",
                "temperatures_k[2]",
                "temperatures_k[3]"
            ]
        );
        let most = limits::TEMPERATURES_MAX;
        assert!(temperatures(vec![1.0; most], &grid).is_ok());
        assert!(temperatures(vec![1.0; most + 1], &grid).is_err());
    }
}
