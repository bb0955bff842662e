//! `tarehouse series` and `tarehouse volume-series`: several examinations of one form together.

use tarehouse_proto::v1::{
    GetQuasiHarmonicRequest, GetQuasiHarmonicResponse, GetSeriesRequest, GetSeriesResponse,
    QuasiHarmonic, Series,
};

use super::{Context, ResumeNote, in_session};
use crate::arguments::{SeriesArgs, VolumeSeriesArgs};
use crate::connect::{Session, asking, resource_name};
use crate::exit::Exit;
use crate::failure::Failure;
use crate::render;
use crate::retry::{Pause, retrying};
use crate::wire_json;

/// Runs `series`.
///
/// # Errors
/// The service's answer.
pub async fn run(args: SeriesArgs, context: &mut Context<'_>) -> Result<Exit, Failure> {
    let target = context.existing_target(&args.connect)?;
    let request = GetSeriesRequest {
        names: names(&args.members),
    };
    let work = async |session: &Session, context: &mut Context<'_>| {
        get(session, request, &context.pause).await
    };
    let series = in_session(target, context, &ResumeNote::default(), work).await?;
    let text = if context.console.wants_json(args.format.format) {
        wire_json::pretty(&GetSeriesResponse {
            series: Some(series),
        })?
    } else {
        render::series::to_text(&series, context.console.view())
    };
    context.console.data(&text)?;
    Ok(Exit::Done)
}

/// Runs `volume-series`.
///
/// # Errors
/// The service's answer.
pub async fn run_volumes(
    args: VolumeSeriesArgs,
    context: &mut Context<'_>,
) -> Result<Exit, Failure> {
    let target = context.existing_target(&args.connect)?;
    let request = GetQuasiHarmonicRequest {
        names: names(&args.members),
        temperatures_k: args.temperature.clone(),
        pressures_gpa: args.pressure.clone(),
    };
    let work = async |session: &Session, context: &mut Context<'_>| {
        get_volumes(session, request, &context.pause).await
    };
    let found = in_session(target, context, &ResumeNote::default(), work).await?;
    let text = if context.console.wants_json(args.format.format) {
        wire_json::pretty(&GetQuasiHarmonicResponse {
            quasi_harmonic: Some(found),
        })?
    } else {
        render::volumes::to_text(&found, context.console.view())
    };
    context.console.data(&text)?;
    Ok(Exit::Done)
}

fn names(members: &[String]) -> Vec<String> {
    members
        .iter()
        .map(|member| resource_name("submissions", member))
        .collect()
}

async fn get(
    session: &Session,
    request: GetSeriesRequest,
    pause: &Pause,
) -> Result<Series, Failure> {
    retrying(pause, || {
        let mut client = session.catalog();
        let request = request.clone();
        async move { client.get_series(asking(request)).await }
    })
    .await
    .map_err(|status| Failure::service("judge the series", status))?
    .into_inner()
    .series
    .ok_or_else(|| Failure::missing("the series"))
}

async fn get_volumes(
    session: &Session,
    request: GetQuasiHarmonicRequest,
    pause: &Pause,
) -> Result<QuasiHarmonic, Failure> {
    retrying(pause, || {
        let mut client = session.catalog();
        let request = request.clone();
        async move { client.get_quasi_harmonic(asking(request)).await }
    })
    .await
    .map_err(|status| Failure::service("fit the volume series", status))?
    .into_inner()
    .quasi_harmonic
    .ok_or_else(|| Failure::missing("the volume series"))
}
