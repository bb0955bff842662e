//! Runs the benchmark of judgement and prints its tables.
//!
//! `judgement [--quick] [--seeds A..B | --tuning A..B --fresh A..B] [--cases N] [--class NAME]... [--policy FILE]
//! [--json OUT] [--threads N] [--pool N] [--minutes N]`
//!
//! With `--minutes` no case is begun after that time in each range; classes are gone through in turn.

use std::error::Error;
use std::io::Write;
use std::ops::RangeInclusive;
use std::sync::Mutex;
use std::sync::atomic::{AtomicUsize, Ordering};
use std::time::Instant;

use tarehouse_assay::Policy;
use tarehouse_tests::judgement::pool::Pool;
use tarehouse_tests::judgement::scoring::{Outcome, score};
use tarehouse_tests::judgement::table::tables;
use tarehouse_tests::judgement::uploads::{Class, classes, make};

/// Draws after which a case is given up.
const ATTEMPTS: u64 = 12;

struct Options {
    ranges: Vec<(String, RangeInclusive<u64>)>,
    cases: u64,
    classes: Vec<String>,
    policy: Option<String>,
    json: Option<String>,
    threads: usize,
    places: usize,
    minutes: f64,
}

impl Options {
    fn parse(mut arguments: impl Iterator<Item = String>) -> Result<Self, Box<dyn Error>> {
        let mut options = Self {
            ranges: Vec::new(),
            cases: 4,
            classes: Vec::new(),
            policy: None,
            json: None,
            threads: 2,
            places: 24,
            minutes: f64::INFINITY,
        };
        let mut quick = false;
        while let Some(name) = arguments.next() {
            if name == "--quick" {
                quick = true;
                continue;
            }
            let value = arguments
                .next()
                .ok_or_else(|| format!("{name} needs a value"))?;
            match name.as_str() {
                "--seeds" => options.ranges.push(("seeds".to_owned(), range(&value)?)),
                "--tuning" => options.ranges.push(("tuning".to_owned(), range(&value)?)),
                "--fresh" => options.ranges.push(("fresh".to_owned(), range(&value)?)),
                "--cases" => options.cases = value.parse()?,
                "--class" => options.classes.push(value),
                "--policy" => options.policy = Some(value),
                "--json" => options.json = Some(value),
                "--threads" => options.threads = value.parse()?,
                "--minutes" => options.minutes = value.parse()?,
                "--pool" => options.places = value.parse()?,
                _ => return Err(format!("{name} is not known").into()),
            }
        }
        if quick {
            (options.cases, options.places) = (1, 8);
        }
        if options.ranges.is_empty() {
            if !quick {
                options.ranges.push(("tuning".to_owned(), 1..=1));
            }
            options.ranges.push(("fresh".to_owned(), 1001..=1001));
        }
        Ok(options)
    }

    fn chosen(&self) -> Result<Vec<Class>, Box<dyn Error>> {
        let all = classes();
        if let Some(unknown) = self
            .classes
            .iter()
            .find(|name| all.iter().all(|class| class.name != *name))
        {
            let names: Vec<&str> = all.iter().map(|class| class.name).collect();
            return Err(format!("no class {unknown}; there are {}", names.join(", ")).into());
        }
        let wanted = |class: &Class| {
            self.classes.is_empty() || self.classes.iter().any(|name| name == class.name)
        };
        Ok(all.into_iter().filter(wanted).collect())
    }
}

/// `A..B`, both ends meant, or one seed.
fn range(text: &str) -> Result<RangeInclusive<u64>, Box<dyn Error>> {
    let (first, last) = text.split_once("..").unwrap_or((text, text));
    Ok(first.parse()?..=last.trim_start_matches('=').parse()?)
}

struct Job {
    class: Class,
    seed: u64,
    turn: u64,
}

fn run(
    pool: &Pool,
    jobs: &[Job],
    policy: &Policy,
    options: &Options,
) -> (Vec<Outcome>, Vec<String>) {
    let started = Instant::now();
    let in_time = || started.elapsed().as_secs_f64() < 60.0 * options.minutes;
    let next = AtomicUsize::new(0);
    let collected = Mutex::new(Vec::new());
    std::thread::scope(|scope| {
        for _ in 0..options.threads {
            scope.spawn(|| {
                while in_time() {
                    let index = next.fetch_add(1, Ordering::Relaxed);
                    let Some(job) = jobs.get(index) else { break };
                    let result = attempt(pool, job, policy);
                    if let Ok(mut all) = collected.lock() {
                        all.push((index, result));
                    }
                }
            });
        }
    });
    let mut all = collected.into_inner().unwrap_or_default();
    all.sort_by_key(|entry| entry.0);
    let (mut outcomes, mut troubles) = (Vec::new(), Vec::new());
    for (_, result) in all {
        match result {
            Ok(outcome) => outcomes.push(outcome),
            Err(trouble) => troubles.push(trouble),
        }
    }
    (outcomes, troubles)
}

/// One case; a draw that allows none is followed by the next.
fn attempt(pool: &Pool, job: &Job, policy: &Policy) -> Result<Outcome, String> {
    let mut last = String::new();
    for attempt in 0..ATTEMPTS {
        match make(pool, &job.class, job.seed, job.turn, attempt) {
            Ok(case) => {
                return score(&case, job.class.name, job.seed, job.turn, policy).map_err(|error| {
                    format!(
                        "{} seed {} case {}: {error}",
                        job.class.name, job.seed, job.turn
                    )
                });
            }
            Err(error) => last = error.to_string(),
        }
    }
    Err(format!(
        "{} seed {} case {}: not made: {last}",
        job.class.name, job.seed, job.turn
    ))
}

fn main() -> Result<(), Box<dyn Error>> {
    let mut out = std::io::stdout().lock();
    let options = Options::parse(std::env::args().skip(1))?;
    let policy = match &options.policy {
        Some(path) => Policy::parse(&std::fs::read_to_string(path)?)?,
        None => Policy::built_in()?,
    };
    let chosen = options.chosen()?;
    let mut everything = Vec::new();
    for (title, seeds) in &options.ranges {
        let started = Instant::now();
        let pool = Pool::new(*seeds.start(), options.places, options.threads)?;
        let names: Vec<String> = pool
            .stable
            .iter()
            .map(|member| format!("{} ({})", member.label, member.atom_count()))
            .collect();
        writeln!(
            out,
            "{title}: {} stable crystals and {} saddles in {:.0} s: {}",
            pool.stable.len(),
            pool.saddles.len(),
            started.elapsed().as_secs_f64(),
            names.join(", ")
        )?;
        out.flush()?;
        let jobs: Vec<Job> = seeds
            .clone()
            .flat_map(|seed| (0..options.cases).map(move |turn| (seed, turn)))
            .flat_map(|(seed, turn)| chosen.iter().map(move |class| (seed, turn, *class)))
            .map(|(seed, turn, class)| Job { class, seed, turn })
            .collect();
        let (outcomes, troubles) = run(&pool, &jobs, &policy, &options);
        for trouble in &troubles {
            writeln!(out, "{trouble}")?;
        }
        let words = format!("{title}, seeds {}..{}", seeds.start(), seeds.end());
        writeln!(out, "{}", tables(&words, &outcomes))?;
        writeln!(out, "{:.0} s\n", started.elapsed().as_secs_f64())?;
        out.flush()?;
        everything.push(serde_json::json!({ "range": words, "outcomes": outcomes }));
    }
    if let Some(path) = &options.json {
        std::fs::write(path, serde_json::to_string_pretty(&everything)?)?;
    }
    Ok(())
}
