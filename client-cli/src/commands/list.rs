//! `tarehouse list`: records, submissions or compounds, all pages.

use std::future::Future;

use tarehouse_proto::v1::{
    ListCompoundsRequest, ListCompoundsResponse, ListRecordsRequest, ListRecordsResponse,
    ListSubmissionsRequest, ListSubmissionsResponse, State,
};
use tonic::Status;

use super::{Context, ResumeNote, in_session};
use crate::arguments::{ListArgs, Listed, StateFilter};
use crate::connect::{Session, asking};
use crate::exit::Exit;
use crate::failure::Failure;
use crate::render::lists;
use crate::retry::{Pause, retrying};
use crate::wire_json;

/// Runs the command.
///
/// # Errors
/// The service's answer.
pub async fn run(args: ListArgs, context: &mut Context<'_>) -> Result<Exit, Failure> {
    check_filters(&args)?;
    let target = context.existing_target(&args.connect)?;
    let json = context.console.wants_json(args.format.format);
    let view = context.console.view();
    let work = async |session: &Session, context: &mut Context<'_>| {
        let pause = &context.pause;
        Ok::<_, Failure>(match args.what {
            Listed::Records => {
                let (records, next_page_token) = records(session, &args, pause).await?;
                if json {
                    let all = ListRecordsResponse {
                        records,
                        next_page_token,
                    };
                    wire_json::pretty(&all)?
                } else {
                    lists::records(&records, view)
                }
            }
            Listed::Submissions => {
                let (submissions, next_page_token) = submissions(session, &args, pause).await?;
                if json {
                    let all = ListSubmissionsResponse {
                        submissions,
                        next_page_token,
                    };
                    wire_json::pretty(&all)?
                } else {
                    lists::submissions(&submissions, view)
                }
            }
            Listed::Compounds => {
                let (compounds, next_page_token) = compounds(session, &args, pause).await?;
                if json {
                    let all = ListCompoundsResponse {
                        compounds,
                        next_page_token,
                    };
                    wire_json::pretty(&all)?
                } else {
                    lists::compounds(&compounds, view)
                }
            }
        })
    };
    let text = in_session(target, context, &ResumeNote::default(), work).await?;
    context.console.data(&text)?;
    Ok(Exit::Done)
}

/// A filter that the list does not know would be silently ignored: refuse it.
fn check_filters(args: &ListArgs) -> Result<(), Failure> {
    let given = [
        (
            "--compound",
            args.compound.is_some(),
            &[Listed::Records, Listed::Submissions][..],
        ),
        ("--form", args.form.is_some(), &[Listed::Records]),
        ("--retired", args.retired, &[Listed::Records]),
        ("--state", args.state.is_some(), &[Listed::Submissions]),
        (
            "--contributor-key",
            args.contributor_key.is_some(),
            &[Listed::Submissions],
        ),
    ];
    for (option, is_given, fitting) in given {
        if is_given && !fitting.contains(&args.what) {
            let names: Vec<String> = fitting
                .iter()
                .map(|what| format!("{what:?}").to_lowercase())
                .collect();
            return Err(Failure::Usage {
                what: format!("{option} does not apply to this list"),
                next: format!(
                    "it filters {}: `tarehouse list {} {option} …`.",
                    names.join(" and "),
                    names.join("|")
                ),
            });
        }
    }
    Ok(())
}

/// Gathers pages until there are no more, or enough; the token of the page after the last.
async fn pages<T, F, Fut>(limit: Option<usize>, mut page: F) -> Result<(Vec<T>, String), Status>
where
    F: FnMut(String, u32) -> Fut,
    Fut: Future<Output = Result<(Vec<T>, String), Status>>,
{
    let limit = limit.unwrap_or(usize::MAX);
    let mut all = Vec::new();
    let mut token = String::new();
    while all.len() < limit {
        // 0 = the server's default; never more than what is still wanted.
        let wanted = match limit {
            usize::MAX => 0,
            limit => u32::try_from(limit - all.len()).unwrap_or(0),
        };
        let (entries, next) = page(token.clone(), wanted).await?;
        all.extend(entries);
        if next.is_empty() || next == token {
            return Ok((all, String::new()));
        }
        token = next;
    }
    all.truncate(limit);
    Ok((all, token))
}

async fn records(
    session: &Session,
    args: &ListArgs,
    pause: &Pause,
) -> Result<(Vec<tarehouse_proto::v1::Record>, String), Failure> {
    pages(args.limit, |page_token, page_size| {
        let request = ListRecordsRequest {
            page_size,
            page_token,
            compound: args.compound.clone().unwrap_or_default(),
            form: args.form.clone().unwrap_or_default(),
            include_retired: args.retired,
        };
        async move {
            let answer = retrying(pause, || {
                let mut client = session.catalog();
                let request = request.clone();
                async move { client.list_records(asking(request)).await }
            })
            .await?
            .into_inner();
            Ok((answer.records, answer.next_page_token))
        }
    })
    .await
    .map_err(|status| Failure::service("list the records", status))
}

async fn submissions(
    session: &Session,
    args: &ListArgs,
    pause: &Pause,
) -> Result<(Vec<tarehouse_proto::v1::Submission>, String), Failure> {
    pages(args.limit, |page_token, page_size| {
        let request = ListSubmissionsRequest {
            page_size,
            page_token,
            state: args.state.map_or(State::Unspecified, wire_state).into(),
            compound: args.compound.clone().unwrap_or_default(),
            contributor_key: args.contributor_key.clone().unwrap_or_default(),
        };
        async move {
            let answer = retrying(pause, || {
                let mut client = session.submissions();
                let request = request.clone();
                async move { client.list_submissions(asking(request)).await }
            })
            .await?
            .into_inner();
            Ok((answer.submissions, answer.next_page_token))
        }
    })
    .await
    .map_err(|status| Failure::service("list the submissions", status))
}

async fn compounds(
    session: &Session,
    args: &ListArgs,
    pause: &Pause,
) -> Result<(Vec<tarehouse_proto::v1::Compound>, String), Failure> {
    pages(args.limit, |page_token, page_size| {
        let request = ListCompoundsRequest {
            page_size,
            page_token,
        };
        async move {
            let answer = retrying(pause, || {
                let mut client = session.catalog();
                let request = request.clone();
                async move { client.list_compounds(asking(request)).await }
            })
            .await?
            .into_inner();
            Ok((answer.compounds, answer.next_page_token))
        }
    })
    .await
    .map_err(|status| Failure::service("list the compounds", status))
}

fn wire_state(filter: StateFilter) -> State {
    match filter {
        StateFilter::Draft => State::Draft,
        StateFilter::Queued => State::Queued,
        StateFilter::Accepted => State::Accepted,
        StateFilter::Held => State::Held,
        StateFilter::Rejected => State::Rejected,
        StateFilter::Returned => State::Returned,
        StateFilter::Retired => State::Retired,
        StateFilter::Withdrawn => State::Withdrawn,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Ten numbers on pages of three, or of what is asked for.
    async fn ten(token: String, size: u32) -> Result<(Vec<u32>, String), Status> {
        let start: u32 = token.parse().unwrap_or(0);
        let size = if size == 0 { 3 } else { size.min(3) };
        let end = (start + size).min(10);
        let next = if end < 10 {
            end.to_string()
        } else {
            String::new()
        };
        Ok(((start..end).collect(), next))
    }

    #[tokio::test]
    async fn all_pages_are_gathered_or_as_many_as_wanted() {
        let (all, next) = pages(None, ten).await.unwrap();
        assert_eq!((all, next.as_str()), ((0..10).collect(), ""));
        for limit in [0, 1, 3, 4, 9] {
            let (some, next) = pages(Some(limit), ten).await.unwrap();
            assert_eq!(some.len(), limit);
            assert_eq!(next.is_empty(), limit == 0, "{limit}");
        }
        assert_eq!(pages(Some(10), ten).await.unwrap().1, "");
    }
}
