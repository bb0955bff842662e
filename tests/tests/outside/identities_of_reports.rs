//! Reports of one crystal described in different ways, and of one package on different numbers of threads.

use rand::SeedableRng;
use rand_chacha::ChaCha8Rng;
use rayon::prelude::*;
use tarehouse_assay::{Policy, Report, Submission, Unwatched, examine};
use tarehouse_demo_data::scenario;

use crate::identities::{
    Described, order, permuted, recelled, rotation, shifts, turned, unimodular, wrapped,
};
use crate::tight_binding::submission;

fn report(submission: &Submission) -> Report {
    examine(submission, &Policy::built_in().unwrap(), &Unwatched).unwrap()
}

fn demonstration(name: &str) -> Submission {
    let entries = scenario::entries();
    let entry = entries.iter().find(|entry| entry.name == name).unwrap();
    entry.build().unwrap().0
}

/// Packages with each verdict, with and without soft modes, and one whose index order was swapped.
fn submissions() -> Vec<(&'static str, Submission)> {
    let mut list: Vec<_> = [
        "hcn-i4mm-clean",
        "hcn-i4mm-tiny-swapped",
        "hcn-i4mm-conv222",
        "co2-rounded",
        "nh3-clean",
    ]
    .map(|name| (name, submission(name)))
    .into();
    list.push(("pelquonol-alpha", demonstration("pelquonol-alpha")));
    list
}

fn with((crystal, constants): Described, submission: &Submission) -> Submission {
    Submission {
        crystal,
        constants,
        ..submission.clone()
    }
}

/// The same submission in other words, by name.
fn descriptions(submission: &Submission, seed: u64) -> Vec<(&'static str, Submission)> {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let original = (submission.crystal.clone(), submission.constants.clone());
    let n = original.0.atom_count();
    let turn = rotation(&mut rng);
    let mut settings = submission.settings.clone();
    settings.stress_gpa = settings.stress_gpa.map(|s| turn * s * turn.transpose());
    vec![
        (
            "turned",
            Submission {
                settings,
                ..with(turned(&original, &turn), submission)
            },
        ),
        (
            "permuted",
            with(permuted(&original, &order(&mut rng, n)), submission),
        ),
        (
            "wrapped",
            with(wrapped(&original, &shifts(&mut rng, n)), submission),
        ),
        (
            "recelled",
            with(recelled(&original, &unimodular(&mut rng)), submission),
        ),
    ]
}

/// Largest difference of two central free energies, as a share of the half width of the bracket: noise draws are tied to
/// the order of the array, so that half the bias taken off differs.
const DRAW_SHARE: f64 = 0.15;

fn assert_same_report(what: &str, found: &Report, expected: &Report) {
    let groups = [found, expected].map(|r| r.crystal.space_group_number);
    assert_eq!(groups[0], groups[1], "{what}");
    let tags = |report: &Report| report.soft_modes.iter().map(|m| m.tag).collect::<Vec<_>>();
    assert_eq!(tags(found), tags(expected), "{what}");
    assert_eq!(
        found.free_energy.len(),
        expected.free_energy.len(),
        "{what}"
    );
    for (found, expected) in found.free_energy.iter().zip(&expected.free_energy) {
        assert_eq!(found.defined, expected.defined, "{what}");
        let half_width = 0.5 * (expected.upper_kj_per_mol - expected.lower_kj_per_mol);
        let apart = (found.central_kj_per_mol - expected.central_kj_per_mol).abs();
        let temperature_k = expected.temperature_k;
        assert!(
            apart <= DRAW_SHARE * half_width,
            "{what}: {apart} at {temperature_k} K"
        );
    }
}

#[test]
fn verdicts_do_not_depend_on_the_description() {
    submissions()
        .into_par_iter()
        .for_each(|(name, submission)| {
            let expected = report(&submission);
            for (how, changed) in descriptions(&submission, 17) {
                let found = report(&changed);
                let what = format!("{name} {how}");
                let reasons = (&found.verdict_reasons, &expected.verdict_reasons);
                assert_eq!(found.verdict, expected.verdict, "{what}: {reasons:?}");
                // Multiples of one quantum are such only along the axes they were rounded in: turned, they are noise like any
                // other, and only the verdict stays.
                let loses_its_grid = expected.noise.rounded && how == "turned";
                assert_eq!(
                    found.noise.rounded,
                    expected.noise.rounded && !loses_its_grid,
                    "{what}"
                );
                if !loses_its_grid {
                    assert_same_report(&what, &found, &expected);
                }
            }
        });
}

#[test]
fn reports_do_not_depend_on_the_number_of_threads() {
    for name in ["hcn-i4mm-clean", "co2-rounded", "nh3-clean"] {
        let submission = submission(name);
        let on_threads = |count: usize| {
            let pool = rayon::ThreadPoolBuilder::new()
                .num_threads(count)
                .build()
                .unwrap();
            pool.install(|| report(&submission))
        };
        let expected = on_threads(1);
        for count in [2, 4] {
            let found = on_threads(count);
            assert!(found == expected, "{name} on {count} threads");
            // The shortest digits that read back the same: equal text, equal bits.
            assert!(
                format!("{found:?}") == format!("{expected:?}"),
                "{name} on {count} threads"
            );
        }
    }
}
