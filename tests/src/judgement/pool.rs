//! A pool of relaxed crystals, the same for the same seed: stable ones with their truth, and saddles found on the way.

use nalgebra::Vector3;
use std::sync::Mutex;
use std::sync::atomic::{AtomicUsize, Ordering};

use rand::{Rng, RngExt};
use tarehouse_demo_data::packing::random_packing;
use tarehouse_demo_data::relax::Limits;
use tarehouse_demo_data::{MolecularCrystal, RealSpaceConstants, SpaceGroup, relax};

use crate::judgement::compounds::Shape;
use crate::judgement::exact::{Exact, StableTruth, mesh_of, stable_truth};
use crate::judgement::{BenchError, generator};

/// Residual forces far below any noise of the benchmark.
const LIMITS: Limits = Limits {
    force_ev_per_ang: 1e-9,
    stress_ev_per_ang3: 1e-9,
    iterations: 160,
};
/// Packings tried for one place of the pool.
const ATTEMPTS: u64 = 14;
/// Spacing of the mesh on which a saddle shows itself, Å⁻¹.
const COARSE_SPACING_PER_ANG: f64 = 0.45;
/// Saddles kept are at least this unstable, eV/Å²/u: about 10i cm⁻¹.
const SADDLE_BELOW: f64 = -4e-4;

/// Compound and group of each place, small and large in turn, so that a short pool is mixed as well.
const PLACES: [(Shape, SpaceGroup); 24] = [
    (Shape::Drosmelide, SpaceGroup::P1),
    (Shape::Vondelane, SpaceGroup::PBar1),
    (Shape::Pelquonol, SpaceGroup::P21c),
    (Shape::Tremsolin, SpaceGroup::P21),
    (Shape::Brassovine, SpaceGroup::Pc),
    (Shape::Drosmelide, SpaceGroup::P212121),
    (Shape::Vondelane, SpaceGroup::P21c),
    (Shape::Orbulane, SpaceGroup::PBar1),
    (Shape::Pelquonol, SpaceGroup::PBar1),
    (Shape::Drosmelide, SpaceGroup::P21n),
    (Shape::Tremsolin, SpaceGroup::P1),
    (Shape::Brassovine, SpaceGroup::P21c),
    (Shape::Vondelane, SpaceGroup::P21),
    (Shape::Pelquonol, SpaceGroup::Pna21),
    (Shape::Drosmelide, SpaceGroup::PBar1),
    (Shape::Orbulane, SpaceGroup::P1),
    (Shape::Brassovine, SpaceGroup::P212121),
    (Shape::Tremsolin, SpaceGroup::PBar1),
    (Shape::Pelquonol, SpaceGroup::P21),
    (Shape::Drosmelide, SpaceGroup::Pca21),
    (Shape::Quevandole, SpaceGroup::PBar1),
    (Shape::Tremsolin, SpaceGroup::P21c),
    (Shape::Brassovine, SpaceGroup::PBar1),
    (Shape::Quevandole, SpaceGroup::P21c),
];

/// A crystal of the pool.
#[derive(Debug, Clone)]
pub struct Member {
    /// Compound and group, for people.
    pub label: String,
    /// The relaxed crystal.
    pub model: MolecularCrystal,
    /// The group it was relaxed in.
    pub group: SpaceGroup,
    /// Its constants.
    pub exact: Exact,
    /// Its truth; `None` for a saddle.
    pub truth: Option<StableTruth>,
}

impl Member {
    /// Atoms in the cell.
    pub fn atom_count(&self) -> usize {
        self.model.atom_count()
    }
}

/// The pool.
#[derive(Debug, Clone, Default)]
pub struct Pool {
    /// Stable crystals.
    pub stable: Vec<Member>,
    /// Crystals relaxed within their group that are unstable against breaking it.
    pub saddles: Vec<Member>,
}

impl Pool {
    /// The pool of a seed: at most one crystal for each of the first `places` places.
    ///
    /// # Errors
    /// [`BenchError`].
    pub fn new(seed: u64, places: usize, threads: usize) -> Result<Self, BenchError> {
        let next = AtomicUsize::new(0);
        let found = Mutex::new(Vec::new());
        let count = places.min(PLACES.len());
        std::thread::scope(|scope| {
            for _ in 0..threads {
                scope.spawn(|| {
                    loop {
                        // The large ones last in the list start first.
                        let taken = next.fetch_add(1, Ordering::Relaxed);
                        if taken >= count {
                            break;
                        }
                        let place = count - 1 - taken;
                        let result = fill(seed, place);
                        if let Ok(mut all) = found.lock() {
                            all.push((place, result));
                        }
                    }
                });
            }
        });
        let mut all = found.into_inner().unwrap_or_default();
        all.sort_by_key(|entry| entry.0);
        let mut pool = Self::default();
        for (_, result) in all {
            let (stable, saddles) = result?;
            pool.stable.extend(stable);
            pool.saddles.extend(saddles);
        }
        if pool.stable.is_empty() {
            return Err(BenchError::NoCase("no stable crystal was found"));
        }
        Ok(pool)
    }

    /// A stable crystal of at most `atoms_max` atoms; large ones are drawn seldom, for their cost.
    ///
    /// # Errors
    /// [`BenchError::NoCase`].
    pub fn draw(&self, atoms_max: usize, rng: &mut impl Rng) -> Result<&Member, BenchError> {
        let fitting: Vec<&Member> = self
            .stable
            .iter()
            .filter(|member| member.atom_count() <= atoms_max)
            .collect();
        let weight = |member: &Member| {
            let size = member.atom_count() as f64 / 16.0;
            1.0 / (1.0 + size.powi(4))
        };
        let total: f64 = fitting.iter().map(|m| weight(m)).sum();
        let mut left = rng.random_range(0.0..1.0) * total;
        for member in &fitting {
            left -= weight(member);
            if left <= 0.0 {
                return Ok(member);
            }
        }
        fitting
            .last()
            .copied()
            .ok_or(BenchError::NoCase("no crystal is small enough"))
    }
}

/// Searches for the crystal of one place.
fn fill(seed: u64, place: usize) -> Result<(Option<Member>, Vec<Member>), BenchError> {
    let (shape, group) = PLACES[place];
    let compound = shape.compound()?;
    let mut saddles = Vec::new();
    for attempt in 0..ATTEMPTS {
        let mut rng = generator("packing", &[seed, place as u64, attempt]);
        let Some(start) = random_packing(&compound, group, &mut rng)? else {
            continue;
        };
        let Ok(model) = relax(&start, group, LIMITS) else {
            continue;
        };
        if !is_compact(&model) {
            continue;
        }
        let exact = Exact::of(&RealSpaceConstants::of(&model)?);
        let mut member = Member {
            label: format!("{} {}", compound.name(), group.symbol()),
            group,
            truth: None,
            exact,
            model,
        };
        let mesh = mesh_of(member.exact.crystal(), COARSE_SPACING_PER_ANG)?;
        let (lowest, _) = member.exact.lowest(&mesh)?;
        if lowest < 0.0 {
            if lowest < SADDLE_BELOW && saddles.len() < 2 {
                saddles.push(member);
            }
            continue;
        }
        let heights = member.model.cell_heights();
        let molecules = member.model.molecule_count();
        member.truth = stable_truth(&member.exact, &heights, molecules)?;
        if member.truth.is_some() {
            return Ok((Some(member), saddles));
        }
    }
    Ok((None, saddles))
}

/// Molecules near enough to hold one another, cell not so flat that every supercell is large.
fn is_compact(model: &MolecularCrystal) -> bool {
    let heights: Vector3<f64> = model.cell_heights();
    let volume_per_atom = model.cell().determinant().abs() / model.atom_count() as f64;
    heights.min() > 2.8 && heights.max() < 25.0 && volume_per_atom < 40.0
}
