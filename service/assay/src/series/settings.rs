//! Which setting differs among the members of a series, and the order it puts them in.

use nalgebra::{Matrix3, Vector3};
use tarehouse_physics::{Crystal, Supercell};

use crate::submission::{
    Declaration, Differences, Displaced, Enforced, LongRange, MethodKind, Scheme, Settings,
};

/// Relative difference up to which two numbers are one.
const SAME_NUMBER: f64 = 1e-9;

/// Distance up to which two geometries are one, Å.
const SAME_GEOMETRY_ANG: f64 = 1e-4;

/// Name of cell and positions as a setting.
pub(super) const GEOMETRY: &str = "geometry";

/// What is written where a setting was not declared.
const UNDECLARED: &str = "undeclared";

/// How the constants of one member were made.
#[derive(Debug, Clone, PartialEq)]
pub struct Setup {
    settings: Settings,
    declaration: Declaration,
    supercell: [[i64; 3]; 3],
    cell_count: usize,
    /// Lengths of the supercell vectors, Å, ascending.
    lengths_ang: [f64; 3],
    crystal: Crystal,
    has_permittivity: bool,
}

impl Setup {
    /// The setup of a package.
    pub fn new(
        settings: &Settings,
        declaration: &Declaration,
        supercell: &Supercell,
        crystal: &Crystal,
        has_permittivity: bool,
    ) -> Self {
        let vectors = supercell.vectors(crystal.cell());
        let mut lengths_ang = [0, 1, 2].map(|row| vectors.row(row).norm());
        lengths_ang.sort_by(f64::total_cmp);
        Self {
            settings: settings.clone(),
            declaration: declaration.clone(),
            supercell: *supercell.matrix(),
            cell_count: supercell.cell_count(),
            lengths_ang,
            crystal: crystal.clone(),
            has_permittivity,
        }
    }
}

/// A setting that differs.
#[derive(Debug, Clone, PartialEq)]
pub struct Differing {
    /// Its name: the key of the package where there is one.
    pub setting: &'static str,
    /// Its value by member, in words.
    pub values: Vec<String>,
    numbers: Vec<Option<f64>>,
    sense: Sense,
}

/// Which way a setting becomes tighter.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Sense {
    /// Larger is tighter.
    Rising,
    /// Smaller is tighter.
    Falling,
    /// Neither.
    Unordered,
    /// Smaller is tighter, but it is what came out, not what was chosen: it counts only where nothing else differs.
    Outcome,
}

/// One setting of one member.
struct Reading {
    setting: &'static str,
    text: String,
    number: Option<f64>,
    sense: Sense,
}

/// The settings that differ, in the fixed order of the readings, values in the order of `setups`.
pub(super) fn differing(setups: &[&Setup]) -> Vec<Differing> {
    let mut columns: Vec<Differing> = geometry(setups).into_iter().collect();
    let readings: Vec<Vec<Reading>> = setups.iter().map(|setup| readings(setup)).collect();
    let count = readings.first().map_or(0, Vec::len);
    for k in 0..count {
        let column: Vec<&Reading> = readings.iter().filter_map(|all| all.get(k)).collect();
        let Some(first) = column.first() else {
            continue;
        };
        if column.iter().any(|reading| !same(first, reading)) {
            columns.push(Differing {
                setting: first.setting,
                values: column.iter().map(|reading| reading.text.clone()).collect(),
                numbers: column.iter().map(|reading| reading.number).collect(),
                sense: first.sense,
            });
        }
    }
    if columns
        .iter()
        .any(|setting| setting.sense != Sense::Outcome)
    {
        columns.retain(|setting| setting.sense != Sense::Outcome);
    }
    columns
}

fn same(a: &Reading, b: &Reading) -> bool {
    match (a.number, b.number) {
        (Some(x), Some(y)) if a.sense != Sense::Unordered && a.setting != "supercell" => {
            (x - y).abs() <= SAME_NUMBER * x.abs().max(y.abs())
        }
        _ => a.text == b.text,
    }
}

/// Places of the members, loosest first, and why no conclusion can be drawn from them.
pub(super) fn order(setups: &[&Setup], differing: &[Differing]) -> (Vec<usize>, Option<String>) {
    let given: Vec<usize> = (0..setups.len()).collect();
    let outcomes = differing
        .iter()
        .all(|setting| setting.sense == Sense::Outcome);
    let setting = match differing {
        [] => {
            return (
                given,
                Some("No declared setting differs: this is no series.".to_owned()),
            );
        }
        [only] => only,
        [first, ..] if outcomes => first,
        several => {
            let names: Vec<&str> = several.iter().map(|setting| setting.setting).collect();
            let why = format!(
                "More than one setting differs ({}): a change cannot be laid to one of them, and no conclusion is drawn.",
                names.join(", ")
            );
            return (given, Some(why));
        }
    };
    let name = setting.setting;
    if setting.sense == Sense::Unordered {
        let why = format!("The members differ in {name}, which has no loose and no tight end.");
        return (given, Some(why));
    }
    let numbers: Option<Vec<f64>> = setting.numbers.iter().copied().collect();
    let Some(numbers) = numbers else {
        return (
            given,
            Some(format!("{name} is undeclared in some of the members.")),
        );
    };
    let tightness = |k: &usize| match setting.sense {
        Sense::Rising | Sense::Unordered => numbers[*k],
        Sense::Falling | Sense::Outcome => -numbers[*k],
    };
    let mut order = given;
    order.sort_by(|a, b| tightness(a).total_cmp(&tightness(b)));
    let obstacle = obstacle(setups, setting, &numbers, &order);
    (order, obstacle)
}

/// Steps that do not go from loose to tight.
fn obstacle(
    setups: &[&Setup],
    setting: &Differing,
    numbers: &[f64],
    order: &[usize],
) -> Option<String> {
    let mut steps = order.windows(2).filter_map(|pair| match pair {
        [before, after] => Some((*before, *after)),
        _ => None,
    });
    let is_supercell = setting.setting == "supercell";
    steps.find_map(|(before, after)| {
        let difference = (numbers[before] - numbers[after]).abs();
        if difference <= SAME_NUMBER * numbers[before].abs().max(numbers[after].abs()) {
            return Some(format!("Two members have the same {}: {}.", setting.setting, setting.values[before]));
        }
        let lengths = setups[before].lengths_ang.iter().zip(&setups[after].lengths_ang);
        let shrinks = is_supercell && lengths.into_iter().any(|(a, b)| *b < a - SAME_GEOMETRY_ANG);
        shrinks.then(|| {
            format!(
                "The supercell {} has more cells than {} but is shorter along an axis: they are no series.",
                setting.values[after], setting.values[before]
            )
        })
    })
}

/// Cell and positions, told apart as geometry 1, 2, …; `None` where all are the same.
fn geometry(setups: &[&Setup]) -> Option<Differing> {
    let mut known: Vec<&Crystal> = Vec::new();
    let classes: Vec<usize> = setups
        .iter()
        .map(|setup| {
            let found = known
                .iter()
                .position(|crystal| is_same_geometry(crystal, &setup.crystal));
            found.unwrap_or_else(|| {
                known.push(&setup.crystal);
                known.len() - 1
            })
        })
        .collect();
    (known.len() > 1).then(|| Differing {
        setting: GEOMETRY,
        values: classes
            .iter()
            .zip(setups)
            .map(|(class, setup)| format!("{} ({:.2} Å³)", class + 1, setup.crystal.volume_ang3()))
            .collect(),
        numbers: vec![None; setups.len()],
        sense: Sense::Unordered,
    })
}

fn is_same_geometry(a: &Crystal, b: &Crystal) -> bool {
    let close = |x: &Matrix3<f64>, y: &Matrix3<f64>| (x - y).amax() < SAME_GEOMETRY_ANG;
    a.elements() == b.elements()
        && close(a.cell(), b.cell())
        && a.positions().iter().zip(b.positions()).all(|(x, y)| {
            let apart = (x - y).map(|t| t - t.round());
            a.cartesian(&apart).norm() < SAME_GEOMETRY_ANG
        })
        && a.masses_u()
            .iter()
            .zip(b.masses_u())
            .all(|(x, y)| (x - y).abs() <= SAME_NUMBER * x.abs())
}

fn number(setting: &'static str, value: Option<f64>, sense: Sense) -> Reading {
    let text = value.map_or_else(|| UNDECLARED.to_owned(), shown);
    Reading {
        setting,
        text,
        number: value,
        sense,
    }
}

fn shown(x: f64) -> String {
    if x == 0.0 || (1e-3..1e6).contains(&x.abs()) {
        x.to_string()
    } else {
        format!("{x:e}")
    }
}

fn word(setting: &'static str, value: Option<&str>) -> Reading {
    Reading {
        setting,
        text: value.unwrap_or(UNDECLARED).to_owned(),
        number: None,
        sense: Sense::Unordered,
    }
}

fn readings(setup: &Setup) -> Vec<Reading> {
    let s = &setup.settings;
    let mut all = vec![
        Reading {
            setting: "supercell",
            text: show_matrix(&setup.supercell),
            number: Some(setup.cell_count as f64),
            sense: Sense::Rising,
        },
        number(
            "displacement_angstrom",
            s.displacement_angstrom,
            Sense::Falling,
        ),
        number(
            "scf_tolerance_ev_per_atom",
            s.scf_tolerance_ev_per_atom,
            Sense::Falling,
        ),
        number(
            "density_to_orbital_cutoff",
            s.density_to_orbital_cutoff,
            Sense::Rising,
        ),
        number("orbital_cutoff_ev", s.orbital_cutoff_ev, Sense::Rising),
        number(
            "k_spacing_per_angstrom",
            s.k_spacing_per_angstrom,
            Sense::Falling,
        ),
        number("float_bits", s.float_bits.map(f64::from), Sense::Rising),
    ];
    all.extend(words(setup));
    let stress = s.stress_gpa.map(|stress| stress.norm());
    all.extend([
        number(
            "force_residual_rms_ev_per_angstrom",
            s.force_residual_rms_ev_per_angstrom,
            Sense::Outcome,
        ),
        number(
            "force_residual_max_ev_per_angstrom",
            s.force_residual_max_ev_per_angstrom,
            Sense::Outcome,
        ),
        number("stress_gpa", stress, Sense::Outcome),
    ]);
    all
}

fn words(setup: &Setup) -> Vec<Reading> {
    let (s, declared) = (&setup.settings, &setup.declaration);
    let level = s.level.key();
    let mut enforced: Vec<&str> = declared
        .enforced
        .iter()
        .map(|e| enforced_name(*e))
        .collect();
    enforced.sort_unstable();
    let enforced = if enforced.is_empty() {
        "nothing".to_owned()
    } else {
        enforced.join(", ")
    };
    vec![
        word("kind", s.kind.map(kind_name)),
        word("program", s.program.as_deref()),
        word("level", Some(&level)),
        word("model_digest", s.model_digest.as_deref()),
        word("scheme", s.scheme.map(scheme_name)),
        word("differences", s.differences.map(differences_name)),
        word("displaced", Some(displaced_name(declared.displaced))),
        word("enforced", Some(&enforced)),
        word("long_range", Some(long_range_name(declared.long_range))),
        word(
            "dielectric",
            Some(if setup.has_permittivity {
                "given"
            } else {
                "not given"
            }),
        ),
    ]
}

fn kind_name(kind: MethodKind) -> &'static str {
    match kind {
        MethodKind::Dft => "dft",
        MethodKind::Wavefunction => "wavefunction",
        MethodKind::TightBinding => "tight-binding",
        MethodKind::MlPotential => "ml-potential",
        MethodKind::ForceField => "force-field",
    }
}

fn scheme_name(scheme: Scheme) -> &'static str {
    match scheme {
        Scheme::FiniteDisplacement => "finite-displacement",
        Scheme::LinearResponse => "linear-response",
    }
}

fn differences_name(differences: Differences) -> &'static str {
    match differences {
        Differences::Central => "central",
        Differences::Forward => "forward",
    }
}

fn displaced_name(displaced: Displaced) -> &'static str {
    match displaced {
        Displaced::All => "all",
        Displaced::Inequivalent => "inequivalent",
    }
}

fn enforced_name(enforced: Enforced) -> &'static str {
    match enforced {
        Enforced::PairSymmetry => "pair-symmetry",
        Enforced::TranslationSum => "translation-sum",
        Enforced::RotationSum => "rotation-sum",
        Enforced::SpaceGroup => "space-group",
    }
}

fn long_range_name(long_range: LongRange) -> &'static str {
    match long_range {
        LongRange::Included => "included",
        LongRange::Removed => "removed",
    }
}

/// Diagonal supercells as 2×2×1, others by their rows.
fn show_matrix(matrix: &[[i64; 3]; 3]) -> String {
    let full = Matrix3::from_fn(|r, c| matrix[r][c]);
    let diagonal = Vector3::new(full[(0, 0)], full[(1, 1)], full[(2, 2)]);
    if full == Matrix3::from_diagonal(&diagonal) {
        return format!("{}×{}×{}", diagonal.x, diagonal.y, diagonal.z);
    }
    let rows = matrix.map(|row| row.map(|x| x.to_string()).join(" "));
    format!("[{}]", rows.join("; "))
}
