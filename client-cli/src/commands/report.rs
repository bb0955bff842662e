//! `tarehouse report`: the report of a submission or record.

use tarehouse_proto::v1::{GetRecordRequest, GetReportRequest, Report};

use super::{Context, ResumeNote, in_session};
use crate::arguments::ReportArgs;
use crate::connect::{Session, asking, resource_name};
use crate::exit::Exit;
use crate::failure::Failure;
use crate::render::report::{Subject, to_text};
use crate::retry::{Pause, retrying};
use crate::waiting;
use crate::wire_json;

/// Runs the command.
///
/// # Errors
/// Why there is no report.
pub async fn run(args: ReportArgs, context: &mut Context<'_>) -> Result<Exit, Failure> {
    let target = context.existing_target(&args.connect)?;
    let name = resource_name("submissions", &args.id);
    let wants_json = context.console.wants_json(args.format.format);
    let work = async |session: &Session, context: &mut Context<'_>| {
        let report = get(session, &name, &context.pause).await?;
        let subject = if wants_json {
            Subject::default()
        } else {
            subject(session, &name, &context.pause).await?
        };
        Ok((report, subject))
    };
    let (report, subject) = in_session(target, context, &ResumeNote::default(), work).await?;
    let text = if wants_json {
        wire_json::pretty(&report)?
    } else {
        to_text(&report, &subject, args.all, context.console.view())
    };
    context.console.data(&text)?;
    Ok(Exit::Done)
}

/// Fetches the report of a submission or record.
///
/// # Errors
/// The service's answer.
pub async fn get(session: &Session, name: &str, pause: &Pause) -> Result<Report, Failure> {
    let request = GetReportRequest {
        name: name.to_owned(),
    };
    retrying(pause, || {
        let mut client = session.submissions();
        let request = request.clone();
        async move { client.get_report(asking(request)).await }
    })
    .await
    .map_err(|status| Failure::service(format!("fetch the report of {name}"), status))?
    .into_inner()
    .report
    .ok_or_else(|| Failure::missing("the report"))
}

async fn subject(session: &Session, name: &str, pause: &Pause) -> Result<Subject, Failure> {
    if name.starts_with("records/") {
        let request = GetRecordRequest {
            name: name.to_owned(),
        };
        let record = session
            .catalog()
            .get_record(asking(request))
            .await
            .map_err(|status| Failure::service(format!("look at {name}"), status))?
            .into_inner()
            .record
            .ok_or_else(|| Failure::missing("the record"))?;
        return Ok(Subject {
            compound: record.compound,
            form: record.form,
            formula: record.formula,
            source: record.name,
        });
    }
    let submission = waiting::get(session, name, pause).await?;
    Ok(Subject {
        compound: submission.compound,
        form: submission.form,
        formula: submission.formula,
        source: submission.name,
    })
}
