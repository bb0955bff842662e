//! `tarehouse rank`: the forms of a compound by free energy.

use tarehouse_proto::v1::{CellProtocol, RankFormsRequest, RankFormsResponse, RankTable};

use super::{Context, ResumeNote, in_session};
use crate::arguments::RankArgs;
use crate::connect::{Session, asking};
use crate::exit::Exit;
use crate::failure::Failure;
use crate::render::numbers::temperature;
use crate::render::rank::to_text;
use crate::retry::{Pause, retrying};
use crate::wire_json;

/// Temperatures closer than this are the same, K.
const SAME_TEMPERATURE_K: f64 = 1e-6;

/// Runs the command.
///
/// # Errors
/// The service's answer; [`Failure::NotFound`] where no table is left.
pub async fn run(args: RankArgs, context: &mut Context<'_>) -> Result<Exit, Failure> {
    let sort_index = sort_index(&args)?;
    let target = context.existing_target(&args.connect)?;
    let work = async |session: &Session, context: &mut Context<'_>| {
        get_pressed(
            session,
            &args.compound,
            &args.temperature,
            args.pressure,
            &context.pause,
        )
        .await
    };
    let all = in_session(target, context, &ResumeNote::default(), work).await?;
    let tables = of_level(all, &args)?;
    let text = if context.console.wants_json(args.format.format) {
        wire_json::pretty(&RankFormsResponse { tables })?
    } else {
        to_text(&title(&args), &tables, sort_index, context.console.view())
    };
    context.console.data(&text)?;
    Ok(Exit::Done)
}

/// Asks for the rankings of a compound, one table per level.
///
/// # Errors
/// The service's answer.
pub async fn get(
    session: &Session,
    compound: &str,
    temperatures_k: &[f64],
    pause: &Pause,
) -> Result<Vec<RankTable>, Failure> {
    get_pressed(session, compound, temperatures_k, None, pause).await
}

async fn get_pressed(
    session: &Session,
    compound: &str,
    temperatures_k: &[f64],
    pressure_gpa: Option<f64>,
    pause: &Pause,
) -> Result<Vec<RankTable>, Failure> {
    let request = RankFormsRequest {
        compound: compound.to_owned(),
        temperatures_k: temperatures_k.to_vec(),
        energy_level: None,
        constants_level: None,
        cell_protocol: CellProtocol::Unspecified.into(),
        pressure_gpa,
    };
    let answer = retrying(pause, || {
        let mut client = session.catalog();
        let request = request.clone();
        async move { client.rank_forms(asking(request)).await }
    })
    .await
    .map_err(|status| Failure::service(format!("rank the forms of {compound}"), status))?;
    Ok(answer.into_inner().tables)
}

/// The compound, with the pressure where there is one.
fn title(args: &RankArgs) -> String {
    match args.pressure {
        Some(pressure) if pressure > 0.0 => format!("{} at {pressure} GPa", args.compound),
        _ => args.compound.clone(),
    }
}

fn sort_index(args: &RankArgs) -> Result<usize, Failure> {
    let Some(wanted) = args.sort_at else {
        return Ok(0);
    };
    args.temperature
        .iter()
        .position(|kelvin| (kelvin - wanted).abs() < SAME_TEMPERATURE_K)
        .ok_or_else(|| Failure::Usage {
            what: format!(
                "--sort-at {} K is not among the temperatures",
                temperature(wanted)
            ),
            next: "add it to --temperature.".to_owned(),
        })
}

fn of_level(all: Vec<RankTable>, args: &RankArgs) -> Result<Vec<RankTable>, Failure> {
    let levels: Vec<String> = all
        .iter()
        .map(|table| {
            format!(
                "\"{}\" with constants of \"{}\"",
                table.energy_level, table.constants_level
            )
        })
        .collect();
    let wanted = args.level.as_deref().unwrap_or_default().to_lowercase();
    let tables: Vec<RankTable> = all
        .into_iter()
        .filter(|table| {
            table.energy_level.to_lowercase().contains(&wanted)
                || table.constants_level.to_lowercase().contains(&wanted)
        })
        .collect();
    if !tables.is_empty() {
        return Ok(tables);
    }
    Err(if levels.is_empty() {
        Failure::NotFound {
            what: format!("no form of {} can be ranked", args.compound),
            next: "see `tarehouse list compounds` for what there is.".to_owned(),
        }
    } else {
        Failure::NotFound {
            what: format!("no level of {} contains \"{wanted}\"", args.compound),
            next: format!("the levels are {}.", levels.join("; ")),
        }
    })
}
