//! `tarehouse precheck`: the same examination as the service's, here.

use std::path::Path;

use tarehouse_assay::Policy;
use tarehouse_proto::v1::{GetServerInfoRequest, Report};

use super::{Context, ResumeNote, in_session};
use crate::arguments::{ConnectArgs, PrecheckArgs};
use crate::connect::asking;
use crate::exit::Exit;
use crate::failure::Failure;
use crate::package_folder::{self, CheckedPackage};
use crate::progress::Bar;
use crate::render::report::{Subject, to_text};
use crate::wire_json;

/// Largest policy file, bytes.
const POLICY_BYTES_MAX: u64 = 1024 * 1024;

/// Runs the command.
///
/// # Errors
/// Why no verdict was reached.
pub async fn run(args: PrecheckArgs, context: &mut Context<'_>) -> Result<Exit, Failure> {
    let folder = args.package.clone();
    let package = blocking("reading the package", move || package_folder::read(&folder)).await??;
    let policy = policy(&args, context).await?;
    let subject = subject(&package);
    let bar = context.bars().steps(&package.files.folder);
    let examination = examine(package, policy, &bar);
    let report = tokio::select! {
        report = examination => report?,
        () = context.interrupt.clone().raised() => {
            return Err(Failure::Interrupted { resume: "Nothing was sent.".to_owned() });
        }
    };
    drop(bar);
    let text = if context.console.wants_json(args.format.format) {
        wire_json::pretty(&report)?
    } else {
        to_text(&report, &subject, args.all, context.console.view())
    };
    context.console.data(&text)?;
    Ok(Exit::from_verdict(report.verdict()))
}

fn subject(package: &CheckedPackage) -> Subject {
    let identity = &package.submission.identity;
    Subject {
        compound: identity.compound.clone(),
        form: identity.form.clone(),
        formula: identity.formula.to_string(),
        source: package.files.folder.clone(),
    }
}

async fn examine(package: CheckedPackage, policy: Policy, bar: &Bar) -> Result<Report, Failure> {
    let progress = bar.handle();
    let report = blocking("the examination", move || {
        tarehouse_assay::examine(&package.submission, &policy, &progress)
    })
    .await?
    .map_err(|error| Failure::Internal {
        attempted: "the examination",
        detail: error.to_string(),
    })?;
    Ok(Report::from(report))
}

/// The policy that the arguments name.
async fn policy(args: &PrecheckArgs, context: &mut Context<'_>) -> Result<Policy, Failure> {
    if let Some(path) = &args.policy {
        return parse(&path.display().to_string(), &read_policy(path)?);
    }
    let Some(url) = &args.server else {
        return Policy::built_in().map_err(|error| Failure::Internal {
            attempted: "reading the built-in policy",
            detail: error.to_string(),
        });
    };
    let connect = ConnectArgs {
        server: Some(url.clone()),
        local: None,
    };
    let target = context.target(&connect)?;
    let info = in_session(
        target,
        context,
        &ResumeNote::default(),
        async |session, _| {
            session
                .server()
                .get_server_info(asking(GetServerInfoRequest {}))
                .await
                .map_err(|status| Failure::service("fetch the policy of the server", status))
        },
    )
    .await?
    .into_inner();
    parse(url, &info.policy_text)
}

fn parse(origin: &str, text: &str) -> Result<Policy, Failure> {
    Policy::parse(text).map_err(|error| Failure::Policy {
        origin: origin.to_owned(),
        detail: error.to_string(),
    })
}

fn read_policy(path: &Path) -> Result<String, Failure> {
    let metadata = std::fs::metadata(path).map_err(|error| Failure::file("read", path, error))?;
    if metadata.len() > POLICY_BYTES_MAX {
        return Err(Failure::Policy {
            origin: path.display().to_string(),
            detail: format!(
                "it has {} bytes; at most {POLICY_BYTES_MAX} are read",
                metadata.len()
            ),
        });
    }
    std::fs::read_to_string(path).map_err(|error| Failure::file("read", path, error))
}

/// Runs `work` off the async threads.
///
/// # Errors
/// [`Failure::Internal`] where it panicked.
pub(super) async fn blocking<T: Send + 'static>(
    attempted: &'static str,
    work: impl FnOnce() -> T + Send + 'static,
) -> Result<T, Failure> {
    tokio::task::spawn_blocking(work)
        .await
        .map_err(|error| Failure::Internal {
            attempted,
            detail: error.to_string(),
        })
}
