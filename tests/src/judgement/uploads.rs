//! The classes of uploads: how each is made from a crystal of the pool, and what is then true of it.

use rand::{Rng, RngExt};
use tarehouse_assay::Submission;
use tarehouse_assay::submission::{Differences, Displaced, Enforced};
use tarehouse_demo_data::Contribution;
use tarehouse_demo_data::noise::Disturbance;
use tarehouse_physics::{Crystal, ForceConstants};

use crate::judgement::blunders::{Blunder, commit, telling_multiples};
use crate::judgement::exact::{Exact, diagonal, multiples_reaching};
use crate::judgement::geometry::{forward, unrelaxed};
use crate::judgement::instability::{Kind, softened};
use crate::judgement::pool::{Member, Pool};
use crate::judgement::{BenchError, generator, seed_of};

/// What is done to an upload.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Making {
    /// Independent noise, σ in eV/Å² drawn between the two on a logarithmic scale.
    White(f64, f64),
    /// The same, pair symmetry enforced after it.
    PairSymmetrised,
    /// The same, translation sums enforced after it.
    TranslationEnforced,
    /// The same, both enforced after it.
    BothEnforced,
    /// Self blocks made from the sums of their rows.
    SelfFixed,
    /// Noise on the inequivalent atoms only, carried on by the group.
    SymmetryExpanded,
    /// Every constant a multiple of a quantum.
    Rounded,
    /// Forward differences of the anharmonic forces.
    Forward,
    /// Cut off at a distance.
    Truncated,
    /// A supercell one cell wide along some axis.
    SmallSupercell,
    /// Constants of a geometry with residual forces.
    Unrelaxed,
    /// A crystal made soft.
    Soft(Kind),
    /// A crystal at a saddle of its own potential.
    Saddle,
    /// A blunder.
    Wrong(Blunder),
}

/// A class of uploads.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Class {
    /// Its name.
    pub name: &'static str,
    /// How it is made.
    pub making: Making,
}

/// All classes.
pub fn classes() -> Vec<Class> {
    let class = |name, making| Class { name, making };
    let mut all = vec![
        class("clean", Making::White(CLEAN_SIGMA, CLEAN_SIGMA)),
        class("white-low", Making::White(1e-4, 5e-4)),
        class("white-middle", Making::White(5e-4, 2e-3)),
        class("white-high", Making::White(2e-3, 5e-3)),
        class("pair-symmetrised", Making::PairSymmetrised),
        class("translation-enforced", Making::TranslationEnforced),
        class("both-enforced", Making::BothEnforced),
        class("self-fixed", Making::SelfFixed),
        class("symmetry-expanded", Making::SymmetryExpanded),
        class("rounded", Making::Rounded),
        class("forward-difference", Making::Forward),
        class("truncated", Making::Truncated),
        class("small-supercell", Making::SmallSupercell),
        class("unrelaxed", Making::Unrelaxed),
        class("soft-zone-boundary", Making::Soft(Kind::ZoneBoundary)),
        class("soft-gamma", Making::Soft(Kind::Gamma)),
        class("soft-elastic", Making::Soft(Kind::Elastic)),
        class("soft-rotor", Making::Soft(Kind::Rotor)),
        class("saddle", Making::Saddle),
    ];
    all.extend(Blunder::ALL.map(|b| class(b.name(), Making::Wrong(b))));
    all
}

/// What is true of an upload.
#[derive(Debug, Clone)]
pub enum Expected {
    /// A stable crystal of the pool, with σ in eV/Å² where one describes it.
    Stable(f64),
    /// An unstable crystal; noise of the uploads like this one, for σ_λ.
    Unstable(Box<Exact>, Disturbance),
    /// A blunder.
    Blunder(Blunder),
}

/// One upload.
#[derive(Debug, Clone)]
pub struct Case<'a> {
    /// The crystal it is of.
    pub member: &'a Member,
    /// Multiples of the cell in the supercell.
    pub multiples: [i64; 3],
    /// What is true of it.
    pub expected: Expected,
    /// `None` where it cannot even be decoded.
    pub submission: Option<Submission>,
    /// Variant and parameters, for people.
    pub detail: String,
}

/// σ of a clean upload, eV/Å².
pub const CLEAN_SIGMA: f64 = 2e-5;
/// σ of the classes that enforce something, eV/Å².
const USUAL_SIGMA: (f64, f64) = (1e-4, 3e-3);
/// Residual forces of unrelaxed geometries, rms, eV/Å.
const RESIDUAL_FORCE: (f64, f64) = (1e-3, 1e-2);
/// Atoms of the supercell at most.
const SUPERCELL_ATOMS_MAX: usize = 450;

/// Makes case number `turn` of a class.
///
/// # Errors
/// [`BenchError`]; [`BenchError::NoCase`] where the draw does not allow one.
pub fn make<'a>(
    pool: &'a Pool,
    class: &Class,
    seed: u64,
    turn: u64,
    attempt: u64,
) -> Result<Case<'a>, BenchError> {
    let mut rng = generator(class.name, &[seed, turn, attempt]);
    let noise_seed = seed_of("noise", &[seed, turn, attempt, rng.random()]);
    match class.making {
        Making::Soft(_) | Making::Saddle => unstable(pool, class, turn, noise_seed, &mut rng),
        Making::Wrong(blunder) => wrong(pool, blunder, turn, noise_seed, &mut rng),
        _ => stable(pool, class, turn, noise_seed, &mut rng),
    }
}

fn stable<'a>(
    pool: &'a Pool,
    class: &Class,
    turn: u64,
    seed: u64,
    rng: &mut impl Rng,
) -> Result<Case<'a>, BenchError> {
    let atoms_max = match class.making {
        Making::Forward => 20,
        _ => usize::MAX,
    };
    let member = pool.draw(atoms_max, rng)?;
    let making = class.making;
    let multiples = match making {
        Making::SmallSupercell => small_multiples(member, rng)?,
        Making::Forward => wide_multiples(member, 8.0, 170)?,
        _ => wide_multiples(
            member,
            [8.0, 9.5, 11.0][rng.random_range(0..3)],
            SUPERCELL_ATOMS_MAX,
        )?,
    };
    let supercell = diagonal(multiples)?;
    let (model, exact) = match making {
        Making::Unrelaxed => unrelaxed(member, logarithmic(RESIDUAL_FORCE, rng), rng)?,
        _ => (member.model.clone(), member.exact.clone()),
    };
    let folded = exact.folded(&supercell)?;
    let crystal = exact.crystal();
    let (constants, sigma, detail) = disturbed(making, member, crystal, &folded, seed, rng)?;
    let mut contribution = Contribution::new(class.name, class.name, model, constants);
    declare(&mut contribution, making, turn);
    if let Making::Forward = making {
        let displacement = rng.random_range(0.005..0.02);
        contribution.constants = forward(&member.model, &supercell, displacement)?;
        contribution.displacement_angstrom = displacement;
        contribution.differences = Differences::Forward;
    }
    Ok(Case {
        member,
        multiples,
        expected: Expected::Stable(sigma),
        submission: Some(contribution.seal()?.0),
        detail,
    })
}

fn logarithmic(range: (f64, f64), rng: &mut impl Rng) -> f64 {
    let (low, high) = (range.0.ln(), range.1.ln());
    (low + (high - low) * rng.random_range(0.0..1.0)).exp()
}

/// Constants after what the class does to them, σ, and words.
fn disturbed(
    making: Making,
    member: &Member,
    crystal: &Crystal,
    folded: &ForceConstants,
    seed: u64,
    rng: &mut impl Rng,
) -> Result<(ForceConstants, f64, String), BenchError> {
    let sigma = match making {
        Making::White(low, high) => logarithmic((low, high), rng),
        Making::Forward => 0.0,
        Making::Unrelaxed | Making::SmallSupercell => logarithmic((CLEAN_SIGMA, 5e-4), rng),
        _ => logarithmic(USUAL_SIGMA, rng),
    };
    let pair = Disturbance::PairSymmetryEnforced;
    let sums = Disturbance::TranslationSumEnforced;
    let white = Disturbance::White { sigma };
    let group = member.group;
    let (steps, sigma, words) = match making {
        Making::PairSymmetrised => (vec![white, pair], sigma, String::new()),
        Making::TranslationEnforced => (vec![white, sums], sigma, String::new()),
        Making::BothEnforced => (vec![white, pair, sums], sigma, String::new()),
        Making::SelfFixed => (vec![Disturbance::SelfFixed { sigma }], sigma, String::new()),
        Making::SymmetryExpanded => {
            let step = Disturbance::Inequivalent { sigma, group };
            (vec![step], sigma, String::new())
        }
        Making::Rounded => {
            let quantum = [1e-3, 2e-3, 5e-3, 1e-2][rng.random_range(0..4)];
            let step = Disturbance::Rounded { quantum };
            let words = format!("quantum {quantum:.0e}");
            (vec![step], quantum / 12.0_f64.sqrt(), words)
        }
        Making::Truncated => {
            let range = rng.random_range(4.0..6.5);
            let words = format!("range {range:.2} Å");
            (vec![Disturbance::Truncated { range }], 0.0, words)
        }
        Making::Forward => (Vec::new(), 0.0, String::new()),
        _ => (vec![white], sigma, String::new()),
    };
    let mut constants = folded.clone();
    for step in steps {
        constants = step.apply(crystal, &constants, seed)?;
    }
    Ok((constants, sigma, words))
}

/// What an honest contributor says about what was done.
fn declare(contribution: &mut Contribution, making: Making, turn: u64) {
    let enforced = match making {
        Making::PairSymmetrised => vec![Enforced::PairSymmetry],
        Making::TranslationEnforced => vec![Enforced::TranslationSum],
        Making::BothEnforced => vec![Enforced::PairSymmetry, Enforced::TranslationSum],
        _ => Vec::new(),
    };
    contribution.raw = enforced.is_empty();
    contribution.enforced = enforced;
    // Half of them forget to say so.
    if making == Making::SymmetryExpanded && turn.is_multiple_of(2) {
        contribution.displaced = Displaced::Inequivalent;
    }
}

/// A supercell whose heights reach `least_ang`, smaller where it would hold too many atoms.
fn wide_multiples(
    member: &Member,
    least_ang: f64,
    atoms_max: usize,
) -> Result<[i64; 3], BenchError> {
    let heights = member.model.cell_heights();
    let mut least = least_ang;
    while least > 2.0 {
        let multiples = multiples_reaching(&heights, least);
        if diagonal(multiples)?.cell_count() * member.atom_count() <= atoms_max {
            return Ok(multiples);
        }
        least -= 0.5;
    }
    Ok([1; 3])
}

fn small_multiples(member: &Member, rng: &mut impl Rng) -> Result<[i64; 3], BenchError> {
    let mut multiples = wide_multiples(member, 9.0, SUPERCELL_ATOMS_MAX)?;
    multiples[rng.random_range(0..3_usize)] = 1;
    if rng.random_range(0..3) == 0 {
        multiples = [1; 3];
    }
    Ok(multiples)
}

/// Atoms at most of a crystal whose exact spectrum is searched upload by upload.
const UNSTABLE_ATOMS_MAX: usize = 20;

fn unstable<'a>(
    pool: &'a Pool,
    class: &Class,
    turn: u64,
    seed: u64,
    rng: &mut impl Rng,
) -> Result<Case<'a>, BenchError> {
    let (member, exact) = if let Making::Soft(kind) = class.making {
        let member = pool.draw(UNSTABLE_ATOMS_MAX, rng)?;
        (member, softened(member, kind, rng)?)
    } else {
        let fitting: Vec<&Member> = pool
            .saddles
            .iter()
            .filter(|member| member.atom_count() <= 2 * UNSTABLE_ATOMS_MAX)
            .collect();
        if fitting.is_empty() {
            return Err(BenchError::NoCase("the pool holds no saddle"));
        }
        let member = fitting[rng.random_range(0..fitting.len())];
        (member, member.exact.clone())
    };
    let multiples = wide_multiples(member, [8.0, 9.5][rng.random_range(0..2)], 240)?;
    let folded = exact.folded(&diagonal(multiples)?)?;
    let sigma = if turn.is_multiple_of(2) {
        CLEAN_SIGMA
    } else {
        logarithmic((1e-4, 2e-3), rng)
    };
    let noise = Disturbance::White { sigma };
    let constants = noise.apply(exact.crystal(), &folded, seed)?;
    let contribution = Contribution::new(class.name, class.name, member.model.clone(), constants);
    Ok(Case {
        member,
        multiples,
        expected: Expected::Unstable(Box::new(exact), noise),
        submission: Some(contribution.seal()?.0),
        detail: format!("σ {sigma:.1e}"),
    })
}

fn wrong<'a>(
    pool: &'a Pool,
    blunder: Blunder,
    turn: u64,
    seed: u64,
    rng: &mut impl Rng,
) -> Result<Case<'a>, BenchError> {
    let member = pool.draw(24, rng)?;
    let multiples = wide_multiples(member, 8.0, 240)?;
    let multiples = telling_multiples(blunder, multiples, &member.model.cell_heights());
    // Some programs keep molecules whole, others bring every atom into the cell.
    let inside = rng.random_range(0..2) == 0;
    let exact = if inside {
        member.exact.wrapped()?
    } else {
        member.exact.clone()
    };
    let folded = exact.folded(&diagonal(multiples)?)?;
    let sigma = [CLEAN_SIGMA, 5e-4][rng.random_range(0..2)];
    let crystal = exact.crystal();
    let constants = Disturbance::White { sigma }.apply(crystal, &folded, seed)?;
    let altered = commit(blunder, crystal, &constants, turn, rng)?;
    let submission = match altered.constants {
        None => None,
        Some(constants) => {
            let name = blunder.name();
            let mut contribution = Contribution::new(name, name, member.model.clone(), constants);
            contribution.declared_unit = altered.unit;
            let mut submission = contribution.seal()?.0;
            submission.crystal = altered.crystal.unwrap_or_else(|| crystal.clone());
            submission.masses_declared = blunder == Blunder::Masses;
            Some(submission)
        }
    };
    Ok(Case {
        member,
        multiples,
        expected: Expected::Blunder(blunder),
        submission,
        detail: format!(
            "{}, σ {sigma:.0e}, atoms {}",
            altered.detail,
            if inside {
                "inside the cell"
            } else {
                "of molecules together"
            }
        ),
    })
}
