//! Cases of the benchmark, one by one.

use std::sync::OnceLock;

use tarehouse_assay::Policy;
use tarehouse_tests::judgement::BenchError;
use tarehouse_tests::judgement::pool::Pool;
use tarehouse_tests::judgement::scoring::{Outcome, Truth, Worst, score};
use tarehouse_tests::judgement::uploads::{Class, Making, classes, make};

const SEED: u64 = 4242;
const PLACES: usize = 6;

fn pool() -> &'static Pool {
    static POOL: OnceLock<Pool> = OnceLock::new();
    POOL.get_or_init(|| Pool::new(SEED, PLACES, 2).unwrap())
}

/// Case number `turn` of a class, at the first attempt that the crystals allow.
fn outcome(class: &Class, turn: u64) -> Outcome {
    const ATTEMPTS: u64 = 40;
    let policy = Policy::built_in().unwrap();
    for attempt in 0..ATTEMPTS {
        match make(pool(), class, SEED, turn, attempt) {
            Ok(case) => return score(&case, class.name, SEED, turn, &policy).unwrap(),
            Err(BenchError::NoCase(_)) => {}
            Err(error) => panic!("{}: {error}", class.name),
        }
    }
    panic!("{}: no case in {ATTEMPTS} attempts", class.name);
}

#[test]
fn blunders_are_named() {
    let wrong: Vec<Class> = classes()
        .into_iter()
        .filter(|c| matches!(c.making, Making::Wrong(_)))
        .collect();
    assert_eq!(wrong.len(), 10);
    for class in &wrong {
        for turn in 0..3 {
            let outcome = outcome(class, turn);
            assert!(
                outcome.named,
                "{} turn {turn} of {} ({}): expected {:?}, found {:?}, verdict {}",
                class.name,
                outcome.crystal,
                outcome.detail,
                outcome.cause_expected,
                outcome.causes,
                outcome.verdict
            );
        }
    }
}

#[test]
fn sound_uploads_raise_no_alarm_and_no_tag() {
    for class in classes()
        .iter()
        .filter(|c| ["clean", "white-low", "pair-symmetrised"].contains(&c.name))
    {
        for turn in 0..2 {
            let outcome = outcome(class, turn);
            assert_eq!(outcome.truth, Truth::Stable);
            assert!(outcome.false_alarms.is_empty(), "{outcome:#?}");
            assert!(outcome.worst <= Worst::NumericalWeak, "{outcome:#?}");
        }
    }
}

#[test]
fn measured_noise_is_the_noise_that_was_put_in() {
    let class = classes()
        .into_iter()
        .find(|c| c.name == "white-low")
        .unwrap();
    let outcome = outcome(&class, 0);
    let ratio = outcome.sigma_found.unwrap() / outcome.sigma.unwrap();
    assert!((0.8..1.25).contains(&ratio), "{ratio}");
}
