//! `tarehouse demo`: the built-in packages through a fresh service, their verdicts, and the rankings that follow.

use std::path::{Path, PathBuf};

use include_dir::{Dir, include_dir};
use tarehouse_proto::v1::{Report, Severity, State, Submission};

use super::precheck::blocking;
use super::rank;
use super::report;
use super::submit::send_package;
use super::{Context, ResumeNote, in_session};
use crate::arguments::DemoArgs;
use crate::connect::{Session, Target};
use crate::exit::Exit;
use crate::failure::Failure;
use crate::package_folder;
use crate::render::numbers::counted;
use crate::render::rank::{order_changes, write_table};
use crate::render::text::{Page, Style, View, clean};
use crate::render::words;
use crate::waiting;

/// The packages, as they were when this program was built.
static PACKAGES: Dir<'static> = include_dir!("$CARGO_MANIFEST_DIR/../demo-data/packages");

/// Temperatures of the rankings, K.
const TEMPERATURES_K: [f64; 4] = [0.0, 100.0, 300.0, 500.0];

/// Runs the command.
///
/// # Errors
/// Where the service in this process failed; a package that is rejected is what the demo is about.
pub async fn run(args: DemoArgs, context: &mut Context<'_>) -> Result<Exit, Failure> {
    if PACKAGES.dirs().next().is_none() {
        return Err(Failure::Internal {
            attempted: "the demo",
            detail: "this program was built without the demo packages".to_owned(),
        });
    }
    let store = Store::prepare(args.keep.as_deref())?;
    let note = ResumeNote::default();
    note.set("The demo starts afresh each time.");
    let target = Target::Local(store.dir().to_owned());
    let kept = args.keep.clone();
    in_session(target, context, &note, async |session, context| {
        show(session, context, kept.as_deref()).await
    })
    .await?;
    Ok(Exit::Done)
}

/// Where the demo keeps its store: a folder that vanishes, or one to keep.
enum Store {
    Passing(tempfile::TempDir),
    Kept(PathBuf),
}

impl Store {
    fn prepare(keep: Option<&Path>) -> Result<Self, Failure> {
        let Some(dir) = keep else {
            return tempfile::tempdir()
                .map(Self::Passing)
                .map_err(|error| Failure::file("write in", &std::env::temp_dir(), error));
        };
        std::fs::create_dir_all(dir).map_err(|error| Failure::file("create", dir, error))?;
        let mut entries =
            std::fs::read_dir(dir).map_err(|error| Failure::file("look into", dir, error))?;
        if entries.next().is_some() {
            return Err(Failure::Usage {
                what: format!("{} is not empty", dir.display()),
                next: "the demo needs a fresh folder: give --keep another one.".to_owned(),
            });
        }
        Ok(Self::Kept(dir.to_owned()))
    }

    fn dir(&self) -> &Path {
        match self {
            Self::Passing(dir) => dir.path(),
            Self::Kept(dir) => dir,
        }
    }
}

async fn show(
    session: &Session,
    context: &mut Context<'_>,
    kept: Option<&Path>,
) -> Result<(), Failure> {
    let view = context.console.view();
    context.console.data(&opening(view))?;
    let mut submissions = Vec::new();
    let mut folders: Vec<&'static Dir<'static>> = PACKAGES.dirs().collect();
    folders.sort_by_key(|folder| folder.path());
    let bars = context.bars();
    let pause = context.pause.clone();
    for folder in folders {
        let package = blocking("reading a package", move || {
            package_folder::read_built_in(folder)
        })
        .await??;
        let sent = send_package(session, &package.files, &bars, &pause).await?;
        let submission = waiting::until_final(session, &sent.name, &bars, None, &pause).await?;
        let report = report::get(session, &submission.name, &pause).await?;
        let text = verdict(&package.files.folder, &submission, &report, view);
        context.console.data(&text)?;
        submissions.push(submission);
    }
    let mut compounds: Vec<String> = submissions
        .iter()
        .filter(|submission| submission.state() == State::Accepted)
        .map(|submission| submission.compound.clone())
        .collect();
    compounds.sort();
    compounds.dedup();
    for compound in compounds {
        let text = ranking(session, context, &compound, &submissions).await?;
        context.console.data(&text)?;
    }
    context.console.data(&closing(&submissions, kept, view))?;
    Ok(())
}

fn opening(view: View) -> String {
    let mut page = Page::new(view);
    page.title(&format!(
        "{} of invented crystals, sent one by one to a service inside this process",
        counted(PACKAGES.dirs().count(), "package", "packages")
    ));
    page.paragraph(
        0,
        "Each is examined under the built-in policy: does it balance, how noisy is it, what do its soft modes mean, how \
         well is its free energy known?",
    );
    page.finish()
}

fn verdict(folder: &str, submission: &Submission, report: &Report, view: View) -> String {
    let mut page = Page::new(view);
    let title = format!(
        "{} · form {} ({})",
        clean(&submission.compound),
        clean(&submission.form),
        clean(folder)
    );
    page.line("");
    page.hanging("", "  ", &view.paint(Style::Strong, &title));
    let word = view.paint(
        words::verdict_style(submission.verdict()),
        &words::state(submission.state()).to_uppercase(),
    );
    let said = match submission.verdict_reasons.first() {
        Some(reason) => format!(": {}", words::reason(reason)),
        None => accepted_words(report),
    };
    page.hanging("  ", "    ", &format!("{word}{said}"));
    let more = submission.verdict_reasons.len().saturating_sub(1);
    if more > 0 {
        page.paragraph(
            4,
            &format!("and {}.", counted(more, "more reason", "more reasons")),
        );
    }
    page.finish()
}

/// What to say of an accepted package: its first caution, if it has any.
fn accepted_words(report: &Report) -> String {
    let mut cautions = report
        .findings
        .iter()
        .filter(|finding| finding.severity() == Severity::Caution);
    match cautions.next() {
        None => words::verdict_sentence(report.verdict(), 0),
        Some(first) => format!(
            ", with {}: {} (rule {})",
            counted(1 + cautions.count(), "caution", "cautions"),
            clean(&first.message),
            clean(&first.rule)
        ),
    }
}

async fn ranking(
    session: &Session,
    context: &Context<'_>,
    compound: &str,
    submissions: &[Submission],
) -> Result<String, Failure> {
    let view = context.console.view();
    let tables = rank::get(session, compound, &TEMPERATURES_K, &context.pause).await?;
    let mut page = Page::new(view);
    page.line("");
    page.title(&format!(
        "Ranking of {}: free energy above the lowest form, kJ/mol per formula unit",
        clean(compound)
    ));
    for table in &tables {
        page.gap();
        write_table(&mut page, table, 0);
    }
    if tables.iter().all(|table| order_changes(table).is_empty()) {
        page.paragraph(2, "No forms change their order between these temperatures.");
    }
    let left_out: Vec<String> = submissions
        .iter()
        .filter(|submission| submission.compound == compound && submission.record.is_empty())
        .map(|submission| {
            let state = words::state(submission.state());
            format!("form {} ({state})", clean(&submission.form))
        })
        .collect();
    if !left_out.is_empty() {
        page.hanging(
            "  ",
            "    ",
            &format!("Not ranked: {}.", left_out.join(", ")),
        );
    }
    Ok(page.finish())
}

fn closing(submissions: &[Submission], kept: Option<&Path>, view: View) -> String {
    let count = |state| {
        submissions
            .iter()
            .filter(|submission| submission.state() == state)
            .count()
    };
    let mut page = Page::new(view);
    page.line("");
    page.paragraph(
        0,
        &format!(
            "{}: {} accepted, {} held, {} rejected. In square brackets: where the harmonic value lies, given the \
             upload's own noise, aliasing and residual force.",
            counted(submissions.len(), "package", "packages"),
            count(State::Accepted),
            count(State::Held),
            count(State::Rejected)
        ),
    );
    match (kept, submissions.first()) {
        (Some(dir), Some(submission)) => {
            let id = submission.name.trim_start_matches("submissions/");
            let dir = dir.display();
            page.paragraph(0, "Go on:");
            page.hanging("  ", "    ", &format!("tarehouse list submissions --local {dir}"));
            page.hanging("  ", "    ", &format!("tarehouse report {id} --local {dir}"));
        }
        _ => page.paragraph(
            0,
            "The store of this demo is gone again; `tarehouse demo --keep DIR` keeps it, to look at reports.",
        ),
    }
    page.finish()
}
