//! Adds up outcomes into compact tables, figures to reach, and a list of failures.

use std::fmt::Write as _;

use crate::judgement::TEMPERATURES_K;
use crate::judgement::depth::depth_words;
use crate::judgement::scoring::{Outcome, Truth, Worst};
use crate::judgement::uploads::classes;

/// Largest share of stable crystals that may be called possibly physical, weakly.
const FALSE_WEAK_MAX: f64 = 0.01;
/// Least share of decidable instabilities found.
const FOUND_MIN: f64 = 0.98;
/// Least coverage over all stable classes, and in each.
const COVERAGE_MIN: (f64, f64) = (0.95, 0.90);
/// Largest median half width, kJ/mol, and where it is asked: σ in eV/Å², alias in kJ/mol.
const WIDTH_MAX: f64 = 0.3;
const WIDTH_SIGMA: f64 = 2e-3;
const WIDTH_ALIAS: f64 = 0.1;
/// Least share of blunders named.
const NAMED_MIN: f64 = 0.98;
/// Place of 300 K among the temperatures.
const AT_300_K: usize = 2;

/// The tables of one range of seeds.
pub fn tables(title: &str, outcomes: &[Outcome]) -> String {
    let mut text = format!("== {title}: {} uploads ==\n", outcomes.len());
    text.push_str(&tags(outcomes));
    text.push_str(&bracket_table(outcomes));
    text.push_str(&blunder_table(outcomes));
    text.push_str(&leans(outcomes));
    text.push_str(&figures(outcomes));
    text.push_str(&failures(outcomes));
    text
}

fn of_class<'a>(outcomes: &'a [Outcome], class: &'a str) -> impl Iterator<Item = &'a Outcome> {
    outcomes.iter().filter(move |o| o.class == class)
}

fn share(part: usize, whole: usize) -> f64 {
    part as f64 / whole.max(1) as f64
}

fn median(mut values: Vec<f64>) -> f64 {
    values.sort_by(f64::total_cmp);
    values.get(values.len() / 2).copied().unwrap_or(f64::NAN)
}

const COLUMNS: [Worst; 5] = [
    Worst::None,
    Worst::NumericalStrong,
    Worst::NumericalWeak,
    Worst::PhysicalWeak,
    Worst::PhysicalStrong,
];

fn tags(outcomes: &[Outcome]) -> String {
    let mut text = String::from(
        "\n1. worst tag               no soft  num/strong  num/weak  phys/weak  phys/strong\n",
    );
    let mut row = |name: &str, chosen: &[&Outcome]| {
        if chosen.is_empty() {
            return;
        }
        let count = |worst| chosen.iter().filter(|o| o.worst == worst).count();
        let [a, b, c, d, e] = COLUMNS.map(count);
        let _ = writeln!(text, "{name:26} {a:7}  {b:10}  {c:8}  {d:9}  {e:11}");
    };
    for class in classes() {
        let stable: Vec<&Outcome> = of_class(outcomes, class.name)
            .filter(|o| o.truth == Truth::Stable)
            .collect();
        row(class.name, &stable);
    }
    for class in classes() {
        for (truth, word) in [
            (Truth::Unstable, "decidable"),
            (Truth::Undecidable, "undecidable"),
        ] {
            let chosen: Vec<&Outcome> = of_class(outcomes, class.name)
                .filter(|o| o.truth == truth)
                .collect();
            let short = class.name.strip_prefix("soft-").unwrap_or(class.name);
            row(&format!("{short}, {word}"), &chosen);
        }
    }
    for (truth, name) in [
        (Truth::Stable, "ALL STABLE"),
        (Truth::Unstable, "ALL DECIDABLE UNSTABLE"),
    ] {
        let chosen: Vec<&Outcome> = outcomes.iter().filter(|o| o.truth == truth).collect();
        row(name, &chosen);
    }
    text
}

fn coverage(chosen: &[&Outcome], temperature: usize) -> f64 {
    let brackets: Vec<bool> = chosen
        .iter()
        .filter_map(|o| o.brackets.get(temperature).map(|b| b.covered))
        .collect();
    share(brackets.iter().filter(|c| **c).count(), brackets.len())
}

fn bracket_table(outcomes: &[Outcome]) -> String {
    let mut text = String::from(
        "\n2. bracket                 cases  covered at 10, 100, 300, 500 K   median half width at 10, 100, 300, 500 K  \
         median |error|, largest at 300 K\n",
    );
    let mut row = |name: &str, chosen: &[&Outcome]| {
        if chosen.is_empty() {
            return;
        }
        let _ = write!(text, "{name:26} {:5} ", chosen.len());
        for t in 0..TEMPERATURES_K.len() {
            let _ = write!(text, " {:6.3}", coverage(chosen, t));
        }
        text.push_str("    ");
        for t in 0..TEMPERATURES_K.len() {
            let _ = write!(text, " {:7.3}", median(widths(chosen, t)));
        }
        let errors: Vec<f64> = chosen
            .iter()
            .filter_map(|o| o.brackets.get(AT_300_K).map(|b| b.error.abs()))
            .filter(|e| e.is_finite())
            .collect();
        let largest = errors.iter().copied().fold(0.0, f64::max);
        let _ = writeln!(text, "      {:8.3} {largest:8.3}", median(errors));
    };
    for class in classes() {
        let stable: Vec<&Outcome> = of_class(outcomes, class.name)
            .filter(|o| o.truth == Truth::Stable)
            .collect();
        row(class.name, &stable);
    }
    let all: Vec<&Outcome> = outcomes
        .iter()
        .filter(|o| o.truth == Truth::Stable)
        .collect();
    row("ALL STABLE", &all);
    text
}

fn widths(chosen: &[&Outcome], temperature: usize) -> Vec<f64> {
    chosen
        .iter()
        .filter_map(|o| o.brackets.get(temperature).map(|b| b.half_width))
        .filter(|w| w.is_finite())
        .collect()
}

fn blunder_table(outcomes: &[Outcome]) -> String {
    let mut text =
        String::from("\n3. blunder                 cases  named  rejected, other name  missed\n");
    for class in classes() {
        let chosen: Vec<&Outcome> = of_class(outcomes, class.name)
            .filter(|o| o.truth == Truth::Blunder)
            .collect();
        if chosen.is_empty() {
            continue;
        }
        let named = chosen.iter().filter(|o| o.named).count();
        let other = chosen
            .iter()
            .filter(|o| !o.named && o.verdict == "reject")
            .count();
        let missed = chosen.len() - named - other;
        let _ = writeln!(
            text,
            "{:26} {:5}  {named:5}  {other:20}  {missed:6}",
            class.name,
            chosen.len()
        );
    }
    text
}

type Lean = fn(&Outcome) -> Option<f64>;

/// How well the reference of [`crate::judgement::lean`] tells rearranged arrays from sound ones.
fn leans(outcomes: &[Outcome]) -> String {
    let mut text =
        String::from("\nlean towards another reading (reference)  least, median, largest\n");
    let mut row = |name: &str, chosen: &dyn Fn(&Outcome) -> bool, lean: Lean| {
        let mut values: Vec<f64> = outcomes
            .iter()
            .filter(|o| chosen(o))
            .filter_map(lean)
            .collect();
        values.sort_by(f64::total_cmp);
        if let (Some(least), Some(largest)) = (values.first(), values.last()) {
            let middle = values[values.len() / 2];
            let count = values.len();
            let _ = writeln!(
                text,
                "{name:40} {least:6.2} {middle:6.2} {largest:6.2}  of {count}"
            );
        }
    };
    let sound = |o: &Outcome| o.truth != Truth::Blunder;
    let swapped =
        |o: &Outcome| o.class == "swapped-index-order" || o.class == "negated-translations";
    let exchanged = |o: &Outcome| o.class == "wrong-supercell";
    let (to_negated, to_exchanged): (Lean, Lean) = (|o| o.lean_negated, |o| o.lean_exchanged);
    row("negated translations, sound uploads", &sound, to_negated);
    row(
        "negated translations, swapped uploads",
        &swapped,
        to_negated,
    );
    row("exchanged axes, sound uploads", &sound, to_exchanged);
    row("exchanged axes, wrong supercells", &exchanged, to_exchanged);
    text
}

fn figures(outcomes: &[Outcome]) -> String {
    let mut text = String::from("\nfigures to reach\n");
    let mut line = |name: &str, value: String, reached: bool| {
        let mark = if reached { "reached" } else { "MISSED" };
        let _ = writeln!(text, "{name:64} {value:>20}  {mark}");
    };
    tag_figures(outcomes, &mut line);
    bracket_figures(outcomes, &mut line);
    blunder_figures(outcomes, &mut line);
    text
}

fn tag_figures(outcomes: &[Outcome], line: &mut impl FnMut(&str, String, bool)) {
    let stable: Vec<&Outcome> = with(outcomes, Truth::Stable);
    let count = |chosen: &[&Outcome], worst| chosen.iter().filter(|o| o.worst == worst).count();
    let strong = count(&stable, Worst::PhysicalStrong);
    let weak = count(&stable, Worst::PhysicalWeak);
    line(
        "stable called possibly physical, strong: none",
        format!("{strong} of {}", stable.len()),
        strong == 0,
    );
    line(
        "stable called possibly physical, weak: at most 1 %",
        format!("{weak} of {}", stable.len()),
        share(weak, stable.len()) <= FALSE_WEAK_MAX,
    );
    let unstable: Vec<&Outcome> = with(outcomes, Truth::Unstable);
    let found = unstable
        .iter()
        .filter(|o| o.worst >= Worst::PhysicalWeak)
        .count();
    line(
        "decidable instabilities found: at least 98 %",
        format!("{found} of {}", unstable.len()),
        unstable.is_empty() || share(found, unstable.len()) >= FOUND_MIN,
    );
}

fn bracket_figures(outcomes: &[Outcome], line: &mut impl FnMut(&str, String, bool)) {
    let stable: Vec<&Outcome> = with(outcomes, Truth::Stable);
    for (t, temperature) in TEMPERATURES_K.iter().enumerate() {
        let all = coverage(&stable, t);
        let worst = classes()
            .iter()
            .filter_map(|class| {
                let chosen: Vec<&Outcome> = stable
                    .iter()
                    .filter(|o| o.class == class.name)
                    .copied()
                    .collect();
                (!chosen.is_empty()).then(|| coverage(&chosen, t))
            })
            .fold(1.0, f64::min);
        line(
            &format!("coverage at {temperature} K: at least 0.95, in each class 0.90"),
            format!("{all:.3}, worst {worst:.3}"),
            stable.is_empty() || (all >= COVERAGE_MIN.0 && worst >= COVERAGE_MIN.1),
        );
    }
    let narrow: Vec<&Outcome> = stable
        .iter()
        .filter(|o| o.sigma.is_some_and(|s| s <= WIDTH_SIGMA))
        .filter(|o| o.alias.is_some_and(|a| a.sharing < WIDTH_ALIAS) && o.class != "unrelaxed")
        .copied()
        .collect();
    let width = median(widths(&narrow, AT_300_K));
    line(
        "median half width at 300 K, σ ≤ 2e-3, alias < 0.1: at most 0.3",
        format!("{width:.3} over {}", narrow.len()),
        narrow.is_empty() || width <= WIDTH_MAX,
    );
}

fn blunder_figures(outcomes: &[Outcome], line: &mut impl FnMut(&str, String, bool)) {
    let blunders: Vec<&Outcome> = with(outcomes, Truth::Blunder);
    let named = blunders.iter().filter(|o| o.named).count();
    line(
        "blunders named: at least 98 %",
        format!("{named} of {}", blunders.len()),
        blunders.is_empty() || share(named, blunders.len()) >= NAMED_MIN,
    );
    let alarms = outcomes
        .iter()
        .filter(|o| !o.false_alarms.is_empty())
        .count();
    let sound = outcomes.len() - blunders.len();
    line(
        "false alarms of blunders in sound uploads: none",
        format!("{alarms} of {sound}"),
        alarms == 0,
    );
}

fn with(outcomes: &[Outcome], truth: Truth) -> Vec<&Outcome> {
    outcomes.iter().filter(|o| o.truth == truth).collect()
}

fn failures(outcomes: &[Outcome]) -> String {
    let mut text = String::from("\nfailures\n");
    for outcome in outcomes {
        for failure in faults(outcome) {
            let _ = writeln!(
                text,
                "{} seed {} case {} [{}, {} atoms, {:?}, σ {} found {}, {}] {failure}",
                outcome.class,
                outcome.seed,
                outcome.turn,
                outcome.crystal,
                outcome.atom_count,
                outcome.multiples,
                shown(outcome.sigma),
                shown(outcome.sigma_found),
                outcome.detail
            );
        }
    }
    text
}

fn shown(value: Option<f64>) -> String {
    value.map_or_else(|| "–".to_owned(), |x| format!("{x:.1e}"))
}

/// What is wrong with an outcome, in words.
pub fn faults(outcome: &Outcome) -> Vec<String> {
    let mut faults = Vec::new();
    let worst = &outcome.worst_words;
    match outcome.truth {
        Truth::Stable if outcome.worst >= Worst::PhysicalWeak => {
            faults.push(format!("stable, but {:?}: {worst}", outcome.worst));
        }
        Truth::Unstable if outcome.worst < Worst::PhysicalWeak => {
            let depth = outcome.depth.as_ref().map(depth_words).unwrap_or_default();
            faults.push(format!(
                "unstable: {depth}; but {:?}: {worst}",
                outcome.worst
            ));
        }
        Truth::Blunder if !outcome.named => {
            faults.push(format!(
                "expected {}, verdict {}, found {:?}",
                outcome.cause_expected.unwrap_or_default(),
                outcome.verdict,
                outcome.causes
            ));
        }
        _ => {}
    }
    let missed: Vec<String> = outcome
        .brackets
        .iter()
        .filter(|b| !b.covered && b.error.is_finite())
        .map(|b| {
            format!(
                "{} K: error {:+.3} beyond ±{:.3}",
                b.temperature_k, b.error, b.half_width
            )
        })
        .collect();
    if !missed.is_empty() {
        let parts = outcome.alias.map_or_else(String::new, |a| {
            format!(
                "sharing {:.3}, folding {:+.3}, mesh {:+.3}",
                a.sharing, a.folding, a.mesh
            )
        });
        let missed = missed.join("; ");
        faults.push(format!("bracket missed ({parts}): {missed}"));
    }
    let alarms = outcome.false_alarms.iter();
    faults.extend(alarms.map(|alarm| format!("false alarm: {alarm}")));
    faults
}
