//! Blunders: sound constants brought into a package wrongly.

use nalgebra::{Matrix3, Vector3};
use rand::seq::SliceRandom;
use rand::{Rng, RngExt};
use tarehouse_assay::report::LikelyCause;
use tarehouse_physics::force_constants::ForceConstantUnit;
use tarehouse_physics::{Crystal, ForceConstants, Supercell};

use crate::judgement::BenchError;
use crate::judgement::exact::constants_of;

/// The kinds.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Blunder {
    /// Another unit declared than used.
    Unit,
    /// Array with the response atom first, declared as displaced first.
    IndexOrder,
    /// Translations with the opposite sign.
    NegatedTranslations,
    /// Cartesian axes exchanged cyclically.
    Axes,
    /// Atoms of the structure in another order.
    Atoms,
    /// Masses that belong to other atoms, or in another unit.
    Masses,
    /// Forces taken for constants: the sign is missing.
    Sign,
    /// A block lost.
    Zeroed,
    /// A block put in two places.
    Duplicated,
    /// Axes of the supercell matrix exchanged.
    Supercell,
}

impl Blunder {
    /// All of them.
    pub const ALL: [Self; 10] = [
        Self::Unit,
        Self::IndexOrder,
        Self::NegatedTranslations,
        Self::Axes,
        Self::Atoms,
        Self::Masses,
        Self::Sign,
        Self::Zeroed,
        Self::Duplicated,
        Self::Supercell,
    ];

    /// Name of its class.
    pub fn name(self) -> &'static str {
        match self {
            Self::Unit => "wrong-unit",
            Self::IndexOrder => "swapped-index-order",
            Self::NegatedTranslations => "negated-translations",
            Self::Axes => "permuted-axes",
            Self::Atoms => "permuted-atoms",
            Self::Masses => "wrong-masses",
            Self::Sign => "sign-error",
            Self::Zeroed => "zeroed-block",
            Self::Duplicated => "duplicated-block",
            Self::Supercell => "wrong-supercell",
        }
    }

    /// What a report should call it.
    pub fn cause(self) -> LikelyCause {
        match self {
            Self::Unit => LikelyCause::WrongUnit,
            Self::IndexOrder | Self::NegatedTranslations => LikelyCause::SwappedIndexOrder,
            Self::Axes => LikelyCause::PermutedAxes,
            Self::Atoms => LikelyCause::PermutedAtoms,
            Self::Masses => LikelyCause::WrongMasses,
            Self::Sign => LikelyCause::SignError,
            Self::Zeroed => LikelyCause::ZeroedBlock,
            Self::Duplicated => LikelyCause::DuplicatedBlock,
            Self::Supercell => LikelyCause::WrongSupercell,
        }
    }
}

/// Whether a cause names a blunder: named for a sound upload, it is a false alarm.
pub fn is_blunder(cause: LikelyCause) -> bool {
    cause == LikelyCause::WrongStructure || Blunder::ALL.iter().any(|b| b.cause() == cause)
}

/// What a blunder left of a sound upload.
#[derive(Debug, Clone)]
pub struct Altered {
    /// The constants, in the unit declared; `None` where the supercell refuses its list of translations.
    pub constants: Option<ForceConstants>,
    /// Unit declared for them.
    pub unit: ForceConstantUnit,
    /// The crystal, where it was touched.
    pub crystal: Option<Crystal>,
    /// Which variant, for people.
    pub detail: String,
}

/// Commits a blunder. `turn` counts the cases of the class, so that variants come up equally often.
///
/// # Errors
/// [`BenchError`].
pub fn commit(
    blunder: Blunder,
    crystal: &Crystal,
    constants: &ForceConstants,
    turn: u64,
    rng: &mut impl Rng,
) -> Result<Altered, BenchError> {
    let plain = |constants: ForceConstants, detail: &str| Altered {
        constants: Some(constants),
        unit: ForceConstantUnit::EvPerAngstrom2,
        crystal: None,
        detail: detail.to_owned(),
    };
    let n = constants.atom_count();
    let supercell = constants.supercell();
    let by_index = |pick: &dyn Fn(usize, usize, usize) -> Matrix3<f64>| {
        let blocks = (0..constants.blocks().len())
            .map(|k| pick(k / (n * n), k / n % n, k % n))
            .collect();
        constants_of(supercell, n, blocks)
    };
    Ok(match blunder {
        Blunder::Unit => wrong_unit(constants, turn),
        Blunder::IndexOrder => plain(
            by_index(&|l, i, j| constants.block(l, j, i).transpose())?,
            "response atom first",
        ),
        Blunder::NegatedTranslations => plain(
            by_index(&|l, i, j| *constants.block(supercell.negative(l), i, j))?,
            "l for −l",
        ),
        Blunder::Axes => {
            let step = if turn.is_multiple_of(2) { 1 } else { 2 };
            let moved = |block: &Matrix3<f64>| {
                Matrix3::from_fn(|a, b| block[((a + step) % 3, (b + step) % 3)])
            };
            plain(
                by_index(&|l, i, j| moved(constants.block(l, i, j)))?,
                &format!("cyclic by {step}"),
            )
        }
        Blunder::Atoms => permuted_atoms(crystal, constants, turn, rng)?,
        Blunder::Masses => wrong_masses(crystal, constants, turn)?,
        Blunder::Sign => plain(by_index(&|l, i, j| -constants.block(l, i, j))?, "negated"),
        Blunder::Zeroed => zeroed(constants, turn, rng)?,
        Blunder::Duplicated => duplicated(constants, rng)?,
        Blunder::Supercell => wrong_supercell(constants, turn)?,
    })
}

/// The twelve ordered pairs of unlike units in turn.
fn wrong_unit(constants: &ForceConstants, turn: u64) -> Altered {
    let pairs: Vec<(ForceConstantUnit, ForceConstantUnit)> = ForceConstantUnit::ALL
        .iter()
        .flat_map(|used| ForceConstantUnit::ALL.iter().map(|said| (*used, *said)))
        .filter(|(used, said)| used != said)
        .collect();
    let (used, said) = pairs[usize::try_from(turn).unwrap_or_default() % pairs.len()];
    let scale = 1.0 / used.in_ev_per_ang2();
    Altered {
        constants: Some(constants.map_blocks(|_, block| block * scale)),
        unit: said,
        crystal: None,
        detail: format!("{} called {}", used.name(), said.name()),
    }
}

fn permuted_atoms(
    crystal: &Crystal,
    constants: &ForceConstants,
    turn: u64,
    rng: &mut impl Rng,
) -> Result<Altered, BenchError> {
    let n = crystal.atom_count();
    let mut order: Vec<usize> = (0..n).collect();
    let by_element = turn.is_multiple_of(2);
    if by_element {
        order.sort_by_key(|k| crystal.elements()[*k].atomic_number());
    } else {
        order.shuffle(rng);
    }
    if order.iter().enumerate().all(|(k, o)| k == *o) {
        order.reverse();
    }
    // The structure is written in the new order, the constants stay in the old one.
    let moved = Crystal::new(
        *crystal.cell(),
        order.iter().map(|k| crystal.elements()[*k]).collect(),
        order.iter().map(|k| crystal.positions()[*k]).collect(),
        None,
    )
    .map_err(|errors| BenchError::Malformed(format!("{errors:?}")))?;
    Ok(Altered {
        constants: Some(constants.clone()),
        unit: ForceConstantUnit::EvPerAngstrom2,
        crystal: Some(moved),
        detail: if by_element {
            "sorted by element"
        } else {
            "shuffled"
        }
        .to_owned(),
    })
}

/// Electron masses in a u.
const ELECTRON_MASSES_PER_U: f64 = 1_822.888_486;

fn wrong_masses(
    crystal: &Crystal,
    constants: &ForceConstants,
    turn: u64,
) -> Result<Altered, BenchError> {
    let mut masses = crystal.masses_u().to_vec();
    let detail = match turn % 3 {
        0 => {
            masses.rotate_left(1);
            "moved on by one atom"
        }
        1 => {
            masses = masses.iter().map(|m| m * ELECTRON_MASSES_PER_U).collect();
            "electron masses"
        }
        _ => {
            masses.sort_by(f64::total_cmp);
            "sorted"
        }
    };
    let crystal = Crystal::new(
        *crystal.cell(),
        crystal.elements().to_vec(),
        crystal.positions().to_vec(),
        Some(masses),
    )
    .map_err(|errors| BenchError::Malformed(format!("{errors:?}")))?;
    Ok(Altered {
        constants: Some(constants.clone()),
        unit: ForceConstantUnit::EvPerAngstrom2,
        crystal: Some(crystal),
        detail: detail.to_owned(),
    })
}

/// Share of the largest self constant above which a block cannot be lost unseen.
const WEIGHTY: f64 = 0.03;

/// Places of weighty blocks, self blocks left out.
fn weighty(constants: &ForceConstants) -> Vec<usize> {
    let (n, home) = (constants.atom_count(), constants.home_cell());
    let least = WEIGHTY * constants.largest_self_constant();
    constants
        .blocks()
        .iter()
        .enumerate()
        .filter(|(k, block)| {
            let own = k / (n * n) == home && k / n % n == k % n;
            !own && block.amax() > least
        })
        .map(|(k, _)| k)
        .collect()
}

fn zeroed(
    constants: &ForceConstants,
    turn: u64,
    rng: &mut impl Rng,
) -> Result<Altered, BenchError> {
    let n = constants.atom_count();
    let whole_row = turn % 4 == 3;
    let places = weighty(constants);
    if places.is_empty() {
        return Err(BenchError::NoCase("no weighty block"));
    }
    let place = places[rng.random_range(0..places.len())];
    let lost = |k: usize| {
        if whole_row {
            k / n % n == place / n % n
        } else {
            k == place
        }
    };
    let changed = constants.map_blocks(|k, block| if lost(k) { Matrix3::zeros() } else { *block });
    Ok(Altered {
        constants: Some(changed),
        unit: ForceConstantUnit::EvPerAngstrom2,
        crystal: None,
        detail: if whole_row {
            "a whole displaced atom"
        } else {
            "one block"
        }
        .to_owned(),
    })
}

fn duplicated(constants: &ForceConstants, rng: &mut impl Rng) -> Result<Altered, BenchError> {
    let places = weighty(constants);
    let least = WEIGHTY * constants.largest_self_constant();
    for _ in 0..200 {
        if places.is_empty() {
            break;
        }
        let from = places[rng.random_range(0..places.len())];
        let to = places[rng.random_range(0..places.len())];
        let source = constants.blocks()[from];
        if (source - constants.blocks()[to]).amax() < least {
            continue;
        }
        let changed = constants.map_blocks(|k, block| if k == to { source } else { *block });
        return Ok(Altered {
            constants: Some(changed),
            unit: ForceConstantUnit::EvPerAngstrom2,
            crystal: None,
            detail: "one block copied onto another".to_owned(),
        });
    }
    Err(BenchError::NoCase("no two weighty blocks that differ"))
}

/// The supercell matrix with two of its unlike axes exchanged: the translations exchanged with it, or made anew in the
/// usual order, or left as they were, which leaves no complete list.
fn wrong_supercell(constants: &ForceConstants, turn: u64) -> Result<Altered, BenchError> {
    let supercell = constants.supercell();
    let matrix = supercell.matrix();
    let unlike = [(0, 1), (1, 2), (0, 2)]
        .into_iter()
        .find(|(a, b)| matrix[*a][*a] != matrix[*b][*b])
        .ok_or(BenchError::NoCase("all axes of the supercell are alike"))?;
    let mut axes = [0, 1, 2];
    axes.swap(unlike.0, unlike.1);
    let exchanged = axes.map(|r| axes.map(|c| matrix[r][c]));
    let (wrong, detail) = match turn % 3 {
        0 => {
            let moved = supercell.translations().iter();
            let moved = moved.map(|t| axes.map(|c| t[c])).collect();
            (Supercell::new(exchanged, moved), "matrix and translations")
        }
        1 => (
            Supercell::with_default_translations(exchanged),
            "matrix, translations anew",
        ),
        _ => (
            Supercell::new(exchanged, supercell.translations().to_vec()),
            "matrix only",
        ),
    };
    let blocks = constants.blocks().to_vec();
    let n = constants.atom_count();
    let constants = match wrong {
        Ok(wrong) => Some(constants_of(&wrong, n, blocks)?),
        Err(_) => None,
    };
    Ok(Altered {
        constants,
        unit: ForceConstantUnit::EvPerAngstrom2,
        crystal: None,
        detail: detail.to_owned(),
    })
}

/// Multiples of the cell for a blunder that only some supercells show: three along the shortest height for an exchanged
/// index order, unlike ones for exchanged axes.
pub fn telling_multiples(
    blunder: Blunder,
    mut multiples: [i64; 3],
    heights: &Vector3<f64>,
) -> [i64; 3] {
    let shortest = heights.imin();
    match blunder {
        Blunder::IndexOrder | Blunder::NegatedTranslations => {
            multiples[shortest] = multiples[shortest].max(3);
        }
        Blunder::Supercell if multiples[0] == multiples[1] && multiples[1] == multiples[2] => {
            multiples[shortest] += 1;
        }
        _ => {}
    }
    multiples
}
