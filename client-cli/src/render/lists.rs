//! Lists of submissions, records and compounds, and summaries of what was sent.

use prost_types::Timestamp;
use tarehouse_proto::v1::{Compound, Record, Submission};

use super::numbers::{bytes, counted};
use super::table::{Kind, Table, fixed};
use super::text::{Page, View, clean};
use super::words;
use crate::exit::Exit;

/// Submissions, one row each.
pub fn submissions(all: &[Submission], view: View) -> String {
    if all.is_empty() {
        return "No submissions.\n".to_owned();
    }
    let mut table = Table::new(&[
        ("compound", Kind::Words),
        ("form", Kind::Name),
        ("state", Kind::Name),
        ("changed (UTC)", Kind::Name),
        ("submission", Kind::Name),
    ]);
    for submission in all {
        table.row(vec![
            clean(&submission.compound).into_owned(),
            clean(&submission.form).into_owned(),
            words::painted_state(view, submission.state()),
            submission.update_time.map(moment).unwrap_or_default(),
            id_of(&submission.name),
        ]);
    }
    table.drop_until_it_fits(view.width, &["changed (UTC)"]);
    table.to_text(view)
}

/// Records, one row each.
pub fn records(all: &[Record], view: View) -> String {
    if all.is_empty() {
        return "No records.\n".to_owned();
    }
    let mut table = Table::new(&[
        ("compound", Kind::Words),
        ("form", Kind::Name),
        ("symmetry", Kind::Name),
        ("g/cm³", Kind::Number),
        ("static kJ/mol", Kind::Number),
        ("± kJ/mol, 300 K", Kind::Number),
        ("cautions", Kind::Number),
        ("record", Kind::Name),
    ]);
    for record in all {
        let form = clean(&record.form);
        table.row(vec![
            clean(&record.compound).into_owned(),
            if record.retired {
                format!("{form} (retired)")
            } else {
                form.into_owned()
            },
            clean(&record.space_group_symbol).into_owned(),
            fixed(record.density_g_per_cm3, 3),
            fixed(record.lattice_energy_kj_per_mol, 2),
            record
                .bracket_half_width_kj_per_mol
                .map_or_else(|| "not defined".to_owned(), |half| fixed(half, 2)),
            record.caution_count.to_string(),
            id_of(&record.name),
        ]);
    }
    let droppable = [
        "cautions",
        "g/cm³",
        "static kJ/mol",
        "± kJ/mol, 300 K",
        "symmetry",
    ];
    table.drop_until_it_fits(view.width, &droppable);
    table.to_text(view)
}

/// Compounds, one row each.
pub fn compounds(all: &[Compound], view: View) -> String {
    if all.is_empty() {
        return "No compounds.\n".to_owned();
    }
    let mut table = Table::new(&[
        ("compound", Kind::Words),
        ("formula", Kind::Name),
        ("forms", Kind::Number),
        ("records", Kind::Number),
    ]);
    for compound in all {
        table.row(vec![
            clean(&compound.compound).into_owned(),
            clean(&compound.formula).into_owned(),
            compound.form_count.to_string(),
            compound.record_count.to_string(),
        ]);
    }
    table.to_text(view)
}

/// One submission with all that is known of it.
pub fn submission(of: &Submission, view: View) -> String {
    let mut page = Page::new(view);
    page.title(&format!(
        "{} · form {}",
        clean(&of.compound),
        clean(&of.form)
    ));
    page.labelled(2, "submission", 10, &clean(&of.name));
    page.labelled(2, "state", 10, &words::painted_state(view, of.state()));
    if !of.record.is_empty() {
        page.labelled(2, "record", 10, &clean(&of.record));
    }
    for reason in &of.verdict_reasons {
        page.labelled(2, "because", 10, &words::reason(reason));
    }
    for array in of
        .arrays
        .iter()
        .filter(|array| array.committed_bytes < array.size_bytes)
    {
        let text = format!(
            "{}: {} of {}",
            clean(&array.name),
            bytes(array.committed_bytes),
            bytes(array.size_bytes)
        );
        page.labelled(2, "arrived", 10, &text);
    }
    page.finish()
}

/// What became of one folder.
#[derive(Debug, Clone)]
pub struct Outcome {
    /// The folder, as given.
    pub folder: String,
    /// The submission, where one was created.
    pub submission: Option<Submission>,
    /// How it ended.
    pub exit: Exit,
    /// What kept it from a verdict; empty otherwise.
    pub problems: Vec<String>,
}

impl Outcome {
    /// The outcome in one word.
    pub fn word(&self) -> &'static str {
        match (&self.submission, self.problems.is_empty()) {
            (Some(submission), true) => words::state(submission.state()),
            _ if self.exit == Exit::Usage => "invalid",
            _ => "not done",
        }
    }
}

/// The summary that ends a submit.
pub fn summary(outcomes: &[Outcome], view: View) -> String {
    let mut page = Page::new(view);
    let mut table = Table::new(&[
        ("folder", Kind::Words),
        ("outcome", Kind::Name),
        ("submission", Kind::Name),
    ]);
    for outcome in outcomes {
        let state = match &outcome.submission {
            Some(submission) if outcome.problems.is_empty() => {
                words::painted_state(view, submission.state())
            }
            _ => outcome.word().to_owned(),
        };
        table.row(vec![
            clean(&outcome.folder).into_owned(),
            state,
            outcome
                .submission
                .as_ref()
                .map(|submission| id_of(&submission.name))
                .unwrap_or_default(),
        ]);
    }
    table.write(&mut page, 0);
    page.gap();
    for outcome in outcomes {
        if let Some(reason) = main_reason(outcome) {
            page.hanging("", "  ", &format!("{}: {reason}", clean(&outcome.folder)));
        }
    }
    page.gap();
    page.paragraph(0, &totals(outcomes));
    page.finish()
}

/// What weighs most: why there is no verdict, or the first reason of the verdict.
fn main_reason(outcome: &Outcome) -> Option<String> {
    let submission = outcome.submission.as_ref();
    let reasons = submission.map_or(&[][..], |submission| &submission.verdict_reasons);
    let (first, count) = if outcome.problems.is_empty() {
        (words::reason(reasons.first()?), reasons.len())
    } else {
        let first = clean(outcome.problems.first()?).into_owned();
        (first, outcome.problems.len())
    };
    Some(match count {
        1 => first,
        count => format!("{first} (and {} more)", count - 1),
    })
}

fn totals(outcomes: &[Outcome]) -> String {
    let mut counts: Vec<(&'static str, usize)> = Vec::new();
    for outcome in outcomes {
        let word = outcome.word();
        match counts.iter_mut().find(|(known, _)| *known == word) {
            Some((_, count)) => *count += 1,
            None => counts.push((word, 1)),
        }
    }
    let parts: Vec<String> = counts
        .iter()
        .map(|(word, count)| format!("{count} {word}"))
        .collect();
    format!(
        "{}: {}.",
        counted(outcomes.len(), "package", "packages"),
        parts.join(", ")
    )
}

/// The last part of a resource name.
pub fn id_of(name: &str) -> String {
    clean(name.rsplit('/').next().unwrap_or(name)).into_owned()
}

/// A time as `2026-01-31 23:59`, UTC; whole days by the civil calendar.
fn moment(time: Timestamp) -> String {
    let text = time.to_string();
    match text.split_once('T') {
        Some((day, clock)) => format!("{day} {}", clock.get(..5).unwrap_or(clock)),
        None => text,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use tarehouse_proto::v1::State;

    fn outcome(folder: &str, state: State, exit: Exit, reason: &str) -> Outcome {
        Outcome {
            folder: folder.to_owned(),
            submission: Some(Submission {
                name: "submissions/0123456789abcdef0123456789abcdef".to_owned(),
                state: state.into(),
                verdict_reasons: vec![reason.to_owned()],
                ..Submission::default()
            }),
            exit,
            problems: Vec::new(),
        }
    }

    #[test]
    fn a_summary_counts_outcomes_and_shows_the_main_reason() {
        let mut outcomes = vec![
            outcome("a", State::Accepted, Exit::Done, "nothing to say"),
            outcome(
                "b",
                State::Held,
                Exit::Held,
                "a cluster is possibly physical",
            ),
            outcome("c", State::Held, Exit::Held, "the bracket is wide"),
        ];
        outcomes.push(Outcome {
            folder: "d".to_owned(),
            submission: None,
            exit: Exit::Usage,
            problems: vec!["package.toml: missing key".to_owned(), "another".to_owned()],
        });
        let text = summary(&outcomes, View::plain(100));
        assert!(text.contains("4 packages: 1 accepted, 2 held, 1 invalid."));
        assert!(text.contains("c: the bracket is wide"));
        assert!(text.contains("d: package.toml: missing key (and 1 more)"));
    }

    #[test]
    fn records_stay_a_table_on_a_narrow_screen() {
        let record = Record {
            name: format!("records/{}", "a".repeat(32)),
            compound: "velnaric acid".to_owned(),
            form: "II".to_owned(),
            space_group_symbol: "P 2_1/c".to_owned(),
            ..Record::default()
        };
        for width in [60, 80, 120] {
            let text = records(std::slice::from_ref(&record), View::plain(width));
            assert_eq!(text.lines().count(), 3, "{text}");
            assert!(text.contains(&"a".repeat(32)) && text.contains("velnaric acid"));
        }
    }

    #[test]
    fn times_are_shown_to_the_minute() {
        let time = Timestamp {
            seconds: 1_000_000_000,
            nanos: 5,
        };
        // Source: the second 10^9 of the Unix epoch, 2001-09-09T01:46:40Z, common knowledge.
        assert_eq!(moment(time), "2001-09-09 01:46");
    }
}
